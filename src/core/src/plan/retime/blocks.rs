//! Long runs under a jerk limit, block by block: what is best at a place hangs on the seconds around it only.
//!
//! A run is cut where the timing without a jerk limit is slowest in a while, so that a block begins and ends at a speed a
//! little below that and without acceleration.

use super::grid::{Cutting, Grid};
use super::knots::{self, Knot};
use super::{Bend, Limits, Path, Run, TimingPoint, Unsolvable, jerk};
use crate::math;
use alloc::vec;
use alloc::vec::Vec;

/// Duration of a block, s, and of the longest run that is not cut, in blocks.
const BLOCK_S: f64 = 45.0;
const LONGEST: f64 = 2.0;
/// A block begins and ends at this part of the speed without a jerk limit.
const SLOWER: f64 = 0.96;
/// A cut this near to a joint between two pieces lies there, m.
const NEAR_M: f64 = 0.01;

/// The fastest timing within a jerk limit, piece by piece.
pub(super) fn solve(
    run: &Run<'_>,
    limits: &dyn Limits,
    jerk_m_s3: f64,
) -> Result<Vec<Vec<TimingPoint>>, Unsolvable> {
    let mut grid = Grid::new(run, limits, &Cutting::Even);
    let fast = super::solve(run, limits, &mut grid)?;
    let duration_s = fast[fast.len() - 1].t_s;
    if duration_s > LONGEST * BLOCK_S {
        let cuts = cuts(&fast, duration_s, &grid.piece_begins);
        if let Ok(timing) = in_blocks(run, limits, jerk_m_s3, &cuts) {
            return Ok(timing);
        }
    }
    let whole = jerk::solve(run, limits, jerk_m_s3, &fast, grid.length_m())?;
    Ok(knots::by_piece(run, &whole))
}

/// Where the run is cut: (distance, speed).
fn cuts(fast: &[Knot], duration_s: f64, joints: &[f64]) -> Vec<(f64, f64)> {
    let count = math::round(duration_s / BLOCK_S);
    let step_s = duration_s / count;
    (1..count as usize)
        .filter_map(|index| slowest(fast, step_s * index as f64, step_s / 3.0, joints))
        .collect()
}

/// The slowest place within `reach_s` around an instant; of many at one speed the one nearest to the instant.
fn slowest(fast: &[Knot], about_s: f64, reach_s: f64, joints: &[f64]) -> Option<(f64, f64)> {
    let mut best: Option<(f64, f64)> = None;
    for pair in fast.windows(2) {
        let (from, to) = (&pair[0], &pair[1]);
        let (begin_s, end_s) = (from.t_s.max(about_s - reach_s), to.t_s.min(about_s + reach_s));
        if begin_s >= end_s {
            continue;
        }
        let level = (from.square - to.square).abs() < 1e-9 * from.square;
        let at_s = if level {
            about_s.clamp(begin_s, end_s)
        } else if from.square < to.square {
            begin_s
        } else {
            end_s
        };
        let (before, after) = (math::sqrt(from.square), math::sqrt(to.square));
        let part = (at_s - from.t_s) / (to.t_s - from.t_s);
        let speed = before + part * (after - before);
        let s_m = from.s_m + (at_s - from.t_s) * 0.5 * (before + speed);
        if best.is_none_or(|(_, slowest)| speed < slowest * (1.0 - 1e-9)) {
            best = Some((s_m, speed));
        }
    }
    let (mut s_m, speed) = best?;
    if let Some(joint) = joints.iter().find(|joint| (**joint - s_m).abs() < NEAR_M) {
        s_m = *joint;
    }
    (speed > 1e-3).then_some((s_m, SLOWER * speed))
}

/// A part of a piece.
struct Part<'a> {
    piece: usize,
    path: &'a dyn Path,
    from_m: f64,
    length_m: f64,
}

impl Path for Part<'_> {
    fn length_m(&self) -> f64 {
        self.length_m
    }

    fn bend(&self, s_m: f64) -> Bend {
        self.path.bend(self.from_m + s_m)
    }

    fn is_uniform(&self) -> bool {
        self.path.is_uniform()
    }

    fn top_speed_m_s(&self) -> f64 {
        self.path.top_speed_m_s()
    }
}

/// Solves block after block and puts the timings of each piece together.
fn in_blocks(
    run: &Run<'_>,
    limits: &dyn Limits,
    jerk_m_s3: f64,
    cuts: &[(f64, f64)],
) -> Result<Vec<Vec<TimingPoint>>, Unsolvable> {
    let mut timing: Vec<Vec<TimingPoint>> = vec![Vec::new(); run.pieces.len()];
    let (mut from_m, mut start_speed_m_s) = (0.0, run.start_speed_m_s);
    for (to_m, end_speed_m_s) in cuts.iter().copied().chain([(f64::INFINITY, run.end_speed_m_s)]) {
        let parts = parts(run, from_m, to_m);
        let pieces: Vec<&dyn Path> = parts.iter().map(|part| part as &dyn Path).collect();
        let block = Run { pieces: &pieces, start_speed_m_s, end_speed_m_s, share: run.share };
        let mut grid = Grid::new(&block, limits, &Cutting::Even);
        let fast = super::solve(&block, limits, &mut grid)?;
        let points = jerk::solve(&block, limits, jerk_m_s3, &fast, grid.length_m())?;
        for (part, fresh) in parts.iter().zip(knots::by_piece(&block, &points)) {
            let whole = &mut timing[part.piece];
            let begin_s = whole.last().map_or(0.0, |last| last.t_s);
            let known = usize::from(!whole.is_empty());
            whole.extend(fresh.into_iter().skip(known).map(|point| TimingPoint {
                t_s: begin_s + point.t_s,
                s_m: part.from_m + point.s_m,
                ..point
            }));
        }
        (from_m, start_speed_m_s) = (to_m, end_speed_m_s);
    }
    for (piece, points) in run.pieces.iter().zip(&mut timing) {
        if let Some(last) = points.last_mut() {
            last.s_m = piece.length_m();
        }
    }
    Ok(timing)
}

/// The parts of a run's pieces between two distances.
fn parts<'a>(run: &Run<'a>, from_m: f64, to_m: f64) -> Vec<Part<'a>> {
    let mut parts = Vec::new();
    let mut begin = 0.0;
    for (piece, path) in run.pieces.iter().enumerate() {
        let end = begin + path.length_m();
        let (first, last) = (from_m.max(begin), to_m.min(end));
        if last > first {
            parts.push(Part { piece, path: *path, from_m: first - begin, length_m: last - first });
        }
        begin = end;
    }
    parts
}
