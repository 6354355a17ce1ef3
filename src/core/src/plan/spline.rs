//! Splines: quintics through way-poses, with continuous curvature.
//!
//! The plane curve has two continuous derivatives by a parameter that estimates arc length: between two way-poses the
//! chord, lengthened by what a cubic with these headings would need (Farin, Curves and Surfaces for CAGD, on chord-length
//! parameters; the correction from memory, by algebra). At each way-pose the first derivative is the unit vector along the heading, so all
//! tangents have length 1 in that parameter. Where a curvature is given, the second derivative is that curvature across
//! the heading; where none is, the third derivative is continuous too (a tridiagonal system, as for every interpolating
//! spline: de Boor, A Practical Guide to Splines), and at a free end the fourth derivative vanishes.

use super::file::{RawPoint, RawSegment};
use super::path::{self, check_join, check_length};
use super::points::{self, Form};
use super::profile::{ACCEL, DECEL, END_SPEED, JERK, SPEED, START_SPEED};
use super::segment::{Joint, Kind, Stretch};
use super::spans::{Control, Route};
use crate::geometry::{Direction, Pose};
use crate::keys::{Problem, Values};
use crate::math;
use alloc::boxed::Box;
use alloc::format;
use alloc::vec;
use alloc::vec::Vec;

/// Way-poses closer than this are one place, m.
const SAME_PLACE_M: f64 = 1e-3;

pub(super) const SPLINE: Kind = Kind {
    keys: &[SPEED, END_SPEED, START_SPEED, ACCEL, DECEL, JERK],
    has_points: true,
    ..Kind::path("spline", build)
};

const FORM: Form = Form { needs: &["heading_rad"], may: &["curvature_1_m"] };

fn build(raw: &RawSegment, values: &Values, joint: Joint) -> Result<Box<dyn Stretch>, Vec<Problem>> {
    let given = raw.points.as_deref().unwrap_or_default();
    points::check(given, 2, &FORM)?;
    check_join(Pose::new(given[0].x_m, given[0].y_m, given[0].heading_rad), joint).map_err(|it| vec![it])?;
    let sign = path::sign(raw);
    let knots: Vec<Knot> = given.iter().map(|point| Knot::of(point, sign)).collect();
    let lengths = lengths(&knots)?;
    let bends = bends(&knots, &lengths);
    let origins = knots.iter().take(lengths.len()).map(|knot| knot.place).collect();
    let controls =
        (0..lengths.len()).flat_map(|index| controls(&knots, &bends, lengths[index], index)).collect();
    let route = Route::new(5, origins, controls, sign).map_err(|stall| {
        let what = format!(
            "between here and the next point the curve turns back on itself; is the heading along the {} motion?",
            if sign < 0.0 { "reverse" } else { "forward" }
        );
        vec![Problem::new(&format!("points[{}]", stall.span), what)]
    })?;
    check_length(path::Geometry::length_m(&route), "points")?;
    path::build(raw, values, route)
}

/// A way-pose.
struct Knot {
    place: [f64; 2],
    /// Unit vector along the motion.
    tangent: [f64; 2],
    /// Change of heading per metre, if it is given.
    turn_1_m: Option<f64>,
}

impl Knot {
    fn of(point: &RawPoint, sign: f64) -> Self {
        let direction = Direction::of(point.heading_rad);
        Self {
            place: [point.x_m, point.y_m],
            tangent: [sign * direction.cos, sign * direction.sin],
            turn_1_m: point.curvature_1_m.map(|curvature| sign * curvature),
        }
    }

    /// The second derivative that a given curvature means.
    fn stated_bend(&self) -> Option<[f64; 2]> {
        self.turn_1_m.map(|turn| [-turn * self.tangent[1], turn * self.tangent[0]])
    }
}

/// The parameter's length of each piece: chord × (1 + (2α² − αβ + 2β²)/30), α and β the angles between the chord and the
/// motion at its ends. To second order the length of the cubic with these tangents; for an arc it is the arc's.
fn lengths(knots: &[Knot]) -> Result<Vec<f64>, Vec<Problem>> {
    let mut lengths = Vec::with_capacity(knots.len());
    for (index, pair) in knots.windows(2).enumerate() {
        let chord = [pair[1].place[0] - pair[0].place[0], pair[1].place[1] - pair[0].place[1]];
        let length = math::length(chord[0], chord[1]);
        if length < SAME_PLACE_M {
            let what =
                format!("{length} m from the point before; leave it out, or move it {SAME_PLACE_M} m away");
            return Err(vec![Problem::new(&format!("points[{}]", index + 1), what)]);
        }
        let off = |tangent: [f64; 2]| {
            let (along, across) = (
                chord[0] * tangent[0] + chord[1] * tangent[1],
                chord[0] * tangent[1] - chord[1] * tangent[0],
            );
            math::atan2(across, along)
        };
        let (a, b) = (off(pair[0].tangent), off(pair[1].tangent));
        lengths.push(length * (1.0 + (2.0 * a * a - a * b + 2.0 * b * b) / 30.0));
    }
    Ok(lengths)
}

/// The second derivative at each knot: stated, or from the continuity of the third (Thomas' algorithm; the system is
/// diagonally dominant).
fn bends(knots: &[Knot], lengths: &[f64]) -> Vec<[f64; 2]> {
    let mut over = Vec::with_capacity(knots.len());
    let mut bends: Vec<[f64; 2]> = Vec::with_capacity(knots.len());
    for index in 0..knots.len() {
        let row = Row::at(knots, lengths, index);
        let (factor, before) =
            if index == 0 { (0.0, [0.0, 0.0]) } else { (over[index - 1], bends[index - 1]) };
        let pivot = row.here - row.before * factor;
        over.push(row.after / pivot);
        bends.push([0, 1].map(|axis| (row.right[axis] - row.before * before[axis]) / pivot));
    }
    for index in (0..knots.len() - 1).rev() {
        let after = bends[index + 1];
        for axis in 0..2 {
            bends[index][axis] -= over[index] * after[axis];
        }
    }
    bends
}

/// A line of the tridiagonal system.
struct Row {
    before: f64,
    here: f64,
    after: f64,
    right: [f64; 2],
}

impl Row {
    fn at(knots: &[Knot], lengths: &[f64], index: usize) -> Self {
        let knot = &knots[index];
        if let Some(right) = knot.stated_bend() {
            return Self { before: 0.0, here: 1.0, after: 0.0, right };
        }
        let (left, right) = (index.checked_sub(1), (index + 1 < knots.len()).then_some(index + 1));
        match (left, right) {
            (Some(left), Some(right)) => {
                Self::inner(&knots[left], knot, &knots[right], lengths[left], lengths[index])
            }
            (None, Some(right)) => {
                // Fourth derivative of the piece's quintic at its beginning.
                let (h, next) = (lengths[0], &knots[right]);
                let right = [0, 1].map(|axis| {
                    (360.0 * (next.place[axis] - knot.place[axis])
                        - h * (192.0 * knot.tangent[axis] + 168.0 * next.tangent[axis]))
                        / (h * h)
                });
                Self { before: 0.0, here: 36.0, after: -24.0, right }
            }
            _ => {
                // At its end.
                let (h, last) = (lengths[index - 1], &knots[index - 1]);
                let right = [0, 1].map(|axis| {
                    (h * (168.0 * last.tangent[axis] + 192.0 * knot.tangent[axis])
                        - 360.0 * (knot.place[axis] - last.place[axis]))
                        / (h * h)
                });
                Self { before: -24.0, here: 36.0, after: 0.0, right }
            }
        }
    }

    /// The third derivatives of the quintics at both sides are equal.
    fn inner(left: &Knot, knot: &Knot, right: &Knot, h0: f64, h1: f64) -> Self {
        let value = |axis: usize| {
            let (step0, step1) = (knot.place[axis] - left.place[axis], right.place[axis] - knot.place[axis]);
            (60.0 * step1 / h1 - 36.0 * knot.tangent[axis] - 24.0 * right.tangent[axis]) / (h1 * h1)
                - (60.0 * step0 / h0 - 24.0 * left.tangent[axis] - 36.0 * knot.tangent[axis]) / (h0 * h0)
        };
        Self { before: -3.0 / h0, here: 9.0 / h0 + 9.0 / h1, after: -3.0 / h1, right: [value(0), value(1)] }
    }
}

/// A piece's Bézier points, relative to its first way-pose.
fn controls(knots: &[Knot], bends: &[[f64; 2]], h: f64, index: usize) -> [Control; 6] {
    let (from, to) = (&knots[index], &knots[index + 1]);
    let point = |along: &dyn Fn(usize) -> f64| [along(0), along(1), 1.0];
    let end = |axis: usize| to.place[axis] - from.place[axis];
    let (b0, b1) = (bends[index], bends[index + 1]);
    [
        [0.0, 0.0, 1.0],
        point(&|axis| 0.2 * h * from.tangent[axis]),
        point(&|axis| 0.4 * h * from.tangent[axis] + 0.05 * h * h * b0[axis]),
        point(&|axis| end(axis) - 0.4 * h * to.tangent[axis] + 0.05 * h * h * b1[axis]),
        point(&|axis| end(axis) - 0.2 * h * to.tangent[axis]),
        point(&end),
    ]
}
