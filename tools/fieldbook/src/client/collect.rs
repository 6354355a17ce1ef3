//! Puts journal entries in order: keeps those that came too early, knows which are missing, says what to ask for again.
//!
//! No sockets and no clock in here: datagrams and moments come in, frames in order and requests go out. Memory is
//! bounded: what does not fit is dropped from the far end and asked for again when its turn comes.

use assembly::Assemblies;
use std::collections::BTreeMap;
use std::time::{Duration, Instant};
use trackhold_proto::journal::{FrameError, UNNUMBERED, frame_length, read_frame};
use trackhold_proto::message::{JournalGone, JournalPart, JournalRequest};

mod assembly;

/// Frames that came too early take no more than this, bytes.
const ROOM_BYTES: usize = 80 << 20;
/// So far ahead of the next entry missing numbers are looked for.
const WINDOW: u64 = 4096;
/// No more numbers than this are asked for at a time: what the answers bring has to fit a default receive buffer.
const OUTSTANDING: usize = 192;
/// One request asks for no more entries than this, so that a lost request costs little.
const REQUEST_ENTRIES: u64 = 64;
/// No more requests than this go out at a time: the daemon keeps only so many separate ranges waiting.
const REQUESTS: usize = 12;
/// A gap this young may be no more than two datagrams in the wrong order.
const GRACE: Duration = Duration::from_millis(15);
/// After this long without an answer a number is asked for again (`PROTOCOL.md`, section 6).
const ASK_AGAIN: Duration = Duration::from_millis(100);
/// A jump of more numbers than this in one datagram is nonsense, not a gap.
const FARTHEST: u64 = 1 << 40;

/// What comes out, in order.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Item {
    /// The next entry's frame: CRC checked, number as expected.
    Frame(Vec<u8>),
    /// These numbers, both ends included, cannot be had.
    Gap(u64, u64),
}

/// What was seen on the way.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Tally {
    /// Numbers asked for again because they did not come by themselves.
    pub asked_again: u64,
    /// Entries that came more than once.
    pub duplicates: u64,
    /// Parts whose frames were damaged or not what they said.
    pub damaged: u64,
    /// Entries that came too early to be kept.
    pub no_room: u64,
}

/// A number that was asked for.
#[derive(Clone, Copy, Debug)]
struct Asked {
    at: Instant,
    tries: u32,
}

/// The entries between what was handed out and what is known to exist.
#[derive(Debug)]
pub struct Collector {
    expected: u64,
    end: u64,
    /// Numbers below this existed before the subscription: they do not come by themselves.
    backlog_end: u64,
    held: BTreeMap<u64, Vec<u8>>,
    held_bytes: usize,
    gone: BTreeMap<u64, u64>,
    asked: BTreeMap<u64, Asked>,
    assemblies: Assemblies,
    noticed: Option<(u64, Instant)>,
    give_up: u32,
    tally: Tally,
}

impl Collector {
    /// Begins at entry `first`, while the journal stands at `next`. A number asked for `give_up` times in vain is given
    /// up.
    pub fn new(first: u64, next: u64, give_up: u32) -> Self {
        Self {
            expected: first,
            end: next.max(first),
            backlog_end: next,
            held: BTreeMap::new(),
            held_bytes: 0,
            gone: BTreeMap::new(),
            asked: BTreeMap::new(),
            assemblies: Assemblies::default(),
            noticed: None,
            give_up,
            tally: Tally::default(),
        }
    }

    /// The number that comes out next.
    pub fn expected(&self) -> u64 {
        self.expected
    }

    /// One more than the greatest number known to exist.
    pub fn end(&self) -> u64 {
        self.end
    }

    /// What was seen on the way.
    pub fn tally(&self) -> Tally {
        self.tally
    }

    /// Learns that the journal has come as far as `next`.
    pub fn reach(&mut self, next: u64) {
        if next.saturating_sub(self.end) < FARTHEST {
            self.end = self.end.max(next);
        }
    }

    /// Does without these numbers, both ends included, unless they are here already.
    pub fn skip(&mut self, first: u64, last: u64) {
        if first > last || last >= self.end.saturating_add(FARTHEST) {
            return;
        }
        self.reach(last + 1);
        let known = self.gone.entry(first).or_insert(last);
        *known = last.max(*known);
        for number in self.asked.range(first..=last).map(|(number, _)| *number).collect::<Vec<_>>() {
            self.asked.remove(&number);
        }
    }

    /// Takes in what the daemon says cannot be had.
    pub fn take_gone(&mut self, gone: &JournalGone) {
        self.skip(gone.first.max(self.expected), gone.last);
    }

    /// Takes in a part; what is damaged in it is counted and will be asked for again.
    pub fn take_part(&mut self, part: &JournalPart, now: Instant) {
        if part.first >= self.end.saturating_add(FARTHEST) {
            self.tally.damaged += 1;
            return;
        }
        if part.parts > 1 {
            self.take_piece(part, now);
            return;
        }
        let mut rest = part.bytes.as_slice();
        for count in 0..part.entries {
            let number = part.first + u64::from(count);
            let Some(length) = intact_frame(rest, number) else {
                self.tally.damaged += 1;
                return;
            };
            let (frame, after) = rest.split_at(length);
            self.insert(number, frame.to_vec());
            rest = after;
        }
    }

    fn take_piece(&mut self, part: &JournalPart, now: Instant) {
        let number = part.first;
        // It is on its way; asking again now would send all of it twice. What was asked for with it comes behind it, which
        // after a long plan takes seconds: that is no reason to give anything up.
        self.asked.values_mut().for_each(|asked| asked.at = now);
        if number < self.expected || self.held.contains_key(&number) {
            self.tally.duplicates += 1;
            return;
        }
        self.reach(number + 1);
        let Some(frame) = self.assemblies.take(part) else { return };
        match intact_frame(&frame, number) {
            Some(length) if length == frame.len() => self.insert(number, frame),
            _ => self.tally.damaged += 1,
        }
    }

    fn insert(&mut self, number: u64, frame: Vec<u8>) {
        self.reach(number + 1);
        if number < self.expected || self.held.contains_key(&number) {
            self.tally.duplicates += 1;
            return;
        }
        while number != self.expected && self.held_bytes + frame.len() > ROOM_BYTES {
            self.tally.no_room += 1;
            match self.held.last_entry() {
                Some(farthest) if *farthest.key() > number => self.held_bytes -= farthest.remove().len(),
                _ => {
                    // It did come: the tries so far were not in vain.
                    self.asked.remove(&number);
                    return;
                }
            }
        }
        self.asked.remove(&number);
        self.held_bytes += frame.len();
        self.held.insert(number, frame);
    }

    /// The next entry or gap, if it is known.
    pub fn next_item(&mut self) -> Option<Item> {
        if let Some(frame) = self.held.remove(&self.expected) {
            self.held_bytes -= frame.len();
            self.advance(self.expected + 1);
            return Some(Item::Frame(frame));
        }
        let last = self.gone_until(self.expected)?;
        let last = self.held.first_key_value().map_or(last, |(held, _)| last.min(held - 1));
        let first = self.expected;
        self.advance(last + 1);
        Some(Item::Gap(first, last))
    }

    fn advance(&mut self, to: u64) {
        self.expected = to;
        self.end = self.end.max(to);
        self.gone.retain(|_, last| *last >= to);
        self.assemblies.forget_below(to);
    }

    /// The last number of the gap known at `number`.
    fn gone_until(&self, number: u64) -> Option<u64> {
        let last = self.gone.range(..=number).map(|(_, last)| *last).max()?;
        (last >= number).then_some(last)
    }

    /// What to ask for now. Numbers asked for too often are given up here.
    pub fn requests(&mut self, now: Instant) -> Vec<JournalRequest> {
        let mut ranges: Vec<JournalRequest> = Vec::new();
        let mut room = OUTSTANDING.saturating_sub(self.outstanding(now));
        let mut given_up = Vec::new();
        let mut number = self.expected;
        let stop = self.end.min(self.expected.saturating_add(WINDOW));
        while number < stop && room > 0 {
            if let Some(last) = self.gone_until(number) {
                number = last + 1;
                continue;
            }
            if !self.held.contains_key(&number) && self.is_due(number, now) {
                if ranges.len() == REQUESTS && !continues(&ranges, number) {
                    break;
                }
                if self.ask(number, now) {
                    extend(&mut ranges, number);
                    room -= 1;
                } else {
                    given_up.push(number);
                }
            }
            number += 1;
        }
        for number in given_up {
            self.skip(number, number);
        }
        ranges
    }

    fn outstanding(&self, now: Instant) -> usize {
        self.asked.values().filter(|asked| now.saturating_duration_since(asked.at) < ASK_AGAIN).count()
    }

    fn is_due(&mut self, number: u64, now: Instant) -> bool {
        if let Some(asked) = self.asked.get(&number) {
            return now.saturating_duration_since(asked.at) >= ASK_AGAIN;
        }
        if number < self.backlog_end {
            return true;
        }
        match self.noticed {
            Some((end, at)) if number < end => now.saturating_duration_since(at) >= GRACE,
            // The gaps noticed before have their time first; else steady losses would put them off again and again.
            Some((_, at)) if now.saturating_duration_since(at) < GRACE => false,
            _ => {
                self.noticed = Some((self.end, now));
                false
            }
        }
    }

    /// Notes that `number` is asked for; false if that was in vain too often.
    fn ask(&mut self, number: u64, now: Instant) -> bool {
        let asked = self.asked.entry(number).or_insert(Asked { at: now, tries: 0 });
        asked.at = now;
        asked.tries += 1;
        if asked.tries > self.give_up {
            return false;
        }
        if number >= self.backlog_end || asked.tries > 1 {
            self.tally.asked_again += 1;
        }
        true
    }

    /// Gives up everything missing below `until`.
    pub fn give_up_below(&mut self, until: u64) {
        let mut number = self.expected;
        while number < until {
            match self.held.range(number..).next() {
                Some((&held, _)) if held == number => number += 1,
                Some((&held, _)) => {
                    self.skip(number, held.min(until) - 1);
                    number = held;
                }
                None => {
                    self.skip(number, until - 1);
                    number = until;
                }
            }
        }
    }
}

/// Length of the frame at the start of `bytes`, if it is intact and has the number stated. An entry of a kind this
/// program does not know is intact all the same.
fn intact_frame(bytes: &[u8], number: u64) -> Option<usize> {
    let found = match read_frame(bytes) {
        Ok((entry, _)) => entry.number,
        Err(FrameError::Unknown { number, .. }) => number,
        Err(_) => return None,
    };
    if found != number || number == UNNUMBERED {
        return None;
    }
    frame_length(bytes).ok()
}

/// Whether a number goes into the last of the requests.
fn continues(ranges: &[JournalRequest], number: u64) -> bool {
    ranges.last().is_some_and(|last| last.last + 1 == number && number - last.first < REQUEST_ENTRIES)
}

fn extend(ranges: &mut Vec<JournalRequest>, number: u64) {
    let continues = continues(ranges, number);
    match ranges.last_mut() {
        Some(last) if continues => last.last = number,
        _ => ranges.push(JournalRequest { first: number, last: number }),
    }
}

#[cfg(test)]
mod tests;
