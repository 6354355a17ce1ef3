//! The integral over the cross-track error: what it takes out, and when it stands still.

use super::*;

/// How far off the line a machine is that turns with a bias, after 40 m: a curvature (1/m) on top of what the law wants.
fn off_with_bias(name: &str, gains: &[(&str, f64)], bias_1_m: f64, speed_m_s: f64, limited: bool) -> f64 {
    let mut law = law_on("unicycle", name, gains);
    let (mut pose, seconds) = (Pose::new(0.0, 0.0, 0.0), 0.02);
    let steps = (40.0 / speed_m_s.abs() / seconds) as u32;
    for step in 0..steps {
        let reference = moving(Pose::new(speed_m_s * f64::from(step) * seconds, 0.0, 0.0), speed_m_s, 0.0);
        let ahead = Steady(reference);
        let input = Input::new(reference, &ahead, pose, ([0.0; 4], reference.velocity), seconds);
        let mut moved = law.control(&input).velocity;
        law.settle(&input, limited, seconds);
        moved.turn_rate_rad_s += bias_1_m * moved.speed_m_s;
        pose = pose.moved(moved, seconds);
    }
    pose.y_m
}

/// The laws that have such an integral.
fn with_integral() -> impl Iterator<Item = &'static Kind> {
    KINDS.iter().filter(|kind| kind.gains.iter().any(|gain| gain.name == "k_i" && gain.unit == "1/m³"))
}

#[test]
fn a_bias_of_the_curvature_leaves_an_offset_without_the_integral_and_none_with_it() {
    assert!(with_integral().count() >= 2);
    for kind in with_integral() {
        for speed in [0.5, -0.5] {
            let without = off_with_bias(kind.name, &[], 0.05, speed, false);
            assert!(without.abs() > 0.004, "{} at {speed}: {without}", kind.name);
            let with = off_with_bias(kind.name, &[("k_i", 1.0)], 0.05, speed, false);
            assert!(with.abs() < 1e-5, "{} at {speed}: {with}", kind.name);
        }
    }
}

#[test]
fn while_limited_nothing_is_integrated() {
    for kind in with_integral() {
        let without = off_with_bias(kind.name, &[], 0.05, 0.5, true);
        assert_eq!(off_with_bias(kind.name, &[("k_i", 1.0)], 0.05, 0.5, true), without, "{}", kind.name);
    }
}

#[test]
fn a_start_forgets_the_integral() {
    for kind in with_integral() {
        let mut law = law_on("unicycle", kind.name, &[("k_i", 1.0)]);
        let reference = moving(Pose::new(0.0, 0.0, 0.0), 0.5, 0.1);
        let pose = Pose::new(0.1, 0.2, -0.1);
        law.reset(reference.velocity);
        let fresh = ask(&mut *law, reference, pose);
        let ahead = Steady(reference);
        law.settle(&Input::new(reference, &ahead, pose, ([0.0; 4], reference.velocity), 0.02), false, 0.02);
        assert_ne!(ask(&mut *law, reference, pose), fresh, "{}", kind.name);
        law.reset(reference.velocity);
        assert_eq!(ask(&mut *law, reference, pose), fresh, "{}", kind.name);
    }
}

// Routh: λ³ + k_φ λ² + k_y λ + k_i is stable for k_i < k_y k_φ, with the defaults of kanayama 16 1/m³.
#[test]
fn a_gain_that_swings_up_is_refused_with_its_bound() {
    let mut values = Values::default();
    values.set("k_i", 16.0);
    let problems = build("kanayama", &values, &context("unicycle")).unwrap_err();
    assert_eq!(problems[0].key, "gains.k_i");
    assert!(problems[0].what.starts_with("16 1/m³ swings up with these gains; give less than 16 1/m³"));
    values.set("k_i", 15.9);
    assert!(build("kanayama", &values, &context("unicycle")).is_ok());
}
