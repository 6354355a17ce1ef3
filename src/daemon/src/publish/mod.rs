//! The publisher: takes the node's entries, keeps them in the ring, and sends journal, outcomes and status.
//!
//! It has a thread of its own, apart from the intake's: however much a recorder catches up on, and however long a plan
//! is, an emergency stop never waits behind it. Work is paced: so many bytes a turn for each who listens or asks.

mod acks;
pub mod margins;
pub mod reader;
pub mod ring;
pub mod status;

use crate::lanes::{Bell, Shared, count};
use crate::mail::{Form, Letter, Peer};
use crate::zero::Outlet;
use acks::{Acks, answer};
use margins::Margins;
use reader::{Place, Ranges, next_message};
use ring::Ring;
use rtrb::Consumer;
use status::Summary;
use std::net::SocketAddr;
use std::sync::Arc;
use std::sync::atomic::Ordering::SeqCst;
use std::sync::mpsc::Receiver;
use std::time::{Duration, Instant};
use trackhold_proto::blob::{Digest, Text};
use trackhold_proto::header::MAX_DATAGRAM_BYTES;
use trackhold_proto::journal::{Body, Entry, Note};
use trackhold_proto::message::{Ack, Status, Subscribed, WANT_JOURNAL, WANT_STATUS};
use trackhold_proto::{Envelope, Message};

/// A turn without a bell comes this often; it brings new allowances.
const TURN: Duration = Duration::from_millis(5);
/// Bytes a turn for each who listens or asks: 12 MB/s, and a burst that a default receive buffer holds.
const ALLOWANCE_BYTES: usize = 64 << 10;
/// Turns between two statuses for those who subscribed to it: five a second.
const STATUS_TURNS: u32 = 40;
/// So many can ask for what was before at the same time.
const MAX_ASKERS: usize = 16;
/// At the end the publisher sends for at most so many turns what is still to be sent.
const LAST_TURNS: u32 = 100;

/// What the publisher is made of.
#[derive(Debug)]
pub struct Publisher {
    entries: Consumer<Entry>,
    letters: Receiver<Letter>,
    outlet: Outlet,
    shared: Arc<Shared>,
    ring: Ring,
    summary: Summary,
    margins: Margins,
    acks: Acks,
    listeners: Vec<Listener>,
    askers: Vec<Asker>,
    turns: u32,
}

/// Somebody with a lease on journal or status.
#[derive(Debug)]
struct Listener {
    peer: Peer,
    want: u32,
    next: Place,
    allowance: usize,
}

/// Somebody who asked for what was before.
#[derive(Debug)]
struct Asker {
    address: SocketAddr,
    ranges: Ranges,
    allowance: usize,
}

impl Publisher {
    /// A publisher with a ring of so many bytes, and room for a plan of so many.
    pub fn new(
        entries: Consumer<Entry>,
        letters: Receiver<Letter>,
        outlet: Outlet,
        shared: Arc<Shared>,
        (ring_bytes, max_plan_bytes): (usize, usize),
        (summary, margins): (Summary, Margins),
    ) -> Self {
        Self {
            entries,
            letters,
            outlet,
            shared,
            ring: Ring::new(ring_bytes, max_plan_bytes),
            summary,
            margins,
            acks: Acks::default(),
            listeners: Vec::new(),
            askers: Vec::new(),
            turns: 0,
        }
    }

    /// Publishes until the daemon ends, and then what is still to be sent.
    ///
    /// # Errors
    /// If the bell cannot be waited for.
    pub fn run(mut self, bell: &Bell) -> std::io::Result<()> {
        let mut due = Instant::now();
        while !self.shared.shell_ends.load(SeqCst) {
            bell.wait(due.saturating_duration_since(Instant::now()))?;
            if Instant::now() >= due {
                due = Instant::now() + TURN;
                self.new_turn();
            }
            self.turn();
        }
        for _ in 0..LAST_TURNS {
            self.new_turn();
            if !self.turn() {
                break;
            }
            std::thread::sleep(TURN);
        }
        Ok(())
    }

    /// New allowances, and the status for those who subscribed to it.
    pub fn new_turn(&mut self) {
        self.turns = self.turns.wrapping_add(1);
        self.listeners.iter_mut().for_each(|listener| listener.allowance = ALLOWANCE_BYTES);
        self.askers.iter_mut().for_each(|asker| asker.allowance = ALLOWANCE_BYTES);
        if self.turns.is_multiple_of(STATUS_TURNS) {
            let status = self.status();
            for listener in self.listeners.iter().filter(|listener| listener.want & WANT_STATUS != 0) {
                self.send(listener.peer, Message::Status(status));
            }
        }
    }

    /// Takes in entries and letters and sends what allowances allow; true if more is to be sent.
    pub fn turn(&mut self) -> bool {
        let outcomes = self.take_entries();
        // Letters after entries: who waits for an outcome was posted before the order came to the loop.
        while let Ok(letter) = self.letters.try_recv() {
            self.take_letter(letter);
        }
        for ack in outcomes {
            if let Some(peer) = self.acks.settle(&ack) {
                self.send(peer, Message::Ack(ack));
            }
        }
        let more_live = self.send_live();
        let more_asked = self.send_asked();
        more_live || more_asked
    }

    /// Takes in what is queued, but not what comes meanwhile without end.
    fn take_entries(&mut self) -> Vec<Ack> {
        let mut outcomes = Vec::new();
        for _ in 0..self.entries.slots() {
            let Ok(entry) = self.entries.pop() else { break };
            match &entry.body {
                Body::Ack(effect) => outcomes.push(answer(effect)),
                Body::ModeChange(change) => {
                    tracing::info!("{} → {}: {}", change.from, change.to, change.cause)
                }
                Body::LawChanged(law) => tracing::info!("law {} {}", law.name.as_str(), law.gains),
                Body::Note(Note::Refused { text }) => tracing::warn!("{}", text.as_str()),
                _ => {}
            }
            if let Some(warning) = self.margins.warning(&entry.body) {
                tracing::warn!("{warning}");
            }
            self.summary.add(&entry);
            self.ring.push(&entry);
        }
        self.shared.pose_source.store(self.summary.pose_source(), SeqCst);
        outcomes
    }

    fn take_letter(&mut self, letter: Letter) {
        match letter {
            Letter::Lease { peer, granted, lease_ms } => self.lease(peer, granted, lease_ms),
            Letter::Ended(address) => self.listeners.retain(|listener| listener.peer.address != address),
            Letter::Journal { address, first, last } => self.ask(address, first, last),
            Letter::Status(peer) => self.send(peer, Message::Status(self.status())),
            Letter::AckTo(order, peer) => self.acks.expect(order, peer),
            Letter::PlanAgain { session, digest, peer } => {
                if let Some(ack) = self.acks.outcome(session, digest) {
                    self.send(peer, Message::Ack(*ack));
                }
            }
            Letter::PlanRefused { order, digest, text } => {
                self.summary.count_broken_plan();
                let ack = Ack {
                    order_session: order.session,
                    order_sequence: order.sequence,
                    order_kind: order.kind,
                    accepted: 0,
                    plan: digest,
                    text: Text::cut(&text),
                };
                if let Some(peer) = self.acks.settle(&ack) {
                    self.send(peer, Message::Ack(ack));
                }
            }
            Letter::Missing(peer, missing) => self.send(peer, Message::PlanMissing(*missing)),
            Letter::Answer(peer, ack) => self.send(peer, Message::Ack(*ack)),
        }
    }

    /// Confirms a lease. Who had the journal before goes on where it was; who is new begins with the next entry.
    fn lease(&mut self, peer: Peer, granted: u32, lease_ms: u32) {
        let listening = granted & (WANT_JOURNAL | WANT_STATUS);
        let before = self.listeners.iter().position(|listener| listener.peer.address == peer.address);
        let before = before.map(|index| self.listeners.swap_remove(index));
        let next_entry = self.ring.next();
        if listening != 0 {
            let next = before.filter(|before| before.want & WANT_JOURNAL != 0).map(|before| before.next);
            let next = next.unwrap_or(Place::entry(next_entry));
            self.listeners.push(Listener { peer, want: listening, next, allowance: ALLOWANCE_BYTES });
        }
        let subscribed = Subscribed {
            boot: self.summary.boot(),
            want: granted,
            lease_ms,
            oldest_entry: self.ring.oldest_unbroken(),
            next_entry,
        };
        self.send(peer, Message::Subscribed(subscribed));
    }

    fn ask(&mut self, address: SocketAddr, first: u64, last: u64) {
        if let Some(asker) = self.askers.iter_mut().find(|asker| asker.address == address) {
            asker.ranges.ask(first, last);
        } else if self.askers.len() < MAX_ASKERS {
            let mut ranges = Ranges::default();
            ranges.ask(first, last);
            self.askers.push(Asker { address, ranges, allowance: ALLOWANCE_BYTES });
        } else {
            count(&self.shared.answers_unsent);
        }
    }

    fn send_live(&mut self) -> bool {
        let mut more = false;
        let Self { listeners, outlet, ring, .. } = self;
        for listener in listeners.iter_mut().filter(|listener| listener.want & WANT_JOURNAL != 0) {
            while let Some((message, next)) = next_message(ring, listener.next, u64::MAX) {
                if !send_paced(outlet, listener.peer.address, message, &mut listener.allowance) {
                    more = true;
                    break;
                }
                listener.next = next;
            }
        }
        more
    }

    fn send_asked(&mut self) -> bool {
        let Self { askers, outlet, ring, .. } = self;
        for asker in askers.iter_mut() {
            while !asker.ranges.is_empty() {
                let Some((message, next)) = asker.ranges.next_message(ring) else {
                    asker.ranges.sent(None);
                    continue;
                };
                if !send_paced(outlet, asker.address, message, &mut asker.allowance) {
                    break;
                }
                asker.ranges.sent(Some(next));
            }
        }
        askers.retain(|asker| !asker.ranges.is_empty());
        !askers.is_empty()
    }

    fn status(&self) -> Status {
        let journal = self.listeners.iter().filter(|listener| listener.want & WANT_JOURNAL != 0).count();
        Status {
            journal_subscribers: journal as u32,
            oldest_entry: self.ring.oldest_unbroken(),
            next_entry: self.ring.next(),
            ..self.summary.status(&self.shared)
        }
    }

    fn send(&self, peer: Peer, message: Message) {
        let envelope = envelope(&self.outlet, message);
        let sent = match peer.form {
            Form::Json => self.outlet.socket.send_to(envelope.to_json().as_bytes(), peer.address),
            Form::Binary => {
                let mut datagram = [0; MAX_DATAGRAM_BYTES];
                let length = envelope.encode(&mut datagram);
                self.outlet.socket.send_to(&datagram[..length], peer.address)
            }
        };
        if sent.is_err() {
            count(&self.shared.answers_unsent);
        }
    }
}

fn envelope(outlet: &Outlet, message: Message) -> Envelope {
    Envelope {
        session: outlet.session,
        sequence: outlet.gate.number(),
        stamp_ns: crate::clock::now().0,
        message,
    }
}

/// Sends if the allowance allows and the system takes it; else the same datagram is tried again in a later turn.
fn send_paced(outlet: &Outlet, to: SocketAddr, message: Message, allowance: &mut usize) -> bool {
    let mut datagram = [0; MAX_DATAGRAM_BYTES];
    let length = envelope(outlet, message).encode(&mut datagram);
    if *allowance < length || outlet.socket.send_to(&datagram[..length], to).is_err() {
        return false;
    }
    *allowance -= length;
    true
}

/// An answer to something that is refused before it becomes an order.
pub fn refusal(session: u64, sequence: u64, kind: u32, text: &str) -> Ack {
    Ack {
        order_session: session,
        order_sequence: sequence,
        order_kind: kind,
        accepted: 0,
        plan: Digest::NONE,
        text: Text::cut(text),
    }
}
