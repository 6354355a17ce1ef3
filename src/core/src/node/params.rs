//! The node's own numbers: keys of the section `node`.

use crate::keys::{Bound, Key, Problem, Values};
use crate::law::FeedbackParams;
use crate::law::at_rest::RestGains;
use crate::math::PI;
use crate::time::SpanNs;
use alloc::format;
use alloc::vec::Vec;

/// Keys of the section `node`.
pub const KEYS: &[Key] = &[
    Key::with_default(
        "rate_hz",
        "Hz",
        50.0,
        Bound::within(10.0, 1000.0),
        "ticks a second; a slow tick adds to the dead time of the loop",
    ),
    Key::with_default(
        "dead_time_s",
        "s",
        0.0,
        Bound::within(0.0, 1.0),
        "from a tick to the moment at which its command moves the machine; measure it, the laws reckon with it",
    ),
    Key::with_default(
        "max_bandwidth_delay",
        "",
        0.2,
        Bound::within(0.01, 10.0),
        "warns where the law's bandwidth times dead time, half a period and the pose's age is greater; at 0.65 it is unstable",
    ),
    Key::with_default(
        "pose_timeout_s",
        "s",
        0.25,
        Bound::within(0.002, 5.0),
        "a pose older than this stops the machine; at least three of the estimator's periods, or every lost datagram stops it",
    ),
    Key::with_default(
        "pose_lease_s",
        "s",
        1.0,
        Bound::within(0.01, 60.0),
        "after the last pose of one estimator, another one's are refused for this long",
    ),
    Key::with_default(
        "pose_slack_m",
        "m",
        0.1,
        Bound::within(0.0, 100.0),
        "a pose that lies this much farther from the one before than the top speed allows is flagged as implausible",
    ),
    Key::with_default(
        "planner_lease_s",
        "s",
        2.0,
        Bound::within(0.0, 600.0),
        "after the last plan of one planner, another one's are refused for this long",
    ),
    Key::with_default(
        "continue_lead_s",
        "s",
        0.02,
        Bound::within(0.0, 60.0),
        "a plan that continues the one in force has to arrive this long before its plan time",
    ),
    Key::with_default(
        "joint_distance_m",
        "m",
        0.01,
        Bound::within(0.0, 10.0),
        "how far the position may step where a plan continues another; the machine jerks after a large one",
    ),
    Key::with_default(
        "joint_heading_rad",
        "rad",
        0.01,
        Bound::within(0.0, PI),
        "how far the heading may step where a plan continues another",
    ),
    Key::with_default(
        "joint_speed_m_s",
        "m/s",
        0.1,
        Bound::within(0.0, 60.0),
        "how far the speed may step where a plan continues another; the machine catches up within its limits",
    ),
    Key::with_default(
        "joint_turn_rate_rad_s",
        "rad/s",
        0.1,
        Bound::within(0.0, 60.0),
        "how far the turn rate may step where a plan continues another on the spot",
    ),
    Key::with_default(
        "joint_curvature_1_m",
        "1/m",
        0.05,
        Bound::within(0.0, 100.0),
        "how far the curvature may step where a plan continues another on a machine that steers; its steering needs time",
    ),
    Key::with_default(
        "clock_window_s",
        "s",
        10.0,
        Bound::within(0.1, 3600.0),
        "how long a least delay counts towards a sender's clock offset; a short one follows a drifting clock sooner",
    ),
    Key::with_default(
        "command_validity_s",
        "s",
        0.2,
        Bound::within(0.002, 2.0),
        "the drive goes to zero by itself when nothing newer came for this long",
    ),
    Key::with_default(
        "stall_periods",
        "",
        5.0,
        Bound::within(2.0, 100.0),
        "the supervisor stops the machine when no tick came for this many periods",
    ),
    Key::with_default(
        "start_distance_m",
        "m",
        2.0,
        Bound::positive(1000.0),
        "a start farther from the reference than this is refused",
    ),
    Key::with_default(
        "start_heading_rad",
        "rad",
        PI,
        Bound::positive(PI),
        "a start turned farther from the reference than this is refused; the law's own domain counts too",
    ),
    Key::with_default(
        "controlled_stop_share",
        "",
        0.7,
        Bound::within(0.05, 1.0),
        "the share of the machine's deceleration that a controlled stop uses; the rest keeps it on the path",
    ),
    Key::with_default(
        "protective_ramp_s",
        "s",
        0.0,
        Bound::within(0.0, 5.0),
        "a protective stop ramps to zero in this time; 0 is zero at once",
    ),
    Key::with_default(
        "settle_time_s",
        "s",
        10.0,
        Bound::within(0.0, 60.0),
        "how long the machine may settle on the final pose after the plan's end",
    ),
    Key::with_default(
        "settle_rate_1_s",
        "1/s",
        2.0,
        Bound::positive(20.0),
        "how fast errors decay where the reference rests or turns on the spot; keep it below 0.2 / dead time",
    ),
    Key::with_default(
        "settle_distance_m",
        "m",
        0.005,
        Bound::positive(1.0),
        "the final position is reached when it is this near, or within three standard deviations of the averaged poses",
    ),
    Key::with_default(
        "settle_heading_rad",
        "rad",
        0.005,
        Bound::positive(1.0),
        "the final heading is reached when it is this near, or within three standard deviations of the averaged poses",
    ),
    Key::with_default(
        "realign_heading_rad",
        "rad",
        1.4,
        Bound::within(0.1, PI),
        "from this heading error on (or the law's own limit) the machine turns on the spot first; one that steers stops",
    ),
    Key::with_default(
        "blend_s",
        "s",
        0.3,
        Bound::within(0.0, 5.0),
        "how long a change of law, gains or regime takes; 0 lets the command step as far as the limits allow",
    ),
    Key::with_default(
        "min_plan_rate",
        "",
        0.25,
        Bound::within(0.05, 1.0),
        "the slowest that the plan's time may run while the machine lags; 1 never slows it, and corners are cut",
    ),
    Key::with_default(
        "slow_lag_m",
        "m",
        0.5,
        Bound::positive(100.0),
        "the lag along the path at which the plan's time begins to slow down; at twice that it runs slowest",
    ),
    Key::with_default(
        "slow_lag_rad",
        "rad",
        0.4,
        Bound::positive(PI),
        "the same for the heading on a turn on the spot",
    ),
    Key::with_default(
        "carry_forward",
        "",
        1.0,
        Bound::within(0.0, 1.0),
        "1: poses are carried forward to the moment at which the command acts; 0: taken as they are. Nothing else",
    ),
    Key::with_default(
        "jump_distance_m",
        "m",
        0.15,
        Bound::positive(100.0),
        "a pose this far from where the commands should have brought the machine is a jump of the estimator",
    ),
    Key::with_default(
        "jump_heading_rad",
        "rad",
        0.15,
        Bound::positive(PI),
        "a heading this far from where the commands should have turned the machine is a jump of the estimator",
    ),
    Key::with_default(
        "jump_slew_m_s",
        "m/s",
        0.2,
        Bound::positive(100.0),
        "how fast a jump's distance is slewed in; a fast one jerks the machine",
    ),
    Key::with_default(
        "jump_slew_rad_s",
        "rad/s",
        0.2,
        Bound::positive(100.0),
        "how fast a jump's heading is slewed in",
    ),
    Key::with_default(
        "jump_stop_distance_m",
        "m",
        1.0,
        Bound::positive(1e6),
        "a jump farther than this stops the machine: one of the two poses was wrong",
    ),
    Key::with_default(
        "jump_stop_heading_rad",
        "rad",
        0.8,
        Bound::positive(PI),
        "a jump turned farther than this stops the machine",
    ),
];

/// The node's numbers, checked. The keys' meanings are in [`KEYS`].
#[derive(Clone, Debug, PartialEq)]
#[expect(
    missing_docs,
    reason = "each field is the key of the same name; KEYS tells its meaning, unit and bound"
)]
pub struct Params {
    pub rate_hz: f64,
    pub dead_time: SpanNs,
    pub max_bandwidth_delay: f64,
    pub pose_timeout: SpanNs,
    pub pose_lease: SpanNs,
    pub pose_slack_m: f64,
    pub planner_lease: SpanNs,
    pub continue_lead: SpanNs,
    pub joint_distance_m: f64,
    pub joint_heading_rad: f64,
    pub joint_speed_m_s: f64,
    pub joint_turn_rate_rad_s: f64,
    pub joint_curvature_1_m: f64,
    pub clock_window: SpanNs,
    pub command_validity: SpanNs,
    pub stall_periods: f64,
    pub start_distance_m: f64,
    pub start_heading_rad: f64,
    pub controlled_stop_share: f64,
    pub protective_ramp: SpanNs,
    pub settle_time: SpanNs,
    pub settle_rate_1_s: f64,
    pub settle_distance_m: f64,
    pub settle_heading_rad: f64,
    pub realign_heading_rad: f64,
    pub blend: SpanNs,
    pub min_plan_rate: f64,
    pub slow_lag_m: f64,
    pub slow_lag_rad: f64,
    pub carry_forward: bool,
    pub jump_distance_m: f64,
    pub jump_heading_rad: f64,
    pub jump_slew_m_s: f64,
    pub jump_slew_rad_s: f64,
    pub jump_stop_distance_m: f64,
    pub jump_stop_heading_rad: f64,
}

impl Params {
    /// From values checked against [`KEYS`].
    ///
    /// # Errors
    /// Values that do not go together.
    pub fn new(values: &Values) -> Result<Self, Vec<Problem>> {
        let span = |key: &str| SpanNs::from_seconds(values.get(key));
        let params = Self {
            rate_hz: values.get("rate_hz"),
            dead_time: span("dead_time_s"),
            max_bandwidth_delay: values.get("max_bandwidth_delay"),
            pose_timeout: span("pose_timeout_s"),
            pose_lease: span("pose_lease_s"),
            pose_slack_m: values.get("pose_slack_m"),
            planner_lease: span("planner_lease_s"),
            continue_lead: span("continue_lead_s"),
            joint_distance_m: values.get("joint_distance_m"),
            joint_heading_rad: values.get("joint_heading_rad"),
            joint_speed_m_s: values.get("joint_speed_m_s"),
            joint_turn_rate_rad_s: values.get("joint_turn_rate_rad_s"),
            joint_curvature_1_m: values.get("joint_curvature_1_m"),
            clock_window: span("clock_window_s"),
            command_validity: span("command_validity_s"),
            stall_periods: values.get("stall_periods"),
            start_distance_m: values.get("start_distance_m"),
            start_heading_rad: values.get("start_heading_rad"),
            controlled_stop_share: values.get("controlled_stop_share"),
            protective_ramp: span("protective_ramp_s"),
            settle_time: span("settle_time_s"),
            settle_rate_1_s: values.get("settle_rate_1_s"),
            settle_distance_m: values.get("settle_distance_m"),
            settle_heading_rad: values.get("settle_heading_rad"),
            realign_heading_rad: values.get("realign_heading_rad"),
            blend: span("blend_s"),
            min_plan_rate: values.get("min_plan_rate"),
            slow_lag_m: values.get("slow_lag_m"),
            slow_lag_rad: values.get("slow_lag_rad"),
            carry_forward: values.get("carry_forward") != 0.0,
            jump_distance_m: values.get("jump_distance_m"),
            jump_heading_rad: values.get("jump_heading_rad"),
            jump_slew_m_s: values.get("jump_slew_m_s"),
            jump_slew_rad_s: values.get("jump_slew_rad_s"),
            jump_stop_distance_m: values.get("jump_stop_distance_m"),
            jump_stop_heading_rad: values.get("jump_stop_heading_rad"),
        };
        let mut problems = Vec::new();
        for (key, periods) in [("command_validity_s", 2.0), ("pose_timeout_s", 1.0)] {
            let (value, least) = (values.get(key), periods / params.rate_hz);
            if value < least {
                let what = format!(
                    "{value} s is shorter than {periods} periods at node.rate_hz = {}, give at least {least} s",
                    params.rate_hz
                );
                problems.push(Problem::new(key, what));
            }
        }
        if ![0.0, 1.0].contains(&values.get("carry_forward")) {
            let what = format!("{} is neither 0 (no) nor 1 (yes)", values.get("carry_forward"));
            problems.push(Problem::new("carry_forward", what));
        }
        if problems.is_empty() { Ok(params) } else { Err(problems) }
    }

    /// The numbers of the regimes around the law.
    pub fn feedback(&self) -> FeedbackParams {
        FeedbackParams {
            rest: RestGains {
                rate_1_s: self.settle_rate_1_s,
                distance_m: self.settle_distance_m,
                heading_rad: self.settle_heading_rad,
            },
            realign_rad: self.realign_heading_rad,
            blend: self.blend,
        }
    }

    /// The tick's period, s.
    pub fn period_s(&self) -> f64 {
        1.0 / self.rate_hz
    }
}
