//! What moves: vehicle kinds, wheel conversion both ways, and the one rule for limits.
//!
//! A new kind is one new file and one line in [`KINDS`].

mod car;
mod differential;
mod unicycle;

use crate::geometry::BodyVelocity;
use crate::keys::{Key, Problem, Values, names};
use alloc::format;
use alloc::string::String;
use alloc::sync::Arc;
use alloc::vec;
use alloc::vec::Vec;
use core::fmt::Debug;
use trackhold_proto::message::WheelLayout;

/// A wheel command's numbers; what they mean is the vehicle's [`WheelLayout`]. Numbers not in use are 0.
pub type Wheels = [f64; 4];

/// Relative room for rounding where a plan's speed is compared with a limit.
const ROUNDING: f64 = 1e-9;

/// A machine: its geometry and its limits. Immutable.
pub trait Vehicle: Debug + Send + Sync {
    /// What the numbers of a wheel command mean.
    fn layout(&self) -> WheelLayout;

    /// The wheel command for a body velocity. A steered machine near rest, where a steering angle is undefined, steers
    /// for `rest_curvature_1_m`; one whose steering cannot reach the curvature steers as far as it can.
    fn wheels(&self, velocity: BodyVelocity, rest_curvature_1_m: f64) -> Wheels;

    /// The body velocity that a wheel command amounts to.
    fn body(&self, wheels: &Wheels) -> BodyVelocity;

    /// The command that stops: speed zero, the steering held.
    fn zero(&self, last: &Wheels) -> Wheels;

    /// The greatest factor, at most 1, that brings `velocity` within the speed limits.
    fn speed_factor(&self, velocity: BodyVelocity) -> f64;

    /// The most that each number of the wheel command may change in `seconds`.
    fn largest_steps(&self, seconds: f64) -> Wheels;

    /// The greatest acceleration along a path of this curvature, m/s².
    fn path_accel_m_s2(&self, curvature_1_m: f64) -> f64;

    /// The greatest turn acceleration on the spot, rad/s²; `None` for a machine that cannot turn on the spot.
    fn pivot_accel_rad_s2(&self) -> Option<f64>;

    /// The greatest speed on a straight line, m/s.
    fn top_speed_m_s(&self) -> f64;

    /// The greatest turn rate, rad/s.
    fn top_turn_rate_rad_s(&self) -> f64;

    /// Which limit the machine would exceed at this speed and curvature, or on the spot at this turn rate, in words;
    /// none if it can move like this.
    fn excess(&self, motion: Motion) -> Option<String>;
}

/// A steady motion that a plan asks for.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Motion {
    /// Along a path.
    Along {
        /// Speed, m/s.
        speed_m_s: f64,
        /// Curvature, 1/m.
        curvature_1_m: f64,
    },
    /// On the spot.
    Pivot {
        /// Turn rate, rad/s.
        turn_rate_rad_s: f64,
    },
}

/// A vehicle kind in the table.
#[derive(Clone, Copy, Debug)]
pub struct Kind {
    /// Its name in the site file.
    pub name: &'static str,
    /// The keys of its section.
    pub keys: &'static [Key],
    /// Builds it from checked values.
    build: fn(&Values) -> Arc<dyn Vehicle>,
}

/// All vehicle kinds.
pub const KINDS: &[Kind] = &[unicycle::KIND, differential::KIND, car::KIND];

/// Builds a vehicle, and returns the values with defaults filled in.
///
/// # Errors
/// If there is no such kind, or values are unknown, missing or outside their bounds.
pub fn build(kind: &str, given: &Values) -> Result<(Arc<dyn Vehicle>, Values), Vec<Problem>> {
    let Some(kind) = KINDS.iter().find(|entry| entry.name == kind) else {
        let known: Vec<&str> = KINDS.iter().map(|entry| entry.name).collect();
        return Err(vec![Problem::new(
            "kind",
            format!("no vehicle kind {kind:?}; known are {}", known.join(", ")),
        )]);
    };
    let values = given.checked(kind.keys)?;
    Ok(((kind.build)(&values), values))
}

/// The names of a kind's keys, for help.
pub fn key_names(kind: &Kind) -> String {
    names(kind.keys)
}

/// What the limits made of a wanted body velocity.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Limited {
    /// The command.
    pub wheels: Wheels,
    /// The body velocity that it amounts to.
    pub body: BodyVelocity,
    /// The speed limits scaled the wanted body velocity, or the steering limit bent it.
    pub speed_limited: bool,
    /// The acceleration limits cut the step from the last command.
    pub step_limited: bool,
}

/// The one rule for limits: first one factor on (v, ω) for the speed limits, which keeps the curvature (Oriolo, De Luca
/// and Vendittelli, IEEE Transactions on Control Systems Technology 10(6), 2002); then the largest step from the last
/// command towards the wanted one that the acceleration limits allow in `seconds`.
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
    let target = vehicle.wheels(scaled, rest_curvature_1_m);
    let share = largest_share(last, &target, &vehicle.largest_steps(seconds));
    let mut wheels = target;
    if share < 1.0 {
        for (value, last) in wheels.iter_mut().zip(last) {
            *value = last + share * (*value - last);
        }
    }
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
    let WheelLayout::SpeedSteer = vehicle.layout() else { return false };
    let reached = vehicle.body(target).turn_rate_rad_s;
    (reached - scaled.turn_rate_rad_s).abs() > ROUNDING * (1.0 + scaled.turn_rate_rad_s.abs())
}

/// The largest share, at most 1, of the way from `last` to `target` of which no part exceeds its step.
fn largest_share(last: &Wheels, target: &Wheels, steps: &Wheels) -> f64 {
    let mut share = 1.0;
    for ((last, target), step) in last.iter().zip(target).zip(steps) {
        let way = (target - last).abs();
        if way > *step && step / way < share {
            share = step / way;
        }
    }
    share
}

fn excess_of(what: &str, value: f64, limit: f64, unit: &str) -> Option<String> {
    (value.abs() > limit * (1.0 + ROUNDING))
        .then(|| format!("{what} {:.4} {unit}, the limit is {limit} {unit}", value.abs()))
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn machines() -> Vec<Arc<dyn Vehicle>> {
        let mut differential = Values::default();
        for (key, value) in [
            ("wheel_radius_m", 0.1),
            ("track_width_m", 0.5),
            ("max_wheel_speed_rad_s", 10.0),
            ("max_wheel_accel_rad_s2", 20.0),
        ] {
            differential.set(key, value);
        }
        let mut unicycle = Values::default();
        for (key, value) in [
            ("max_speed_m_s", 1.0),
            ("max_turn_rate_rad_s", 2.0),
            ("max_accel_m_s2", 1.5),
            ("max_turn_accel_rad_s2", 3.0),
        ] {
            unicycle.set(key, value);
        }
        let mut car = Values::default();
        for (key, value) in [
            ("wheelbase_m", 1.2),
            ("max_speed_m_s", 2.0),
            ("max_accel_m_s2", 1.0),
            ("max_steer_rad", 0.6),
            ("max_steer_rate_rad_s", 0.8),
        ] {
            car.set(key, value);
        }
        [("differential", differential), ("unicycle", unicycle), ("car", car)]
            .map(|(kind, values)| build(kind, &values).unwrap().0)
            .into()
    }

    proptest! {
        #[test]
        fn no_command_exceeds_speed_or_step_limits(
            wanted in prop::collection::vec((-8.0..8.0_f64, -8.0..8.0_f64), 1..60),
            curvature in -1.0..1.0_f64,
        ) {
            for machine in machines() {
                let mut last = [0.0; 4];
                for &(speed_m_s, turn_rate_rad_s) in &wanted {
                    let limited =
                        limit(&*machine, BodyVelocity { speed_m_s, turn_rate_rad_s }, curvature, &last, 0.02);
                    let steps = machine.largest_steps(0.02);
                    for index in 0..4 {
                        prop_assert!((limited.wheels[index] - last[index]).abs() <= steps[index] * (1.0 + 1e-9));
                    }
                    let top = match machine.layout() {
                        WheelLayout::LeftRight => [10.0, 10.0],
                        WheelLayout::Body => [1.0, 2.0],
                        WheelLayout::SpeedSteer => [2.0, 0.6],
                    };
                    prop_assert!(limited.wheels[0].abs() <= top[0] && limited.wheels[1].abs() <= top[1]);
                    last = limited.wheels;
                }
            }
        }

        #[test]
        fn wheel_conversion_goes_both_ways(speed_m_s in -1.0..1.0_f64, curvature in -0.5..0.5_f64) {
            prop_assume!(speed_m_s.abs() > 0.02);
            for machine in machines() {
                let velocity = BodyVelocity { speed_m_s, turn_rate_rad_s: speed_m_s * curvature };
                let back = machine.body(&machine.wheels(velocity, 0.0));
                prop_assert!((back.speed_m_s - velocity.speed_m_s).abs() < 1e-14);
                prop_assert!((back.turn_rate_rad_s - velocity.turn_rate_rad_s).abs() < 1e-14);
            }
        }
    }

    #[test]
    fn speed_limits_keep_the_curvature() {
        // Oriolo et al. 2002: v ≤ v_w/(1 + |κ|W/2); W 0.5, v_w 1: κ 0.5 → 0.8889, κ 2 → 0.6667.
        let differential = &machines()[0];
        for (curvature, top) in [(0.5, 0.888_888_9), (2.0, 0.666_666_7)] {
            let wanted = BodyVelocity { speed_m_s: 3.0, turn_rate_rad_s: 3.0 * curvature };
            let limited = limit(&**differential, wanted, 0.0, &[0.0; 4], 100.0);
            assert!((limited.body.speed_m_s - top).abs() < 1e-7, "{limited:?}");
            assert!((limited.body.turn_rate_rad_s / limited.body.speed_m_s - curvature).abs() < 1e-12);
            assert!(limited.speed_limited && !limited.step_limited);
        }
    }

    #[test]
    fn a_stopped_car_keeps_its_steering_and_takes_the_references_at_rest() {
        let car = &machines()[2];
        assert_eq!(car.zero(&[1.5, 0.3, 0.0, 0.0]), [0.0, 0.3, 0.0, 0.0]);
        let wheels = car.wheels(BodyVelocity::ZERO, 0.25);
        // Bicycle model, δ = atan(Lκ): L 1.2, κ 0.25: 16.699244° (ISO 8855 axes; computed with SciPy 1.17).
        assert!((wheels[1].to_degrees() - 16.699_244).abs() < 1e-6, "{wheels:?}");
    }
}
