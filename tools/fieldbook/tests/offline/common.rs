//! What the tests of this program share: the reference cases, runs on them, files to write into.

use fieldbook::sim::{Observer, Row, observe::Logging};
use std::path::{Path, PathBuf};
use trackhold::site::Site;
use trackhold_core::geometry::{Pose, TrackingError};
use trackhold_core::settings::Settings;
use trackhold_proto::journal::TickRecord;

/// A case of `tests/reference/zoh`.
pub(crate) struct Case {
    pub(crate) name: String,
    pub(crate) settings: Settings,
    pub(crate) plan: Vec<u8>,
    pub(crate) start: Pose,
    pub(crate) ticks: u64,
}

pub(crate) fn reference(name: &str) -> PathBuf {
    Path::new(concat!(env!("CARGO_MANIFEST_DIR"), "/../../tests/reference/zoh")).join(name)
}

/// A file of this test's own.
pub(crate) fn scratch(name: &str) -> PathBuf {
    Path::new(env!("CARGO_TARGET_TMPDIR")).join(name)
}

pub(crate) fn cases() -> Vec<Case> {
    let list: serde_json::Value =
        serde_json::from_slice(&std::fs::read(reference("cases.json")).unwrap()).unwrap();
    list.as_array().unwrap().iter().map(case).collect()
}

pub(crate) fn case_named(name: &str) -> Case {
    cases().into_iter().find(|case| case.name == name).unwrap()
}

fn case(value: &serde_json::Value) -> Case {
    let name = value["name"].as_str().unwrap().to_owned();
    let start = |key: &str| value["start"][key].as_f64().unwrap();
    Case {
        settings: Site::load(&reference(&format!("{name}.site.toml"))).unwrap().settings,
        plan: std::fs::read(reference(&format!("{name}.plan.json"))).unwrap(),
        start: Pose::new(start("x_m"), start("y_m"), start("heading_rad")),
        ticks: value["ticks"].as_u64().unwrap(),
        name,
    }
}

/// A row, kept.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct Kept {
    pub(crate) t_s: f64,
    pub(crate) truth: Pose,
    pub(crate) error: Option<TrackingError>,
    pub(crate) record: TickRecord,
}

/// Keeps all rows.
#[derive(Default)]
pub(crate) struct Rows(pub(crate) Vec<Kept>);

impl Observer for Rows {
    fn row(&mut self, row: &Row<'_>) {
        self.0.push(Kept { t_s: row.t.seconds(), truth: row.truth, error: row.error, record: *row.record });
    }
}

/// A case's run as a log: from its start, for so many seconds.
pub(crate) fn write_log(case: &Case, seconds: Option<f64>, path: &Path) {
    let options = fieldbook::sim::Options { start: Some(case.start), seconds };
    let mut logging = Logging::new(fieldbook::log::LogWriter::replace(path).unwrap());
    fieldbook::sim::simulate(&case.settings, &case.plan, &options, &mut logging).unwrap();
    logging.finish().unwrap();
}
