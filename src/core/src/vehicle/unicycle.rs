//! Unicycle: a machine whose own controller takes the body velocity. The command is (v, ω).

use super::common::{self, MAX_ACCEL, MAX_DECEL, MAX_JERK, MAX_LATERAL, Margins};
use super::load::{Demands, Number, Quantity, Range};
use super::wiring::{SPEED_RATIO, TURN_RATIO};
use super::{InputMap, Inputs, Kind, Vehicle, Wheels};
use crate::geometry::BodyVelocity;
use crate::keys::{Bound, Key, Values};
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
        MAX_ACCEL,
        MAX_DECEL,
        Key::required(
            "max_turn_accel_rad_s2",
            "rad/s²",
            Bound::positive(200.0),
            "greatest turn acceleration, and deceleration unless that is given",
        ),
        Key::optional(
            "max_turn_decel_rad_s2",
            "rad/s²",
            Bound::positive(200.0),
            "greatest turn deceleration; as the turn acceleration if not given",
        ),
        MAX_LATERAL,
        MAX_JERK,
        SPEED_RATIO,
        TURN_RATIO,
    ],
    build: |values| Ok(Arc::new(Unicycle::new(values))),
};

#[derive(Debug)]
struct Unicycle {
    speed: Range,
    turn: Range,
    margins: Margins,
}

impl Unicycle {
    fn new(values: &Values) -> Self {
        let turn_accel = values.get("max_turn_accel_rad_s2");
        Self {
            speed: common::speed_range(values, "max_speed_m_s"),
            turn: Range {
                top: values.get("max_turn_rate_rad_s"),
                rise: turn_accel,
                fall: values.find("max_turn_decel_rad_s2").unwrap_or(turn_accel),
            },
            margins: Margins::new(values),
        }
    }

    fn turning(&self, factor: f64, factor_rate: f64) -> Option<Number> {
        Some(Number { quantity: Quantity::Turn, factor, factor_rate, range: self.turn })
    }
}

impl Vehicle for Unicycle {
    fn layout(&self) -> WheelLayout {
        WheelLayout::Body
    }

    fn wheels(&self, velocity: BodyVelocity, _rest_curvature_1_m: f64, _last: &Wheels) -> Wheels {
        [velocity.speed_m_s, velocity.turn_rate_rad_s, 0.0, 0.0]
    }

    fn body(&self, wheels: &Wheels) -> BodyVelocity {
        BodyVelocity { speed_m_s: wheels[0], turn_rate_rad_s: wheels[1] }
    }

    fn speed_factor(&self, velocity: BodyVelocity) -> f64 {
        let over_speed = velocity.speed_m_s.abs() / self.speed.top;
        let over_turn = velocity.turn_rate_rad_s.abs() / self.turn.top;
        (1.0 / over_speed.max(over_turn).max(1.0)).min(self.margins.lateral_factor(velocity))
    }

    fn largest_steps(&self, last: &Wheels, target: &Wheels, seconds: f64) -> Wheels {
        common::largest_steps([self.speed, self.turn], last, target, seconds)
    }

    fn greatest(&self) -> Wheels {
        [self.speed.top, self.turn.top, 0.0, 0.0]
    }

    fn inputs(&self) -> Inputs {
        let map = InputMap::Linear { speed: [1.0, 0.0], turn_rate: [0.0, 1.0] };
        Inputs { map, ranges: [self.speed, self.turn] }
    }

    fn demands(&self, curvature_1_m: f64, curvature_rate_1_m2: f64) -> Demands {
        Demands {
            numbers: [Some(Number::speed(self.speed)), self.turning(curvature_1_m, curvature_rate_1_m2)],
            steering: [None; 2],
            max_lateral_m_s2: self.margins.max_lateral_m_s2,
            curvature_1_m,
        }
    }

    fn spot_demands(&self) -> Option<Demands> {
        Some(Demands::on_the_spot([self.turning(1.0, 0.0), None]))
    }

    fn max_jerk_m_s3(&self) -> Option<f64> {
        self.margins.max_jerk_m_s3
    }

    fn top_speed_m_s(&self) -> f64 {
        self.speed.top
    }

    fn top_turn_rate_rad_s(&self) -> f64 {
        self.turn.top
    }
}
