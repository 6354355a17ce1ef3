//! Unicycle: a machine whose own controller takes the body velocity. The command is (v, ω).

use super::{Kind, Motion, Vehicle, Wheels, excess_of};
use crate::geometry::BodyVelocity;
use crate::keys::{Bound, Key, Values};
use alloc::string::String;
use alloc::sync::Arc;
use trackhold_proto::message::WheelLayout;

pub(super) const KIND: Kind = Kind {
    name: "unicycle",
    keys: &[
        Key::required("max_speed_m_s", "m/s", Bound::positive(30.0), "greatest speed, either way"),
        Key::required(
            "max_turn_rate_rad_s",
            "rad/s",
            Bound::positive(30.0),
            "greatest turn rate, either way",
        ),
        Key::required(
            "max_accel_m_s2",
            "m/s²",
            Bound::positive(50.0),
            "greatest acceleration and deceleration",
        ),
        Key::required(
            "max_turn_accel_rad_s2",
            "rad/s²",
            Bound::positive(200.0),
            "greatest turn acceleration and deceleration",
        ),
    ],
    build: |values| Arc::new(Unicycle::new(values)),
};

#[derive(Debug)]
struct Unicycle {
    max_speed_m_s: f64,
    max_turn_rate_rad_s: f64,
    max_accel_m_s2: f64,
    max_turn_accel_rad_s2: f64,
}

impl Unicycle {
    fn new(values: &Values) -> Self {
        Self {
            max_speed_m_s: values.get("max_speed_m_s"),
            max_turn_rate_rad_s: values.get("max_turn_rate_rad_s"),
            max_accel_m_s2: values.get("max_accel_m_s2"),
            max_turn_accel_rad_s2: values.get("max_turn_accel_rad_s2"),
        }
    }
}

impl Vehicle for Unicycle {
    fn layout(&self) -> WheelLayout {
        WheelLayout::Body
    }

    fn wheels(&self, velocity: BodyVelocity, _rest_curvature_1_m: f64) -> Wheels {
        [velocity.speed_m_s, velocity.turn_rate_rad_s, 0.0, 0.0]
    }

    fn body(&self, wheels: &Wheels) -> BodyVelocity {
        BodyVelocity { speed_m_s: wheels[0], turn_rate_rad_s: wheels[1] }
    }

    fn zero(&self, _last: &Wheels) -> Wheels {
        [0.0; 4]
    }

    fn speed_factor(&self, velocity: BodyVelocity) -> f64 {
        let over_speed = velocity.speed_m_s.abs() / self.max_speed_m_s;
        let over_turn = velocity.turn_rate_rad_s.abs() / self.max_turn_rate_rad_s;
        1.0 / over_speed.max(over_turn).max(1.0)
    }

    fn largest_steps(&self, seconds: f64) -> Wheels {
        [self.max_accel_m_s2 * seconds, self.max_turn_accel_rad_s2 * seconds, 0.0, 0.0]
    }

    fn path_accel_m_s2(&self, curvature_1_m: f64) -> f64 {
        let curvature = curvature_1_m.abs();
        if curvature * self.max_accel_m_s2 > self.max_turn_accel_rad_s2 {
            self.max_turn_accel_rad_s2 / curvature
        } else {
            self.max_accel_m_s2
        }
    }

    fn pivot_accel_rad_s2(&self) -> Option<f64> {
        Some(self.max_turn_accel_rad_s2)
    }

    fn top_speed_m_s(&self) -> f64 {
        self.max_speed_m_s
    }

    fn top_turn_rate_rad_s(&self) -> f64 {
        self.max_turn_rate_rad_s
    }

    fn excess(&self, motion: Motion) -> Option<String> {
        let (speed, turn_rate) = match motion {
            Motion::Along { speed_m_s, curvature_1_m } => (speed_m_s, speed_m_s * curvature_1_m),
            Motion::Pivot { turn_rate_rad_s } => (0.0, turn_rate_rad_s),
        };
        excess_of("speed", speed, self.max_speed_m_s, "m/s")
            .or_else(|| excess_of("turn rate", turn_rate, self.max_turn_rate_rad_s, "rad/s"))
    }
}
