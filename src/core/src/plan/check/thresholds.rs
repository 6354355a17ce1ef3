//! From where on a finding is one: keys of the section `check`.

use crate::keys::{Bound, Key, Problem, Values};
use alloc::format;
use alloc::vec;
use alloc::vec::Vec;

/// Keys of the section `check`.
pub const KEYS: &[Key] = &[
    Key::with_default(
        "joint_gap_m",
        "m",
        0.02,
        Bound::positive(0.02),
        "a position that jumps by more than this is unfit: the machine cannot jump, and the law would chase the step",
    ),
    Key::with_default(
        "joint_heading_rad",
        "rad",
        0.02,
        Bound::positive(0.02),
        "a heading that jumps by more than this is unfit: put a pivot or an arc there",
    ),
    Key::with_default(
        "speed_step_m_s",
        "m/s",
        0.05,
        Bound::positive(30.0),
        "a speed that jumps by more than this is a warning, with the lag that the machine will have",
    ),
    Key::with_default(
        "turn_rate_step_rad_s",
        "rad/s",
        0.1,
        Bound::positive(30.0),
        "on the spot: a turn rate that jumps by more than this is a warning, with the lag that the machine will have",
    ),
    Key::with_default(
        "curvature_step_1_m",
        "1/m",
        0.05,
        Bound::positive(100.0),
        "a curvature that jumps by more than this under way is unfit on a steered machine, else a warning with the lag",
    ),
    Key::with_default(
        "rest_speed_m_s",
        "m/s",
        0.02,
        Bound::positive(1.0),
        "slower than this counts as at rest, where a steered machine may turn its wheels",
    ),
    Key::with_default(
        "steering_off_rad",
        "rad",
        0.3,
        Bound::positive(3.0),
        "a path that begins before the steering is there is a warning, unfit where the heading is off by more than this when it \
         is; a turn on the spot is unfit from joint_heading_rad on, since no law makes up for it",
    ),
    Key::with_default(
        "sideways_rad",
        "rad",
        0.15,
        Bound::positive(1.5),
        "motion that leaves the line of the heading by more than this is unfit: wheels do not roll sideways",
    ),
    Key::with_default(
        "share_warn",
        "",
        0.9,
        Bound::positive(1.0),
        "a plan that takes more than this share of a limit is a warning: little is left for corrections",
    ),
    Key::with_default(
        "share_unfit",
        "",
        1.0,
        Bound::positive(1.0),
        "a plan that takes more than this share of a limit is unfit; less than 1 keeps a reserve for corrections",
    ),
    Key::with_default(
        "excess_s",
        "s",
        0.1,
        Bound::within(0.0, 10.0),
        "an acceleration or steering rate beyond its limit for no longer than this is a warning, for longer it is unfit; \
         steering that is late by no more than this is for information",
    ),
    Key::with_default(
        "max_samples",
        "",
        2_000_000.0,
        Bound::within(2.0, 1e8),
        "a plan with more way-poses in its samples is refused",
    ),
    Key::with_default(
        "max_duration_s",
        "s",
        86_400.0,
        Bound::positive(1e7),
        "a plan that lasts longer is refused",
    ),
];

/// The thresholds, checked. The keys' meanings are in [`KEYS`].
#[derive(Clone, Copy, Debug, PartialEq)]
#[expect(
    missing_docs,
    reason = "each field is the key of the same name; KEYS tells its meaning, unit and bound"
)]
pub struct Thresholds {
    pub joint_gap_m: f64,
    pub joint_heading_rad: f64,
    pub speed_step_m_s: f64,
    pub turn_rate_step_rad_s: f64,
    pub curvature_step_1_m: f64,
    pub rest_speed_m_s: f64,
    pub steering_off_rad: f64,
    pub sideways_rad: f64,
    pub share_warn: f64,
    pub share_unfit: f64,
    pub excess_s: f64,
    pub max_samples: f64,
    pub max_duration_s: f64,
}

impl Thresholds {
    /// From values checked against [`KEYS`].
    ///
    /// # Errors
    /// Values that do not go together.
    pub fn new(values: &Values) -> Result<Self, Vec<Problem>> {
        let thresholds = Self {
            joint_gap_m: values.get("joint_gap_m"),
            joint_heading_rad: values.get("joint_heading_rad"),
            speed_step_m_s: values.get("speed_step_m_s"),
            turn_rate_step_rad_s: values.get("turn_rate_step_rad_s"),
            curvature_step_1_m: values.get("curvature_step_1_m"),
            rest_speed_m_s: values.get("rest_speed_m_s"),
            steering_off_rad: values.get("steering_off_rad"),
            sideways_rad: values.get("sideways_rad"),
            share_warn: values.get("share_warn"),
            share_unfit: values.get("share_unfit"),
            excess_s: values.get("excess_s"),
            max_samples: values.get("max_samples"),
            max_duration_s: values.get("max_duration_s"),
        };
        if thresholds.share_warn > thresholds.share_unfit {
            let what = format!(
                "{} lies above check.share_unfit = {}; give at most that",
                thresholds.share_warn, thresholds.share_unfit
            );
            return Err(vec![Problem::new("share_warn", what)]);
        }
        Ok(thresholds)
    }
}

impl Default for Thresholds {
    fn default() -> Self {
        let defaults = Values::default().checked(KEYS).ok();
        match defaults.and_then(|values| Self::new(&values).ok()) {
            Some(thresholds) => thresholds,
            None => unreachable!("the defaults lie within their bounds"),
        }
    }
}
