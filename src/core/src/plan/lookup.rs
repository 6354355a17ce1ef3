//! Which of many rising stamps is the last one at or before a moment: by even buckets, so that it takes as long for a
//! million stamps as for ten where they are spread evenly, and never more than a binary search.

use alloc::vec::Vec;

/// An index over rising stamps, the first of which is 0.
#[derive(Debug)]
pub(super) struct Lookup {
    buckets_1_s: f64,
    /// Of each bucket the number of stamps in those before it; one more entry at the end.
    before: Vec<u32>,
}

impl Lookup {
    /// An index over stamps that rise from 0 to more than that.
    pub(super) fn new(stamps: impl Iterator<Item = f64>, count: usize, last: f64) -> Self {
        let mut index = Self { buckets_1_s: count as f64 / last, before: Vec::new() };
        index.before.resize(count + 1, 0);
        for stamp in stamps {
            let bucket = index.bucket(stamp);
            index.before[bucket + 1] += 1;
        }
        let mut sum = 0;
        for number in &mut index.before {
            sum += *number;
            *number = sum;
        }
        index
    }

    /// Does not fall as the stamp rises; so stamps in an earlier bucket are earlier, whatever rounding does.
    fn bucket(&self, stamp: f64) -> usize {
        // A cast takes what is negative as 0, and what is too large as the greatest number.
        ((stamp * self.buckets_1_s) as usize).min(self.before.len() - 2)
    }

    /// Where to look for the last stamp at or before this one: it is the one before the range, or in it.
    pub(super) fn range(&self, stamp: f64) -> (usize, usize) {
        let bucket = self.bucket(stamp);
        (self.before[bucket] as usize, self.before[bucket + 1] as usize)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use alloc::vec;
    use proptest::prelude::*;

    fn check(stamps: &[f64], moment: f64) {
        let last = stamps[stamps.len() - 1];
        let lookup = Lookup::new(stamps.iter().copied(), stamps.len(), last);
        let (low, high) = lookup.range(moment);
        let found = low + stamps[low..high].partition_point(|stamp| *stamp <= moment);
        assert_eq!(found, stamps.partition_point(|stamp| *stamp <= moment), "{moment} in {stamps:?}");
    }

    #[test]
    fn uneven_stamps_and_moments_outside_are_found_too() {
        let stamps = vec![0.0, 1e-6, 2e-6, 0.3, 0.30000000000000004, 1e5];
        for moment in [-1.0, 0.0, 5e-7, 1e-6, 0.3, 0.31, 1e5, 1e9, f64::MAX, f64::MIN, f64::INFINITY] {
            check(&stamps, moment);
        }
    }

    proptest! {
        #[test]
        fn it_finds_what_a_binary_search_finds(
            steps in prop::collection::vec(1e-6..10.0_f64, 1..200),
            share in -0.1..1.1_f64,
            at in any::<prop::sample::Index>(),
        ) {
            let mut stamps = vec![0.0];
            for step in steps {
                stamps.push(stamps[stamps.len() - 1] + step);
            }
            check(&stamps, share * stamps[stamps.len() - 1]);
            check(&stamps, stamps[at.index(stamps.len())]);
        }
    }
}
