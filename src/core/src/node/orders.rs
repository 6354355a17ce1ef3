//! Orders and plans: start gates, stop, reset, and the acknowledgement each of them gets.

use super::intake::Lease;
use super::mode::{Trigger, Verdict, follow};
use super::successors::JointStep;
use super::{Node, Sink};
use crate::geometry::Pose;
use crate::math;
use crate::plan::Plan;
use crate::time::SpanNs;
use alloc::boxed::Box;
use alloc::string::String;
use alloc::vec::Vec;
use trackhold_proto::blob::{Digest, Text};
use trackhold_proto::journal::{AckEffect, Body, Order, OrderEvent, PlanEvent, PlanLoaded, PlanWaits};
use trackhold_proto::message::Start;
use trackhold_proto::words::{Cause, Mode, Refusal, StartAt, StopKind};

/// Kind number of the message that carries a plan.
const PLAN_KIND: u32 = 2;
/// So many orders are remembered with their outcomes, for senders that repeat until they hear one.
const REMEMBERED: usize = 16;

/// The last orders and their outcomes.
#[derive(Clone, Debug, Default)]
pub(super) struct OrderMemory {
    slots: [Option<Remembered>; REMEMBERED],
    next: usize,
}

#[derive(Clone, Copy, Debug)]
pub(super) struct Remembered {
    session: u64,
    sequence: u64,
    given: Given,
    refusal: Option<Refusal>,
}

/// What was ordered, as far as a repetition has to be the same.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) enum Given {
    /// One of the short orders.
    Order(Order),
    /// A law, by the digest of its text.
    Tune(Digest),
}

impl Remembered {
    /// What is answered where this order's number comes again, with `given`.
    pub(super) fn outcome_of(&self, given: &Given) -> Option<Refusal> {
        if self.given == *given { self.refusal } else { Some(Refusal::SequenceReused) }
    }
}

impl OrderMemory {
    pub(super) fn find(&self, session: u64, sequence: u64) -> Option<Remembered> {
        let same = |slot: &&Remembered| slot.session == session && slot.sequence == sequence;
        self.slots.iter().flatten().find(same).copied()
    }

    pub(super) fn keep(&mut self, session: u64, sequence: u64, given: Given, refusal: Option<Refusal>) {
        self.slots[self.next] = Some(Remembered { session, sequence, given, refusal });
        self.next = (self.next + 1) % REMEMBERED;
    }
}

impl Node {
    pub(super) fn order(&mut self, event: OrderEvent, sink: &mut impl Sink) {
        self.emit(Body::Order(event), sink);
        let (session, sequence, given) = (event.session, event.sequence, Given::Order(event.order));
        let known = self.orders.find(session, sequence);
        let refusal = match known {
            // An emergency stop always acts: it is harmless twice, and the shell has sent zero already.
            _ if event.order == Order::Stop(StopKind::Emergency) => self.emergency_stop(sink),
            Some(known) => known.outcome_of(&given),
            None => match event.order {
                Order::Start(start) => self.start(&start, sink).err(),
                Order::Stop(_) => self.controlled_stop(sink).err(),
                Order::Reset => self.reset(sink).err(),
                Order::Cap { share } => self.cap(share).err(),
            },
        };
        if known.is_none() {
            self.orders.keep(session, sequence, given, refusal);
        }
        let plan = if let Order::Start(start) = event.order { start.plan } else { Digest::NONE };
        let order_kind = event.order.kind();
        self.emit(
            Body::Ack(AckEffect { session, sequence, order_kind, plan, refusal, findings: Vec::new() }),
            sink,
        );
    }

    pub(super) fn plan_arrived(
        &mut self,
        event: PlanEvent,
        compiled: Result<Box<Plan>, Vec<String>>,
        sink: &mut impl Sink,
    ) {
        let (session, sequence, digest) = (event.session, event.sequence, event.digest);
        self.emit(Body::Plan(event), sink);
        let (refusal, findings) = match (self.admit_planner(session), compiled) {
            (Ok(()), Ok(plan)) => (self.take_plan(plan, sink).err(), Vec::new()),
            (Ok(()), Err(findings)) => (Some(Refusal::PlanUnfit), findings),
            (Err(refusal), Ok(plan)) => {
                sink.retire(plan);
                (Some(refusal), Vec::new())
            }
            // The findings go out too: to drop them here would free memory within the loop.
            (Err(refusal), Err(findings)) => (Some(refusal), findings),
        };
        if refusal.is_none() {
            self.planner = Some(Lease { holder: session, renewed: self.at });
        }
        let ack = AckEffect { session, sequence, order_kind: PLAN_KIND, plan: digest, refusal, findings };
        self.emit(Body::Ack(ack), sink);
    }

    fn admit_planner(&self, session: u64) -> Result<(), Refusal> {
        self.planner.map_or(Ok(()), |planner| planner.admits(session, self.at, self.params.planner_lease))
    }

    /// Loads a plan, or lets it wait for its plan time; one that is known changes nothing.
    fn take_plan(&mut self, plan: Box<Plan>, sink: &mut impl Sink) -> Result<(), Refusal> {
        let known = self.plan.as_ref().is_some_and(|loaded| loaded.digest() == plan.digest())
            || self.successors.holds(plan.digest());
        let admitted = match plan.continues_at() {
            _ if known => Ok(None),
            Some(at) => self.admit_successor(&plan, at).map(|step| Some((at, step))),
            None if matches!(self.mode, Mode::Tracking | Mode::ControlledStop) => {
                Err(Refusal::Mode { mode: self.mode })
            }
            None => match self.admit_direction(&plan) {
                Err(refusal) => Err(refusal),
                Ok(()) => {
                    self.load(plan, sink);
                    return Ok(());
                }
            },
        };
        let Ok(Some((at, step))) = admitted else {
            sink.retire(plan);
            return admitted.map(|_| ());
        };
        let (digest, revision) = (plan.digest(), plan.revision());
        self.successors.take(plan, sink);
        let waits = PlanWaits {
            digest,
            revision,
            at_ns: at.0,
            position_step_m: step.position_m,
            curvature_step_1_m: step.curvature_1_m,
            waiting: self.successors.count() as u32,
        };
        self.emit(Body::PlanWaits(waits), sink);
        Ok(())
    }

    fn admit_successor(&self, plan: &Plan, at: SpanNs) -> Result<JointStep, Refusal> {
        let nothing = Refusal::NothingToContinue { mode: self.mode };
        let in_force = self.plan.as_deref().filter(|_| self.mode == Mode::Tracking).ok_or(nothing)?;
        self.admit_direction(plan)?;
        let reached = self.run.plan_time();
        self.successors.admit(plan, at, (in_force, reached), &*self.vehicle, &self.params)
    }

    /// Whether the law in force can follow a plan in its directions. Looked at here and not where the plan is compiled,
    /// because the law may change meanwhile.
    fn admit_direction(&self, plan: &Plan) -> Result<(), Refusal> {
        match self.feedback.law().domain().unfit_direction(plan.travel()) {
            Some(reverse) => Err(Refusal::LawDirection { reverse }),
            None => Ok(()),
        }
    }

    fn load(&mut self, plan: Box<Plan>, sink: &mut impl Sink) {
        self.successors.begin(plan.revision(), sink);
        self.run.begin(plan.begin(), self.at);
        if let Some(old) = self.plan.replace(plan) {
            sink.retire(old);
        }
        self.emit_loaded(sink);
    }

    /// Tells which plan is in force from now on.
    pub(super) fn emit_loaded(&mut self, sink: &mut impl Sink) {
        let Some(plan) = self.plan.as_deref() else { return };
        let loaded = PlanLoaded {
            digest: plan.digest(),
            id: Text::cut(plan.id()),
            revision: plan.revision(),
            open: plan.is_open(),
            duration_ns: plan.end().0,
            length_m: plan.length_m(),
        };
        self.emit(Body::PlanLoaded(loaded), sink);
    }

    fn start(&mut self, start: &Start, sink: &mut impl Sink) -> Result<(), Refusal> {
        let begin = self.pass_start_gates(start)?;
        self.feedback.begin(self.vehicle.body(&self.wheels));
        self.run.begin(begin, self.at);
        let change = self.change(Trigger::Start, Cause::Operator);
        self.emit_change(change, sink);
        Ok(())
    }

    /// Every gate of a start, in the order in which a person would mend them; returns the plan time to begin at.
    fn pass_start_gates(&self, start: &Start) -> Result<SpanNs, Refusal> {
        if follow(self.mode, Trigger::Start) == Verdict::Refused {
            return Err(Refusal::Mode { mode: self.mode });
        }
        if start.boot != self.boot {
            return Err(Refusal::Boot);
        }
        let plan = self.plan.as_deref().ok_or(Refusal::NoPlan)?;
        if start.plan != plan.digest() {
            return Err(Refusal::PlanDigest);
        }
        if start.start_number != self.numbers.current {
            return Err(Refusal::StartNumber);
        }
        self.admit_direction(plan)?;
        let estimate = self.poses.estimate().ok_or(Refusal::NoPose)?;
        let age = estimate.staleness(self.at);
        if age > self.params.pose_timeout {
            return Err(Refusal::StalePose { age_ns: age.0, limit_ns: self.params.pose_timeout.0 });
        }
        let begin = begin_time(start, plan, estimate.pose, self.run.plan_time())?;
        let reference = plan.at((begin - plan.begin()).seconds(), &mut 0);
        let distance_m = estimate.pose.distance_to(reference.pose);
        if distance_m > self.params.start_distance_m {
            return Err(Refusal::TooFar { distance_m, limit_m: self.params.start_distance_m });
        }
        // One that turns on the spot realigns first.
        let turns = self.vehicle.pivot_decel_rad_s2().is_some();
        let bound_rad = if turns { math::PI } else { self.feedback.heading_limit_rad() };
        let limit_rad = self.params.start_heading_rad.min(bound_rad);
        let heading_error_rad = math::wrap(estimate.pose.heading_rad - reference.pose.heading_rad);
        if heading_error_rad.abs() > limit_rad {
            return Err(Refusal::TurnedAway { heading_error_rad, limit_rad });
        }
        Ok(begin)
    }

    fn emergency_stop(&mut self, sink: &mut impl Sink) -> Option<Refusal> {
        let change = self.change(Trigger::EmergencyStop, Cause::Operator);
        self.command_zero(sink);
        self.emit_change(change, sink);
        None
    }

    fn controlled_stop(&mut self, sink: &mut impl Sink) -> Result<(), Refusal> {
        let change = self.change(Trigger::ControlledStop, Cause::Operator);
        self.emit_change(change, sink);
        Ok(())
    }

    fn reset(&mut self, sink: &mut impl Sink) -> Result<(), Refusal> {
        if follow(self.mode, Trigger::Reset) == Verdict::Refused {
            return Err(Refusal::Mode { mode: self.mode });
        }
        if self.mode == Mode::ProtectiveStop && self.cause_remains() {
            return Err(Refusal::CauseRemains { cause: self.cause });
        }
        let change = self.change(Trigger::Reset, Cause::Operator);
        self.emit_change(change, sink);
        Ok(())
    }

    /// Whether what tripped a protective stop is still there. Causes that only a run can show count as gone: the start's
    /// gates look at them again.
    fn cause_remains(&self) -> bool {
        match self.cause {
            Cause::StalePose => self
                .poses
                .estimate()
                .is_none_or(|estimate| estimate.staleness(self.at) > self.params.pose_timeout),
            Cause::Shutdown => true,
            _ => false,
        }
    }
}

fn begin_time(start: &Start, plan: &Plan, pose: Pose, reached: SpanNs) -> Result<SpanNs, Refusal> {
    match start.at {
        StartAt::Beginning => Ok(plan.begin()),
        StartAt::Nearest => {
            let reached_s = (reached - plan.begin()).seconds();
            Ok(plan.begin() + SpanNs::from_seconds(plan.nearest_time_s(pose, reached_s)))
        }
        StartAt::PlanTime if !(plan.begin().0..=plan.end().0).contains(&start.plan_time_ns) => {
            Err(Refusal::PlanTime { plan_time_ns: start.plan_time_ns, duration_ns: plan.end().0 })
        }
        StartAt::PlanTime => Ok(SpanNs(start.plan_time_ns)),
    }
}
