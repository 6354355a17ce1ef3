//! Way-poses of a noisy track: position and direction at some of its points, from all the points around them.
//!
//! Around a point the track is fitted by a parabola in each coordinate, by least squares over the way along the track
//! (local regression; Cleveland, Journal of the American Statistical Association 74, 1979, with equal weights). The window
//! reaches half-way to the nearer neighbour among the chosen points on both sides, so that noise averages out where there
//! are many points. Where the parabola does not fit (a corner, few points) the point itself and the rule for headings stand.

use super::heading;
use super::track::Spot;
use trackhold_core::geometry::Pose;
use trackhold_core::math;

/// Fewer points than this in a window say too little.
const FEWEST: usize = 5;

/// The way-poses at the points `chosen` (rising, the first and the last one among them) of `track`; none of them further
/// than `tolerance_m` from its point.
pub fn way_poses(track: &[Spot], chosen: &[usize], tolerance_m: f64) -> Vec<Pose> {
    let spots: Vec<Spot> = chosen.iter().map(|index| track[*index]).collect();
    let headings = heading::by_rule(&spots);
    let way = along(track, chosen);
    (0..chosen.len())
        .map(|number| {
            let rule = spots[number].with_heading(headings[number]);
            fitted(track, chosen, &way, number)
                .filter(|pose| pose.distance_to(rule) <= tolerance_m)
                .unwrap_or(rule)
        })
        .collect()
}

/// How far along the straight lines between the chosen points each point lies, m.
fn along(track: &[Spot], chosen: &[usize]) -> Vec<f64> {
    let mut way = vec![0.0; track.len()];
    let mut begun = 0.0;
    for pair in chosen.windows(2) {
        let (from, to) = (&track[pair[0]], &track[pair[1]]);
        let length = from.distance_to(to);
        let (dx, dy) = (to.x_m - from.x_m, to.y_m - from.y_m);
        for (spot, way) in track[pair[0]..=pair[1]].iter().zip(&mut way[pair[0]..=pair[1]]) {
            let share = ((spot.x_m - from.x_m) * dx + (spot.y_m - from.y_m) * dy) / (length * length);
            *way = begun + length * if share.is_finite() { share.clamp(0.0, 1.0) } else { 0.0 };
        }
        begun += length;
    }
    way
}

fn fitted(track: &[Spot], chosen: &[usize], way: &[f64], number: usize) -> Option<Pose> {
    let here = chosen[number];
    let gap = |other: usize| (way[chosen[other]] - way[here]).abs();
    let before = number.checked_sub(1).map(gap);
    let after = (number + 1 < chosen.len()).then(|| gap(number + 1));
    let reach = 0.5 * before.into_iter().chain(after).fold(f64::INFINITY, f64::min);
    let low = chosen[number.saturating_sub(1)];
    let high = chosen[(number + 1).min(chosen.len() - 1)];
    let window: Vec<usize> = (low..=high).filter(|index| (way[*index] - way[here]).abs() <= reach).collect();
    if window.len() < FEWEST || reach <= 0.0 {
        return None;
    }
    let at = |index: usize| (way[index] - way[here]) / reach;
    let (x, dx) = parabola(window.iter().map(|index| (at(*index), track[*index].x_m - track[here].x_m)))?;
    let (y, dy) = parabola(window.iter().map(|index| (at(*index), track[*index].y_m - track[here].y_m)))?;
    (math::length(dx, dy) > 0.0)
        .then(|| Pose::new(track[here].x_m + x, track[here].y_m + y, math::atan2(dy, dx)))
}

/// Value and slope at 0 of the least-squares parabola; none if the points do not determine one.
fn parabola(points: impl Iterator<Item = (f64, f64)>) -> Option<(f64, f64)> {
    let (mut powers, mut moments) = ([0.0; 5], [0.0; 3]);
    for (u, value) in points {
        let mut power = 1.0;
        for (degree, sum) in powers.iter_mut().enumerate() {
            *sum += power;
            if degree < 3 {
                moments[degree] += power * value;
            }
            power *= u;
        }
    }
    let [n, u1, u2, u3, u4] = powers;
    let [m0, m1, m2] = moments;
    // Cramer's rule on the normal equations.
    let determinant = |a: [f64; 3], b: [f64; 3], c: [f64; 3]| {
        a[0] * (b[1] * c[2] - b[2] * c[1]) - b[0] * (a[1] * c[2] - a[2] * c[1])
            + c[0] * (a[1] * b[2] - a[2] * b[1])
    };
    let (first, second, third, right) = ([n, u1, u2], [u1, u2, u3], [u2, u3, u4], [m0, m1, m2]);
    let whole = determinant(first, second, third);
    (whole > 1e-6 * n * n * n)
        .then(|| (determinant(right, second, third) / whole, determinant(first, right, third) / whole))
}

#[cfg(test)]
mod tests {
    use super::super::track::Place;
    use super::*;

    #[test]
    fn a_parabola_is_found_again() {
        let points = [-1.0, -0.4, 0.1, 0.5, 0.8].map(|u: f64| (u, 2.0 - 3.0 * u + 0.5 * u * u));
        let (value, slope) = parabola(points.into_iter()).unwrap();
        assert!((value - 2.0).abs() < 1e-12 && (slope + 3.0).abs() < 1e-12);
        assert_eq!(parabola([(0.5, 1.0); 6].into_iter()), None);
    }

    #[test]
    fn noise_averages_out_in_position_and_heading() {
        // A straight line with a fixed pattern of noise: ±2 cm across, points 5 cm apart.
        let track: Vec<Spot> = (0..201)
            .map(|n| Spot::at(Place::Line(n + 1), 0.05 * n as f64, if n * 7 % 11 < 5 { 0.02 } else { -0.02 }))
            .collect();
        let chosen = [0, 50, 100, 150, 200];
        let poses = way_poses(&track, &chosen, 0.05);
        for (pose, index) in poses.iter().zip(chosen).skip(1).take(3) {
            assert!((pose.x_m - track[index].x_m).abs() < 0.03, "{pose:?}");
            assert!(pose.y_m.abs() < 0.008 && pose.heading_rad.abs() < 0.02, "{pose:?}");
        }
    }

    #[test]
    fn a_corner_keeps_its_point() {
        let track: Vec<Spot> = (0..41)
            .map(|n| {
                let s = 0.25 * n as f64;
                Spot::at(Place::Line(n + 1), s.min(5.0), (s - 5.0).max(0.0))
            })
            .collect();
        let poses = way_poses(&track, &[0, 20, 40], 0.05);
        assert_eq!((poses[1].x_m, poses[1].y_m), (5.0, 0.0));
    }
}
