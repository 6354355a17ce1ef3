//! What every segment kind gives: a stretch of geometry with its literal timing.

use super::file::RawSegment;
use super::{Reference, curve, pivot, samples};
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

    /// The deceleration with which this machine can brake anywhere on it, m/s² (rad/s²).
    fn brake_decel(&self, vehicle: &dyn Vehicle) -> f64;

    /// The last instant at which the literal timing is no faster than a braking curve that ends the stretch at the rate
    /// `exit` with the deceleration `decel`; none if it is faster everywhere.
    fn brake_from_s(&self, exit: f64, decel: f64) -> Option<f64>;

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
    /// Builds it from checked values.
    pub(super) build: Build,
}

/// Builds a segment from its raw form and its checked numbers.
pub(super) type Build = fn(&RawSegment, &Values, Joint) -> Result<Box<dyn Stretch>, Vec<Problem>>;

/// All segment kinds.
pub const KINDS: &[Kind] = &[curve::LINE, curve::ARC, pivot::PIVOT, pivot::DWELL, samples::SAMPLES];

/// Constant acceleration over a stretch: the timing of lines, arcs and pivots.
#[derive(Clone, Copy, Debug)]
pub(super) struct Uniform {
    extent: f64,
    begin_rate: f64,
    accel: f64,
    duration_s: f64,
}

impl Uniform {
    /// From one rate to another over `extent`; at least one of the rates is positive.
    pub(super) fn new(extent: f64, begin_rate: f64, end_rate: f64) -> Self {
        Self {
            extent,
            begin_rate,
            accel: (end_rate * end_rate - begin_rate * begin_rate) / (2.0 * extent),
            duration_s: 2.0 * extent / (begin_rate + end_rate),
        }
    }

    pub(super) fn extent(&self) -> f64 {
        self.extent
    }

    pub(super) fn duration_s(&self) -> f64 {
        self.duration_s
    }

    pub(super) fn fastest(&self) -> (f64, f64) {
        if self.accel > 0.0 {
            (self.duration_s, self.begin_rate + self.accel * self.duration_s)
        } else {
            (0.0, self.begin_rate)
        }
    }

    pub(super) fn at(&self, t_s: f64) -> Progress {
        Progress {
            at: t_s * (self.begin_rate + 0.5 * self.accel * t_s),
            rate: self.begin_rate + self.accel * t_s,
            accel: self.accel,
        }
    }

    /// See [`Stretch::brake_from_s`]. Both v² are linear in progress, so they cross at most once.
    pub(super) fn brake_from_s(&self, exit: f64, decel: f64) -> Option<f64> {
        let end_square = self.begin_rate * self.begin_rate + 2.0 * self.accel * self.extent;
        if end_square <= exit * exit {
            return Some(self.duration_s);
        }
        let ahead = exit * exit + 2.0 * decel * self.extent - self.begin_rate * self.begin_rate;
        if ahead < 0.0 {
            return None;
        }
        let at = ahead / (2.0 * (self.accel + decel));
        let rate = crate::math::sqrt((self.begin_rate * self.begin_rate + 2.0 * self.accel * at).max(0.0));
        Some(2.0 * at / (self.begin_rate + rate).max(f64::MIN_POSITIVE))
    }
}
