//! What one tick saw, wanted and commanded, and the bits that mark what was out of the ordinary.

use crate::message::{Command, WheelLayout};
use crate::words::{Cause, Mode, Regime};
use bincode::{Decode, Encode};
use serde::Serialize;

/// Bits of [`TickRecord::flags`].
pub mod flag {
    /// The pose fields hold a pose.
    pub const HAS_POSE: u32 = 1;
    /// Reference and error fields hold values.
    pub const HAS_REFERENCE: u32 = 1 << 1;
    /// The plan has ended and the machine settles on its final pose.
    pub const SETTLING: u32 = 1 << 2;
    /// The speed limits scaled the wanted body velocity, or the steering limit bent it.
    pub const SPEED_LIMITED: u32 = 1 << 3;
    /// The acceleration limits cut the step from the last command.
    pub const STEP_LIMITED: u32 = 1 << 4;
    /// Guard: no fresh pose.
    pub const POSE_STALE: u32 = 1 << 5;
    /// Guard: the heading error is outside the law's domain.
    pub const OUTSIDE_LAW_DOMAIN: u32 = 1 << 6;
    /// Guard: the law's result was not finite.
    pub const LAW_NOT_FINITE: u32 = 1 << 7;
    /// Guard: an open plan ran dry.
    pub const PLAN_DRY: u32 = 1 << 8;
    /// Guard, warning: the last pose lies farther from the one before than the machine can have moved.
    pub const POSE_IMPLAUSIBLE: u32 = 1 << 9;
    /// Guard, warning: more than the pose timeout lay between the last two poses.
    pub const POSE_GAP: u32 = 1 << 10;
    /// The law left this tick to the law that it falls back to.
    pub const LAW_FALLBACK: u32 = 1 << 11;
    /// A jump of the pose is being slewed in: the pose used lags behind the estimator's.
    pub const POSE_SLEWED: u32 = 1 << 12;
    /// The plan's time runs slower because the machine lags behind its reference.
    pub const PLAN_SLOWED: u32 = 1 << 13;
    /// Warning: the law's bandwidth times the dead time, age of the pose included, leaves the safe range.
    pub const THIN_MARGIN: u32 = 1 << 14;

    /// Names of the bits, in order.
    pub const NAMES: [&str; 15] = [
        "has-pose",
        "has-reference",
        "settling",
        "speed-limited",
        "step-limited",
        "pose-stale",
        "outside-law-domain",
        "law-not-finite",
        "plan-dry",
        "pose-implausible",
        "pose-gap",
        "law-fallback",
        "pose-slewed",
        "plan-slowed",
        "thin-margin",
    ];
}

/// What one tick saw, wanted and commanded. Absent values are 0 and their flag is not set.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize)]
pub struct TickRecord {
    /// Ticks since boot, from 0.
    pub tick: u64,
    /// The tick's moment, daemon's clock, ns.
    pub at_ns: u64,
    /// The mode after this tick.
    pub mode: Mode,
    /// Why the node is in that mode.
    pub cause: Cause,
    /// How the node follows its plan.
    pub regime: Regime,
    /// See [`flag`].
    pub flags: u32,
    /// The start number in force after this tick.
    pub start_number: u64,
    /// The plan's own time, ns.
    pub plan_time_ns: u64,
    /// How fast the plan's time runs, at most 1.
    pub plan_rate: f64,
    /// The operator's cap on that.
    pub speed_cap: f64,
    /// Age of the pose used, ns.
    pub pose_age_ns: u64,
    /// Offset of the pose source's clock: daemon's minus sender's, ns.
    pub clock_offset_ns: i64,
    /// Pose of the chassis point in the site frame, carried forward to the moment at which the command acts, m.
    pub x_m: f64,
    /// Pose of the chassis point in the site frame, m.
    pub y_m: f64,
    /// Pose of the chassis point in the site frame, rad in (−π, π].
    pub heading_rad: f64,
    /// Reference pose, m.
    pub ref_x_m: f64,
    /// Reference pose, m.
    pub ref_y_m: f64,
    /// Reference pose, rad in (−π, π].
    pub ref_heading_rad: f64,
    /// Reference speed, negative in reverse, m/s.
    pub ref_speed_m_s: f64,
    /// Reference turn rate, rad/s.
    pub ref_turn_rate_rad_s: f64,
    /// Reference curvature, 1/m; 0 where the reference rests or pivots.
    pub ref_curvature_1_m: f64,
    /// Reference acceleration along the path, m/s².
    pub ref_accel_m_s2: f64,
    /// Tracking error: actual minus reference, in the reference's frame, m.
    pub along_error_m: f64,
    /// Tracking error, positive to the left, m.
    pub cross_error_m: f64,
    /// Tracking error, rad in (−π, π].
    pub heading_error_rad: f64,
    /// Body velocity the law wanted, m/s.
    pub wanted_speed_m_s: f64,
    /// Body velocity the law wanted, rad/s.
    pub wanted_turn_rate_rad_s: f64,
    /// The command, as sent.
    pub command: Command,
}

impl TickRecord {
    /// A record of nothing, to be filled in.
    pub const fn blank(layout: WheelLayout) -> Self {
        Self {
            tick: 0,
            at_ns: 0,
            mode: Mode::Standby,
            cause: Cause::Boot,
            regime: Regime::None,
            flags: 0,
            start_number: 0,
            plan_time_ns: 0,
            plan_rate: 1.0,
            speed_cap: 1.0,
            pose_age_ns: 0,
            clock_offset_ns: 0,
            x_m: 0.0,
            y_m: 0.0,
            heading_rad: 0.0,
            ref_x_m: 0.0,
            ref_y_m: 0.0,
            ref_heading_rad: 0.0,
            ref_speed_m_s: 0.0,
            ref_turn_rate_rad_s: 0.0,
            ref_curvature_1_m: 0.0,
            ref_accel_m_s2: 0.0,
            along_error_m: 0.0,
            cross_error_m: 0.0,
            heading_error_rad: 0.0,
            wanted_speed_m_s: 0.0,
            wanted_turn_rate_rad_s: 0.0,
            command: Command {
                mode: Mode::Standby,
                layout,
                valid_ns: 0,
                speed_m_s: 0.0,
                turn_rate_rad_s: 0.0,
                wheels: [0.0; 4],
            },
        }
    }

    /// True if all bits of `flags` are set.
    pub const fn has(&self, flags: u32) -> bool {
        self.flags & flags == flags
    }
}
