//! Laws against values from outside, and what every law must keep.

use super::testing::{ask, context, law_on, moving};
use super::*;
use crate::geometry::{Pose, TrackingError};
use crate::plan::Reference;

/// The state in which `tests/reference/zoh/check_values.json` (SciPy) gives each law's result: robot-frame error
/// (0.10 m, −0.05 m, 0.20 rad), reference speed 0.5 m/s, turn rate 0.2 rad/s.
fn check_state() -> (Reference, Pose) {
    (moving(Pose::new(0.10, -0.05, 0.20), 0.5, 0.2), Pose::new(0.0, 0.0, 0.0))
}

/// A law on a differential drive.
fn law(name: &str, gains: &[(&str, f64)]) -> Box<dyn Law> {
    law_on("differential", name, gains)
}

fn assert_close(wanted: Wanted, speed_m_s: f64, turn_rate_rad_s: f64) {
    let velocity = wanted.velocity;
    assert!((velocity.speed_m_s - speed_m_s).abs() < 1e-9, "{velocity:?}");
    assert!((velocity.turn_rate_rad_s - turn_rate_rad_s).abs() < 1e-9, "{velocity:?}");
}

#[test]
fn kanayama_check_value() {
    let mut law = law("kanayama", &[("k_x", 10.0), ("k_y", 64.0), ("k_heading", 16.0)]);
    let (reference, pose) = check_state();
    assert_close(ask(&mut *law, reference, pose), 1.490_033_288_920_621, 0.189_354_646_360_489_74);
}

#[test]
fn samson_check_value() {
    let (reference, pose) = check_state();
    let error = TrackingError::between(pose, reference.pose, reference.direction);
    assert!((error.along_m + 0.088_073_191_244).abs() < 1e-11);
    assert!((error.cross_m - 0.068_870_261_971_6).abs() < 1e-11);
    let mut law = law("samson", &[("k_1", 1.0), ("k_2", 1.0), ("k_3", 1.0)]);
    assert_close(ask(&mut *law, reference, pose), 0.562_223_990_395_392_7, 0.264_278_592_097_077_66);
}

#[test]
fn off_axle_check_value() {
    // Input–output linearisation of a point 0.1 m ahead: heading 0.3, its wanted velocity (0.4, 0.1) in the site
    // frame. A reference at rest with the point 1 m away along that vector and k_p = 1 asks for just that.
    let pose = Pose::new(0.0, 0.0, 0.3);
    let reference = Reference::at_rest(Pose::new(0.4, 0.1, 0.3), 0.0);
    let mut law = law("off-axle", &[("x_p_m", 0.1), ("y_p_m", 0.0), ("k_p", 1.0)]);
    assert_close(ask(&mut *law, reference, pose), 0.411_686_616_316_376_4, -0.226_744_337_519_752_3);
}

#[test]
fn every_law_follows_a_perfect_reference_exactly() {
    let (reference, _) = check_state();
    for kind in KINDS {
        let machine = if kind.machines == Machines::Steered { "car" } else { "differential" };
        let mut law = law_on(machine, kind.name, &[]);
        law.reset(reference.velocity);
        assert_close(ask(&mut *law, reference, reference.pose), 0.5, 0.2);
    }
}

#[test]
fn kanayama_and_samson_steer_back_to_a_line_in_reverse_too() {
    for name in ["kanayama", "samson"] {
        for speed in [0.5, -0.5] {
            let mut law = law(name, &[]);
            let mut pose = Pose::new(0.0, 0.3, 0.2);
            for step in 0..1500 {
                let along = speed * f64::from(step) * 0.02;
                let reference = moving(Pose::new(along, 0.0, 0.0), speed, 0.0);
                pose = pose.moved(ask(&mut *law, reference, pose).velocity, 0.02);
            }
            assert!(pose.y_m.abs() < 1e-3 && pose.heading_rad.abs() < 1e-3, "{name} at {speed}: {pose:?}");
        }
    }
}

#[test]
fn unknown_laws_and_gains_are_refused_by_name() {
    let mut values = Values::default();
    values.set("k_z", 1.0);
    let problems = build("kanayama", &values, &context("unicycle")).unwrap_err();
    assert_eq!(problems[0].key, "gains.k_z");
    let problems = build("no-such", &Values::default(), &context("unicycle")).unwrap_err();
    assert!(problems[0].what.contains("kanayama, samson, off-axle, predictive"));
}
