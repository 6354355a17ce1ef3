//! Canaries: nodes that do wrong on purpose, each of which the search has to catch by the rule that it breaks. They
//! stand between world and node, and alter what goes in or what comes out.

use crate::judge::{Asked, drives};
use trackhold_core::node::{Event, Node};
use trackhold_core::time::TimeNs;
use trackhold_proto::blob::Digest;
use trackhold_proto::journal::{Body, Entry, Note, Order, OrderEvent, PoseEvent, TickRecord, TripEvent};
use trackhold_proto::message::{Command, Start};
use trackhold_proto::words::{Cause, Mode, StartAt, StopKind};

/// What is wrong with a node.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(crate) enum Defect {
    /// Nothing.
    None,
    /// An emergency stop is taken for a controlled one.
    SoftEmergency,
    /// An emergency stop's zero waits for the next tick.
    ZeroAtNextTick,
    /// The shell's trip does not reach the node.
    DeafToTrip,
    /// Leaving tracking does not renew the start number.
    KeepsNumber,
    /// A start may quote any number.
    AnyNumber,
    /// A start may quote any boot.
    AnyBoot,
    /// A start may quote any plan.
    AnyPlan,
    /// A start that comes again is a start again.
    StartsAgain,
    /// A reset starts the machine.
    ResetStarts,
    /// A pose resets a protective stop.
    PoseResets,
    /// Every order is acknowledged twice.
    AcksTwice,
    /// No order is acknowledged.
    AcksNever,
    /// An entry's number is left out.
    LeavesNumberOut,
    /// A record holds what is no number.
    TellsNoNumber,
    /// The machine is driven faster than it may.
    TooFast,
    /// The command steps farther than it may.
    TooSudden,
    /// In standby the machine creeps.
    Creeps,
    /// A protective stop goes on as before for a tick.
    StopsLate,
    /// A protective stop's ramp does not fall.
    RampStays,
    /// The last pose never grows old.
    BlindToSilence,
    /// A jump of the pose is not seen.
    BlindToJump,
    /// An open plan's end is not seen.
    BlindToEnd,
    /// A controlled stop never ends.
    StopsForever,
}

/// A defect at work.
#[derive(Debug)]
pub(crate) struct Canary {
    defect: Defect,
    /// What is told of the start number, if that is wrong.
    number: Option<u64>,
    next_entry: u64,
    wheels: [f64; 4],
    pose: Option<PoseEvent>,
    /// Something was left out of what is told.
    hidden: bool,
    last_sequence: u64,
    again: u64,
}

impl Canary {
    pub(crate) fn new(defect: Defect) -> Self {
        Self {
            defect,
            number: None,
            next_entry: 1,
            wheels: [0.0; 4],
            pose: None,
            hidden: false,
            last_sequence: 0,
            again: 1 << 32,
        }
    }

    /// The event as the node gets it.
    pub(crate) fn before(&mut self, at: TimeNs, event: Event, node: &mut Node) -> Event {
        match self.defect {
            Defect::KeepsNumber => self.number = self.number.or(Some(node.start_number())),
            Defect::BlindToEnd if !self.hidden => self.number = Some(node.start_number()),
            _ => (),
        }
        match (self.defect, event) {
            (Defect::BlindToSilence, Event::Tick) => {
                self.refresh(at, node);
                Event::Tick
            }
            (Defect::DeafToTrip, Event::Trip(_)) => Event::Note(Note::EventsDropped { count: 1 }),
            (_, Event::Pose(pose)) => Event::Pose(self.alter_pose(pose, node)),
            (_, Event::Order(event)) => Event::Order(self.alter_order(event, node)),
            (_, event) => event,
        }
    }

    /// The last pose once more, as if it were new.
    fn refresh(&mut self, at: TimeNs, node: &mut Node) {
        if let Some(pose) = self.pose.as_mut().filter(|_| drives(node.mode())) {
            pose.received_ns = at.0;
            pose.pose.measured_ns = at.0 + 1_000 + self.again - (1 << 32);
            self.again += 1;
            node.handle(at, Event::Pose(*pose), &mut Vec::new());
        }
    }

    fn alter_pose(&mut self, mut pose: PoseEvent, node: &Node) -> PoseEvent {
        self.pose = Some(pose);
        if self.defect == Defect::BlindToJump && node.mode() == Mode::Tracking {
            pose.pose.y_m = 0.0;
        }
        pose
    }

    fn alter_order(&mut self, mut event: OrderEvent, node: &Node) -> OrderEvent {
        match (self.defect, &mut event.order) {
            (Defect::SoftEmergency, Order::Stop(kind)) => *kind = StopKind::Controlled,
            (Defect::AnyNumber, Order::Start(start)) => start.start_number = node.start_number(),
            (Defect::AnyBoot, Order::Start(start)) => start.boot = node.boot(),
            (Defect::AnyPlan, Order::Start(start)) => {
                start.plan = node.plan().map_or(start.plan, |plan| plan.digest());
            }
            (Defect::StartsAgain, Order::Start(start)) if event.sequence <= self.last_sequence => {
                start.start_number = node.start_number();
                self.again += 1;
                event.sequence = self.again;
            }
            _ => (),
        }
        self.last_sequence = self.last_sequence.max(event.sequence & 0xffff_ffff);
        event
    }

    /// The entries as the world gets them.
    pub(crate) fn after(&mut self, at: TimeNs, asked: &Asked, node: &mut Node, out: &mut Vec<Entry>) {
        if self.defect == Defect::None {
            return;
        }
        self.add(at, asked, node, out);
        self.remove(asked, out);
        let last = self.wheels;
        for entry in out.iter_mut() {
            self.alter(entry, last);
        }
        self.pretend(asked, out);
    }

    /// What the node does besides.
    fn add(&self, at: TimeNs, asked: &Asked, node: &mut Node, out: &mut Vec<Entry>) {
        let order = match (self.defect, asked) {
            (Defect::PoseResets, Asked::Pose(_)) => Order::Reset,
            (Defect::ResetStarts, Asked::Order(OrderEvent { order: Order::Reset, .. })) => {
                Order::Start(Start {
                    boot: node.boot(),
                    plan: node.plan().map_or(Digest::NONE, |plan| plan.digest()),
                    start_number: node.start_number(),
                    at: StartAt::Beginning,
                    plan_time_ns: 0,
                })
            }
            _ => return,
        };
        let mut more = Vec::new();
        let sequence = 1 << 40 | at.0 << 8 | out.len() as u64;
        let event = OrderEvent { session: 9, sequence, received_ns: at.0, order };
        node.handle(at, Event::Order(event), &mut more);
        out.extend(more.into_iter().filter(|entry| matches!(entry.body, Body::ModeChange(_))));
    }

    /// What is left out, or told twice.
    fn remove(&mut self, asked: &Asked, out: &mut Vec<Entry>) {
        let hides = |cause: Cause| move |entry: &Entry| !matches!(entry.body, Body::ModeChange(change) if change.cause == cause);
        match self.defect {
            Defect::ZeroAtNextTick if matches!(asked, Asked::Order(_)) => {
                out.retain(|entry| !matches!(entry.body, Body::Command(_)));
            }
            Defect::AcksNever => out.retain(|entry| !matches!(entry.body, Body::Ack(_))),
            Defect::AcksTwice => {
                let acks: Vec<Entry> =
                    out.iter().filter(|entry| matches!(entry.body, Body::Ack(_))).cloned().collect();
                out.extend(acks);
            }
            Defect::BlindToEnd => self.hide(out, hides(Cause::PlanRanDry)),
            Defect::StopsForever => self.hide(out, hides(Cause::RampEnded)),
            _ => (),
        }
    }

    fn hide(&mut self, out: &mut Vec<Entry>, shown: impl Fn(&Entry) -> bool) {
        let all = out.len();
        out.retain(shown);
        self.hidden |= out.len() < all;
    }

    /// What is told wrongly.
    fn alter(&mut self, entry: &mut Entry, last: [f64; 4]) {
        if let Some(number) = self.number.filter(|_| self.hidden || self.defect == Defect::KeepsNumber) {
            match &mut entry.body {
                Body::ModeChange(change) => change.start_number = number,
                Body::Tick(record) => record.start_number = number,
                _ => (),
            }
        }
        let Body::Tick(record) = &mut entry.body else { return };
        self.alter_record(record, last);
        self.wheels = record.command.wheels;
    }

    fn alter_record(&self, record: &mut TickRecord, last: [f64; 4]) {
        let drives = drives(record.mode);
        let command = &mut record.command;
        match self.defect {
            Defect::TellsNoNumber => record.cross_error_m = f64::NAN,
            Defect::TooFast if drives => drive(command, 1.3 * command.wheels[0]),
            Defect::TooSudden if drives && last[0] == 0.0 => drive(command, 1.1 * command.wheels[0]),
            Defect::Creeps if record.mode == Mode::Standby => drive(command, 0.01),
            Defect::StopsLate | Defect::RampStays if record.mode == Mode::ProtectiveStop => {
                drive(command, last[0]);
            }
            Defect::BlindToEnd if self.hidden => tell(record, Mode::Tracking),
            Defect::StopsForever if self.hidden => tell(record, Mode::ControlledStop),
            _ => (),
        }
    }

    /// Numbers the entries anew, and makes the event look as it came.
    fn pretend(&mut self, asked: &Asked, out: &mut [Entry]) {
        let leaves_out = self.defect == Defect::LeavesNumberOut && matches!(asked, Asked::Tick);
        self.next_entry += u64::from(leaves_out);
        for entry in out.iter_mut() {
            entry.number = self.next_entry;
            self.next_entry += 1;
            if let (Body::Ack(ack), Asked::Order(event)) = (&mut entry.body, asked) {
                ack.sequence = event.sequence;
            }
        }
        let Some(first) = out.first_mut() else { return };
        match asked {
            Asked::Pose(event) => first.body = Body::Pose(*event),
            Asked::Order(event) => first.body = Body::Order(*event),
            Asked::Trip(TripEvent { cause }) => first.body = Body::Trip(TripEvent { cause: *cause }),
            _ => (),
        }
    }
}

fn drive(command: &mut Command, speed: f64) {
    (command.wheels[0], command.speed_m_s) = (speed, speed);
}

fn tell(record: &mut TickRecord, mode: Mode) {
    (record.mode, record.command.mode, record.cause) = (mode, mode, Cause::Operator);
}
