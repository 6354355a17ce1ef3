//! Who gets which streams, and until when. A subscriber that vanishes is dropped when its lease ends.

use crate::lanes::{Drives, MAX_DRIVES};
use std::net::SocketAddr;
use trackhold_core::time::{SpanNs, TimeNs};
use trackhold_proto::message::{WANT_COMMANDS, WANT_JOURNAL, WANT_STATUS};

/// So many can subscribe to journal or status.
pub const MAX_LISTENERS: usize = 8;

const LISTENING: u32 = WANT_JOURNAL | WANT_STATUS;

/// The table of leases.
#[derive(Debug, Default)]
pub struct Leases {
    held: Vec<Lease>,
}

#[derive(Clone, Copy, Debug)]
struct Lease {
    holder: SocketAddr,
    want: u32,
    until: TimeNs,
}

impl Leases {
    /// Grants what there is room for and returns it; whatever the address held before is replaced.
    pub fn subscribe(&mut self, holder: SocketAddr, want: u32, length: SpanNs, at: TimeNs) -> u32 {
        self.held.retain(|lease| lease.holder != holder);
        let mut granted = want;
        if self.count(WANT_COMMANDS) >= MAX_DRIVES {
            granted &= !WANT_COMMANDS;
        }
        if self.count(LISTENING) >= MAX_LISTENERS {
            granted &= !LISTENING;
        }
        if granted != 0 {
            self.held.push(Lease { holder, want: granted, until: at + length });
        }
        granted
    }

    /// Drops the leases that have ended, and returns who held them.
    pub fn expire(&mut self, at: TimeNs) -> Vec<SocketAddr> {
        let ended = |lease: &Lease| lease.until <= at;
        let gone = self.held.iter().filter(|lease| ended(lease)).map(|lease| lease.holder).collect();
        self.held.retain(|lease| !ended(lease));
        gone
    }

    /// Where commands go.
    pub fn drives(&self) -> Drives {
        let mut drives = Drives::default();
        let holders = self.held.iter().filter(|lease| lease.want & WANT_COMMANDS != 0);
        for (drive, lease) in drives.iter_mut().zip(holders) {
            *drive = Some(lease.holder);
        }
        // In a fixed order, so that a renewal alone changes nothing.
        drives.sort();
        drives
    }

    fn count(&self, want: u32) -> usize {
        self.held.iter().filter(|lease| lease.want & want != 0).count()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const SECOND: SpanNs = SpanNs(1_000_000_000);

    fn at(port: u16) -> SocketAddr {
        SocketAddr::from(([127, 0, 0, 1], port))
    }

    #[test]
    fn a_lease_ends_unless_it_is_renewed() {
        let mut leases = Leases::default();
        assert_eq!(leases.subscribe(at(1), WANT_COMMANDS, SECOND, TimeNs(0)), WANT_COMMANDS);
        leases.subscribe(at(2), WANT_COMMANDS | WANT_JOURNAL, SECOND, TimeNs(0));
        leases.subscribe(at(1), WANT_COMMANDS, SECOND, TimeNs(600_000_000));
        assert_eq!(leases.expire(TimeNs(999_999_999)), []);
        assert_eq!(leases.expire(TimeNs(1_000_000_000)), [at(2)]);
        assert_eq!(leases.drives().into_iter().flatten().collect::<Vec<_>>(), [at(1)]);
        assert_eq!(leases.subscribe(at(1), 0, SECOND, TimeNs(1_100_000_000)), 0);
        assert_eq!(leases.drives(), Drives::default());
    }

    #[test]
    fn a_full_table_refuses_newcomers_and_keeps_those_who_renew() {
        let mut leases = Leases::default();
        for port in 1..=4 {
            leases.subscribe(at(port), WANT_COMMANDS, SECOND, TimeNs(0));
        }
        assert_eq!(leases.subscribe(at(5), WANT_COMMANDS, SECOND, TimeNs(0)), 0);
        assert_eq!(leases.subscribe(at(5), WANT_COMMANDS | WANT_STATUS, SECOND, TimeNs(0)), WANT_STATUS);
        assert_eq!(leases.subscribe(at(3), WANT_COMMANDS, SECOND, TimeNs(0)), WANT_COMMANDS);
        for port in 6..=12 {
            assert_eq!(leases.subscribe(at(port), WANT_JOURNAL, SECOND, TimeNs(0)), WANT_JOURNAL);
        }
        assert_eq!(leases.subscribe(at(13), WANT_JOURNAL, SECOND, TimeNs(0)), 0);
    }

    #[test]
    fn a_renewal_does_not_change_the_order_of_the_drives() {
        let mut leases = Leases::default();
        leases.subscribe(at(1), WANT_COMMANDS, SECOND, TimeNs(0));
        leases.subscribe(at(2), WANT_COMMANDS, SECOND, TimeNs(0));
        let before = leases.drives();
        leases.subscribe(at(1), WANT_COMMANDS, SECOND, TimeNs(1));
        assert_eq!(leases.drives(), before);
    }
}
