//! Whether way-poses go along their headings.

use super::inspect::off_the_line;
use crate::geometry::Pose;
use crate::math;

/// Ways shorter than this are joined: over them rounding and noise of the positions would count as direction, m.
const SHORTEST_M: f64 = 0.02;
/// A heading that turns by more than this per metre turns on the spot, 1/m: no wheel follows a bend of 2 cm radius.
const SPOT_1_M: f64 = 50.0;

/// Goes from pose to pose.
#[derive(Debug, Default)]
pub(super) struct Ways {
    /// Where the way at hand begins.
    anchor: Option<Pose>,
    last: Option<Pose>,
}

impl Ways {
    /// The angle between the way that ends at `pose` and the mean heading along it, rad from 0 to a right angle; none
    /// while the way is too short. On an arc the chord lies along the mean heading exactly.
    pub(super) fn next(&mut self, pose: Pose) -> Option<f64> {
        let last = self.last.replace(pose);
        let anchor = match (self.anchor, last) {
            (Some(anchor), Some(last)) if !on_the_spot(last, pose) => anchor,
            // A beginning, or a turn on the spot: the way begins here.
            _ => {
                self.anchor = Some(pose);
                return None;
            }
        };
        let way_m = anchor.distance_to(pose);
        if way_m < SHORTEST_M {
            return None;
        }
        self.anchor = Some(pose);
        let way = math::atan2(pose.y_m - anchor.y_m, pose.x_m - anchor.x_m);
        let heading = anchor.heading_rad + 0.5 * math::wrap(pose.heading_rad - anchor.heading_rad);
        Some(off_the_line(way, heading))
    }
}

fn on_the_spot(last: Pose, pose: Pose) -> bool {
    math::wrap(pose.heading_rad - last.heading_rad).abs() > SPOT_1_M * last.distance_to(pose)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn angles(poses: &[(f64, f64, f64)]) -> alloc::vec::Vec<f64> {
        let mut ways = Ways::default();
        poses.iter().filter_map(|(x, y, heading)| ways.next(Pose::new(*x, *y, *heading))).collect()
    }

    #[test]
    fn along_against_and_across_the_heading() {
        assert_eq!(angles(&[(0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.5, 0.0, 0.0)]), [0.0, 0.0]);
        let across = angles(&[(0.0, 0.0, 0.3), (0.0, 1.0, 0.3)]);
        assert!((across[0] - (math::FRAC_PI_2 - 0.3)).abs() < 1e-15);
        let arc = Pose::new(0.0, 0.0, 0.0).along_arc(-1.0, 2.0);
        assert!(angles(&[(0.0, 0.0, 0.0), (arc.x_m, arc.y_m, arc.heading_rad)])[0] < 1e-12);
    }

    #[test]
    fn short_ways_are_joined_and_turns_on_the_spot_begin_anew() {
        let noise = 1e-3;
        assert!(
            angles(&[(0.0, 0.0, 0.0), (0.005, noise, 0.0), (0.015, -noise, 0.0), (0.03, 0.0, 0.0)])[0] < 1e-9
        );
        assert_eq!(
            angles(&[(0.0, 0.0, 0.0), (0.0, 0.0, 1.5), (0.0, 0.0, 3.0), (-1.0, 0.0, math::PI)]).len(),
            1
        );
        assert!(
            angles(&[(0.0, 0.0, 0.0), (0.0, 0.0, math::FRAC_PI_2), (0.0, 1.0, math::FRAC_PI_2)])[0] < 1e-15
        );
    }
}
