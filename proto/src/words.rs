//! The vocabulary shared by wire, journal and people: modes, causes, and why something was refused.
//!
//! Numbers are part of the wire format: append, never renumber.

use bincode::{Decode, Encode};
use core::fmt;
use serde::{Deserialize, Serialize};

/// What the node is doing now.
#[derive(
    Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Encode, Decode, Serialize, Deserialize,
)]
#[serde(rename_all = "kebab-case")]
pub enum Mode {
    /// No motion; zero goes out.
    Standby,
    /// The law follows the plan.
    Tracking,
    /// Braking on a ramp along the path, power on (stop category 1 or 2 in IEC 60204-1's sense).
    ControlledStop,
    /// A guard tripped; latched until a reset.
    ProtectiveStop,
    /// Latched over everything until a reset.
    EmergencyStop,
}

impl Mode {
    /// All modes, in wire order.
    pub const ALL: [Self; 5] =
        [Self::Standby, Self::Tracking, Self::ControlledStop, Self::ProtectiveStop, Self::EmergencyStop];

    /// The name people and logs use.
    pub const fn name(self) -> &'static str {
        match self {
            Self::Standby => "standby",
            Self::Tracking => "tracking",
            Self::ControlledStop => "controlled-stop",
            Self::ProtectiveStop => "protective-stop",
            Self::EmergencyStop => "emergency-stop",
        }
    }
}

impl fmt::Display for Mode {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.pad(self.name())
    }
}

/// Why the node is in its mode.
#[derive(
    Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Encode, Decode, Serialize, Deserialize,
)]
#[serde(rename_all = "kebab-case")]
pub enum Cause {
    /// The daemon has just started.
    Boot,
    /// An operator's start, stop or reset.
    Operator,
    /// The plan ended and the machine rests.
    PlanEnded,
    /// The plan ended; the error did not settle within the time allowed.
    NotSettled,
    /// An open plan ran out of segments.
    PlanRanDry,
    /// A controlled stop's ramp has reached zero.
    RampEnded,
    /// No fresh pose within the pose timeout.
    StalePose,
    /// The heading error left the law's domain.
    OutsideLawDomain,
    /// The law's result was not a finite number.
    LawNotFinite,
    /// The loop missed its ticks; the supervisor tripped.
    StalledLoop,
    /// A stop was sent past the loop, but its event never reached the node.
    LostTrip,
    /// The program is being ended.
    Shutdown,
    /// The pose jumped farther than may be slewed in.
    PoseJump,
}

impl Cause {
    /// The name people and logs use.
    pub const fn name(self) -> &'static str {
        match self {
            Self::Boot => "boot",
            Self::Operator => "operator",
            Self::PlanEnded => "plan-ended",
            Self::NotSettled => "not-settled",
            Self::PlanRanDry => "plan-ran-dry",
            Self::RampEnded => "ramp-ended",
            Self::StalePose => "stale-pose",
            Self::OutsideLawDomain => "outside-law-domain",
            Self::LawNotFinite => "law-not-finite",
            Self::StalledLoop => "stalled-loop",
            Self::LostTrip => "lost-trip",
            Self::Shutdown => "shutdown",
            Self::PoseJump => "pose-jump",
        }
    }
}

impl fmt::Display for Cause {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.pad(self.name())
    }
}

/// How the node follows its plan now: which feedback is in force.
#[derive(
    Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Encode, Decode, Serialize, Deserialize,
)]
#[serde(rename_all = "kebab-case")]
pub enum Regime {
    /// It follows none.
    None,
    /// The reference moves, and the law follows it.
    Moving,
    /// The reference turns on the spot.
    Pivoting,
    /// The reference rests, and the machine settles on its pose.
    Settling,
    /// The heading is too far off for the law: the machine turns on the spot towards the reference's heading.
    Realigning,
}

impl Regime {
    /// All regimes, in wire order.
    pub const ALL: [Self; 5] = [Self::None, Self::Moving, Self::Pivoting, Self::Settling, Self::Realigning];

    /// The name people and logs use.
    pub const fn name(self) -> &'static str {
        match self {
            Self::None => "none",
            Self::Moving => "moving",
            Self::Pivoting => "pivoting",
            Self::Settling => "settling",
            Self::Realigning => "realigning",
        }
    }
}

impl fmt::Display for Regime {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.pad(self.name())
    }
}

/// Which kind of stop an operator asks for.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum StopKind {
    /// Zero on the wire at once, latched.
    Emergency,
    /// A ramp along the path, then standby.
    Controlled,
}

/// Where in the plan a start begins.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Encode, Decode, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum StartAt {
    /// At plan time 0.
    Beginning,
    /// At a stated plan time.
    PlanTime,
    /// Where the plan passes nearest to the pose, heading included.
    Nearest,
}

/// Why a pose, a plan or an order was refused. The display text tells a person what to do.
#[derive(Clone, Copy, Debug, PartialEq, Encode, Decode, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Refusal {
    /// The order has no meaning in this mode.
    Mode {
        /// The mode in force.
        mode: Mode,
    },
    /// A start quoted another boot identity.
    Boot,
    /// A start quoted a start number that is not the one in force.
    StartNumber,
    /// A start quoted another plan than the one loaded.
    PlanDigest,
    /// There is no plan.
    NoPlan,
    /// There is no pose yet.
    NoPose,
    /// The pose is too old.
    StalePose {
        /// Age of the pose, ns.
        age_ns: u64,
        /// The pose timeout, ns.
        limit_ns: u64,
    },
    /// The machine is too far from the reference.
    TooFar {
        /// Distance to the reference, m.
        distance_m: f64,
        /// Greatest distance for a start, m.
        limit_m: f64,
    },
    /// The heading is too far from the reference's.
    TurnedAway {
        /// Heading error, rad.
        heading_error_rad: f64,
        /// Greatest heading error, rad.
        limit_rad: f64,
    },
    /// The law cannot follow a stretch of the plan in its direction of travel.
    LawDirection {
        /// True if it is the reverse stretches that the law cannot follow.
        reverse: bool,
    },
    /// The stated plan time lies outside the plan.
    PlanTime {
        /// The stated plan time, ns.
        plan_time_ns: u64,
        /// The plan time of the plan's end, ns.
        duration_ns: u64,
    },
    /// What tripped the stop is still there.
    CauseRemains {
        /// That cause.
        cause: Cause,
    },
    /// Another sender holds the lease.
    Lease {
        /// The session that holds it.
        holder: u64,
        /// How long it lasts unless renewed, ns.
        left_ns: u64,
    },
    /// The stamp does not lie after the last accepted one.
    StampNotRising {
        /// The stamp, ns in the sender's clock.
        stamp_ns: u64,
        /// The last accepted one.
        last_ns: u64,
    },
    /// A coordinate lies outside the bound.
    OutOfRange {
        /// The value, m or rad.
        value: f64,
        /// Its bound, same unit.
        bound: f64,
    },
    /// The plan is not fit; the findings say why.
    PlanUnfit,
    /// The sequence number was seen before with another order.
    SequenceReused,
    /// A plan that continues another one finds none that is followed.
    NothingToContinue {
        /// The mode in force.
        mode: Mode,
    },
    /// A plan that continues another one has another id than the plan in force.
    OtherPlan,
    /// The revision does not lie above the greatest one taken since the run's first plan.
    RevisionNotRising {
        /// The revision.
        revision: u32,
        /// The greatest one taken.
        last: u32,
    },
    /// The plan goes on at a plan time that is reached too soon, or passed already.
    TooSoon {
        /// Plan time at which it goes on, ns.
        at_ns: u64,
        /// The earliest one allowed: plan time reached and lead, ns.
        least_ns: u64,
    },
    /// So many plans wait for their plan time already.
    TooManyWaiting {
        /// How many can wait.
        limit: u32,
    },
    /// The position steps where the plan goes on.
    PositionStep {
        /// Plan time of the step, ns.
        at_ns: u64,
        /// The step, m.
        step_m: f64,
        /// The greatest one allowed, m.
        limit_m: f64,
    },
    /// The heading steps where the plan goes on.
    HeadingStep {
        /// Plan time of the step, ns.
        at_ns: u64,
        /// The step, rad.
        step_rad: f64,
        /// The greatest one allowed, rad.
        limit_rad: f64,
    },
    /// The speed steps where the plan goes on.
    SpeedStep {
        /// Plan time of the step, ns.
        at_ns: u64,
        /// The step, m/s.
        step_m_s: f64,
        /// The greatest one allowed, m/s.
        limit_m_s: f64,
    },
    /// The turn rate steps where the plan goes on, on the spot.
    TurnRateStep {
        /// Plan time of the step, ns.
        at_ns: u64,
        /// The step, rad/s.
        step_rad_s: f64,
        /// The greatest one allowed, rad/s.
        limit_rad_s: f64,
    },
    /// The curvature steps where the plan goes on, and this machine steers.
    CurvatureStep {
        /// Plan time of the step, ns.
        at_ns: u64,
        /// The step, 1/m.
        step_1_m: f64,
        /// The greatest one allowed, 1/m.
        limit_1_m: f64,
    },
    /// A cap lies outside its bounds.
    CapOutOfRange,
    /// A law cannot be built, or not for this machine; the findings say why.
    LawUnfit,
}

impl Refusal {
    /// A short name for counting and for logs.
    pub const fn name(&self) -> &'static str {
        match self {
            Self::Mode { .. } => "mode",
            Self::Boot => "boot",
            Self::StartNumber => "start-number",
            Self::PlanDigest => "plan-digest",
            Self::NoPlan => "no-plan",
            Self::NoPose => "no-pose",
            Self::StalePose { .. } => "stale-pose",
            Self::TooFar { .. } => "too-far",
            Self::TurnedAway { .. } => "turned-away",
            Self::LawDirection { .. } => "law-direction",
            Self::PlanTime { .. } => "plan-time",
            Self::CauseRemains { .. } => "cause-remains",
            Self::Lease { .. } => "lease",
            Self::StampNotRising { .. } => "stamp-not-rising",
            Self::OutOfRange { .. } => "out-of-range",
            Self::PlanUnfit => "plan-unfit",
            Self::SequenceReused => "sequence-reused",
            Self::NothingToContinue { .. } => "nothing-to-continue",
            Self::OtherPlan => "other-plan",
            Self::RevisionNotRising { .. } => "revision-not-rising",
            Self::TooSoon { .. } => "too-soon",
            Self::TooManyWaiting { .. } => "too-many-waiting",
            Self::PositionStep { .. } => "position-step",
            Self::HeadingStep { .. } => "heading-step",
            Self::SpeedStep { .. } => "speed-step",
            Self::TurnRateStep { .. } => "turn-rate-step",
            Self::CurvatureStep { .. } => "curvature-step",
            Self::CapOutOfRange => "cap-out-of-range",
            Self::LawUnfit => "law-unfit",
        }
    }
}

fn seconds(ns: u64) -> f64 {
    ns as f64 * 1e-9
}

impl fmt::Display for Refusal {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match *self {
            Self::Mode { mode } => write!(f, "not in mode {mode}: {}", mode_advice(mode)),
            Self::Boot => f.write_str("the order quotes another boot of the daemon: ask for the status and order again"),
            Self::StartNumber => {
                f.write_str("the start number is used up or unknown: ask for the status and start again")
            }
            Self::PlanDigest => {
                f.write_str("the order quotes another plan than the one loaded: send the plan, then start it by its digest")
            }
            Self::NoPlan => f.write_str("no plan is loaded: send one first"),
            Self::NoPose => f.write_str("no pose has arrived yet: start the estimator"),
            Self::StalePose { age_ns, limit_ns } => write!(
                f,
                "the newest pose is {:.3} s old, the pose timeout is {:.3} s: check the estimator and its clock",
                seconds(age_ns),
                seconds(limit_ns)
            ),
            Self::TooFar { distance_m, limit_m } => write!(
                f,
                "the machine is {distance_m:.3} m from the reference, node.start_distance_m allows {limit_m} m: drive it there, or resume at the nearest point"
            ),
            Self::TurnedAway { heading_error_rad, limit_rad } => write!(
                f,
                "the heading is {heading_error_rad:.3} rad from the reference's, the limit is {limit_rad:.3} rad: turn the machine first"
            ),
            Self::LawDirection { reverse } => write!(
                f,
                "the law's point would turn the machine round on the plan's {} stretches: choose another law or the other sign of law.gains.x_p_m",
                if reverse { "reverse" } else { "forward" }
            ),
            Self::PlanTime { plan_time_ns, duration_ns } => write!(
                f,
                "plan time {:.3} s lies outside the plan, which ends at {:.3} s",
                seconds(plan_time_ns),
                seconds(duration_ns)
            ),
            Self::CauseRemains { cause } => write!(f, "the cause of the stop, {cause}, is still there: remove it, then reset"),
            Self::Lease { holder, left_ns } => write!(
                f,
                "session {holder} holds the lease for another {:.3} s: one sender at a time",
                seconds(left_ns)
            ),
            Self::StampNotRising { stamp_ns, last_ns } => {
                write!(f, "stamp {stamp_ns} ns does not lie after the last accepted one, {last_ns} ns")
            }
            Self::OutOfRange { value, bound } => write!(f, "value {value} lies outside ±{bound}"),
            Self::PlanUnfit => f.write_str("the plan is not fit"),
            Self::SequenceReused => f.write_str("this session used the sequence number for another order: count up"),
            Self::NothingToContinue { mode } => write!(
                f,
                "mode {mode}: no plan is followed that this one could continue: send a plan of its own, without continues"
            ),
            Self::OtherPlan => {
                f.write_str("another plan is followed: a plan that continues it has the same id, and a greater revision")
            }
            Self::RevisionNotRising { revision, last } => {
                write!(f, "revision {revision} does not lie above {last}, the greatest one taken: count up")
            }
            Self::TooSoon { at_ns, least_ns } => write!(
                f,
                "continues.at_s {:.3} s lies before {:.3} s, the plan time reached and node.continue_lead_s: go on later, or send earlier",
                seconds(at_ns),
                seconds(least_ns)
            ),
            Self::TooManyWaiting { limit } => write!(
                f,
                "{limit} plans wait for their plan time already: send less far ahead, or replace from an earlier plan time on"
            ),
            Self::PositionStep { at_ns, step_m, limit_m } => {
                step(f, at_ns, "position", step_m, limit_m, ("m", "joint_distance_m"))
            }
            Self::HeadingStep { at_ns, step_rad, limit_rad } => {
                step(f, at_ns, "heading", step_rad, limit_rad, ("rad", "joint_heading_rad"))
            }
            Self::SpeedStep { at_ns, step_m_s, limit_m_s } => {
                step(f, at_ns, "speed", step_m_s, limit_m_s, ("m/s", "joint_speed_m_s"))
            }
            Self::TurnRateStep { at_ns, step_rad_s, limit_rad_s } => {
                step(f, at_ns, "turn rate", step_rad_s, limit_rad_s, ("rad/s", "joint_turn_rate_rad_s"))
            }
            Self::CurvatureStep { at_ns, step_1_m, limit_1_m } => {
                step(f, at_ns, "curvature", step_1_m, limit_1_m, ("1/m", "joint_curvature_1_m"))
            }
            Self::CapOutOfRange => f.write_str("a cap is a share from 0.05 to 1: to stop the machine, order a stop"),
            Self::LawUnfit => f.write_str("the law is not taken"),
        }
    }
}

/// A step where a plan goes on, in words: place, value, limit, and what would mend it.
fn step(
    f: &mut fmt::Formatter<'_>,
    at_ns: u64,
    what: &str,
    step: f64,
    limit: f64,
    (unit, key): (&str, &str),
) -> fmt::Result {
    write!(
        f,
        "at plan time {:.3} s the {what} steps by {step:.4} {unit}, node.{key} allows {limit} {unit}: begin where the plan in force is by then",
        seconds(at_ns)
    )
}

const fn mode_advice(mode: Mode) -> &'static str {
    match mode {
        Mode::Standby => "the machine stands by, a start would set it in motion",
        Mode::Tracking => "stop the machine first",
        Mode::ControlledStop => "wait until the ramp has ended",
        Mode::ProtectiveStop | Mode::EmergencyStop => "reset first, then start anew",
    }
}
