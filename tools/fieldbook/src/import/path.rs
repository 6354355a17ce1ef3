//! From the points of a track to the pieces of a plan: curves through way-poses, lines with turns on the spot, or stamped
//! way-poses.

use super::draft::{Draft, Pace, Piece, Shape, Stamped};
use super::geographic::Origin;
use super::track::{Refused, Spot, points, tidy};
use super::{corners, curve, heading, positive, simplify};
use trackhold_core::geometry::Pose;

/// How a track becomes a path.
#[derive(Clone, Copy, Debug, clap::Args)]
pub struct PathOptions {
    /// Speed along a path without times, m/s.
    #[arg(long, value_name = "M/S", value_parser = positive)]
    pub speed: Option<f64>,
    /// Keep the path within this distance of the track, m, through as few of its points as that takes (chosen by the method
    /// of Ramer, Douglas and Peucker; a curve's way-poses are fitted to the points around them). For noisy tracks.
    #[arg(long, value_name = "M", value_parser = positive)]
    pub tolerance: Option<f64>,
    /// Points closer than this to the one before are the same place, m.
    #[arg(long, value_name = "M", value_parser = positive, default_value = "0.001")]
    pub apart: f64,
    /// What becomes of corners of a path without headings: one smooth curve through the points, or straight lines with a
    /// turn on the spot at each of them, or with an arc of --radius.
    #[arg(long, value_enum, default_value_t = Corners::Curve)]
    pub corners: Corners,
    /// Turn rate on the spot with --corners pivot, rad/s.
    #[arg(long, value_name = "RAD/S", value_parser = positive, default_value = "0.5")]
    pub pivot_rate: f64,
    /// Radius of the arcs with --corners round, m.
    #[arg(long, value_name = "M", value_parser = positive, required_if_eq("corners", "round"))]
    pub radius: Option<f64>,
}

/// What becomes of corners.
#[derive(Clone, Copy, Debug, PartialEq, Eq, clap::ValueEnum)]
pub enum Corners {
    /// A smooth curve through the points.
    Curve,
    /// Straight lines, and a turn on the spot at each corner.
    Pivot,
    /// Straight lines, and an arc that cuts each corner.
    Round,
}

/// A draft, and the line of straight pieces it came from.
#[derive(Clone, Debug, PartialEq)]
pub struct Drafted {
    /// The plan.
    pub draft: Draft,
    /// The source's points after what repeated was left out, m.
    pub line: Vec<(f64, f64)>,
}

/// Makes a plan from a track: stamped way-poses if its points have times, else a path at `options.speed`.
///
/// # Errors
/// What is wrong with the points, with their places.
pub fn draft(
    spots: &[Spot],
    origin: Option<Origin>,
    options: &PathOptions,
    notes: &mut Vec<String>,
) -> Result<Drafted, Refused> {
    let kept = tidy(spots, options.apart, notes)?;
    let line = kept.iter().map(|spot| (spot.x_m, spot.y_m)).collect();
    let timed = kept[0].t_s.is_some();
    if timed && options.speed.is_some() {
        return Err(Refused::because(
            "--speed is for paths; these points have times of their own: leave it out",
        ));
    }
    if options.corners != Corners::Curve && (timed || kept[0].heading_rad.is_some()) {
        return Err(Refused::because("--corners is for paths without times and headings; leave it out"));
    }
    let pieces = if timed {
        vec![samples(&kept, options, notes)?]
    } else {
        let Some(speed) = options.speed else {
            return Err(Refused::because("a path without times needs a speed: give --speed, in m/s"));
        };
        let pace = Pace { rate: speed, ramp: None };
        match options.corners {
            Corners::Curve if kept[0].heading_rad.is_some() => {
                curves_with_headings(&kept, pace, options, notes)?
            }
            Corners::Curve => vec![curve_by_rule(&kept, pace, options, notes)?],
            Corners::Pivot => corners::pivots(&simplified(&kept, options, notes), pace, options.pivot_rate),
            Corners::Round => {
                let spots = simplified(&kept, options, notes);
                corners::arcs(&spots, pace, options.radius.unwrap_or_default())?
            }
        }
    };
    let start = first_pose(&pieces, &kept);
    Ok(Drafted { draft: Draft { start, origin, pieces }, line })
}

fn simplified(kept: &[Spot], options: &PathOptions, notes: &mut Vec<String>) -> Vec<Spot> {
    let Some(tolerance) = options.tolerance else { return kept.to_vec() };
    let fewer = simplify::marked(kept, &simplify::simplify(kept, tolerance));
    notes.push(format!(
        "{} of {} stay within the tolerance of {tolerance} m (Ramer, Douglas and Peucker)",
        fewer.len(),
        points(kept.len())
    ));
    fewer
}

fn samples(kept: &[Spot], options: &PathOptions, notes: &mut Vec<String>) -> Result<Piece, Refused> {
    let mut spots = simplified(kept, options, notes);
    if spots[0].heading_rad.is_some() {
        heading::runs(&spots)?;
    } else {
        heading::refuse_spikes(&spots)?;
        notes.push(format!("headings by rule: {}", heading::RULE));
        let headings = heading::by_rule(&spots);
        spots.iter_mut().zip(headings).for_each(|(spot, heading)| spot.heading_rad = Some(heading));
    }
    rest_where_it_stays(&mut spots);
    let stamped = spots.iter().map(|spot| Stamped {
        t_s: spot.t_s.unwrap_or_default(),
        pose: spot.with_heading(spot.heading_rad.unwrap_or_default()),
        speed_m_s: spot.speed_m_s,
    });
    Ok(Piece { place: span(&spots), shape: Shape::Samples(stamped.collect()), pace: None, reverse: false })
}

/// Where a track stays in one place its speed is 0, unless the source says otherwise.
fn rest_where_it_stays(spots: &mut [Spot]) {
    for index in 1..spots.len() {
        if spots[index - 1].distance_to(&spots[index]) == 0.0 {
            spots[index - 1].speed_m_s.get_or_insert(0.0);
            spots[index].speed_m_s.get_or_insert(0.0);
        }
    }
}

fn curves_with_headings(
    kept: &[Spot],
    pace: Pace,
    options: &PathOptions,
    notes: &mut Vec<String>,
) -> Result<Vec<Piece>, Refused> {
    let runs = heading::runs(kept)?;
    if runs.len() > 1 {
        notes.push(format!("it changes between forward and reverse {} times", runs.len() - 1));
    }
    runs.iter().map(|run| curve::through(&run.spots, run.reverse, pace, options.tolerance, notes)).collect()
}

fn curve_by_rule(
    kept: &[Spot],
    pace: Pace,
    options: &PathOptions,
    notes: &mut Vec<String>,
) -> Result<Piece, Refused> {
    let around = if options.tolerance.is_some() {
        " (where many points lie around: of the parabola that fits them)"
    } else {
        ""
    };
    notes.push(format!("headings by rule: {}{around}", heading::RULE));
    curve::through(kept, false, pace, options.tolerance, notes)
}

pub(super) fn span(spots: &[Spot]) -> String {
    match spots {
        [first, .., last] => format!("{} to {}", first.place, last.place),
        _ => String::new(),
    }
}

fn first_pose(pieces: &[Piece], kept: &[Spot]) -> Pose {
    match pieces.first().map(|piece| &piece.shape) {
        Some(Shape::Spline(poses)) => poses[0],
        Some(Shape::Samples(stamped)) => stamped[0].pose,
        _ => kept[0].with_heading(kept[0].bearing_to(&kept[1])),
    }
}

#[cfg(test)]
mod tests {
    use super::super::track::Place;
    use super::*;

    const OPTIONS: PathOptions = PathOptions {
        speed: Some(0.5),
        tolerance: None,
        apart: 1e-3,
        corners: Corners::Curve,
        pivot_rate: 0.5,
        radius: None,
    };

    fn spots(points: &[(f64, f64)]) -> Vec<Spot> {
        points.iter().enumerate().map(|(n, (x, y))| Spot::at(Place::Line(n + 1), *x, *y)).collect()
    }

    #[test]
    fn a_path_needs_a_speed_and_a_timed_track_none() {
        let path = spots(&[(0.0, 0.0), (2.0, 0.0)]);
        let without = PathOptions { speed: None, ..OPTIONS };
        assert!(draft(&path, None, &without, &mut Vec::new()).unwrap_err().to_string().contains("--speed"));
        let timed: Vec<Spot> =
            path.iter().zip([0.0, 4.0]).map(|(spot, t)| Spot { t_s: Some(t), ..*spot }).collect();
        assert!(draft(&timed, None, &OPTIONS, &mut Vec::new()).is_err());
        let drafted = draft(&timed, None, &without, &mut Vec::new()).unwrap();
        assert_eq!(drafted.draft.pieces[0].shape.kind(), "samples");
    }

    #[test]
    fn a_track_that_stays_somewhere_rests_there() {
        let mut track = spots(&[(0.0, 0.0), (1.0, 0.0), (1.0, 0.0), (2.0, 0.0)]);
        for (spot, t_s) in track.iter_mut().zip([0.0, 2.0, 5.0, 7.0]) {
            spot.t_s = Some(t_s);
        }
        let without = PathOptions { speed: None, ..OPTIONS };
        let drafted = draft(&track, None, &without, &mut Vec::new()).unwrap();
        let Shape::Samples(stamped) = &drafted.draft.pieces[0].shape else { panic!("samples") };
        assert_eq!(
            stamped.iter().map(|point| point.speed_m_s).collect::<Vec<_>>(),
            [None, Some(0.0), Some(0.0), None]
        );
    }
}
