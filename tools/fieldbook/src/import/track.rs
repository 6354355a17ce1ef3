//! Points as a source gave them, each with its place in the file, and what is mended or refused before they become a path.

use std::fmt;
use trackhold_core::geometry::Pose;
use trackhold_core::math;

/// Greatest speed a plan may ask for, m/s: the core's own bound.
const MAX_SPEED_M_S: f64 = 30.0;
/// No more findings than this are told: the first ones say what to mend.
const MAX_FINDINGS: usize = 12;
/// A gap this many times the usual distance between points is worth a word.
const GAP_FACTOR: f64 = 20.0;

/// Where something stands in the file that was read.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Place {
    /// Line, counted from 1.
    Line(usize),
    /// Index in a list, counted from 0.
    Item(usize),
}

impl fmt::Display for Place {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Line(line) => write!(f, "line {line}"),
            Self::Item(index) => write!(f, "coordinates[{index}]"),
        }
    }
}

/// A point of a source, in the site frame.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Spot {
    /// Where it stands in the file.
    pub place: Place,
    /// Time from the first point, s; on every point of a track, or on none.
    pub t_s: Option<f64>,
    /// Position, m.
    pub x_m: f64,
    /// Position, m.
    pub y_m: f64,
    /// Heading of the machine, rad; on every point of a track, or on none.
    pub heading_rad: Option<f64>,
    /// Speed of the machine, negative in reverse, m/s.
    pub speed_m_s: Option<f64>,
}

impl Spot {
    /// A position without time and heading.
    pub fn at(place: Place, x_m: f64, y_m: f64) -> Self {
        Self { place, t_s: None, x_m, y_m, heading_rad: None, speed_m_s: None }
    }

    /// Distance between two positions, m.
    pub fn distance_to(&self, other: &Self) -> f64 {
        math::length(other.x_m - self.x_m, other.y_m - self.y_m)
    }

    /// Direction from here to `other`, rad.
    pub fn bearing_to(&self, other: &Self) -> f64 {
        math::atan2(other.y_m - self.y_m, other.x_m - self.x_m)
    }

    /// The pose with a heading found for it.
    pub fn with_heading(&self, heading_rad: f64) -> Pose {
        Pose::new(self.x_m, self.y_m, math::wrap(heading_rad))
    }
}

/// What could not be imported, and why, a line each.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Refused(pub Vec<String>);

impl Refused {
    /// One reason.
    pub fn because(what: impl Into<String>) -> Self {
        Self(vec![what.into()])
    }

    /// `Ok` if there is no reason; else the first ones.
    pub(super) fn unless_none(mut findings: Vec<String>) -> Result<(), Self> {
        if findings.is_empty() {
            return Ok(());
        }
        let more = findings.len().saturating_sub(MAX_FINDINGS);
        findings.truncate(MAX_FINDINGS);
        if more > 0 {
            findings.push(format!("and {more} more"));
        }
        Err(Self(findings))
    }
}

impl fmt::Display for Refused {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.0.join("\n  "))
    }
}

impl std::error::Error for Refused {}

/// Takes out what repeats, and refuses what no machine could do: time that runs back, a turn on the spot in a path, a
/// jump. Points nearer than `apart_m` to the last one kept are one place: in a path they go, in a timed track they rest
/// there. What was mended is told in `notes`.
///
/// # Errors
/// What is wrong with the points, with their places.
pub fn tidy(spots: &[Spot], apart_m: f64, notes: &mut Vec<String>) -> Result<Vec<Spot>, Refused> {
    let mut kept: Vec<Spot> = Vec::with_capacity(spots.len());
    let mut findings = Vec::new();
    let mut dropped: Vec<Place> = Vec::new();
    for spot in spots {
        let Some(last) = kept.last() else {
            kept.push(*spot);
            continue;
        };
        match follow(last, spot, apart_m) {
            Ok(Some(next)) => kept.push(next),
            Ok(None) => dropped.push(spot.place),
            Err(what) => findings.push(format!("{}: {what}", spot.place)),
        }
    }
    Refused::unless_none(findings)?;
    if let [first, ..] = dropped[..] {
        let times = if kept[0].t_s.is_some() { " and time" } else { "" };
        notes.push(format!(
            "{} left out, within {apart_m} m{times} of the one before (first: {first})",
            points(dropped.len())
        ));
    }
    if kept.len() < 2 {
        return Err(Refused::because(format!(
            "{} after those closer than {apart_m} m were left out; a path needs at least two",
            points(kept.len())
        )));
    }
    tell_gap(&kept, notes);
    Ok(kept)
}

/// The point as it follows the last one kept; none if it says nothing new.
fn follow(last: &Spot, spot: &Spot, apart_m: f64) -> Result<Option<Spot>, String> {
    let distance = last.distance_to(spot);
    let turn = match (last.heading_rad, spot.heading_rad) {
        (Some(before), Some(now)) => math::wrap(now - before).abs(),
        _ => 0.0,
    };
    let (Some(before_s), Some(now_s)) = (last.t_s, spot.t_s) else {
        if distance >= apart_m {
            return Ok(Some(*spot));
        }
        if turn > 0.05 {
            return Err(format!(
                "in one place with {} but its heading differs by {turn:.3} rad: a path cannot turn on the spot; give times (t, x, y, heading), or cut the path there",
                last.place
            ));
        }
        return Ok(None);
    };
    let seconds = now_s - before_s;
    if seconds.abs() < 1e-6 && distance < apart_m && turn < 1e-6 {
        return Ok(None);
    }
    if seconds < 1e-6 {
        return Err(format!("time {now_s} s does not rise from {before_s} s, {}", last.place));
    }
    if distance > MAX_SPEED_M_S * seconds {
        return Err(format!(
            "a jump: {distance:.2} m in {seconds:.3} s from {} is {:.0} m/s, at most {MAX_SPEED_M_S} m/s are allowed",
            last.place,
            distance / seconds
        ));
    }
    let rests = distance < apart_m;
    Ok(Some(if rests { Spot { x_m: last.x_m, y_m: last.y_m, ..*spot } } else { *spot }))
}

fn tell_gap(kept: &[Spot], notes: &mut Vec<String>) {
    let distances: Vec<f64> = kept.windows(2).map(|pair| pair[0].distance_to(&pair[1])).collect();
    let mut sorted = distances.clone();
    sorted.sort_by(f64::total_cmp);
    let usual = sorted[sorted.len() / 2];
    if sorted.len() < 10 || usual == 0.0 {
        return;
    }
    let wide = distances.iter().enumerate().max_by(|a, b| a.1.total_cmp(b.1));
    if let Some((index, distance)) = wide.filter(|(_, distance)| **distance > GAP_FACTOR * usual) {
        notes.push(format!(
            "a wide gap: {distance:.2} m from {} to {}, where {usual:.2} m are usual; are points missing?",
            kept[index].place,
            kept[index + 1].place
        ));
    }
}

/// "1 point", "5 points".
pub(super) fn points(count: usize) -> String {
    if count == 1 { "1 point".to_owned() } else { format!("{count} points") }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn spot(line: usize, t_s: Option<f64>, x_m: f64) -> Spot {
        Spot { t_s, ..Spot::at(Place::Line(line), x_m, 0.0) }
    }

    #[test]
    fn what_repeats_goes_and_is_told() {
        let mut notes = Vec::new();
        let given = [spot(1, None, 0.0), spot(2, None, 1e-4), spot(3, None, 1.0)];
        let kept = tidy(&given, 1e-3, &mut notes).unwrap();
        assert_eq!(kept.iter().map(|spot| spot.place).collect::<Vec<_>>(), [Place::Line(1), Place::Line(3)]);
        assert_eq!(notes, ["1 point left out, within 0.001 m of the one before (first: line 2)"]);
    }

    #[test]
    fn a_timed_point_in_the_same_place_rests_there() {
        let given = [spot(1, Some(0.0), 0.0), spot(2, Some(1.0), 1e-4), spot(3, Some(2.0), 1.0)];
        let kept = tidy(&given, 1e-3, &mut Vec::new()).unwrap();
        assert_eq!((kept.len(), kept[1].x_m), (3, 0.0));
    }

    #[test]
    fn time_that_runs_back_and_jumps_are_refused_by_line() {
        let given = [spot(1, Some(0.0), 0.0), spot(2, Some(1.0), 1.0), spot(3, Some(0.5), 1.5)];
        let refused = tidy(&given, 1e-3, &mut Vec::new()).unwrap_err();
        assert_eq!(refused.to_string(), "line 3: time 0.5 s does not rise from 1 s, line 2");
        let given = [spot(1, Some(0.0), 0.0), spot(2, Some(0.1), 40.0)];
        assert!(
            tidy(&given, 1e-3, &mut Vec::new()).unwrap_err().to_string().contains("line 2: a jump: 40.00 m")
        );
    }

    #[test]
    fn one_place_is_no_path() {
        let given = [spot(1, None, 0.0), spot(2, None, 0.0)];
        assert!(tidy(&given, 1e-3, &mut Vec::new()).unwrap_err().to_string().starts_with("1 point after"));
    }

    #[test]
    fn a_wide_gap_is_told() {
        let given: Vec<Spot> =
            (0..20).map(|n| spot(n + 1, None, if n < 10 { n as f64 } else { 90.0 + n as f64 })).collect();
        let mut notes = Vec::new();
        tidy(&given, 1e-3, &mut notes).unwrap();
        assert!(notes[0].starts_with("a wide gap: 91.00 m from line 10 to line 11"), "{notes:?}");
    }
}
