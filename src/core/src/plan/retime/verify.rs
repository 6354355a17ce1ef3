//! Dense sampling of a timing against the limits themselves, at five points a cell.

use super::grid::{Cell, Grid, POINTS};
use super::knots::Knot;
use super::{Bend, Limits, Run};
use crate::math;
use alloc::vec::Vec;

/// Room for rounding, relative.
const ROUNDING: f64 = 1e-9;

/// Room for what lies between the points where the curvature varies, relative.
const BETWEEN: f64 = 2e-4;

/// A cell in which a limit is exceeded.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Excess {
    pub(super) cell: usize,
    /// By how much of the limit.
    pub(super) relative: f64,
}

/// Every cell in which the pieces between `knots` exceed a limit.
pub(super) fn excesses(run: &Run<'_>, limits: &dyn Limits, grid: &Grid, knots: &[Knot]) -> Vec<Excess> {
    let mut found = Vec::new();
    for pair in knots.windows(2) {
        piece_excesses(
            run,
            limits,
            grid,
            ((pair[0].s_m, pair[0].square), (pair[1].s_m, pair[1].square)),
            &mut |excess| {
                found.push(excess);
                true
            },
        );
    }
    found
}

/// True if the piece of constant acceleration between two points (distance, squared speed) keeps every limit.
pub(super) fn piece_holds(
    run: &Run<'_>,
    limits: &dyn Limits,
    grid: &Grid,
    from: (f64, f64),
    to: (f64, f64),
) -> bool {
    let mut holds = true;
    piece_excesses(run, limits, grid, (from, to), &mut |_| {
        holds = false;
        false
    });
    holds
}

/// Visits every cell with an excess on one piece, until `visit` says that it has seen enough.
fn piece_excesses(
    run: &Run<'_>,
    limits: &dyn Limits,
    grid: &Grid,
    (from, to): ((f64, f64), (f64, f64)),
    visit: &mut dyn FnMut(Excess) -> bool,
) {
    let slope = (to.1 - from.1) / (to.0 - from.0);
    let (first, last) = (grid.cell_at(from.0), grid.cell_at(to.0));
    for index in first..=last {
        let cell = &grid.cells[index];
        if cell.from_m >= to.0 {
            break;
        }
        let mut relative: f64 = 0.0;
        for point in 0..POINTS {
            let along = cell.from_m + cell.length_m * point as f64 / (POINTS - 1) as f64;
            // A piece that begins or ends inside the cell meets the bounds of the points beside it there.
            let s = along.clamp(from.0, to.0);
            let square = (from.1 + slope * (s - from.0)).max(0.0);
            relative = relative.max(excess(run, limits, grid, (index, point), square, 0.5 * slope));
        }
        if relative > ROUNDING && !visit(Excess { cell: index, relative }) {
            return;
        }
    }
}

/// By how much of a limit this motion exceeds it, relative; 0 if it does not.
fn excess(
    run: &Run<'_>,
    limits: &dyn Limits,
    grid: &Grid,
    (index, point): (usize, usize),
    square: f64,
    accel: f64,
) -> f64 {
    let cell = &grid.cells[index];
    let share = share_between(run, cell);
    excess_at(limits, share, cell, cell.bends[point], (math::sqrt(square), accel))
}

/// The share of the limits to keep at points, so that it is kept between them.
pub(super) fn share_between(run: &Run<'_>, cell: &Cell) -> f64 {
    if cell.uniform { run.share } else { run.share * (1.0 - BETWEEN) }
}

/// By how much of a limit a motion (speed, acceleration) exceeds it at a bend in a cell, relative; 0 if it does not.
pub(super) fn excess_at(
    limits: &dyn Limits,
    share: f64,
    cell: &Cell,
    bend: Bend,
    (speed, accel): (f64, f64),
) -> f64 {
    let bound = limits.speed_bound_m_s(bend, share).min(cell.top_m_s);
    let (least, greatest) = limits.accel_bounds_m_s2(speed, bend, share);
    let (rest_least, rest_greatest) = limits.accel_bounds_m_s2(0.0, bend, share);
    let scale = rest_greatest.min(-rest_least);
    (speed / bound - 1.0).max((accel - greatest) / scale).max((least - accel) / scale).max(0.0)
}
