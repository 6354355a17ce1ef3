//! A scenario as it lies in the reference data, and the cost of a motion.

use serde_json::Value;
use std::path::{Path, PathBuf};
use std::sync::Arc;
use trackhold::site::Site;
use trackhold_core::geometry::{Direction, Pose, TrackingError};
use trackhold_core::plan::{Plan, Reference, compile};
use trackhold_core::settings::Settings;
use trackhold_core::vehicle::Vehicle;

/// What a squared heading error weighs beside a squared distance, m²/rad²: the script's number.
const HEADING_WEIGHT: f64 = 0.1;

/// A file of the reference data.
pub(crate) fn file(name: &str) -> PathBuf {
    Path::new(concat!(env!("CARGO_MANIFEST_DIR"), "/reference/optimum")).join(name)
}

/// What can be read of the reference data, or the test cannot run.
pub(crate) fn text(name: &str) -> String {
    let path = file(name);
    std::fs::read_to_string(&path).unwrap_or_else(|error| panic!("{}: {error}", path.display()))
}

/// The machine of all scenarios, and the node's numbers.
pub(crate) fn settings() -> Settings {
    Site::load(&file("site.toml")).unwrap_or_else(|error| panic!("{error}")).settings
}

/// A scenario with its optimum.
#[derive(Debug)]
pub(crate) struct Scenario {
    pub(crate) name: String,
    /// The bytes of its plan.
    pub(crate) raw: Vec<u8>,
    pub(crate) plan: Plan,
    /// Where the machine rests at first.
    pub(crate) start: Pose,
    /// Ticks after the first one: as many poses are rated.
    pub(crate) ticks: usize,
    /// The tick's period, s.
    pub(crate) period_s: f64,
    /// The cost of the optimum, m² s.
    pub(crate) optimum: f64,
    /// Where the optimum ends.
    pub(crate) end: Pose,
    table: String,
}

/// A row of an optimum's table, k = 1 to N.
#[derive(Clone, Copy, Debug)]
pub(crate) struct Row {
    /// Time of the tick, s.
    pub(crate) t_s: f64,
    /// Left and right wheel speed, rad/s, held up to then.
    pub(crate) wheels: [f64; 2],
    /// The pose then.
    pub(crate) pose: Pose,
    /// The reference's pose then, as the script computed it.
    pub(crate) reference: Pose,
}

fn pose(value: &Value) -> Pose {
    let number = |key: &str| value[key].as_f64().unwrap_or_else(|| panic!("optima.json lacks {key}"));
    Pose::new(number("x_m"), number("y_m"), number("heading_rad"))
}

/// All scenarios, in the file's order.
pub(crate) fn all(vehicle: &Arc<dyn Vehicle>) -> Vec<Scenario> {
    let listing: Value = serde_json::from_str(&text("optima.json")).expect("optima.json is JSON");
    assert_eq!(listing["heading_weight_m2_rad2"], HEADING_WEIGHT);
    let period_s = listing["period_s"].as_f64().expect("optima.json tells the period");
    let entries = listing["scenarios"].as_array().expect("optima.json lists scenarios");
    entries.iter().map(|entry| Scenario::read(entry, period_s, vehicle)).collect()
}

impl Scenario {
    fn read(entry: &Value, period_s: f64, vehicle: &Arc<dyn Vehicle>) -> Self {
        let word =
            |key: &str| entry[key].as_str().unwrap_or_else(|| panic!("optima.json lacks {key}")).to_owned();
        let raw = text(&word("plan")).into_bytes();
        let plan =
            compile(&raw, &**vehicle).unwrap_or_else(|findings| panic!("{}: {findings:?}", word("plan")));
        Self {
            name: word("name"),
            raw,
            plan,
            start: pose(&entry["start"]),
            ticks: entry["ticks"].as_u64().expect("optima.json tells the ticks") as usize,
            period_s,
            optimum: entry["cost_m2_s"].as_f64().expect("optima.json tells the cost"),
            end: pose(&entry["end"]),
            table: word("table"),
        }
    }

    /// The rows of its table.
    pub(crate) fn rows(&self) -> Vec<Row> {
        let rows: Vec<Row> = text(&self.table).lines().skip(1).map(row).collect();
        assert_eq!(rows.len(), self.ticks, "{}", self.table);
        rows
    }

    /// The plan's reference at tick `k`.
    pub(crate) fn reference(&self, k: usize) -> Reference {
        self.plan.at(k as f64 * self.period_s, &mut 0)
    }

    /// The cost of a motion, m² s: poses at ticks 1, 2 and so on. Where it ends early the machine stays where it is.
    pub(crate) fn cost(&self, poses: &[Pose]) -> f64 {
        let last = *poses.last().unwrap_or(&self.start);
        let sum: f64 = (1..=self.ticks)
            .map(|k| {
                let reference = self.reference(k);
                let pose = poses.get(k - 1).copied().unwrap_or(last);
                let error =
                    TrackingError::between(pose, reference.pose, Direction::of(reference.pose.heading_rad));
                error.along_m * error.along_m
                    + error.cross_m * error.cross_m
                    + HEADING_WEIGHT * error.heading_rad * error.heading_rad
            })
            .sum();
        sum * self.period_s
    }
}

fn row(line: &str) -> Row {
    let numbers: Vec<f64> = line
        .split(',')
        .map(|number| number.parse().unwrap_or_else(|_| panic!("{number:?} in {line}")))
        .collect();
    let [t_s, left, right, x, y, heading, ref_x, ref_y, ref_heading] = numbers[..] else {
        panic!("a row of a table has nine numbers: {line}")
    };
    Row {
        t_s,
        wheels: [left, right],
        pose: Pose::new(x, y, heading),
        reference: Pose::new(ref_x, ref_y, ref_heading),
    }
}
