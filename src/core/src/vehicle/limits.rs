//! The one rule for limits: first one factor on (v, ω) for the speed limits, which keeps the curvature (Oriolo, De Luca
//! and Vendittelli, IEEE Transactions on Control Systems Technology 10(6), 2002); then the largest step from the last
//! command towards the wanted one that the acceleration limits allow.

use super::load::ROUNDING;
use super::{Vehicle, Wheels};
use crate::geometry::BodyVelocity;

/// What the limits made of a wanted body velocity.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Limited {
    /// The command.
    pub wheels: Wheels,
    /// The body velocity that it amounts to.
    pub body: BodyVelocity,
    /// The speed limits scaled the wanted body velocity, or the steering made it another one.
    pub speed_limited: bool,
    /// The acceleration limits cut the step from the last command.
    pub step_limited: bool,
}

/// A step from the last command towards the wanted one.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Step {
    /// The command.
    pub wheels: Wheels,
    /// Which share of the way it is, at most 1.
    pub share: f64,
}

/// Applies the rule: the command for a wanted body velocity, `seconds` after the last one. Lateral acceleration bounds
/// the wanted command; on the way there only the limits of each number of the command do.
pub fn limit(
    vehicle: &dyn Vehicle,
    wanted: BodyVelocity,
    rest_curvature_1_m: f64,
    last: &Wheels,
    seconds: f64,
) -> Limited {
    let factor = vehicle.speed_factor(wanted);
    // Four rounding errors' room, so that the scaled speeds do not exceed the limit by the last bit.
    let scaled = if factor < 1.0 { wanted.scaled(factor * (1.0 - 4.0 * f64::EPSILON)) } else { wanted };
    let target = vehicle.wheels(scaled, rest_curvature_1_m, last);
    let Step { wheels, share } = vehicle.step(last, &target, seconds);
    let bent = is_bent(vehicle, scaled, &target);
    Limited {
        wheels,
        body: vehicle.body(&wheels),
        speed_limited: factor < 1.0 || bent,
        step_limited: share < 1.0,
    }
}

/// True if a steering limit made the target another motion than the one wanted.
fn is_bent(vehicle: &dyn Vehicle, scaled: BodyVelocity, target: &Wheels) -> bool {
    if !vehicle.layout().is_steered() {
        return false;
    }
    let reached = vehicle.body(target).turn_rate_rad_s;
    (reached - scaled.turn_rate_rad_s).abs() > ROUNDING * (1.0 + scaled.turn_rate_rad_s.abs())
}

/// See [`Vehicle::swing_s`]. From one side to the other by way of straight ahead: of two front wheels the inner one turns
/// the faster, and that changes there.
pub(super) fn swing_s<V: Vehicle + ?Sized>(vehicle: &V, before_1_m: f64, after_1_m: f64) -> Option<f64> {
    let layout = vehicle.layout();
    if !layout.is_steered() {
        return None;
    }
    let from = vehicle.wheels(BodyVelocity::ZERO, before_1_m, &[0.0; 4]);
    let to = vehicle.wheels(BodyVelocity::ZERO, after_1_m, &from);
    let rates = vehicle.largest_steps(&from, &to, 1.0);
    let angles = || (0..from.len()).filter(|index| layout.is_angle(*index));
    let slowest = |way: &dyn Fn(usize) -> f64| {
        angles().map(|index| way(index).abs() / rates[index]).fold(0.0, f64::max)
    };
    Some(if angles().any(|index| from[index] * to[index] < 0.0) {
        slowest(&|index| from[index]) + slowest(&|index| to[index])
    } else {
        slowest(&|index| to[index] - from[index])
    })
}

/// The step in which every number goes the same, largest share of its way.
pub(super) fn part_of_the_way(last: &Wheels, target: &Wheels, steps: &Wheels) -> Step {
    let share = largest_share(last, target, steps);
    let mut wheels = *target;
    if share < 1.0 {
        for (value, last) in wheels.iter_mut().zip(last) {
            *value = last + share * (*value - last);
        }
    }
    Step { wheels, share }
}

/// The largest share, at most 1, of the way from `last` to `target` of which no part exceeds its step.
pub(super) fn largest_share(last: &[f64], target: &[f64], steps: &[f64]) -> f64 {
    let mut share = 1.0;
    for ((last, target), step) in last.iter().zip(target).zip(steps) {
        let way = (target - last).abs();
        if way > *step && step / way < share {
            share = step / way;
        }
    }
    share
}
