//! Moments and spans in whole nanoseconds. Different types, so that they cannot be mixed up; clocks live in the shell.

use crate::math;
use core::ops::{Add, Sub};

/// A moment in the daemon's clock, ns since some fixed origin.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, PartialOrd, Ord)]
pub struct TimeNs(pub u64);

/// A span of time, ns, never negative.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, PartialOrd, Ord)]
pub struct SpanNs(pub u64);

impl TimeNs {
    /// The span since `earlier`; zero if `earlier` is later.
    pub const fn since(self, earlier: Self) -> SpanNs {
        SpanNs(self.0.saturating_sub(earlier.0))
    }
}

impl SpanNs {
    /// The span nearest to a number of seconds; zero for negative ones.
    pub fn from_seconds(seconds: f64) -> Self {
        Self(math::round(seconds * 1e9) as u64)
    }

    /// The span in seconds.
    pub const fn seconds(self) -> f64 {
        self.0 as f64 / 1e9
    }
}

impl Add<SpanNs> for TimeNs {
    type Output = Self;

    fn add(self, span: SpanNs) -> Self {
        Self(self.0.saturating_add(span.0))
    }
}

impl Add for SpanNs {
    type Output = Self;

    fn add(self, other: Self) -> Self {
        Self(self.0.saturating_add(other.0))
    }
}

impl Sub for SpanNs {
    type Output = Self;

    fn sub(self, other: Self) -> Self {
        Self(self.0.saturating_sub(other.0))
    }
}

/// When tick `k` falls due at `rate_hz`, counted from tick 0: the nearest nanosecond, so that rounding never adds up.
pub fn tick_offset(k: u64, rate_hz: f64) -> SpanNs {
    SpanNs(math::round(k as f64 * 1e9 / rate_hz) as u64)
}
