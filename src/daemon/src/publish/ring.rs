//! The journal's last stretch, as frames, bounded in bytes: what recorders that fell behind can still ask for.

use std::collections::VecDeque;
use trackhold_proto::journal::{Entry, write_frame};

/// A longer frame is that of a plan.
const LONG_BYTES: usize = 1 << 16;

/// What a frame costs beside its bytes.
const OVERHEAD_BYTES: usize = 48;

/// Frames of the newest entries, and that of entry 0, which is kept for ever.
#[derive(Debug)]
pub struct Ring {
    frames: VecDeque<Frame>,
    boot: Option<Box<[u8]>>,
    held_bytes: usize,
    /// Those of long frames among them.
    long_bytes: usize,
    max_bytes: usize,
    max_plan_bytes: usize,
    next: u64,
    /// From here to the newest no number is missing.
    unbroken_from: u64,
    scratch: Vec<u8>,
}

#[derive(Debug)]
struct Frame {
    number: u64,
    bytes: Box<[u8]>,
}

impl Frame {
    fn cost(&self) -> usize {
        self.bytes.len() + OVERHEAD_BYTES
    }

    fn long_cost(&self) -> usize {
        if self.bytes.len() > LONG_BYTES { self.cost() } else { 0 }
    }
}

impl Ring {
    /// An empty ring of at most so many bytes, and beside them of long plans as many as the longest one has: else a plan
    /// would push itself out before a recorder has got it. Only the newest entry is kept however long it is.
    pub fn new(max_bytes: usize, max_plan_bytes: usize) -> Self {
        Self {
            frames: VecDeque::new(),
            boot: None,
            held_bytes: 0,
            long_bytes: 0,
            max_bytes,
            max_plan_bytes: max_plan_bytes + LONG_BYTES,
            next: 0,
            unbroken_from: 0,
            scratch: Vec::new(),
        }
    }

    /// Takes in the newest entry. A number that was passed over was lost.
    pub fn push(&mut self, entry: &Entry) {
        self.scratch.clear();
        write_frame(entry, &mut self.scratch);
        let frame = Frame { number: entry.number, bytes: self.scratch.as_slice().into() };
        // A plan can be long, and the next one may be far away.
        self.scratch.shrink_to(1 << 16);
        if entry.number == 0 {
            self.boot = Some(frame.bytes.clone());
        }
        if entry.number != self.next {
            self.unbroken_from = entry.number;
        }
        self.next = entry.number + 1;
        self.held_bytes += frame.cost();
        self.long_bytes += frame.long_cost();
        self.frames.push_back(frame);
        while self.held_bytes - self.long_bytes.min(self.max_plan_bytes) > self.max_bytes
            && self.frames.len() > 1
        {
            self.drop_oldest();
        }
    }

    /// The number after the newest entry's.
    pub fn next(&self) -> u64 {
        self.next
    }

    /// The oldest entry from which on none is missing.
    pub fn oldest_unbroken(&self) -> u64 {
        self.unbroken_from
    }

    /// An entry's frame.
    pub fn get(&self, number: u64) -> Option<&[u8]> {
        let index = self.frames.partition_point(|frame| frame.number < number);
        match self.frames.get(index) {
            Some(frame) if frame.number == number => Some(&frame.bytes),
            _ if number == 0 => self.boot.as_deref(),
            _ => None,
        }
    }

    /// The first entry held from `number` on.
    pub fn held_from(&self, number: u64) -> Option<u64> {
        if number == 0 && self.boot.is_some() {
            return Some(0);
        }
        self.frames.get(self.frames.partition_point(|frame| frame.number < number)).map(|frame| frame.number)
    }

    fn drop_oldest(&mut self) {
        if let Some(frame) = self.frames.pop_front() {
            self.held_bytes -= frame.cost();
            self.long_bytes -= frame.long_cost();
            self.unbroken_from = self.unbroken_from.max(frame.number + 1);
        }
    }
}

#[cfg(test)]
pub(super) mod tests {
    use super::*;
    use trackhold_proto::journal::{Body, Note, read_frame};

    pub(in crate::publish) fn entry(number: u64) -> Entry {
        Entry { number, at_ns: number, body: Body::Note(Note::EventsDropped { count: number }) }
    }

    #[test]
    fn the_oldest_go_first_and_entry_0_stays() {
        let cost = {
            let mut ring = Ring::new(usize::MAX, 0);
            ring.push(&entry(0));
            ring.held_bytes
        };
        let mut ring = Ring::new(10 * cost, 0);
        (0..100).for_each(|number| ring.push(&entry(number)));
        assert!(ring.held_bytes <= 10 * cost);
        assert_eq!((ring.next(), ring.oldest_unbroken()), (100, 90));
        assert_eq!(read_frame(ring.get(95).unwrap()).unwrap().0, entry(95));
        assert_eq!(read_frame(ring.get(0).unwrap()).unwrap().0, entry(0));
        assert!(ring.get(89).is_none() && ring.get(100).is_none());
        assert_eq!((ring.held_from(0), ring.held_from(1), ring.held_from(100)), (Some(0), Some(90), None));
    }

    #[test]
    fn a_lost_number_breaks_the_line() {
        let mut ring = Ring::new(usize::MAX, 0);
        (0..5).chain(8..12).for_each(|number| ring.push(&entry(number)));
        assert_eq!((ring.oldest_unbroken(), ring.held_from(5), ring.get(6)), (8, Some(8), None));
    }

    #[test]
    fn a_long_plan_stays_while_the_room_beside_it_fills_and_the_next_one_takes_its_place() {
        use trackhold_proto::journal::PlanEvent;
        let plan = |number| {
            let event = PlanEvent {
                session: 1,
                sequence: 1,
                digest: trackhold_proto::blob::Hex::NONE,
                raw: vec![b'{'; 200_000],
            };
            Entry { number, at_ns: number, body: Body::Plan(event) }
        };
        let mut ring = Ring::new(10_000, 200_000);
        ring.push(&plan(0));
        (1..50).for_each(|number| ring.push(&entry(number)));
        assert!(ring.get(0).is_some() && ring.oldest_unbroken() == 0);
        ring.push(&plan(50));
        assert!(ring.oldest_unbroken() > 0 && ring.get(50).is_some(), "both together have no room");
        (51..500).for_each(|number| ring.push(&entry(number)));
        assert!(ring.oldest_unbroken() > 50 && ring.held_bytes <= 10_000 && ring.long_bytes == 0);
    }

    #[test]
    fn the_newest_is_kept_however_long() {
        let mut ring = Ring::new(1, 0);
        (0..3).for_each(|number| ring.push(&entry(number)));
        assert!(ring.get(2).is_some() && ring.get(1).is_none() && ring.frames.len() == 1);
    }
}
