//! Fewer points for a noisy track: the method of Ramer (1972) and Douglas and Peucker (1973).
//!
//! Between two kept points the farthest one is kept too while it lies more than the tolerance off the straight line
//! between them. In a timed track the distance is the one from where the line is at that point's time (synchronised
//! distance; Meratnia and de By, EDBT 2004), so that the timing keeps to the tolerance as well.

use super::track::Spot;
use trackhold_core::math;

/// Which points stay, within `tolerance_m`. The first and the last one always do.
pub fn simplify(spots: &[Spot], tolerance_m: f64) -> Vec<bool> {
    let mut stays = vec![tolerance_m <= 0.0; spots.len()];
    let Some(last) = spots.len().checked_sub(1) else { return stays };
    stays[0] = true;
    stays[last] = true;
    let mut open = vec![(0, last)];
    while let Some((from, to)) = open.pop() {
        if let Some((index, off_m)) = farthest(spots, from, to)
            && off_m > tolerance_m
        {
            stays[index] = true;
            open.push((from, index));
            open.push((index, to));
        }
    }
    stays
}

/// The points that are marked.
pub fn marked(spots: &[Spot], stays: &[bool]) -> Vec<Spot> {
    spots.iter().zip(stays).filter(|(_, stays)| **stays).map(|(spot, _)| *spot).collect()
}

fn farthest(spots: &[Spot], from: usize, to: usize) -> Option<(usize, f64)> {
    (from + 1..to)
        .map(|index| (index, off_line(&spots[from], &spots[to], &spots[index])))
        .max_by(|a, b| a.1.total_cmp(&b.1))
}

/// Distance of a point from the straight line between two others, m.
fn off_line(from: &Spot, to: &Spot, spot: &Spot) -> f64 {
    let (dx, dy) = (to.x_m - from.x_m, to.y_m - from.y_m);
    let (px, py) = (spot.x_m - from.x_m, spot.y_m - from.y_m);
    let share = match (from.t_s, to.t_s, spot.t_s) {
        (Some(begin), Some(end), Some(now)) => (now - begin) / (end - begin),
        _ => {
            let square = dx * dx + dy * dy;
            if square > 0.0 { ((px * dx + py * dy) / square).clamp(0.0, 1.0) } else { 0.0 }
        }
    };
    math::length(px - share * dx, py - share * dy)
}

/// For each of `points`, its distance from a line of straight pieces that they follow in order, m, and the nearest piece.
/// Looks at most `window_m` of that line ahead of where the last point was nearest.
pub fn distances(points: &[(f64, f64)], line: &[(f64, f64)], window_m: f64) -> Vec<(f64, usize)> {
    let mut at = 0;
    let mut found = Vec::with_capacity(points.len());
    for point in points {
        let mut ahead = 0.0;
        let mut nearest = (f64::INFINITY, at);
        for (index, pair) in line.windows(2).enumerate().skip(at) {
            let off = off_piece(pair[0], pair[1], *point);
            if off < nearest.0 {
                nearest = (off, index);
            }
            ahead += math::length(pair[1].0 - pair[0].0, pair[1].1 - pair[0].1);
            if index > at && ahead > window_m {
                break;
            }
        }
        at = nearest.1;
        found.push(nearest);
    }
    found
}

/// How far ahead on a line of straight pieces the nearest place of a curve through its points can be, m.
pub fn window_m(line: &[(f64, f64)]) -> f64 {
    let lengths = line.windows(2).map(|pair| math::length(pair[1].0 - pair[0].0, pair[1].1 - pair[0].1));
    4.0 * lengths.fold(0.0, f64::max)
}

fn off_piece(from: (f64, f64), to: (f64, f64), point: (f64, f64)) -> f64 {
    let (dx, dy) = (to.0 - from.0, to.1 - from.1);
    let (px, py) = (point.0 - from.0, point.1 - from.1);
    let square = dx * dx + dy * dy;
    let share = if square > 0.0 { ((px * dx + py * dy) / square).clamp(0.0, 1.0) } else { 0.0 };
    math::length(px - share * dx, py - share * dy)
}

#[cfg(test)]
mod tests {
    use super::super::track::Place;
    use super::*;

    fn kept(spots: &[Spot], tolerance_m: f64) -> Vec<Spot> {
        marked(spots, &simplify(spots, tolerance_m))
    }

    fn spots(points: &[(f64, f64)]) -> Vec<Spot> {
        points.iter().enumerate().map(|(n, (x, y))| Spot::at(Place::Line(n + 1), *x, *y)).collect()
    }

    #[test]
    fn points_within_the_tolerance_of_the_line_go() {
        let noisy = spots(&[(0.0, 0.0), (1.0, 0.04), (2.0, -0.04), (3.0, 0.0), (3.0, 2.0)]);
        assert_eq!(simplify(&noisy, 0.05), [true, false, false, true, true]);
        assert_eq!(kept(&noisy, 0.0).len(), 5);
    }

    #[test]
    fn a_timed_track_keeps_its_timing_too() {
        let mut track = spots(&[(0.0, 0.0), (1.0, 0.0), (8.0, 0.0)]);
        for (spot, t_s) in track.iter_mut().zip([0.0, 4.0, 8.0]) {
            spot.t_s = Some(t_s);
        }
        // On the line, but three metres from where the line is then.
        assert_eq!(kept(&track, 0.5).len(), 3);
        assert_eq!(kept(&track, 3.5).len(), 2);
    }

    #[test]
    fn no_point_left_out_is_farther_than_the_tolerance() {
        let given: Vec<(f64, f64)> = (0..400)
            .map(|n| {
                let t = f64::from(n) * 0.05;
                (t, math::cos_sin(t).1 + 0.02 * math::cos_sin(31.0 * t).1)
            })
            .collect();
        let kept: Vec<(f64, f64)> =
            kept(&spots(&given), 0.05).iter().map(|spot| (spot.x_m, spot.y_m)).collect();
        assert!(kept.len() < 60, "{}", kept.len());
        assert!(distances(&given, &kept, window_m(&kept)).iter().all(|(off, _)| *off <= 0.05));
    }
}
