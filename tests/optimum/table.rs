//! Every law of the core's table through every scenario: the cost of its drive over the optimum's. One gain set a law for
//! all scenarios, from `tests/reference/optimum/gains.toml`; the node in closed loop, on the ideal robot.
//!
//! `tests/reference/optimum/table.txt` is the committed result. After a change that is meant to move it:
//!
//! ```text
//! TRACKHOLD_REWRITE_TABLE=1 cargo test -p trackhold-tests --test optimum table
//! ```

use crate::scenario::{self, Scenario};
use fieldbook::sim::{self, Observer, Options, SimError};
use std::collections::BTreeMap;
use std::fmt::Write as _;
use std::sync::Arc;
use trackhold_core::geometry::Pose;
use trackhold_core::keys::Values;
use trackhold_core::law;
use trackhold_core::settings::{LawSettings, Settings};
use trackhold_proto::words::{Cause, Mode};

/// Set to 1, the table is written instead of compared.
const REWRITE: &str = "TRACKHOLD_REWRITE_TABLE";
const TABLE: &str = "table.txt";
/// Laws that optimise in every tick; all others compute their result from a formula or a Riccati equation.
pub(crate) const OPTIMISING: &[&str] = &["predictive"];
/// What is aimed at: of the best law that does not optimise on each scenario, of that one's median, and of one that does.
const CLOSED_AIM: f64 = 1.35;
const MEDIAN_AIM: f64 = 1.2;
const OPTIMISING_AIM: f64 = 1.05;
const HEAD: &str = "\
Cost of a law's drive over the optimum's: integral of x_e^2 + y_e^2 + 0.1 phi_e^2, twelve scenarios on a differential
drive, one gain set a law (gains.toml). -: outside the law's domain. stopped: a guard stopped it on the way.
closed: the best of the laws without optimisation in the tick.
Made by tests/optimum/table.rs, which also says how to make it again.

";

/// What became of a drive.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) enum Drive {
    /// It went on to the end, at this cost over the optimum's.
    Ratio(f64),
    /// Machine, plan, start or error lie outside the law's domain.
    OutsideDomain,
    /// A guard stopped it for another reason.
    Stopped(Cause),
}

impl Drive {
    pub(crate) fn ratio(self) -> Option<f64> {
        match self {
            Self::Ratio(ratio) => Some(ratio),
            Self::OutsideDomain | Self::Stopped(_) => None,
        }
    }

    fn cell(self) -> String {
        match self {
            Self::Ratio(ratio) => format!("{ratio:.3}"),
            Self::OutsideDomain => "-".to_owned(),
            Self::Stopped(_) => "stopped".to_owned(),
        }
    }
}

/// The gains of each law; one that is not in the file has its defaults.
pub(crate) fn gains() -> BTreeMap<String, Values> {
    let file: BTreeMap<String, BTreeMap<String, f64>> =
        toml::from_str(&scenario::text("gains.toml")).unwrap_or_else(|error| panic!("gains.toml: {error}"));
    let values = |gains: BTreeMap<String, f64>| {
        let mut values = Values::default();
        gains.iter().for_each(|(key, value)| values.set(key, *value));
        values
    };
    file.into_iter().map(|(law, gains)| (law, values(gains))).collect()
}

/// The settings with a law.
pub(crate) fn settings_with(base: &Settings, law: &str, gains: &Values) -> Settings {
    Settings { law: LawSettings { name: law.to_owned(), gains: gains.clone() }, ..base.clone() }
}

/// A law's gains with those not given filled in; the law and all that is given have to hold.
pub(crate) fn all_gains(base: &Settings, law: &str, gains: &Values) -> Values {
    match settings_with(base, law, gains).checked() {
        Ok(checked) => checked.settings.law.gains,
        Err(problems) => panic!("gains.toml, {law}: {problems:?}"),
    }
}

/// Keeps the true poses of a run.
struct Poses(Vec<Pose>);

impl Observer for Poses {
    fn row(&mut self, row: &sim::Row<'_>) {
        self.0.push(row.truth);
    }
}

/// Drives a scenario.
pub(crate) fn drive(settings: &Settings, scenario: &Scenario) -> Drive {
    // Half a period more, so that the last tick is one.
    let seconds = (scenario.ticks as f64 + 0.5) * scenario.period_s;
    let options = Options { start: Some(scenario.start), seconds: Some(seconds) };
    let mut poses = Poses(Vec::with_capacity(scenario.ticks + 1));
    let outcome = match sim::simulate(settings, &scenario.raw, &options, &mut poses) {
        Ok(outcome) => outcome,
        Err(SimError::Plan(_) | SimError::Start(_)) => return Drive::OutsideDomain,
        Err(error) => panic!("{}: {error}", settings.law.name),
    };
    let ended = matches!(outcome.cause, Cause::PlanEnded | Cause::NotSettled);
    match (outcome.mode, outcome.cause) {
        (Mode::Tracking, _) => {}
        (Mode::Standby, _) if ended => {}
        (_, Cause::OutsideLawDomain) => return Drive::OutsideDomain,
        (_, cause) => return Drive::Stopped(cause),
    }
    Drive::Ratio(scenario.cost(&poses.0[1..]) / scenario.optimum)
}

/// The middle of some numbers; the mean of the two middle ones.
pub(crate) fn median(mut values: Vec<f64>) -> Option<f64> {
    values.sort_by(f64::total_cmp);
    let (below, above) = (values.get(values.len().checked_sub(1)? / 2)?, values.get(values.len() / 2)?);
    Some(0.5 * (below + above))
}

/// A law's way through every scenario.
struct Column {
    law: &'static str,
    drives: Vec<Drive>,
}

impl Column {
    fn worst(&self) -> Option<f64> {
        self.drives.iter().filter_map(|drive| drive.ratio()).max_by(f64::total_cmp)
    }

    fn median(&self) -> Option<f64> {
        median(self.drives.iter().filter_map(|drive| drive.ratio()).collect())
    }
}

fn columns(machine: &law::Context, scenarios: &[Scenario]) -> Vec<Column> {
    let (base, gains) = (scenario::settings(), gains());
    for (name, gains) in &gains {
        all_gains(&base, name, gains);
    }
    let column = |kind: &law::Kind| {
        let drives = if kind.machines.unfit(machine).is_some() {
            vec![Drive::OutsideDomain; scenarios.len()]
        } else {
            let settings =
                settings_with(&base, kind.name, gains.get(kind.name).unwrap_or(&Values::default()));
            scenarios.iter().map(|scenario| drive(&settings, scenario)).collect()
        };
        Column { law: kind.name, drives }
    };
    law::KINDS.iter().map(column).collect()
}

/// Of each scenario the best ratio of the laws that do not optimise.
fn best_closed(columns: &[Column], scenario: usize) -> Option<f64> {
    let closed = columns.iter().filter(|column| !OPTIMISING.contains(&column.law));
    closed.filter_map(|column| column.drives[scenario].ratio()).min_by(f64::total_cmp)
}

fn number(value: Option<f64>) -> String {
    value.map_or_else(|| "-".to_owned(), |value| format!("{value:.3}"))
}

/// How far an aim is reached: which scenarios lie above the bound, or were not driven.
fn aim(what: &str, bound: f64, scenarios: &[Scenario], ratios: &[Option<f64>]) -> String {
    let missed = scenarios.iter().zip(ratios).filter(|(_, ratio)| ratio.is_none_or(|ratio| ratio > bound));
    let missed: Vec<String> =
        missed.map(|(scenario, ratio)| format!("{} {}", scenario.name, number(*ratio))).collect();
    let reached = ratios.len() - missed.len();
    let but = if missed.is_empty() { String::new() } else { format!("; not {}", missed.join(", ")) };
    format!("aim: {what} at most {bound} on each: {reached} of {}{but}\n", ratios.len())
}

fn aims(scenarios: &[Scenario], columns: &[Column], best: &[Option<f64>]) -> String {
    let mut text = aim("closed", CLOSED_AIM, scenarios, best);
    let middle = median(best.iter().flatten().copied().collect());
    writeln!(text, "aim: median of closed at most {MEDIAN_AIM}: {}", number(middle))
        .expect("a text takes it");
    for column in columns.iter().filter(|column| OPTIMISING.contains(&column.law)) {
        let ratios: Vec<Option<f64>> = column.drives.iter().map(|drive| drive.ratio()).collect();
        text.push_str(&aim(column.law, OPTIMISING_AIM, scenarios, &ratios));
    }
    text
}

fn print(scenarios: &[Scenario], columns: &[Column]) -> String {
    let mut text = String::from(HEAD);
    let mut line = |name: &str, cells: Vec<String>, closed: String| {
        let cells: String = cells.iter().map(|cell| format!("{cell:>13}")).collect();
        writeln!(text, "{name:<13}{cells}{closed:>9}").expect("a text takes every line");
    };
    line("", columns.iter().map(|column| column.law.to_owned()).collect(), "closed".to_owned());
    let best: Vec<Option<f64>> = (0..scenarios.len()).map(|index| best_closed(columns, index)).collect();
    for (index, scenario) in scenarios.iter().enumerate() {
        let cells = columns.iter().map(|column| column.drives[index].cell()).collect();
        line(&scenario.name, cells, number(best[index]));
    }
    let reached: Vec<f64> = best.iter().flatten().copied().collect();
    let worst = reached.iter().copied().max_by(f64::total_cmp);
    line("worst", columns.iter().map(|column| number(column.worst())).collect(), number(worst));
    line("median", columns.iter().map(|column| number(column.median())).collect(), number(median(reached)));
    text.push('\n');
    text.push_str(&aims(scenarios, columns, &best));
    text
}

#[test]
fn the_table_of_laws_and_scenarios_is_the_committed_one() {
    let checked = scenario::settings().checked().unwrap();
    let scenarios = scenario::all(&checked.vehicle);
    let vehicle = Arc::clone(&checked.vehicle);
    let machine = law::Context { vehicle, period_s: checked.params.period_s(), dead_time_s: 0.0 };
    let columns = columns(&machine, &scenarios);
    let table = print(&scenarios, &columns);
    println!("{table}");
    for column in &columns {
        for (drive, scenario) in column.drives.iter().zip(&scenarios) {
            // An optimum that a law beats is none.
            assert!(drive.ratio().is_none_or(|ratio| ratio > 1.0 - 1e-6), "{} {}", column.law, scenario.name);
        }
    }
    if std::env::var_os(REWRITE).is_some_and(|value| value == "1") {
        std::fs::write(scenario::file(TABLE), &table).expect("the reference data can be written");
    }
    assert!(
        scenario::text(TABLE) == table,
        "{TABLE} differs from the table above; if that is meant, run this test with {REWRITE}=1 and commit the file"
    );
}
