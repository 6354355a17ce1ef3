//! Timing within a jerk limit: the optimum on a grid of even times (`barrier`), averaged over a short time (`average`).
//!
//! On the grid the acceleration steps from cell to cell by no more than the jerk allows in the time between. The average
//! over a few cells turns the steps into ramps. Averaged speeds and accelerations at a place come from no farther than half
//! the way covered in that time, so the limits of every cell are kept in all cells that near, and the average keeps them
//! at every place: it slows before a bend. What the argument leaves open (mean squares are not squares of means) dense
//! sampling finds, and the cell's share is lowered.

use super::average::{Law, cubic, join, with_joints};
use super::barrier::Problem;
use super::grid::{Averaging, Cutting, Grid, POINTS};
use super::verify::{self, Excess};
use super::{Bend, Limits, Run, TimingPoint, Unsolvable, knots, passes};
use crate::math;
use alloc::vec::Vec;

/// The averaging time is this part of the duration, at most [`LONGEST_AVERAGE_S`].
const AVERAGE_PART: f64 = 0.01;
const LONGEST_AVERAGE_S: f64 = 0.05;
/// Cells in the averaging time.
const CELLS: f64 = 10.0;
const COARSE_CELLS: f64 = 5.0;
/// About the least number of cells: a cell is no longer than eight parts of so many.
const LEAST_CELLS: f64 = 128.0;
/// Most cells; beyond, they grow and the averaging time with them.
const MOST_CELLS: usize = 20_000;
/// Two points of the result are not closer than this, s, or this part of the averaging time: below, rounding would show
/// as jerk.
const SHORTEST_S: f64 = 1e-3;
const SHORTEST_PART: f64 = 0.02;
/// Rounds of the loop that lowers shares and the grid's jerk until everything holds.
const MAX_ROUNDS: usize = 12;
/// Speeds below zero by no more than this are rounding, m/s.
const BACKWARDS_M_S: f64 = 1e-9;
/// Where pieces are joined the acceleration may step by this part of what the jerk allows in a tenth of a second.
const JOIN_PART: f64 = 0.02;

/// The fastest timing within a jerk limit, from the one without (`fast`).
pub(super) fn solve(
    run: &Run<'_>,
    limits: &dyn Limits,
    jerk: f64,
    fast: &[knots::Knot],
    length_m: f64,
) -> Result<Vec<TimingPoint>, Unsolvable> {
    let scale = Scale::of(fast, run, length_m, jerk);
    // Cells of even time need the speeds to come: found roughly, they cut the grid for the second time.
    let (scale, cuts) = scale.cut();
    let mut rough = looking_around(run, limits, &scale, cuts)?;
    let (scale, cuts) = scale.refined(&on_grid(run, limits, &mut rough, jerk)?).cut();
    let mut grid = looking_around(run, limits, &scale, cuts)?;
    smooth(run, limits, &mut grid, scale.average_s, jerk)
}

/// The averaged optimum on the grid, as soon as everything holds.
fn smooth(
    run: &Run<'_>,
    limits: &dyn Limits,
    grid: &mut Grid,
    average_s: f64,
    jerk: f64,
) -> Result<Vec<TimingPoint>, Unsolvable> {
    let mut grid_jerk = jerk * CELLS / (CELLS + 1.1);
    let mut place = (0, 0.0);
    for _ in 0..MAX_ROUNDS {
        let law = Law::new(on_grid(run, limits, grid, grid_jerk)?);
        let found_jerk = law.greatest_change(average_s) / average_s;
        if found_jerk > jerk * (1.0 + 1e-9) {
            let part = jerk / found_jerk;
            grid_jerk *= part * math::sqrt(part) * 0.999;
            continue;
        }
        let joints = &grid.piece_begins[1..run.pieces.len()];
        let shortest_s = SHORTEST_S.min(SHORTEST_PART * average_s);
        let points = with_joints(law.average(run, average_s, shortest_s), joints, shortest_s);
        let excesses = excesses(run, limits, grid, &points, false);
        let Some(first) = excesses.first() else {
            let holds = |from, to| excesses_of(run, limits, grid, (from, to), true).is_empty();
            return Ok(join(&points, joints, JOIN_PART * 0.1 * jerk, holds));
        };
        place = grid.place(first.cell);
        grid.tighten(&excesses, 2e-3);
    }
    Err(Unsolvable::TooRough { piece: place.0, at_m: place.1 })
}

/// How fine the grid is.
struct Scale {
    average_s: f64,
    cell_s: f64,
    /// Speeds near those to come: (distance, squared speed).
    curve: Vec<(f64, f64)>,
    /// Where the acceleration changes without a jerk limit, m.
    changes: Vec<f64>,
    /// Way around such a change in which cells are short, per speed, s.
    around_s: f64,
    length_m: f64,
    jerk: f64,
    /// True if it begins, ends at rest.
    rests: (bool, bool),
}

impl Scale {
    /// From the fastest timing without a jerk limit.
    fn of(fast: &[knots::Knot], run: &Run<'_>, length_m: f64, jerk: f64) -> Self {
        // From rest to rest with nothing but a jerk limit: (32 L/J)^(1/3).
        let by_jerk_s = math::cbrt(32.0 * length_m / jerk);
        let average_s = average_s(by_jerk_s.max(fast[fast.len() - 1].t_s));
        let strongest = fast
            .windows(2)
            .map(|pair| (pair[1].square - pair[0].square).abs() / (2.0 * (pair[1].s_m - pair[0].s_m)))
            .fold(0.0, f64::max);
        Self {
            average_s,
            cell_s: average_s / COARSE_CELLS,
            curve: fast.iter().map(|knot| (knot.s_m, knot.square)).collect(),
            changes: fast.iter().map(|knot| knot.s_m).collect(),
            around_s: 1.0 + 2.0 * strongest / jerk,
            length_m,
            jerk,
            rests: (run.start_speed_m_s == 0.0, run.end_speed_m_s == 0.0),
        }
    }

    /// The same from a timing within the jerk limit.
    fn refined(self, rough: &[TimingPoint]) -> Self {
        let average_s = average_s(rough[rough.len() - 1].t_s);
        let curve = rough.iter().map(|point| (point.s_m, point.speed_m_s * point.speed_m_s)).collect();
        Self { average_s, cell_s: average_s / CELLS, curve, ..self }
    }

    /// A speed near the one to come.
    fn speed(&self, s_m: f64) -> f64 {
        let next = self.curve.partition_point(|point| point.0 <= s_m).clamp(1, self.curve.len() - 1);
        let (from, to) = (self.curve[next - 1], self.curve[next]);
        let square = from.1 + (to.1 - from.1) * (s_m - from.0) / (to.0 - from.0);
        let mut speed = math::sqrt(square.max(0.0));
        // From rest with nothing but a jerk limit: v = ½ J^(1/3) (6 s)^(2/3).
        for (rests, way) in [(self.rests.0, s_m), (self.rests.1, self.length_m - s_m)] {
            if rests {
                let root = math::cbrt(6.0 * way.max(0.0));
                speed = speed.min(0.5 * math::cbrt(self.jerk) * root * root);
            }
        }
        speed
    }

    /// Where the run is cut; with longer cells and averages where there would be too many.
    fn cut(mut self) -> (Self, Vec<f64>) {
        loop {
            if let Some(cuts) = self.cuts() {
                return (self, cuts);
            }
            self.cell_s *= 1.5;
            self.average_s *= 1.5;
        }
    }

    /// Cells of even time, longer in the middle of long ways at one speed, from both ends to the middle; none if there
    /// are too many.
    fn cuts(&self) -> Option<Vec<f64>> {
        let middle = 0.5 * self.length_m;
        let mut cuts = self.march(|way| way, middle)?;
        let back = self.march(|way| self.length_m - way, middle)?;
        cuts.extend(back.iter().rev().map(|way| self.length_m - way));
        Some(cuts)
    }

    /// Ways from an end to each cut up to the middle.
    fn march(&self, place: impl Fn(f64) -> f64, middle: f64) -> Option<Vec<f64>> {
        // What a jerk covers from rest in the time of a cell.
        let from_rest = self.jerk * self.cell_s * self.cell_s * self.cell_s / 6.0;
        let shortest = from_rest.min(self.length_m / LEAST_CELLS);
        let mut ways = Vec::new();
        let mut way = 0.0;
        while ways.len() < MOST_CELLS {
            let (here, there) = (self.speed(place(way + 0.5 * shortest)), self.speed(place(way + shortest)));
            let speed = here.max(there);
            let still = (self.to_change(place(way)) - speed * self.around_s).max(0.0);
            let step =
                (speed * self.cell_s).max(0.05 * still).max(shortest).min(8.0 * self.length_m / LEAST_CELLS);
            way += step;
            if way > middle - 0.4 * step {
                return Some(ways);
            }
            ways.push(way);
        }
        None
    }

    /// Distance to the nearest change of acceleration, m.
    fn to_change(&self, s_m: f64) -> f64 {
        let next = self.changes.partition_point(|change| *change <= s_m);
        let before = next.checked_sub(1).map_or(f64::INFINITY, |index| s_m - self.changes[index]);
        self.changes.get(next).map_or(before, |change| before.min(change - s_m))
    }
}

fn average_s(duration_s: f64) -> f64 {
    (AVERAGE_PART * duration_s).min(LONGEST_AVERAGE_S)
}

/// The grid on which every cell keeps the limits of all cells as near as half the way covered in the averaging time.
fn looking_around(
    run: &Run<'_>,
    limits: &dyn Limits,
    scale: &Scale,
    cuts: Vec<f64>,
) -> Result<Grid, Unsolvable> {
    let half_s = 0.5 * scale.average_s;
    let averaging =
        Averaging { cuts, lead_in_m: run.start_speed_m_s * half_s, lead_out_m: run.end_speed_m_s * half_s };
    let needed_m = averaging.lead_in_m + averaging.lead_out_m;
    if needed_m >= scale.length_m {
        return Err(Unsolvable::TooShortForJerk { needed_m });
    }
    let mut grid = Grid::new(run, limits, &Cutting::For(averaging));
    // No machine is faster in a bend.
    let top = limits.speed_bound_m_s(Bend::default(), run.share);
    let windows: Vec<(usize, usize)> = (0..grid.cells.len())
        .map(|index| {
            let (from, end) = (grid.cells[index].from_m, grid.end_m(index));
            let speed = scale.speed(from).max(scale.speed(end)) * 1.05 + 0.02;
            let reach = half_s * top.min(speed);
            // A hair less than the reach at both ends, so that touching is not overlapping.
            (grid.cell_at(from - reach + 1e-9), grid.cell_at(end + reach - 1e-9))
        })
        .collect();
    for (cell, window) in grid.cells.iter_mut().zip(windows) {
        cell.window = window;
    }
    Ok(grid)
}

/// The optimum on the grid, as a time law of constant accelerations.
fn on_grid(
    run: &Run<'_>,
    limits: &dyn Limits,
    grid: &mut Grid,
    jerk: f64,
) -> Result<Vec<TimingPoint>, Unsolvable> {
    // What can be driven without the jerk limit tells which ends are impossible, and is nowhere exceeded.
    let upper = passes::fastest(run, limits, grid)?;
    let (first, end) = grid.inner;
    let problem = rows(limits, grid, &upper, jerk);
    let begin = beginning(run, &problem).ok_or(Unsolvable::EndsWithinJerk)?;
    let inner = problem.solve(begin);
    let mut squares = upper;
    squares[first..=end].copy_from_slice(&inner);
    let mut points = Vec::with_capacity(end - first + 1);
    let mut t_s = 0.0;
    for (node, square) in squares.iter().enumerate().take(end + 1).skip(first) {
        let s_m = grid.node_m(node);
        let speed_m_s = math::sqrt(*square);
        if let Some(TimingPoint { s_m: before_m, speed_m_s: before, .. }) = points.last() {
            t_s += 2.0 * (s_m - before_m) / (before + speed_m_s);
        }
        points.push(TimingPoint { t_s, s_m, speed_m_s });
    }
    Ok(points)
}

/// Bounds on s̈ as lines in x, on the safe side: at rest and at the greatest x they are exact, and between the least is
/// convex and the greatest concave.
fn rows(limits: &dyn Limits, grid: &Grid, upper: &[f64], jerk: f64) -> Problem {
    let (first, end) = grid.inner;
    let mut problem = Problem {
        lengths: (first..end).map(|index| grid.node_m(index + 1) - grid.node_m(index)).collect(),
        least: Vec::new(),
        greatest: Vec::new(),
        caps: grid.caps[first..=end].to_vec(),
        jerk,
    };
    for index in first..end {
        let square = upper[index].max(upper[index + 1]).max(1e-9);
        let (at_rest, fast) = (all_accels(limits, grid, index, 0.0), all_accels(limits, grid, index, square));
        if fast.0.is_finite() && fast.1.is_finite() {
            problem.least.push((at_rest.0, (fast.0 - at_rest.0) / square));
            problem.greatest.push((at_rest.1, (fast.1 - at_rest.1) / square));
        } else {
            // Between two nodes a wheel has no acceleration left at all: half the speed has.
            problem.least.push((at_rest.0, 0.0));
            problem.greatest.push((at_rest.1, 0.0));
            for cap in &mut problem.caps[index - first..index - first + 2] {
                *cap = cap.min(0.25 * square);
            }
        }
    }
    problem
}

/// The bounds on s̈ at all points of a cell.
fn all_accels(limits: &dyn Limits, grid: &Grid, index: usize, square: f64) -> (f64, f64) {
    // A window's bounds are the same at every point.
    let points = if grid.cells[index].window.0 == grid.cells[index].window.1 { POINTS } else { 1 };
    (0..points)
        .map(|point| grid.accels(limits, index, point, square))
        .fold((f64::NEG_INFINITY, f64::INFINITY), |both, one| (both.0.max(one.0), both.1.min(one.1)))
}

/// Squared speeds with room to every bound, far below what can be driven: a curve of constant jerk at rests, and from
/// the speeds at the ends smooth steps down to it, over as long a way as the bounds allow.
fn beginning(run: &Run<'_>, problem: &Problem) -> Option<Vec<f64>> {
    const PARTS: [f64; 7] = [1.0, 0.5, 0.25, 0.125, 0.06, 0.03, 0.015];
    let ends = (run.start_speed_m_s * run.start_speed_m_s, run.end_speed_m_s * run.end_speed_m_s);
    let count = |square: f64| if square > 0.0 { PARTS.len() } else { 1 };
    let last = problem.lengths.len();
    let least_cap = problem.caps[1..last].iter().copied().fold(1.0, f64::min);
    let (done, left) = problem.ways();
    let total = done[last];
    let pairs = PARTS[..count(ends.0)]
        .iter()
        .flat_map(|one| PARTS[..count(ends.1)].iter().map(move |other| (one, other)));
    for (first, second) in pairs {
        let mut low = 0.25 * least_cap;
        // Half the speed needs an eighth of the jerk and a quarter of the acceleration.
        for _ in 0..40 {
            let square = |node: usize| {
                let part = 4.0 * done[node] / total * left[node] / total;
                // As a timing of constant jerk begins and ends: x in proportion to s^(4/3).
                let rest = low * part * math::cbrt(part);
                rest + ends.0 * falling(done[node] / total / first)
                    + ends.1 * falling(left[node] / total / second)
            };
            let mut begin: Vec<f64> = (0..=last).map(square).collect();
            (begin[0], begin[last]) = ends;
            if problem.holds(&begin) {
                return Some(begin);
            }
            low *= 0.25;
        }
    }
    None
}

/// From 1 at 0 to 0 at 1, with no slope and no bend at its ends.
fn falling(part: f64) -> f64 {
    let t = part.clamp(0.0, 1.0);
    1.0 - t * t * t * (10.0 - t * (15.0 - 6.0 * t))
}

/// Every cell in which a timing exceeds a limit.
fn excesses(
    run: &Run<'_>,
    limits: &dyn Limits,
    grid: &Grid,
    points: &[TimingPoint],
    one_is_enough: bool,
) -> Vec<Excess> {
    points
        .windows(2)
        .flat_map(|pair| excesses_of(run, limits, grid, (pair[0], pair[1]), one_is_enough))
        .collect()
}

/// The same of the cubic between two points.
fn excesses_of(
    run: &Run<'_>,
    limits: &dyn Limits,
    grid: &Grid,
    (from, to): (TimingPoint, TimingPoint),
    one_is_enough: bool,
) -> Vec<Excess> {
    let mut found: Vec<Excess> = Vec::new();
    let count = 4 * (grid.cell_at(to.s_m) - grid.cell_at(from.s_m) + 1);
    for sample in 0..=count {
        let past = (to.t_s - from.t_s) * sample as f64 / count as f64;
        let (s, speed, accel) = cubic(from, to, past);
        // At a node the last sample belongs to the cell before it.
        let index = grid.cell_at(if sample == count { s - 1e-9 } else { s + 1e-9 });
        let share = verify::share_between(run, &grid.cells[index]);
        let motion = (speed.max(0.0), accel);
        let mut relative =
            verify::excess_at(limits, share, &grid.cells[index], grid.bend_at(index, s), motion);
        if speed < -BACKWARDS_M_S {
            relative = 1.0;
        }
        if relative > 1e-9 {
            match found.last_mut() {
                Some(last) if last.cell == index => last.relative = last.relative.max(relative),
                _ => found.push(Excess { cell: index, relative }),
            }
            if one_is_enough {
                break;
            }
        }
    }
    found
}
