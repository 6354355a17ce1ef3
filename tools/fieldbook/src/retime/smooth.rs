//! Samples into splines: the same way-poses without their times.

use super::rewrite::{Document, kind_of};
use serde_json::{Map, Value, json};
use trackhold_core::plan::Plan;
use trackhold_core::plan::segment::{Progress, Stretch};

/// Way-poses closer than this to the last one kept are left out, m: their noise would be curvature.
const SPACING_M: f64 = 0.05;
/// Looks at the spline for the distance of the way-poses: their spacing, m, and how many of them ahead.
const LOOK_M: f64 = 0.005;
const WINDOW: usize = 200;
/// Below this a step has no direction, m.
const STILL_M: f64 = 1e-3;

/// A segment that was made of samples.
#[derive(Debug)]
pub(super) struct Smoothed {
    /// Its index.
    segment: usize,
    /// Its way-poses as they were, and how many of them the spline passes through.
    poses: Vec<[f64; 3]>,
    kept: usize,
}

/// Turns every segment of samples into a spline through its way-poses.
pub(super) fn samples_to_splines(document: &mut Document) -> Result<Vec<Smoothed>, Vec<String>> {
    let mut smoothed = Vec::new();
    let mut findings = Vec::new();
    for (index, segment) in document.segments.iter_mut().enumerate() {
        if kind_of(segment) != "samples" {
            continue;
        }
        match poses(segment).and_then(|poses| Ok((spline(&poses)?, poses))) {
            Ok((fresh, poses)) => {
                smoothed.push(Smoothed { segment: index, poses, kept: fresh.points });
                *segment = fresh.segment;
            }
            Err(what) => findings.push(format!("segments[{index}] (samples): {what}")),
        }
    }
    if findings.is_empty() { Ok(smoothed) } else { Err(findings) }
}

impl Smoothed {
    /// In words: what it has become, and how far the way-poses lie from it.
    pub(super) fn line(&self, plan: &Plan) -> String {
        let apart_m = plan
            .stretches()
            .find(|placed| placed.index == self.segment)
            .map_or(0.0, |placed| self.greatest_distance_m(placed.stretch));
        format!(
            "segments[{}] was samples and is a spline now, through {} of the {} way-poses; none lies farther than {apart_m:.4} m from it",
            self.segment,
            self.kept,
            self.poses.len()
        )
    }

    /// The greatest distance of a way-pose from the path.
    fn greatest_distance_m(&self, stretch: &dyn Stretch) -> f64 {
        let count = (stretch.extent() / LOOK_M).ceil().max(1.0) as usize;
        let step = stretch.extent() / count as f64;
        let place = |index: usize| stretch.at_progress(Progress::resting(step * index as f64)).pose;
        let (mut at, mut greatest): (usize, f64) = (0, 0.0);
        for [x, y, _] in &self.poses {
            let apart = |index: usize| {
                let pose = place(index);
                (pose.x_m - x).hypot(pose.y_m - y)
            };
            // Both go the same way: the nearest place lies a little ahead of the last one.
            let window = at..=(at + WINDOW).min(count);
            let nearest =
                window.map(|index| (index, apart(index))).min_by(|one, other| one.1.total_cmp(&other.1));
            if let Some((index, distance)) = nearest {
                at = index;
                greatest = greatest.max(distance);
            }
        }
        greatest
    }
}

struct Spline {
    segment: Map<String, Value>,
    points: usize,
}

fn spline(poses: &[[f64; 3]]) -> Result<Spline, String> {
    let reverse = is_reverse(poses)?;
    let kept = spaced(poses);
    if kept.len() < 2 {
        return Err(format!("it moves less than {SPACING_M} m; leave it out, or use a pivot"));
    }
    let points: Vec<Value> =
        kept.iter().map(|[x, y, heading]| json!({"x_m": x, "y_m": y, "heading_rad": heading})).collect();
    let mut fresh = Map::new();
    fresh.insert("kind".to_owned(), json!("spline"));
    if reverse {
        fresh.insert("reverse".to_owned(), json!(true));
    }
    fresh.insert("points".to_owned(), Value::Array(points));
    Ok(Spline { segment: fresh, points: kept.len() })
}

fn poses(segment: &Map<String, Value>) -> Result<Vec<[f64; 3]>, String> {
    let Some(points) = segment.get("points").and_then(Value::as_array) else {
        return Err("points: missing; give at least two".to_owned());
    };
    let number = |index: usize, point: &Value, key: &str| {
        point
            .get(key)
            .and_then(Value::as_f64)
            .ok_or_else(|| format!("points[{index}].{key}: missing or no number"))
    };
    let pose = |(index, point): (usize, &Value)| {
        Ok([number(index, point, "x_m")?, number(index, point, "y_m")?, number(index, point, "heading_rad")?])
    };
    points.iter().enumerate().map(pose).collect()
}

/// Which way the samples drive; they may not change it, nor turn on the spot.
fn is_reverse(poses: &[[f64; 3]]) -> Result<bool, String> {
    let mut way = None;
    for (index, pair) in poses.windows(2).enumerate() {
        let [from, to] = [pair[0], pair[1]];
        let (dx, dy) = (to[0] - from[0], to[1] - from[1]);
        if dx.hypot(dy) < STILL_M {
            continue;
        }
        let middle = from[2] + 0.5 * wrapped(to[2] - from[2]);
        let reverse = dx * middle.cos() + dy * middle.sin() < 0.0;
        if *way.get_or_insert(reverse) != reverse {
            return Err(format!(
                "points[{}]: the direction of travel changes; give each direction a segment of its own",
                index + 1
            ));
        }
    }
    way.ok_or_else(|| "it never moves; use a pivot or a dwell".to_owned())
}

fn wrapped(angle: f64) -> f64 {
    angle.sin().atan2(angle.cos())
}

/// First, last, and those between that are far enough from the last one kept and from the end.
fn spaced(poses: &[[f64; 3]]) -> Vec<[f64; 3]> {
    let Some((last, others)) = poses.split_last() else { return Vec::new() };
    let apart = |one: &[f64; 3], other: &[f64; 3]| (one[0] - other[0]).hypot(one[1] - other[1]);
    let mut kept: Vec<[f64; 3]> = Vec::new();
    for pose in others {
        if kept.last().is_none_or(|before| apart(before, pose) >= SPACING_M) {
            kept.push(*pose);
        }
    }
    while kept.len() > 1 && kept.last().is_some_and(|before| apart(before, last) < SPACING_M) {
        kept.pop();
    }
    if kept.last().is_some_and(|before| apart(before, last) >= STILL_M) {
        kept.push(*last);
    }
    kept
}
