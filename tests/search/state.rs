//! The abstract state: what of a node's past decides what may come.
//!
//! Two pasts with one abstract state have to have the same successors under every move: the search tries two pasts of
//! each state and compares (see `explore`). That is a test, not a proof: a third past could differ where two agree.
//! Kept are
//!
//! - mode and cause, for the table and for what a reset looks at;
//! - the plan in force, the plans that wait, and, while one is followed, the place on it and the pace: they decide when the
//!   run ends, dries up, goes over to the next plan, rests;
//! - the pose: where, how old by its stamp and by its arrival, in ticks (fresh or stale, lease held or not), and where the
//!   last tick saw it: what arrived since may be a jump;
//! - what the node remembers under the numbers of the last accepted start and reset, and whether that start's number and
//!   plan are in force;
//! - the speed commanded and how long ramps last, for they take ticks; the cap, the law.
//!
//! Left out are absolute times, sequence numbers, entry numbers, revisions, which of two sources or start numbers it
//! is: none is compared with anything but its own kind. A place on a plan that is not followed is left out too: every
//! start sets it.

use crate::judge::drives;
use crate::moves::PlanKind;
use crate::setup::PERIOD;
use crate::world::World;
use trackhold_core::time::{SpanNs, TimeNs};
use trackhold_proto::journal::{TickRecord, flag};
use trackhold_proto::words::{Cause, Mode};

/// What is known of an order that may come again.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub(crate) enum Past {
    /// There is none.
    None,
    /// The node has to know an order under its number: its kind (none for a law), and why it was refused.
    Known(Option<u32>, Option<&'static str>),
    /// It is so old that the node has forgotten it.
    Forgotten,
}

/// A run along a plan.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub(crate) struct Running {
    /// Plan time since the plan's beginning, 10 ms.
    place: u64,
    /// Since the plan's time ran last, ticks: none since a start, or since a tick at this moment.
    behind: u64,
    ticked: bool,
    /// The rate of the plan's time, %.
    rate: i64,
    /// Zero was wanted in the last tick: the law may be out of play.
    rests: bool,
    slews: bool,
    /// In how many ticks each number of the command can be zero, with its sign.
    wheels: [i64; 2],
    /// Where the plans that wait begin, from the plan time reached, 10 ms.
    waiting: Vec<u64>,
    /// Where the last tick saw the machine, cm to the left, and whether turned round; and whether by another source's eyes.
    seen: Option<(i64, bool)>,
    other_source: bool,
    /// Ticks in the controlled stop: one that never ends must not look like one that lasts.
    ramp_ticks: u32,
}

/// A pose.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub(crate) struct Seen {
    left_cm: i64,
    turned: bool,
    /// Age by its stamp and by its arrival, ticks: from 2 on it is too old and the lease is over; one of 3 is older than
    /// an old pose that comes now.
    age: u64,
    arrived: u64,
}

/// The abstract state.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub(crate) struct State {
    pub(crate) mode: Mode,
    pub(crate) cause: Cause,
    plan: Option<PlanKind>,
    running: Option<Running>,
    /// Since when a protective stop ramps, ticks.
    ramping: Option<u64>,
    pose: Option<Seen>,
    start: Past,
    /// Whether that start's number and its plan are in force, and which plan it is.
    start_in_force: (bool, bool),
    start_plan: Option<PlanKind>,
    reset: Past,
    half_cap: bool,
    forward_law: bool,
}

fn ticks(span: SpanNs) -> u64 {
    // Stamps of one moment differ by nanoseconds.
    ((span.0 + PERIOD.0 / 2) / PERIOD.0).min(3)
}

fn rounded(value: f64) -> i64 {
    value.round() as i64
}

impl State {
    /// The state that a world is in.
    pub(crate) fn of(world: &World<'_>) -> Self {
        let judge = &world.judge;
        let drives = drives(judge.mode);
        let past = |sequence: Option<u64>| match sequence.map(|sequence| judge.remembers(sequence)) {
            None => Past::None,
            Some(None) => Past::Forgotten,
            Some(Some((kind, refusal))) => Past::Known(kind, refusal),
        };
        let start = world.last_start.map(|(sequence, _)| sequence);
        Self {
            mode: judge.mode,
            cause: judge.cause,
            plan: judge.plan().map(|digest| world.setup.kind_of(digest)),
            running: drives.then(|| Running::of(world)),
            ramping: judge.ramping().map(|from| ticks(world.at.since(from))),
            pose: judge.pose().map(|pose| Seen {
                left_cm: rounded(pose.pose.y_m * 1e2),
                turned: pose.pose.heading_rad != 0.0,
                age: ticks(world.at.since(TimeNs(pose.pose.measured_ns))),
                arrived: ticks(world.at.since(TimeNs(pose.received_ns))),
            }),
            start: past(start),
            start_in_force: world.last_start.map_or((false, false), |(_, start)| {
                (judge.is_current(start.start_number), judge.plan() == Some(start.plan))
            }),
            start_plan: world.last_start.map(|(_, start)| world.setup.kind_of(start.plan)),
            reset: past(world.last_reset),
            half_cap: world.cap_share() < 1.0,
            forward_law: world.node.law().domain().following().forward,
        }
    }
}

impl Running {
    fn of(world: &World<'_>) -> Self {
        let judge = &world.judge;
        let reached = world.node.plan_time();
        let begin = world.node.plan().map_or(SpanNs(0), |plan| plan.begin());
        let last = judge.last();
        let zero_wanted =
            |record: &TickRecord| (record.wanted_speed_m_s, record.wanted_turn_rate_rad_s) == (0.0, 0.0);
        let away = |begin_ns: &u64| (begin_ns - reached.0) / 10_000_000;
        Self {
            place: (reached - begin).0 / 10_000_000,
            behind: ticks(judge.behind(world.at)),
            ticked: judge.ticked(world.at),
            rate: rounded(judge.rate() * 1e2),
            rests: last.is_some_and(zero_wanted),
            slews: last.is_some_and(|record| record.has(flag::POSE_SLEWED)),
            wheels: judge.ticks_to_zero(),
            waiting: judge.waiting().iter().map(away).collect(),
            seen: judge.seen().map(|(left_m, heading_rad)| (rounded(left_m * 1e2), heading_rad != 0.0)),
            other_source: judge.changed_source(),
            ramp_ticks: judge.ramp_ticks(),
        }
    }
}
