//! Open loop: what a law would have commanded at given poses. The poses do not respond to these commands, so the further a
//! command is from the one that was in force, the less the next pose says about the law.

mod logged;

pub use logged::run;

use crate::choice::{LawChoice, problem_lines};
use crate::output::CsvFile;
use anyhow::anyhow;
use std::io;
use std::path::Path;
use std::sync::Arc;
use trackhold_core::geometry::{BodyVelocity, Pose};
use trackhold_core::law::{Feedback, Input, OnPlan};
use trackhold_core::plan::Reference;
use trackhold_core::settings::{Checked, Settings};
use trackhold_core::time::TimeNs;
use trackhold_core::vehicle::{Vehicle, Wheels, limit};

/// Said with every result.
pub const CAUTION: &str = "open loop: the poses do not respond to these commands";

/// Columns of an open loop's table up to the wheels.
const COLUMNS: [&str; 18] = [
    "t_s",
    "plan_time_s",
    "x_m",
    "y_m",
    "heading_rad",
    "ref_x_m",
    "ref_y_m",
    "ref_heading_rad",
    "ref_speed_m_s",
    "ref_turn_rate_rad_s",
    "along_error_m",
    "cross_error_m",
    "heading_error_rad",
    "wanted_speed_m_s",
    "wanted_turn_rate_rad_s",
    "speed_m_s",
    "turn_rate_rad_s",
    "limited",
];

/// A law with its machine, asked at one pose after the other.
#[derive(Debug)]
pub struct Asked {
    feedback: Feedback,
    vehicle: Arc<dyn Vehicle>,
    period_s: f64,
    wheels: Wheels,
}

/// What a law is asked.
#[derive(Clone, Copy, Debug)]
pub struct Question<'a> {
    /// The moment, on any clock.
    pub at: TimeNs,
    /// The reference's motion with the plan's time at rate 1.
    pub literal: BodyVelocity,
    /// What is wanted.
    pub reference: Reference,
    /// What lies ahead of it.
    pub ahead: OnPlan<'a>,
    /// Where the chassis point is.
    pub pose: Pose,
    /// Since the last question, s: what the acceleration limits allow.
    pub step_s: f64,
    /// How long the answer holds, s: what a law with memory takes in.
    pub settle_s: f64,
    /// The run is coming to rest: zero is wanted.
    pub resting: bool,
    /// The plan has ended, and the machine settles.
    pub ended: bool,
}

/// What a law would have commanded at a pose.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Answer {
    /// Pose and reference.
    pub input: (Pose, Reference),
    /// Tracking error: along and across in m, heading in rad.
    pub error: [f64; 3],
    /// What the law wanted.
    pub wanted: BodyVelocity,
    /// What the limits made of it, starting from the answer before.
    pub body: BodyVelocity,
    /// The wheel command.
    pub wheels: Wheels,
    /// True if the limits changed anything.
    pub limited: bool,
    /// True if the law may not be used here, or its result is not finite: a guard would have stopped the machine.
    pub stopped: bool,
}

impl Asked {
    /// From checked settings.
    pub fn new(checked: Checked) -> Self {
        let Checked { law, vehicle, params, .. } = checked;
        let feedback = Feedback::new(law, Arc::clone(&vehicle), params.feedback());
        Self { feedback, vehicle, period_s: params.period_s(), wheels: [0.0; 4] }
    }

    /// The machine.
    pub fn vehicle(&self) -> &Arc<dyn Vehicle> {
        &self.vehicle
    }

    /// The tick's period, s.
    pub fn period_s(&self) -> f64 {
        self.period_s
    }

    /// A run begins: the law forgets what was before.
    pub fn begin(&mut self) {
        self.feedback.begin(self.vehicle.body(&self.wheels));
    }

    /// The machine is not being driven: zero.
    pub fn rest(&mut self) {
        self.wheels = self.vehicle.zero(&self.wheels);
    }

    /// Asks for a command.
    pub fn ask(&mut self, question: &Question<'_>) -> Answer {
        let Question { at, literal, reference, ahead, pose, step_s, settle_s, resting, ended } = *question;
        let last = (self.wheels, self.vehicle.body(&self.wheels));
        let input = Input::new(reference, &ahead, pose, last, step_s);
        self.feedback.choose(literal, input.error.heading_rad, ended);
        let answer = self.feedback.control(at, &input).map(|wanted| wanted.velocity);
        let stopped = !answer.is_ok_and(BodyVelocity::is_finite);
        let wanted = answer.ok().filter(|_| !stopped && !resting).unwrap_or(BodyVelocity::ZERO);
        let limited = limit(&*self.vehicle, wanted, reference.curvature_1_m, &self.wheels, step_s);
        let changed = limited.speed_limited || limited.step_limited;
        let mut answer = Answer {
            input: (pose, reference),
            error: [input.error.along_m, input.error.cross_m, input.error.heading_rad],
            wanted,
            body: limited.body,
            wheels: limited.wheels,
            limited: changed,
            stopped,
        };
        if stopped {
            answer.wheels = self.vehicle.zero(&self.wheels);
            answer.body = self.vehicle.body(&answer.wheels);
        } else {
            self.feedback.settle(&input, changed, settle_s);
        }
        self.wheels = answer.wheels;
        answer
    }
}

/// Makes the table, with columns of one's own behind the wheels'.
///
/// # Errors
/// If the file cannot be made.
pub fn create_csv(path: &Path, vehicle: &dyn Vehicle, more: &[&str]) -> io::Result<CsvFile> {
    CsvFile::create(path, COLUMNS.iter().chain(vehicle.layout().columns()).chain(more).copied())
}

/// Writes a row but for its own columns and its end.
pub fn write_csv(csv: &mut CsvFile, vehicle: &dyn Vehicle, t_s: f64, plan_time_s: f64, answer: &Answer) {
    let (pose, reference) = &answer.input;
    csv.numbers(Some([t_s, plan_time_s, pose.x_m, pose.y_m, pose.heading_rad]));
    csv.numbers(Some([reference.pose.x_m, reference.pose.y_m, reference.pose.heading_rad]));
    csv.numbers(Some([reference.velocity.speed_m_s, reference.velocity.turn_rate_rad_s]));
    csv.numbers(Some(answer.error));
    csv.numbers(Some([answer.wanted.speed_m_s, answer.wanted.turn_rate_rad_s]));
    csv.numbers(Some([answer.body.speed_m_s, answer.body.turn_rate_rad_s]));
    csv.number(f64::from(u8::from(answer.limited)));
    answer.wheels.iter().take(vehicle.layout().count()).for_each(|wheel| csv.number(*wheel));
}

/// Checked settings, or an error that lists what does not hold.
///
/// # Errors
/// What does not hold.
pub fn choose(settings: &Settings, choice: &LawChoice) -> anyhow::Result<(Settings, Checked)> {
    let in_words = |problems: Vec<_>| anyhow!("the settings do not hold:\n  {}", problem_lines(&problems));
    let chosen = choice.apply(settings).map_err(in_words)?;
    let checked = chosen.checked().map_err(in_words)?;
    Ok((chosen, checked))
}

/// A law with its gains, for people.
pub fn law_text(settings: &Settings) -> String {
    let gains: Vec<String> =
        settings.law.gains.iter().map(|(key, value)| format!("{key} = {value}")).collect();
    format!("{} ({})", settings.law.name, gains.join(", "))
}
