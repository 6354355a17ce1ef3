//! What a law comes to on a plan: the same runs for every law, and how much more dead time it bears.

use crate::sim::{self, Observer, Options, Outcome, Row, SimError};
use crate::stats::{Errors, Spread, Statistics};
use serde::Serialize;
use simrobot::RobotSpec;
use std::cmp::Ordering;
use std::sync::Arc;
use trackhold_core::geometry::{Direction, Pose};
use trackhold_core::math;
use trackhold_core::plan;
use trackhold_core::settings::{LawSettings, Settings};
use trackhold_core::vehicle::{Vehicle, Wheels};
use trackhold_proto::journal::flag;
use trackhold_proto::words::Mode;

/// Weight of the square of the heading error (rad²) beside those of the distances (m²) in the cost.
const HEADING_WEIGHT: f64 = 0.1;
/// The most dead time that is tried on top of the robot's own, s.
const MOST_EXTRA_S: f64 = 1.0;
/// The greatest dead time that a robot file may state, s.
const MOST_DEAD_TIME_S: f64 = 5.0;
/// The first extra dead time tried; from there it doubles, s.
const FIRST_EXTRA_S: f64 = 0.05;
/// The dead time borne is found to this, s.
const RESOLUTION_S: f64 = 0.005;
/// A law bears a dead time while its greatest errors stay below so many times those without it, …
const GROWTH: f64 = 2.0;
/// … and this much more across the path, m, …
const ROOM_M: f64 = 0.05;
/// … and of the heading, rad.
const ROOM_RAD: f64 = 0.1;

/// Under what every law runs.
#[derive(Clone, Debug)]
pub(super) struct Conditions {
    /// The plan's bytes.
    pub(super) plan: Vec<u8>,
    /// The robot, its seed the first run's.
    pub(super) robot: RobotSpec,
    /// How many runs.
    pub(super) seeds: u32,
    /// Greatest start offset along and across, m.
    pub(super) offset_m: f64,
    /// Greatest start offset of the heading, rad.
    pub(super) offset_rad: f64,
}

impl Conditions {
    /// Where run `number` starts. Multiples of 1/g, 1/g² and 1/g³ with g⁴ = g + 1, modulo 1, fill a cube evenly however
    /// many they are (an additive recurrence on the generalised golden ratio; from memory).
    fn start(&self, number: u32, first: Pose) -> Pose {
        const STEPS: [f64; 3] = [0.819_172_513_396_164_5, 0.671_043_606_703_789_3, 0.549_700_477_901_970_2];
        let [along, cross, heading] = STEPS.map(|step| {
            let place = 0.5 + f64::from(number + 1) * step;
            2.0 * (place - place.floor()) - 1.0
        });
        let (x, y) =
            Direction::of(first.heading_rad).out_of_frame(self.offset_m * along, self.offset_m * cross);
        Pose::new(first.x_m + x, first.y_m + y, math::wrap(first.heading_rad + self.offset_rad * heading))
    }
}

/// What a law came to.
#[derive(Debug, Serialize)]
pub(super) struct Score {
    /// The law and all its gains.
    #[serde(flatten)]
    pub(super) law: Chosen,
    /// Mean cost of a run, m² s.
    pub(super) cost_m2_s: f64,
    /// The part of it that is not along the path: across it and of the heading, m² s.
    pub(super) path_cost_m2_s: f64,
    /// Errors of all runs together, up to the plan's end; `final_…` are those at the last run's.
    #[serde(flatten)]
    pub(super) errors: Errors,
    /// Duration of the plan, s.
    pub(super) plan_duration_s: f64,
    /// Mean duration of a run, s: longer than the plan where its time slows for the machine, and where it settles.
    pub(super) mean_duration_s: f64,
    /// Share of the ticks in which the law had to leave the work to the one it falls back to.
    pub(super) fallback_share: f64,
    /// Greatest distance to the reference at the end of a run, m.
    pub(super) worst_final_position_error_m: f64,
    /// Rms of what the command changes in a tick, as a share of what the limits allow.
    pub(super) effort: f64,
    /// Rms of the change of the commanded speed, m/s².
    pub(super) rms_accel_m_s2: f64,
    /// Rms of the change of the commanded turn rate, rad/s².
    pub(super) rms_turn_accel_rad_s2: f64,
    /// Runs in all, and those that came to the plan's end.
    pub(super) runs: u32,
    pub(super) finished: u32,
    /// Why the first one that did not was over.
    pub(super) stopped: Option<String>,
    /// The dead time borne on top of the robot's own, s; none if the first run did not come to the plan's end.
    pub(super) extra_dead_time_s: Option<f64>,
    /// True if it bears at least as much: no more was tried.
    pub(super) extra_dead_time_is_more: bool,
}

/// A law, and where its gains come from.
#[derive(Debug, Serialize)]
pub(super) struct Chosen {
    /// The law.
    #[serde(rename = "law")]
    pub(super) name: String,
    /// All its gains.
    pub(super) gains: trackhold_core::keys::Values,
    /// True for the law of the site file, which has the gains of the site file.
    pub(super) gains_of_site: bool,
}

impl Score {
    /// Runs a law.
    ///
    /// # Errors
    /// If the runs cannot begin for a reason that is not the law's.
    pub(super) fn of(settings: &Settings, own: bool, conditions: &Conditions) -> Result<Self, SimError> {
        let checked = settings.checked().map_err(SimError::Settings)?;
        let plan = plan::check::admit(&conditions.plan, &checked.terms()).map_err(SimError::Plan)?;
        let course = Course {
            settings: &checked.settings,
            conditions,
            first: plan.at(0.0, &mut 0).pose,
            plan_s: plan.duration_s(),
            vehicle: Arc::clone(&checked.vehicle),
            period_s: checked.params.period_s(),
        };
        let LawSettings { name, gains } = checked.settings.law.clone();
        course.score(Chosen { name, gains, gains_of_site: own })
    }

    /// Those that always come to the plan's end first, then by cost.
    pub(super) fn better_first(&self, other: &Self) -> Ordering {
        let unfinished = |score: &Self| score.runs - score.finished;
        unfinished(self).cmp(&unfinished(other)).then(self.cost_m2_s.total_cmp(&other.cost_m2_s))
    }
}

/// A law on its way over the plan.
struct Course<'a> {
    settings: &'a Settings,
    conditions: &'a Conditions,
    first: Pose,
    plan_s: f64,
    vehicle: Arc<dyn Vehicle>,
    period_s: f64,
}

impl Course<'_> {
    fn score(&self, law: Chosen) -> Result<Score, SimError> {
        let mut all = Measured::new(&*self.vehicle, self.period_s);
        let (mut finished, mut stopped) = (0, None);
        let mut first = None;
        for number in 0..self.conditions.seeds {
            all.begin();
            match self.run(number, 0.0, &mut all)? {
                None => finished += 1,
                Some(why) => stopped = stopped.or(Some(why)),
            }
            if number == 0 && stopped.is_none() {
                first = Some(all.statistics.errors());
            }
        }
        let borne = first.map(|errors| self.extra_dead_time_s(&errors)).transpose()?;
        let runs = f64::from(self.conditions.seeds);
        let share = |count: u64| if all.ticks == 0 { 0.0 } else { count as f64 / all.ticks as f64 };
        Ok(Score {
            law,
            cost_m2_s: (all.along_m2_s + all.path_m2_s) / runs,
            path_cost_m2_s: all.path_m2_s / runs,
            errors: all.statistics.errors(),
            plan_duration_s: self.plan_s,
            mean_duration_s: all.ticks as f64 * self.period_s / runs,
            fallback_share: share(all.fallbacks),
            worst_final_position_error_m: all.worst_end_m,
            effort: all.effort.rms(),
            rms_accel_m_s2: all.accel.rms(),
            rms_turn_accel_rad_s2: all.turn_accel.rms(),
            runs: self.conditions.seeds,
            finished,
            stopped,
            extra_dead_time_s: borne.map(|borne| borne.0),
            extra_dead_time_is_more: borne.is_some_and(|borne| borne.1),
        })
    }

    /// One run; none if it came to the plan's end, else why it was over.
    fn run(
        &self,
        number: u32,
        extra_s: f64,
        watching: &mut Measured<'_>,
    ) -> Result<Option<String>, SimError> {
        let mut robot = self.conditions.robot.clone();
        robot.seed = robot.seed.wrapping_add(u64::from(number));
        robot.drive.dead_time_s += extra_s;
        let options = Options { start: Some(self.conditions.start(number, self.first)), seconds: None };
        let outcome = sim::robot::simulate(self.settings, &self.conditions.plan, &options, &robot, watching);
        match outcome {
            Ok(outcome) => {
                watching.end();
                Ok(why_over(&outcome))
            }
            Err(SimError::Start(refusal)) => Ok(Some(format!("start refused: {refusal}"))),
            Err(other) => Err(other),
        }
    }

    /// The dead time borne on the first run on top of the robot's own, and whether no more was tried: doubling up to the
    /// first that is too much, then bisection.
    fn extra_dead_time_s(&self, without: &Errors) -> Result<(f64, bool), SimError> {
        let most = MOST_EXTRA_S.min(MOST_DEAD_TIME_S - self.conditions.robot.drive.dead_time_s);
        let (mut borne, mut extra) = (0.0, FIRST_EXTRA_S.min(most));
        while self.bears(extra, without)? {
            if extra >= most {
                return Ok((most, true));
            }
            (borne, extra) = (extra, (2.0 * extra).min(most));
        }
        while extra - borne > RESOLUTION_S {
            let middle = 0.5 * (borne + extra);
            if self.bears(middle, without)? {
                borne = middle;
            } else {
                extra = middle;
            }
        }
        Ok((borne, false))
    }

    fn bears(&self, extra_s: f64, without: &Errors) -> Result<bool, SimError> {
        let mut measured = Measured::new(&*self.vehicle, self.period_s);
        let over = self.run(0, extra_s, &mut measured)?;
        let errors = measured.statistics.errors();
        Ok(over.is_none()
            && errors.max_cross_m <= GROWTH * without.max_cross_m + ROOM_M
            && errors.max_heading_rad <= GROWTH * without.max_heading_rad + ROOM_RAD)
    }
}

fn why_over(outcome: &Outcome) -> Option<String> {
    match outcome.mode {
        Mode::Standby => None,
        Mode::Tracking | Mode::ControlledStop => {
            Some("it did not come to rest after the plan's end".to_owned())
        }
        mode => Some(format!("{mode} ({}) at {:.1} s", outcome.cause, outcome.duration.seconds())),
    }
}

/// Gathers what the ranking needs, over any number of runs.
struct Measured<'a> {
    vehicle: &'a dyn Vehicle,
    period_s: f64,
    statistics: Statistics,
    ticks: u64,
    fallbacks: u64,
    along_m2_s: f64,
    path_m2_s: f64,
    effort: Spread,
    accel: Spread,
    turn_accel: Spread,
    worst_end_m: f64,
    end_m: f64,
    /// The last command: wheels, speed, turn rate.
    last: Option<(Wheels, f64, f64)>,
}

impl<'a> Measured<'a> {
    fn new(vehicle: &'a dyn Vehicle, period_s: f64) -> Self {
        Self {
            vehicle,
            period_s,
            statistics: Statistics::default(),
            ticks: 0,
            fallbacks: 0,
            along_m2_s: 0.0,
            path_m2_s: 0.0,
            effort: Spread::default(),
            accel: Spread::default(),
            turn_accel: Spread::default(),
            worst_end_m: 0.0,
            end_m: 0.0,
            last: None,
        }
    }

    fn begin(&mut self) {
        (self.last, self.end_m) = (None, 0.0);
    }

    fn end(&mut self) {
        self.worst_end_m = self.worst_end_m.max(self.end_m);
    }

    /// The change of the command, as a share of the largest one.
    fn share(&self, last: &Wheels, next: &Wheels) -> f64 {
        let most = self.vehicle.largest_steps(last, next, self.period_s);
        let shares = (0..4).filter(|&index| most[index] > 0.0);
        shares.map(|index| (next[index] - last[index]).abs() / most[index]).fold(0.0, f64::max)
    }
}

impl Observer for Measured<'_> {
    fn row(&mut self, row: &Row<'_>) {
        self.ticks += 1;
        if let Some(error) = row.error {
            self.end_m = math::length(error.along_m, error.cross_m);
        }
        let command = &row.record.command;
        let next = (command.wheels, command.speed_m_s, command.turn_rate_rad_s);
        let last = self.last.replace(next);
        // Beyond the plan's end the machine settles, whatever the law.
        if row.record.has(flag::SETTLING) || row.record.mode != Mode::Tracking {
            return;
        }
        self.statistics.row(row);
        self.fallbacks += u64::from(row.record.has(flag::LAW_FALLBACK));
        if let Some(error) = row.error {
            let (along, cross, heading) = (error.along_m, error.cross_m, error.heading_rad);
            self.along_m2_s += along * along * self.period_s;
            self.path_m2_s += (cross * cross + HEADING_WEIGHT * heading * heading) * self.period_s;
        }
        if let Some(last) = last {
            self.effort.add(self.share(&last.0, &next.0));
            self.accel.add((next.1 - last.1) / self.period_s);
            self.turn_accel.add((next.2 - last.2) / self.period_s);
        }
    }
}
