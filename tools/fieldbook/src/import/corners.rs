//! Paths of straight lines: a turn on the spot at each corner, or an arc that cuts it.

use super::draft::{Pace, Piece, Shape};
use super::path::span;
use super::track::{Refused, Spot};
use trackhold_core::math;

/// A turn below this is rounding, rad.
const STRAIGHT_RAD: f64 = 1e-9;
/// A line below this is left out, m.
const SHORT_M: f64 = 1e-9;

/// Lines from point to point, and a turn on the spot at `rate_rad_s` at each corner.
pub fn pivots(spots: &[Spot], pace: Pace, rate_rad_s: f64) -> Vec<Piece> {
    let mut pieces = Vec::new();
    for (index, pair) in spots.windows(2).enumerate() {
        let turn = turn_at(spots, index);
        if turn.abs() > STRAIGHT_RAD {
            pieces.push(Piece {
                place: corner(&pair[0]),
                shape: Shape::Pivot(turn),
                pace: Some(Pace { rate: rate_rad_s, ramp: None }),
                reverse: false,
            });
        }
        pieces.push(line(pair, pair[0].distance_to(&pair[1]), pace));
    }
    pieces
}

/// Lines from point to point, and an arc of `radius_m` at each corner, which meets the lines before and behind it
/// radius × tan(half the turn) from the corner.
///
/// # Errors
/// The lines that are too short for the arcs at their ends.
pub fn arcs(spots: &[Spot], pace: Pace, radius_m: f64) -> Result<Vec<Piece>, Refused> {
    let mut findings = Vec::new();
    let mut pieces = Vec::new();
    let cut = |index: usize| radius_m * math::tan(0.5 * turn_at(spots, index).abs());
    for (index, pair) in spots.windows(2).enumerate() {
        let turn = turn_at(spots, index);
        if turn.abs() > STRAIGHT_RAD {
            let shape = Shape::Arc(radius_m, turn);
            pieces.push(Piece { place: corner(&pair[0]), shape, pace: Some(pace), reverse: false });
        }
        let (length, taken) = (pair[0].distance_to(&pair[1]), cut(index) + cut(index + 1));
        if length < taken - SHORT_M {
            findings.push(format!(
                "{}: the line of {length:.3} m is too short for arcs of {radius_m} m at its ends, which take {taken:.3} m; give a smaller --radius",
                span(pair)
            ));
        }
        if length > taken + SHORT_M {
            pieces.push(line(pair, length - taken, pace));
        }
    }
    Refused::unless_none(findings)?;
    Ok(pieces)
}

/// Change of direction at a point; 0 at the ends.
fn turn_at(spots: &[Spot], index: usize) -> f64 {
    if index == 0 || index + 1 >= spots.len() {
        return 0.0;
    }
    let (before, here, after) = (&spots[index - 1], &spots[index], &spots[index + 1]);
    math::wrap(here.bearing_to(after) - before.bearing_to(here))
}

fn corner(spot: &Spot) -> String {
    format!("the corner at {}", spot.place)
}

fn line(pair: &[Spot], length_m: f64, pace: Pace) -> Piece {
    Piece { place: span(pair), shape: Shape::Line(length_m), pace: Some(pace), reverse: false }
}

#[cfg(test)]
mod tests {
    use super::super::track::Place;
    use super::*;
    use core::f64::consts::FRAC_PI_2;

    const PACE: Pace = Pace { rate: 0.5, ramp: None };

    fn spots(points: &[(f64, f64)]) -> Vec<Spot> {
        points.iter().enumerate().map(|(n, (x, y))| Spot::at(Place::Line(n + 1), *x, *y)).collect()
    }

    fn shapes(pieces: Vec<Piece>) -> Vec<Shape> {
        pieces.into_iter().map(|piece| piece.shape).collect()
    }

    #[test]
    fn corners_become_turns_on_the_spot() {
        let corner = spots(&[(0.0, 0.0), (2.0, 0.0), (3.0, 0.0), (3.0, 1.0)]);
        assert_eq!(
            shapes(pivots(&corner, PACE, 0.5)),
            [Shape::Line(2.0), Shape::Line(1.0), Shape::Pivot(FRAC_PI_2), Shape::Line(1.0)]
        );
    }

    #[test]
    fn arcs_cut_corners_and_need_room() {
        let corner = spots(&[(0.0, 0.0), (3.0, 0.0), (3.0, 2.0)]);
        let pieces = shapes(arcs(&corner, PACE, 1.0).unwrap());
        let [Shape::Line(before), Shape::Arc(radius, turn), Shape::Line(behind)] = pieces[..] else {
            panic!("{pieces:?}")
        };
        assert_eq!((radius, turn), (1.0, FRAC_PI_2));
        assert!((before - 2.0).abs() < 1e-12 && (behind - 1.0).abs() < 1e-12);
        let refused = arcs(&corner, PACE, 2.5).unwrap_err().to_string();
        assert_eq!(
            refused,
            "line 2 to line 3: the line of 2.000 m is too short for arcs of 2.5 m at its ends, which take 2.500 m; give a smaller --radius"
        );
    }
}
