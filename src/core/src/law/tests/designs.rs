//! Design keys: the raw gains that follow from damping, settling distance and bandwidth, and what is refused.

use super::*;
use alloc::string::{String, ToString};

fn values(given: &[(&str, f64)]) -> Values {
    let mut values = Values::default();
    given.iter().for_each(|(key, value)| values.set(key, *value));
    values
}

/// The gains of a law for the differential drive, whose top speed is 1.2 m/s.
fn asked(name: &str, given: &[(&str, f64)]) -> Result<Values, String> {
    gains(name, &values(given), &context("differential"))
        .map_err(|problems| problems.iter().map(ToString::to_string).collect::<Vec<_>>().join("; "))
}

#[track_caller]
fn assert_gains(name: &str, given: &[(&str, f64)], expected: &[(&str, f64)]) {
    let gains = asked(name, given).unwrap();
    for (gain, value) in expected {
        assert!((gains.get(gain) - value).abs() < 1e-12 * value.abs().max(1.0), "{name}: {gains:?}");
    }
    assert!(design::KEYS.iter().all(|key| gains.find(key.name).is_none()), "raw gains only: {gains:?}");
}

// Textbook: settled after 4/(ζ a_m); per metre, k_y = a_m² and k_heading = 2ζ a_m.
#[test]
fn settling_distance_and_damping_give_each_laws_own_gains() {
    let given = &[("settling_distance_m", 2.0), ("damping", 0.5)];
    assert_gains("kanayama", given, &[("k_x", 4.0 * 0.6), ("k_y", 16.0), ("k_heading", 4.0)]);
    assert_gains("samson", given, &[("k_1", 4.0), ("k_2", 16.0), ("k_3", 4.0)]);
    let given = &[("settling_distance_m", 2.0), ("design_speed_m_s", 1.0)];
    assert_gains("off-axle", given, &[("k_p", 2.0), ("k_i", 0.0)]);
}

#[test]
fn bandwidth_counts_at_the_design_speed_which_is_half_the_top_speed_if_not_given() {
    assert_gains("kanayama", &[("bandwidth_rad_s", 1.2), ("damping", 1.0)], &[("k_y", 4.0), ("k_x", 1.2)]);
    let given = &[("bandwidth_rad_s", 1.2), ("design_speed_m_s", 1.2)];
    assert_gains("kanayama", given, &[("k_y", 1.0), ("k_heading", 1.6), ("k_x", 1.2)]);
}

#[test]
fn a_design_gives_the_bandwidth_that_was_asked_for() {
    for kind in KINDS.iter().filter(|kind| kind.design.is_some()) {
        let machine = if kind.machines == Machines::Steered { "car" } else { "differential" };
        let context = context(machine);
        let speed = 0.5 * context.vehicle.top_speed_m_s();
        let (law, _) = build(kind.name, &values(&[("bandwidth_rad_s", 1.1)]), &context).unwrap();
        assert!((law.bandwidth_rad_s(speed) - 1.1).abs() < 1e-9, "{}", kind.name);
    }
}

/// The error of a law on a straight line, across the path, after the settling distance that its gains were made for.
fn left_after(name: &str, settling_m: f64) -> f64 {
    let mut law = law_on("unicycle", name, &[("settling_distance_m", settling_m), ("damping", 0.7)]);
    let speed = 0.5;
    let mut pose = Pose::new(0.0, 0.01, 0.0);
    for step in 0..(settling_m / speed / 0.001) as u32 {
        let reference = moving(Pose::new(speed * f64::from(step) * 0.001, 0.0, 0.0), speed, 0.0);
        pose = pose.moved(ask(&mut *law, reference, pose).velocity, 0.001);
    }
    pose.y_m / 0.01
}

#[test]
fn the_error_has_settled_after_the_settling_distance() {
    for name in ["kanayama", "samson"] {
        let left = left_after(name, 3.0);
        // Textbook: the envelope is e^(−ζas)/√(1 − ζ²), here 0.0257 at ζas = 4.
        assert!(left.abs() < 0.0257, "{name}: {left} of it is left");
    }
}

#[test]
fn what_excludes_each_other_is_refused_by_name() {
    for (name, given, said) in [
        (
            "kanayama",
            &[("settling_distance_m", 2.0), ("k_y", 4.0)][..],
            "gains.k_y: given together with settling_distance_m, which determines it; give one of the two",
        ),
        (
            "kanayama",
            &[("settling_distance_m", 2.0), ("bandwidth_rad_s", 2.0)],
            "gains.bandwidth_rad_s: given together with settling_distance_m, which determines the same gains; \
             give one of the two",
        ),
        (
            "samson",
            &[("damping", 0.7)],
            "gains.damping: determines nothing by itself; give settling_distance_m or bandwidth_rad_s with it",
        ),
        (
            "off-axle",
            &[("bandwidth_rad_s", 1.0), ("damping", 0.7)],
            "gains.damping: the damping of off-axle cannot be chosen; leave it out",
        ),
    ] {
        assert_eq!(asked(name, given).unwrap_err(), said);
        assert!(check(name, &values(given)).is_err(), "told without a machine as well");
    }
}

#[test]
fn what_asks_for_too_much_names_the_key_the_raw_gain_and_its_bound() {
    for (given, said) in [
        (
            &[("settling_distance_m", 0.1), ("damping", 1.0)][..],
            "gains.settling_distance_m: 0.1 m asks for k_y = 1600 1/m², which is not greater than 0 and at most 1000 1/m²",
        ),
        (
            &[("bandwidth_rad_s", 40.0), ("damping", 1.0), ("design_speed_m_s", 1.0)],
            "gains.bandwidth_rad_s: 40 rad/s asks for k_y = 1600 1/m², which is not greater than 0 and at most 1000 1/m²",
        ),
        (
            &[("bandwidth_rad_s", 1.0), ("design_speed_m_s", 1.5)],
            "gains.design_speed_m_s: 1.5 m/s is more than the machine's top speed, 1.2 m/s; give at most that",
        ),
        (&[("damping", 3.0)], "gains.damping: 3 is not at least 0.1 and at most 2"),
    ] {
        assert!(
            asked("kanayama", given).unwrap_err().contains(said),
            "{}",
            asked("kanayama", given).unwrap_err()
        );
    }
}

#[test]
fn changes_keep_what_they_do_not_determine() {
    let raw = values(&[("x_p_m", 0.4), ("k_p", 2.0), ("k_i", 0.3)]);
    let whole = changed("off-axle", &raw, &values(&[("bandwidth_rad_s", 1.0)])).unwrap();
    assert_eq!((whole.find("x_p_m"), whole.find("k_i"), whole.find("k_p")), (Some(0.4), Some(0.3), None));
    let whole = changed("off-axle", &raw, &values(&[("k_p", 1.0)])).unwrap();
    assert_eq!((whole.get("x_p_m"), whole.get("k_p")), (0.4, 1.0));
}
