//! One node, the world around it, and its judge: makes a move by handing the node the event that stands for it.
//!
//! Poses come from a finite set of places beside the coming tick's reference, instead of from a machine that is moved
//! by what is commanded: so nothing but the moves decides what the node sees, and runs that mean the same are the
//! same.

use crate::defects::{Canary, Defect};
use crate::judge::{Asked, Broken, Judge, drives};
use crate::moves::{LawKind, Move, Place, PlanKind, StartKind};
use crate::setup::{PERIOD, POSE_TIMEOUT, Setup, continuing};
use trackhold_core::digest;
use trackhold_core::math::PI;
use trackhold_core::node::tuning::Tuning;
use trackhold_core::node::{Event, Node};
use trackhold_core::time::{SpanNs, TimeNs};
use trackhold_proto::blob::{Digest, Hex};
use trackhold_proto::journal::{
    Entry, ExchangeEvent, Note, Order, OrderEvent, PlanEvent, PoseEvent, TripEvent, TuneEvent,
};
use trackhold_proto::message::{self, Start};
use trackhold_proto::words::{StartAt, StopKind};

/// As many orders as the node remembers.
pub(crate) const REMEMBERED: u64 = 16;
/// Sessions of the operator, of two planners, of two pose sources.
const OPERATOR: u64 = 6;
const PLANNERS: [u64; 2] = [5, 7];
const SOURCES: [u64; 2] = [1, 2];
/// A plan time within every plan.
const WITHIN: SpanNs = SpanNs(100_000_000);
/// How far ahead of the plan time reached a plan continues it.
const LEAD: SpanNs = SpanNs(100_000_000);

/// A node under judgement.
#[derive(Debug)]
pub(crate) struct World<'a> {
    pub(crate) setup: &'a Setup,
    pub(crate) node: Node,
    pub(crate) judge: Judge,
    canary: Canary,
    /// The moment of the coming tick.
    pub(crate) at: TimeNs,
    out: Vec<Entry>,
    sequence: u64,
    revision: u32,
    /// Poses sent, for stamps that rise.
    poses: u64,
    /// The last datagrams of their kind that were accepted.
    pub(crate) last_start: Option<(u64, Start)>,
    pub(crate) last_reset: Option<u64>,
    cap: f64,
    /// The last pose and the source whose poses are taken.
    last_pose: Option<PoseEvent>,
    source: u64,
}

impl<'a> World<'a> {
    /// A node that has just begun.
    pub(crate) fn new(setup: &'a Setup, defect: Defect) -> Self {
        let (at, mut out) = (TimeNs(1_000_000_000), Vec::with_capacity(64));
        let node = Node::new(&setup.settings, Hex([7; 16]), 99, TimeNs(0), &mut out)
            .unwrap_or_else(|problems| panic!("the search's own settings hold: {problems:?}"));
        let judge = Judge::new(setup, node.boot(), node.start_number());
        Self {
            setup,
            node,
            judge,
            canary: Canary::new(defect),
            at,
            out,
            sequence: 0,
            revision: 1,
            poses: 0,
            last_start: None,
            last_reset: None,
            cap: 1.0,
            last_pose: None,
            source: SOURCES[0],
        }
    }

    /// Makes a move; one that has nothing to repeat does nothing.
    pub(crate) fn make(&mut self, step: Move) -> Result<(), Broken> {
        self.judge.begin();
        match step {
            Move::Tick => self.tick(self.at),
            Move::LateTick => self.tick(self.at + PERIOD + PERIOD),
            Move::EarlyTick => self.give(self.at, Event::Tick),
            Move::Pose(place) => self.send_pose(self.source, place),
            Move::PoseOld => self.stamped(self.at.0 - POSE_TIMEOUT.0 - PERIOD.0, |_| ()),
            Move::PoseRepeated => self.stamped(0, |_| ()),
            Move::PoseOutOfRange => self.stamped(self.at.0 + self.poses, |pose| pose.x_m = 1e9),
            Move::PoseElsewhere(place) => self.send_pose(self.other_source(), place),
            Move::Exchange => self.exchange(),
            Move::Start(StartKind::Repeated) => self.repeat_start(),
            Move::Start(kind) => self.start(kind),
            Move::ControlledStop => self.order(Order::Stop(StopKind::Controlled)),
            Move::EmergencyStop => self.order(Order::Stop(StopKind::Emergency)),
            Move::EmergencyReused => self.reuse(Order::Stop(StopKind::Emergency)),
            Move::Reset => self.order(Order::Reset),
            Move::ResetReused => self.reuse(Order::Reset),
            Move::ResetRepeated => {
                self.last_reset.map_or(Ok(()), |sequence| self.order_as(sequence, Order::Reset))
            }
            Move::CapHalf => self.cap(0.5),
            Move::CapNone => self.cap(1.0),
            Move::CapOutside => self.order(Order::Cap { share: 2.0 }),
            Move::Forget => {
                let cap = Order::Cap { share: self.cap };
                (0..REMEMBERED).try_for_each(|_| self.order(cap))
            }
            Move::Plan(kind) => self.plan(kind),
            Move::Tune(kind) => self.tune(kind),
            Move::Trip(cause) => self.give(self.at, Event::Trip(TripEvent { cause })),
            Move::Note => self.give(self.at, Event::Note(Note::EventsDropped { count: 1 })),
        }
    }

    /// Hands the node an event, and the judge what came of it.
    fn give(&mut self, at: TimeNs, event: Event) -> Result<(), Broken> {
        let asked = Asked::of(&event);
        self.out.clear();
        let event = self.canary.before(at, event, &mut self.node);
        self.node.handle(at, event, &mut self.out);
        self.canary.after(at, &asked, &mut self.node, &mut self.out);
        self.judge.take(&asked, &self.out)
    }

    fn tick(&mut self, at: TimeNs) -> Result<(), Broken> {
        self.give(at, Event::Tick)?;
        self.at = at + PERIOD;
        Ok(())
    }

    /// Where the plan has the machine at the coming tick; at its beginning while none is followed.
    fn place_m(&self) -> f64 {
        let Some(plan) = self.node.plan() else { return 0.0 };
        let reached_s = (self.node.plan_time() - plan.begin()).seconds();
        let t_s = if drives(self.node.mode()) { reached_s + self.judge.runs_s(self.at) } else { 0.0 };
        plan.at(t_s, &mut 0).pose.x_m
    }

    fn send_pose(&mut self, session: u64, place: Place) -> Result<(), Broken> {
        self.poses += 1;
        let pose = message::Pose {
            // Two poses of a moment rise by nanoseconds.
            measured_ns: self.at.0 + self.poses,
            x_m: self.place_m(),
            y_m: place.left_m(),
            heading_rad: if place == Place::Turned { PI } else { 0.0 },
            position_sd_m: 0.0,
            heading_sd_rad: 0.0,
        };
        self.give_pose(PoseEvent { session, sequence: self.poses, received_ns: self.at.0, pose })
    }

    fn give_pose(&mut self, event: PoseEvent) -> Result<(), Broken> {
        let taken = self.judge.poses_taken();
        self.give(self.at, Event::Pose(event))?;
        if self.judge.poses_taken() > taken {
            (self.last_pose, self.source) = (Some(event), event.session);
        }
        Ok(())
    }

    /// The last pose as it was, but for its stamp (0: that too) and a change.
    fn stamped(&mut self, measured_ns: u64, change: fn(&mut message::Pose)) -> Result<(), Broken> {
        let Some(last) = self.last_pose else { return Ok(()) };
        let mut event = PoseEvent { received_ns: self.at.0, ..last };
        if measured_ns > 0 {
            self.poses += 1;
            event.pose.measured_ns = measured_ns + self.poses;
        }
        change(&mut event.pose);
        self.give_pose(event)
    }

    /// The source whose poses are not taken.
    fn other_source(&self) -> u64 {
        if self.source == SOURCES[0] { SOURCES[1] } else { SOURCES[0] }
    }

    fn exchange(&mut self) -> Result<(), Broken> {
        let Self { source: session, at: TimeNs(now), .. } = *self;
        let event = ExchangeEvent {
            session,
            request_sent_ns: now,
            request_received_ns: now,
            reply_sent_ns: now,
            reply_received_ns: now,
        };
        self.give(self.at, Event::Exchange(event))
    }

    fn start(&mut self, kind: StartKind) -> Result<(), Broken> {
        let plan = self.node.plan().map_or(Digest::NONE, |plan| plan.digest());
        let mut start = Start {
            boot: self.node.boot(),
            plan,
            start_number: self.node.start_number(),
            at: StartAt::Beginning,
            plan_time_ns: 0,
        };
        let begin = self.node.plan().map_or(SpanNs(0), |plan| plan.begin());
        match kind {
            StartKind::Good | StartKind::Repeated => (),
            StartKind::Nearest => start.at = StartAt::Nearest,
            StartKind::Within => (start.at, start.plan_time_ns) = (StartAt::PlanTime, (begin + WITHIN).0),
            StartKind::Outside => (start.at, start.plan_time_ns) = (StartAt::PlanTime, u64::MAX),
            StartKind::OtherBoot => start.boot.0[0] ^= 1,
            StartKind::OtherPlan => start.plan.0[0] ^= 1,
            StartKind::NeverNumber => start.start_number ^= 1,
            StartKind::Recorded => match self.last_start {
                Some((_, recorded)) => start = recorded,
                None => return Ok(()),
            },
        }
        self.order(Order::Start(start))
    }

    fn repeat_start(&mut self) -> Result<(), Broken> {
        self.last_start.map_or(Ok(()), |(sequence, start)| self.order_as(sequence, Order::Start(start)))
    }

    fn reuse(&mut self, order: Order) -> Result<(), Broken> {
        self.last_start.map_or(Ok(()), |(sequence, _)| self.order_as(sequence, order))
    }

    fn cap(&mut self, share: f64) -> Result<(), Broken> {
        self.cap = share;
        self.order(Order::Cap { share })
    }

    fn order(&mut self, order: Order) -> Result<(), Broken> {
        self.sequence += 1;
        let sequence = self.sequence;
        self.order_as(sequence, order)?;
        if self.judge.refusal().is_none() {
            match order {
                Order::Start(start) => self.last_start = Some((sequence, start)),
                Order::Reset => self.last_reset = Some(sequence),
                _ => (),
            }
        }
        Ok(())
    }

    fn order_as(&mut self, sequence: u64, order: Order) -> Result<(), Broken> {
        let event = OrderEvent { session: OPERATOR, sequence, received_ns: self.at.0, order };
        self.give(self.at, Event::Order(event))
    }

    /// The cap that was asked for last.
    pub(crate) fn cap_share(&self) -> f64 {
        self.cap
    }

    fn plan(&mut self, kind: PlanKind) -> Result<(), Broken> {
        let other = kind == PlanKind::OtherPlanner;
        if other && self.node.plan().is_none() {
            // Nobody holds the lease yet.
            return Ok(());
        }
        let (raw, digest) = match self.setup.plan(kind) {
            Some((raw, digest)) => (raw.to_vec(), digest),
            None => {
                let raw = self.continuing();
                let digest = digest::of_bytes(&raw);
                (raw, digest)
            }
        };
        let planner = PLANNERS[usize::from(other)];
        self.sequence += 1;
        let compiled = self.setup.compile(&raw, digest, self.node.terms()).map(Box::new);
        let event = PlanEvent { session: planner, sequence: self.sequence, digest, raw };
        self.give(self.at, Event::Plan(event, compiled))
    }

    /// A plan that continues the one in force a little later.
    fn continuing(&mut self) -> Vec<u8> {
        self.revision += 1;
        let at = self.node.plan_time() + LEAD;
        let x_m =
            self.node.plan().map_or(0.0, |plan| plan.at((at - plan.begin()).seconds(), &mut 0).pose.x_m);
        continuing(self.revision, at.seconds(), x_m)
    }

    fn tune(&mut self, kind: LawKind) -> Result<(), Broken> {
        let law = match kind {
            LawKind::Forward => r#"{"name":"kanayama"}"#,
            LawKind::ReverseOnly => r#"{"name":"off-axle","gains":{"x_p_m":-0.3}}"#,
            LawKind::Unknown => r#"{"name":"nobody"}"#,
        };
        self.sequence += 1;
        let event = TuneEvent {
            session: OPERATOR,
            sequence: self.sequence,
            received_ns: self.at.0,
            law: law.to_string(),
        };
        let built = Tuning::build(law, self.node.law_context());
        self.give(self.at, Event::Tune(event, built))
    }
}
