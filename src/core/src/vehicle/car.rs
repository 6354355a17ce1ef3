//! Car: driven rear axle, steered front wheels.
//!
//! Without `front_track_m` the command is (speed of the rear axle's midpoint, steering angle of the equivalent single
//! front wheel): ω = v tan δ / L (textbook bicycle model without slip; axes as in ISO 8855). With it the command has an
//! angle for each front wheel, so that the axes of all wheels meet in the centre of the bend (Ackermann's condition):
//! tan δ = Lκ/(1 ∓ κ T/2), left and right; and the limits of angle and rate hold for each wheel.

use super::common::{self, MAX_ACCEL, MAX_DECEL, MAX_JERK, MAX_LATERAL, MAX_STEER_RATE, Margins};
use super::limits::{Step, largest_share, part_of_the_way};
use super::load::{Demands, Number, Range, Steering};
use super::wiring::{SPEED_RATIO, STEER_RATIO, SWAP};
use super::{InputMap, Inputs, Kind, Vehicle, Wheels};
use crate::geometry::BodyVelocity;
use crate::keys::{Bound, Key, Values};
use crate::math;
use alloc::sync::Arc;
use trackhold_proto::message::WheelLayout;

/// Below this speed ω/v says nothing about where to steer: sensor noise alone would swing the wheels, m/s.
const REST_SPEED_M_S: f64 = 0.01;

/// Which side of the chassis point each front wheel is on, left and right.
const SIDES: [f64; 2] = [1.0, -1.0];

pub(super) const KIND: Kind = Kind {
    name: "car",
    keys: &[
        Key::required("wheelbase_m", "m", Bound::positive(20.0), "distance between the axles"),
        Key::optional(
            "front_track_m",
            "m",
            Bound::positive(5.0),
            "distance between the front wheels' steering axes; given, the command has an angle for each wheel; else one \
             for both",
        ),
        Key::required("max_speed_m_s", "m/s", Bound::positive(30.0), "greatest speed, either way"),
        MAX_ACCEL,
        MAX_DECEL,
        Key::required(
            "max_steer_rad",
            "rad",
            Bound::positive(1.5),
            "greatest steering angle, either way: of each front wheel with front_track_m, else of the equivalent single \
             wheel",
        ),
        MAX_STEER_RATE,
        MAX_LATERAL,
        MAX_JERK,
        SPEED_RATIO,
        STEER_RATIO,
        SWAP,
    ],
    build: |values| Ok(Arc::new(Car::new(values))),
};

#[derive(Debug)]
struct Car {
    wheelbase_m: f64,
    /// Half the front track, with an angle for each front wheel; 0 with one for both.
    half_track_m: f64,
    layout: WheelLayout,
    speed: Range,
    max_steer_rad: f64,
    max_steer_rate_rad_s: f64,
    /// The curvature at which the inner wheel has its greatest angle, 1/m.
    max_curvature_1_m: f64,
    margins: Margins,
}

impl Car {
    fn new(values: &Values) -> Self {
        let (wheelbase_m, max_steer_rad) = (values.get("wheelbase_m"), values.get("max_steer_rad"));
        let track_m = values.find("front_track_m");
        let half_track_m = 0.5 * track_m.unwrap_or(0.0);
        let slope = math::tan(max_steer_rad);
        Self {
            wheelbase_m,
            half_track_m,
            layout: if track_m.is_some() { WheelLayout::Ackermann } else { WheelLayout::SpeedSteer },
            speed: common::speed_range(values, "max_speed_m_s"),
            max_steer_rad,
            max_steer_rate_rad_s: values.get(MAX_STEER_RATE.name),
            max_curvature_1_m: slope / (wheelbase_m + slope * half_track_m),
            margins: Margins::new(values),
        }
    }

    fn is_ackermann(&self) -> bool {
        self.layout == WheelLayout::Ackermann
    }

    /// The angle of the front wheel on a side (1 left, −1 right, 0 the equivalent single one).
    fn angle(&self, side: f64, curvature_1_m: f64) -> f64 {
        let across = 1.0 - side * curvature_1_m * self.half_track_m;
        math::atan2(self.wheelbase_m * curvature_1_m, across)
    }

    /// The curvature for which the front wheel on a side has this angle.
    fn curvature(&self, side: f64, angle_rad: f64) -> f64 {
        let slope = math::tan(angle_rad);
        slope / (self.wheelbase_m + side * slope * self.half_track_m)
    }

    /// The curvature of a pair of angles: the mean, where they do not agree.
    fn curvature_of(&self, wheels: &Wheels) -> f64 {
        0.5 * (self.curvature(SIDES[0], wheels[1]) + self.curvature(SIDES[1], wheels[2]))
    }

    fn command(&self, speed_m_s: f64, curvature_1_m: f64) -> Wheels {
        let bound = self.max_curvature_1_m;
        let curvature = curvature_1_m.clamp(-bound, bound);
        let angle = |side: f64| self.angle(side, curvature).clamp(-self.max_steer_rad, self.max_steer_rad);
        if self.is_ackermann() {
            [speed_m_s, angle(SIDES[0]), angle(SIDES[1]), 0.0]
        } else {
            [speed_m_s, angle(0.0), 0.0, 0.0]
        }
    }

    fn steering(&self, side: f64, curvature_1_m: f64, curvature_rate_1_m2: f64) -> Option<Steering> {
        // d/dκ atan2(Lκ, 1 − sκT/2) = L/((1 − sκT/2)² + (Lκ)²).
        let across = 1.0 - side * curvature_1_m * self.half_track_m;
        let along = self.wheelbase_m * curvature_1_m;
        Some(Steering {
            angle_rad: self.angle(side, curvature_1_m),
            angle_rate_rad_m: self.wheelbase_m * curvature_rate_1_m2 / (across * across + along * along),
            max_rad: self.max_steer_rad,
            max_rate_rad_s: self.max_steer_rate_rad_s,
        })
    }

    /// The greatest ratio of a front wheel's steering rate to the equivalent single wheel's. That ratio is
    /// (1 + (Lκ)²)/((1 − |κ|T/2)² + (Lκ)²) for the inner wheel, and greatest where 1 = |κ|T/2 + (Lκ)².
    fn quickest_wheel(&self) -> f64 {
        let (half, base) = (self.half_track_m, self.wheelbase_m);
        let peak = (math::sqrt(half * half + 4.0 * base * base) - half) / (2.0 * base * base);
        let curvature = peak.min(self.max_curvature_1_m);
        let (across, along) = (1.0 - curvature * half, base * curvature);
        (1.0 + along * along) / (across * across + along * along)
    }

    /// The curvature next to `last` on the way to `target`, as far as each wheel's largest step lets it go.
    fn curvature_step(&self, last: &Wheels, target: &Wheels, steps: &Wheels) -> (f64, f64) {
        let (from, to) = (self.curvature_of(last), self.curvature_of(target));
        let way = to - from;
        let mut share = 1.0;
        for (index, side) in [1, 2].into_iter().zip(SIDES) {
            let step = steps[index];
            if (target[index] - last[index]).abs() > step && way != 0.0 {
                let angle = last[index] + step.copysign(target[index] - last[index]);
                let reached = (self.curvature(side, angle) - from) / way;
                share = reached.clamp(0.0, share);
            }
        }
        (share, from)
    }
}

impl Vehicle for Car {
    fn layout(&self) -> WheelLayout {
        self.layout
    }

    fn wheels(&self, velocity: BodyVelocity, rest_curvature_1_m: f64, _last: &Wheels) -> Wheels {
        let curvature = if velocity.speed_m_s.abs() >= REST_SPEED_M_S {
            velocity.turn_rate_rad_s / velocity.speed_m_s
        } else {
            rest_curvature_1_m
        };
        self.command(velocity.speed_m_s, curvature)
    }

    fn body(&self, wheels: &Wheels) -> BodyVelocity {
        let turn_rate_rad_s = if self.is_ackermann() {
            wheels[0] * self.curvature_of(wheels)
        } else {
            wheels[0] * math::tan(wheels[1]) / self.wheelbase_m
        };
        BodyVelocity { speed_m_s: wheels[0], turn_rate_rad_s }
    }

    fn speed_factor(&self, velocity: BodyVelocity) -> f64 {
        let speed = 1.0 / (velocity.speed_m_s.abs() / self.speed.top).max(1.0);
        speed.min(self.margins.lateral_factor(velocity))
    }

    fn largest_steps(&self, last: &Wheels, target: &Wheels, seconds: f64) -> Wheels {
        let steer = self.max_steer_rate_rad_s * seconds;
        let other = if self.is_ackermann() { steer } else { 0.0 };
        [self.speed.largest_step(last[0], target[0], seconds), steer, other, 0.0]
    }

    /// A pair of angles is stepped along the bends, so that the wheels never work against each other on the way.
    fn step(&self, last: &Wheels, target: &Wheels, seconds: f64) -> Step {
        let steps = self.largest_steps(last, target, seconds);
        if !self.is_ackermann() {
            return part_of_the_way(last, target, &steps);
        }
        let (of_curvature, from) = self.curvature_step(last, target, &steps);
        let share = largest_share(&last[..1], &target[..1], &steps[..1]).min(of_curvature);
        if share >= 1.0 {
            return Step { wheels: *target, share };
        }
        let speed = last[0] + share * (target[0] - last[0]);
        let curvature = from + share * (self.curvature_of(target) - from);
        Step { wheels: self.command(speed, curvature), share }
    }

    fn greatest(&self) -> Wheels {
        let other = if self.is_ackermann() { self.max_steer_rad } else { 0.0 };
        [self.speed.top, self.max_steer_rad, other, 0.0]
    }

    fn inputs(&self) -> Inputs {
        // With an angle for each front wheel: the equivalent single one, whose rate the faster wheel bounds.
        let greatest = self.angle(0.0, self.max_curvature_1_m);
        let rate = self.max_steer_rate_rad_s / self.quickest_wheel();
        Inputs {
            map: InputMap::Car { wheelbase_m: self.wheelbase_m, half_track_m: self.half_track_m },
            ranges: [self.speed, common::steering_range(greatest, rate)],
        }
    }

    fn demands(&self, curvature_1_m: f64, curvature_rate_1_m2: f64) -> Demands {
        let steering = |side: f64| self.steering(side, curvature_1_m, curvature_rate_1_m2);
        Demands {
            numbers: [Some(Number::speed(self.speed)), None],
            steering: if self.is_ackermann() { SIDES.map(steering) } else { [steering(0.0), None] },
            max_lateral_m_s2: self.margins.max_lateral_m_s2,
            curvature_1_m,
        }
    }

    fn spot_demands(&self) -> Option<Demands> {
        None
    }

    fn max_jerk_m_s3(&self) -> Option<f64> {
        self.margins.max_jerk_m_s3
    }

    fn top_speed_m_s(&self) -> f64 {
        self.speed.top
    }

    fn top_turn_rate_rad_s(&self) -> f64 {
        self.speed.top * self.max_curvature_1_m
    }
}
