//! The points of a segment: which numbers each kind needs and knows, and their bounds.

use super::file::RawPoint;
use super::path::{MAX_COORDINATE_M, MAX_CURVATURE_1_M};
use crate::keys::Problem;
use alloc::format;
use alloc::vec;
use alloc::vec::Vec;

/// A refusal lists no more findings of one list of points.
const MAX_PROBLEMS: usize = 20;

/// What the points of a kind of segment hold, besides their position.
#[derive(Clone, Copy, Debug)]
pub(super) struct Form {
    /// Numbers that each point must give.
    pub(super) needs: &'static [&'static str],
    /// Numbers that it may give.
    pub(super) may: &'static [&'static str],
}

struct Field {
    name: &'static str,
    bound: f64,
    get: fn(&RawPoint) -> Option<f64>,
}

const FIELDS: [Field; 7] = [
    Field { name: "t_s", bound: 1e9, get: |point| (!point.t_s.is_nan()).then_some(point.t_s) },
    Field { name: "x_m", bound: MAX_COORDINATE_M, get: |point| Some(point.x_m) },
    Field { name: "y_m", bound: MAX_COORDINATE_M, get: |point| Some(point.y_m) },
    Field {
        name: "heading_rad",
        bound: 1e6,
        get: |point| (!point.heading_rad.is_nan()).then_some(point.heading_rad),
    },
    Field { name: "speed_m_s", bound: 30.0, get: |point| point.speed_m_s },
    Field { name: "turn_rate_rad_s", bound: 30.0, get: |point| point.turn_rate_rad_s },
    Field { name: "curvature_1_m", bound: MAX_CURVATURE_1_M, get: |point| point.curvature_1_m },
];

#[derive(Clone, Copy, PartialEq)]
enum Presence {
    Needed,
    Allowed,
    Unknown,
}

/// Checks that there are at least `least` points and that each has the numbers of its kind, within their bounds.
pub(super) fn check(points: &[RawPoint], least: usize, form: &Form) -> Result<(), Vec<Problem>> {
    if points.len() < least {
        let what =
            format!("{} of them, give at least {}", points.len(), if least == 2 { "two" } else { "three" });
        return Err(vec![Problem::new("points", what)]);
    }
    let presences = FIELDS.each_ref().map(|field| match field.name {
        "x_m" | "y_m" => Presence::Needed,
        name if form.needs.contains(&name) => Presence::Needed,
        name if form.may.contains(&name) => Presence::Allowed,
        _ => Presence::Unknown,
    });
    let mut problems = Vec::new();
    for (index, point) in points.iter().enumerate() {
        for (field, presence) in FIELDS.iter().zip(presences) {
            let Some(what) = problem_of(field, presence, (field.get)(point)) else { continue };
            problems.push(Problem::new(&format!("points[{index}].{}", field.name), what));
        }
        if problems.len() >= MAX_PROBLEMS {
            break;
        }
    }
    if problems.is_empty() { Ok(()) } else { Err(problems) }
}

fn problem_of(field: &Field, presence: Presence, value: Option<f64>) -> Option<alloc::string::String> {
    match (value, presence) {
        (None, Presence::Needed) => Some(format!("missing; give a number within ±{}", field.bound)),
        (Some(_), Presence::Unknown) => Some("no such number in a point of this kind; leave it out".into()),
        // A NaN is outside every bound.
        (Some(value), _) if !value.is_finite() || value.abs() > field.bound => {
            Some(format!("{value} lies outside ±{}", field.bound))
        }
        _ => None,
    }
}
