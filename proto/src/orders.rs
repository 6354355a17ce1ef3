//! What an operator's program orders: the payloads of those messages.

use crate::blob::{BootId, Digest, Text};
use crate::words::{StartAt, StopKind};
use bincode::{Decode, Encode};
use serde::{Deserialize, Serialize};

/// Sets the machine in motion. Moves nothing unless boot, plan and start number are those in force.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Start {
    /// The daemon's boot identity, from its status.
    pub boot: BootId,
    /// Digest of the plan to follow.
    pub plan: Digest,
    /// The one-time start number, from its status.
    pub start_number: u64,
    /// Where to begin.
    pub at: StartAt,
    /// Plan time to begin at where `at` is `plan-time`, ns; else 0.
    #[serde(default)]
    pub plan_time_ns: u64,
}

/// Stops the machine. A request, not a safety function.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Stop {
    /// Which kind.
    pub stop: StopKind,
}

/// Leaves a latched stop for standby, once its cause is gone. Moves nothing.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Reset {}

/// The least share of the plan's speed that a cap leaves: who wants less means a stop.
pub const LEAST_SHARE: f64 = 0.05;

/// Caps the speed: the plan's time runs no faster than this share of its own pace, until the next cap. In force at once,
/// in every mode, and over starts; a daemon begins with 1.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Cap {
    /// The share, [`LEAST_SHARE`] to 1.
    pub share: f64,
}

/// Most bytes of a law's text.
pub const LAW_BYTES: usize = 900;

/// Changes the law and its gains, also while a plan is followed.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Tune {
    /// The law and its gains as JSON: `{"name": NAME, "gains": {KEY: VALUE, …}}`; gains not named have their defaults.
    pub law: Text<LAW_BYTES>,
}
