//! The grid: a run cut into cells, each with the curvature at five points and its own share of the limits.

use super::verify::Excess;
use super::{Bend, Limits, Path, Run, STEP_M};
use crate::math;
use alloc::vec;
use alloc::vec::Vec;

/// Points of a cell at which curvature is kept, its ends included.
pub(super) const POINTS: usize = 5;
/// Least number of cells on a piece whose curvature varies.
const MIN_CELLS: f64 = 24.0;
/// Most cells of a run; beyond, the step grows.
const MAX_CELLS: f64 = 200_000.0;
/// In the middle of a cell bounds may leave the line between its ends by this part of themselves, a sixteenth of that
/// between two of its points; else the cell is halved, up to so many times.
const SAG: f64 = 1.6e-3;
const MOST_HALVINGS: u32 = 8;
/// Part of the limits used where the curvature varies, so that joining cells into few pieces has room.
const ROOM: f64 = 0.998;

/// The part of a path over which the acceleration is constant, or, on lines and arcs, rises once and falls once.
#[derive(Clone, Copy, Debug)]
pub(super) struct Cell {
    /// Index of the piece it lies on.
    pub(super) piece: usize,
    /// Beginning, from the run's beginning, m.
    pub(super) from_m: f64,
    /// Length, m.
    pub(super) length_m: f64,
    /// True on lines and arcs.
    pub(super) uniform: bool,
    /// Curvature at evenly spaced points.
    pub(super) bends: [Bend; POINTS],
    /// Greatest speed wanted here, m/s.
    pub(super) top_m_s: f64,
    /// Share of the limits to use here.
    pub(super) share: f64,
    /// First and last cell whose limits must hold here too; itself, if there is no jerk limit.
    pub(super) window: (usize, usize),
}

/// What a jerk limit asks of a grid.
#[derive(Clone, Debug)]
pub(super) struct Averaging {
    /// Where the run is cut, apart from the joints between its pieces, m.
    pub(super) cuts: Vec<f64>,
    /// Ways at the run's ends that are driven at constant speed, m.
    pub(super) lead_in_m: f64,
    pub(super) lead_out_m: f64,
}

/// How a run is cut into cells.
#[derive(Clone, Debug)]
pub(super) enum Cutting {
    /// Evenly where the curvature varies; lines and arcs are a cell each.
    Even,
    /// As a jerk limit asks.
    For(Averaging),
}

/// All cells of a run.
#[derive(Clone, Debug)]
pub(super) struct Grid {
    pub(super) cells: Vec<Cell>,
    /// Greatest x at each node: one more than cells.
    pub(super) caps: Vec<f64>,
    /// The cells between lead-in and lead-out.
    pub(super) inner: (usize, usize),
    /// Beginning of each piece, and the run's end, m.
    pub(super) piece_begins: Vec<f64>,
}

impl Grid {
    pub(super) fn new(run: &Run<'_>, limits: &dyn Limits, cutting: &Cutting) -> Self {
        let mut piece_begins = vec![0.0];
        let mut cells = Vec::new();
        let varying: f64 =
            run.pieces.iter().filter(|piece| !piece.is_uniform()).map(|piece| piece.length_m()).sum();
        let step = STEP_M.max(varying / MAX_CELLS);
        let total: f64 = run.pieces.iter().map(|piece| piece.length_m()).sum();
        let mut begin = 0.0;
        for (index, piece) in run.pieces.iter().enumerate() {
            let cuts = match cutting {
                Cutting::Even => even_cuts(*piece, step, limits, run.share),
                Cutting::For(averaging) => averaging.cuts_of(begin, piece.length_m(), total),
            };
            for pair in cuts.windows(2) {
                cells.push(cell(*piece, index, begin, (pair[0], pair[1]), run.share, cells.len()));
            }
            begin += piece.length_m();
            piece_begins.push(begin);
        }
        let mut grid = Self { inner: (0, cells.len()), caps: Vec::new(), cells, piece_begins };
        if let Cutting::For(averaging) = cutting {
            grid.inner = grid.inside(averaging, total);
        }
        grid.set_caps(run, limits);
        grid
    }

    /// Indices of the cells between lead-in and lead-out.
    fn inside(&self, averaging: &Averaging, total: f64) -> (usize, usize) {
        // Cells at a rest are nanometres long; a cut is met to rounding.
        let nodes_before =
            |s_m: f64| self.cells.partition_point(|cell| cell.from_m < s_m * (1.0 - 4.0 * f64::EPSILON));
        let first = nodes_before(averaging.lead_in_m);
        let end = if averaging.lead_out_m > 0.0 {
            nodes_before(total - averaging.lead_out_m)
        } else {
            self.cells.len()
        };
        (first, end.max(first))
    }

    /// Length of the run, m.
    pub(super) fn length_m(&self) -> f64 {
        self.piece_begins[self.piece_begins.len() - 1]
    }

    /// End of a cell, m.
    pub(super) fn end_m(&self, cell: usize) -> f64 {
        self.cells.get(cell + 1).map_or(self.length_m(), |next| next.from_m)
    }

    /// Distance of a node from the run's beginning, m.
    pub(super) fn node_m(&self, node: usize) -> f64 {
        self.cells.get(node).map_or(self.length_m(), |cell| cell.from_m)
    }

    /// The curvature at a distance from the run's beginning, between the points kept in a cell.
    pub(super) fn bend_at(&self, index: usize, s_m: f64) -> Bend {
        let cell = &self.cells[index];
        let along = ((s_m - cell.from_m) / cell.length_m).clamp(0.0, 1.0) * (POINTS - 1) as f64;
        let first = (along as usize).min(POINTS - 2);
        let (part, from, to) = (along - first as f64, cell.bends[first], cell.bends[first + 1]);
        let between = |from: f64, to: f64| from + part * (to - from);
        Bend {
            curvature_1_m: between(from.curvature_1_m, to.curvature_1_m),
            curvature_rate_1_m2: between(from.curvature_rate_1_m2, to.curvature_rate_1_m2),
        }
    }

    /// Piece and distance from its beginning of a cell's middle, m.
    pub(super) fn place(&self, cell: usize) -> (usize, f64) {
        let cell = &self.cells[cell];
        (cell.piece, cell.from_m + 0.5 * cell.length_m - self.piece_begins[cell.piece])
    }

    /// The cell at a distance from the run's beginning; at a node the later one.
    pub(super) fn cell_at(&self, s_m: f64) -> usize {
        self.cells.partition_point(|cell| cell.from_m <= s_m).saturating_sub(1)
    }

    /// The greatest speed squared within the limits of a cell's point, its window included.
    pub(super) fn cap(&self, limits: &dyn Limits, index: usize, point: usize) -> f64 {
        let share = self.cells[index].share;
        let (first, last) = self.cells[index].window;
        let top = self.cells[first..=last].iter().map(|cell| cell.top_m_s).fold(f64::INFINITY, f64::min);
        let mut cap = top * top;
        self.each_bend(index, point, &mut |bend| {
            if let Some(square) = greatest_square(limits, bend, share) {
                cap = cap.min(square);
            }
        });
        cap
    }

    /// Least and greatest s̈ at a cell's point and squared speed, its window included.
    pub(super) fn accels(&self, limits: &dyn Limits, index: usize, point: usize, square: f64) -> (f64, f64) {
        let (speed, share) = (math::sqrt(square.max(0.0)), self.cells[index].share);
        let mut both = (f64::NEG_INFINITY, f64::INFINITY);
        self.each_bend(index, point, &mut |bend| {
            let (least, greatest) = limits.accel_bounds_m_s2(speed, bend, share);
            both = (both.0.max(least), both.1.min(greatest));
        });
        both
    }

    /// The curvature at a point, or at all points of its window.
    fn each_bend(&self, index: usize, point: usize, visit: &mut dyn FnMut(Bend)) {
        let (first, last) = self.cells[index].window;
        if first == last {
            return visit(self.cells[index].bends[point]);
        }
        let mut before = None;
        for cell in &self.cells[first..=last] {
            for bend in &cell.bends {
                // A line's cells all say the same.
                if before != Some(*bend) {
                    visit(*bend);
                }
                before = Some(*bend);
            }
        }
    }

    /// Greatest x at every node: of both cells that meet there, and of the step between two curvatures.
    pub(super) fn set_caps(&mut self, run: &Run<'_>, limits: &dyn Limits) {
        let count = self.cells.len();
        let mut caps = vec![f64::INFINITY; count + 1];
        for index in 0..count {
            let begin = self.cap(limits, index, 0);
            let end = if self.cells[index].uniform { begin } else { self.cap(limits, index, POINTS - 1) };
            caps[index] = caps[index].min(begin);
            caps[index + 1] = caps[index + 1].min(end);
        }
        for (pair, cap) in self.cells.windows(2).zip(&mut caps[1..]) {
            let (before, after) = (&pair[0], &pair[1]);
            if before.piece != after.piece {
                let step = limits.step_speed_m_s(
                    before.bends[POINTS - 1].curvature_1_m,
                    after.bends[0].curvature_1_m,
                    run.share,
                );
                *cap = cap.min(step * step);
            }
        }
        self.caps = caps;
    }

    /// Lowers the share of the limits in the cells where dense sampling found an excess, and beside them.
    pub(super) fn tighten(&mut self, excesses: &[Excess], least: f64) {
        for excess in excesses {
            let first = excess.cell.saturating_sub(1);
            let last = (excess.cell + 1).min(self.cells.len() - 1);
            let factor = 1.0 - (1.5 * excess.relative).clamp(least, 0.1);
            for cell in &mut self.cells[first..=last] {
                cell.share *= factor;
            }
        }
    }
}

/// The greatest x within the speed limits at which some s̈ is within the acceleration limits.
fn greatest_square(limits: &dyn Limits, bend: Bend, share: f64) -> Option<f64> {
    let speed = limits.speed_bound_m_s(bend, share);
    let top = speed * speed;
    let open = |square: f64| {
        let (least, greatest) = limits.accel_bounds_m_s2(math::sqrt(square), bend, share);
        least <= greatest
    };
    if !top.is_finite() {
        return None;
    }
    if open(top) {
        return Some(top);
    }
    Some(super::passes::greatest(0.0, top, open))
}

fn cell(path: &dyn Path, piece: usize, begin: f64, (from, to): (f64, f64), share: f64, index: usize) -> Cell {
    let uniform = path.is_uniform();
    let mut bends = [path.bend(from); POINTS];
    if !uniform {
        for (point, bend) in bends.iter_mut().enumerate() {
            *bend = path.bend(from + (to - from) * point as f64 / (POINTS - 1) as f64);
        }
    }
    let share = if uniform { share } else { share * ROOM };
    Cell {
        piece,
        from_m: begin + from,
        length_m: to - from,
        uniform,
        bends,
        top_m_s: path.top_speed_m_s(),
        share,
        window: (index, index),
    }
}

/// Where a piece is cut, its ends included: lines and arcs nowhere; else evenly, and finer where the bounds bend between
/// the points at which they are looked at.
fn even_cuts(path: &dyn Path, step: f64, limits: &dyn Limits, share: f64) -> Vec<f64> {
    let length = path.length_m();
    if path.is_uniform() {
        return vec![0.0, length];
    }
    let look = |at: f64| Look::at(path, limits, share, at);
    let even = even(0.0, length, step.min(length / MIN_CELLS));
    let mut cuts = vec![0.0];
    for pair in even.windows(2) {
        refine(&look, (pair[0], pair[1]), MOST_HALVINGS, &mut cuts);
    }
    cuts
}

/// What the grid's fineness hangs on at a place.
struct Look<'a> {
    limits: &'a dyn Limits,
    share: f64,
    bend: Bend,
    /// Greatest squared speed.
    square: f64,
}

impl<'a> Look<'a> {
    fn at(path: &dyn Path, limits: &'a dyn Limits, share: f64, at: f64) -> Self {
        let bend = path.bend(at);
        Self { limits, share, bend, square: greatest_square(limits, bend, share).unwrap_or(f64::INFINITY) }
    }

    fn accels(&self, square: f64) -> (f64, f64) {
        self.limits.accel_bounds_m_s2(math::sqrt(square), self.bend, self.share)
    }

    /// True if what lies between two places is all but a line: the bound on the squared speed does not sag in the middle
    /// below the line, nor do those on the acceleration leave it.
    fn is_even(from: &Self, middle: &Self, to: &Self) -> bool {
        if 0.5 * (from.square + to.square) - middle.square > SAG * middle.square {
            return false;
        }
        let square = middle.square.min(from.square).min(to.square);
        if !square.is_finite() {
            return true;
        }
        let (before, here, after) = (from.accels(square), middle.accels(square), to.accels(square));
        let scale = middle.accels(0.0);
        let leaves = |one: f64, between: f64, other: f64| {
            (0.5 * (one + other) - between).abs() > SAG * scale.1.min(-scale.0)
        };
        !leaves(before.0, here.0, after.0) && !leaves(before.1, here.1, after.1)
    }
}

/// Halves a cell until what lies on it is even, and adds its ends but for the first.
fn refine<'a>(look: &dyn Fn(f64) -> Look<'a>, (from, to): (f64, f64), halvings: u32, cuts: &mut Vec<f64>) {
    let middle = 0.5 * (from + to);
    if halvings > 0 && !Look::is_even(&look(from), &look(middle), &look(to)) {
        refine(look, (from, middle), halvings - 1, cuts);
        refine(look, (middle, to), halvings - 1, cuts);
    } else {
        cuts.push(to);
    }
}

impl Averaging {
    /// The cuts on a piece, from its beginning, its ends included; one that is all but at an end is left out.
    fn cuts_of(&self, begin: f64, length: f64, total: f64) -> Vec<f64> {
        let first = self.cuts.partition_point(|cut| *cut <= begin);
        let end = self.cuts.partition_point(|cut| *cut < begin + length).max(first);
        let mut cuts = vec![0.0];
        cuts.extend(self.cuts[first..end].iter().map(|cut| cut - begin));
        cuts.push(length);
        // A third of a cell is no cell.
        while cuts.len() > 2 && cuts[1] < 0.3 * (cuts[2] - cuts[1]) {
            cuts.remove(1);
        }
        while cuts.len() > 2
            && length - cuts[cuts.len() - 2] < 0.3 * (cuts[cuts.len() - 2] - cuts[cuts.len() - 3])
        {
            cuts.remove(cuts.len() - 2);
        }
        if self.lead_in_m > 0.0 {
            insert(&mut cuts, self.lead_in_m - begin);
        }
        if self.lead_out_m > 0.0 {
            insert(&mut cuts, total - self.lead_out_m - begin);
        }
        cuts
    }
}

fn even(from: f64, to: f64, step: f64) -> Vec<f64> {
    let count = math::ceil((to - from) / step - 1e-9).max(1.0);
    (0..=count as usize)
        .map(|index| if index as f64 == count { to } else { from + (to - from) * index as f64 / count })
        .collect()
}

/// Adds a cut, unless it lies outside; one that is all but there is moved.
fn insert(cuts: &mut Vec<f64>, at: f64) {
    let last = cuts.len() - 1;
    let tiny = 1e-9 * cuts[last];
    if at < tiny || at > cuts[last] - tiny {
        return;
    }
    let place = cuts.partition_point(|cut| *cut < at);
    if place > 1 && at - cuts[place - 1] < tiny {
        cuts[place - 1] = at;
    } else if place < last && cuts[place] - at < tiny {
        cuts[place] = at;
    } else {
        cuts.insert(place, at);
    }
}
