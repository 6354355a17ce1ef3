//! Follows a daemon's journal: subscribes, renews the lease, asks again for what is missing, hands out entries in order.

use super::Client;
use super::collect::{Collector, Item, Tally};
use anyhow::{Result, bail};
use std::time::{Duration, Instant};
use trackhold_proto::blob::BootId;
use trackhold_proto::message::{Subscribe, Subscribed, WANT_JOURNAL};
use trackhold_proto::{Envelope, Message};

/// The lease asked for, ms.
const LEASE_MS: u32 = 3000;
/// While nothing is heard the subscription is renewed this often: it then is the question whether anybody is there.
const PROBE: Duration = Duration::from_millis(200);
/// After this long without a datagram nothing but probes is sent: requests into the void give nothing up.
const QUIET: Duration = Duration::from_millis(700);
/// How long to wait for the first answer.
const FIRST_ANSWER: Duration = Duration::from_secs(2);
/// What is missing is looked for no more often than this.
const ASK_EVERY: Duration = Duration::from_millis(4);

/// Where to begin.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum From {
    /// With entry 0, and everything since that can still be had.
    Boot,
    /// With entry 0, which says what the node began with; then from the present on.
    BootThenNow,
    /// With what comes next.
    Now,
}

/// A subscription to one boot's journal.
#[derive(Debug)]
pub struct Follower {
    client: Client,
    daemon_session: u64,
    subscribed: Subscribed,
    collector: Collector,
    last_heard: Instant,
    last_subscribe: Instant,
    last_asked: Instant,
    other_boot: Option<BootId>,
    refreshed: bool,
}

impl Follower {
    /// Subscribes.
    ///
    /// # Errors
    /// If no answer comes within two seconds, or the daemon has no room for another subscriber.
    pub fn begin(mut client: Client, from: From, give_up: u32) -> Result<Self> {
        let (daemon_session, subscribed) = first_answer(&mut client)?;
        let next = subscribed.next_entry;
        let first = if from == From::Now { next } else { 0 };
        let mut collector = Collector::new(first, next, give_up);
        if from == From::BootThenNow && next > 1 {
            collector.skip(1, next - 1);
        }
        let now = Instant::now();
        Ok(Self {
            client,
            daemon_session,
            subscribed,
            collector,
            last_heard: now,
            last_subscribe: now,
            last_asked: now,
            other_boot: None,
            refreshed: false,
        })
    }

    /// What the daemon answered to the subscription.
    pub fn subscribed(&self) -> &Subscribed {
        &self.subscribed
    }

    /// The boot of the daemon that has taken this one's place; this journal goes no further.
    pub fn other_boot(&self) -> Option<BootId> {
        self.other_boot
    }

    /// How long nothing was heard from this boot's daemon.
    pub fn quiet_for(&self) -> Duration {
        self.last_heard.elapsed()
    }

    /// The daemon's address and what it might mean that nothing comes.
    pub fn client(&self) -> &Client {
        &self.client
    }

    /// What was seen on the way.
    pub fn tally(&self) -> Tally {
        self.collector.tally()
    }

    /// The next entry or gap in order, if it is here.
    pub fn next_item(&mut self) -> Option<Item> {
        self.collector.next_item()
    }

    /// Receives for up to `wait`, renews the lease, asks for what is missing. Returns as soon as a datagram was taken in.
    pub fn poll(&mut self, wait: Duration) {
        self.keep_up();
        if let Some(envelope) = self.client.receive(wait) {
            self.take(&envelope);
        }
    }

    fn take(&mut self, envelope: &Envelope) {
        let now = Instant::now();
        if let Message::Subscribed(subscribed) = envelope.message {
            self.renewed(envelope.session, subscribed, now);
            return;
        }
        // Entries of another life must not get into this journal; whose life it is, a subscription tells.
        if envelope.session != self.daemon_session {
            return;
        }
        self.last_heard = now;
        match &envelope.message {
            Message::JournalPart(part) => self.collector.take_part(part, now),
            Message::JournalGone(gone) => self.collector.take_gone(gone),
            _ => {}
        }
    }

    /// Takes in a confirmation. One without the journal (the lease had ended, and there is no room any more) still says
    /// how far the journal has come: then all of it is asked for.
    fn renewed(&mut self, session: u64, subscribed: Subscribed, now: Instant) {
        if subscribed.boot != self.subscribed.boot {
            self.other_boot = Some(subscribed.boot);
            return;
        }
        self.daemon_session = session;
        self.last_heard = now;
        self.refreshed = true;
        self.subscribed = subscribed;
        // Entries up to here exist, even if every datagram with them is lost.
        self.collector.reach(subscribed.next_entry);
    }

    fn keep_up(&mut self) {
        let now = Instant::now();
        let quiet = self.quiet_for() >= QUIET;
        let granted = self.subscribed.want & WANT_JOURNAL != 0;
        let third = Duration::from_millis(u64::from(self.subscribed.lease_ms.max(100)) / 3);
        let renew_after = if quiet || !granted { PROBE } else { third };
        if now.duration_since(self.last_subscribe) >= renew_after {
            self.subscribe(WANT_JOURNAL);
        }
        if quiet || self.other_boot.is_some() || now.duration_since(self.last_asked) < ASK_EVERY {
            return;
        }
        self.last_asked = now;
        for request in self.collector.requests(now) {
            let sequence = self.client.next_sequence();
            self.client.send(sequence, Message::JournalRequest(request));
        }
    }

    fn subscribe(&mut self, want: u32) {
        self.last_subscribe = Instant::now();
        let sequence = self.client.next_sequence();
        self.client.send(sequence, Message::Subscribe(Subscribe { want, lease_ms: LEASE_MS }));
    }

    /// Learns how far the journal has come by now; false if nobody answers within `wait`. What is missing up to there
    /// comes with the polls that follow.
    pub fn refresh(&mut self, wait: Duration) -> bool {
        self.refreshed = false;
        let begun = Instant::now();
        self.subscribe(WANT_JOURNAL);
        while !self.refreshed && self.other_boot.is_none() && begun.elapsed() < wait {
            if self.last_subscribe.elapsed() >= Duration::from_millis(100) {
                self.subscribe(WANT_JOURNAL);
            }
            self.poll(Duration::from_millis(10));
        }
        self.refreshed
    }

    /// One more than the greatest number known to exist.
    pub fn end(&self) -> u64 {
        self.collector.end()
    }

    /// The number that comes out next.
    pub fn expected(&self) -> u64 {
        self.collector.expected()
    }

    /// Does without everything missing below `until`.
    pub fn give_up_below(&mut self, until: u64) {
        self.collector.give_up_below(until);
    }

    /// Ends the subscription; should this be lost, the lease ends it.
    pub fn end_subscription(&mut self) {
        self.subscribe(0);
    }
}

fn first_answer(client: &mut Client) -> Result<(u64, Subscribed)> {
    let begun = Instant::now();
    let mut sent = 0;
    while begun.elapsed() < FIRST_ANSWER {
        let sequence = client.next_sequence();
        let subscribe = Subscribe { want: WANT_JOURNAL, lease_ms: LEASE_MS };
        client.send(sequence, Message::Subscribe(subscribe));
        sent += 1;
        let until = Instant::now() + PROBE;
        while Instant::now() < until {
            let left = until.saturating_duration_since(Instant::now());
            let Some(Envelope { session, message: Message::Subscribed(subscribed), .. }) =
                client.receive(left)
            else {
                continue;
            };
            if subscribed.want & WANT_JOURNAL == 0 {
                bail!(
                    "{} has no room for another subscriber to its journal: end one, then try again",
                    client.peer()
                );
            }
            return Ok((session, subscribed));
        }
    }
    Err(client.silent(sent, begun.elapsed()))
}
