//! The law's gains, and the weights that they are.

use crate::keys::{Bound, Key, Values};

pub(super) const KEYS: &[Key] = &[
    Key::with_default(
        "step_s",
        "s",
        0.1,
        Bound::within(0.005, 0.5),
        "length of a step; the horizon is 20 of them, the first as long as a tick and none shorter than one. A horizon \
         much shorter than a recovery begins turns too late, long steps are coarse",
    ),
    Key::with_default(
        "cross_weight",
        "",
        1.0,
        Bound::positive(1000.0),
        "what a cross-track error costs beside the same along-track error",
    ),
    Key::with_default(
        "heading_weight_m2_rad2",
        "m²/rad²",
        0.1,
        Bound::positive(1000.0),
        "what a heading error of 1 rad costs beside an along-track error of 1 m; with less the machine turns more steeply \
         towards the path",
    ),
    Key::with_default(
        "effort_m2",
        "m²",
        0.01,
        Bound::within(1e-6, 100.0),
        "what an input costs that is off the reference's by its greatest value; more of it is calmer and slower",
    ),
    Key::with_default(
        "change_m2_s2",
        "m²·s²",
        4e-4,
        Bound::within(1e-6, 100.0),
        "what an input costs that changes otherwise than the reference's, by its greatest value in a second; more of it lets \
         less of the poses' noise through to the wheels",
    ),
    Key::with_default(
        "tail_effort_m2",
        "m²",
        0.01,
        Bound::within(1e-6, 100.0),
        "the same after the horizon's end; more of it makes what is left of the error there cost more",
    ),
    Key::with_default(
        "iterations",
        "",
        30.0,
        Bound::within(1.0, 100.0),
        "most iterations of one program; with too few the law falls back where limits bind",
    ),
];

/// The weights, and the length of a step.
#[derive(Clone, Copy, Debug)]
pub(super) struct Weights {
    pub(super) step_s: f64,
    /// Along-track, cross-track, heading.
    pub(super) error: [f64; 3],
    /// Of the inputs' deviation from the reference's, in shares of their greatest value.
    pub(super) effort: f64,
    /// Of the inputs' rates of change, in the same shares per second.
    pub(super) change: f64,
    pub(super) tail_effort: f64,
}

impl Weights {
    pub(super) fn new(gains: &Values) -> Self {
        Self {
            step_s: gains.get("step_s"),
            error: [1.0, gains.get("cross_weight"), gains.get("heading_weight_m2_rad2")],
            effort: gains.get("effort_m2"),
            change: gains.get("change_m2_s2"),
            tail_effort: gains.get("tail_effort_m2"),
        }
    }
}
