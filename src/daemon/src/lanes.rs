//! What runs between the threads: bounded wait-free queues, bells, and counters.
//!
//! ```text
//! intake ── poses, notes ─▶┐                     ┌─▶ entries ──▶ publisher
//!        ── orders ───────▶│                     │
//! law worker ─── laws ────▶│                     │
//! plan worker ── plans ───▶│ control loop ───────┼─▶ waste ────▶ plan worker (frees it)
//! supervisor ── trips ────▶│                     │
//! shutdown ──── trips ────▶┘                     └─▶ commands ─▶ drives
//! ```
//!
//! A full queue is counted, never waited for. Each queue has one producer and one consumer.

use crate::gate::Ticket;
use nix::errno::Errno;
use nix::poll::{PollFd, PollFlags, ppoll};
use nix::sys::eventfd::{EfdFlags, EventFd};
use nix::sys::time::TimeSpec;
use rtrb::{Consumer, Producer, PushError, RingBuffer};
use std::net::SocketAddr;
use std::os::fd::{AsFd, BorrowedFd};
use std::sync::atomic::{AtomicBool, AtomicU32, AtomicU64, Ordering::SeqCst};
use std::time::Duration;
use trackhold_core::node::Event;
use trackhold_core::node::tuning::Tuning;
use trackhold_core::plan::Plan;
use trackhold_proto::journal::Entry;

/// So many drives can subscribe to commands.
pub const MAX_DRIVES: usize = 4;

/// Where commands go.
pub type Drives = [Option<SocketAddr>; MAX_DRIVES];

/// Poses and notes on their way to the loop: a second of the fastest estimator.
const STREAM_ITEMS: usize = 1024;
const ORDER_ITEMS: usize = 64;
const PLAN_ITEMS: usize = 4;
const LAW_ITEMS: usize = 4;
const TRIP_ITEMS: usize = 8;
const DRIVE_ITEMS: usize = 8;
/// Entries on their way to the publisher: four seconds at 1 kHz with a pose a tick.
const ENTRY_ITEMS: usize = 8192;
const WASTE_ITEMS: usize = 64;

/// An event; a trip's carries its ticket.
#[derive(Debug)]
pub struct Item {
    /// What happened.
    pub event: Event,
    /// The trip that sent zero for it.
    pub ticket: Option<Ticket>,
}

/// What the loop is done with and others free.
#[derive(Debug)]
#[expect(clippy::large_enum_variant, reason = "boxing the entry would allocate in the loop")]
pub enum Waste {
    /// A plan that was replaced or not taken.
    Plan(Box<Plan>),
    /// A law that was replaced or not taken.
    Law(Box<Tuning>),
    /// An entry that found its queue full.
    Entry(Entry),
}

/// The loop's ends of what comes in.
#[derive(Debug)]
#[expect(missing_docs, reason = "the picture in this file's header names them")]
pub struct Inlets {
    pub supervisor_trips: Consumer<Item>,
    pub shutdown_trips: Consumer<Item>,
    pub stream: Consumer<Event>,
    pub orders: Consumer<Item>,
    pub plans: Consumer<Event>,
    pub laws: Consumer<Event>,
    pub drives: Consumer<Drives>,
}

/// The loop's ends of what goes out.
#[derive(Debug)]
#[expect(missing_docs, reason = "the picture in this file's header names them")]
pub struct Outlets {
    pub entries: Producer<Entry>,
    pub waste: Producer<Waste>,
}

/// Everybody else's ends.
#[derive(Debug)]
#[expect(missing_docs, reason = "the picture in this file's header names them")]
pub struct OtherEnds {
    pub supervisor_trips: Producer<Item>,
    pub shutdown_trips: Producer<Item>,
    pub stream: Producer<Event>,
    pub orders: Producer<Item>,
    pub plans: Producer<Event>,
    pub laws: Producer<Event>,
    pub drives: Producer<Drives>,
    pub entries: Consumer<Entry>,
    pub waste: Consumer<Waste>,
}

/// Makes the queues.
pub fn lanes() -> (Inlets, Outlets, OtherEnds) {
    lanes_with(ENTRY_ITEMS)
}

/// Makes the queues, with room for so many entries to the publisher.
pub fn lanes_with(entry_items: usize) -> (Inlets, Outlets, OtherEnds) {
    let (supervisor_trips_in, supervisor_trips) = RingBuffer::new(TRIP_ITEMS);
    let (shutdown_trips_in, shutdown_trips) = RingBuffer::new(TRIP_ITEMS);
    let (stream_in, stream) = RingBuffer::new(STREAM_ITEMS);
    let (orders_in, orders) = RingBuffer::new(ORDER_ITEMS);
    let (plans_in, plans) = RingBuffer::new(PLAN_ITEMS);
    let (laws_in, laws) = RingBuffer::new(LAW_ITEMS);
    let (drives_in, drives) = RingBuffer::new(DRIVE_ITEMS);
    let (entries, entries_out) = RingBuffer::new(entry_items);
    let (waste, waste_out) = RingBuffer::new(WASTE_ITEMS);
    (
        Inlets { supervisor_trips, shutdown_trips, stream, orders, plans, laws, drives },
        Outlets { entries, waste },
        OtherEnds {
            supervisor_trips: supervisor_trips_in,
            shutdown_trips: shutdown_trips_in,
            stream: stream_in,
            orders: orders_in,
            plans: plans_in,
            laws: laws_in,
            drives: drives_in,
            entries: entries_out,
            waste: waste_out,
        },
    )
}

/// Wakes a sleeping thread. Ringing never waits.
#[derive(Debug)]
pub struct Bell(EventFd);

impl Bell {
    /// A silent bell.
    ///
    /// # Errors
    /// If the system has no file descriptor left.
    pub fn new() -> std::io::Result<Self> {
        let flags = EfdFlags::EFD_NONBLOCK | EfdFlags::EFD_CLOEXEC;
        Ok(Self(EventFd::from_value_and_flags(0, flags).map_err(std::io::Error::from)?))
    }

    /// Rings. A counter at its very top stays there and wakes all the same.
    pub fn ring(&self) {
        while self.0.write(1) == Err(Errno::EINTR) {}
    }

    /// Silences it; true if it had been rung.
    pub fn silence(&self) -> bool {
        self.0.read().is_ok()
    }

    /// Waits until it rings or the time is over, and silences it.
    ///
    /// # Errors
    /// If the system cannot wait for it.
    pub fn wait(&self, at_most: Duration) -> std::io::Result<()> {
        let mut sources = [PollFd::new(self.as_fd(), PollFlags::POLLIN)];
        match ppoll(&mut sources, Some(TimeSpec::from_duration(at_most)), None) {
            Ok(_) | Err(Errno::EINTR) => {}
            Err(error) => return Err(error.into()),
        }
        self.silence();
        Ok(())
    }
}

impl AsFd for Bell {
    fn as_fd(&self) -> BorrowedFd<'_> {
        self.0.as_fd()
    }
}

/// How long to wait before trying a full queue again.
const RETRY: Duration = Duration::from_millis(1);

/// Pushes what a worker has made. A worker may wait for room; the loop never does.
pub fn push_patiently(queue: &mut Producer<Event>, event: Event, shared: &Shared) {
    let mut event = event;
    while let Err(PushError::Full(back)) = queue.push(event) {
        if shared.shell_ends.load(SeqCst) {
            return;
        }
        event = back;
        std::thread::sleep(RETRY);
    }
}

/// Counters and states that several threads see. Each counter is written by one side and read by the publisher.
#[derive(Debug, Default)]
pub struct Shared {
    /// Datagrams received.
    pub datagrams: AtomicU64,
    /// Datagrams that could not be decoded.
    pub malformed: AtomicU64,
    /// Datagrams of a kind only the daemon sends.
    pub misdirected: AtomicU64,
    /// Events dropped because a queue to the loop was full.
    pub events_dropped: AtomicU64,
    /// Entries lost because the queue from the loop was full.
    pub entries_lost: AtomicU64,
    /// Ticks that came a period or more late.
    pub ticks_late: AtomicU64,
    /// Commands that the system did not take.
    pub commands_unsent: AtomicU64,
    /// Answers that the system did not take, and requests that found the publisher's queue full.
    pub answers_unsent: AtomicU64,
    /// Moment of the last tick; 0 before the first.
    pub heartbeat_ns: AtomicU64,
    /// Session of the pose source in force; 0 without one.
    pub pose_source: AtomicU64,
    /// Subscribers to commands.
    pub command_subscribers: AtomicU32,
    /// The loop is to take in what is queued and end.
    pub loop_ends: AtomicBool,
    /// All other threads are to end.
    pub shell_ends: AtomicBool,
}

/// Counts one.
pub fn count(counter: &AtomicU64) {
    counter.fetch_add(1, SeqCst);
}
