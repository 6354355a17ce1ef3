//! A smooth curve through the points of a track, or through as few way-poses as a tolerance allows.
//!
//! With a tolerance the points are chosen by [`simplify`] first, not closer than a few times the tolerance, or noise would
//! become bends. A curve through few points can bulge between them where straight lines would not: while it lies further
//! than the tolerance from the track, the gaps where it does get their middle point back.

use super::draft::{Draft, Name, Pace, Piece, Shape};
use super::path::span;
use super::simplify::{distances, simplify, window_m};
use super::track::{Refused, Spot, points};
use super::{finish, heading, smooth};
use trackhold_core::geometry::Pose;

/// Each round halves the gaps that need it, so this many reach neighbouring points of any file that is read.
const MOST_ROUNDS: usize = 32;
/// Chosen points lie at least this many tolerances apart, and a gap is halved from twice that on.
const APART: f64 = 8.0;
/// A gap this many times as long as the one beside it gets a point near the bend between them.
const STRAIGHT_FACTOR: f64 = 3.0;
/// Speed at which a curve is looked at, low enough for any curvature, m/s.
const SLOW_M_S: f64 = 1e-3;

/// A spline through all points, or through those that `tolerance_m` leaves.
///
/// # Errors
/// If the points that stay turn back on themselves, or the core refuses the curve.
pub fn through(
    track: &[Spot],
    reverse: bool,
    pace: Pace,
    tolerance_m: Option<f64>,
    notes: &mut Vec<String>,
) -> Result<Piece, Refused> {
    let piece = |poses| Piece { place: span(track), shape: Shape::Spline(poses), pace: Some(pace), reverse };
    let Some(tolerance_m) = tolerance_m else { return Ok(piece(all(track)?)) };
    let choice = Choice { track, reverse, tolerance_m };
    let (chosen, poses, within) = choice.made()?;
    notes.push(format!(
        "{} of {} chosen (Ramer, Douglas and Peucker), so that the curve {} within {tolerance_m} m of the track",
        chosen.len(),
        points(track.len()),
        if within { "stays" } else { "nearly stays" }
    ));
    Ok(piece(poses))
}

fn all(track: &[Spot]) -> Result<Vec<Pose>, Refused> {
    if let Some(poses) = given(track) {
        return Ok(poses);
    }
    heading::refuse_spikes(track)?;
    let with = heading::keep_straights(track);
    Ok(with.iter().zip(heading::by_rule(&with)).map(|(spot, heading)| spot.with_heading(heading)).collect())
}

/// The poses where the source gives headings.
fn given(spots: &[Spot]) -> Option<Vec<Pose>> {
    spots.iter().map(|spot| spot.heading_rad.map(|heading| spot.with_heading(heading))).collect()
}

/// A track from which points are chosen.
struct Choice<'a> {
    track: &'a [Spot],
    reverse: bool,
    tolerance_m: f64,
}

impl Choice<'_> {
    /// The chosen points, their way-poses, and whether the curve through them keeps the tolerance.
    fn made(&self) -> Result<(Vec<usize>, Vec<Pose>, bool), Refused> {
        let line: Vec<(f64, f64)> = self.track.iter().map(|spot| (spot.x_m, spot.y_m)).collect();
        let stays = simplify(self.track, self.tolerance_m);
        let mut chosen = self.thinned((0..self.track.len()).filter(|index| stays[*index]).collect());
        for _ in 0..MOST_ROUNDS {
            let poses = self.poses(&chosen)?;
            let astray = self.astray(&poses, &line)?;
            if astray.is_empty() {
                return Ok((chosen, poses, true));
            }
            let more = self.given_back(&chosen, &astray);
            if more.len() == chosen.len() {
                return Ok((chosen, poses, false));
            }
            chosen = more;
        }
        let poses = self.poses(&chosen)?;
        Ok((chosen, poses, false))
    }

    fn distance(&self, from: usize, to: usize) -> f64 {
        self.track[from].distance_to(&self.track[to])
    }

    /// Without points that are too near to the one before, and with one near the bend in long gaps beside short ones.
    fn thinned(&self, indices: Vec<usize>) -> Vec<usize> {
        let (apart_m, last) = (APART * self.tolerance_m, self.track.len() - 1);
        let mut thin: Vec<usize> = Vec::with_capacity(indices.len());
        for index in indices {
            if thin.last().is_none_or(|before| index == last || self.distance(*before, index) >= apart_m) {
                thin.push(index);
            }
        }
        if let [_, .., before, end] = thin[..]
            && self.distance(before, end) < apart_m
        {
            thin.remove(thin.len() - 2);
        }
        self.with_straights(&thin)
    }

    fn with_straights(&self, chosen: &[usize]) -> Vec<usize> {
        let gaps: Vec<f64> = chosen.windows(2).map(|pair| self.distance(pair[0], pair[1])).collect();
        let mut all = chosen.to_vec();
        for (number, gap) in gaps.iter().enumerate() {
            let (from, to) = (chosen[number], chosen[number + 1]);
            let beside = |other: Option<&f64>| other.copied().filter(|near| near * STRAIGHT_FACTOR < *gap);
            if let Some(near) = beside(number.checked_sub(1).and_then(|before| gaps.get(before))) {
                all.extend((from + 1..to).find(|index| self.distance(from, *index) >= near));
            }
            if let Some(near) = beside(gaps.get(number + 1)) {
                all.extend((from + 1..to).rev().find(|index| self.distance(*index, to) >= near));
            }
        }
        all.sort_unstable();
        all.dedup();
        all
    }

    fn poses(&self, chosen: &[usize]) -> Result<Vec<Pose>, Refused> {
        let spots: Vec<Spot> = chosen.iter().map(|index| self.track[*index]).collect();
        if let Some(poses) = given(&spots) {
            return Ok(poses);
        }
        heading::refuse_spikes(&spots)?;
        Ok(smooth::way_poses(self.track, chosen, self.tolerance_m))
    }

    /// The pieces of the track's line beside which the curve lies further than the tolerance from it.
    fn astray(&self, poses: &[Pose], line: &[(f64, f64)]) -> Result<Vec<usize>, Refused> {
        let shape = Shape::Spline(poses.to_vec());
        let pace = Some(Pace { rate: SLOW_M_S, ramp: None });
        let piece = Piece { place: span(self.track), shape, pace, reverse: self.reverse };
        let draft = Draft { start: poses[0], origin: None, pieces: vec![piece] };
        let name = Name { id: "curve".to_owned(), revision: 0 };
        let plan = finish::compile(&draft, &draft.to_json(&name))?;
        let off = distances(&finish::seen(&plan, line.len()), line, window_m(line));
        Ok(off.into_iter().filter(|(off, _)| *off > self.tolerance_m).map(|(_, piece)| piece).collect())
    }

    /// The chosen points, and the middle one of every gap that holds one of these pieces and is not too short.
    fn given_back(&self, chosen: &[usize], pieces: &[usize]) -> Vec<usize> {
        let mut more = chosen.to_vec();
        for piece in pieces {
            let number = chosen.partition_point(|index| index <= piece);
            let (Some(from), Some(to)) =
                (number.checked_sub(1).map(|before| chosen[before]), chosen.get(number))
            else {
                continue;
            };
            let middle = from.midpoint(*to);
            if middle > from && self.distance(from, *to) >= 2.0 * APART * self.tolerance_m {
                more.push(middle);
            }
        }
        more.sort_unstable();
        more.dedup();
        more
    }
}

#[cfg(test)]
mod tests {
    use super::super::track::Place;
    use super::*;

    fn straight(count: usize) -> Vec<Spot> {
        (0..count).map(|n| Spot::at(Place::Line(n + 1), n as f64, 0.0)).collect()
    }

    #[test]
    fn gaps_get_their_middle_point_back_unless_they_are_short() {
        let track = straight(9);
        let choice = Choice { track: &track, reverse: false, tolerance_m: 0.1 };
        assert_eq!(choice.given_back(&[0, 4, 5, 8], &[0, 1, 4, 6]), [0, 2, 4, 5, 6, 8]);
        assert_eq!(choice.given_back(&[0, 1, 2], &[0, 1]), [0, 1, 2]);
    }

    #[test]
    fn chosen_points_lie_apart_and_straights_get_a_point_near_the_bend() {
        let track = straight(40);
        let choice = Choice { track: &track, reverse: false, tolerance_m: 0.5 };
        assert_eq!(choice.thinned(vec![0, 1, 4, 8, 37, 39]), [0, 4, 8, 12, 39]);
    }
}
