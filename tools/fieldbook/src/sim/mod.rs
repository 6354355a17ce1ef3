//! Closed loop in the core, tick by tick: the very node that drives a robot, and a world that it moves in.
//!
//! At tick k, t_k = round(k·10⁹/rate) ns, the poses that have arrived come first, then the tick; its command holds until
//! tick k+1. A tick's reference means the moment at which its command acts, `node.dead_time_s` later: it is held against the
//! true pose of that moment, and its row comes then. Boot identity, seed and sessions are fixed, so that the same run has the same digest everywhere. Nothing is
//! allocated in a tick.

pub mod csv;
mod due;
pub mod observe;
pub mod robot;
pub mod world;

pub use observe::{Observer, Row};
pub use world::{Ideal, World};

use due::Due;
use std::fmt;
use trackhold_core::digest;
use trackhold_core::geometry::{Mount, Pose};
use trackhold_core::keys::Problem;
use trackhold_core::math;
use trackhold_core::node::{Event, Node, Sink};
use trackhold_core::plan;
use trackhold_core::settings::Settings;
use trackhold_core::time::{SpanNs, TimeNs, tick_offset};
use trackhold_proto::blob::BootId;
use trackhold_proto::journal::{Body, Entry, Order, OrderEvent, PlanEvent, TickRecord};
use trackhold_proto::message::{Start, WheelLayout};
use trackhold_proto::words::{Cause, Mode, Refusal, StartAt};

/// Boot identity of every simulated node.
pub const BOOT: BootId = BootId::NONE;
/// Seed of every simulated node's start numbers.
pub const SEED: u64 = 1;
/// Session of the simulated estimator.
pub const POSE_SESSION: u64 = 1;
/// Session of the simulated planner.
pub const PLANNER_SESSION: u64 = 2;
/// Session of the simulated operator.
pub const OPERATOR_SESSION: u64 = 3;

/// A run that neither settles nor stops ends this long after plan and settling time, s: the loop has an end.
const RUNAWAY_S: f64 = 60.0;

/// What can be chosen about a run.
#[derive(Clone, Copy, Debug, Default)]
pub struct Options {
    /// Pose of the chassis point at t = 0; the plan's start if not given. The heading is wrapped.
    pub start: Option<Pose>,
    /// End the run at this time at the latest, s.
    pub seconds: Option<f64>,
}

/// How a run ended.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Outcome {
    /// How many ticks there were.
    pub ticks: u64,
    /// From the first tick to the last.
    pub duration: SpanNs,
    /// The mode after the last tick.
    pub mode: Mode,
    /// Why the node is in that mode.
    pub cause: Cause,
    /// Where the chassis point truly was when the last tick's command acted.
    pub truth: Pose,
}

/// Why a run could not begin.
#[derive(Debug, PartialEq)]
pub enum SimError {
    /// The settings do not hold.
    Settings(Vec<Problem>),
    /// The stand-in robot cannot be made for this machine.
    Robot(Vec<Problem>),
    /// The plan was refused.
    Plan(Vec<String>),
    /// The start was refused.
    Start(Refusal),
}

impl fmt::Display for SimError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Settings(problems) => {
                f.write_str("the settings do not hold:")?;
                problems.iter().try_for_each(|problem| write!(f, "\n  {problem}"))
            }
            Self::Robot(problems) => {
                f.write_str("the robot file does not fit the site file's machine:")?;
                problems.iter().try_for_each(|problem| write!(f, "\n  {problem}"))
            }
            Self::Plan(findings) => {
                f.write_str("the plan is refused:")?;
                findings.iter().try_for_each(|finding| write!(f, "\n  {finding}"))
            }
            Self::Start(refusal) => write!(f, "the start is refused: {refusal}"),
        }
    }
}

impl std::error::Error for SimError {}

/// Runs a plan on an ideal robot: it does at once and exactly what it is told.
///
/// # Errors
/// Why the run could not begin.
pub fn simulate(
    settings: &Settings,
    plan: &[u8],
    options: &Options,
    observer: &mut impl Observer,
) -> Result<Outcome, SimError> {
    let checked = settings.checked().map_err(SimError::Settings)?;
    let mount = checked.mount;
    simulate_in(settings, plan, options, |start| Ok(Ideal::new(start, mount)), observer)
}

/// Runs a plan in a world of any kind, made for a start pose.
///
/// # Errors
/// Why the run could not begin.
pub fn simulate_in<W: World>(
    settings: &Settings,
    plan: &[u8],
    options: &Options,
    world: impl FnOnce(Pose) -> Result<W, SimError>,
    observer: &mut impl Observer,
) -> Result<Outcome, SimError> {
    let mut tap = Tap { observer, record: TickRecord::blank(WheelLayout::Body), refused: None };
    let mut node = Node::new(settings, BOOT, SEED, TimeNs(0), &mut tap).map_err(SimError::Settings)?;
    load(&mut node, plan, &mut tap)?;
    let (first, limit_s) = first_and_limit(&node, options);
    let mut world = world(options.start.map_or(first, wrapped))?;
    let (origin, rate_hz) = (world.origin(), node.params().rate_hz);
    let mut k = 0;
    let mut at = origin;
    let mut due = Due::new(node.params());
    loop {
        due.give(&mut world, at, tap.observer);
        world.advance(at, &mut |arrival| {
            node.handle(TimeNs(arrival.received_ns), arrival.into_event(), &mut tap)
        });
        if k == 0 {
            start(&mut node, at, &mut tap)?;
        }
        node.handle(at, Event::Tick, &mut tap);
        let (t, record) = (at.since(origin), tap.record);
        due.tick(at, t, record);
        due.give(&mut world, at, tap.observer);
        world.command(at, &record.command);
        let next = origin + tick_offset(k + 1, rate_hz);
        let over = !matches!(record.mode, Mode::Tracking | Mode::ControlledStop);
        if over || next.since(origin).seconds() > limit_s {
            let truth = due.finish(&mut world, tap.observer);
            return Ok(Outcome { ticks: k + 1, duration: t, mode: record.mode, cause: record.cause, truth });
        }
        (k, at) = (k + 1, next);
    }
}

/// The plan's first pose, and when the run ends at the latest, s.
fn first_and_limit(node: &Node, options: &Options) -> (Pose, f64) {
    let Some(plan) = node.plan() else { unreachable!("the plan was loaded, or the run did not begin") };
    let bound_s = plan.duration_s() + node.params().settle_time.seconds() + RUNAWAY_S;
    (plan.at(0.0, &mut 0).pose, options.seconds.map_or(bound_s, |seconds| seconds.min(bound_s)))
}

fn wrapped(pose: Pose) -> Pose {
    Pose { heading_rad: math::wrap(pose.heading_rad), ..pose }
}

/// Catches what the loop needs of the node's entries on their way to the observer.
struct Tap<'a, O> {
    observer: &'a mut O,
    record: TickRecord,
    refused: Option<SimError>,
}

impl<O: Observer> Sink for Tap<'_, O> {
    fn entry(&mut self, entry: Entry) {
        self.observer.entry(&entry);
        match entry.body {
            Body::Tick(record) => self.record = record,
            Body::Ack(ack) => {
                self.refused = ack.refusal.map(|refusal| match refusal {
                    Refusal::PlanUnfit => SimError::Plan(ack.findings),
                    other => SimError::Start(other),
                });
            }
            _ => {}
        }
    }
}

fn load<O: Observer>(node: &mut Node, raw: &[u8], tap: &mut Tap<'_, O>) -> Result<(), SimError> {
    let compiled = plan::check::admit(raw, node.terms()).map(Box::new);
    let event =
        PlanEvent { session: PLANNER_SESSION, sequence: 1, digest: digest::of_bytes(raw), raw: raw.to_vec() };
    node.handle(TimeNs(0), Event::Plan(event, compiled), tap);
    tap.refused.take().map_or(Ok(()), Err)
}

fn start<O: Observer>(node: &mut Node, at: TimeNs, tap: &mut Tap<'_, O>) -> Result<(), SimError> {
    let plan = node.plan().map_or(trackhold_proto::blob::Digest::NONE, plan::Plan::digest);
    let order = Start {
        boot: node.boot(),
        plan,
        start_number: node.start_number(),
        at: StartAt::Beginning,
        plan_time_ns: 0,
    };
    let event =
        OrderEvent { session: OPERATOR_SESSION, sequence: 1, received_ns: at.0, order: Order::Start(order) };
    node.handle(at, Event::Order(event), tap);
    tap.refused.take().map_or(Ok(()), Err)
}

/// True if the estimator's point is the chassis point, and its axis the chassis'.
fn is_plain(mount: Mount) -> bool {
    mount == Mount::default()
}
