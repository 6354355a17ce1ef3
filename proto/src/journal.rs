//! The journal: the ordered, numbered record of everything that decided what the wheels did, and of what they did.
//!
//! An entry travels in journal parts and lies in track logs as a *frame*, see [`read_frame`].
//!
//! *Events* go into the node, *effects* and tick records come out. The node numbers all of them in the order it takes
//! or makes them, before any queue: a number that is missing later was lost later.

use crate::blob::{BootId, Digest, Text, to_hex};
use crate::message::{Command, Pose, Start, WheelLayout};
use crate::words::{Cause, Mode, Refusal, Regime, StopKind};
use alloc::string::String;
use alloc::vec::Vec;
use bincode::{Decode, Encode};
use serde::Serialize;

pub use crate::frame::{
    FRAME_HEAD_BYTES, FrameError, LOG_MAGIC, MAX_BODY_BYTES, MAX_PLAN_BYTES, UNNUMBERED, encode_body,
    frame_length, read_frame, write_frame,
};

/// One entry.
#[derive(Clone, Debug, PartialEq)]
pub struct Entry {
    /// Its number, from 0 at boot, without gaps.
    pub number: u64,
    /// When the node took or made it, daemon's clock, ns.
    pub at_ns: u64,
    /// What it says.
    pub body: Body,
}

/// What an entry says. Variants are numbered in order: append, never reorder.
#[derive(Clone, Debug, PartialEq, Encode, Decode, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Body {
    /// Event: the node begins.
    Boot(Boot),
    /// Event: a pose arrived.
    Pose(PoseEvent),
    /// Event: an exchange of stamps with a sender was completed.
    Exchange(ExchangeEvent),
    /// Event: a plan arrived whole.
    Plan(PlanEvent),
    /// Event: an operator's order arrived.
    Order(OrderEvent),
    /// Event: the shell stopped the machine by itself.
    Trip(TripEvent),
    /// Event without influence on the node: what the shell measured. Numbered, never compared.
    Note(Note),
    /// A tick: event and its result in one.
    Tick(TickRecord),
    /// Effect: the outcome of an order or a plan.
    Ack(AckEffect),
    /// Effect: a wheel command that did not wait for a tick.
    Command(Command),
    /// Effect: the mode changed.
    ModeChange(ModeChange),
    /// Effect: a pose was refused.
    PoseRefused(PoseRefused),
    /// Effect: a plan is in force from now on; where it continues another one, from the tick before this entry on.
    PlanLoaded(PlanLoaded),
    /// Written by a recorder: these numbers could not be had.
    Gap(Gap),
    /// Written by a recorder: the log is complete up to here.
    End(End),
    /// Effect: a plan that continues the one in force was taken and waits for its plan time.
    PlanWaits(PlanWaits),
}

impl Body {
    /// True for what is made by the node alone, and hence compared in a replay and covered by the digest.
    pub const fn is_result(&self) -> bool {
        matches!(
            self,
            Self::Tick(_)
                | Self::Ack(_)
                | Self::Command(_)
                | Self::ModeChange(_)
                | Self::PoseRefused(_)
                | Self::PlanLoaded(_)
                | Self::PlanWaits(_)
        )
    }

    /// A short name for people.
    pub const fn name(&self) -> &'static str {
        match self {
            Self::Boot(_) => "boot",
            Self::Pose(_) => "pose",
            Self::Exchange(_) => "exchange",
            Self::Plan(_) => "plan",
            Self::Order(_) => "order",
            Self::Trip(_) => "trip",
            Self::Note(_) => "note",
            Self::Tick(_) => "tick",
            Self::Ack(_) => "ack",
            Self::Command(_) => "command",
            Self::ModeChange(_) => "mode-change",
            Self::PoseRefused(_) => "pose-refused",
            Self::PlanLoaded(_) => "plan-loaded",
            Self::Gap(_) => "gap",
            Self::End(_) => "end",
            Self::PlanWaits(_) => "plan-waits",
        }
    }
}

/// What a node begins with; entry 0 of every journal.
#[derive(Clone, Debug, PartialEq, Encode, Decode, Serialize)]
pub struct Boot {
    /// The daemon's boot identity.
    pub boot: BootId,
    /// Seed of the start numbers.
    pub seed: u64,
    /// Everything in the site file that changes the node's behaviour, as JSON.
    pub settings: String,
    /// What computed: program version and version of the elementary functions.
    pub build: String,
}

/// A pose as it arrived.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize)]
pub struct PoseEvent {
    /// Session of the sender.
    pub session: u64,
    /// The sender's sequence number.
    pub sequence: u64,
    /// When it arrived, daemon's clock, ns.
    pub received_ns: u64,
    /// What it says.
    pub pose: Pose,
}

/// The four stamps of RFC 5905, section 8, with the daemon in the client's place.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize)]
pub struct ExchangeEvent {
    /// Session of the sender.
    pub session: u64,
    /// The request left, daemon's clock, ns.
    pub request_sent_ns: u64,
    /// The request arrived, sender's clock, ns.
    pub request_received_ns: u64,
    /// The reply left, sender's clock, ns.
    pub reply_sent_ns: u64,
    /// The reply arrived, daemon's clock, ns.
    pub reply_received_ns: u64,
}

/// A plan as it arrived.
#[derive(Clone, Debug, PartialEq, Encode, Decode, Serialize)]
pub struct PlanEvent {
    /// Session of the sender.
    pub session: u64,
    /// Sequence number of the part that completed it.
    pub sequence: u64,
    /// SHA-256 of `raw`.
    pub digest: Digest,
    /// The plan's bytes.
    #[serde(serialize_with = "as_text")]
    pub raw: Vec<u8>,
}

/// A plan in JSON as its text, any other bytes as hex digits.
fn as_text<S: serde::Serializer>(raw: &[u8], serializer: S) -> Result<S::Ok, S::Error> {
    match core::str::from_utf8(raw) {
        Ok(text) if text.starts_with('{') => serializer.serialize_str(text),
        _ => serializer.serialize_str(&to_hex(raw)),
    }
}

/// An order as it arrived.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize)]
pub struct OrderEvent {
    /// Session of the sender.
    pub session: u64,
    /// The sender's sequence number.
    pub sequence: u64,
    /// When it arrived, daemon's clock, ns.
    pub received_ns: u64,
    /// What it orders.
    pub order: Order,
}

/// What an operator can order.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Order {
    /// Set the machine in motion.
    Start(Start),
    /// Stop it.
    Stop(StopKind),
    /// Leave a latched stop.
    Reset,
}

impl Order {
    /// The kind number of the message that carries it.
    pub const fn kind(&self) -> u32 {
        match self {
            Self::Start(_) => 3,
            Self::Stop(_) => 4,
            Self::Reset => 5,
        }
    }
}

/// The shell stopped the machine by itself; zero is already on the wire.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize)]
pub struct TripEvent {
    /// Why.
    pub cause: Cause,
}

/// What the shell measured or refused before it came to the node.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Note {
    /// Datagrams that could not be decoded, since the last such note.
    Malformed {
        /// How many.
        count: u64,
        /// What was wrong with the last of them.
        last: Text<160>,
    },
    /// Events dropped because the queue to the loop was full, since the last such note.
    EventsDropped {
        /// How many.
        count: u64,
    },
    /// How late the loop's ticks were, since the last such note.
    Lateness {
        /// Ticks measured.
        ticks: u64,
        /// Mean lateness, ns.
        mean_ns: u64,
        /// Greatest lateness, ns.
        worst_ns: u64,
    },
    /// Real-time scheduling that was asked for and refused by the system.
    Refused {
        /// What was asked for and what the system said.
        text: Text<160>,
    },
}

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

/// The outcome of an order or a plan.
#[derive(Clone, Debug, PartialEq, Encode, Decode, Serialize)]
pub struct AckEffect {
    /// Session of the sender.
    pub session: u64,
    /// Its sequence number.
    pub sequence: u64,
    /// Kind number of the order's message.
    pub order_kind: u32,
    /// Digest of the plan this is about, else zero.
    pub plan: Digest,
    /// Why it was refused; none if it was accepted.
    pub refusal: Option<Refusal>,
    /// What is wrong with a refused plan, a line each.
    pub findings: Vec<String>,
}

/// A change of mode.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize)]
pub struct ModeChange {
    /// The mode before.
    pub from: Mode,
    /// The mode after.
    pub to: Mode,
    /// Why.
    pub cause: Cause,
    /// The start number in force from now on.
    pub start_number: u64,
}

/// A pose that was not taken.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize)]
pub struct PoseRefused {
    /// Session of the sender.
    pub session: u64,
    /// Its sequence number.
    pub sequence: u64,
    /// Why.
    pub refusal: Refusal,
}

/// A plan that is in force from now on.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize)]
pub struct PlanLoaded {
    /// SHA-256 of its bytes.
    pub digest: Digest,
    /// Its id.
    pub id: Text<64>,
    /// Its revision.
    pub revision: u32,
    /// True if more segments are expected.
    pub open: bool,
    /// The plan time of its end: its duration, or, where it continues another plan, where it begins and its duration, ns.
    pub duration_ns: u64,
    /// The length of its path, m.
    pub length_m: f64,
}

/// A plan that was taken and waits for its plan time.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize)]
pub struct PlanWaits {
    /// SHA-256 of its bytes.
    pub digest: Digest,
    /// Its revision.
    pub revision: u32,
    /// Plan time at which it goes on, ns.
    pub at_ns: u64,
    /// How far the position steps there, m.
    pub position_step_m: f64,
    /// How far the curvature steps there, 1/m; on a machine that turns on the spot nothing but a lag comes of it.
    pub curvature_step_1_m: f64,
    /// Plans waiting from now on, this one included.
    pub waiting: u32,
}

/// Numbers a recorder could not get.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize)]
pub struct Gap {
    /// First missing entry.
    pub first: u64,
    /// Last missing entry.
    pub last: u64,
}

/// The end mark of a log.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize)]
pub struct End {
    /// How many numbered entries the log holds.
    pub entries: u64,
    /// SHA-256 of every byte of the log before this frame.
    pub digest: Digest,
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
