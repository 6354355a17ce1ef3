//! The messages, one struct a kind, and the enum over them.
//!
//! Field order is wire order. Every field but a byte string is fixed width, and all are little endian: C firmware
//! reads them at fixed offsets. Frames, units and duties are written down in `PROTOCOL.md`.

use crate::blob::{Blob, BootId, Digest, Text};
use crate::check;
use crate::codec::DecodeError;
use crate::words::{Cause, Mode, Regime};
use bincode::{Decode, Encode};
use serde::{Deserialize, Serialize};

pub use crate::orders::{Cap, LAW_BYTES, LEAST_SHARE, Reset, Start, Stop, Tune};

/// Most bytes of a plan in one part.
pub const PART_BYTES: usize = 1024;

/// Most bytes of marks in one list of missing parts.
pub const MARK_BYTES: usize = 1024;

/// Most bytes of journal in one datagram.
pub const JOURNAL_BYTES: usize = 1100;

/// Subscription bit: wheel commands.
pub const WANT_COMMANDS: u32 = 1;
/// Subscription bit: the journal.
pub const WANT_JOURNAL: u32 = 2;
/// Subscription bit: a status a few times a second.
pub const WANT_STATUS: u32 = 4;

/// A message whose values are plausible by themselves: finite numbers, bounds that need no context.
pub trait Payload {
    /// Number of the kind in the header.
    const KIND: u8;
    /// Name of the kind in JSON.
    const NAME: &'static str;

    /// Refuses values that mean nothing in any state.
    ///
    /// # Errors
    /// Names the field.
    fn check(&self) -> Result<(), DecodeError> {
        Ok(())
    }
}

/// Where the estimator's point is, in the site frame.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Pose {
    /// When the pose was true, in the sender's clock, ns.
    pub measured_ns: u64,
    /// Position, m.
    pub x_m: f64,
    /// Position, m.
    pub y_m: f64,
    /// Heading, counter-clockwise from +x, rad; any turn count.
    pub heading_rad: f64,
    /// Standard deviation of the position, m; 0 where the estimator does not know it.
    #[serde(default)]
    pub position_sd_m: f64,
    /// Standard deviation of the heading, rad; 0 where the estimator does not know it.
    #[serde(default)]
    pub heading_sd_rad: f64,
}

/// One part of a plan's bytes.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct PlanPart {
    /// SHA-256 of the whole plan's bytes; names the transfer.
    pub digest: Digest,
    /// Length of the whole plan, bytes.
    pub total_bytes: u32,
    /// Length of every part but the last, bytes; 1 to [`PART_BYTES`].
    pub part_bytes: u32,
    /// Number of this part, from 0.
    pub part: u32,
    /// The part's bytes (in JSON: hex).
    pub bytes: Blob<PART_BYTES>,
}

/// Asks for streams, to be sent to where this came from, until the lease ends.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Subscribe {
    /// Sum of the `WANT_` bits; 0 ends the subscription.
    pub want: u32,
    /// How long the lease lasts unless renewed, ms.
    pub lease_ms: u32,
}

/// Asks for journal entries again, by number, both ends included.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct JournalRequest {
    /// First entry wanted.
    pub first: u64,
    /// Last entry wanted.
    pub last: u64,
}

/// Asks for one status.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct StatusRequest {}

/// Answers a time request (the four stamps of RFC 5905, section 8).
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct TimeReply {
    /// The request's `sent_ns`, unchanged (daemon's clock).
    pub request_sent_ns: u64,
    /// When the request arrived (sender's clock).
    pub request_received_ns: u64,
    /// When this reply was sent (sender's clock).
    pub reply_sent_ns: u64,
}

/// The outcome of a plan or an order.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Ack {
    /// Session of the sender whose order this is about.
    pub order_session: u64,
    /// Sequence number of the order (of a plan: of any of its parts).
    pub order_sequence: u64,
    /// The order's kind, as in its header.
    pub order_kind: u32,
    /// 1 accepted, 0 refused.
    pub accepted: u32,
    /// Digest of the plan this is about, else zero.
    pub plan: Digest,
    /// Why it was refused and what would mend it; empty if accepted.
    pub text: Text<900>,
}

/// What the numbers of a wheel command mean.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum WheelLayout {
    /// \[speed m/s, turn rate rad/s\] of the chassis point.
    Body,
    /// \[left, right\] wheel speed, rad/s.
    LeftRight,
    /// \[speed m/s of the rear axle's midpoint, steering angle rad of the equivalent single front wheel\].
    SpeedSteer,
    /// \[speed m/s of the rear axle's midpoint, steering angles rad of the left and of the right front wheel\].
    Ackermann,
    /// \[rim speed m/s, steering angle rad\] of the one wheel that drives and steers.
    SteeredWheel,
}

impl WheelLayout {
    /// How many of the four numbers are in use.
    pub const fn count(self) -> usize {
        self.columns().len()
    }

    /// Whether a number is a steering angle, which zero holds; the others are speeds.
    pub const fn is_angle(self, index: usize) -> bool {
        match self {
            Self::Body | Self::LeftRight => false,
            Self::SpeedSteer | Self::SteeredWheel => index == 1,
            Self::Ackermann => index == 1 || index == 2,
        }
    }

    /// Whether any number is a steering angle.
    pub const fn is_steered(self) -> bool {
        self.is_angle(1)
    }

    /// Column names of the numbers in use.
    pub const fn columns(self) -> &'static [&'static str] {
        match self {
            Self::Body => &["command_speed_m_s", "command_turn_rate_rad_s"],
            Self::LeftRight => &["left_wheel_rad_s", "right_wheel_rad_s"],
            Self::SpeedSteer => &["rear_speed_m_s", "steer_rad"],
            Self::Ackermann => &["rear_speed_m_s", "left_steer_rad", "right_steer_rad"],
            Self::SteeredWheel => &["wheel_speed_m_s", "steer_rad"],
        }
    }
}

/// A wheel command. The drive's duties towards it are written down in `PROTOCOL.md`.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Command {
    /// The node's mode.
    pub mode: Mode,
    /// What `wheels` means.
    pub layout: WheelLayout,
    /// How long the command holds, counted from its reception, ns; then the drive goes to zero by itself.
    pub valid_ns: u64,
    /// The body velocity this command amounts to, m/s.
    pub speed_m_s: f64,
    /// The body velocity this command amounts to, rad/s.
    pub turn_rate_rad_s: f64,
    /// The command; numbers not in use are 0.
    pub wheels: [f64; 4],
}

/// A stretch of the journal: whole entry frames (`parts` = 1), or one part of a single long one.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct JournalPart {
    /// Number of the first entry in `bytes`.
    pub first: u64,
    /// How many entries `bytes` holds; 1 where `parts` > 1.
    pub entries: u32,
    /// Number of this part, from 0.
    pub part: u32,
    /// How many parts the entry travels in.
    pub parts: u32,
    /// Entry frames as in the track log.
    pub bytes: Blob<JOURNAL_BYTES>,
}

/// These entries are not in the daemon's ring any more, or were lost before they reached it.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct JournalGone {
    /// First entry that cannot be had.
    pub first: u64,
    /// Last entry that cannot be had.
    pub last: u64,
}

/// Confirms a subscription.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Subscribed {
    /// The daemon's boot identity.
    pub boot: BootId,
    /// The streams granted; 0 if there is no room.
    pub want: u32,
    /// The lease granted, ms.
    pub lease_ms: u32,
    /// The oldest entry the ring still holds without a gap up to the newest.
    pub oldest_entry: u64,
    /// The number the next entry will have.
    pub next_entry: u64,
}

/// Counters of what was refused and lost since boot.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Counters {
    /// Datagrams received.
    pub datagrams: u64,
    /// Datagrams that could not be decoded.
    pub malformed: u64,
    /// Datagrams of a kind only the daemon sends.
    pub misdirected: u64,
    /// Poses taken.
    pub poses: u64,
    /// Poses refused.
    pub poses_refused: u64,
    /// Orders refused (start, stop, reset, cap, tune).
    pub orders_refused: u64,
    /// Plans refused.
    pub plans_refused: u64,
    /// Events dropped because the queue to the loop was full.
    pub events_dropped: u64,
    /// Journal entries lost because the queue from the loop was full.
    pub entries_lost: u64,
    /// Ticks that came a whole period or more late.
    pub ticks_late: u64,
    /// Ticks whose law had too thin a margin: its bandwidth times the delay left the safe range.
    pub ticks_thin: u64,
}

/// What the daemon is doing.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Status {
    /// The daemon's boot identity.
    pub boot: BootId,
    /// Number that the next start has to quote.
    pub start_number: u64,
    /// The mode in force.
    pub mode: Mode,
    /// Why.
    pub cause: Cause,
    /// Digest of the plan loaded; zero without one.
    pub plan: Digest,
    /// The plan's id.
    pub plan_id: Text<64>,
    /// The plan's revision.
    pub plan_revision: u32,
    /// The plan time of the plan's end: its duration, unless it continues another plan, ns.
    pub plan_duration_ns: u64,
    /// The plan time reached, ns.
    pub plan_time_ns: u64,
    /// Ticks since boot.
    pub tick: u64,
    /// 1 if the next three fields hold a pose.
    pub has_pose: u32,
    /// Pose of the chassis point, m.
    pub x_m: f64,
    /// Pose of the chassis point, m.
    pub y_m: f64,
    /// Pose of the chassis point, rad.
    pub heading_rad: f64,
    /// Age of the pose, ns.
    pub pose_age_ns: u64,
    /// The offset of the pose source's clock: daemon's minus sender's, ns.
    pub clock_offset_ns: i64,
    /// Tracking error, m; 0 unless tracking.
    pub along_error_m: f64,
    /// Tracking error, m; 0 unless tracking.
    pub cross_error_m: f64,
    /// Tracking error, rad; 0 unless tracking.
    pub heading_error_rad: f64,
    /// Subscribers to commands.
    pub command_subscribers: u32,
    /// Subscribers to the journal.
    pub journal_subscribers: u32,
    /// The oldest entry the ring still holds without a gap up to the newest.
    pub oldest_entry: u64,
    /// The number the next entry will have.
    pub next_entry: u64,
    /// Counters since boot.
    pub counters: Counters,
    /// How the node follows its plan.
    pub regime: Regime,
    /// How fast the plan's time runs, at most 1.
    pub plan_rate: f64,
    /// The operator's cap on that.
    pub speed_cap: f64,
    /// The law's bandwidth across the path at the machine's top speed, rad/s.
    pub bandwidth_rad_s: f64,
    /// The law in force.
    pub law: Text<32>,
    /// Its gains as a JSON object, defaults filled in; empty if they do not fit.
    pub gains: Text<GAINS_BYTES>,
}

/// Most bytes of gains in a status.
pub const GAINS_BYTES: usize = 600;

/// Tells a planner which parts of its plan have not arrived, so that it need not send all of them again.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct PlanMissing {
    /// SHA-256 of the whole plan's bytes, as its parts state it.
    pub digest: Digest,
    /// How many parts are missing in all.
    pub missing: u32,
    /// Number of the first part missing.
    pub first: u32,
    /// A mark a part from `first` on, the least significant bit of a byte first: 1 where the part is missing. Parts
    /// behind the last mark are not spoken of.
    pub marks: Blob<MARK_BYTES>,
}

impl PlanMissing {
    /// The numbers of the parts marked as missing.
    pub fn parts(&self) -> impl Iterator<Item = u32> {
        let marks = self.marks;
        let first = self.first;
        (0..8 * marks.as_slice().len() as u32)
            .filter(move |mark| marks.as_slice()[(mark / 8) as usize] & (1 << (mark % 8)) != 0)
            .filter_map(move |mark| first.checked_add(mark))
    }
}

/// Asks a sender for its clock; it answers with a [`TimeReply`].
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct TimeRequest {
    /// The daemon's clock when it sent this, ns.
    pub sent_ns: u64,
}

/// Defines the kinds once: number, JSON name, struct; and from that the enum over all messages.
macro_rules! messages {
    ($($kind:literal $name:literal $variant:ident $(: $check:path)?,)*) => {
        /// Any message.
        #[derive(Clone, Copy, Debug, PartialEq)]
        pub enum Message {
            $(#[doc = concat!("Kind ", stringify!($kind), ", `", $name, "`.")] $variant($variant),)*
        }

        $(impl Payload for $variant {
            const KIND: u8 = $kind;
            const NAME: &'static str = $name;
            $(fn check(&self) -> Result<(), DecodeError> { $check(self) })?
        })*

        /// Kind numbers by name, for the specification and for clients.
        pub const KINDS: &[(u8, &str)] = &[$(($kind, $name),)*];

        impl Message {
            /// The kind's number in the header.
            pub const fn kind(&self) -> u8 {
                match self { $(Self::$variant(_) => $kind,)* }
            }

            /// The kind's name in JSON.
            pub const fn name(&self) -> &'static str {
                match self { $(Self::$variant(_) => $name,)* }
            }

            pub(crate) fn decode_payload(kind: u8, payload: &[u8]) -> Result<Self, DecodeError> {
                match kind {
                    $($kind => crate::codec::decode_exact::<$variant>(payload).map(Self::$variant),)*
                    _ => Err(DecodeError::Kind { got: kind }),
                }
            }

            pub(crate) fn encode_payload(&self, into: &mut [u8]) -> usize {
                match self { $(Self::$variant(payload) => crate::codec::encode_into(payload, into),)* }
            }

            pub(crate) fn from_json_fields(name: &str, fields: crate::json::Fields) -> Result<Self, DecodeError> {
                match name {
                    $($name => crate::json::payload::<$variant>(fields).map(Self::$variant),)*
                    _ => Err(DecodeError::KindName),
                }
            }

            pub(crate) fn to_json_fields(self) -> Result<serde_json::Value, serde_json::Error> {
                match self { $(Self::$variant(payload) => serde_json::to_value(payload),)* }
            }
        }
    };
}

messages! {
    1 "pose" Pose: check::pose,
    2 "plan-part" PlanPart: check::plan_part,
    3 "start" Start,
    4 "stop" Stop,
    5 "reset" Reset,
    6 "subscribe" Subscribe: check::subscribe,
    7 "journal-request" JournalRequest: check::journal_request,
    8 "status-request" StatusRequest,
    9 "time-reply" TimeReply,
    10 "cap" Cap: check::cap,
    11 "tune" Tune,
    64 "ack" Ack: check::ack,
    65 "command" Command: check::command,
    66 "journal-part" JournalPart: check::journal_part,
    67 "journal-gone" JournalGone: check::journal_gone,
    68 "subscribed" Subscribed,
    69 "status" Status: check::status,
    70 "time-request" TimeRequest,
    71 "plan-missing" PlanMissing: check::plan_missing,
}
