//! Headings: a stated rule where a source gives none, and a check against the path where it does.
//!
//! The rule: at each point the tangent of the circle through it and its two neighbours, at the ends the tangent of the
//! circle through the first (last) three; exact on straight lines and on circles. Where the stretch on one side of a
//! point is more than three times as long as on the other, the long one counts as straight and gets a point of its own
//! near the bend; without it the circle would carry the bend far into the straight stretch.

use super::track::{Place, Refused, Spot};
use core::f64::consts::PI;
use trackhold_core::math;

/// The rule in words, for the summary.
pub const RULE: &str = "tangent of the circle through each point and its two neighbours";

/// A path without headings may not turn more than this at one point, rad: it would be a cusp or a spike.
const SHARPEST_TURN_RAD: f64 = 2.0 * PI / 3.0;
/// A stretch this many times as long as the one beside it counts as straight.
const STRAIGHT_FACTOR: f64 = 3.0;
/// Headings further than this from the path are sideways, rad.
const SIDEWAYS_RAD: f64 = 80.0 / 180.0 * PI;
/// Below this distance between two points their direction is noise, m.
const SHORT_M: f64 = 0.02;
/// Below this speed a sign is noise, m/s.
const SLOW_M_S: f64 = 0.05;

/// A part of a path that is driven one way.
#[derive(Clone, Debug, PartialEq)]
pub struct Run {
    /// True if it is driven backwards.
    pub reverse: bool,
    /// Its points; the first one is the last one of the run before.
    pub spots: Vec<Spot>,
}

/// Refuses a path without headings that turns back on itself.
///
/// # Errors
/// The points at which it does.
pub fn refuse_spikes(spots: &[Spot]) -> Result<(), Refused> {
    let moving = distinct(spots);
    let sharp = moving.windows(3).filter_map(|three| {
        let turn = math::wrap(three[1].bearing_to(three[2]) - three[0].bearing_to(three[1])).abs();
        (turn > SHARPEST_TURN_RAD).then(|| {
            format!(
                "{}: the path turns back by {:.0}° at this point, a spike or a cusp; take it out, simplify (--tolerance), or give headings",
                three[1].place,
                turn.to_degrees()
            )
        })
    });
    Refused::unless_none(sharp.collect())
}

/// The points that lie apart from the one before.
fn distinct(spots: &[Spot]) -> Vec<&Spot> {
    let mut moving: Vec<&Spot> = Vec::with_capacity(spots.len());
    for spot in spots {
        if moving.last().is_none_or(|last| last.distance_to(spot) > 0.0) {
            moving.push(spot);
        }
    }
    moving
}

/// Puts a point into every long stretch beside a short one. Only for paths without times and headings.
pub fn keep_straights(spots: &[Spot]) -> Vec<Spot> {
    let lengths: Vec<f64> = spots.windows(2).map(|pair| pair[0].distance_to(&pair[1])).collect();
    let mut out = Vec::with_capacity(spots.len());
    for (index, length) in lengths.iter().enumerate() {
        let (from, to) = (spots[index], spots[index + 1]);
        let between = |share: f64| {
            Spot::at(
                from.place,
                from.x_m + share * (to.x_m - from.x_m),
                from.y_m + share * (to.y_m - from.y_m),
            )
        };
        out.push(from);
        let beside =
            |neighbour: Option<&f64>| neighbour.copied().filter(|near| near * STRAIGHT_FACTOR < *length);
        let before = beside(index.checked_sub(1).and_then(|before| lengths.get(before)));
        let after = beside(lengths.get(index + 1));
        out.extend(before.map(|near| between(near / length)));
        out.extend(after.map(|near| between(1.0 - near / length)));
    }
    out.extend(spots.last());
    out
}

/// Headings by the rule. Points in one place have one heading; a track that never moves has none.
pub fn by_rule(spots: &[Spot]) -> Vec<f64> {
    let moving = distinct(spots);
    let found = tangents(&moving);
    let mut headings = Vec::with_capacity(spots.len());
    let mut at = 0;
    for spot in spots {
        if moving
            .get(at + 1)
            .is_some_and(|next| next.distance_to(spot) == 0.0 && moving[at].distance_to(spot) > 0.0)
        {
            at += 1;
        }
        headings.push(found[at]);
    }
    headings
}

fn tangents(moving: &[&Spot]) -> Vec<f64> {
    let last = moving.len() - 1;
    if last < 2 {
        let bearing = if last == 1 { moving[0].bearing_to(moving[1]) } else { 0.0 };
        return vec![bearing; moving.len()];
    }
    (0..=last)
        .map(|index| {
            let middle = index.clamp(1, last - 1);
            let (before, here, after) = (moving[middle - 1], moving[middle], moving[middle + 1]);
            let (in_m, out_m) = (before.distance_to(here), here.distance_to(after));
            let (inward, outward) = (before.bearing_to(here), here.bearing_to(after));
            // The turn between the chords is the sum of the angles between each chord and the tangent, whose sines are as
            // the chords (inscribed angles).
            let turn = math::wrap(outward - inward);
            let (cos, sin) = math::cos_sin(turn);
            let share = math::atan2(in_m * sin, out_m + in_m * cos);
            match index {
                0 => math::wrap(inward - share),
                _ if index == last => math::wrap(outward + (turn - share)),
                _ => math::wrap(inward + share),
            }
        })
        .collect()
}

/// Splits a path with headings where it changes between forward and reverse.
///
/// # Errors
/// The points whose heading is across the path or contradicts the other end of the stretch, and speeds whose sign
/// contradicts the motion.
pub fn runs(spots: &[Spot]) -> Result<Vec<Run>, Refused> {
    let mut findings = Vec::new();
    let mut runs: Vec<Run> = Vec::new();
    for pair in spots.windows(2) {
        let reverse = match sense(&pair[0], &pair[1]) {
            Ok(sense) => sense,
            Err(what) => {
                findings.push(what);
                continue;
            }
        };
        match runs.last_mut() {
            Some(run) if reverse.is_none_or(|reverse| reverse == run.reverse) => run.spots.push(pair[1]),
            _ => runs.push(Run { reverse: reverse.unwrap_or(false), spots: pair.to_vec() }),
        }
    }
    Refused::unless_none(findings)?;
    Ok(runs)
}

/// True if the machine goes from one point to the other in reverse; none if they are too near to say.
fn sense(from: &Spot, to: &Spot) -> Result<Option<bool>, String> {
    let (Some(begin), Some(end)) = (from.heading_rad, to.heading_rad) else { return Ok(None) };
    if from.distance_to(to) < SHORT_M {
        return Ok(None);
    }
    let chord = from.bearing_to(to);
    let mut senses = [false; 2];
    for ((spot, heading), sense) in [(from, begin), (to, end)].into_iter().zip(&mut senses) {
        let off = math::wrap(heading - chord).abs();
        if off > SIDEWAYS_RAD && off < PI - SIDEWAYS_RAD {
            return Err(sideways(spot, heading, chord, from.place, to.place));
        }
        *sense = off > 0.5 * PI;
    }
    if senses[0] != senses[1] {
        return Err(format!(
            "{}: headings {begin:.3} rad here and {end:.3} rad on {} contradict each other: the way between them goes along {chord:.3} rad, forward by one and in reverse by the other",
            from.place, to.place
        ));
    }
    for spot in [from, to] {
        // At a cusp's own point the speed is near 0, so a clear speed belongs to both sides.
        if let Some(speed) = spot.speed_m_s.filter(|speed| speed.abs() > SLOW_M_S)
            && (speed < 0.0) != senses[0]
        {
            let way = if senses[0] {
                "in reverse, so it should be negative"
            } else {
                "forward, so it should be positive"
            };
            return Err(format!(
                "{}: speed {speed} m/s, but by its headings the machine goes {way}",
                spot.place
            ));
        }
    }
    Ok(Some(senses[0]))
}

fn sideways(spot: &Spot, heading: f64, chord: f64, from: Place, to: Place) -> String {
    format!(
        "{}: heading {heading:.3} rad ({:.0}°) lies across the way from {from} to {to}, which goes along {chord:.3} rad ({:.0}°): this machine cannot move sideways (degrees taken for radians, or a compass bearing?)",
        spot.place,
        heading.to_degrees(),
        chord.to_degrees()
    )
}

#[cfg(test)]
mod tests {
    use super::*;

    fn spots(points: &[(f64, f64)]) -> Vec<Spot> {
        points.iter().enumerate().map(|(n, (x, y))| Spot::at(Place::Line(n + 1), *x, *y)).collect()
    }

    fn posed(points: &[(f64, f64, f64)]) -> Vec<Spot> {
        let place = |n| Place::Line(n + 1);
        points
            .iter()
            .enumerate()
            .map(|(n, (x, y, heading))| Spot { heading_rad: Some(*heading), ..Spot::at(place(n), *x, *y) })
            .collect()
    }

    #[test]
    fn the_rule_is_exact_on_a_circle_with_uneven_points() {
        let angles = [0.0, 0.1, 0.4, 0.5, 0.9];
        let circle: Vec<(f64, f64)> = angles
            .iter()
            .map(|a| {
                let (cos, sin) = math::cos_sin(*a);
                (3.0 * cos, 3.0 * sin)
            })
            .collect();
        for (heading, angle) in by_rule(&spots(&circle)).iter().zip(angles) {
            assert!((heading - (angle + 0.5 * PI)).abs() < 1e-12, "{heading} at {angle}");
        }
    }

    #[test]
    fn points_in_one_place_share_a_heading() {
        let headings = by_rule(&spots(&[(0.0, 0.0), (1.0, 0.0), (1.0, 0.0), (2.0, 1.0)]));
        assert_eq!(headings[1], headings[2]);
        assert_eq!(by_rule(&spots(&[(0.0, 0.0), (0.0, 2.0)])), [0.5 * PI, 0.5 * PI]);
    }

    #[test]
    fn a_long_straight_keeps_its_heading_beside_a_bend() {
        let given = spots(&[(0.0, 0.0), (50.0, 0.0), (50.9, 0.3), (51.5, 1.0)]);
        let with = keep_straights(&given);
        assert_eq!(with.len(), 5);
        let headings = by_rule(&with);
        assert!(headings[0].abs() < 1e-12);
        // The point put in is where the bend begins to show; what is before it stays straight.
        assert!((with[1].x_m - (50.0 - given[1].distance_to(&given[2]))).abs() < 1e-12);
        assert!(headings[1].abs() < 1e-12 || headings[1].abs() < 0.05, "{headings:?}");
    }

    #[test]
    fn a_path_splits_where_it_turns_from_forward_to_reverse() {
        let path =
            posed(&[(0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (2.0, 0.0, 0.1), (1.0, -0.2, 0.2), (0.0, -0.5, 0.3)]);
        let runs = runs(&path).unwrap();
        assert_eq!(
            runs.iter().map(|run| (run.reverse, run.spots.len())).collect::<Vec<_>>(),
            [(false, 3), (true, 3)]
        );
        assert_eq!(runs[0].spots[2], runs[1].spots[0]);
    }

    #[test]
    fn headings_across_the_path_and_against_each_other_are_refused_by_line() {
        let across = runs(&posed(&[(0.0, 0.0, 0.0), (1.0, 0.0, 1.5)])).unwrap_err().to_string();
        assert!(across.starts_with("line 2: heading 1.500 rad (86°) lies across"), "{across}");
        let against = runs(&posed(&[(0.0, 0.0, 0.0), (1.0, 0.0, PI)])).unwrap_err().to_string();
        assert!(
            against.starts_with("line 1: headings 0.000 rad here and 3.142 rad on line 2 contradict"),
            "{against}"
        );
    }

    #[test]
    fn spikes_are_refused_by_line() {
        let spike = refuse_spikes(&spots(&[(0.0, 0.0), (1.0, 0.0), (0.2, 0.01), (2.0, 0.0)])).unwrap_err();
        assert!(spike.0[0].starts_with("line 2: the path turns back by"), "{spike}");
        assert!(refuse_spikes(&spots(&[(0.0, 0.0), (1.0, 0.0), (1.0, 1.0)])).is_ok());
    }
}
