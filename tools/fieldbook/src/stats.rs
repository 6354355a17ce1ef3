//! Tracking errors of a run in numbers. Every tick that has a reference counts once, the first and the last included.

use crate::sim::{Observer, Row};
use serde::Serialize;
use trackhold_core::geometry::TrackingError;
use trackhold_proto::journal::flag;

/// Root mean square and greatest magnitude of a quantity.
#[derive(Clone, Copy, Debug, Default)]
pub struct Spread {
    count: u64,
    sum_of_squares: f64,
    greatest: f64,
}

impl Spread {
    /// Takes in a value.
    pub fn add(&mut self, value: f64) {
        self.count += 1;
        self.sum_of_squares += value * value;
        self.greatest = self.greatest.max(value.abs());
    }

    /// How many values there were.
    pub fn count(&self) -> u64 {
        self.count
    }

    /// Root mean square; 0 without values.
    pub fn rms(&self) -> f64 {
        if self.count == 0 { 0.0 } else { (self.sum_of_squares / self.count as f64).sqrt() }
    }

    /// Greatest magnitude; 0 without values.
    pub fn greatest(&self) -> f64 {
        self.greatest
    }
}

/// Gathers a run's errors.
#[derive(Clone, Debug, Default)]
pub struct Statistics {
    ticks: u64,
    along: Spread,
    cross: Spread,
    heading: Spread,
    speed_limited: u64,
    step_limited: u64,
    limited: u64,
    stale: u64,
    last: TrackingError,
}

/// A run's errors in numbers, as `simulate --json` prints them.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Errors {
    /// Root mean square of the cross-track error, m.
    pub rms_cross_m: f64,
    /// Greatest cross-track error, m.
    pub max_cross_m: f64,
    /// Root mean square of the along-track error, m.
    pub rms_along_m: f64,
    /// Greatest along-track error, m.
    pub max_along_m: f64,
    /// Root mean square of the heading error, rad.
    pub rms_heading_rad: f64,
    /// Greatest heading error, rad.
    pub max_heading_rad: f64,
    /// Distance to the reference at the last tick that has one, m.
    pub final_position_error_m: f64,
    /// Heading error at the last tick that has a reference, rad.
    pub final_heading_error_rad: f64,
    /// Share of all ticks in which any limit changed what the law wanted.
    pub limited_share: f64,
    /// Share of all ticks in which a speed or steering limit did.
    pub speed_limited_share: f64,
    /// Share of all ticks in which an acceleration or steering rate limit did.
    pub step_limited_share: f64,
    /// Ticks without a fresh pose.
    pub stale_ticks: u64,
}

impl Statistics {
    /// The numbers so far.
    pub fn errors(&self) -> Errors {
        let share = |count: u64| if self.ticks == 0 { 0.0 } else { count as f64 / self.ticks as f64 };
        Errors {
            rms_cross_m: self.cross.rms(),
            max_cross_m: self.cross.greatest(),
            rms_along_m: self.along.rms(),
            max_along_m: self.along.greatest(),
            rms_heading_rad: self.heading.rms(),
            max_heading_rad: self.heading.greatest(),
            final_position_error_m: trackhold_core::math::length(self.last.along_m, self.last.cross_m),
            final_heading_error_rad: self.last.heading_rad,
            limited_share: share(self.limited),
            speed_limited_share: share(self.speed_limited),
            step_limited_share: share(self.step_limited),
            stale_ticks: self.stale,
        }
    }
}

impl Observer for Statistics {
    fn row(&mut self, row: &Row<'_>) {
        let flags = row.record.flags;
        self.ticks += 1;
        self.speed_limited += u64::from(flags & flag::SPEED_LIMITED != 0);
        self.step_limited += u64::from(flags & flag::STEP_LIMITED != 0);
        self.limited += u64::from(flags & (flag::SPEED_LIMITED | flag::STEP_LIMITED) != 0);
        self.stale += u64::from(flags & flag::POSE_STALE != 0);
        if let Some(error) = row.error {
            self.along.add(error.along_m);
            self.cross.add(error.cross_m);
            self.heading.add(error.heading_rad);
            self.last = error;
        }
    }
}
