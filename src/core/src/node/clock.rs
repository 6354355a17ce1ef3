//! How a sender's clock stands against the daemon's.
//!
//! The offset is daemon's minus sender's clock. Without an answer from the sender it is the least difference of reception
//! and stamp seen within a window: the path's least delay is then counted as none, and only what comes on top of it shows
//! as age. With the four stamps of RFC 5905, section 8, it is that exchange's; the exchange with the least delay counts,
//! for its error is at most half of that.

use crate::time::{SpanNs, TimeNs};
use trackhold_proto::journal::ExchangeEvent;

/// An exchange counts this many windows long, unless a better one comes.
const EXCHANGE_WINDOWS: u64 = 6;

#[derive(Clone, Debug, Default)]
pub(super) struct OffsetEstimate {
    bucket_begin: TimeNs,
    least: Option<i64>,
    least_before: Option<i64>,
    exchange: Option<Exchanged>,
}

#[derive(Clone, Copy, Debug)]
struct Exchanged {
    offset_ns: i64,
    delay_ns: i64,
    at: TimeNs,
}

impl OffsetEstimate {
    /// Takes in a stamp and its reception, and returns the offset to use for it.
    pub(super) fn observe(&mut self, stamp_ns: u64, received: TimeNs, window: SpanNs) -> i64 {
        let seen = difference(received.0, stamp_ns);
        if self.least.is_none() || received.since(self.bucket_begin) > window {
            self.least_before = self.least.take();
            self.bucket_begin = received;
        }
        let least = self.least.map_or(seen, |least| least.min(seen));
        self.least = Some(least);
        let limit = SpanNs(window.0.saturating_mul(EXCHANGE_WINDOWS));
        if let Some(exchange) = self.exchange.filter(|exchange| received.since(exchange.at) <= limit) {
            return exchange.offset_ns;
        }
        self.least_before.map_or(least, |before| before.min(least))
    }

    /// Takes in an exchange of stamps.
    pub(super) fn exchanged(&mut self, event: &ExchangeEvent, window: SpanNs) {
        let there = difference(event.request_sent_ns, event.request_received_ns);
        let back = difference(event.reply_received_ns, event.reply_sent_ns);
        let exchanged = Exchanged {
            // The mean without overflow: the halves' remainders are below a nanosecond.
            offset_ns: there / 2 + back / 2,
            delay_ns: back.wrapping_sub(there),
            at: TimeNs(event.reply_received_ns),
        };
        let outlived = |held: Exchanged| exchanged.at.since(held.at) > window;
        let better = |held: Exchanged| exchanged.delay_ns <= held.delay_ns || outlived(held);
        if exchanged.delay_ns >= 0 && self.exchange.is_none_or(better) {
            self.exchange = Some(exchanged);
        }
    }
}

/// a − b of two clocks that may stand anywhere.
fn difference(a: u64, b: u64) -> i64 {
    a.wrapping_sub(b).cast_signed()
}

#[cfg(test)]
mod tests {
    use super::*;

    const WINDOW: SpanNs = SpanNs(10_000_000_000);

    #[test]
    fn the_least_delay_is_the_offset_and_extra_delay_is_age() {
        let mut estimate = OffsetEstimate::default();
        let sender_ahead = 5_000_000_000_u64;
        let mut offset = 0;
        for (sent, delay) in [(0, 3_000), (1_000_000, 1_000), (2_000_000, 8_000)] {
            offset = estimate.observe(sent + sender_ahead, TimeNs(sent + delay), WINDOW);
        }
        assert_eq!(offset, 1_000 - 5_000_000_000);
    }

    #[test]
    fn a_clock_that_steps_back_is_followed_within_two_windows() {
        let mut estimate = OffsetEstimate::default();
        let mut offset = 0;
        for second in 0..40_u64 {
            let now = second * 1_000_000_000;
            let stepped = if second < 10 { now + 9_000_000_000 } else { now };
            offset = estimate.observe(stepped, TimeNs(now), WINDOW);
        }
        assert_eq!(offset, 0);
    }

    #[test]
    fn an_exchange_gives_the_offset_of_rfc_5905() {
        // RFC 5905, section 8: θ = ((T2 − T1) + (T3 − T4))/2 is the sender's clock minus ours.
        let mut estimate = OffsetEstimate::default();
        let event = ExchangeEvent {
            session: 1,
            request_sent_ns: 1_000,
            request_received_ns: 501_200,
            reply_sent_ns: 501_300,
            reply_received_ns: 1_900,
        };
        estimate.exchanged(&event, WINDOW);
        let theta = ((501_200 - 1_000) + (501_300 - 1_900)) / 2;
        assert_eq!(estimate.observe(502_000, TimeNs(2_400), WINDOW), -theta);
    }
}
