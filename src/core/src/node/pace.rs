//! How fast the plan's time runs: the operator's cap, a machine that lags, a stop's ramp, a machine that realigns.
//!
//! The rate multiplies the plan's speed, so it changes only as fast as the machine can speed up and brake along the path.

use super::params::Params;
use crate::geometry::TrackingError;
use crate::plan::Reference;
use crate::vehicle::Vehicle;

/// Below this speed (m/s) and turn rate (rad/s) a reference rests, and there is nothing to brake.
const RESTING: f64 = 1e-6;

/// The plan time's rate and its change.
#[derive(Clone, Copy, Debug)]
pub(super) struct Pace {
    pub(super) rate: f64,
    pub(super) change_1_s: f64,
}

/// What bears on the pace in a tick.
pub(super) struct Bearing<'a> {
    /// The reference with the plan's time at rate 1.
    pub(super) literal: &'a Reference,
    pub(super) vehicle: &'a dyn Vehicle,
    pub(super) params: &'a Params,
    pub(super) seconds: f64,
}

impl Bearing<'_> {
    /// How fast the rate may fall and rise while the reference brakes and speeds up with a share of what the machine can,
    /// 1/s; endless where the reference rests.
    fn slopes_1_s(&self) -> (f64, f64) {
        let share = self.params.controlled_stop_share;
        let velocity = self.literal.velocity;
        let (speed, turn_rate) = (velocity.speed_m_s.abs(), velocity.turn_rate_rad_s.abs());
        if speed > RESTING {
            let curvature = self.literal.curvature_1_m;
            let (_, speeding_up) = self.vehicle.accel_bounds_m_s2(0.0, curvature, 0.0, share);
            (share * self.vehicle.path_decel_m_s2(curvature) / speed, speeding_up / speed)
        } else if turn_rate > RESTING {
            let braking = self.vehicle.pivot_decel_rad_s2().unwrap_or(f64::INFINITY);
            let (_, both) = self.vehicle.pivot_bounds(share).unwrap_or((0.0, f64::INFINITY));
            (share * braking / turn_rate, both / turn_rate)
        } else {
            (f64::INFINITY, f64::INFINITY)
        }
    }

    /// The rate that a lag allows: 1 up to the lag at which slowing begins, the least rate at twice that.
    pub(super) fn allowed_by_lag(&self, error: &TrackingError) -> f64 {
        let velocity = self.literal.velocity;
        let lag = if velocity.speed_m_s.abs() > RESTING {
            -error.along_m * velocity.speed_m_s.signum() / self.params.slow_lag_m
        } else if velocity.turn_rate_rad_s.abs() > RESTING {
            -error.heading_rad * velocity.turn_rate_rad_s.signum() / self.params.slow_lag_rad
        } else {
            0.0
        };
        let least = self.params.min_plan_rate;
        1.0 - (1.0 - least) * (lag - 1.0).clamp(0.0, 1.0)
    }
}

impl Pace {
    /// The plan's time as it is.
    pub(super) const LITERAL: Self = Self { rate: 1.0, change_1_s: 0.0 };

    /// The pace of the next tick on the way to a rate.
    pub(super) fn towards(self, wanted: f64, bearing: &Bearing<'_>) -> Self {
        let (fall, rise) = bearing.slopes_1_s();
        let (down, up) = (fall * bearing.seconds, rise * bearing.seconds);
        let rate = if wanted < self.rate { wanted.max(self.rate - down) } else { wanted.min(self.rate + up) };
        // An endless slope is that of a reference that rests: nothing speeds up where its rate steps.
        let steps = rate == self.rate || fall == f64::INFINITY;
        Self { rate, change_1_s: if steps { 0.0 } else { (rate - self.rate) / bearing.seconds } }
    }

    /// The pace of the next tick on a stop's ramp: as above, but from the first tick on, whatever the cap.
    pub(super) fn ramp_down(self, bearing: &Bearing<'_>) -> Self {
        let (fall, _) = bearing.slopes_1_s();
        let rate = (self.rate - fall * bearing.seconds).max(0.0);
        Self { rate, change_1_s: if rate == 0.0 { 0.0 } else { -fall } }
    }
}
