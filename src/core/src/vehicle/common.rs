//! What several vehicle kinds share: keys, limits that are optional for all of them, steps.

use super::Wheels;
use super::load::Range;
use crate::geometry::BodyVelocity;
use crate::keys::{Bound, Key, Values};
use crate::math;

pub(super) const MAX_LATERAL: Key = Key::optional(
    "max_lateral_accel_m_s2",
    "m/s²",
    Bound::positive(50.0),
    "greatest acceleration across the path, speed times turn rate; no limit if not given",
);
pub(super) const MAX_JERK: Key = Key::optional(
    "max_jerk_m_s3",
    "m/s³",
    Bound::positive(10_000.0),
    "greatest jerk along the path, for retiming and checking plans; no limit if not given",
);
pub(super) const MAX_ACCEL: Key = Key::required(
    "max_accel_m_s2",
    "m/s²",
    Bound::positive(50.0),
    "greatest acceleration, and deceleration unless that is given",
);
pub(super) const MAX_DECEL: Key = Key::optional(
    "max_decel_m_s2",
    "m/s²",
    Bound::positive(50.0),
    "greatest deceleration; as the acceleration if not given",
);
pub(super) const MAX_STEER_RATE: Key =
    Key::required("max_steer_rate_rad_s", "rad/s", Bound::positive(50.0), "greatest steering rate");

/// The optional limits that every kind can have.
#[derive(Clone, Copy, Debug)]
pub(super) struct Margins {
    pub(super) max_lateral_m_s2: Option<f64>,
    pub(super) max_jerk_m_s3: Option<f64>,
}

impl Margins {
    pub(super) fn new(values: &Values) -> Self {
        Self { max_lateral_m_s2: values.find(MAX_LATERAL.name), max_jerk_m_s3: values.find(MAX_JERK.name) }
    }

    /// The greatest factor, at most 1, on (v, ω) that keeps v ω within the lateral acceleration.
    pub(super) fn lateral_factor(&self, velocity: BodyVelocity) -> f64 {
        let lateral = (velocity.speed_m_s * velocity.turn_rate_rad_s).abs();
        match self.max_lateral_m_s2 {
            Some(bound) if lateral > bound => math::sqrt(bound / lateral),
            _ => 1.0,
        }
    }
}

/// The range of a speed from a key of its greatest value, [`MAX_ACCEL`] and [`MAX_DECEL`].
pub(super) fn speed_range(values: &Values, max_speed: &str) -> Range {
    let accel = values.get(MAX_ACCEL.name);
    Range { top: values.get(max_speed), rise: accel, fall: values.find(MAX_DECEL.name).unwrap_or(accel) }
}

/// The range of a steering angle, which turns either way alike.
pub(super) fn steering_range(max_rad: f64, max_rate_rad_s: f64) -> Range {
    Range { top: max_rad, rise: max_rate_rad_s, fall: max_rate_rad_s }
}

/// The largest steps of a command whose first two numbers have these ranges.
pub(super) fn largest_steps(ranges: [Range; 2], last: &Wheels, target: &Wheels, seconds: f64) -> Wheels {
    let step = |index: usize| ranges[index].largest_step(last[index], target[index], seconds);
    [step(0), step(1), 0.0, 0.0]
}
