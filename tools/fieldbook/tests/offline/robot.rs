//! Simulated runs with a stand-in robot.

use crate::common::{Rows, case_named};
use fieldbook::sim::{self, Options, SimError};
use simrobot::RobotSpec;
use trackhold_core::digest::ResultDigest;
use trackhold_core::geometry::Pose;
use trackhold_proto::words::{Cause, Mode, Refusal};

fn robot(text: &str) -> RobotSpec {
    RobotSpec::parse(text, "robot.toml").unwrap()
}

#[test]
fn a_stand_in_without_faults_is_the_ideal_robot() {
    for (name, rate_hz) in [("kanayama-differential", 100), ("samson-car", 100), ("kanayama-unicycle", 50)] {
        let case = case_named(name);
        let options = Options { start: Some(case.start), seconds: None };
        let mut ideal = (Rows::default(), ResultDigest::default());
        let mut stand_in = (Rows::default(), ResultDigest::default());
        sim::simulate(&case.settings, &case.plan, &options, &mut ideal).unwrap();
        let spec = robot(&format!("[sensor]\nrate_hz = {rate_hz}"));
        sim::robot::simulate(&case.settings, &case.plan, &options, &spec, &mut stand_in).unwrap();
        assert_eq!(ideal.0.0.len(), stand_in.0.0.len(), "{name}");
        for (ideal, stand_in) in ideal.0.0.iter().zip(&stand_in.0.0) {
            // Not the same bits: the stand-in's true body velocity is computed from its wheels.
            assert!(ideal.truth.distance_to(stand_in.truth) < 1e-9, "{name} at {} s", ideal.t_s);
        }
    }
}

#[test]
fn noise_is_seen_by_the_node_and_not_by_the_statistics() {
    let case = case_named("kanayama-unicycle");
    let options = Options { start: None, seconds: Some(5.0) };
    let spec = robot("seed = 3\n[sensor]\nrate_hz = 50\nposition_sd_m = 0.05\nlatency_s = 0.03");
    let mut rows = Rows::default();
    sim::robot::simulate(&case.settings, &case.plan, &options, &spec, &mut rows).unwrap();
    let mut seen_off = 0.0_f64;
    for row in &rows.0 {
        let error = row.error.unwrap();
        seen_off = seen_off.max((row.record.cross_error_m - error.cross_m).abs());
    }
    assert!(seen_off > 0.03, "the node saw errors of up to {seen_off} m that are none");
    assert!(rows.0[100].record.pose_age_ns >= 30_000_000, "the latency shows as age");
    assert!(rows.0.iter().all(|row| row.t_s <= 5.0) && rows.0.last().unwrap().t_s == 5.0);
}

#[test]
fn an_outage_ends_in_a_protective_stop() {
    let case = case_named("kanayama-unicycle");
    let spec = robot("[sensor]\nrate_hz = 50\noutage_start_s = 3\noutage_length_s = 2");
    let mut rows = Rows::default();
    let outcome =
        sim::robot::simulate(&case.settings, &case.plan, &Options::default(), &spec, &mut rows).unwrap();
    assert_eq!((outcome.mode, outcome.cause), (Mode::ProtectiveStop, Cause::StalePose));
    assert!(rows.0.last().unwrap().error.is_none(), "without a fresh pose there is no reference");
    let last_pose_s = 3.0 - 1.0 / 50.0;
    let timeout_s = case.settings.node.get("pose_timeout_s");
    let stopped_s = outcome.duration.seconds();
    assert!(
        (last_pose_s + timeout_s..=last_pose_s + timeout_s + 2.0 / 50.0).contains(&stopped_s),
        "{stopped_s}"
    );
}

#[test]
fn a_robot_that_does_not_fit_and_one_without_poses_are_refused() {
    let case = case_named("kanayama-unicycle");
    let run = |text: &str| {
        sim::robot::simulate(&case.settings, &case.plan, &Options::default(), &robot(text), &mut ())
            .unwrap_err()
    };
    assert!(matches!(run("[drive]\nsteer_lag_s = 0.1"), SimError::Robot(_)));
    assert_eq!(run("[sensor]\ndropout_probability = 1"), SimError::Start(Refusal::NoPose));
}

#[test]
fn a_row_holds_the_true_pose_of_the_moment_that_its_reference_means() {
    let case = case_named("kanayama-unicycle");
    let mut settings = case.settings.clone();
    settings.node.set("dead_time_s", 0.1);
    let spec = robot("[drive]\ndead_time_s = 0.1\n[sensor]\nrate_hz = 50");
    let mut rows = Rows::default();
    let options = Options { start: None, seconds: Some(8.0) };
    let outcome = sim::robot::simulate(&settings, &case.plan, &options, &spec, &mut rows).unwrap();
    assert_eq!(rows.0.len() as u64, outcome.ticks, "also the ticks whose command acts after the last one");
    assert_eq!(rows.0.last().unwrap().truth, outcome.truth);
    for (index, row) in rows.0.iter().enumerate().skip(200) {
        // The machine does what the node reckons with, so that it is where the node took it to be, and near the reference.
        let seen = Pose::new(row.record.x_m, row.record.y_m, row.record.heading_rad);
        assert!(row.truth.distance_to(seen) < 1e-6, "at {} s: {:?} {seen:?}", row.t_s, row.truth);
        assert!((row.t_s - index as f64 / 50.0).abs() < 1e-9);
        let error = row.error.unwrap();
        let (off_m, late_m) = (error.along_m.hypot(error.cross_m), 0.1 * row.record.ref_speed_m_s);
        assert!(off_m < 0.1 * late_m, "at {} s: {off_m} m, the dead time is {late_m} m of way", row.t_s);
    }
}
