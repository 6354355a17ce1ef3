//! Skid-steer: two driven sides with several wheels or a track each, that skid sideways in bends.
//!
//! It moves like a differential drive with another track: either `track_factor` χ times the stated one, or with sides
//! that roll at stated centres of rotation, which need not lie alike to the left and to the right (a load off the middle
//! moves them). The longitudinal part of the skid is not modelled: the chassis point has to lie where the machine turns on
//! the spot. χ is 1.3 to 2 on hard floors (from memory, after Mandow and others); measure it by turning on the spot.

use super::Kind;
use super::common::{MAX_JERK, MAX_LATERAL};
use super::two_sided::{
    LEFT_RADIUS, MAX_WHEEL_ACCEL, MAX_WHEEL_DECEL, MAX_WHEEL_SPEED, RIGHT_RADIUS, TwoSided, WHEEL_RADIUS,
};
use super::wiring::{LEFT_RATIO, RIGHT_RATIO, SWAP};
use crate::keys::{Bound, Key, Problem, Values};
use alloc::sync::Arc;
use alloc::vec;
use alloc::vec::Vec;

/// The middle of what is found on hard floors.
const USUAL_TRACK_FACTOR: f64 = 1.5;

pub(super) const KIND: Kind = Kind {
    name: "skid-steer",
    keys: &[
        WHEEL_RADIUS,
        LEFT_RADIUS,
        RIGHT_RADIUS,
        Key::optional(
            "track_width_m",
            "m",
            Bound::positive(5.0),
            "distance between the middles of the left and the right wheels; goes with track_factor",
        ),
        Key::optional(
            "track_factor",
            "",
            Bound::within(1.0, 5.0),
            "effective track over track_width_m, 1.5 if not given; 1.3 to 2 on hard floors: command a turn on the spot \
             and divide the turn expected with factor 1 by the turn measured",
        ),
        Key::optional(
            "left_icr_m",
            "m",
            Bound::positive(10.0),
            "how far to the left of the chassis point the left side's centre of rotation lies; given with right_icr_m, \
             instead of track_width_m and track_factor",
        ),
        Key::optional(
            "right_icr_m",
            "m",
            Bound::positive(10.0),
            "how far to the right of the chassis point the right side's centre of rotation lies",
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
    build: |values| Ok(Arc::new(TwoSided::new(values, reach(values)?)?)),
};

/// Where the sides roll: by the track and its factor, or by their centres of rotation.
fn reach(values: &Values) -> Result<[f64; 2], Vec<Problem>> {
    let [track, factor, left, right] =
        ["track_width_m", "track_factor", "left_icr_m", "right_icr_m"].map(|name| values.find(name));
    let problem = |key: &str, what: &str| Err(vec![Problem::new(key, what)]);
    match (track, left, right) {
        (Some(track), None, None) => Ok([0.5 * track * factor.unwrap_or(USUAL_TRACK_FACTOR); 2]),
        (None, Some(left), Some(right)) if factor.is_none() => Ok([left, right]),
        (None, None, None) => problem("track_width_m", "missing; give it, or left_icr_m and right_icr_m"),
        (None, Some(_), None) => problem("right_icr_m", "missing; left_icr_m is given, give both"),
        (None, None, Some(_)) => problem("left_icr_m", "missing; right_icr_m is given, give both"),
        _ => problem(
            if track.is_some() { "track_width_m" } else { "track_factor" },
            "given together with left_icr_m or right_icr_m; give either track_width_m and track_factor, or both \
             centres of rotation",
        ),
    }
}
