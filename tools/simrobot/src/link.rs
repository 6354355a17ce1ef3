//! A faulty link, without I/O: what is sent comes out later, twice, changed, out of order, or not at all.
//!
//! Every datagram draws the same random numbers in the same order, whatever becomes of it. Datagrams that come out at
//! the same moment come in the order in which they were sent, a copy behind its original.

use crate::random::Dice;
use crate::section::section;
use std::collections::BTreeMap;
use trackhold_core::keys::{Bound, Problem};
use trackhold_core::time::{SpanNs, TimeNs};

/// Keeps the link's stream apart from others of the same seed.
const PURPOSE: u64 = 2;

section! {
    /// What is wrong with a link. The default is ideal: all comes out at once.
    pub struct LinkSpec {
        loss: "", 0.0, Bound::within(0.0, 1.0),
            "chance that a datagram is lost";
        delay_s: "s", 0.0, Bound::within(0.0, 10.0),
            "least delay";
        jitter_s: "s", 0.0, Bound::within(0.0, 10.0),
            "what comes on top of the delay at most, evenly distributed; a queue's waiting time, so it never reorders";
        duplicate: "", 0.0, Bound::within(0.0, 1.0),
            "chance that a datagram comes out a second time, after a jitter of its own";
        reorder: "", 0.0, Bound::within(0.0, 1.0),
            "chance that a datagram is held back, so that later ones overtake it";
        reorder_delay_s: "s", 0.02, Bound::within(0.0, 10.0),
            "how long it is held back";
        corrupt: "", 0.0, Bound::within(0.0, 1.0),
            "chance that one bit of a datagram is flipped";
    }
}

/// What became of the datagrams.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct LinkCounts {
    /// Sent into the link.
    pub sent: u64,
    /// Lost.
    pub lost: u64,
    /// Came out a second time.
    pub duplicated: u64,
    /// Held back.
    pub held_back: u64,
    /// With a bit flipped.
    pub corrupted: u64,
    /// Come out so far, copies included.
    pub delivered: u64,
}

/// The link: one direction.
#[derive(Clone, Debug)]
pub struct Link {
    spec: LinkSpec,
    dice: Dice,
    /// Under way, by arrival and then by the order of sending.
    under_way: BTreeMap<(TimeNs, u64), Vec<u8>>,
    number: u64,
    /// Latest arrival of what was not held back: the queue keeps its order.
    queue_end: TimeNs,
    counts: LinkCounts,
}

/// The chances of one datagram.
struct Draws {
    lost: bool,
    jitter: f64,
    held_back: bool,
    duplicated: bool,
    copy_jitter: f64,
    corrupted: bool,
    bit: usize,
}

impl Link {
    /// An empty link.
    ///
    /// # Errors
    /// Every number outside its bound.
    pub fn new(spec: LinkSpec, seed: u64) -> Result<Self, Vec<Problem>> {
        spec.check()?;
        Ok(Self {
            spec,
            dice: Dice::new(seed, PURPOSE),
            under_way: BTreeMap::new(),
            number: 0,
            queue_end: TimeNs(0),
            counts: LinkCounts::default(),
        })
    }

    /// Sends a datagram.
    pub fn send(&mut self, at: TimeNs, bytes: &[u8]) {
        self.counts.sent += 1;
        let draws = self.draw(bytes.len() * 8);
        if draws.lost {
            self.counts.lost += 1;
            return;
        }
        let mut bytes = bytes.to_vec();
        if let Some(byte) = bytes.get_mut(draws.bit / 8).filter(|_| draws.corrupted) {
            *byte ^= 1 << (draws.bit % 8);
            self.counts.corrupted += 1;
        }
        let span = |jitter: f64| SpanNs::from_seconds(self.spec.delay_s + self.spec.jitter_s * jitter);
        let (first, copy) = (at + span(draws.jitter), at + span(draws.copy_jitter));
        let arrival = self.queued(first, draws.held_back);
        if draws.duplicated {
            self.counts.duplicated += 1;
            self.put(arrival, bytes.clone());
            self.put(copy.max(arrival), bytes);
        } else {
            self.put(arrival, bytes);
        }
    }

    /// The next datagram that has come out by `now`, with the moment it did.
    pub fn poll(&mut self, now: TimeNs) -> Option<(TimeNs, Vec<u8>)> {
        let first = self.under_way.first_entry().filter(|entry| entry.key().0 <= now)?;
        let ((arrival, _), bytes) = first.remove_entry();
        self.counts.delivered += 1;
        Some((arrival, bytes))
    }

    /// When the next datagram comes out.
    pub fn next_arrival(&self) -> Option<TimeNs> {
        self.under_way.first_key_value().map(|((arrival, _), _)| *arrival)
    }

    /// What became of the datagrams so far.
    pub fn counts(&self) -> LinkCounts {
        self.counts
    }

    fn draw(&mut self, bits: usize) -> Draws {
        let (spec, dice) = (&self.spec, &mut self.dice);
        Draws {
            lost: dice.happens(spec.loss),
            jitter: dice.uniform(),
            held_back: dice.happens(spec.reorder),
            duplicated: dice.happens(spec.duplicate),
            copy_jitter: dice.uniform(),
            corrupted: dice.happens(spec.corrupt),
            bit: dice.below(bits),
        }
    }

    /// When a datagram comes out: not before what was sent earlier, unless it is held back, outside the queue.
    fn queued(&mut self, arrival: TimeNs, held_back: bool) -> TimeNs {
        if held_back {
            self.counts.held_back += 1;
            return arrival + SpanNs::from_seconds(self.spec.reorder_delay_s);
        }
        self.queue_end = self.queue_end.max(arrival);
        self.queue_end
    }

    fn put(&mut self, arrival: TimeNs, bytes: Vec<u8>) {
        self.under_way.insert((arrival, self.number), bytes);
        self.number += 1;
    }
}

#[cfg(test)]
#[path = "link_tests.rs"]
mod tests;
