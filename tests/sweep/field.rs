//! Node and stand-in robot with a faulty link between them, datagram by datagram, in simulated time.

use fieldbook::stats::Spread;
use simrobot::machine::{Party, Setup};
use simrobot::{LinkSpec, Machine, RobotSpec};
use std::collections::VecDeque;
use trackhold_core::digest;
use trackhold_core::geometry::{Direction, Pose, TrackingError};
use trackhold_core::node::{Event, Node};
use trackhold_core::plan;
use trackhold_core::settings::Settings;
use trackhold_core::time::{SpanNs, TimeNs, tick_offset};
use trackhold_proto::blob::Hex;
use trackhold_proto::journal::{
    Body, Entry, ExchangeEvent, Order, OrderEvent, PlanEvent, PoseEvent, TickRecord, flag,
};
use trackhold_proto::message::{Start, TimeRequest};
use trackhold_proto::words::{Cause, Mode, StartAt};
use trackhold_proto::{Envelope, Message};

/// Session of the node's datagrams, of the planner and of the operator.
const DAEMON: u64 = 1;
const PLANNER: u64 = 2;
const OPERATOR: u64 = 3;
/// Sessions of the estimator and the drive.
const ROBOT: [u64; 2] = [11, 12];
/// The estimator is asked for its clock every so many ticks.
const TICKS_APART: u64 = 25;
/// The start comes at this tick: time enough to compare clocks, also where datagrams are lost.
const START_TICK: u64 = 100;
/// No run is longer.
const MOST_TICKS: u64 = 5_000;

/// True cross-track errors of a drive up to the plan's end, or why it was over before.
pub(crate) type Driven = Result<Spread, Cause>;

/// A tick's reference, and the moment that it means.
struct Held {
    acts: TimeNs,
    reference: Pose,
}

struct Field {
    node: Node,
    machine: Machine,
    entries: Vec<Entry>,
    rate_hz: f64,
    dead_time: SpanNs,
    sequence: u64,
    held: VecDeque<Held>,
    cross: Spread,
}

/// Drives a plan over a link. Its delay is the dead time that the settings should know.
///
/// # Errors
/// Why the drive was over before the plan's end.
pub(crate) fn drive(settings: &Settings, raw: &[u8], link: LinkSpec, link_seed: u64) -> Driven {
    let mut field = Field::new(settings, link, link_seed);
    let digest = field.load(raw);
    for tick in 0..MOST_TICKS {
        let at = TimeNs(0) + tick_offset(tick, field.rate_hz);
        field.advance(at);
        if tick % TICKS_APART == 0 {
            field.send(at, Party::Estimator, Message::TimeRequest(TimeRequest { sent_ns: at.0 }));
        }
        if tick == START_TICK {
            field.start(at, digest);
        }
        let record = field.tick(at);
        match (record.mode, record.cause) {
            _ if tick < START_TICK => {}
            (Mode::Tracking, _) if !record.has(flag::SETTLING) => {}
            (Mode::Tracking, _) | (Mode::Standby, Cause::PlanEnded) => {
                field.advance(at + field.dead_time);
                return Ok(field.cross);
            }
            (_, cause) => return Err(cause),
        }
    }
    panic!("{}: no end in {MOST_TICKS} ticks", settings.law.name)
}

impl Field {
    fn new(settings: &Settings, link: LinkSpec, link_seed: u64) -> Self {
        let checked = settings.checked().unwrap_or_else(|problems| panic!("{problems:?}"));
        let setup = Setup {
            vehicle: checked.vehicle,
            mount: checked.mount,
            robot: RobotSpec::default(),
            start: Pose::default(),
            link,
            link_seed,
        };
        let machine =
            Machine::new(&setup, ROBOT, TimeNs(0)).unwrap_or_else(|problems| panic!("{problems:?}"));
        let mut entries = Vec::new();
        let node = Node::new(settings, Hex([7; 16]), 1, TimeNs(0), &mut entries)
            .unwrap_or_else(|problems| panic!("{problems:?}"));
        Self {
            node,
            machine,
            entries,
            rate_hz: checked.params.rate_hz,
            dead_time: checked.params.dead_time,
            sequence: 0,
            held: VecDeque::new(),
            cross: Spread::default(),
        }
    }

    fn handle(&mut self, at: TimeNs, event: Event) {
        self.entries.clear();
        self.node.handle(at, event, &mut self.entries);
    }

    /// Panics if the last event was refused.
    fn assert_taken(&self, what: &str) {
        for entry in &self.entries {
            if let Body::Ack(ack) = &entry.body {
                assert!(ack.refusal.is_none(), "{what}: {ack:?}");
            }
        }
    }

    fn load(&mut self, raw: &[u8]) -> Hex<32> {
        let compiled = plan::check::admit(raw, self.node.terms()).map(Box::new);
        let digest = digest::of_bytes(raw);
        let event = PlanEvent { session: PLANNER, sequence: 1, digest, raw: raw.to_vec() };
        self.handle(TimeNs(0), Event::Plan(event, compiled));
        self.assert_taken("the plan");
        digest
    }

    fn start(&mut self, at: TimeNs, plan: Hex<32>) {
        let (boot, start_number) = (self.node.boot(), self.node.start_number());
        let start = Start { boot, plan, start_number, at: StartAt::Beginning, plan_time_ns: 0 };
        let order = Order::Start(start);
        let event = OrderEvent { session: OPERATOR, sequence: 1, received_ns: at.0, order };
        self.handle(at, Event::Order(event));
        self.assert_taken("the start");
    }

    fn send(&mut self, at: TimeNs, party: Party, message: Message) {
        self.sequence += 1;
        let envelope = Envelope { session: DAEMON, sequence: self.sequence, stamp_ns: at.0, message };
        self.machine.receive(at, party, &envelope.to_vec());
    }

    fn tick(&mut self, at: TimeNs) -> TickRecord {
        self.handle(at, Event::Tick);
        let mut records = self.entries.iter().filter_map(|entry| match entry.body {
            Body::Tick(record) => Some(record),
            _ => None,
        });
        let record = records.next().expect("every tick has its record");
        if record.has(flag::HAS_REFERENCE) && !record.has(flag::SETTLING) {
            let reference = Pose::new(record.ref_x_m, record.ref_y_m, record.ref_heading_rad);
            self.held.push_back(Held { acts: at + self.dead_time, reference });
        }
        self.send(at, Party::Drive, Message::Command(record.command));
        record
    }

    /// Lets the machine move on to a moment, takes in what it sends, and holds references against where it truly is.
    fn advance(&mut self, to: TimeNs) {
        loop {
            let acts = self.held.front().map_or(to, |held| held.acts);
            let next = acts.min(self.machine.due()).min(to);
            self.machine.step(next);
            while let Some((_, datagram)) = self.machine.next_datagram(next) {
                self.take(next, &datagram);
            }
            if let Some(Held { reference, .. }) = self.held.pop_front_if(|held| held.acts <= next) {
                let truth = self.machine.point().pose;
                let direction = Direction::of(reference.heading_rad);
                self.cross.add(TrackingError::between(truth, reference, direction).cross_m);
            } else if next == to && self.machine.due() > to {
                return;
            }
        }
    }

    fn take(&mut self, at: TimeNs, datagram: &[u8]) {
        let Ok(Envelope { session, sequence, message, .. }) = Envelope::decode(datagram) else { return };
        match message {
            Message::Pose(pose) => {
                self.handle(at, Event::Pose(PoseEvent { session, sequence, received_ns: at.0, pose }));
            }
            Message::TimeReply(reply) => {
                let exchange = ExchangeEvent {
                    session,
                    request_sent_ns: reply.request_sent_ns,
                    request_received_ns: reply.request_received_ns,
                    reply_sent_ns: reply.reply_sent_ns,
                    reply_received_ns: at.0,
                };
                self.handle(at, Event::Exchange(exchange));
            }
            _ => {}
        }
    }
}
