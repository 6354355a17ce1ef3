//! Differential drive: two driven wheels on one axle. The command is (left, right) wheel speed in rad/s.
//!
//! v = r (ω_R + ω_L)/2, ω = r (ω_R − ω_L)/W (textbook kinematics of two wheels that roll without slip).

use super::{Kind, Motion, Vehicle, Wheels, excess_of};
use crate::geometry::BodyVelocity;
use crate::keys::{Bound, Key, Values};
use alloc::string::String;
use alloc::sync::Arc;
use trackhold_proto::message::WheelLayout;

pub(super) const KIND: Kind = Kind {
    name: "differential",
    keys: &[
        Key::required("wheel_radius_m", "m", Bound::positive(2.0), "rolling radius of the driven wheels"),
        Key::required(
            "track_width_m",
            "m",
            Bound::positive(5.0),
            "distance between the wheels' contact points",
        ),
        Key::required(
            "max_wheel_speed_rad_s",
            "rad/s",
            Bound::positive(1000.0),
            "greatest wheel speed, either way",
        ),
        Key::required(
            "max_wheel_accel_rad_s2",
            "rad/s²",
            Bound::positive(10_000.0),
            "greatest wheel acceleration and deceleration",
        ),
    ],
    build: |values| Arc::new(Differential::new(values)),
};

#[derive(Debug)]
struct Differential {
    wheel_radius_m: f64,
    half_track_m: f64,
    max_wheel_speed_rad_s: f64,
    max_wheel_accel_rad_s2: f64,
}

impl Differential {
    fn new(values: &Values) -> Self {
        Self {
            wheel_radius_m: values.get("wheel_radius_m"),
            half_track_m: 0.5 * values.get("track_width_m"),
            max_wheel_speed_rad_s: values.get("max_wheel_speed_rad_s"),
            max_wheel_accel_rad_s2: values.get("max_wheel_accel_rad_s2"),
        }
    }
}

impl Vehicle for Differential {
    fn layout(&self) -> WheelLayout {
        WheelLayout::LeftRight
    }

    fn wheels(&self, velocity: BodyVelocity, _rest_curvature_1_m: f64) -> Wheels {
        let turning = velocity.turn_rate_rad_s * self.half_track_m;
        let left = (velocity.speed_m_s - turning) / self.wheel_radius_m;
        let right = (velocity.speed_m_s + turning) / self.wheel_radius_m;
        [left, right, 0.0, 0.0]
    }

    fn body(&self, wheels: &Wheels) -> BodyVelocity {
        BodyVelocity {
            speed_m_s: 0.5 * self.wheel_radius_m * (wheels[1] + wheels[0]),
            turn_rate_rad_s: 0.5 * self.wheel_radius_m * (wheels[1] - wheels[0]) / self.half_track_m,
        }
    }

    fn zero(&self, _last: &Wheels) -> Wheels {
        [0.0; 4]
    }

    fn speed_factor(&self, velocity: BodyVelocity) -> f64 {
        // The faster wheel's rim speed is |v| + |ω| W/2.
        let rim = velocity.speed_m_s.abs() + velocity.turn_rate_rad_s.abs() * self.half_track_m;
        1.0 / (rim / (self.wheel_radius_m * self.max_wheel_speed_rad_s)).max(1.0)
    }

    fn largest_steps(&self, seconds: f64) -> Wheels {
        let step = self.max_wheel_accel_rad_s2 * seconds;
        [step, step, 0.0, 0.0]
    }

    fn path_accel_m_s2(&self, curvature_1_m: f64) -> f64 {
        self.wheel_radius_m * self.max_wheel_accel_rad_s2 / (1.0 + curvature_1_m.abs() * self.half_track_m)
    }

    fn pivot_accel_rad_s2(&self) -> Option<f64> {
        Some(self.wheel_radius_m * self.max_wheel_accel_rad_s2 / self.half_track_m)
    }

    fn top_speed_m_s(&self) -> f64 {
        self.wheel_radius_m * self.max_wheel_speed_rad_s
    }

    fn top_turn_rate_rad_s(&self) -> f64 {
        self.wheel_radius_m * self.max_wheel_speed_rad_s / self.half_track_m
    }

    fn excess(&self, motion: Motion) -> Option<String> {
        let rim = match motion {
            Motion::Along { speed_m_s, curvature_1_m } => {
                speed_m_s.abs() * (1.0 + curvature_1_m.abs() * self.half_track_m)
            }
            Motion::Pivot { turn_rate_rad_s } => turn_rate_rad_s * self.half_track_m,
        };
        excess_of("speed of the faster wheel", rim / self.wheel_radius_m, self.max_wheel_speed_rad_s, "rad/s")
    }
}
