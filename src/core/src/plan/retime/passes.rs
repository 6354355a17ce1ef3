//! The two passes over the grid: backwards the highest squared speed from which the rest can still be driven, forwards as
//! high as the acceleration reaches under that.
//!
//! Within a cell the acceleration u is constant, so x is linear in s; the bounds are kept at the cell's beginning, middle
//! and end. At each of these points the bounds are linear in (u, x), so each pass looks for the end of an interval.

use super::grid::{Grid, POINTS};
use super::{Limits, Run, Unsolvable};
use crate::math;
use alloc::vec;
use alloc::vec::Vec;

/// Points of a cell at which the passes keep the bounds, and their share of its length.
const KEPT: [(usize, f64); 3] = [(0, 0.0), (POINTS / 2, 0.5), (POINTS - 1, 1.0)];

/// The squared speed at every node. Outside the inner cells it is the start's and the end's.
pub(super) fn fastest(run: &Run<'_>, limits: &dyn Limits, grid: &mut Grid) -> Result<Vec<f64>, Unsolvable> {
    grid.set_caps(run, limits);
    let (first, end) = grid.inner;
    let start = run.start_speed_m_s * run.start_speed_m_s;
    let exit = run.end_speed_m_s * run.end_speed_m_s;
    check_caps(run, grid)?;
    let least_cap = |nodes: &[f64]| nodes.iter().copied().fold(f64::INFINITY, f64::min);
    let end_cap = least_cap(&grid.caps[end..]);
    if exit > end_cap * (1.0 + 1e-12) {
        return Err(Unsolvable::EndSpeed { greatest_m_s: math::sqrt(end_cap) });
    }
    let mut reachable = vec![exit; grid.cells.len() + 1];
    for index in (first..end).rev() {
        reachable[index] = before(limits, grid, index, reachable[index + 1]);
    }
    let start_cap = least_cap(&grid.caps[..first]).min(reachable[first]);
    if start > start_cap * (1.0 + 1e-12) {
        return Err(Unsolvable::StartSpeed { greatest_m_s: math::sqrt(start_cap) });
    }
    let mut squares = reachable;
    squares[..=first].fill(start);
    for index in first..end {
        squares[index + 1] = after(limits, grid, index, squares[index], squares[index + 1]);
    }
    // A billionth of room: the passes find bounds by halving.
    if squares[end] < exit * (1.0 - 1e-9) {
        return Err(Unsolvable::EndSpeed { greatest_m_s: math::sqrt(squares[end]) });
    }
    Ok(squares)
}

fn check_caps(run: &Run<'_>, grid: &Grid) -> Result<(), Unsolvable> {
    for (index, cell) in grid.cells.iter().enumerate() {
        // A speed below a micrometre a second never gets anywhere.
        let stuck = |node: usize| node > 0 && node < grid.cells.len() && grid.caps[node] < 1e-12;
        if stuck(index) || grid.cells.len() == 1 && grid.caps[0] < 1e-12 {
            let at_m = cell.from_m - grid.piece_begins[cell.piece];
            let curvature_1_m = run.pieces[cell.piece].bend(at_m).curvature_1_m;
            return Err(Unsolvable::NoSpeed { piece: cell.piece, at_m, curvature_1_m });
        }
    }
    Ok(())
}

/// The constant bounds on a line or an arc: (least, greatest) s̈ that hold at every speed up to the cap.
pub(super) fn uniform_accels(limits: &dyn Limits, grid: &Grid, index: usize) -> (f64, f64) {
    let cap = grid.cap(limits, index, 0);
    let (rest, fast) = (grid.accels(limits, index, 0, 0.0), grid.accels(limits, index, 0, cap));
    (rest.0.max(fast.0), rest.1.min(fast.1))
}

/// The highest x at a cell's beginning from which `next` at its end is not overshot.
fn before(limits: &dyn Limits, grid: &Grid, index: usize, next: f64) -> f64 {
    let (cap, length) = (grid.caps[index], grid.cells[index].length_m);
    if grid.cells[index].uniform {
        let (least, _) = uniform_accels(limits, grid, index);
        return cap.min(next - 2.0 * least * length).max(0.0);
    }
    let holds = |square: f64| {
        let accel = (next - square) / (2.0 * length);
        KEPT.iter().all(|&(point, part)| {
            accel >= grid.accels(limits, index, point, square + part * (next - square)).0
        })
    };
    if holds(cap) { cap } else { greatest(0.0, cap, holds) }
}

/// The highest x at a cell's end, at most `cap`, that is reached from `from` at its beginning.
fn after(limits: &dyn Limits, grid: &Grid, index: usize, from: f64, cap: f64) -> f64 {
    let length = grid.cells[index].length_m;
    if grid.cells[index].uniform {
        let (_, greatest) = uniform_accels(limits, grid, index);
        return cap.min(from + 2.0 * greatest * length);
    }
    let holds = |square: f64| {
        let accel = (square - from) / (2.0 * length);
        KEPT.iter()
            .all(|&(point, part)| accel <= grid.accels(limits, index, point, from + part * (square - from)).1)
    };
    if holds(cap) { cap } else { greatest(0.0, cap, holds) }
}

/// The greatest number in [low, high] that holds, of an interval that begins at `low`: by halving.
pub(super) fn greatest(mut low: f64, mut high: f64, holds: impl Fn(f64) -> bool) -> f64 {
    for _ in 0..60 {
        let middle = 0.5 * (low + high);
        if holds(middle) {
            low = middle;
        } else {
            high = middle;
        }
        if high - low <= 1e-15 * high {
            break;
        }
    }
    low
}
