//! What every segment kind gives: a stretch of geometry with its literal timing.

use super::file::RawSegment;
use super::{Reference, clothoid, curve, nurbs, pivot, samples, spline};
use crate::geometry::Pose;
use crate::keys::{Key, Problem, Values};
use crate::vehicle::Vehicle;
use alloc::boxed::Box;
use alloc::string::String;
use alloc::vec::Vec;
use core::fmt::Debug;

/// How far along a stretch something is, and how it moves there: m, m/s, m/s², or rad, rad/s, rad/s² on a pivot. Counts up
/// from 0 in reverse too.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Progress {
    /// Progress from the stretch's beginning.
    pub at: f64,
    /// Its rate, not negative.
    pub rate: f64,
    /// The rate's rate.
    pub accel: f64,
}

/// Which ways something drives; neither on a pivot.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Travel {
    /// Somewhere forward.
    pub forward: bool,
    /// Somewhere in reverse.
    pub reverse: bool,
}

impl Travel {
    /// Both together.
    pub const fn with(self, other: Self) -> Self {
        Self { forward: self.forward || other.forward, reverse: self.reverse || other.reverse }
    }
}

/// A segment, compiled.
pub trait Stretch: Debug + Send + Sync {
    /// Duration by its literal timing, s.
    fn duration_s(&self) -> f64;

    /// Length, m, or angle, rad, from beginning to end.
    fn extent(&self) -> f64;

    /// Length of path, m; 0 for pivots and dwells.
    fn path_length_m(&self) -> f64;

    /// The progress at `t_s` by the literal timing.
    fn timing(&self, t_s: f64) -> Progress;

    /// The reference at a progress, whatever the timing.
    fn at_progress(&self, progress: Progress) -> Reference;

    /// The reference at `t_s` by the literal timing.
    fn at(&self, t_s: f64) -> Reference {
        self.at_progress(self.timing(t_s))
    }

    /// Which ways it drives.
    fn travel(&self) -> Travel;

    /// Tells the beginning of the segment after it to one that rests, so that steered wheels turn there meanwhile.
    fn prepare_for(&mut self, _next: &Reference) {}

    /// Where, strictly inside, the curvature or its rate may step: progress, rising. Computed on request, not for a tick.
    fn seams(&self) -> Vec<f64> {
        Vec::new()
    }

    /// The deceleration with which this machine can brake on it down to the rate `exit` at its end, m/s² (rad/s²).
    fn brake_decel(&self, vehicle: &dyn Vehicle, exit: f64) -> f64;

    /// The last instant at which the literal timing is no faster than a braking curve that ends the stretch at the rate
    /// `exit` with the deceleration `decel`; none if it is faster everywhere.
    fn brake_from_s(&self, exit: f64, decel: f64) -> Option<f64>;

    /// Visits the literal timing from beginning to end in about `steps` intervals of equal length; where the stretch
    /// consists of pieces, both ends of each.
    fn sweep(&self, steps: usize, visit: &mut dyn FnMut(f64, &Reference)) {
        for step in 0..=steps {
            let t_s = self.duration_s() * step as f64 / steps.max(1) as f64;
            visit(t_s, &self.at(t_s));
        }
    }

    /// Visits the way-poses that it was made from, as they were stated, each with its time from the beginning, s.
    fn way_poses(&self, _visit: &mut dyn FnMut(f64, Pose)) {}

    /// The first instant at which the literal timing asks for more than this machine's speed limits, and the excess in
    /// words.
    fn first_excess(&self, vehicle: &dyn Vehicle) -> Option<(f64, String)>;
}

/// What a segment joins on to.
#[derive(Clone, Copy, Debug)]
pub struct Joint {
    /// The end of the segment before it, or the plan's start.
    pub pose: Pose,
    /// The curvature there, 1/m.
    pub curvature_1_m: f64,
    /// What a machine that rests there is steered for, see [`Reference::rest_curvature_1_m`].
    pub rest_curvature_1_m: f64,
    /// True if a segment that states its own place is refused where it does not meet this pose; false where the check
    /// looks at the gap.
    pub strict: bool,
}

/// A segment kind in the table.
#[derive(Clone, Copy, Debug)]
pub struct Kind {
    /// Its name in the plan file.
    pub name: &'static str,
    /// Its numbers.
    pub keys: &'static [Key],
    /// True if it may be driven in reverse.
    pub(super) reversible: bool,
    /// True if it has points.
    pub(super) has_points: bool,
    /// Its lists of numbers.
    pub(super) lists: &'static [&'static str],
    /// True if it may state a profile or a timing point by point.
    pub(super) timed: bool,
    /// Builds it from checked values.
    pub(super) build: Build,
}

impl Kind {
    /// A kind of path, reversible and timed, without points and lists; its keys are still to be named.
    pub(super) const fn path(name: &'static str, build: Build) -> Self {
        Self { name, keys: &[], reversible: true, has_points: false, lists: &[], timed: true, build }
    }

    /// A kind without direction of travel, timing, points and lists of its own.
    pub(super) const fn plain(name: &'static str, build: Build) -> Self {
        Self { name, keys: &[], reversible: false, has_points: false, lists: &[], timed: false, build }
    }
}

/// Builds a segment from its raw form and its checked numbers.
pub(super) type Build = fn(&RawSegment, &Values, Joint) -> Result<Box<dyn Stretch>, Vec<Problem>>;

/// All segment kinds.
pub const KINDS: &[Kind] = &[
    curve::LINE,
    curve::ARC,
    clothoid::CLOTHOID,
    spline::SPLINE,
    nurbs::NURBS,
    pivot::PIVOT,
    pivot::DWELL,
    samples::SAMPLES,
];
