//! Two driven sides, whose difference in speed turns the machine. The command is (left, right) wheel speed in rad/s.
//!
//! Each side rolls where it crosses the chassis' axis, y_l to the left and y_r to the right of the chassis point, so that
//! its rim speeds are V_l = v − ω y_l and V_r = v + ω y_r. Hence ω = (V_r − V_l)/(y_l + y_r) and
//! v = (y_r V_l + y_l V_r)/(y_l + y_r): for wheels without slip y is half the track; for a machine that skids in bends it
//! is where its sides' instantaneous centres of rotation lie (Mandow, Martínez, Morales, Blanco, García-Cerezo, González,
//! IROS 2007: from memory; the formulas follow by algebra).

use super::common::{self, Margins};
use super::load::{Demands, Number, Quantity, Range};
use super::{InputMap, Inputs, Vehicle, Wheels};
use crate::geometry::BodyVelocity;
use crate::keys::{Bound, Key, Problem, Values};
use alloc::vec;
use alloc::vec::Vec;
use trackhold_proto::message::WheelLayout;

const RADIUS: Bound = Bound::positive(2.0);

pub(super) const WHEEL_RADIUS: Key =
    Key::optional("wheel_radius_m", "m", RADIUS, "rolling radius of the driven wheels, if they are alike");
pub(super) const LEFT_RADIUS: Key = Key::optional(
    "left_wheel_radius_m",
    "m",
    RADIUS,
    "rolling radius of the left wheel, if they differ; given with right_wheel_radius_m, instead of wheel_radius_m",
);
pub(super) const RIGHT_RADIUS: Key =
    Key::optional("right_wheel_radius_m", "m", RADIUS, "rolling radius of the right wheel, if they differ");
pub(super) const MAX_WHEEL_SPEED: Key = Key::required(
    "max_wheel_speed_rad_s",
    "rad/s",
    Bound::positive(1000.0),
    "greatest wheel speed, either way",
);
pub(super) const MAX_WHEEL_ACCEL: Key = Key::required(
    "max_wheel_accel_rad_s2",
    "rad/s²",
    Bound::positive(10_000.0),
    "greatest wheel acceleration, and deceleration unless that is given",
);
pub(super) const MAX_WHEEL_DECEL: Key = Key::optional(
    "max_wheel_decel_rad_s2",
    "rad/s²",
    Bound::positive(10_000.0),
    "greatest wheel deceleration, where a wheel's speed falls in magnitude; as the acceleration if not given",
);

/// A machine with two driven sides.
#[derive(Debug)]
pub(super) struct TwoSided {
    /// Rolling radii, left and right, m.
    radius_m: [f64; 2],
    /// How far from the chassis point the sides roll, to the left and to the right, m.
    reach_m: [f64; 2],
    /// The sides' part in the speed of the chassis point.
    part: [f64; 2],
    width_m: f64,
    range: Range,
    margins: Margins,
}

impl TwoSided {
    /// A machine with the keys of this file and of [`common`], whose sides roll at `reach_m`.
    pub(super) fn new(values: &Values, reach_m: [f64; 2]) -> Result<Self, Vec<Problem>> {
        let [left, right] = reach_m;
        let accel = values.get(MAX_WHEEL_ACCEL.name);
        Ok(Self {
            radius_m: radii(values)?,
            reach_m,
            part: [right / (left + right), left / (left + right)],
            width_m: left + right,
            range: Range {
                top: values.get(MAX_WHEEL_SPEED.name),
                rise: accel,
                fall: values.find(MAX_WHEEL_DECEL.name).unwrap_or(accel),
            },
            margins: Margins::new(values),
        })
    }

    /// Rim speeds for a body velocity, m/s.
    fn rims(&self, velocity: BodyVelocity) -> [f64; 2] {
        [
            velocity.speed_m_s - velocity.turn_rate_rad_s * self.reach_m[0],
            velocity.speed_m_s + velocity.turn_rate_rad_s * self.reach_m[1],
        ]
    }

    fn wheel(&self, side: usize, rim: f64, rim_rate: f64) -> Option<Number> {
        let radius = self.radius_m[side];
        Some(Number {
            quantity: Quantity::Wheel,
            factor: rim / radius,
            factor_rate: rim_rate / radius,
            range: self.range,
        })
    }

    /// The least speed that a wheel at its greatest speed gives a rim, m/s.
    fn slower_rim_m_s(&self) -> f64 {
        self.radius_m[0].min(self.radius_m[1]) * self.range.top
    }
}

fn radii(values: &Values) -> Result<[f64; 2], Vec<Problem>> {
    let [both, left, right] = [&WHEEL_RADIUS, &LEFT_RADIUS, &RIGHT_RADIUS].map(|key| values.find(key.name));
    let problem = |key: &Key, what: &str| Err(vec![Problem::new(key.name, what)]);
    match (both, left, right) {
        (Some(radius), None, None) => Ok([radius, radius]),
        (None, Some(left), Some(right)) => Ok([left, right]),
        (None, None, None) => Err(vec![Problem::new(
            WHEEL_RADIUS.name,
            alloc::format!(
                "missing; give a value {}, or left_wheel_radius_m and right_wheel_radius_m",
                WHEEL_RADIUS.in_bound()
            ),
        )]),
        (None, Some(_), None) => problem(&RIGHT_RADIUS, "missing; left_wheel_radius_m is given, give both"),
        (None, None, Some(_)) => problem(&LEFT_RADIUS, "missing; right_wheel_radius_m is given, give both"),
        (Some(_), _, _) => problem(
            &WHEEL_RADIUS,
            "given together with left_wheel_radius_m or right_wheel_radius_m; give one for both wheels, or one for \
             each",
        ),
    }
}

impl Vehicle for TwoSided {
    fn layout(&self) -> WheelLayout {
        WheelLayout::LeftRight
    }

    fn wheels(&self, velocity: BodyVelocity, _rest_curvature_1_m: f64, _last: &Wheels) -> Wheels {
        let [left, right] = self.rims(velocity);
        [left / self.radius_m[0], right / self.radius_m[1], 0.0, 0.0]
    }

    fn body(&self, wheels: &Wheels) -> BodyVelocity {
        let (left, right) = (self.radius_m[0] * wheels[0], self.radius_m[1] * wheels[1]);
        BodyVelocity {
            speed_m_s: self.part[0] * left + self.part[1] * right,
            turn_rate_rad_s: (right - left) / self.width_m,
        }
    }

    fn speed_factor(&self, velocity: BodyVelocity) -> f64 {
        let [left, right] = self.rims(velocity);
        let over = |rim: f64, radius: f64| rim.abs() / (radius * self.range.top);
        let wheels = 1.0 / over(left, self.radius_m[0]).max(over(right, self.radius_m[1])).max(1.0);
        wheels.min(self.margins.lateral_factor(velocity))
    }

    fn largest_steps(&self, last: &Wheels, target: &Wheels, seconds: f64) -> Wheels {
        common::largest_steps([self.range; 2], last, target, seconds)
    }

    fn greatest(&self) -> Wheels {
        [self.range.top, self.range.top, 0.0, 0.0]
    }

    fn inputs(&self) -> Inputs {
        let [left, right] = self.radius_m;
        let map = InputMap::Linear {
            speed: [self.part[0] * left, self.part[1] * right],
            turn_rate: [-left / self.width_m, right / self.width_m],
        };
        Inputs { map, ranges: [self.range; 2] }
    }

    fn demands(&self, curvature_1_m: f64, curvature_rate_1_m2: f64) -> Demands {
        let [left, right] = self.reach_m;
        Demands {
            numbers: [
                self.wheel(0, 1.0 - curvature_1_m * left, -curvature_rate_1_m2 * left),
                self.wheel(1, 1.0 + curvature_1_m * right, curvature_rate_1_m2 * right),
            ],
            steering: [None; 2],
            max_lateral_m_s2: self.margins.max_lateral_m_s2,
            curvature_1_m,
        }
    }

    fn spot_demands(&self) -> Option<Demands> {
        let [left, right] = self.reach_m;
        Some(Demands::on_the_spot([self.wheel(0, left, 0.0), self.wheel(1, right, 0.0)]))
    }

    fn max_jerk_m_s3(&self) -> Option<f64> {
        self.margins.max_jerk_m_s3
    }

    fn top_speed_m_s(&self) -> f64 {
        self.slower_rim_m_s()
    }

    fn top_turn_rate_rad_s(&self) -> f64 {
        (self.radius_m[0] + self.radius_m[1]) * self.range.top / self.width_m
    }
}
