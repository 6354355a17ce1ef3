//! What intake and plan worker tell the publisher: who is to be answered, and what was asked for.

use crate::lanes::{Bell, Shared, count};
use std::net::SocketAddr;
use std::sync::Arc;
use std::sync::mpsc::{Receiver, SyncSender, sync_channel};
use trackhold_proto::blob::Digest;
use trackhold_proto::message::{Ack, PlanMissing};

/// So many letters may wait.
const LETTERS: usize = 1024;

/// How a datagram is written; answers are written like the question.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Form {
    /// Header and fixed-width payload.
    Binary,
    /// One JSON object.
    Json,
}

/// Where an answer goes, and how it is written.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Peer {
    /// Address and port.
    pub address: SocketAddr,
    /// The question's form.
    pub form: Form,
}

/// An order on its way to the node, whose outcome somebody waits for.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct OrderKey {
    /// Session of the sender.
    pub session: u64,
    /// The sender's sequence number.
    pub sequence: u64,
    /// Kind of the order.
    pub kind: u32,
}

/// What the publisher is told.
#[derive(Debug)]
pub enum Letter {
    /// A lease was granted, or refused where `granted` is 0.
    Lease {
        /// Who asked.
        peer: Peer,
        /// The streams granted.
        granted: u32,
        /// The lease's length, ms.
        lease_ms: u32,
    },
    /// A lease has ended.
    Ended(SocketAddr),
    /// Somebody asks for journal entries.
    Journal {
        /// Who asks.
        address: SocketAddr,
        /// First entry wanted.
        first: u64,
        /// Last entry wanted.
        last: u64,
    },
    /// Somebody asks for the status.
    Status(Peer),
    /// The outcome of this order goes there.
    AckTo(OrderKey, Peer),
    /// Parts of this plan came again after it was whole: its outcome is to be told again.
    PlanAgain {
        /// Session of the planner.
        session: u64,
        /// The plan.
        digest: Digest,
        /// Who asks.
        peer: Peer,
    },
    /// A plan that goes no farther: too long, or its bytes have not the digest they state.
    PlanRefused {
        /// The part that completed it or showed it.
        order: OrderKey,
        /// The digest stated.
        digest: Digest,
        /// What was found.
        text: String,
    },
    /// A planner may want to know which parts are missing.
    Missing(Peer, Box<PlanMissing>),
    /// An answer that waits for nothing.
    Answer(Peer, Box<Ack>),
}

/// The publisher's letter box.
#[derive(Clone, Debug)]
pub struct Mail {
    letters: SyncSender<Letter>,
    bell: Arc<Bell>,
    shared: Arc<Shared>,
}

impl Mail {
    /// A letter box that rings the publisher's bell.
    pub fn new(bell: Arc<Bell>, shared: Arc<Shared>) -> (Self, Receiver<Letter>) {
        let (letters, receiver) = sync_channel(LETTERS);
        (Self { letters, bell, shared }, receiver)
    }

    /// Posts a letter. A full box is counted: whoever asked asks again.
    pub fn post(&self, letter: Letter) {
        if self.letters.try_send(letter).is_err() {
            count(&self.shared.answers_unsent);
        }
        self.bell.ring();
    }
}
