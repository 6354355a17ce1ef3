//! How to follow: a law computes a body velocity from reference and pose. One file a law, one trait, one table.

pub mod at_rest;
mod blend;
pub mod design;
mod dynamic;
mod feedback;
mod input;
mod integral;
mod kanayama;
mod linear;
mod lqr;
mod nonlinear;
mod off_axle;
pub mod predictive;
mod pure_pursuit;
mod riccati;
mod samson;
mod stanley;
mod way;

pub use design::Design;
pub use feedback::{Feedback, FeedbackParams, OutsideDomain, Rested};
pub use input::{Ahead, Context, Input, OnPlan, Steady};

use crate::geometry::BodyVelocity;
use crate::keys::{Key, Problem, Values};
use crate::math;
use crate::plan::check::Following;
use crate::plan::segment::Travel;
use alloc::boxed::Box;
use alloc::format;
use alloc::vec;
use alloc::vec::Vec;
use core::fmt::Debug;
use design::Given;

/// Where a law may be used.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Domain {
    /// The greatest heading error, rad.
    pub max_heading_error_rad: f64,
    /// False if the law would turn the machine round on the way forward.
    pub forward: bool,
    /// False if the law would turn the machine round in reverse.
    pub reverse: bool,
    /// The slowest reference (m/s, in magnitude) that the law steers for by itself: a slower one it leaves to another law,
    /// and says so. 0 for a law that follows at any speed.
    pub least_speed_m_s: f64,
    /// True if the law corrects the heading also while the reference turns on the spot.
    pub pivots: bool,
    /// True if the law corrects the heading also while the reference rests.
    pub at_rest: bool,
}

impl Domain {
    /// No bounds.
    pub const EVERYWHERE: Self = Self {
        max_heading_error_rad: math::PI,
        forward: true,
        reverse: true,
        least_speed_m_s: 0.0,
        pivots: true,
        at_rest: true,
    };

    /// The domain as a plan's check asks for it.
    pub const fn following(&self) -> Following {
        let Self { forward, reverse, least_speed_m_s, .. } = *self;
        Following { forward, reverse, least_speed_m_s }
    }

    /// Whether a plan's ways of driving lie in the domain: the direction that does not, as "reverse?".
    pub const fn unfit_direction(&self, travel: Travel) -> Option<bool> {
        if travel.forward && !self.forward {
            Some(false)
        } else if travel.reverse && !self.reverse {
            Some(true)
        } else {
            None
        }
    }
}

/// The machines that a law is made for.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Machines {
    /// Every kind.
    All,
    /// Those that turn on the spot: the law may ask for a turn rate at rest.
    TurningOnTheSpot,
    /// Those that steer.
    Steered,
}

impl Machines {
    /// Why a law for these machines is not for this one; none if it is.
    pub fn unfit(self, context: &Context) -> Option<&'static str> {
        let steered = context.vehicle.layout().is_steered();
        let turns = context.vehicle.pivot_decel_rad_s2().is_some();
        match self {
            Self::TurningOnTheSpot if !turns => {
                Some("this law is for machines that turn on the spot, and this one cannot")
            }
            Self::Steered if !steered => {
                Some("this law is for machines that steer, and this one does not; give another law")
            }
            _ => None,
        }
    }
}

/// What a law wants.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Wanted {
    /// The body velocity, before any limit.
    pub velocity: BodyVelocity,
    /// True if the law had to leave this tick to the law that it falls back to.
    pub fallback: bool,
}

impl From<BodyVelocity> for Wanted {
    fn from(velocity: BodyVelocity) -> Self {
        Self { velocity, fallback: false }
    }
}

/// A tracking law.
pub trait Law: Debug + Send {
    /// The body velocity wanted. Finite for every input within the domain. Does not allocate.
    fn control(&mut self, input: &Input<'_>) -> Wanted;

    /// Where the law may be used.
    fn domain(&self) -> Domain;

    /// How fast the feedback across the path is while the reference moves at this speed (m/s): the natural frequency
    /// (above a damping of 1 times that: half the heading's feedback), or for a first-order law the inverse of its time
    /// constant, rad/s. With dead time τ it must stay well below 1/τ.
    fn bandwidth_rad_s(&self, speed_m_s: f64) -> f64;

    /// Tells what became of the last result, so that a law with memory can take the tick in. `limited`: the limits
    /// changed the result; integrating then would wind up.
    fn settle(&mut self, input: &Input<'_>, limited: bool, seconds: f64) {
        let _ = (input, limited, seconds);
    }

    /// Forgets everything but how the machine moves now: before a start, and where the law takes over.
    fn reset(&mut self, motion: BodyVelocity) {
        let _ = motion;
    }
}

/// A law in the table.
#[derive(Clone, Copy, Debug)]
pub struct Kind {
    /// Its name in the site file.
    pub name: &'static str,
    /// Its raw gains.
    pub gains: &'static [Key],
    /// How what an engineer asks for becomes raw gains, if it can.
    pub design: Option<design::Recipe>,
    /// The machines it is made for.
    pub machines: Machines,
    build: Build,
}

/// Builds a law from checked gains, for a machine that it is made for.
type Build = fn(&Values, &Context) -> Result<Box<dyn Law>, Vec<Problem>>;

/// All laws.
pub const KINDS: &[Kind] = &[
    kanayama::KIND,
    samson::KIND,
    off_axle::KIND,
    linear::KIND,
    nonlinear::KIND,
    dynamic::KIND,
    lqr::KIND,
    predictive::KIND,
    pure_pursuit::KIND,
    stanley::KIND,
];

/// Finds a law in the table.
///
/// # Errors
/// If there is none of this name.
pub fn find(name: &str) -> Result<&'static Kind, Problem> {
    KINDS.iter().find(|kind| kind.name == name).ok_or_else(|| {
        let known: Vec<&str> = KINDS.iter().map(|kind| kind.name).collect();
        Problem::new("name", format!("no law {name:?}; known are {}", known.join(", ")))
    })
}

/// Checks the keys of the section `law.gains` as far as that goes without a machine: names, bounds, and what excludes
/// what.
///
/// # Errors
/// If there is no such law, or every key that does not hold.
pub fn check(name: &str, given: &Values) -> Result<(), Vec<Problem>> {
    let kind = find(name).map_err(|problem| vec![problem])?;
    Given::read(kind, given).map(drop).map_err(in_gains)
}

/// A law's raw gains for a machine: defaults filled in, design keys resolved.
///
/// # Errors
/// If there is no such law, or every key that is unknown, outside its bound, excluded by another one, or asks for a raw
/// gain outside its bound.
pub fn gains(name: &str, given: &Values, context: &Context) -> Result<Values, Vec<Problem>> {
    let kind = find(name).map_err(|problem| vec![problem])?;
    Given::read(kind, given).and_then(|given| given.resolve(kind, context)).map_err(in_gains)
}

/// Builds a law for a machine, and returns its raw gains: defaults filled in, design keys resolved.
///
/// # Errors
/// If there is no such law, if it is not made for this machine, or what is wrong with its gains: see [`gains`].
pub fn build(name: &str, given: &Values, context: &Context) -> Result<(Box<dyn Law>, Values), Vec<Problem>> {
    let kind = find(name).map_err(|problem| vec![problem])?;
    if let Some(why) = kind.machines.unfit(context) {
        return Err(vec![Problem::new("name", format!("{name}: {why}"))]);
    }
    let gains = gains(name, given, context)?;
    Ok(((kind.build)(&gains, context).map_err(in_gains)?, gains))
}

/// Raw gains of a law with some keys changed: where those are design keys, the raw gains that they determine go.
///
/// # Errors
/// If there is no such law.
pub fn changed(name: &str, raw: &Values, keys: &Values) -> Result<Values, Problem> {
    find(name).map(|kind| design::overlaid(kind, raw, keys))
}

fn in_gains(problems: Vec<Problem>) -> Vec<Problem> {
    problems.into_iter().map(|problem| problem.within("gains")).collect()
}

#[cfg(test)]
mod steered_tests;
#[cfg(test)]
pub(crate) mod testing;
#[cfg(test)]
mod tests;
