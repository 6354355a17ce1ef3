//! The daemon's one clock: CLOCK_MONOTONIC in nanoseconds. The core sees only stamps taken here.

use nix::time::{ClockId, clock_gettime};
use trackhold_core::time::TimeNs;

/// Now.
pub fn now() -> TimeNs {
    match clock_gettime(ClockId::CLOCK_MONOTONIC) {
        Ok(time) => {
            let (seconds, nanoseconds) = (time.tv_sec().unsigned_abs(), time.tv_nsec().unsigned_abs());
            TimeNs(seconds * 1_000_000_000 + nanoseconds)
        }
        Err(error) => unreachable!("every Linux has CLOCK_MONOTONIC: {error}"),
    }
}
