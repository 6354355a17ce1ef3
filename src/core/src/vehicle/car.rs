//! Car: driven rear axle, steered front. The command is (speed of the rear axle's midpoint, steering angle of the
//! equivalent single front wheel): ω = v tan δ / L (textbook bicycle model without slip; axes as in ISO 8855).

use super::{Kind, Motion, Vehicle, Wheels, excess_of};
use crate::geometry::BodyVelocity;
use crate::keys::{Bound, Key, Values};
use crate::math;
use alloc::string::String;
use alloc::sync::Arc;
use trackhold_proto::message::WheelLayout;

/// Below this speed ω/v says nothing about where to steer: sensor noise alone would swing the wheels, m/s.
const REST_SPEED_M_S: f64 = 0.01;

pub(super) const KIND: Kind = Kind {
    name: "car",
    keys: &[
        Key::required("wheelbase_m", "m", Bound::positive(20.0), "distance between the axles"),
        Key::required("max_speed_m_s", "m/s", Bound::positive(30.0), "greatest speed, either way"),
        Key::required(
            "max_accel_m_s2",
            "m/s²",
            Bound::positive(50.0),
            "greatest acceleration and deceleration",
        ),
        Key::required(
            "max_steer_rad",
            "rad",
            Bound::positive(1.5),
            "greatest angle of the equivalent single front wheel, either way",
        ),
        Key::required("max_steer_rate_rad_s", "rad/s", Bound::positive(50.0), "greatest steering rate"),
    ],
    build: |values| Arc::new(Car::new(values)),
};

#[derive(Debug)]
struct Car {
    wheelbase_m: f64,
    max_speed_m_s: f64,
    max_accel_m_s2: f64,
    max_steer_rad: f64,
    max_steer_rate_rad_s: f64,
}

impl Car {
    fn new(values: &Values) -> Self {
        Self {
            wheelbase_m: values.get("wheelbase_m"),
            max_speed_m_s: values.get("max_speed_m_s"),
            max_accel_m_s2: values.get("max_accel_m_s2"),
            max_steer_rad: values.get("max_steer_rad"),
            max_steer_rate_rad_s: values.get("max_steer_rate_rad_s"),
        }
    }
}

impl Vehicle for Car {
    fn layout(&self) -> WheelLayout {
        WheelLayout::SpeedSteer
    }

    fn wheels(&self, velocity: BodyVelocity, rest_curvature_1_m: f64) -> Wheels {
        let curvature = if velocity.speed_m_s.abs() >= REST_SPEED_M_S {
            velocity.turn_rate_rad_s / velocity.speed_m_s
        } else {
            rest_curvature_1_m
        };
        let steer = math::atan(self.wheelbase_m * curvature);
        [velocity.speed_m_s, steer.clamp(-self.max_steer_rad, self.max_steer_rad), 0.0, 0.0]
    }

    fn body(&self, wheels: &Wheels) -> BodyVelocity {
        BodyVelocity {
            speed_m_s: wheels[0],
            turn_rate_rad_s: wheels[0] * math::tan(wheels[1]) / self.wheelbase_m,
        }
    }

    fn zero(&self, last: &Wheels) -> Wheels {
        [0.0, last[1], 0.0, 0.0]
    }

    fn speed_factor(&self, velocity: BodyVelocity) -> f64 {
        1.0 / (velocity.speed_m_s.abs() / self.max_speed_m_s).max(1.0)
    }

    fn largest_steps(&self, seconds: f64) -> Wheels {
        [self.max_accel_m_s2 * seconds, self.max_steer_rate_rad_s * seconds, 0.0, 0.0]
    }

    fn path_accel_m_s2(&self, _curvature_1_m: f64) -> f64 {
        self.max_accel_m_s2
    }

    fn pivot_accel_rad_s2(&self) -> Option<f64> {
        None
    }

    fn top_speed_m_s(&self) -> f64 {
        self.max_speed_m_s
    }

    fn top_turn_rate_rad_s(&self) -> f64 {
        self.max_speed_m_s * math::tan(self.max_steer_rad) / self.wheelbase_m
    }

    fn excess(&self, motion: Motion) -> Option<String> {
        let Motion::Along { speed_m_s, curvature_1_m } = motion else {
            return Some(String::from("turning on the spot: this machine steers and cannot do that"));
        };
        let steer = math::atan(self.wheelbase_m * curvature_1_m);
        excess_of("speed", speed_m_s, self.max_speed_m_s, "m/s")
            .or_else(|| excess_of("steering angle", steer, self.max_steer_rad, "rad"))
    }
}
