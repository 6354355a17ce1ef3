//! Joins the parts of long entries. Bounded: a few entries at a time, none longer than an entry can be.

use std::collections::BTreeMap;
use trackhold_proto::journal::{FRAME_HEAD_BYTES, MAX_BODY_BYTES};
use trackhold_proto::message::{JOURNAL_BYTES, JournalPart};

/// So many long entries are joined at a time; the farthest ones are dropped and asked for again.
const MOST: usize = 4;
/// An entry never travels in more parts, if they are filled at least half.
const MOST_PARTS: u32 = ((MAX_BODY_BYTES + FRAME_HEAD_BYTES) / (JOURNAL_BYTES / 2) + 1) as u32;

/// Entries in the making, by number.
#[derive(Debug, Default)]
pub(super) struct Assemblies(BTreeMap<u64, Assembly>);

#[derive(Debug)]
struct Assembly {
    parts: Vec<Option<Box<[u8]>>>,
    missing: usize,
}

impl Assemblies {
    /// Takes in a part; returns the entry's frame once all parts are here.
    pub(super) fn take(&mut self, part: &JournalPart) -> Option<Vec<u8>> {
        if part.parts > MOST_PARTS || part.part >= part.parts {
            return None;
        }
        let parts = part.parts as usize;
        let fits = self.0.get(&part.first).is_some_and(|assembly| assembly.parts.len() == parts);
        if !fits {
            self.0.insert(part.first, Assembly { parts: vec![None; parts], missing: parts });
        }
        let assembly = self.0.get_mut(&part.first)?;
        let place = &mut assembly.parts[part.part as usize];
        if place.is_none() {
            *place = Some(part.bytes.as_slice().into());
            assembly.missing -= 1;
        }
        if assembly.missing == 0 {
            let whole = self.0.remove(&part.first)?;
            return Some(whole.parts.into_iter().flatten().flatten().collect());
        }
        if self.0.len() > MOST {
            self.0.pop_last();
        }
        None
    }

    /// Drops what is not waited for any more.
    pub(super) fn forget_below(&mut self, number: u64) {
        self.0.retain(|first, _| *first >= number);
    }
}
