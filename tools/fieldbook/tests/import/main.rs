//! Tests of `fieldbook import`: files that are read, files that are refused, and the paths that come out.

mod bad;
mod good;
mod order;
mod plane;

use clap::Parser as _;
use fieldbook::cli::{Cli, Command};
use fieldbook::import::finish::Finished;
use fieldbook::import::track::Refused;
use std::path::PathBuf;
use trackhold_core::geometry::Pose;

/// A file of this test's own data.
pub(crate) fn data(name: &str) -> PathBuf {
    [env!("CARGO_MANIFEST_DIR"), "tests", "import", name].iter().collect()
}

/// A file in the repository.
pub(crate) fn in_repository(name: &str) -> PathBuf {
    [env!("CARGO_MANIFEST_DIR"), "..", "..", name].iter().collect()
}

/// Imports without writing: the source, the file and the options as on the command line.
pub(crate) fn make(source: &str, file: &std::path::Path, options: &[&str]) -> Result<Finished, Refused> {
    let file = file.to_str().unwrap();
    let words = ["fieldbook", "import", source, file, "--out", "unused.json"];
    let cli = Cli::try_parse_from(words.iter().chain(options)).unwrap_or_else(|error| panic!("{error}"));
    let Command::Import(args) = cli.command else { panic!("not an import") };
    fieldbook::import::make(&args).unwrap_or_else(|error| panic!("{error:#}"))
}

/// A good file, imported.
pub(crate) fn good(source: &str, name: &str, options: &[&str]) -> Finished {
    make(source, &data("good").join(name), options).unwrap_or_else(|refused| panic!("{name}: {refused}"))
}

/// The plan file as a value.
pub(crate) fn json(finished: &Finished) -> serde_json::Value {
    serde_json::from_str(&finished.json).unwrap()
}

/// Segment kinds, with a minus where it is driven in reverse: `line`, `-spline`.
pub(crate) fn kinds(finished: &Finished) -> Vec<String> {
    let plan = json(finished);
    let name = |segment: &serde_json::Value| {
        let sign = if segment["reverse"] == true { "-" } else { "" };
        format!("{sign}{}", segment["kind"].as_str().unwrap())
    };
    plan["segments"].as_array().unwrap().iter().map(name).collect()
}

/// The reference's poses at evenly spaced times, both ends included.
pub(crate) fn poses(finished: &Finished, count: usize) -> Vec<Pose> {
    let plan = &finished.plan;
    let time = |index: usize| plan.duration_s() * index as f64 / (count - 1) as f64;
    (0..count).map(|index| plan.at(time(index), &mut 0).pose).collect()
}

#[track_caller]
pub(crate) fn assert_pose(pose: Pose, expected: (f64, f64, f64), within: f64) {
    let turn = trackhold_core::math::wrap(pose.heading_rad - expected.2);
    let off = [pose.x_m - expected.0, pose.y_m - expected.1, turn];
    assert!(off.iter().all(|off| off.abs() <= within), "{pose:?} for {expected:?}");
}
