//! Machines for this crate's tests.

use std::sync::Arc;
use trackhold_core::keys::Values;
use trackhold_core::vehicle::{self, Vehicle};

fn build(kind: &str, given: &[(&str, f64)]) -> Arc<dyn Vehicle> {
    let mut values = Values::default();
    for (key, value) in given {
        values.set(key, *value);
    }
    vehicle::build(kind, &values).unwrap().0
}

/// Wheel radius 0.1 m, track 0.5 m.
pub(crate) fn differential() -> Arc<dyn Vehicle> {
    let limits = [("max_wheel_speed_rad_s", 20.0), ("max_wheel_accel_rad_s2", 40.0)];
    build("differential", &[&[("wheel_radius_m", 0.1), ("track_width_m", 0.5)], &limits[..]].concat())
}

/// 2 m/s and 2 rad/s at most.
pub(crate) fn unicycle() -> Arc<dyn Vehicle> {
    let speeds = [("max_speed_m_s", 2.0), ("max_turn_rate_rad_s", 2.0)];
    build("unicycle", &[&speeds[..], &[("max_accel_m_s2", 2.0), ("max_turn_accel_rad_s2", 4.0)]].concat())
}

/// Wheelbase 1.2 m, 3 m/s and 0.6 rad at most.
pub(crate) fn car() -> Arc<dyn Vehicle> {
    let limits = [("max_accel_m_s2", 1.0), ("max_steer_rad", 0.6), ("max_steer_rate_rad_s", 1.0)];
    build("car", &[&[("wheelbase_m", 1.2), ("max_speed_m_s", 3.0)], &limits[..]].concat())
}

/// The car with an angle for each front wheel, 0.8 m apart.
pub(crate) fn front_steered() -> Arc<dyn Vehicle> {
    let limits = [("max_accel_m_s2", 1.0), ("max_steer_rad", 0.6), ("max_steer_rate_rad_s", 1.0)];
    let axles = [("wheelbase_m", 1.2), ("front_track_m", 0.8), ("max_speed_m_s", 3.0)];
    build("car", &[&axles[..], &limits[..]].concat())
}

/// A steered wheel 1.2 m ahead of the axle, 1.5 m/s and 1.6 rad at most.
pub(crate) fn steered_wheel() -> Arc<dyn Vehicle> {
    let limits = [("max_accel_m_s2", 1.0), ("max_steer_rad", 1.6), ("max_steer_rate_rad_s", 1.0)];
    build("steered-wheel", &[&[("wheelbase_m", 1.2), ("max_speed_m_s", 1.5)], &limits[..]].concat())
}

/// The differential machine, geared, its wires crossed and its right motor turned round.
pub(crate) fn crossed() -> Arc<dyn Vehicle> {
    let limits = [("max_wheel_speed_rad_s", 20.0), ("max_wheel_accel_rad_s2", 40.0)];
    let map = [("swap_left_right", 1.0), ("left_gear_ratio", 20.0), ("right_gear_ratio", -30.0)];
    build("differential", &[&[("wheel_radius_m", 0.1), ("track_width_m", 0.5)], &limits[..], &map].concat())
}
