//! Steered wheel: one wheel drives and steers, at a distance L ahead of a fixed axle (tricycle, counterbalanced truck
//! with one drive unit; with L behind the axle mount the chassis' x axis the other way). The command is (rim speed v_s of
//! that wheel, its steering angle δ): v = v_s cos δ, ω = v_s sin δ / L (textbook kinematics without slip). The chassis
//! point is the fixed axle's midpoint.
//!
//! If the wheel steers to ±π/2 the machine turns on the spot. The same motion then has two commands, (v_s, δ) and
//! (−v_s, δ ∓ π), and near a turn on the spot both lie at an end of the steering: the one nearer to the last command is
//! taken, so that a law's small corrections do not swing the wheel from end to end.
//!
//! Steering at rest: near rest, where the body velocity says nothing about the angle, the wheel holds its angle while it
//! still turns, and takes the curvature of what comes next once it stands; before a turn on the spot it goes to the nearer
//! end. A standing wheel that points elsewhere than wanted by
//! more than [`STEER_FIRST_RAD`] steers first and drives then: it would take the machine elsewhere.

use super::common::{self, MAX_ACCEL, MAX_DECEL, MAX_JERK, MAX_LATERAL, MAX_STEER_RATE, Margins};
use super::load::{Demands, Number, Quantity, Range, Steering};
use super::wiring::{SPEED_RATIO, STEER_RATIO};
use super::{InputMap, Inputs, Kind, Vehicle, Wheels};
use crate::geometry::BodyVelocity;
use crate::keys::{Bound, Key, Values};
use crate::math::{self, FRAC_PI_2, PI};
use alloc::sync::Arc;
use trackhold_proto::message::WheelLayout;

/// A velocity that asks for less at the wheel says nothing about where to steer, m/s.
const REST_SPEED_M_S: f64 = 0.01;

/// A wheel slower than this stands: a command's own rounding would keep it from zero otherwise, m/s.
const STANDING_M_S: f64 = 1e-3;

/// How far a standing wheel may point elsewhere and still drive: the machine strays by less than the tenth part of the
/// way until the steering has arrived, rad.
const STEER_FIRST_RAD: f64 = 0.1;

/// How far beyond the end of the steering a velocity may point, near a turn on the spot, and still be driven from that
/// end; sin 0.35 = 0.34 of the wheel's speed is then left out, rad.
const PAST_END_RAD: f64 = 0.35;

pub(super) const KIND: Kind = Kind {
    name: "steered-wheel",
    keys: &[
        Key::required(
            "wheelbase_m",
            "m",
            Bound::positive(20.0),
            "distance from the fixed axle to the steered wheel's contact point",
        ),
        Key::required(
            "max_speed_m_s",
            "m/s",
            Bound::positive(30.0),
            "greatest rim speed of the steered wheel, either way",
        ),
        MAX_ACCEL,
        MAX_DECEL,
        Key::required(
            "max_steer_rad",
            "rad",
            Bound::positive(1.6),
            "greatest steering angle, either way; from π/2 = 1.5707963267948966 on the machine can turn on the spot",
        ),
        MAX_STEER_RATE,
        MAX_LATERAL,
        MAX_JERK,
        SPEED_RATIO,
        STEER_RATIO,
    ],
    build: |values| Ok(Arc::new(SteeredWheel::new(values))),
};

#[derive(Debug)]
struct SteeredWheel {
    wheelbase_m: f64,
    speed: Range,
    max_steer_rad: f64,
    max_steer_rate_rad_s: f64,
    margins: Margins,
}

/// Where the wheel has to point and how fast it has to roll.
#[derive(Clone, Copy, Debug)]
struct Aim {
    speed_m_s: f64,
    steer_rad: f64,
    /// How far beyond the end of the steering the velocity points, rad.
    beyond_rad: f64,
}

impl SteeredWheel {
    fn new(values: &Values) -> Self {
        Self {
            wheelbase_m: values.get("wheelbase_m"),
            speed: common::speed_range(values, "max_speed_m_s"),
            max_steer_rad: values.get("max_steer_rad"),
            max_steer_rate_rad_s: values.get(MAX_STEER_RATE.name),
            margins: Margins::new(values),
        }
    }

    fn turns_on_the_spot(&self) -> bool {
        self.max_steer_rad >= FRAC_PI_2
    }

    /// The wheel's velocity in the chassis frame, for a body velocity: (v, ω L).
    fn at_wheel(&self, velocity: BodyVelocity) -> (f64, f64) {
        (velocity.speed_m_s, velocity.turn_rate_rad_s * self.wheelbase_m)
    }

    /// An aim along `direction_rad` at a rim speed; where the steering ends before, only the part of the speed that
    /// points along the wheel is left.
    fn along(&self, direction_rad: f64, speed_m_s: f64) -> Aim {
        let steer_rad = direction_rad.clamp(-self.max_steer_rad, self.max_steer_rad);
        let beyond_rad = (direction_rad - steer_rad).abs();
        let kept = if beyond_rad == 0.0 { 1.0 } else { math::cos_sin(beyond_rad).0 };
        Aim { speed_m_s: speed_m_s * kept, steer_rad, beyond_rad }
    }

    /// Of the two ways to roll with this velocity, the one nearer to the last steering angle, if both can be had.
    fn aim(&self, (ahead, aside): (f64, f64), last_steer_rad: f64) -> Aim {
        let (direction, speed) = (math::atan2(aside, ahead), math::length(ahead, aside));
        let opposite = if direction > 0.0 { direction - PI } else { direction + PI };
        let (forward, backward) = (self.along(direction, speed), self.along(opposite, -speed));
        if self.turns_on_the_spot() && forward.beyond_rad.max(backward.beyond_rad) <= PAST_END_RAD {
            let way = |aim: &Aim| (aim.steer_rad - last_steer_rad).abs();
            return if way(&backward) < way(&forward) { backward } else { forward };
        }
        let nearer = if ahead < 0.0 { backward } else { forward };
        if nearer.beyond_rad == 0.0 || self.turns_on_the_spot() {
            return nearer;
        }
        // The steering cannot reach the curvature: as far as it can, and the speed of the chassis point is kept.
        Aim { speed_m_s: ahead / math::cos_sin(nearer.steer_rad).0, ..nearer }
    }

    /// The angle for a curvature. On the spot both ends will do: the one on the side of the turn, unless the wheel points
    /// to the other side already.
    fn steer_at_rest(&self, rest_curvature_1_m: f64, last_steer_rad: f64) -> f64 {
        let wanted = math::atan(self.wheelbase_m * rest_curvature_1_m);
        let other = last_steer_rad.abs() > STEER_FIRST_RAD && last_steer_rad * wanted < 0.0;
        let wanted = if rest_curvature_1_m.is_infinite() && other { -wanted } else { wanted };
        wanted.clamp(-self.max_steer_rad, self.max_steer_rad)
    }

    /// What is near rest: the angle held, or for the reference's curvature; the speed as far as it points there. A law's
    /// last millimetres do not keep a wheel turning that has to swing.
    fn aim_near_rest(&self, (ahead, aside): (f64, f64), rest_curvature_1_m: f64, last: &Wheels) -> Aim {
        let there = self.steer_at_rest(rest_curvature_1_m, last[1]);
        let (stands, slow) = (last[0].abs() < STANDING_M_S, last[0].abs() < REST_SPEED_M_S);
        let steer_rad = if stands { there } else { last[1] };
        let (cos, sin) = math::cos_sin(steer_rad);
        let waits = slow && is_elsewhere(there, last);
        let speed_m_s = if waits { 0.0 } else { ahead * cos + aside * sin };
        Aim { speed_m_s, steer_rad, beyond_rad: 0.0 }
    }
}

/// True if the wheel has to steer first.
fn is_elsewhere(steer_rad: f64, last: &Wheels) -> bool {
    (steer_rad - last[1]).abs() > STEER_FIRST_RAD
}

impl Vehicle for SteeredWheel {
    fn layout(&self) -> WheelLayout {
        WheelLayout::SteeredWheel
    }

    fn wheels(&self, velocity: BodyVelocity, rest_curvature_1_m: f64, last: &Wheels) -> Wheels {
        let wanted = self.at_wheel(velocity);
        let aim = if math::length(wanted.0, wanted.1) < REST_SPEED_M_S {
            self.aim_near_rest(wanted, rest_curvature_1_m, last)
        } else {
            self.aim(wanted, last[1])
        };
        let slow = last[0].abs() < REST_SPEED_M_S;
        [if slow && is_elsewhere(aim.steer_rad, last) { 0.0 } else { aim.speed_m_s }, aim.steer_rad, 0.0, 0.0]
    }

    fn body(&self, wheels: &Wheels) -> BodyVelocity {
        let (cos, sin) = math::cos_sin(wheels[1]);
        BodyVelocity { speed_m_s: wheels[0] * cos, turn_rate_rad_s: wheels[0] * sin / self.wheelbase_m }
    }

    fn speed_factor(&self, velocity: BodyVelocity) -> f64 {
        let (ahead, aside) = self.at_wheel(velocity);
        let speed = 1.0 / (math::length(ahead, aside) / self.speed.top).max(1.0);
        speed.min(self.margins.lateral_factor(velocity))
    }

    fn largest_steps(&self, last: &Wheels, target: &Wheels, seconds: f64) -> Wheels {
        let speed = self.speed.largest_step(last[0], target[0], seconds);
        [speed, self.max_steer_rate_rad_s * seconds, 0.0, 0.0]
    }

    fn greatest(&self) -> Wheels {
        [self.speed.top, self.max_steer_rad, 0.0, 0.0]
    }

    fn inputs(&self) -> Inputs {
        Inputs {
            map: InputMap::SteeredWheel { wheelbase_m: self.wheelbase_m },
            ranges: [self.speed, common::steering_range(self.max_steer_rad, self.max_steer_rate_rad_s)],
        }
    }

    fn demands(&self, curvature_1_m: f64, curvature_rate_1_m2: f64) -> Demands {
        // v_s = ṡ √(1 + (Lκ)²) and δ = atan(Lκ).
        let slope = self.wheelbase_m * curvature_1_m;
        let slope_rate = self.wheelbase_m * curvature_rate_1_m2;
        let factor = math::sqrt(1.0 + slope * slope);
        let wheel = Number {
            quantity: Quantity::Rim,
            factor,
            factor_rate: slope * slope_rate / factor,
            range: self.speed,
        };
        let steering = Steering {
            angle_rad: math::atan(slope),
            angle_rate_rad_m: slope_rate / (1.0 + slope * slope),
            max_rad: self.max_steer_rad,
            max_rate_rad_s: self.max_steer_rate_rad_s,
        };
        Demands {
            numbers: [Some(wheel), None],
            steering: [Some(steering), None],
            max_lateral_m_s2: self.margins.max_lateral_m_s2,
            curvature_1_m,
        }
    }

    fn spot_demands(&self) -> Option<Demands> {
        let wheel =
            Number { quantity: Quantity::Rim, factor: self.wheelbase_m, factor_rate: 0.0, range: self.speed };
        self.turns_on_the_spot().then(|| Demands::on_the_spot([Some(wheel), None]))
    }

    fn max_jerk_m_s3(&self) -> Option<f64> {
        self.margins.max_jerk_m_s3
    }

    fn top_speed_m_s(&self) -> f64 {
        self.speed.top
    }

    fn top_turn_rate_rad_s(&self) -> f64 {
        let greatest = self.max_steer_rad.min(FRAC_PI_2);
        self.speed.top * math::cos_sin(greatest).1 / self.wheelbase_m
    }
}
