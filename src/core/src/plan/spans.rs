//! Curves of rational Bézier spans, read by arc length: what splines and NURBS are made into.
//!
//! A place is found by the arc length's inverse, which is stored as quintics (value, slope and bend of the parameter at
//! both ends of a cell), in cells so short that it is exact to [`INVERSE_M`]; so a lookup costs a search over the cells and
//! one evaluation, and allocates nothing.

use super::path::{Bend, Geometry};
use crate::geometry::{Direction, Pose};
use crate::math;
use alloc::vec::Vec;

/// Highest degree.
pub(super) const MAX_DEGREE: usize = 10;
/// Lowest degree; curves below are raised, so that three derivatives come out of one scheme.
const MIN_DEGREE: usize = 3;
/// The stored inverse of the arc length is exact to this, m.
const INVERSE_M: f64 = 1e-11;
/// The arc length's quadrature in eighths agrees with that in quarters to this, m.
const QUADRATURE_M: f64 = 1e-12;
/// A span is halved no more often, one half in the other: a curve that needs it stands still somewhere.
const MAX_HALVINGS: u32 = 24;
/// A span has no more cells: a curve that needs them hardly moves over most of its parameter.
const MAX_CELLS: u32 = 1024;

/// A control point in homogeneous coordinates: (w x, w y, w).
pub(super) type Control = [f64; 3];

/// Position relative to the span's origin, and three derivatives by the span's parameter.
#[derive(Clone, Copy, Debug)]
pub(super) struct Jet {
    pub(super) place: [f64; 2],
    pub(super) first: [f64; 2],
    second: [f64; 2],
    third: [f64; 2],
}

/// Rational Bézier spans of one degree, each with a parameter from 0 to 1.
#[derive(Debug)]
struct Spans {
    degree: usize,
    /// A point near each span, to which its controls are relative: far from the origin they would lose digits.
    origins: Vec<[f64; 2]>,
    controls: Vec<Control>,
}

impl Spans {
    /// Position and derivatives at `u` of a span: de Casteljau's scheme down to the last four points (Piegl & Tiller, The
    /// NURBS Book, 1.3), then the quotient rule (4.8).
    fn jet(&self, span: usize, u: f64) -> Jet {
        let size = self.degree + 1;
        let mut points = [[0.0; 3]; MAX_DEGREE + 1];
        points[..size].copy_from_slice(&self.controls[span * size..(span + 1) * size]);
        for last in (MIN_DEGREE..self.degree).rev() {
            for index in 0..=last {
                points[index] = between(points[index], points[index + 1], u);
            }
        }
        let [c0, c1, c2, c3, ..] = points;
        let degree = self.degree as f64;
        let (d0, d1, d2) = (less(c1, c0), less(c2, c1), less(c3, c2));
        let (e0, e1) = (less(d1, d0), less(d2, d1));
        let quadratic = |a, b, c| between(between(a, b, u), between(b, c, u), u);
        rational(
            between(quadratic(c0, c1, c2), quadratic(c1, c2, c3), u),
            times(quadratic(d0, d1, d2), degree),
            times(between(e0, e1, u), degree * (degree - 1.0)),
            times(less(e1, e0), degree * (degree - 1.0) * (degree - 2.0)),
        )
    }

    /// Metres per unit of the parameter.
    fn pace(&self, span: usize, u: f64) -> f64 {
        let [x, y] = self.jet(span, u).first;
        math::length(x, y)
    }

    /// Arc length between two parameters, by Gauss and Legendre's rule with five points (Abramowitz & Stegun 25.4.30).
    fn arc_length(&self, span: usize, from: f64, to: f64) -> f64 {
        const NODES: [(f64, f64); 2] = [
            (0.538_469_310_105_683_1, 0.478_628_670_499_366_5),
            (0.906_179_845_938_664, 0.236_926_885_056_189_1),
        ];
        let (middle, half) = (0.5 * (from + to), 0.5 * (to - from));
        let pair = |node: f64| self.pace(span, middle - half * node) + self.pace(span, middle + half * node);
        let sum: f64 = NODES.iter().map(|(node, weight)| weight * pair(*node)).sum();
        half * (sum + 0.568_888_888_888_888_9 * self.pace(span, middle))
    }
}

/// Both shares are taken of the numbers themselves, not of their difference: weights may differ by orders of magnitude.
fn between(a: Control, b: Control, u: f64) -> Control {
    let v = 1.0 - u;
    [v * a[0] + u * b[0], v * a[1] + u * b[1], v * a[2] + u * b[2]]
}

fn less(a: Control, b: Control) -> Control {
    [a[0] - b[0], a[1] - b[1], a[2] - b[2]]
}

fn times(a: Control, factor: f64) -> Control {
    [a[0] * factor, a[1] * factor, a[2] * factor]
}

fn rational(point: Control, first: Control, second: Control, third: Control) -> Jet {
    let scale = 1.0 / point[2];
    let (w1, w2, w3) = (first[2] * scale, second[2] * scale, third[2] * scale);
    let along = |axis: usize| {
        let p = point[axis] * scale;
        let p1 = first[axis] * scale - p * w1;
        let p2 = second[axis] * scale - 2.0 * p1 * w1 - p * w2;
        let p3 = third[axis] * scale - 3.0 * (p2 * w1 + p1 * w2) - p * w3;
        [p, p1, p2, p3]
    };
    let (x, y) = (along(0), along(1));
    Jet { place: [x[0], y[0]], first: [x[1], y[1]], second: [x[2], y[2]], third: [x[3], y[3]] }
}

impl Jet {
    /// Curvature and its change per metre.
    fn bend(&self) -> Bend {
        let ([x1, y1], [x2, y2], [x3, y3]) = (self.first, self.second, self.third);
        let square = x1 * x1 + y1 * y1;
        let cubic = square * math::sqrt(square);
        let turn_1_m = (x1 * y2 - y1 * x2) / cubic;
        let gaining = 3.0 * (x1 * x2 + y1 * y2);
        let turn_rate_1_m2 = ((x1 * y3 - y1 * x3) / cubic - turn_1_m * gaining / square) / math::sqrt(square);
        Bend { turn_1_m, turn_rate_1_m2 }
    }
}

/// A stretch of a span in which the parameter is a quintic of the arc length.
#[derive(Clone, Copy, Debug)]
struct Cell {
    begin_m: f64,
    length_m: f64,
    span: usize,
    /// Powers of the share of the cell's length.
    quintic: [f64; 6],
}

impl Cell {
    /// The quintic with the parameters at both ends, and there the slope and bend that the curve has.
    fn between(curve: &Spans, span: usize, from: f64, to: f64, length_m: f64) -> Self {
        let (u0, slope0, bend0) = inverse(curve, span, from, length_m);
        let (u1, slope1, bend1) = inverse(curve, span, to, length_m);
        let way = u1 - u0;
        let quintic = [
            u0,
            slope0,
            0.5 * bend0,
            10.0 * way - 6.0 * slope0 - 4.0 * slope1 - 1.5 * bend0 + 0.5 * bend1,
            -15.0 * way + 8.0 * slope0 + 7.0 * slope1 + 1.5 * bend0 - bend1,
            6.0 * way - 3.0 * (slope0 + slope1) - 0.5 * (bend0 - bend1),
        ];
        Self { begin_m: 0.0, length_m, span, quintic }
    }

    fn parameter(&self, way_m: f64) -> f64 {
        let share = (way_m / self.length_m).clamp(0.0, 1.0);
        self.quintic.iter().rev().fold(0.0, |sum, power| sum * share + power)
    }
}

/// The parameter, and its first and second derivative by the share of a cell of this length.
fn inverse(curve: &Spans, span: usize, u: f64, length_m: f64) -> (f64, f64, f64) {
    let jet = curve.jet(span, u);
    let square = jet.first[0] * jet.first[0] + jet.first[1] * jet.first[1];
    let gaining = jet.first[0] * jet.second[0] + jet.first[1] * jet.second[1];
    (u, length_m / math::sqrt(square), -length_m * length_m * gaining / (square * square))
}

/// A place where a curve stands still: the control points coincide there, or it turns back.
#[derive(Clone, Copy, Debug)]
pub(super) struct Stall {
    pub(super) span: usize,
    pub(super) u: f64,
}

/// How much finer a span may still be cut.
struct Room {
    halvings: u32,
    cells: u32,
}

/// A curve by arc length, driven forward or in reverse.
#[derive(Debug)]
pub(super) struct Route {
    curve: Spans,
    cells: Vec<Cell>,
    length_m: f64,
    /// 1 forward, −1 in reverse.
    sign: f64,
}

impl Route {
    /// Measures a curve of `controls` (degree + 1 a span, relative to the span's origin).
    ///
    /// # Errors
    /// Where it stands still.
    pub(super) fn new(
        degree: usize,
        origins: Vec<[f64; 2]>,
        controls: Vec<Control>,
        sign: f64,
    ) -> Result<Self, Stall> {
        let (degree, controls) = raised(degree, controls);
        let mut route =
            Self { curve: Spans { degree, origins, controls }, cells: Vec::new(), length_m: 0.0, sign };
        for span in 0..route.curve.origins.len() {
            let quarters = [0.0, 0.25, 0.5, 0.75].map(|from| route.curve.arc_length(span, from, from + 0.25));
            let mut room = Room { halvings: MAX_HALVINGS, cells: MAX_CELLS };
            route.add(span, (0.0, 1.0), quarters.iter().sum(), &mut room)?;
        }
        Ok(route)
    }

    /// Adds the cells of a part of a span, halving it until the stored inverse is exact, as seen at every eighth of it.
    /// `length_m` is the part's length as its parent measured it, in quarters.
    fn add(
        &mut self,
        span: usize,
        (from, to): (f64, f64),
        length_m: f64,
        room: &mut Room,
    ) -> Result<(), Stall> {
        let eighth = 0.125 * (to - from);
        let mut ways = [0.0; 9];
        for part in 0..8 {
            let begin = from + part as f64 * eighth;
            ways[part + 1] = ways[part] + self.curve.arc_length(span, begin, begin + eighth);
        }
        let mut cell = Cell::between(&self.curve, span, from, to, ways[8]);
        // A NaN, where the curve stands still, is not exact either.
        let exact = (1..8).all(|part| {
            let u = from + part as f64 * eighth;
            (cell.parameter(ways[part]) - u).abs() * self.curve.pace(span, u) < INVERSE_M
        });
        if exact && (ways[8] - length_m).abs() < QUADRATURE_M {
            cell.begin_m = self.length_m;
            self.length_m += cell.length_m;
            self.cells.push(cell);
            return Ok(());
        }
        let middle = from + 4.0 * eighth;
        if room.halvings == 0 || room.cells == 0 {
            return Err(Stall { span, u: middle });
        }
        room.cells -= 1;
        room.halvings -= 1;
        self.add(span, (from, middle), ways[4], room)?;
        self.add(span, (middle, to), ways[8] - ways[4], room)?;
        room.halvings += 1;
        Ok(())
    }

    fn jet(&self, at: f64) -> (Jet, usize) {
        let index = self.cells.partition_point(|cell| cell.begin_m <= at).saturating_sub(1);
        let cell = &self.cells[index];
        (self.curve.jet(cell.span, cell.parameter(at - cell.begin_m)), cell.span)
    }

    /// The direction of the curve at the beginning (`u` 0) or end (`u` 1) of a span, rad.
    pub(super) fn heading_of(&self, span: usize, u: f64) -> f64 {
        let [x, y] = self.curve.jet(span, u).first;
        math::atan2(self.sign * y, self.sign * x)
    }

    pub(super) fn spans(&self) -> usize {
        self.curve.origins.len()
    }
}

/// The same curve with at least the lowest degree (The NURBS Book, 5.5: degree elevation of Bézier curves).
fn raised(mut degree: usize, mut controls: Vec<Control>) -> (usize, Vec<Control>) {
    while degree < MIN_DEGREE {
        let next = degree + 1;
        controls = controls
            .chunks_exact(degree + 1)
            .flat_map(|span| {
                (0..=next).map(move |index| match index {
                    0 => span[0],
                    last if last == next => span[degree],
                    _ => between(span[index], span[index - 1], index as f64 / next as f64),
                })
            })
            .collect();
        degree = next;
    }
    (degree, controls)
}

impl Geometry for Route {
    fn length_m(&self) -> f64 {
        self.length_m
    }

    fn place(&self, at: f64) -> (Pose, Direction, Bend) {
        let (jet, span) = self.jet(at);
        let [x, y] = jet.first;
        let scale = self.sign / math::length(x, y);
        let direction = Direction { cos: x * scale, sin: y * scale };
        let origin = self.curve.origins[span];
        let heading = math::wrap(math::atan2(direction.sin, direction.cos));
        (Pose::new(origin[0] + jet.place[0], origin[1] + jet.place[1], heading), direction, jet.bend())
    }

    fn bend(&self, at: f64) -> Bend {
        self.jet(at).0.bend()
    }

    fn looks(&self) -> u32 {
        u32::try_from(self.cells.len().saturating_mul(8)).unwrap_or(u32::MAX)
    }

    fn seams(&self) -> Vec<f64> {
        self.cells
            .windows(2)
            .filter(|pair| pair[0].span != pair[1].span)
            .map(|pair| pair[1].begin_m)
            .collect()
    }
}
