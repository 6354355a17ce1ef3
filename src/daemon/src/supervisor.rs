//! The supervisor: stops the machine past the loop when ticks are missing.

use crate::clock;
use crate::gate::Source;
use crate::lanes::{Bell, Item, Shared};
use crate::zero::ZeroSide;
use rtrb::Producer;
use std::sync::Arc;
use std::sync::atomic::Ordering::SeqCst;
use std::time::Duration;
use trackhold_core::node::Event;
use trackhold_core::time::{SpanNs, TimeNs};
use trackhold_proto::journal::TripEvent;
use trackhold_proto::words::{Cause, Mode};

/// Looks at the loop's heartbeat.
#[derive(Debug)]
pub struct Supervisor {
    /// Without a tick for so long the loop is stalled.
    pub limit: SpanNs,
    /// Sends zero.
    pub zero: Arc<ZeroSide>,
    /// Trips to the loop.
    pub trips: Producer<Item>,
    /// Wakes the loop.
    pub bell: Arc<Bell>,
    /// Holds the heartbeat, and tells when to end.
    pub shared: Arc<Shared>,
    /// The heartbeat that was tripped for: once until the loop ticks again.
    pub tripped_at: Option<u64>,
}

impl Supervisor {
    /// Looks at the heartbeat until the loop is told to end: from then on missing ticks are no stall.
    pub fn run(mut self) {
        // A quarter of the limit is how late a stall may be found, but the processor is not kept busy for it.
        let pause = Duration::from_nanos(self.limit.0 / 4)
            .clamp(Duration::from_micros(500), Duration::from_millis(50));
        while !self.shared.loop_ends.load(SeqCst) {
            std::thread::sleep(pause);
            if self.look(clock::now()) {
                tracing::error!(
                    "the control loop missed its ticks for {:.3} s: zero was sent",
                    self.limit.seconds()
                );
            }
        }
    }

    /// Trips if ticks are missing and the loop was not told to end; true if it did.
    pub fn look(&mut self, now: TimeNs) -> bool {
        let heartbeat = self.shared.heartbeat_ns.load(SeqCst);
        let stalled = heartbeat != 0 && now.since(TimeNs(heartbeat)) > self.limit;
        if !stalled || self.tripped_at == Some(heartbeat) || self.shared.loop_ends.load(SeqCst) {
            return false;
        }
        self.tripped_at = Some(heartbeat);
        let ticket = self.zero.trip(Source::Supervisor, Mode::ProtectiveStop);
        let event = Event::Trip(TripEvent { cause: Cause::StalledLoop });
        // With a full queue the latch stays shut, and the loop finds the lost trip by itself.
        drop(self.trips.push(Item { event, ticket: Some(ticket) }));
        self.bell.ring();
        true
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::lanes::lanes;
    use crate::zero::tests::zero_side;

    #[test]
    fn missing_ticks_send_zero_once_until_the_loop_ticks_again() {
        let (zero, shared, drive) = zero_side();
        let (mut inlets, _outlets, ends) = lanes();
        let mut supervisor = Supervisor {
            limit: SpanNs(100),
            zero,
            trips: ends.supervisor_trips,
            bell: Arc::new(Bell::new().unwrap()),
            shared: Arc::clone(&shared),
            tripped_at: None,
        };
        assert!(!supervisor.look(TimeNs(1_000_000)), "before the first tick nothing is missing");
        shared.heartbeat_ns.store(1000, SeqCst);
        assert!(!supervisor.look(TimeNs(1100)));
        assert!(supervisor.look(TimeNs(1101)) && !supervisor.look(TimeNs(5000)), "once");
        assert_eq!(drive.modes(), [Mode::ProtectiveStop]);
        let item = inlets.supervisor_trips.pop().unwrap();
        assert!(item.ticket.is_some());
        assert!(matches!(item.event, Event::Trip(TripEvent { cause: Cause::StalledLoop })));
        shared.heartbeat_ns.store(6000, SeqCst);
        assert!(!supervisor.look(TimeNs(6001)) && supervisor.look(TimeNs(6101)), "again");
        shared.heartbeat_ns.store(7000, SeqCst);
        shared.loop_ends.store(true, SeqCst);
        assert!(!supervisor.look(TimeNs(9000)), "a loop that was told to end does not stall");
    }
}
