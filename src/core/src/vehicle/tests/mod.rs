//! Tests of the machines: conversions against outside values, the rule for limits, loads and bounds, the drive map.

mod bounds;
mod inputs;
mod limits;
mod values;
mod wiring;

use super::*;
use crate::math;

/// A machine of a kind, from its keys.
pub(super) fn build_from(kind: &str, pairs: &[(&str, f64)]) -> Result<Arc<dyn Vehicle>, Vec<Problem>> {
    let mut values = Values::default();
    for (key, value) in pairs {
        values.set(key, *value);
    }
    Ok(build(kind, &values)?.0)
}

pub(super) fn machine(kind: &str, pairs: &[(&str, f64)]) -> Arc<dyn Vehicle> {
    build_from(kind, pairs).unwrap_or_else(|problems| panic!("{problems:?}"))
}

/// The least that each kind needs.
pub(super) const DIFFERENTIAL: [(&str, f64); 4] = [
    ("wheel_radius_m", 0.1),
    ("track_width_m", 0.5),
    ("max_wheel_speed_rad_s", 10.0),
    ("max_wheel_accel_rad_s2", 20.0),
];
pub(super) const UNICYCLE: [(&str, f64); 4] = [
    ("max_speed_m_s", 1.0),
    ("max_turn_rate_rad_s", 2.0),
    ("max_accel_m_s2", 1.5),
    ("max_turn_accel_rad_s2", 3.0),
];
pub(super) const CAR: [(&str, f64); 5] = [
    ("wheelbase_m", 1.2),
    ("max_speed_m_s", 2.0),
    ("max_accel_m_s2", 1.0),
    ("max_steer_rad", 0.6),
    ("max_steer_rate_rad_s", 0.8),
];
pub(super) const STEERED_WHEEL: [(&str, f64); 5] = [
    ("wheelbase_m", 1.2),
    ("max_speed_m_s", 1.5),
    ("max_accel_m_s2", 0.8),
    ("max_steer_rad", 1.6),
    ("max_steer_rate_rad_s", 1.2),
];

/// The keys of a kind with some of them changed or added.
pub(super) fn with(keys: &[(&'static str, f64)], more: &[(&'static str, f64)]) -> Vec<(&'static str, f64)> {
    [keys, more].concat()
}

/// Machines of every kind, plain and with every option.
pub(super) fn machines() -> Vec<Arc<dyn Vehicle>> {
    let lateral = ("max_lateral_accel_m_s2", 0.7);
    let wheel_decel = ("max_wheel_decel_rad_s2", 35.0);
    let unequal = [
        ("left_wheel_radius_m", 0.1),
        ("right_wheel_radius_m", 0.11),
        ("track_width_m", 0.5),
        ("max_wheel_speed_rad_s", 10.0),
        ("max_wheel_accel_rad_s2", 20.0),
        wheel_decel,
        lateral,
    ];
    let skidding = [
        ("wheel_radius_m", 0.15),
        ("left_icr_m", 0.6),
        ("right_icr_m", 0.4),
        ("max_wheel_speed_rad_s", 9.0),
        ("max_wheel_accel_rad_s2", 12.0),
        wheel_decel,
    ];
    let decel = ("max_decel_m_s2", 1.7);
    vec![
        machine("differential", &DIFFERENTIAL),
        machine("differential", &unequal),
        machine("skid-steer", &DIFFERENTIAL),
        machine("skid-steer", &skidding),
        machine("unicycle", &UNICYCLE),
        machine("unicycle", &with(&UNICYCLE, &[decel, ("max_turn_decel_rad_s2", 2.0), lateral])),
        machine("car", &CAR),
        machine("car", &with(&CAR, &[("front_track_m", 0.8), decel, lateral])),
        machine("steered-wheel", &STEERED_WHEEL),
        machine("steered-wheel", &with(&STEERED_WHEEL, &[("max_steer_rad", 1.2), decel, lateral])),
        machine("differential", &with(&unequal, &[("swap_left_right", 1.0), ("left_gear_ratio", -12.5)])),
        machine(
            "car",
            &with(&CAR, &[("front_track_m", 0.8), ("swap_left_right", 1.0), ("steer_ratio", -3.1)]),
        ),
        machine("steered-wheel", &with(&STEERED_WHEEL, &[("speed_ratio", 7.7), ("steer_ratio", -1.0)])),
    ]
}
