//! The intake: the one socket's receiving side. Stamps, decodes and routes datagrams; nothing here takes long.
//!
//! An emergency stop is acted on first and told to the loop second: zero goes past the loop, see [`crate::gate`].

mod exchange;
pub mod leases;
mod tally;
pub mod transfer;

use crate::clock;
use crate::gate::Source;
use crate::lanes::{Bell, Drives, Item, Shared, count};
use crate::mail::{Form, Letter, Mail, OrderKey, Peer};
use crate::publish::refusal;
use crate::worker::PLAN_KIND;
use crate::zero::{Outlet, ZeroSide};
use exchange::Exchanges;
use leases::Leases;
use rtrb::Producer;
use std::net::SocketAddr;
use std::sync::Arc;
use std::sync::atomic::Ordering::SeqCst;
use std::sync::mpsc::SyncSender;
use std::time::Duration;
use tally::Tally;
use tokio::net::UdpSocket;
use tokio::sync::Notify;
use tokio::time::MissedTickBehavior;
use trackhold_core::node::Event;
use trackhold_core::time::{SpanNs, TimeNs};
use trackhold_proto::header::MAX_DATAGRAM_BYTES;
use trackhold_proto::journal::{Order, OrderEvent, PoseEvent, TuneEvent};
use trackhold_proto::message::{PlanPart, Subscribe, TimeRequest, Tune, WANT_STATUS};
use trackhold_proto::words::{Mode, StopKind};
use trackhold_proto::{Envelope, Message};
use transfer::{Assembler, Outcome, Whole};

/// Leases, notes and time requests are looked after this often.
const CARE: Duration = Duration::from_millis(100);
/// Turns of care between two time requests and two notes: a second.
const CARES_A_SECOND: u64 = 10;
/// Datagrams taken before the runtime has its turn.
const DATAGRAMS_A_TURN: usize = 64;

/// The intake's ends.
#[derive(Debug)]
#[expect(missing_docs, reason = "named like the queues in crate::lanes")]
pub struct Ends {
    pub stream: Producer<Event>,
    pub orders: Producer<Item>,
    pub drives: Producer<Drives>,
    pub jobs: SyncSender<Whole>,
    pub tune_jobs: SyncSender<TuneEvent>,
    pub mail: Mail,
    pub bell: Arc<Bell>,
}

/// The intake.
#[derive(Debug)]
pub struct Intake {
    ends: Ends,
    outlet: Outlet,
    zero: Arc<ZeroSide>,
    shared: Arc<Shared>,
    leases: Leases,
    drives: Drives,
    drives_told: bool,
    assembler: Assembler,
    exchanges: Exchanges,
    tally: Tally,
    cares: u64,
}

/// A datagram's sender and numbers.
#[derive(Clone, Copy, Debug)]
struct From {
    peer: Peer,
    session: u64,
    sequence: u64,
    at: TimeNs,
}

impl Intake {
    /// An intake that has received nothing yet and takes plans up to a length.
    pub fn new(
        ends: Ends,
        outlet: Outlet,
        zero: Arc<ZeroSide>,
        shared: Arc<Shared>,
        max_plan_bytes: usize,
    ) -> Self {
        Self {
            ends,
            outlet,
            zero,
            shared,
            leases: Leases::default(),
            drives: Drives::default(),
            drives_told: true,
            assembler: Assembler::new(max_plan_bytes),
            exchanges: Exchanges::default(),
            tally: Tally::default(),
            cares: 0,
        }
    }

    /// Receives until the end is notified.
    ///
    /// # Errors
    /// If the socket cannot be waited for.
    pub async fn run(mut self, end: &Notify) -> std::io::Result<()> {
        let socket = UdpSocket::from_std(self.outlet.socket.try_clone()?)?;
        let mut care = tokio::time::interval(CARE);
        care.set_missed_tick_behavior(MissedTickBehavior::Delay);
        // Longer than any datagram of the protocol, so that the refusal of a long one names its length.
        let mut buffer = vec![0; 1 << 16];
        loop {
            tokio::select! {
                biased;
                () = end.notified() => return Ok(()),
                // Before the socket: it is ready ten times a second only, and a flood must not keep leases alive.
                _ = care.tick() => self.care(clock::now()),
                readable = socket.readable() => {
                    readable?;
                    self.receive(&socket, &mut buffer);
                }
            }
        }
    }

    fn receive(&mut self, socket: &UdpSocket, buffer: &mut [u8]) {
        for _ in 0..DATAGRAMS_A_TURN {
            match socket.try_recv_from(buffer) {
                Ok((length, sender)) => self.datagram(&buffer[..length], sender, clock::now()),
                Err(error) if error.kind() == std::io::ErrorKind::WouldBlock => return,
                Err(error) => self.tally.socket_error(&error),
            }
        }
    }

    /// Takes a datagram in.
    pub fn datagram(&mut self, bytes: &[u8], sender: SocketAddr, at: TimeNs) {
        count(&self.shared.datagrams);
        let form = if bytes.first() == Some(&b'{') { Form::Json } else { Form::Binary };
        let peer = Peer { address: sender, form };
        match Envelope::decode(bytes) {
            Ok(Envelope { session, sequence, message, .. }) => {
                self.route(From { peer, session, sequence, at }, message);
            }
            Err(error) => self.refuse(&error.to_string()),
        }
    }

    fn refuse(&mut self, what: &str) {
        count(&self.shared.malformed);
        self.tally.malformed(what);
    }

    fn route(&mut self, from: From, message: Message) {
        match message {
            Message::Pose(pose) => {
                self.exchanges.pose_from(from.session, from.peer);
                let From { session, sequence, at, .. } = from;
                self.stream(Event::Pose(PoseEvent { session, sequence, received_ns: at.0, pose }));
            }
            Message::PlanPart(part) => self.plan_part(from, &part),
            Message::Start(start) => self.order(from, Order::Start(start)),
            Message::Stop(stop) => self.order(from, Order::Stop(stop.stop)),
            Message::Reset(_) => self.order(from, Order::Reset),
            Message::Tune(tune) => self.tune(from, &tune),
            Message::Cap(cap) => self.order(from, Order::Cap { share: cap.share }),
            Message::Subscribe(subscribe) => self.subscribe(from, subscribe),
            Message::JournalRequest(_) if from.peer.form == Form::Json => {
                self.answer(from, message.kind(), "the journal is binary: ask for it in a binary datagram");
            }
            Message::JournalRequest(wanted) => {
                let address = from.peer.address;
                self.ends.mail.post(Letter::Journal { address, first: wanted.first, last: wanted.last });
            }
            Message::StatusRequest(_) => self.ends.mail.post(Letter::Status(from.peer)),
            Message::TimeReply(reply) => match self.exchanges.reply(from.session, &reply, from.at) {
                Some(event) => self.stream(Event::Exchange(event)),
                None => self.refuse("field request_sent_ns: answers no time request that is open"),
            },
            Message::Ack(_)
            | Message::Command(_)
            | Message::JournalPart(_)
            | Message::JournalGone(_)
            | Message::Subscribed(_)
            | Message::Status(_)
            | Message::TimeRequest(_)
            | Message::PlanMissing(_) => count(&self.shared.misdirected),
        }
    }

    fn order(&mut self, from: From, order: Order) {
        // Before anything else.
        let ticket = (order == Order::Stop(StopKind::Emergency))
            .then(|| self.zero.trip(Source::Intake, Mode::EmergencyStop));
        let From { session, sequence, at, peer } = from;
        self.ends.mail.post(Letter::AckTo(OrderKey { session, sequence, kind: order.kind() }, peer));
        let event = Event::Order(OrderEvent { session, sequence, received_ns: at.0, order });
        if self.ends.orders.push(Item { event, ticket }).is_err() {
            self.dropped();
        }
        self.ends.bell.ring();
    }

    /// Hands a law on to be built. Where there is no room the operator hears nothing and sends it again.
    fn tune(&mut self, from: From, tune: &Tune) {
        let From { session, sequence, at, peer } = from;
        self.ends.mail.post(Letter::AckTo(OrderKey { session, sequence, kind: TuneEvent::KIND }, peer));
        let event = TuneEvent { session, sequence, received_ns: at.0, law: tune.law.as_str().to_owned() };
        if self.ends.tune_jobs.try_send(event).is_err() {
            self.dropped();
        }
    }

    fn plan_part(&mut self, from: From, part: &PlanPart) {
        let From { session, sequence, at, peer } = from;
        match self.assembler.part(session, sequence, part, at) {
            Outcome::Waits => {}
            Outcome::Again => self.ends.mail.post(Letter::PlanAgain { session, digest: part.digest, peer }),
            Outcome::Missing(missing) => self.ends.mail.post(Letter::Missing(peer, missing)),
            Outcome::TooLong => {
                let order = OrderKey { session, sequence, kind: PLAN_KIND };
                let text = format!(
                    "the plan has {} bytes, net.max_plan_bytes allows {}: send it in stretches, or in the compact form",
                    part.total_bytes,
                    self.assembler.max_plan_bytes()
                );
                self.ends.mail.post(Letter::AckTo(order, peer));
                self.ends.mail.post(Letter::PlanRefused { order, digest: part.digest, text });
            }
            Outcome::Whole(whole) => {
                self.ends.mail.post(Letter::AckTo(OrderKey { session, sequence, kind: PLAN_KIND }, peer));
                if self.ends.jobs.try_send(whole).is_err() {
                    // The planner hears nothing and sends all parts again.
                    self.assembler.forget(session, part.digest);
                    self.dropped();
                }
            }
        }
    }

    fn subscribe(&mut self, from: From, subscribe: Subscribe) {
        let Subscribe { want, lease_ms } = subscribe;
        if from.peer.form == Form::Json && want & !WANT_STATUS != 0 {
            let text = "commands and journal are binary: in JSON, want can be 4 (status) or 0";
            self.answer(from, Message::Subscribe(subscribe).kind(), text);
            return;
        }
        let length = SpanNs(u64::from(lease_ms) * 1_000_000);
        let granted = self.leases.subscribe(from.peer.address, want, length, from.at);
        self.ends.mail.post(Letter::Lease { peer: from.peer, granted, lease_ms });
        self.tell_drives();
    }

    /// Tells zero side and loop where commands go, if that has changed.
    fn tell_drives(&mut self) {
        let drives = self.leases.drives();
        if drives != self.drives {
            self.drives = drives;
            self.drives_told = false;
            self.zero.set_drives(drives);
            let subscribers = drives.iter().flatten().count() as u32;
            self.shared.command_subscribers.store(subscribers, SeqCst);
        }
        if !self.drives_told {
            self.drives_told = self.ends.drives.push(drives).is_ok();
        }
    }

    /// What has to be looked after now and then.
    pub fn care(&mut self, at: TimeNs) {
        for address in self.leases.expire(at) {
            self.ends.mail.post(Letter::Ended(address));
        }
        self.tell_drives();
        self.cares += 1;
        if self.cares.is_multiple_of(CARES_A_SECOND) {
            self.request_time(at);
            self.tell_tally();
        }
    }

    fn request_time(&mut self, at: TimeNs) {
        let source = self.shared.pose_source.load(SeqCst);
        let Some(address) = self.exchanges.request(source, at) else { return };
        let envelope = Envelope {
            session: self.outlet.session,
            sequence: self.outlet.gate.number(),
            stamp_ns: at.0,
            message: Message::TimeRequest(TimeRequest { sent_ns: at.0 }),
        };
        let mut datagram = [0; MAX_DATAGRAM_BYTES];
        let length = envelope.encode(&mut datagram);
        if self.outlet.socket.send_to(&datagram[..length], address).is_err() {
            count(&self.shared.answers_unsent);
        }
    }

    /// Journals what was refused and dropped. A note that finds the queue full waits for the next second.
    fn tell_tally(&mut self) {
        self.tally.log(&self.shared);
        while let Some(note) = self.tally.next_note() {
            if self.ends.stream.push(Event::Note(note)).is_err() {
                return;
            }
            self.tally.told(&note);
        }
    }

    fn stream(&mut self, event: Event) {
        if self.ends.stream.push(event).is_err() {
            self.dropped();
        }
    }

    fn dropped(&mut self) {
        count(&self.shared.events_dropped);
        self.tally.dropped();
    }

    fn answer(&mut self, from: From, kind: u8, text: &str) {
        let ack = refusal(from.session, from.sequence, u32::from(kind), text);
        self.ends.mail.post(Letter::Answer(from.peer, Box::new(ack)));
    }
}
