//! From squared speeds on the grid to knots: pieces of constant acceleration between them, and few of them.

use super::grid::Grid;
use super::{Limits, Run, TimingPoint, passes, verify};
use crate::math;
use alloc::vec::Vec;

/// Two knots are not closer than this, m: shorter pieces hold rounding only.
const SHORTEST_M: f64 = 1e-6;
/// A short piece is left out only if the speed changes less than this on it, relative.
const SLIVER_PART: f64 = 0.01;
/// A joined piece's squared speed stays this close to the original, relative.
const JOIN_RELATIVE: f64 = 2e-3;

/// A point of the curve of squared speed over distance.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Knot {
    pub(super) t_s: f64,
    pub(super) s_m: f64,
    pub(super) square: f64,
    /// True where two pieces of path join: never joined over.
    fixed: bool,
}

impl Knot {
    fn new(s_m: f64, square: f64, fixed: bool) -> Self {
        Self { t_s: 0.0, s_m, square, fixed }
    }

    /// With speed instead of its square.
    pub(super) fn timed(&self) -> TimingPoint {
        TimingPoint { t_s: self.t_s, s_m: self.s_m, speed_m_s: math::sqrt(self.square) }
    }
}

/// The knots of all cells: their ends, and where the acceleration changes on lines and arcs.
pub(super) fn fill(run: &Run<'_>, limits: &dyn Limits, grid: &Grid, squares: &[f64]) -> Vec<Knot> {
    let mut knots = Vec::with_capacity(squares.len() + 2 * run.pieces.len());
    let (first, end) = grid.inner;
    for (index, cell) in grid.cells.iter().enumerate() {
        let fixed = index == 0 || grid.cells[index - 1].piece != cell.piece || index == first || index == end;
        knots.push(Knot::new(cell.from_m, squares[index], fixed));
        if cell.uniform && (first..end).contains(&index) {
            fill_uniform(limits, grid, index, (squares[index], squares[index + 1]), &mut knots);
        }
    }
    knots.push(Knot::new(grid.length_m(), squares[squares.len() - 1], true));
    knots
}

/// On a line or an arc: up, along the cap, down; or up and down.
fn fill_uniform(
    limits: &dyn Limits,
    grid: &Grid,
    index: usize,
    (from, to): (f64, f64),
    knots: &mut Vec<Knot>,
) {
    let cell = &grid.cells[index];
    let cap = grid.cap(limits, index, 0);
    let (least, greatest) = passes::uniform_accels(limits, grid, index);
    let (up, down) = (2.0 * greatest, -2.0 * least);
    let length = cell.length_m;
    // In a short piece the rounding of times and distances, which grows with the length, shows as acceleration.
    let shortest_s = math::sqrt(2e-6 * length / greatest.min(-least));
    let is_sliver = |way: f64, square: f64, other: f64| {
        let (speed, change) = (math::sqrt(square), (math::sqrt(square) - math::sqrt(other)).abs());
        way <= SHORTEST_M || way < speed * shortest_s && change < SLIVER_PART * speed
    };
    let mut add = |at: f64, square: f64| {
        let last = knots[knots.len() - 1];
        let before = is_sliver(at - (last.s_m - cell.from_m), square, last.square);
        if !before && !is_sliver(length - at, square, to) {
            knots.push(Knot::new(cell.from_m + at, square, false));
        }
    };
    let (rise, fall) = ((cap - from) / up, (cap - to) / down);
    if rise + fall <= length {
        add(rise, cap);
        add(length - fall, cap);
    } else {
        let peak = (to - from + down * length) / (up + down);
        add(peak, from + up * peak);
    }
}

/// Joins pieces as long as the joined one keeps the limits and stays close to the curve.
pub(super) fn thin(run: &Run<'_>, limits: &dyn Limits, grid: &Grid, knots: &[Knot]) -> Vec<Knot> {
    let joins = |from: usize, to: usize| {
        is_close(&knots[from..=to])
            && verify::piece_holds(
                run,
                limits,
                grid,
                (knots[from].s_m, knots[from].square),
                (knots[to].s_m, knots[to].square),
            )
    };
    join_runs(knots, |knot| knot.fixed, joins)
}

/// Keeps of a chain its ends, what is `fixed`, and as little else as `joins` allows between one that is kept and the next.
/// Strides double while they hold and halve where they do not, so that long runs cost few trials.
pub(super) fn join_runs<T: Copy>(
    chain: &[T],
    fixed: impl Fn(&T) -> bool,
    joins: impl Fn(usize, usize) -> bool,
) -> Vec<T> {
    let last = chain.len() - 1;
    let mut kept = Vec::with_capacity(chain.len());
    let mut from = 0;
    while from < last {
        kept.push(chain[from]);
        let barrier = (from + 1..last).find(|index| fixed(&chain[*index])).unwrap_or(last);
        let (mut to, mut stride) = (from + 1, 1);
        while stride > 0 {
            let next = (to + stride).min(barrier);
            if next > to && joins(from, next) {
                to = next;
                stride *= 2;
            } else {
                stride /= 2;
            }
        }
        from = to;
    }
    kept.push(chain[last]);
    kept
}

/// True if the straight line from first to last stays close to all knots between.
fn is_close(knots: &[Knot]) -> bool {
    let (first, last) = (&knots[0], &knots[knots.len() - 1]);
    let slope = (last.square - first.square) / (last.s_m - first.s_m);
    knots.iter().all(|knot| {
        let line = first.square + slope * (knot.s_m - first.s_m);
        (line - knot.square).abs() <= JOIN_RELATIVE * knot.square
    })
}

/// Sets the times: a piece of constant acceleration takes its length over its mean speed.
pub(super) fn with_times(knots: &[Knot]) -> Vec<Knot> {
    let mut timed = knots.to_vec();
    for index in 1..timed.len() {
        let (before, here) = (timed[index - 1], timed[index]);
        let speeds = math::sqrt(before.square) + math::sqrt(here.square);
        timed[index].t_s = before.t_s + 2.0 * (here.s_m - before.s_m) / speeds;
    }
    timed
}

/// Cuts a run's points at the joints between its pieces; times and distances count from each piece's beginning.
pub(super) fn by_piece(run: &Run<'_>, points: &[TimingPoint]) -> Vec<Vec<TimingPoint>> {
    let mut pieces = Vec::with_capacity(run.pieces.len());
    let mut begin_m = 0.0;
    let mut next = 0;
    for (index, piece) in run.pieces.iter().enumerate() {
        let length = piece.length_m();
        let is_last = index + 1 == run.pieces.len();
        let begin = points[next];
        let mut own: Vec<TimingPoint> = Vec::new();
        loop {
            let point = points[next];
            let ends = if is_last {
                next + 1 == points.len()
            } else {
                !own.is_empty() && point.s_m >= begin_m + length - SHORTEST_M * 0.1
            };
            let s_m = if own.is_empty() {
                0.0
            } else if ends {
                length
            } else {
                point.s_m - begin_m
            };
            own.push(TimingPoint { t_s: point.t_s - begin.t_s, s_m, speed_m_s: point.speed_m_s });
            if ends {
                break;
            }
            next += 1;
        }
        pieces.push(own);
        begin_m += length;
    }
    pieces
}
