//! Steered machines that rest where the steering has to swing: the wheels turn meanwhile, and the plan is met.

use crate::common::{Rows, scratch};
use fieldbook::sim::{Options, simulate};
use std::path::{Path, PathBuf};
use std::process::Command;
use trackhold::site::Site;
use trackhold_core::plan::compile;
use trackhold_proto::words::Cause;

/// A tenth of a degree, rad.
const TENTH_OF_A_DEGREE: f64 = 0.1 * std::f64::consts::PI / 180.0;

fn plans(name: &str) -> PathBuf {
    Path::new(concat!(env!("CARGO_MANIFEST_DIR"), "/../../tests/plans")).join(name)
}

/// Drives a plan on an ideal robot: the distance and the angle to the plan's end, and the greatest distance and angle on
/// the way.
fn drive(site: &str, plan: &Path) -> [f64; 4] {
    let settings = Site::load(&plans(&format!("sites/{site}.toml"))).unwrap().settings;
    let raw = std::fs::read(plan).unwrap();
    let mut rows = Rows::default();
    let outcome = simulate(&settings, &raw, &Options::default(), &mut rows).unwrap();
    assert_eq!(outcome.cause, Cause::PlanEnded, "{}", plan.display());
    let vehicle = Site::load(&plans(&format!("sites/{site}.toml"))).unwrap().checked().unwrap().vehicle;
    let compiled = compile(&raw, &*vehicle).unwrap();
    let end = compiled.at(compiled.duration_s(), &mut 0).pose;
    let turn = trackhold_core::math::wrap(outcome.truth.heading_rad - end.heading_rad);
    let errors = || rows.0.iter().filter_map(|row| row.error);
    let farthest = errors().map(|error| error.along_m.hypot(error.cross_m)).fold(0.0, f64::max);
    let widest = errors().map(|error| error.heading_rad.abs()).fold(0.0, f64::max);
    [outcome.truth.distance_to(end), turn.abs(), farthest, widest]
}

#[test]
fn a_steered_wheel_pivots_between_rests_and_ends_within_millimetres_and_a_tenth_of_a_degree() {
    let [end_m, end_rad, farthest_m, widest_rad] =
        drive("steered-wheel", &plans("good/steered-wheel-pivots.json"));
    assert!(end_m < 0.004 && end_rad < TENTH_OF_A_DEGREE, "{end_m} {end_rad}");
    // One tick of the turn rate is 0.008 rad.
    assert!(farthest_m < 0.005 && widest_rad < 0.008, "{farthest_m} {widest_rad}");
}

#[test]
fn a_car_steers_at_its_rests_and_ends_within_millimetres_and_a_tenth_of_a_degree() {
    let [end_m, end_rad, farthest_m, widest_rad] = drive("car", &plans("good/car-dwells-at-steps.json"));
    assert!(end_m < 0.004 && end_rad < TENTH_OF_A_DEGREE, "{end_m} {end_rad}");
    assert!(farthest_m < 0.015 && widest_rad < 0.008, "{farthest_m} {widest_rad}");
}

#[test]
fn retime_mends_plans_that_do_not_wait_for_the_steering() {
    for (site, plan) in [
        ("steered-wheel", "broken/steered-wheel-pivots-at-once.json"),
        ("car", "broken/car-drives-off-unsteered.json"),
    ] {
        let out = scratch(&format!("mended-{site}.json"));
        let output = Command::new(env!("CARGO_BIN_EXE_fieldbook"))
            .args(["retime", "--site"])
            .arg(plans(&format!("sites/{site}.toml")))
            .arg("--plan")
            .arg(plans(plan))
            .args(["--reserve", "0.4", "--out"])
            .arg(&out)
            .output()
            .unwrap();
        assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
        let [end_m, end_rad, farthest_m, widest_rad] = drive(site, &out);
        assert!(end_m < 0.004 && end_rad < TENTH_OF_A_DEGREE, "{site}: {end_m} {end_rad}");
        assert!(farthest_m < 0.02 && widest_rad < 0.02, "{site}: {farthest_m} {widest_rad}");
    }
}
