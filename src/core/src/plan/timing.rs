//! How far along a segment something is at each instant: progress as a piecewise cubic of time.
//!
//! Constant speed, constant acceleration, trapezoids, jerk-limited profiles and timings stated point by point are all
//! phases of constant jerk, one after the other.

use super::segment::Progress;
use crate::math;
use alloc::boxed::Box;
use alloc::vec::Vec;

/// A stretch of time with one jerk.
#[derive(Clone, Copy, Debug)]
pub(super) struct Phase {
    /// Begin, from the segment's beginning, s.
    pub(super) begin_s: f64,
    /// Progress, rate and acceleration there.
    pub(super) at: f64,
    pub(super) rate: f64,
    pub(super) accel: f64,
    pub(super) jerk: f64,
}

impl Phase {
    fn progress(&self, t_s: f64) -> Progress {
        let t = t_s - self.begin_s;
        Progress {
            at: self.at + t * (self.rate + t * (0.5 * self.accel + t * (self.jerk * (1.0 / 6.0)))),
            rate: (self.rate + t * (self.accel + t * (0.5 * self.jerk))).max(0.0),
            accel: self.accel + t * self.jerk,
        }
    }

    /// The instant at which the acceleration is `accel`, if the jerk leads there.
    fn instant_of_accel(&self, accel: f64) -> Option<f64> {
        (self.jerk != 0.0).then(|| self.begin_s + (accel - self.accel) / self.jerk)
    }
}

/// The timing of a segment. Immutable.
#[derive(Debug)]
pub(super) struct Timing {
    phases: Box<[Phase]>,
    extent: f64,
    duration_s: f64,
}

impl Timing {
    /// Phases in the order of their beginnings, the first at 0, which cover `extent` (m or rad) in `duration_s`.
    pub(super) fn new(phases: Vec<Phase>, extent: f64, duration_s: f64) -> Self {
        debug_assert!(phases.first().is_some_and(|first| first.begin_s == 0.0));
        Self { phases: phases.into(), extent, duration_s }
    }

    /// From one rate to another at constant acceleration over `extent`; at least one of the rates is positive.
    pub(super) fn uniform(extent: f64, begin_rate: f64, end_rate: f64) -> Self {
        let accel = (end_rate * end_rate - begin_rate * begin_rate) / (2.0 * extent);
        let phase = Phase { begin_s: 0.0, at: 0.0, rate: begin_rate, accel, jerk: 0.0 };
        Self::new(Vec::from([phase]), extent, 2.0 * extent / (begin_rate + end_rate))
    }

    pub(super) fn extent(&self) -> f64 {
        self.extent
    }

    pub(super) fn duration_s(&self) -> f64 {
        self.duration_s
    }

    /// The progress at `t_s`, from 0 to the duration; at a joint of phases the later one counts. O(log phases).
    pub(super) fn at(&self, t_s: f64) -> Progress {
        let index = self.phases.partition_point(|phase| phase.begin_s <= t_s).saturating_sub(1);
        self.phases[index].progress(t_s)
    }

    /// The rate at the end.
    pub(super) fn exit_rate(&self) -> f64 {
        self.at(self.duration_s).rate
    }

    /// The instants at which the rate can be greatest or least: begin and end of each phase, and where its acceleration
    /// changes sign.
    pub(super) fn turning_points(&self) -> impl Iterator<Item = f64> {
        (0..self.phases.len()).flat_map(|index| {
            let (phase, end_s) = (&self.phases[index], self.end_of(index));
            let inside = phase.instant_of_accel(0.0).filter(|t_s| *t_s > phase.begin_s && *t_s < end_s);
            let last = (index + 1 == self.phases.len()).then_some(self.duration_s);
            [Some(phase.begin_s), inside, last].into_iter().flatten()
        })
    }

    /// The first instant of the greatest rate, and that rate.
    pub(super) fn fastest(&self) -> (f64, f64) {
        let mut fastest = (0.0, -1.0);
        for t_s in self.turning_points() {
            let rate = self.at(t_s).rate;
            if rate > fastest.1 {
                fastest = (t_s, rate);
            }
        }
        fastest
    }

    fn end_of(&self, index: usize) -> f64 {
        self.phases.get(index + 1).map_or(self.duration_s, |next| next.begin_s)
    }

    /// See [`Stretch::brake_from_s`](super::segment::Stretch::brake_from_s). The literal rate² less the braking curve's
    /// falls where the timing itself brakes harder than `decel` and rises elsewhere, so each phase has at most two
    /// stretches of time in which they can cross.
    pub(super) fn brake_from_s(&self, exit: f64, decel: f64) -> Option<f64> {
        let allowed = exit * exit + 2.0 * decel * self.extent;
        let slower = |t_s: f64| {
            let progress = self.at(t_s);
            progress.rate * progress.rate + 2.0 * decel * progress.at <= allowed
        };
        let exit_rate = self.exit_rate();
        if exit_rate * exit_rate <= exit * exit {
            return Some(self.duration_s);
        }
        for index in (0..self.phases.len()).rev() {
            let (phase, mut faster) = (&self.phases[index], self.end_of(index));
            let split = phase.instant_of_accel(-decel).filter(|t_s| *t_s > phase.begin_s && *t_s < faster);
            for t_s in [split, Some(phase.begin_s)].into_iter().flatten() {
                if slower(t_s) {
                    return Some(
                        crossing(phase, allowed, decel).unwrap_or_else(|| bisected(slower, t_s, faster)),
                    );
                }
                faster = t_s;
            }
        }
        None
    }
}

/// Where a phase of constant acceleration meets the braking curve: both v² are linear in progress.
fn crossing(phase: &Phase, allowed: f64, decel: f64) -> Option<f64> {
    if phase.jerk != 0.0 {
        return None;
    }
    let square = phase.rate * phase.rate;
    let way = ((allowed - 2.0 * decel * phase.at - square) / (2.0 * (phase.accel + decel))).max(0.0);
    let rate = math::sqrt((square + 2.0 * phase.accel * way).max(0.0));
    Some(phase.begin_s + 2.0 * way / (phase.rate + rate).max(f64::MIN_POSITIVE))
}

fn bisected(slower: impl Fn(f64) -> bool, mut low: f64, mut high: f64) -> f64 {
    // A double has 53 bits: more halvings than that change nothing.
    for _ in 0..60 {
        let middle = 0.5 * (low + high);
        if slower(middle) { low = middle } else { high = middle }
    }
    low
}
