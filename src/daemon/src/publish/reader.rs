//! Reading the ring: which datagram comes next, for whoever listens or asks for what was before.

use super::ring::Ring;
use trackhold_proto::Message;
use trackhold_proto::blob::Blob;
use trackhold_proto::message::{JOURNAL_BYTES, JournalGone, JournalPart};

/// So many separate ranges of one asker wait; more of them are not taken, and asked for again.
const MAX_RANGES: usize = 32;

/// A place in the journal: an entry, and the part of it where it is a long one.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Place {
    /// The entry.
    pub number: u64,
    /// The part.
    pub part: u32,
}

impl Place {
    /// At an entry's beginning.
    pub const fn entry(number: u64) -> Self {
        Self { number, part: 0 }
    }
}

/// The next datagram from `place` on, up to `last`, and the place after it; `None` if there is nothing (yet).
pub fn next_message(ring: &Ring, place: Place, last: u64) -> Option<(Message, Place)> {
    let last = last.min(ring.next().checked_sub(1)?);
    if place.number > last {
        return None;
    }
    match ring.get(place.number) {
        Some(frame) if frame.len() > JOURNAL_BYTES => Some(part_of(frame, place)),
        Some(_) => Some(whole_frames(ring, place.number, last)),
        None => {
            let end = ring.held_from(place.number).map_or(last, |held| last.min(held - 1));
            let gone = JournalGone { first: place.number, last: end };
            Some((Message::JournalGone(gone), Place::entry(end + 1)))
        }
    }
}

/// As many whole frames as fit.
fn whole_frames(ring: &Ring, first: u64, last: u64) -> (Message, Place) {
    let (mut bytes, mut used, mut next) = ([0; JOURNAL_BYTES], 0, first);
    while next <= last {
        let Some(frame) = ring.get(next).filter(|frame| used + frame.len() <= JOURNAL_BYTES) else { break };
        bytes[used..used + frame.len()].copy_from_slice(frame);
        used += frame.len();
        next += 1;
    }
    let entries = (next - first) as u32;
    (journal_part(first, entries, 0, 1, &bytes[..used]), Place::entry(next))
}

/// One part of a long frame.
fn part_of(frame: &[u8], place: Place) -> (Message, Place) {
    let parts = frame.len().div_ceil(JOURNAL_BYTES) as u32;
    let part = place.part.min(parts - 1);
    let begin = part as usize * JOURNAL_BYTES;
    let bytes = &frame[begin..frame.len().min(begin + JOURNAL_BYTES)];
    let next =
        if part + 1 < parts { Place { part: part + 1, ..place } } else { Place::entry(place.number + 1) };
    (journal_part(place.number, 1, part, parts, bytes), next)
}

fn journal_part(first: u64, entries: u32, part: u32, parts: u32, bytes: &[u8]) -> Message {
    let Some(bytes) = Blob::new(bytes) else { unreachable!("cut to fit just before") };
    Message::JournalPart(JournalPart { first, entries, part, parts, bytes })
}

/// Ranges of entries somebody asked for; overlapping ones become one.
#[derive(Debug, Default)]
pub struct Ranges {
    /// Place to go on from and last entry, in order, apart from one another.
    waiting: Vec<(Place, u64)>,
}

impl Ranges {
    /// Takes a range in.
    pub fn ask(&mut self, first: u64, last: u64) {
        let (mut place, mut end) = (Place::entry(first), last);
        self.waiting.retain(|&(other, other_end)| {
            let apart = other_end < place.number || end < other.number;
            if !apart {
                // A long entry that is under way goes on: who asks again too soon would otherwise never see its end.
                place = if other.number <= place.number { other } else { place };
                end = end.max(other_end);
            }
            apart
        });
        if self.waiting.len() < MAX_RANGES {
            self.waiting.push((place, end));
            self.waiting.sort_by_key(|(place, _)| place.number);
        }
    }

    /// True if nothing waits.
    pub fn is_empty(&self) -> bool {
        self.waiting.is_empty()
    }

    /// The next datagram, and the mark to hand to [`Ranges::sent`] once it is sent.
    pub fn next_message(&self, ring: &Ring) -> Option<(Message, Place)> {
        let &(place, last) = self.waiting.first()?;
        next_message(ring, place, last)
    }

    /// Goes on after a datagram; with `None` gives up what cannot be had yet, for it will come by itself.
    pub fn sent(&mut self, next: Option<Place>) {
        match (self.waiting.first_mut(), next) {
            (Some((place, last)), Some(next)) if next.number <= *last => *place = next,
            (Some(_), _) => drop(self.waiting.remove(0)),
            (None, _) => {}
        }
    }
}

#[cfg(test)]
mod tests {
    use super::super::ring::tests::entry;
    use super::*;
    use trackhold_proto::blob::Digest;
    use trackhold_proto::journal::{Body, Entry, PlanEvent, read_frame};

    fn plan(number: u64, bytes: usize) -> Entry {
        let raw = vec![7; bytes];
        let event = PlanEvent { session: 1, sequence: 2, digest: Digest::NONE, raw };
        Entry { number, at_ns: 0, body: Body::Plan(event) }
    }

    /// Everything from `first` to `last` as a recorder would put it together: entries and gaps.
    fn collect(ring: &Ring, first: u64, last: u64) -> (Vec<Entry>, Vec<(u64, u64)>) {
        let (mut entries, mut gone, mut long) = (Vec::new(), Vec::new(), Vec::new());
        let mut place = Place::entry(first);
        while let Some((message, next)) = next_message(ring, place, last) {
            match message {
                Message::JournalGone(range) => gone.push((range.first, range.last)),
                Message::JournalPart(part) => {
                    long.extend_from_slice(part.bytes.as_slice());
                    if part.part + 1 == part.parts {
                        let mut rest = long.as_slice();
                        for _ in 0..part.entries {
                            let (entry, length) = read_frame(rest).unwrap();
                            entries.push(entry);
                            rest = &rest[length..];
                        }
                        assert!(rest.is_empty());
                        long.clear();
                    }
                }
                other => panic!("{other:?}"),
            }
            assert!(next != place, "no progress");
            place = next;
        }
        (entries, gone)
    }

    #[test]
    fn whole_frames_long_frames_and_gaps_come_in_order() {
        let mut ring = Ring::new(usize::MAX, 0);
        let mut all: Vec<Entry> = (0..50).map(entry).collect();
        all.push(plan(50, 5000));
        all.extend((53..60).map(entry));
        all.iter().for_each(|entry| ring.push(entry));
        assert_eq!(collect(&ring, 0, u64::MAX), (all.clone(), vec![(51, 52)]));
        assert_eq!(collect(&ring, 10, 12), (all[10..13].to_vec(), vec![]));
        assert_eq!(collect(&ring, 51, 51), (vec![], vec![(51, 51)]));
        assert_eq!(collect(&ring, 60, 99), (vec![], vec![]));
    }

    #[test]
    fn what_has_left_the_ring_is_gone_but_for_entry_0() {
        let mut ring = Ring::new(2000, 0);
        (0..100).for_each(|number| ring.push(&entry(number)));
        let oldest = ring.oldest_unbroken();
        let (entries, gone) = collect(&ring, 0, 99);
        assert_eq!(gone, [(1, oldest - 1)]);
        assert_eq!((entries[0].number, entries[1].number, entries.len() as u64), (0, oldest, 101 - oldest));
    }

    #[test]
    fn datagrams_are_filled() {
        let mut ring = Ring::new(usize::MAX, 0);
        (0..100).for_each(|number| ring.push(&entry(number)));
        let Some((Message::JournalPart(part), _)) = next_message(&ring, Place::entry(0), 99) else {
            panic!()
        };
        let frame = ring.get(0).unwrap().len();
        assert_eq!(part.entries as usize, JOURNAL_BYTES / frame);
    }

    #[test]
    fn overlapping_ranges_become_one_and_their_number_is_bounded() {
        let mut ring = Ring::new(usize::MAX, 0);
        (0..100).for_each(|number| ring.push(&entry(number)));
        let mut ranges = Ranges::default();
        ranges.ask(10, 20);
        ranges.ask(40, 50);
        ranges.ask(15, 42);
        assert_eq!(ranges.waiting, [(Place::entry(10), 50)]);
        let (_, next) = ranges.next_message(&ring).unwrap();
        ranges.sent(Some(next));
        assert_eq!(ranges.waiting, [(next, 50)]);
        ranges.sent(Some(Place::entry(51)));
        assert!(ranges.is_empty());
        (0..1000).for_each(|number| ranges.ask(2 * number, 2 * number));
        assert_eq!(ranges.waiting.len(), MAX_RANGES);
    }
}
