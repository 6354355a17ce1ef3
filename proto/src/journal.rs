//! The journal: the ordered, numbered record of everything that decided what the wheels did, and of what they did.
//!
//! An entry travels in journal parts and lies in track logs as a *frame*, see [`read_frame`].
//!
//! *Events* go into the node, *effects* and tick records come out. The node numbers all of them in the order it takes
//! or makes them, before any queue: a number that is missing later was lost later.

use crate::blob::{BootId, Digest, Text, to_hex};
use crate::message::{Command, Pose, Start};
use crate::words::{Cause, Mode, Refusal, StopKind};
use alloc::string::String;
use alloc::vec::Vec;
use bincode::{Decode, Encode};
use serde::Serialize;

pub use crate::frame::{
    FRAME_HEAD_BYTES, FrameError, LOG_MAGIC, MAX_BODY_BYTES, MAX_PLAN_BYTES, UNNUMBERED, encode_body,
    frame_length, read_frame, write_frame,
};
pub use crate::tick::{TickRecord, flag};

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
    /// Event: a law and its gains arrived.
    Tune(TuneEvent),
    /// Effect: another law, or other gains, are in force from now on.
    LawChanged(LawChanged),
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
                | Self::LawChanged(_)
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
            Self::Tune(_) => "tune",
            Self::LawChanged(_) => "law-changed",
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
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize)]
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
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Order {
    /// Set the machine in motion.
    Start(Start),
    /// Stop it.
    Stop(StopKind),
    /// Leave a latched stop.
    Reset,
    /// Cap the speed.
    Cap {
        /// The share of the plan's pace.
        share: f64,
    },
}

impl Order {
    /// The kind number of the message that carries it.
    pub const fn kind(&self) -> u32 {
        match self {
            Self::Start(_) => 3,
            Self::Stop(_) => 4,
            Self::Reset => 5,
            Self::Cap { .. } => 10,
        }
    }
}

/// A law and its gains as they arrived.
#[derive(Clone, Debug, PartialEq, Eq, Encode, Decode, Serialize)]
pub struct TuneEvent {
    /// Session of the sender.
    pub session: u64,
    /// The sender's sequence number.
    pub sequence: u64,
    /// When it arrived, daemon's clock, ns.
    pub received_ns: u64,
    /// The law's text, as it came.
    pub law: String,
}

impl TuneEvent {
    /// The kind number of the message that carries it.
    pub const KIND: u32 = 11;
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
    /// What is wrong with a refused plan or law, a line each.
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

/// A law that is in force from now on.
#[derive(Clone, Debug, PartialEq, Encode, Decode, Serialize)]
pub struct LawChanged {
    /// Its name.
    pub name: Text<32>,
    /// Its gains as a JSON object, defaults filled in.
    pub gains: String,
    /// Its bandwidth across the path at the machine's top speed, rad/s.
    pub bandwidth_rad_s: f64,
    /// That speed, m/s.
    pub speed_m_s: f64,
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
