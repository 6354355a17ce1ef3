//! Poses averaged while the reference rests: noise must not make a machine hunt for its final pose.
//!
//! A machine that settles has little to do and time to look. Each new pose moves the one carried along the commands by a
//! share of their difference only: of the first poses the mean, and then as large a share w as leaves a fifth of the
//! settling's dead band of the standard deviation s that the estimator states, s √(w/(2 − w)). That is the mean over no
//! more than about a second, so that what the commands do not tell (slip, a dead time that is not stated) is seen in time.
//! Where that is too little, the dead band grows to three of the standard deviations that are left. A pose that states no
//! standard deviation counts as exact: it is taken as it is. So is every pose where poses are not carried forward.

use super::intake::Estimate;
use super::params::Params;
use crate::geometry::Pose;
use crate::law::Rested;
use crate::math;
use crate::time::SpanNs;

/// The share of the dead band that averaging aims to leave of a standard deviation.
const AIM: f64 = 0.2;
/// The longest time constant of averaging, s.
const LONGEST_S: f64 = 1.0;
/// So many of the standard deviations left have to fit into the dead band.
const BAND_SDS: f64 = 3.0;

/// One coordinate's standard deviation, averaged.
#[derive(Clone, Copy, Debug)]
struct Share {
    /// The share of the newest pose once enough poses have come.
    steady: f64,
    /// The standard deviation left then.
    left: f64,
}

impl Share {
    /// Of a standard deviation stated by poses so long apart, for a dead band in the same unit.
    fn new(sd: f64, band: f64, apart: SpanNs) -> Self {
        if !(sd > 0.0 && sd.is_finite()) {
            return Self { steady: 1.0, left: 0.0 };
        }
        let ratio = AIM * band / sd;
        let square = ratio * ratio;
        let least = apart.seconds() / (apart.seconds() + LONGEST_S);
        let steady = (2.0 * square / (1.0 + square)).max(least).min(1.0);
        Self { steady, left: sd * math::sqrt(steady / (2.0 - steady)) }
    }
}

/// The averaging of a rest.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Average {
    poses: u32,
    rested: Rested,
}

impl Average {
    /// Nothing is averaged: the pose is taken as it is.
    pub(super) fn begin(&mut self, estimate: &Estimate, apart: SpanNs, params: &Params) {
        self.poses = 1;
        self.note(estimate, apart, params);
    }

    /// The pose to go by, given where the commands should have brought the last one.
    pub(super) fn with(
        &mut self,
        expected: Pose,
        estimate: &Estimate,
        apart: SpanNs,
        params: &Params,
    ) -> Pose {
        self.poses = self.poses.saturating_add(1);
        let (place, heading) = self.note(estimate, apart, params);
        let mean = 1.0 / f64::from(self.poses);
        let seen = estimate.pose;
        let towards =
            |from: f64, to: f64, share: f64| if share == 1.0 { to } else { from + share * (to - from) };
        let place = place.steady.max(mean);
        let turn_rad = math::wrap(seen.heading_rad - expected.heading_rad);
        let share = heading.steady.max(mean);
        Pose {
            x_m: towards(expected.x_m, seen.x_m, place),
            y_m: towards(expected.y_m, seen.y_m, place),
            heading_rad: if share == 1.0 {
                seen.heading_rad
            } else {
                math::wrap(expected.heading_rad + share * turn_rad)
            },
        }
    }

    /// What the pose is good for while the reference rests.
    pub(super) fn rested(&self) -> Rested {
        self.rested
    }

    fn note(&mut self, estimate: &Estimate, apart: SpanNs, params: &Params) -> (Share, Share) {
        let share = |sd, band| {
            // Without carrying forward nothing tells where the machine should be now.
            if params.carry_forward { Share::new(sd, band, apart) } else { Share { steady: 1.0, left: sd } }
        };
        let place = share(estimate.position_sd_m, params.settle_distance_m);
        let heading = share(estimate.heading_sd_rad, params.settle_heading_rad);
        let poses = f64::from(self.poses);
        self.rested = Rested {
            least_distance_m: BAND_SDS * place.left,
            least_heading_rad: BAND_SDS * heading.left,
            is_sure: poses * place.steady.min(heading.steady) >= 1.0,
        };
        (place, heading)
    }
}
