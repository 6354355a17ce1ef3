//! What a motion asks of a machine beside what the machine has: loads, and the bounds that follow from them.
//!
//! Every number that a machine bounds (a wheel's speed, its own speed, a turn rate) is n = f ṡ while the machine moves
//! along a path with the speed ṡ; f depends on the curvature alone. So ṅ = f s̈ + g ṡ² with g = df/ds, a line in s̈: every
//! bound below is exact, nothing is searched for.
//!
//! Speeds and distances count along the path, up also in reverse. Reversing turns the sign of every number and of its
//! change at once, so that neither a magnitude nor whether it falls depends on the direction of travel.

use crate::math;
use alloc::format;
use alloc::string::String;

/// Relative room for rounding where a plan's motion is compared with a limit.
pub(super) const ROUNDING: f64 = 1e-9;

/// A few rounding errors: bounds stay inside their limits by this share.
const INSIDE: f64 = 8.0 * f64::EPSILON;

/// Most limits that a machine has.
const MOST: usize = 8;

/// A moment on a path.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct PathState {
    /// Speed along the path, m/s. A negative one means reverse travel and is the same as its magnitude with the
    /// acceleration's sign turned.
    pub speed_m_s: f64,
    /// How fast that speed changes, m/s²; below 0 it falls.
    pub accel_m_s2: f64,
    /// Curvature, 1/m: turn rate over speed, both signed.
    pub curvature_1_m: f64,
    /// Change of the curvature with the way travelled, 1/m²; the way counts up in reverse too.
    pub curvature_rate_1_m2: f64,
}

/// A limit that a machine can have.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum LimitName {
    /// Speed of a driven wheel.
    WheelSpeed,
    /// How fast a driven wheel's speed grows in magnitude.
    WheelAcceleration,
    /// How fast a driven wheel's speed falls in magnitude.
    WheelDeceleration,
    /// Speed of the chassis point.
    Speed,
    /// How fast that speed grows.
    Acceleration,
    /// How fast that speed falls.
    Deceleration,
    /// Turn rate.
    TurnRate,
    /// How fast the turn rate grows in magnitude.
    TurnAcceleration,
    /// How fast the turn rate falls in magnitude.
    TurnDeceleration,
    /// Steering angle.
    SteeringAngle,
    /// How fast the steering angle changes.
    SteeringRate,
    /// Acceleration across the path, v² κ.
    LateralAcceleration,
}

impl LimitName {
    /// The limit in words.
    pub const fn words(self) -> &'static str {
        match self {
            Self::WheelSpeed => "wheel speed",
            Self::WheelAcceleration => "wheel acceleration",
            Self::WheelDeceleration => "wheel deceleration",
            Self::Speed => "speed",
            Self::Acceleration => "acceleration",
            Self::Deceleration => "deceleration",
            Self::TurnRate => "turn rate",
            Self::TurnAcceleration => "turn acceleration",
            Self::TurnDeceleration => "turn deceleration",
            Self::SteeringAngle => "steering angle",
            Self::SteeringRate => "steering rate",
            Self::LateralAcceleration => "lateral acceleration",
        }
    }
}

impl core::fmt::Display for LimitName {
    fn fmt(&self, f: &mut core::fmt::Formatter<'_>) -> core::fmt::Result {
        f.pad(self.words())
    }
}

/// What a motion asks of one limit.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Load {
    /// Which limit.
    pub limit: LimitName,
    /// What is asked, a magnitude.
    pub value: f64,
    /// What the machine has, greater than 0.
    pub bound: f64,
    /// Unit of both.
    pub unit: &'static str,
}

impl Load {
    /// Asked over had: above 1 the machine cannot do it.
    pub fn share(&self) -> f64 {
        self.value / self.bound
    }

    /// True if the limit is exceeded by more than rounding.
    pub fn is_excess(&self) -> bool {
        self.value > self.bound * (1.0 + ROUNDING)
    }
}

/// What a motion asks of each limit of a machine. Limits that the machine does not have are not in it; of several wheels
/// the one with the greatest share counts.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Loads {
    entries: [Load; MOST],
    count: usize,
}

impl Loads {
    const NONE: Self = {
        let blank = Load { limit: LimitName::Speed, value: 0.0, bound: 1.0, unit: "" };
        Self { entries: [blank; MOST], count: 0 }
    };

    /// The loads.
    pub fn iter(&self) -> core::slice::Iter<'_, Load> {
        self.entries[..self.count].iter()
    }

    /// The load on one limit, if the machine has it.
    pub fn of(&self, limit: LimitName) -> Option<&Load> {
        self.iter().find(|load| load.limit == limit)
    }

    /// The load with the greatest share.
    pub fn greatest(&self) -> Option<&Load> {
        self.iter().max_by(|one, other| one.share().total_cmp(&other.share()))
    }

    fn put(&mut self, limit: LimitName, value: f64, bound: f64, unit: &'static str) {
        let load = Load { limit, value, bound, unit };
        let known = self.entries[..self.count].iter_mut().find(|known| known.limit == limit);
        if let Some(known) = known {
            if load.share() > known.share() {
                *known = load;
            }
        } else if let Some(free) = self.entries.get_mut(self.count) {
            *free = load;
            self.count += 1;
        } else {
            unreachable!("no machine has more than {MOST} limits");
        }
    }
}

impl<'a> IntoIterator for &'a Loads {
    type Item = &'a Load;
    type IntoIter = core::slice::Iter<'a, Load>;

    fn into_iter(self) -> Self::IntoIter {
        self.iter()
    }
}

/// What a bounded number is.
#[derive(Clone, Copy, Debug)]
pub(super) enum Quantity {
    /// Speed of a wheel, rad/s.
    Wheel,
    /// Rim speed of a wheel, m/s.
    Rim,
    /// Speed of the chassis point, m/s.
    Speed,
    /// Turn rate, rad/s.
    Turn,
}

impl Quantity {
    /// The limits of the number itself, of its growth and of its fall.
    const fn limits(self) -> [LimitName; 3] {
        match self {
            Self::Wheel | Self::Rim => {
                [LimitName::WheelSpeed, LimitName::WheelAcceleration, LimitName::WheelDeceleration]
            }
            Self::Speed => [LimitName::Speed, LimitName::Acceleration, LimitName::Deceleration],
            Self::Turn => [LimitName::TurnRate, LimitName::TurnAcceleration, LimitName::TurnDeceleration],
        }
    }

    const fn units(self) -> (&'static str, &'static str) {
        match self {
            Self::Wheel | Self::Turn => ("rad/s", "rad/s²"),
            Self::Rim | Self::Speed => ("m/s", "m/s²"),
        }
    }
}

/// How far and how fast a number may go; all greater than 0.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Range {
    /// Its greatest magnitude.
    pub top: f64,
    /// How fast its magnitude may grow, 1/s.
    pub rise: f64,
    /// How fast its magnitude may fall, 1/s.
    pub fall: f64,
}

impl Range {
    /// The largest change from `last` towards `target` in `seconds`: towards zero by the fall, away from it by the
    /// rise, through zero by each for its part of the time.
    pub fn largest_step(&self, last: f64, target: f64, seconds: f64) -> f64 {
        let falls = last * target < 0.0 || target.abs() < last.abs();
        if self.rise == self.fall || !falls {
            return self.rise * seconds;
        }
        let to_zero_s = last.abs() / self.fall;
        if to_zero_s >= seconds || last * target >= 0.0 {
            return self.fall * seconds;
        }
        last.abs() + self.rise * (seconds - to_zero_s)
    }
}

/// A bounded number along a path.
#[derive(Clone, Copy, Debug)]
pub(super) struct Number {
    pub(super) quantity: Quantity,
    /// f: the number over the speed along the path.
    pub(super) factor: f64,
    /// g: change of f with the way travelled, 1/m.
    pub(super) factor_rate: f64,
    pub(super) range: Range,
}

impl Number {
    /// The speed of the chassis point.
    pub(super) const fn speed(range: Range) -> Self {
        Self { quantity: Quantity::Speed, factor: 1.0, factor_rate: 0.0, range }
    }

    fn put(&self, speed: f64, accel: f64, loads: &mut Loads) {
        let [itself, rise, fall] = self.quantity.limits();
        let (unit, rate_unit) = self.quantity.units();
        let change = self.factor * accel + self.factor_rate * speed * speed;
        // A wheel that the path leaves at rest can only gain speed, either way.
        let (grows, falls) =
            if self.factor * change < 0.0 { (0.0, change.abs()) } else { (change.abs(), 0.0) };
        loads.put(itself, (self.factor * speed).abs(), self.range.top, unit);
        loads.put(rise, grows, self.range.rise, rate_unit);
        loads.put(fall, falls, self.range.fall, rate_unit);
    }

    /// The accelerations along the path within `share` of the number's limits.
    fn accel_bounds(&self, speed: f64, share: f64) -> (f64, f64) {
        let (rise, fall) = (share * self.range.rise, share * self.range.fall);
        let curving = self.factor_rate * speed * speed;
        if self.factor == 0.0 {
            let holds = curving.abs() <= rise * (1.0 + ROUNDING);
            let endless = (f64::NEG_INFINITY, f64::INFINITY);
            return if holds { endless } else { (f64::INFINITY, f64::NEG_INFINITY) };
        }
        let (size, curving) = (self.factor.abs(), curving * self.factor.signum());
        let room = INSIDE * (rise.max(fall) + curving.abs());
        ((-fall - curving + room) / size, (rise - curving - room) / size)
    }
}

/// A steered wheel along a path.
#[derive(Clone, Copy, Debug)]
pub(super) struct Steering {
    /// Angle, rad.
    pub(super) angle_rad: f64,
    /// Change of the angle with the way travelled, rad/m.
    pub(super) angle_rate_rad_m: f64,
    /// Greatest angle, rad.
    pub(super) max_rad: f64,
    /// Greatest rate, rad/s.
    pub(super) max_rate_rad_s: f64,
}

/// How a machine's limits bear on a place of a path; or, with the turn rate for speed, on turning on the spot.
#[derive(Clone, Copy, Debug)]
pub struct Demands {
    pub(super) numbers: [Option<Number>; 2],
    pub(super) steering: [Option<Steering>; 2],
    /// Greatest acceleration across the path, m/s².
    pub(super) max_lateral_m_s2: Option<f64>,
    /// Curvature, 1/m.
    pub(super) curvature_1_m: f64,
}

impl Demands {
    /// What bears on turning on the spot.
    pub(super) const fn on_the_spot(numbers: [Option<Number>; 2]) -> Self {
        Self { numbers, steering: [None; 2], max_lateral_m_s2: None, curvature_1_m: 0.0 }
    }

    fn numbers(&self) -> impl Iterator<Item = &Number> {
        self.numbers.iter().flatten()
    }

    fn steering(&self) -> impl Iterator<Item = &Steering> {
        self.steering.iter().flatten()
    }

    pub(super) fn loads(&self, speed: f64, accel: f64) -> Loads {
        let (speed, accel) = if speed < 0.0 { (-speed, -accel) } else { (speed, accel) };
        let mut loads = Loads::NONE;
        self.numbers().for_each(|number| number.put(speed, accel, &mut loads));
        for steering in self.steering() {
            let rate = (steering.angle_rate_rad_m * speed).abs();
            loads.put(LimitName::SteeringAngle, steering.angle_rad.abs(), steering.max_rad, "rad");
            loads.put(LimitName::SteeringRate, rate, steering.max_rate_rad_s, "rad/s");
        }
        if let Some(bound) = self.max_lateral_m_s2 {
            let lateral = (self.curvature_1_m * speed * speed).abs();
            loads.put(LimitName::LateralAcceleration, lateral, bound, "m/s²");
        }
        loads
    }

    pub(super) fn speed_bound(&self, share: f64) -> f64 {
        if self.steering().any(|steering| steering.angle_rad.abs() > steering.max_rad * (1.0 + ROUNDING)) {
            return 0.0;
        }
        let numbers = self.numbers().map(|number| share * number.range.top / number.factor.abs());
        let steering =
            self.steering().map(|steering| share * steering.max_rate_rad_s / steering.angle_rate_rad_m.abs());
        let lateral = self.max_lateral_m_s2.map(|bound| math::sqrt(share * bound / self.curvature_1_m.abs()));
        numbers.chain(steering).chain(lateral).fold(f64::INFINITY, f64::min) * (1.0 - INSIDE)
    }

    pub(super) fn accel_bounds(&self, speed: f64, share: f64) -> (f64, f64) {
        self.numbers()
            .map(|number| number.accel_bounds(speed, share))
            .fold((f64::NEG_INFINITY, f64::INFINITY), |all, one| (all.0.max(one.0), all.1.min(one.1)))
    }

    /// The greatest deceleration while the curvature holds.
    pub(super) fn braking(&self) -> f64 {
        self.numbers().map(|number| number.range.fall / number.factor.abs()).fold(f64::INFINITY, f64::min)
    }

    /// The greatest acceleration, and as great a deceleration, while the curvature holds.
    pub(super) fn speeding_and_braking(&self) -> f64 {
        let bounds =
            self.numbers().map(|number| number.range.rise.min(number.range.fall) / number.factor.abs());
        bounds.fold(f64::INFINITY, f64::min)
    }

    /// The first limit that a steady motion exceeds, in words.
    pub(super) fn excess(&self, speed: f64) -> Option<String> {
        let loads = self.loads(speed, 0.0);
        let load = loads.iter().find(|load| load.is_excess())?;
        let Load { limit, value, bound, unit } = load;
        let what = if *limit == LimitName::WheelSpeed && self.numbers[1].is_some() {
            "speed of the faster wheel"
        } else {
            limit.words()
        };
        Some(format!("{what} {value:.4} {unit}, the limit is {bound} {unit}"))
    }
}
