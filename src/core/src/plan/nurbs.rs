//! NURBS: rational B-splines with a clamped knot vector from 0 to 1, as VDA 5050 describes a trajectory.
//!
//! The curve is cut into its spans once, each a rational Bézier curve found by blossoming (Ramshaw 1987; The NURBS Book,
//! 5.3 gives the same by knot insertion); so knots of any legal multiplicity are right. The machine points along the
//! curve (in reverse: against it).

use super::file::{RawPoint, RawSegment};
use super::path::{self, JOIN_HEADING_RAD, check_join, check_length};
use super::points::{self, Form};
use super::profile::{ACCEL, DECEL, END_SPEED, JERK, SPEED, START_SPEED};
use super::segment::{Joint, Kind, Stretch};
use super::spans::{Control, MAX_DEGREE, Route};
use crate::geometry::Pose;
use crate::keys::{Bound, Key, Problem, Values};
use crate::math;
use alloc::boxed::Box;
use alloc::format;
use alloc::vec;
use alloc::vec::Vec;

/// Knots that differ by less are a planner's rounding of one knot.
const CLOSEST_KNOTS: f64 = 1e-9;
/// Greatest weight; its reciprocal is the least. Beyond, the homogeneous coordinates lose digits.
const MAX_WEIGHT: f64 = 100.0;

pub(super) const NURBS: Kind = Kind {
    keys: &[
        Key::required(
            "degree",
            "",
            Bound::within(1.0, MAX_DEGREE as f64),
            "degree of the curve, a whole number",
        ),
        SPEED,
        END_SPEED,
        START_SPEED,
        ACCEL,
        DECEL,
        JERK,
    ],
    has_points: true,
    lists: &["knots", "weights"],
    ..Kind::path("nurbs", build)
};

const FORM: Form = Form { needs: &[], may: &[] };

fn build(raw: &RawSegment, values: &Values, joint: Joint) -> Result<Box<dyn Stretch>, Vec<Problem>> {
    let points = raw.points.as_deref().unwrap_or_default();
    points::check(points, 2, &FORM)?;
    let degree = values.get("degree");
    if degree != math::round(degree) {
        return Err(vec![Problem::new("degree", format!("{degree} is not a whole number"))]);
    }
    let degree = degree as usize;
    let weights = raw.lists.get("weights").map(Vec::as_slice);
    let knots = raw.lists.get("knots").map_or(&[][..], Vec::as_slice);
    let mut problems = check_counts(degree, points.len(), knots, weights);
    if problems.is_empty() {
        problems = check_knots(degree, knots);
        problems.extend(check_weights(weights.unwrap_or_default()));
    }
    if !problems.is_empty() {
        return Err(problems);
    }
    let spline = BSpline { degree, knots, points, weights };
    let route = spline.route(path::sign(raw))?;
    let first = Pose::new(points[0].x_m, points[0].y_m, route.heading_of(0, 0.0));
    check_join(first, joint).map_err(|problem| vec![problem])?;
    check_length(path::Geometry::length_m(&route), "points")?;
    path::build(raw, values, route)
}

fn check_counts(degree: usize, points: usize, knots: &[f64], weights: Option<&[f64]>) -> Vec<Problem> {
    let mut problems = Vec::new();
    if points <= degree {
        let what = format!("{points} of them; a curve of degree {degree} needs at least {}", degree + 1);
        problems.push(Problem::new("points", what));
    }
    if knots.len() != points + degree + 1 {
        let what = format!(
            "{} of them; {points} points and degree {degree} need points + degree + 1 = {}",
            knots.len(),
            points + degree + 1
        );
        problems.push(Problem::new("knots", what));
    }
    if let Some(weights) = weights
        && weights.len() != points
    {
        let what =
            format!("{} of them for {points} points; give one a point, or leave them out", weights.len());
        problems.push(Problem::new("weights", what));
    }
    problems
}

fn check_knots(degree: usize, knots: &[f64]) -> Vec<Problem> {
    let mut problems = Vec::new();
    let mut problem = |index: usize, what| problems.push(Problem::new(&format!("knots[{index}]"), what));
    for (index, pair) in knots.windows(2).enumerate() {
        let step = pair[1] - pair[0];
        if step < 0.0 {
            problem(
                index + 1,
                format!("{} is less than {} before it; knots must not fall", pair[1], pair[0]),
            );
            return problems;
        }
        if step > 0.0 && step < CLOSEST_KNOTS {
            let what = format!(
                "{} and {} before it differ by less than {CLOSEST_KNOTS}; make them equal",
                pair[1], pair[0]
            );
            problem(index + 1, what);
            return problems;
        }
    }
    let end = knots.len() - degree - 1;
    for (index, wanted) in
        (0..=degree).map(|index| (index, 0.0)).chain((end..knots.len()).map(|index| (index, 1.0)))
    {
        if knots[index] != wanted {
            let what = format!(
                "{}; the vector must be clamped: the first {count} knots 0, the last {count} knots 1",
                knots[index],
                count = degree + 1
            );
            problem(index, what);
            return problems;
        }
    }
    // A knot repeated degree + 1 times tears the curve apart; between the ends' own no window of that size may be one knot.
    for index in 1..end {
        if knots[index] == knots[index + degree] {
            let what =
                format!("{} more than {degree} times; the curve would be torn apart there", knots[index]);
            problem(index, what);
            break;
        }
    }
    problems
}

fn check_weights(weights: &[f64]) -> Option<Problem> {
    let index = weights.iter().position(|weight| !(*weight >= 1.0 / MAX_WEIGHT && *weight <= MAX_WEIGHT))?;
    let what = format!("{} lies outside {} to {MAX_WEIGHT}", weights[index], 1.0 / MAX_WEIGHT);
    Some(Problem::new(&format!("weights[{index}]"), what))
}

struct BSpline<'a> {
    degree: usize,
    knots: &'a [f64],
    points: &'a [RawPoint],
    weights: Option<&'a [f64]>,
}

impl BSpline<'_> {
    fn route(&self, sign: f64) -> Result<Route, Vec<Problem>> {
        let (mut origins, mut controls, mut begins) = (Vec::new(), Vec::new(), Vec::new());
        for knot in self.degree..self.points.len() {
            if self.knots[knot] < self.knots[knot + 1] {
                let middle = &self.points[knot - self.degree / 2];
                origins.push([middle.x_m, middle.y_m]);
                begins.push(knot);
                for index in 0..=self.degree {
                    controls.push(self.blossom(knot, index, [middle.x_m, middle.y_m]));
                }
            }
        }
        let route = Route::new(self.degree, origins, controls, sign).map_err(|stall| {
            let (from, to) = (self.knots[begins[stall.span]], self.knots[begins[stall.span] + 1]);
            let what = format!(
                "the curve stands still or turns back at parameter {:.6}; do control points coincide, or weights differ by orders of magnitude?",
                from + stall.u * (to - from)
            );
            vec![Problem::new("points", what)]
        })?;
        for (span, begin) in begins.iter().enumerate().take(route.spans()).skip(1) {
            let corner = math::wrap(route.heading_of(span, 0.0) - route.heading_of(span - 1, 1.0)).abs();
            if corner > JOIN_HEADING_RAD {
                let what = format!(
                    "at {} the curve has a corner of {corner:.4} rad, at most {JOIN_HEADING_RAD} rad are allowed; round it, or end the segment here and pivot",
                    self.knots[*begin]
                );
                return Err(vec![Problem::new(&format!("knots[{begin}]"), what)]);
            }
        }
        Ok(route)
    }

    /// The control point `index` of the span that begins at a knot, relative to `origin`: the blossom at the span's begin
    /// (degree − index times) and end (index times), by de Boor's scheme.
    fn blossom(&self, knot: usize, index: usize, origin: [f64; 2]) -> Control {
        let (degree, knots) = (self.degree, self.knots);
        let mut points = [[0.0; 3]; MAX_DEGREE + 1];
        for (place, from) in (knot - degree..=knot).enumerate() {
            let (point, weight) = (&self.points[from], self.weights.map_or(1.0, |weights| weights[from]));
            points[place] = [weight * (point.x_m - origin[0]), weight * (point.y_m - origin[1]), weight];
        }
        for round in 1..=degree {
            let at = if round > degree - index { knots[knot + 1] } else { knots[knot] };
            for place in (round..=degree).rev() {
                let (low, high) = (knots[place + knot - degree], knots[place + 1 + knot - round]);
                let share = (at - low) / (high - low);
                let (before, here) = (points[place - 1], points[place]);
                points[place] = [0, 1, 2].map(|axis| (1.0 - share) * before[axis] + share * here[axis]);
            }
        }
        points[degree]
    }
}
