//! Where a steered machine rests between two motions, and how long it has to, so that the steering gets from the one's end
//! to the other's beginning.

use super::runs::{Options, RunOf};
use super::{NewTiming, Path};
use crate::math;
use crate::plan::Placed;
use crate::vehicle::Vehicle;
use alloc::vec::Vec;

/// Dwells last whole milliseconds: rounded up, and good to read.
const PER_S: f64 = 1000.0;

/// A rest put in for the steering.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Dwell {
    /// Index of the segment that it comes before, or lies in.
    pub segment: usize,
    /// Where in the segment, m; 0 before it.
    pub at_m: f64,
    /// How long, s; where it makes a dwell of the plan's own longer, by how much.
    pub duration_s: f64,
    /// Index of that dwell, if there is one.
    pub longer: Option<usize>,
}

/// What is driven in one go: a run of paths, or a pivot.
#[derive(Clone, Copy, Debug)]
struct Motion {
    segment: usize,
    at_m: f64,
    last_segment: usize,
    /// What it is steered for at its beginning and its end, 1/m; ±∞ on the spot.
    begin_1_m: f64,
    end_1_m: f64,
}

impl Motion {
    fn of_run(run: &RunOf<'_, '_>) -> Self {
        let (first, last) = (&run.pieces[0], &run.pieces[run.pieces.len() - 1]);
        Self {
            segment: first.segment,
            at_m: first.from_m,
            last_segment: last.segment,
            begin_1_m: first.bend(0.0).curvature_1_m,
            end_1_m: last.bend(f64::INFINITY).curvature_1_m,
        }
    }

    fn of_pivot(placed: &Placed<'_>) -> Self {
        let on_the_spot = placed.stretch.at(0.0).rest_curvature_1_m;
        Self {
            segment: placed.index,
            at_m: 0.0,
            last_segment: placed.index,
            begin_1_m: on_the_spot,
            end_1_m: on_the_spot,
        }
    }
}

/// The rests that the steering needs beyond those that the plan has. At the beginning of a plan of its own the wheels are
/// taken to point straight ahead.
pub(super) fn dwells(
    placed: &[Placed<'_>],
    runs: &[RunOf<'_, '_>],
    vehicle: &dyn Vehicle,
    options: &Options,
    continues: bool,
) -> Vec<Dwell> {
    let mut motions: Vec<Motion> = runs.iter().map(Motion::of_run).collect();
    motions.extend(placed.iter().filter(|segment| segment.kind == "pivot").map(Motion::of_pivot));
    motions.sort_by_key(|motion| (motion.segment, motion.at_m > 0.0));
    let mut found = Vec::new();
    let mut before = (!continues && options.start_speed_m_s == 0.0).then_some((0.0, 0));
    for motion in &motions {
        if let Some((held_1_m, from)) = before {
            let own = from.min(motion.segment)..motion.segment;
            found.extend(missing(&placed[own], motion, held_1_m, vehicle, options));
        }
        before = Some((motion.end_1_m, motion.last_segment + 1));
    }
    found
}

/// What is missing before a motion, where these segments lie between it and the one before.
fn missing(
    between: &[Placed<'_>],
    motion: &Motion,
    held_1_m: f64,
    vehicle: &dyn Vehicle,
    options: &Options,
) -> Option<Dwell> {
    let step_1_m = (motion.begin_1_m - held_1_m).abs();
    if step_1_m.is_nan() || step_1_m <= options.steps.curvature_step_1_m {
        return None;
    }
    let needed_s = vehicle.swing_s(held_1_m, motion.begin_1_m)? / (1.0 - options.reserve);
    let own_s: f64 = between.iter().map(|dwell| dwell.duration_s).sum();
    if needed_s <= own_s {
        return None;
    }
    let duration_s = math::ceil((needed_s - own_s) * PER_S) / PER_S;
    Some(Dwell {
        segment: motion.segment,
        at_m: motion.at_m,
        duration_s,
        longer: between.last().map(|dwell| dwell.index),
    })
}

/// Makes the plan's own dwells longer.
pub(super) fn lengthen(dwells: &[Dwell], placed: &[Placed<'_>], timings: &mut [NewTiming]) {
    for dwell in dwells {
        if let Some(index) = dwell.longer {
            timings[index] = NewTiming::Dwell { duration_s: placed[index].duration_s + dwell.duration_s };
        }
    }
}
