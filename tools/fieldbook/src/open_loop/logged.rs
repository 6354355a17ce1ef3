//! `replay LOG --law`: a log's poses, with another law or other gains. Plan time and modes are the log's.

use super::{Answer, Asked, CAUTION, Question, choose, create_csv, law_text, write_csv};
use crate::choice::LawChoice;
use crate::log::{Ending, LogReader};
use crate::output::{self, CsvFile};
use crate::stats::Spread;
use anyhow::{Context as _, anyhow, bail};
use serde_json::json;
use std::path::Path;
use std::process::ExitCode;
use trackhold_core::geometry::Pose;
use trackhold_core::law::OnPlan;
use trackhold_core::plan::{self, Plan};
use trackhold_core::settings::Settings;
use trackhold_core::time::{SpanNs, TimeNs};
use trackhold_proto::blob::Digest;
use trackhold_proto::journal::{Body, Boot, Entry, PlanEvent, TickRecord, flag};
use trackhold_proto::words::Mode;

/// `replay LOG --law`: asks another law at a log's poses.
///
/// # Errors
/// Why it could not run.
pub fn run(
    path: &Path,
    choice: &LawChoice,
    partial: bool,
    csv: Option<&Path>,
    as_json: bool,
) -> anyhow::Result<ExitCode> {
    let name = path.display();
    let mut reader = LogReader::open(path).with_context(|| name.to_string())?;
    let Some(Entry { number: 0, at_ns, body: Body::Boot(boot) }) =
        reader.next().transpose().with_context(|| name.to_string())?
    else {
        bail!("{name}: does not begin with entry 0, the daemon's boot: without it the settings are unknown");
    };
    let (settings, mut logged) = Logged::new(&boot, at_ns, choice, csv)?;
    while let Some(entry) = reader.next().transpose().with_context(|| name.to_string())? {
        logged.take(entry).with_context(|| name.to_string())?;
    }
    if reader.ending() == Ending::Unmarked && !partial {
        bail!("{name}: has no end mark: it was cut off; --partial accepts that");
    }
    if let Some(csv) = logged.csv.take() {
        csv.finish().context("cannot write the table")?;
    }
    output::print(&logged.summary(&settings, as_json))?;
    Ok(ExitCode::SUCCESS)
}

/// A log's ticks, gone through with another law.
struct Logged {
    asked: Asked,
    begin_ns: u64,
    csv: Option<CsvFile>,
    /// The plan that arrived last, the one in force, and those that wait for their plan time, in its order.
    arrived: Option<PlanEvent>,
    plan: Option<Plan>,
    waiting: Vec<Plan>,
    cursor: usize,
    /// Tick before this one: its moment and the rate of the plan's time.
    before: Option<(u64, f64)>,
    following: bool,
    ticks: u64,
    stopped: u64,
    limited: u64,
    wanted: [Spread; 2],
    commanded: [Spread; 2],
}

impl Logged {
    fn new(
        boot: &Boot,
        begin_ns: u64,
        choice: &LawChoice,
        csv: Option<&Path>,
    ) -> anyhow::Result<(Settings, Self)> {
        let settings = Settings::from_json(&boot.settings).map_err(|error| {
            anyhow!("this program cannot read the settings in the log's first entry: {error}")
        })?;
        let (settings, checked) = choose(&settings, choice)?;
        let asked = Asked::new(checked);
        let own = [
            "logged_wanted_speed_m_s",
            "logged_wanted_turn_rate_rad_s",
            "logged_speed_m_s",
            "logged_turn_rate_rad_s",
        ];
        let create = |path: &Path| {
            create_csv(path, &**asked.vehicle(), &own)
                .with_context(|| format!("cannot make {}", path.display()))
        };
        let csv = csv.map(create).transpose()?;
        let logged = Self {
            asked,
            begin_ns,
            csv,
            arrived: None,
            plan: None,
            waiting: Vec::new(),
            cursor: 0,
            before: None,
            following: false,
            ticks: 0,
            stopped: 0,
            limited: 0,
            wanted: [Spread::default(); 2],
            commanded: [Spread::default(); 2],
        };
        Ok((settings, logged))
    }

    fn take(&mut self, entry: Entry) -> anyhow::Result<()> {
        match entry.body {
            Body::Plan(event) => self.arrived = Some(event),
            Body::PlanWaits(waits) => {
                let plan = self.arrived(waits.digest, entry.number)?;
                self.waiting.retain(|waiting| waiting.begin() < plan.begin());
                self.waiting.push(plan);
            }
            // The tick before took over already.
            Body::PlanLoaded(loaded) if self.is_in_force(loaded.digest) => {}
            Body::PlanLoaded(loaded) => {
                self.plan = Some(self.arrived(loaded.digest, entry.number)?);
                self.waiting.clear();
            }
            Body::ModeChange(change) if !matches!(change.to, Mode::Tracking | Mode::ControlledStop) => {
                self.waiting.clear();
            }
            Body::Tick(record) => self.tick(&record),
            Body::Gap(gap) => bail!("entries {} to {} are missing", gap.first, gap.last),
            _ => {}
        }
        Ok(())
    }

    fn is_in_force(&self, digest: Digest) -> bool {
        self.plan.as_ref().is_some_and(|plan| plan.digest() == digest)
    }

    /// The plan that arrived last, compiled.
    fn arrived(&mut self, digest: Digest, number: u64) -> anyhow::Result<Plan> {
        let Some(event) = self.arrived.take().filter(|event| event.digest == digest) else {
            bail!("entry {number}: a plan was taken that the log does not hold");
        };
        plan::compile(&event.raw, &**self.asked.vehicle()).map_err(|findings| {
            anyhow!("entry {number}: its plan does not compile here:\n  {}", findings.join("\n  "))
        })
    }

    /// Goes over to the plan whose plan time was reached, as the node does.
    fn take_over(&mut self, reached: SpanNs) {
        let due = self.waiting.partition_point(|waiting| waiting.begin() <= reached);
        if let Some(next) = self.waiting.drain(..due).next_back() {
            (self.plan, self.cursor) = (Some(next), 0);
        }
    }

    fn tick(&mut self, record: &TickRecord) {
        self.take_over(SpanNs(record.plan_time_ns));
        let period_s = self.asked.period_s();
        let (at_before, rate_before) = self.before.replace((record.at_ns, record.plan_rate)).unzip();
        let elapsed = at_before.map(|at| SpanNs(record.at_ns.saturating_sub(at)));
        // As the node counts: a tick early by less than a nanosecond is punctual, a late one counts as punctual.
        let early = elapsed.filter(|elapsed| (*elapsed + SpanNs(1)).seconds() < period_s);
        let seconds = early.map_or(period_s, SpanNs::seconds);
        let seen = record.has(flag::HAS_POSE | flag::HAS_REFERENCE);
        let Some(plan) = self.plan.as_ref().filter(|_| seen) else {
            self.following = false;
            self.asked.rest();
            return;
        };
        let place = SpanNs(record.plan_time_ns) - plan.begin();
        let mut reference = plan.at(place.seconds(), &mut self.cursor);
        let literal = reference.velocity;
        if record.plan_rate != 1.0 {
            let change = rate_before.map_or(0.0, |before| (record.plan_rate - before) / seconds.max(1e-9));
            reference = reference.slowed(record.plan_rate, change);
        }
        if !std::mem::replace(&mut self.following, true) {
            self.asked.begin();
        }
        // Once the run came to rest the node asked no law.
        let at_rest = record.wanted_speed_m_s == 0.0 && record.wanted_turn_rate_rad_s == 0.0;
        let resting = at_rest
            && (record.has(flag::SETTLING) || record.mode == Mode::ControlledStop || record.plan_rate == 0.0);
        let pose = Pose::new(record.x_m, record.y_m, record.heading_rad);
        let ahead = OnPlan { plan, t_s: place.seconds(), rate: record.plan_rate };
        let answer = self.asked.ask(&Question {
            at: TimeNs(record.at_ns),
            literal,
            reference,
            ahead,
            pose,
            step_s: seconds,
            settle_s: period_s,
            resting,
            ended: record.has(flag::SETTLING),
        });
        self.following = matches!(record.mode, Mode::Tracking | Mode::ControlledStop);
        self.note(record, &answer);
    }

    fn note(&mut self, record: &TickRecord, answer: &Answer) {
        self.ticks += 1;
        self.stopped += u64::from(answer.stopped);
        self.limited += u64::from(answer.limited);
        let logged = &record.command;
        self.wanted[0].add(answer.wanted.speed_m_s - record.wanted_speed_m_s);
        self.wanted[1].add(answer.wanted.turn_rate_rad_s - record.wanted_turn_rate_rad_s);
        self.commanded[0].add(answer.body.speed_m_s - logged.speed_m_s);
        self.commanded[1].add(answer.body.turn_rate_rad_s - logged.turn_rate_rad_s);
        let Some(csv) = &mut self.csv else { return };
        let t_s = SpanNs(record.at_ns.saturating_sub(self.begin_ns)).seconds();
        write_csv(csv, &**self.asked.vehicle(), t_s, SpanNs(record.plan_time_ns).seconds(), answer);
        csv.numbers(Some([record.wanted_speed_m_s, record.wanted_turn_rate_rad_s]));
        csv.numbers(Some([logged.speed_m_s, logged.turn_rate_rad_s]));
        csv.end_row();
    }

    fn summary(&self, settings: &Settings, as_json: bool) -> String {
        let [wanted_speed, wanted_turn] = &self.wanted;
        let [speed, turn] = &self.commanded;
        if as_json {
            let object = json!({
                "open_loop": true,
                "caution": CAUTION,
                "law": settings.law.name,
                "gains": settings.law.gains,
                "ticks": self.ticks,
                "outside_domain_ticks": self.stopped,
                "limited_ticks": self.limited,
                "rms_wanted_speed_difference_m_s": wanted_speed.rms(),
                "rms_wanted_turn_rate_difference_rad_s": wanted_turn.rms(),
                "rms_speed_difference_m_s": speed.rms(),
                "max_speed_difference_m_s": speed.greatest(),
                "rms_turn_rate_difference_rad_s": turn.rms(),
                "max_turn_rate_difference_rad_s": turn.greatest(),
            });
            return format!("{object}\n");
        }
        format!(
            "{CAUTION}\n\
             {} at the log's poses, {} ticks in which the machine followed a plan\n\
             difference from the log            rms        greatest\n\
             wanted speed          {:>12.6}    {:>12.6} m/s\n\
             wanted turn rate      {:>12.6}    {:>12.6} rad/s\n\
             commanded speed       {:>12.6}    {:>12.6} m/s\n\
             commanded turn rate   {:>12.6}    {:>12.6} rad/s\n\
             limits acted in {} ticks; a guard would have stopped the machine in {}\n",
            law_text(settings),
            self.ticks,
            wanted_speed.rms(),
            wanted_speed.greatest(),
            wanted_turn.rms(),
            wanted_turn.greatest(),
            speed.rms(),
            speed.greatest(),
            turn.rms(),
            turn.greatest(),
            self.limited,
            self.stopped,
        )
    }
}
