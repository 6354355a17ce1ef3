//! Differential drive: two driven wheels on one axle, without slip.
//!
//! v = r (ω_R + ω_L)/2, ω = r (ω_R − ω_L)/W (textbook kinematics); with unequal wheels each has its own radius.

use super::Kind;
use super::common::{MAX_JERK, MAX_LATERAL};
use super::two_sided::{
    LEFT_RADIUS, MAX_WHEEL_ACCEL, MAX_WHEEL_DECEL, MAX_WHEEL_SPEED, RIGHT_RADIUS, TwoSided, WHEEL_RADIUS,
};
use super::wiring::{LEFT_RATIO, RIGHT_RATIO, SWAP};
use crate::keys::{Bound, Key};
use alloc::sync::Arc;

pub(super) const KIND: Kind = Kind {
    name: "differential",
    keys: &[
        WHEEL_RADIUS,
        LEFT_RADIUS,
        RIGHT_RADIUS,
        Key::required(
            "track_width_m",
            "m",
            Bound::positive(5.0),
            "distance between the wheels' contact points",
        ),
        MAX_WHEEL_SPEED,
        MAX_WHEEL_ACCEL,
        MAX_WHEEL_DECEL,
        MAX_LATERAL,
        MAX_JERK,
        SWAP,
        LEFT_RATIO,
        RIGHT_RATIO,
    ],
    build: |values| {
        let half_track_m = 0.5 * values.get("track_width_m");
        Ok(Arc::new(TwoSided::new(values, [half_track_m; 2])?))
    },
};
