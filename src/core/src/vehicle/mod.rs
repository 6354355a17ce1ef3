//! What moves: vehicle kinds, wheel conversion both ways, and the one rule for limits.
//!
//! A new kind is one new file and one line in [`KINDS`].
//!
//! | file | what it holds |
//! | --- | --- |
//! | `unicycle`, `differential`, `skid_steer`, `car`, `steered_wheel` | a kind each |
//! | `two_sided`, `common` | what kinds share |
//! | `load` | what a motion asks of the limits, and the bounds on speed and acceleration that follow |
//! | `limits` | the rule for commands |
//! | `inputs` | what the command's numbers do, for laws that look ahead |
//! | `wiring` | the drive map: a machine that is wired or geared another way |

mod car;
mod common;
mod differential;
mod inputs;
mod limits;
mod load;
mod skid_steer;
mod steered_wheel;
mod two_sided;
mod unicycle;
mod wiring;

pub use inputs::{InputMap, Inputs};
pub use limits::{Limited, Step, limit};
pub use load::{Demands, LimitName, Load, Loads, PathState, Range};

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

/// A machine: its geometry and its limits. Immutable.
pub trait Vehicle: Debug + Send + Sync {
    /// What the numbers of a wheel command mean.
    fn layout(&self) -> WheelLayout;

    /// The wheel command for a body velocity. A steered machine near rest, where a steering angle is undefined, steers
    /// for `rest_curvature_1_m`, where ±∞ means a turn on the spot to the left (right); one whose steering cannot reach the
    /// curvature steers as far as it can.
    /// `last` is the last command: where the same motion has two commands the nearer one is taken.
    fn wheels(&self, velocity: BodyVelocity, rest_curvature_1_m: f64, last: &Wheels) -> Wheels;

    /// The body velocity that a wheel command amounts to.
    fn body(&self, wheels: &Wheels) -> BodyVelocity;

    /// The command that stops: speed zero, the steering held.
    fn zero(&self, last: &Wheels) -> Wheels {
        let layout = self.layout();
        let mut zero = [0.0; 4];
        for (index, value) in zero.iter_mut().enumerate().filter(|(index, _)| layout.is_angle(*index)) {
            *value = last[index];
        }
        zero
    }

    /// The greatest factor, at most 1, that brings `velocity` within the speed limits.
    fn speed_factor(&self, velocity: BodyVelocity) -> f64;

    /// The most that each number of the wheel command may change in `seconds` on the way from `last` to `target`: a speed
    /// that falls in magnitude by the deceleration, any other by the acceleration.
    fn largest_steps(&self, last: &Wheels, target: &Wheels, seconds: f64) -> Wheels;

    /// The largest step from `last` towards `target` in which no number exceeds its largest step.
    fn step(&self, last: &Wheels, target: &Wheels, seconds: f64) -> Step {
        limits::part_of_the_way(last, target, &self.largest_steps(last, target, seconds))
    }

    /// How long the steering takes at rest from one curvature to another, s, where ±∞ means a turn on the spot; none for a
    /// machine that does not steer.
    fn swing_s(&self, before_1_m: f64, after_1_m: f64) -> Option<f64> {
        limits::swing_s(self, before_1_m, after_1_m)
    }

    /// The greatest magnitude of each number of a wheel command: what a drive may refuse to exceed.
    fn greatest(&self) -> Wheels;

    /// The machine as two bounded inputs and what they make it do, in its own terms: for laws that look ahead.
    fn inputs(&self) -> Inputs;

    /// A command in the machine's own terms as it goes out to the drives: the drive map of the site file. Every other
    /// method speaks of commands as they go out.
    fn to_drive(&self, machine: &Wheels) -> Wheels {
        *machine
    }

    /// A command as it goes out, in the machine's own terms: what the wheels really do.
    fn to_machine(&self, wheels: &Wheels) -> Wheels {
        *wheels
    }

    /// The greatest speed on a straight line, m/s.
    fn top_speed_m_s(&self) -> f64;

    /// The greatest turn rate, rad/s.
    fn top_turn_rate_rad_s(&self) -> f64;

    /// How the machine's limits bear on a place of a path, of this curvature (1/m) and change of the curvature with the
    /// way travelled (1/m²). The methods below answer from it.
    fn demands(&self, curvature_1_m: f64, curvature_rate_1_m2: f64) -> Demands;

    /// How its limits bear on turning on the spot; `None` for a machine that cannot.
    fn spot_demands(&self) -> Option<Demands>;

    /// The greatest jerk along a path, m/s³, where the site file gives one. The tick's limits know nothing of it: it is
    /// for those who choose a plan's timing, and for those who check one.
    fn max_jerk_m_s3(&self) -> Option<f64> {
        None
    }

    /// What a motion asks of each limit that the machine has.
    fn loads(&self, state: &PathState) -> Loads {
        self.demands(state.curvature_1_m, state.curvature_rate_1_m2).loads(state.speed_m_s, state.accel_m_s2)
    }

    /// What turning on the spot asks of each limit; `None` for a machine that cannot.
    fn pivot_loads(&self, turn_rate_rad_s: f64, turn_accel_rad_s2: f64) -> Option<Loads> {
        Some(self.spot_demands()?.loads(turn_rate_rad_s, turn_accel_rad_s2))
    }

    /// The greatest speed within `share` of every limit of a speed: wheel speed, speed, turn rate, steering rate, lateral
    /// acceleration. 0 if the steering cannot reach the curvature with its whole angle. m/s.
    fn speed_bound_m_s(&self, curvature_1_m: f64, curvature_rate_1_m2: f64, share: f64) -> f64 {
        self.demands(curvature_1_m, curvature_rate_1_m2).speed_bound(share)
    }

    /// The least and the greatest acceleration along the path at a speed (at least 0), within `share` of the limits of
    /// every wheel: m/s², below 0 the machine slows down. Where the curvature changes so fast that a wheel cannot follow
    /// at this speed the least is above the greatest, and there is none.
    fn accel_bounds_m_s2(
        &self,
        speed_m_s: f64,
        curvature_1_m: f64,
        curvature_rate_1_m2: f64,
        share: f64,
    ) -> (f64, f64) {
        self.demands(curvature_1_m, curvature_rate_1_m2).accel_bounds(speed_m_s, share)
    }

    /// The greatest turn rate (rad/s) and turn acceleration, as great a deceleration included (rad/s²), on the spot
    /// within `share` of the limits; `None` for a machine that cannot.
    fn pivot_bounds(&self, share: f64) -> Option<(f64, f64)> {
        let demands = self.spot_demands()?;
        Some((demands.speed_bound(share), share * demands.speeding_and_braking()))
    }

    /// The greatest deceleration along a path while this curvature holds, m/s².
    fn path_decel_m_s2(&self, curvature_1_m: f64) -> f64 {
        self.demands(curvature_1_m, 0.0).braking()
    }

    /// The greatest turn deceleration on the spot, rad/s²; `None` for a machine that cannot turn on the spot.
    fn pivot_decel_rad_s2(&self) -> Option<f64> {
        Some(self.spot_demands()?.braking())
    }

    /// Which limit the machine would exceed at this speed and curvature, or on the spot at this turn rate, in words;
    /// none if it can move like this.
    fn excess(&self, motion: Motion) -> Option<String> {
        match motion {
            Motion::Along { speed_m_s, curvature_1_m } => self.demands(curvature_1_m, 0.0).excess(speed_m_s),
            Motion::Pivot { turn_rate_rad_s } => match self.spot_demands() {
                Some(demands) => demands.excess(turn_rate_rad_s),
                None => Some(String::from("turning on the spot: this machine steers and cannot do that")),
            },
        }
    }
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

/// A machine, or every key of its section that does not go with the others.
pub type Built = Result<Arc<dyn Vehicle>, Vec<Problem>>;

/// A vehicle kind in the table.
#[derive(Clone, Copy, Debug)]
pub struct Kind {
    /// Its name in the site file.
    pub name: &'static str,
    /// The keys of its section.
    pub keys: &'static [Key],
    /// Builds it from checked values.
    build: fn(&Values) -> Built,
}

/// All vehicle kinds.
pub const KINDS: &[Kind] =
    &[unicycle::KIND, differential::KIND, skid_steer::KIND, car::KIND, steered_wheel::KIND];

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
    Ok((wiring::wire((kind.build)(&values)?, &values)?, values))
}

/// The names of a kind's keys, for help.
pub fn key_names(kind: &Kind) -> String {
    names(kind.keys)
}

#[cfg(test)]
mod tests;
