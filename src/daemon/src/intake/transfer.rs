//! Plans from numbered parts: one transfer a session, in any order, with duplicates, restartable, in bounded memory.
//!
//! Parts are kept in chunks that are made as they arrive, so that a part that states a huge plan costs nothing. Neither
//! is the digest checked nor the plan looked at here: that takes its time and is the plan worker's business.

use std::collections::{BTreeMap, VecDeque};
use trackhold_core::time::TimeNs;
use trackhold_proto::blob::{Blob, Digest};
use trackhold_proto::journal::MAX_PLAN_BYTES;
use trackhold_proto::message::{MARK_BYTES, PlanMissing, PlanPart};

/// So many sessions can be sending a plan.
const MAX_TRANSFERS: usize = 4;
/// Room for the parts of all transfers together, bytes: that of two of the longest plans.
const MAX_HELD_BYTES: usize = 2 * MAX_PLAN_BYTES;
/// So many finished transfers are remembered, to know their parts when they are repeated.
const MAX_FINISHED: usize = 16;
/// So many plans that were too long are remembered, to tell each of them now and then only.
const MAX_REFUSED: usize = 8;
/// A repetition is passed on only once in this time: a planner that sends all parts again wants one answer.
const REPETITION_NS: u64 = 50_000_000;
/// What is missing is told only once in this time.
const MISSING_NS: u64 = 10_000_000;
/// Parts in a chunk: one bit each in a word.
const CHUNK_PARTS: u32 = 64;

/// What became of a part.
#[derive(Debug, PartialEq)]
pub enum Outcome {
    /// It was kept, or known already; the plan is not whole yet.
    Waits,
    /// The last part or a repetition came, and others are missing: the planner can be told which.
    Missing(Box<PlanMissing>),
    /// The plan is whole.
    Whole(Whole),
    /// It repeats a part of a transfer that was finished before, whose outcome is to be told again.
    Again,
    /// It belongs to a plan that is longer than allowed. Nothing of it is kept.
    TooLong,
}

/// A plan's bytes, whole.
#[derive(Debug, PartialEq)]
pub struct Whole {
    /// Session of the sender.
    pub session: u64,
    /// Sequence number of the part that completed it.
    pub sequence: u64,
    /// The digest its parts state; not checked.
    pub digest: Digest,
    /// Its bytes.
    pub raw: Vec<u8>,
}

/// Puts parts together.
#[derive(Debug)]
pub struct Assembler {
    max_plan_bytes: usize,
    transfers: Vec<Transfer>,
    finished: VecDeque<Finished>,
    refused: VecDeque<Finished>,
}

#[derive(Debug)]
struct Transfer {
    session: u64,
    digest: Digest,
    total_bytes: u32,
    part_bytes: u32,
    last_sequence: u64,
    last_at: TimeNs,
    missing: u32,
    told_missing: Option<TimeNs>,
    held_bytes: usize,
    chunks: BTreeMap<u32, Chunk>,
}

#[derive(Debug)]
struct Chunk {
    have: u64,
    bytes: Box<[u8]>,
}

#[derive(Debug)]
struct Finished {
    session: u64,
    digest: Digest,
    /// Greatest sequence of its parts: a greater one begins another transfer of the same plan.
    last_sequence: u64,
    told_at: TimeNs,
}

impl Default for Assembler {
    fn default() -> Self {
        Self::new(MAX_PLAN_BYTES)
    }
}

impl Assembler {
    /// One that takes plans up to a length.
    pub fn new(max_plan_bytes: usize) -> Self {
        let (transfers, finished, refused) = Default::default();
        Self { max_plan_bytes, transfers, finished, refused }
    }

    /// The longest plan it takes, bytes.
    pub fn max_plan_bytes(&self) -> usize {
        self.max_plan_bytes
    }

    /// Takes a part in.
    pub fn part(&mut self, session: u64, sequence: u64, part: &PlanPart, at: TimeNs) -> Outcome {
        if part.total_bytes as usize > self.max_plan_bytes {
            return self.refuse(session, sequence, part.digest, at);
        }
        if let Some(finished) = self.finished_before(session, sequence, part.digest) {
            if at.since(finished.told_at).0 < REPETITION_NS {
                return Outcome::Waits;
            }
            finished.told_at = at;
            return Outcome::Again;
        }
        let index = self.transfer_for(session, part, at);
        let transfer = &mut self.transfers[index];
        transfer.last_sequence = transfer.last_sequence.max(sequence);
        transfer.last_at = at;
        let is_new = transfer.keep(part);
        if transfer.missing > 0 {
            let missing = transfer.tell_missing(part, is_new, at);
            self.make_room(session);
            return missing.map_or(Outcome::Waits, |missing| Outcome::Missing(Box::new(missing)));
        }
        let transfer = self.transfers.swap_remove(index);
        self.remember(Finished {
            session,
            digest: transfer.digest,
            last_sequence: transfer.last_sequence,
            told_at: at,
        });
        Outcome::Whole(Whole { session, sequence, digest: transfer.digest, raw: transfer.into_bytes() })
    }

    /// Forgets that a transfer was finished, so that its parts, repeated, begin it anew.
    pub fn forget(&mut self, session: u64, digest: Digest) {
        self.finished.retain(|finished| finished.session != session || finished.digest != digest);
    }

    /// A plan that is too long: its first part is answered, and those that follow now and then.
    fn refuse(&mut self, session: u64, sequence: u64, digest: Digest, at: TimeNs) -> Outcome {
        let known =
            self.refused.iter_mut().find(|refused| refused.session == session && refused.digest == digest);
        if let Some(refused) = known {
            if at.since(refused.told_at).0 < REPETITION_NS {
                return Outcome::Waits;
            }
            refused.told_at = at;
            return Outcome::Again;
        }
        if self.refused.len() >= MAX_REFUSED {
            self.refused.pop_front();
        }
        self.refused.push_back(Finished { session, digest, last_sequence: sequence, told_at: at });
        Outcome::TooLong
    }

    fn finished_before(&mut self, session: u64, sequence: u64, digest: Digest) -> Option<&mut Finished> {
        self.finished.iter_mut().find(|finished| {
            finished.session == session && finished.digest == digest && sequence <= finished.last_sequence
        })
    }

    /// The session's transfer; a part of another plan begins another one.
    fn transfer_for(&mut self, session: u64, part: &PlanPart, at: TimeNs) -> usize {
        if let Some(index) = self.transfers.iter().position(|transfer| transfer.session == session) {
            if !self.transfers[index].is_of(part) {
                self.transfers[index] = Transfer::new(session, part, at);
            }
            return index;
        }
        if self.transfers.len() >= MAX_TRANSFERS {
            self.drop_longest_idle(session);
        }
        self.transfers.push(Transfer::new(session, part, at));
        self.transfers.len() - 1
    }

    fn make_room(&mut self, session: u64) {
        while self.transfers.len() > 1
            && self.transfers.iter().map(|transfer| transfer.held_bytes).sum::<usize>() > MAX_HELD_BYTES
        {
            self.drop_longest_idle(session);
        }
    }

    /// Drops the transfer, other than the session's, that waits longest for its next part; its planner begins anew.
    fn drop_longest_idle(&mut self, session: u64) {
        let others = self.transfers.iter().enumerate().filter(|(_, transfer)| transfer.session != session);
        if let Some((index, _)) = others.min_by_key(|(_, transfer)| transfer.last_at) {
            self.transfers.swap_remove(index);
        }
    }

    fn remember(&mut self, finished: Finished) {
        self.forget(finished.session, finished.digest);
        if self.finished.len() >= MAX_FINISHED {
            self.finished.pop_front();
        }
        self.finished.push_back(finished);
    }
}

impl Transfer {
    fn new(session: u64, part: &PlanPart, at: TimeNs) -> Self {
        Self {
            session,
            digest: part.digest,
            total_bytes: part.total_bytes,
            part_bytes: part.part_bytes,
            last_sequence: 0,
            last_at: at,
            missing: part.total_bytes.div_ceil(part.part_bytes),
            told_missing: None,
            held_bytes: 0,
            chunks: BTreeMap::new(),
        }
    }

    fn is_of(&self, part: &PlanPart) -> bool {
        (self.digest, self.total_bytes, self.part_bytes) == (part.digest, part.total_bytes, part.part_bytes)
    }

    fn parts(&self) -> u32 {
        self.total_bytes.div_ceil(self.part_bytes)
    }

    /// Keeps a part; the decoder has checked that it lies within the plan and has its length. The first of two counts;
    /// true if it was not there yet.
    fn keep(&mut self, part: &PlanPart) -> bool {
        let (number, within) = (part.part / CHUNK_PARTS, part.part % CHUNK_PARTS);
        let chunk_bytes = u64::from(CHUNK_PARTS) * u64::from(self.part_bytes);
        let length = (u64::from(self.total_bytes) - u64::from(number) * chunk_bytes).min(chunk_bytes);
        let chunk = self.chunks.entry(number).or_insert_with(|| {
            self.held_bytes += length as usize + size_of::<Chunk>();
            Chunk { have: 0, bytes: vec![0; length as usize].into_boxed_slice() }
        });
        let bit = 1 << within;
        if chunk.have & bit == 0 {
            chunk.have |= bit;
            let (begin, bytes) = ((within * self.part_bytes) as usize, part.bytes.as_slice());
            chunk.bytes[begin..begin + bytes.len()].copy_from_slice(bytes);
            self.missing -= 1;
            return true;
        }
        false
    }

    /// What is missing, where a planner seems to ask for that: with the last part, or with one that is there already.
    fn tell_missing(&mut self, part: &PlanPart, is_new: bool, at: TimeNs) -> Option<PlanMissing> {
        let asks = !is_new || part.part + 1 == self.parts();
        if !asks || self.told_missing.is_some_and(|told| at.since(told).0 < MISSING_NS) {
            return None;
        }
        self.told_missing = Some(at);
        let first = (0..self.parts()).find(|part| self.is_missing(*part))?;
        let mut marks = [0; MARK_BYTES];
        for mark in 0..(self.parts() - first).min(8 * MARK_BYTES as u32) {
            marks[(mark / 8) as usize] |= u8::from(self.is_missing(first + mark)) << (mark % 8);
        }
        let used = marks.iter().rposition(|byte| *byte != 0).map_or(0, |last| last + 1);
        let marks = Blob::new(&marks[..used])?;
        Some(PlanMissing { digest: self.digest, missing: self.missing, first, marks })
    }

    fn is_missing(&self, part: u32) -> bool {
        let chunk = self.chunks.get(&(part / CHUNK_PARTS));
        chunk.is_none_or(|chunk| chunk.have & (1 << (part % CHUNK_PARTS)) == 0)
    }

    fn into_bytes(self) -> Vec<u8> {
        let mut raw = Vec::with_capacity(self.total_bytes as usize);
        for chunk in self.chunks.into_values() {
            raw.extend_from_slice(&chunk.bytes);
        }
        raw
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use trackhold_core::digest;
    use trackhold_proto::blob::Blob;

    fn parts(raw: &[u8], part_bytes: usize) -> Vec<PlanPart> {
        let digest = digest::of_bytes(raw);
        raw.chunks(part_bytes)
            .enumerate()
            .map(|(number, bytes)| PlanPart {
                digest,
                total_bytes: raw.len() as u32,
                part_bytes: part_bytes as u32,
                part: number as u32,
                bytes: Blob::new(bytes).unwrap(),
            })
            .collect()
    }

    fn bytes(length: usize, seed: usize) -> Vec<u8> {
        (0..length).map(|index| (index * 7 + seed) as u8).collect()
    }

    #[test]
    fn any_order_and_duplicates_give_the_same_bytes() {
        for (length, part_bytes) in
            [(1, 1), (1024, 1024), (1025, 1024), (200_000, 1000), (130, 1), (99_999, 7)]
        {
            let raw = bytes(length, 3);
            let all = parts(&raw, part_bytes);
            let mut assembler = Assembler::default();
            let mut whole = None;
            // A stride prime to every count here visits each part once; each is sent twice.
            for index in 0..all.len() {
                let part = &all[(index * 100_003) % all.len()];
                for _ in 0..2 {
                    if let Outcome::Whole(found) = assembler.part(5, index as u64, part, TimeNs(0)) {
                        assert!(whole.replace(found).is_none(), "twice whole");
                    }
                }
            }
            let whole = whole.expect("whole");
            assert!(whole.raw == raw && whole.digest == digest::of_bytes(&raw) && whole.session == 5);
        }
    }

    #[test]
    fn a_part_of_another_plan_begins_anew_and_sessions_do_not_mix() {
        let (first, second) = (parts(&bytes(300, 1), 100), parts(&bytes(300, 2), 100));
        let mut assembler = Assembler::default();
        assembler.part(1, 1, &first[0], TimeNs(0));
        assembler.part(1, 2, &second[0], TimeNs(0));
        assembler.part(2, 1, &second[1], TimeNs(0));
        assembler.part(1, 3, &second[1], TimeNs(0));
        assert!(matches!(assembler.part(1, 4, &second[2], TimeNs(0)), Outcome::Whole(_)));
        assembler.part(1, 5, &first[1], TimeNs(0));
        let Outcome::Missing(missing) = assembler.part(1, 6, &first[2], TimeNs(0)) else {
            panic!("not whole")
        };
        assert_eq!(missing.parts().collect::<Vec<_>>(), [0], "the first begin was given up");
    }

    #[test]
    fn a_repetition_is_answered_now_and_then_and_a_new_sending_begins_anew() {
        let all = parts(&bytes(200, 1), 100);
        let mut assembler = Assembler::default();
        assembler.part(1, 10, &all[0], TimeNs(0));
        assert!(matches!(assembler.part(1, 11, &all[1], TimeNs(0)), Outcome::Whole(_)));
        assert_eq!(assembler.part(1, 10, &all[0], TimeNs(1)), Outcome::Waits, "its outcome is on its way");
        assert_eq!(assembler.part(1, 10, &all[0], TimeNs(REPETITION_NS)), Outcome::Again);
        assert_eq!(assembler.part(1, 11, &all[1], TimeNs(REPETITION_NS + 1)), Outcome::Waits);
        assert_eq!(assembler.part(1, 12, &all[0], TimeNs(REPETITION_NS + 2)), Outcome::Waits);
        assert!(matches!(assembler.part(1, 13, &all[1], TimeNs(REPETITION_NS + 3)), Outcome::Whole(_)));
        assembler.forget(1, all[0].digest);
        assembler.part(1, 12, &all[0], TimeNs(REPETITION_NS + 4));
        assert!(matches!(assembler.part(1, 13, &all[1], TimeNs(REPETITION_NS + 5)), Outcome::Whole(_)));
    }

    #[test]
    fn a_huge_claim_costs_nothing_and_the_longest_idle_of_too_many_gives_way() {
        let mut assembler = Assembler::default();
        let mut huge = parts(&[9], 1).remove(0);
        huge.total_bytes = MAX_PLAN_BYTES as u32;
        assembler.part(100, 1, &huge, TimeNs(0));
        assert!(assembler.transfers[0].held_bytes < 4096);
        for session in 1..=20 {
            assembler.part(session, 1, &parts(&bytes(300, session as usize), 100)[0], TimeNs(session));
        }
        let mut left: Vec<u64> = assembler.transfers.iter().map(|transfer| transfer.session).collect();
        left.sort_unstable();
        assert_eq!(left, [17, 18, 19, 20]);
    }

    #[test]
    fn the_planner_hears_what_is_missing_when_it_asks() {
        let all = parts(&bytes(20_000, 1), 1);
        let mut assembler = Assembler::default();
        let lost = |part: u32| matches!(part, 3 | 70..=140 | 9_000);
        let mut outcome = Outcome::Waits;
        for part in all.iter().filter(|part| !lost(part.part)) {
            outcome = assembler.part(1, u64::from(part.part), part, TimeNs(5));
            assert!(outcome == Outcome::Waits || part.part == 19_999);
        }
        let Outcome::Missing(missing) = outcome else { panic!("{outcome:?}") };
        assert_eq!((missing.missing, missing.first, missing.digest), (73, 3, all[0].digest));
        let marked: Vec<u32> = missing.parts().collect();
        assert_eq!(
            marked,
            (0..8_195).filter(|part| lost(*part)).collect::<Vec<_>>(),
            "as far as the marks go"
        );
        for (sequence, part) in marked.iter().enumerate() {
            let sent = assembler.part(1, sequence as u64, &all[*part as usize], TimeNs(6));
            assert_eq!(sent, Outcome::Waits);
        }
        let again = assembler.part(1, 19_999, &all[19_999], TimeNs(7));
        assert_eq!(again, Outcome::Waits, "told just now");
        let Outcome::Missing(missing) = assembler.part(1, 19_999, &all[19_999], TimeNs(6 + MISSING_NS))
        else {
            panic!("asked once more")
        };
        assert_eq!((missing.missing, missing.parts().collect::<Vec<_>>()), (1, vec![9_000]));
        assert!(matches!(assembler.part(1, 1, &all[9_000], TimeNs(9)), Outcome::Whole(_)));
    }

    #[test]
    fn a_plan_over_the_maximum_is_refused_at_its_first_part_and_told_of_now_and_then() {
        let mut assembler = Assembler::new(250);
        let (long, fits) = (parts(&bytes(251, 1), 100), parts(&bytes(250, 1), 100));
        assert_eq!(assembler.part(1, 1, &long[2], TimeNs(0)), Outcome::TooLong);
        assert_eq!(assembler.part(1, 2, &long[0], TimeNs(1)), Outcome::Waits);
        assert_eq!(assembler.part(2, 2, &long[0], TimeNs(1)), Outcome::TooLong, "another session");
        assert_eq!(assembler.part(1, 3, &long[1], TimeNs(REPETITION_NS)), Outcome::Again);
        assert!(assembler.transfers.is_empty());
        assembler.part(1, 4, &fits[0], TimeNs(2));
        assembler.part(1, 5, &fits[1], TimeNs(2));
        assert!(matches!(assembler.part(1, 6, &fits[2], TimeNs(2)), Outcome::Whole(_)));
    }

    #[test]
    fn the_room_for_all_transfers_is_bounded() {
        let mut assembler = Assembler::default();
        // Parts of one byte make small chunks; of 1024 bytes, chunks of 64 KiB: one part in each of them fills the room.
        for number in 0..1024 {
            for session in 1..=3 {
                let mut part = parts(&bytes(1024, session as usize), 1024).remove(0);
                (part.total_bytes, part.part) = (MAX_PLAN_BYTES as u32, number * CHUNK_PARTS);
                assembler.part(session, u64::from(number), &part, TimeNs(u64::from(number) * 3 + session));
            }
        }
        let held: usize = assembler.transfers.iter().map(|transfer| transfer.held_bytes).sum();
        assert!(held <= MAX_HELD_BYTES, "{held}");
    }
}
