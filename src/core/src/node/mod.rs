//! The node: the state machine that turns poses, plans, orders and ticks into wheel commands.
//!
//! One contract: [`Node::handle`] takes a moment and an event and pushes numbered entries into a [`Sink`]: the event
//! itself, then its results. Poses, plans and orders only update state; the law runs on the tick alone. After
//! [`Node::new`] nothing here allocates, and nothing reads a clock.
//!
//! | module | phase |
//! | --- | --- |
//! | [`params`] | the node's numbers |
//! | `clock`, `intake` | poses: senders' clocks, lease, freshness |
//! | `orders` | start gates, stop, reset, plans, acknowledgements |
//! | [`margin`] | the law's bandwidth times the delay of the loop |
//! | `tune` | what an operator changes while the machine runs |
//! | [`tuning`] | from a tune's text to a law |
//! | `mode` | the mode table |
//! | `successors` | plans that continue the one in force |
//! | `carry` | the pose carried forward to the moment at which a command acts; jumps of the estimator |
//! | `average` | poses averaged while the reference rests |
//! | `pace` | how fast the plan's time runs |
//! | `ahead` | what a law sees of the plan ahead |
//! | `run` | following a plan: its clock, ramps, settling |
//! | `tick` | one control period |

mod ahead;
mod average;
mod carry;
mod clock;
mod intake;
pub mod margin;
pub mod mode;
mod orders;
mod pace;
pub mod params;
mod run;
mod successors;
mod tick;
mod tune;
pub mod tuning;

use crate::BUILD;
use crate::geometry::Mount;
use crate::keys::Problem;
use crate::law::{Context, Feedback, Law};
use crate::plan::Plan;
use crate::plan::check::Terms;
use crate::settings::Settings;
use crate::time::{SpanNs, TimeNs};
use crate::vehicle::{Vehicle, Wheels};
use alloc::boxed::Box;
use alloc::string::{String, ToString};
use alloc::sync::Arc;
use alloc::vec::Vec;
use carry::{Carrier, Circumstances};
use intake::{Lease, PoseIntake};
use mode::{Trigger, Verdict, follow};
use orders::OrderMemory;
use params::Params;
use run::Run;
use successors::Successors;
use trackhold_proto::blob::BootId;
use trackhold_proto::journal::{
    Body, Boot, Entry, ExchangeEvent, ModeChange, Note, OrderEvent, PlanEvent, PoseEvent, PoseRefused,
    TripEvent, TuneEvent,
};
use trackhold_proto::message::Command;
use trackhold_proto::words::{Cause, Mode, Regime};
use tuning::Tuning;

/// What goes into the node.
#[derive(Debug)]
pub enum Event {
    /// A control period begins.
    Tick,
    /// A pose arrived.
    Pose(PoseEvent),
    /// An exchange of stamps was completed.
    Exchange(ExchangeEvent),
    /// A plan arrived, with what [`crate::plan::check::admit`] made of its bytes on this node's terms.
    Plan(PlanEvent, Result<Box<Plan>, Vec<String>>),
    /// An order arrived.
    Order(OrderEvent),
    /// A law arrived, with what [`Tuning::build`] made of its text for this node's machine.
    Tune(TuneEvent, Result<Box<Tuning>, Vec<String>>),
    /// The shell stopped the machine by itself; zero is on the wire already.
    Trip(TripEvent),
    /// Something the shell measured: numbered, without influence.
    Note(Note),
}

/// Where the node's entries go.
pub trait Sink {
    /// Takes an entry. Commands are in tick records and in command effects: send what the newest of them says.
    fn entry(&mut self, entry: Entry);

    /// Takes a plan that is not needed any more, to be freed where that may take its time.
    fn retire(&mut self, plan: Box<Plan>) {
        drop(plan);
    }

    /// Takes a law that is not needed any more, to be freed where that may take its time.
    fn retire_law(&mut self, law: Box<Tuning>) {
        drop(law);
    }
}

impl Sink for Vec<Entry> {
    fn entry(&mut self, entry: Entry) {
        self.push(entry);
    }
}

/// The state machine.
#[derive(Debug)]
pub struct Node {
    boot: BootId,
    vehicle: Arc<dyn Vehicle>,
    feedback: Feedback,
    /// What laws are built for.
    context: Context,
    mount: Mount,
    params: Params,
    terms: Terms,
    at: TimeNs,
    next_entry: u64,
    ticks: u64,
    last_tick: Option<TimeNs>,
    mode: Mode,
    cause: Cause,
    numbers: StartNumbers,
    poses: PoseIntake,
    carrier: Carrier,
    plan: Option<Box<Plan>>,
    successors: Successors,
    planner: Option<Lease>,
    orders: OrderMemory,
    run: Run,
    /// The last command.
    wheels: Wheels,
}

/// One-time start numbers: an unpredictable seed, a new number whenever tracking is left.
#[derive(Clone, Copy, Debug)]
struct StartNumbers {
    state: u64,
    current: u64,
}

impl StartNumbers {
    fn new(seed: u64) -> Self {
        let mut numbers = Self { state: seed, current: 0 };
        numbers.renew();
        numbers
    }

    /// SplitMix64 (Steele, Lea and Flood, OOPSLA 2014): a full-period walk, so that no number returns.
    fn renew(&mut self) {
        self.state = self.state.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mixed = (self.state ^ (self.state >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        let mixed = (mixed ^ (mixed >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        self.current = mixed ^ (mixed >> 31);
    }
}

impl Node {
    /// A node in standby, and entry 0 of its journal.
    ///
    /// # Errors
    /// Every setting that does not hold.
    pub fn new(
        settings: &Settings,
        boot: BootId,
        seed: u64,
        at: TimeNs,
        sink: &mut impl Sink,
    ) -> Result<Self, Vec<Problem>> {
        let checked = settings.checked()?;
        let begin = Boot { boot, seed, settings: checked.settings.to_json(), build: BUILD.to_string() };
        let (terms, context) = (checked.terms(), checked.context());
        let mut node = Self {
            boot,
            feedback: Feedback::new(checked.law, Arc::clone(&checked.vehicle), checked.params.feedback()),
            vehicle: checked.vehicle,
            context,
            mount: checked.mount,
            terms,
            at,
            next_entry: 0,
            ticks: 0,
            last_tick: None,
            mode: Mode::Standby,
            cause: Cause::Boot,
            numbers: StartNumbers::new(seed),
            poses: PoseIntake::default(),
            carrier: Carrier::new(&checked.params),
            params: checked.params,
            plan: None,
            successors: Successors::new(),
            planner: None,
            orders: OrderMemory::default(),
            run: Run::default(),
            wheels: [0.0; 4],
        };
        node.emit(Body::Boot(begin), sink);
        Ok(node)
    }

    /// Takes in an event at a moment, and pushes the event and its results into `sink`. A moment earlier than the last
    /// one counts as the last one: the node's time never goes back.
    pub fn handle(&mut self, at: TimeNs, event: Event, sink: &mut impl Sink) {
        self.at = self.at.max(at);
        match event {
            Event::Tick => self.tick(sink),
            Event::Pose(event) => self.pose(event, sink),
            Event::Exchange(event) => {
                self.emit(Body::Exchange(event), sink);
                self.poses.exchanged(&event, &self.params);
            }
            Event::Plan(event, compiled) => self.plan_arrived(event, compiled, sink),
            Event::Order(event) => self.order(event, sink),
            Event::Tune(event, built) => self.tune(event, built, sink),
            Event::Trip(event) => self.trip(event, sink),
            Event::Note(note) => self.emit(Body::Note(note), sink),
        }
    }

    /// The boot identity.
    pub fn boot(&self) -> BootId {
        self.boot
    }

    /// The mode in force.
    pub fn mode(&self) -> Mode {
        self.mode
    }

    /// Why that mode is in force.
    pub fn cause(&self) -> Cause {
        self.cause
    }

    /// The number that the next start has to quote.
    pub fn start_number(&self) -> u64 {
        self.numbers.current
    }

    /// The plan in force.
    pub fn plan(&self) -> Option<&Plan> {
        self.plan.as_deref()
    }

    /// The plan time reached: one clock for a plan and those that continue it.
    pub fn plan_time(&self) -> SpanNs {
        self.run.plan_time()
    }

    /// The machine.
    pub fn vehicle(&self) -> &Arc<dyn Vehicle> {
        &self.vehicle
    }

    /// What a plan has to fit to be taken: see [`crate::plan::check::admit`].
    pub fn terms(&self) -> &Terms {
        &self.terms
    }

    /// What a law is built for, to be put in force by [`Event::Tune`].
    pub fn law_context(&self) -> &Context {
        &self.context
    }

    /// The law in force.
    pub fn law(&self) -> &dyn Law {
        self.feedback.law()
    }

    /// The node's numbers.
    pub fn params(&self) -> &Params {
        &self.params
    }

    fn pose(&mut self, event: PoseEvent, sink: &mut impl Sink) {
        self.emit(Body::Pose(event), sink);
        let source = self.poses.source();
        let taken = self.poses.take(&event, self.mount, self.vehicle.top_speed_m_s(), &self.params);
        if let Err(refusal) = taken {
            let refused = PoseRefused { session: event.session, sequence: event.sequence, refusal };
            self.emit(Body::PoseRefused(refused), sink);
            return;
        }
        if let Some(estimate) = self.poses.estimate() {
            let moving = matches!(self.mode, Mode::Tracking | Mode::ControlledStop);
            let same = source == Some(event.session);
            let resting = self.feedback.regime() == Regime::Settling;
            self.carrier.seen(estimate, self.at, Circumstances { moving, same, resting }, &self.params);
        }
    }

    fn trip(&mut self, event: TripEvent, sink: &mut impl Sink) {
        self.emit(Body::Trip(event), sink);
        let change = self.change(Trigger::GuardProtective, event.cause);
        self.command_zero(sink);
        self.emit_change(change, sink);
    }

    /// Zero at once, past every ramp.
    fn command_zero(&mut self, sink: &mut impl Sink) {
        self.run.cancel_ramp();
        self.wheels = self.vehicle.zero(&self.wheels);
        self.carrier.commanded(self.at, self.vehicle.body(&self.wheels));
        let command = self.command();
        self.emit(Body::Command(command), sink);
    }

    /// The last command as it goes to the drives.
    fn command(&self) -> Command {
        let body = self.vehicle.body(&self.wheels);
        Command {
            mode: self.mode,
            layout: self.vehicle.layout(),
            valid_ns: self.params.command_validity.0,
            speed_m_s: body.speed_m_s,
            turn_rate_rad_s: body.turn_rate_rad_s,
            wheels: self.wheels,
        }
    }

    /// Follows the mode table. Leaving tracking renews the start number.
    fn change(&mut self, trigger: Trigger, cause: Cause) -> Option<ModeChange> {
        let Verdict::To(to) = follow(self.mode, trigger) else { return None };
        let from = self.mode;
        if from == Mode::Tracking {
            self.numbers.renew();
        }
        self.mode = to;
        self.cause = cause;
        Some(ModeChange { from, to, cause, start_number: self.numbers.current })
    }

    fn emit_change(&mut self, change: Option<ModeChange>, sink: &mut impl Sink) {
        if let Some(change) = change {
            if !matches!(change.to, Mode::Tracking | Mode::ControlledStop) {
                self.successors.clear(sink);
            }
            self.emit(Body::ModeChange(change), sink);
        }
    }

    fn emit(&mut self, body: Body, sink: &mut impl Sink) {
        let number = self.next_entry;
        self.next_entry += 1;
        sink.entry(Entry { number, at_ns: self.at.0, body });
    }
}

#[cfg(test)]
mod tests;
