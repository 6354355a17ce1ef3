//! The control loop: owns the node, takes events in, ticks on a fixed grid, and sends the commands.
//!
//! It waits for nothing but its timer and its bell, takes no lock, and allocates and frees nothing after its
//! beginning: events come and entries go through bounded queues, and what has to be freed is handed on. [`Loop::turn`]
//! is one pass and does not sleep, so that a test can drive it with a clock of its own; the thread around it
//! is in [`run`].

use crate::clock;
use crate::gate::{Outstanding, Taken, Ticket};
use crate::lanes::{Bell, Drives, Inlets, Outlets, Shared, Waste, count};
use crate::zero::Outlet;
use nix::errno::Errno;
use nix::poll::{PollFd, PollFlags, ppoll};
use nix::sys::time::TimeSpec;
use nix::sys::timerfd::{ClockId, Expiration, TimerFd, TimerFlags, TimerSetTimeFlags};
use std::os::fd::AsFd;
use std::sync::Arc;
use std::sync::atomic::Ordering::SeqCst;
use trackhold_core::keys::Problem;
use trackhold_core::node::tuning::Tuning;
use trackhold_core::node::{Event, Node, Sink};
use trackhold_core::plan::Plan;
use trackhold_core::settings::Settings;
use trackhold_core::time::{TimeNs, tick_offset};
use trackhold_proto::blob::BootId;
use trackhold_proto::header::MAX_DATAGRAM_BYTES;
use trackhold_proto::journal::{Body, Entry, Note, TripEvent};
use trackhold_proto::message::Command;
use trackhold_proto::words::Cause;

/// Events taken in a turn, at most; what is left comes in the next one, a tick in between where it is due.
const STREAM_A_TURN: usize = 256;
const ORDERS_A_TURN: usize = 16;
const TRIPS_A_TURN: usize = 8;
/// For so many ticks a raised trip may be on its way as an event before it counts as lost.
const LOST_AFTER_TICKS: u32 = 2;

/// The control loop without its thread.
#[derive(Debug)]
pub struct Loop {
    node: Node,
    inlets: Inlets,
    out: Outbox,
    outlet: Outlet,
    taken: Taken,
    drives: Drives,
    grid: Grid,
    lateness: Lateness,
    missing: Option<Missing>,
    shared: Arc<Shared>,
}

/// A trip that was raised and whose event does not come.
#[derive(Clone, Copy, Debug)]
struct Missing {
    trips: Outstanding,
    ticks: u32,
}

impl Loop {
    /// A loop whose node begins at `at` with a boot identity and a seed; entry 0 is on its way to the publisher, whose
    /// bell rings when somebody waits for an entry. It ticks first a period later, unless [`Loop::begin`] says otherwise.
    ///
    /// # Errors
    /// Every setting that does not hold.
    pub fn new(
        settings: &Settings,
        (boot, seed): (BootId, u64),
        at: TimeNs,
        inlets: Inlets,
        (outlets, bell): (Outlets, Arc<Bell>),
        outlet: Outlet,
        shared: Arc<Shared>,
    ) -> Result<Self, Vec<Problem>> {
        let mut out = Outbox { outlets, shared: Arc::clone(&shared), command: None, bell, urgent: false };
        let node = Node::new(settings, boot, seed, at, &mut out)?;
        let grid = Grid::new(at, node.params().rate_hz);
        Ok(Self {
            node,
            inlets,
            out,
            outlet,
            taken: Taken::default(),
            drives: Drives::default(),
            grid,
            lateness: Lateness::default(),
            missing: None,
            shared,
        })
    }

    /// Begins the grid of ticks anew: the first falls due a period after `at`.
    pub fn begin(&mut self, at: TimeNs) {
        self.grid = Grid::new(at, self.grid.rate_hz);
        self.shared.heartbeat_ns.store(at.0, SeqCst);
    }

    /// When the next tick falls due.
    pub fn due(&self) -> TimeNs {
        self.grid.due()
    }

    /// The node, to look at.
    pub fn node(&self) -> &Node {
        &self.node
    }

    /// One pass: takes in what is queued, up to a bound, and ticks if a tick is due. True if more is queued.
    pub fn turn(&mut self, clock: &impl Fn() -> TimeNs) -> bool {
        while let Ok(drives) = self.inlets.drives.pop() {
            self.drives = drives;
        }
        let more = self.take_events(clock);
        let now = clock();
        if now >= self.grid.due() {
            self.tick(now);
        }
        if std::mem::take(&mut self.out.urgent) {
            self.out.bell.ring();
        }
        more
    }

    /// Hands an event to the node, takes its trip in, and sends the command that came of it.
    pub fn take(&mut self, at: TimeNs, event: Event, ticket: Option<Ticket>) {
        self.node.handle(at, event, &mut self.out);
        if let Some(ticket) = ticket {
            self.taken.take(ticket);
        }
        if let Some(command) = self.out.command.take() {
            self.send(command);
        }
    }

    /// Trips first; poses before orders, so that a start finds the newest pose.
    fn take_events(&mut self, clock: &impl Fn() -> TimeNs) -> bool {
        for _ in 0..TRIPS_A_TURN {
            let Ok(item) = self.inlets.supervisor_trips.pop().or_else(|_| self.inlets.shutdown_trips.pop())
            else {
                break;
            };
            self.take(clock(), item.event, item.ticket);
        }
        for _ in 0..STREAM_A_TURN {
            let Ok(event) = self.inlets.stream.pop() else { break };
            self.take(clock(), event, None);
        }
        for _ in 0..ORDERS_A_TURN {
            let Ok(item) = self.inlets.orders.pop() else { break };
            self.take(clock(), item.event, item.ticket);
        }
        if let Ok(event) = self.inlets.laws.pop() {
            self.take(clock(), event, None);
        }
        if let Ok(event) = self.inlets.plans.pop() {
            self.take(clock(), event, None);
        }
        let Inlets { orders, laws, plans, .. } = &self.inlets;
        !(orders.is_empty() && laws.is_empty() && plans.is_empty() && self.no_trips())
    }

    fn no_trips(&self) -> bool {
        self.inlets.supervisor_trips.is_empty() && self.inlets.shutdown_trips.is_empty()
    }

    fn tick(&mut self, now: TimeNs) {
        self.find_lost_trip(now);
        if self.lateness.measured(now.since(self.grid.due()).0, self.grid.rate_hz) {
            let note = self.lateness.note();
            self.take(now, Event::Note(note), None);
        }
        self.take(now, Event::Tick, None);
        if self.grid.advance(now) {
            count(&self.shared.ticks_late);
        }
        self.shared.heartbeat_ns.store(now.0, SeqCst);
    }

    /// A latch that stays shut while nothing is queued: the event was lost, so the loop takes the trip in by itself.
    fn find_lost_trip(&mut self, now: TimeNs) {
        let queued = !(self.inlets.orders.is_empty() && self.no_trips());
        let outstanding = self.taken.outstanding(&self.outlet.gate).filter(|_| !queued);
        self.missing = outstanding.map(|trips| match self.missing {
            Some(missing) => Missing { ticks: missing.ticks + 1, ..missing },
            None => Missing { trips, ticks: 1 },
        });
        if let Some(missing) = self.missing.filter(|missing| missing.ticks > LOST_AFTER_TICKS) {
            self.missing = None;
            self.node.handle(now, Event::Trip(TripEvent { cause: Cause::LostTrip }), &mut self.out);
            self.taken.take_outstanding(missing.trips);
            if let Some(command) = self.out.command.take() {
                self.send(command);
            }
        }
    }

    /// Sends a command through the gate: number first, latch last.
    fn send(&mut self, command: Command) {
        self.outlet.gate.hold(&self.node.vehicle().zero(&command.wheels));
        let number = self.outlet.gate.number();
        let mut datagram = [0; MAX_DATAGRAM_BYTES];
        let length = self.outlet.encode(number, command, &mut datagram);
        for drive in self.drives.into_iter().flatten() {
            if !self.taken.is_open(&self.outlet.gate) {
                return;
            }
            if self.outlet.socket.send_to(&datagram[..length], drive).is_err() {
                count(&self.shared.commands_unsent);
            }
        }
    }
}

/// Takes the node's entries: the command to send, and all of them on their way to the publisher.
#[derive(Debug)]
struct Outbox {
    outlets: Outlets,
    shared: Arc<Shared>,
    command: Option<Command>,
    bell: Arc<Bell>,
    /// Somebody waits for what was pushed.
    urgent: bool,
}

impl Outbox {
    /// Hands on what has to be freed. Only if that queue is full too is it freed here: late is better than lost memory.
    fn discard(&mut self, waste: Waste) {
        drop(self.outlets.waste.push(waste));
    }
}

impl Sink for Outbox {
    fn entry(&mut self, entry: Entry) {
        match &entry.body {
            Body::Tick(record) => self.command = Some(record.command),
            Body::Command(command) => self.command = Some(*command),
            Body::Ack(_) | Body::ModeChange(_) => self.urgent = true,
            _ => {}
        }
        if let Err(rtrb::PushError::Full(entry)) = self.outlets.entries.push(entry) {
            count(&self.shared.entries_lost);
            // Those that hold memory.
            if matches!(entry.body, Body::Plan(_) | Body::Ack(_) | Body::Tune(_) | Body::LawChanged(_)) {
                self.discard(Waste::Entry(entry));
            }
        }
    }

    fn retire(&mut self, plan: Box<Plan>) {
        self.discard(Waste::Plan(plan));
    }

    fn retire_law(&mut self, law: Box<Tuning>) {
        self.discard(Waste::Law(law));
    }
}

/// The grid of ticks: absolute, so that lateness never adds up.
#[derive(Clone, Copy, Debug)]
struct Grid {
    origin: TimeNs,
    rate_hz: f64,
    next: u64,
}

impl Grid {
    const fn new(origin: TimeNs, rate_hz: f64) -> Self {
        Self { origin, rate_hz, next: 1 }
    }

    fn due(&self) -> TimeNs {
        self.origin + tick_offset(self.next, self.rate_hz)
    }

    /// On to the first point after `now`; true if points were passed over.
    fn advance(&mut self, now: TimeNs) -> bool {
        self.next += 1;
        if now < self.due() {
            return false;
        }
        self.next = (now.since(self.origin).seconds() * self.rate_hz) as u64;
        while self.due() <= now {
            self.next += 1;
        }
        true
    }
}

/// The next whole hundredth of a second. A grid that begins there lets a journal's stamps tell by themselves how late each
/// tick was, at every rate whose period divides it.
fn whole_grid_step(now: TimeNs) -> TimeNs {
    const STEP_NS: u64 = 10_000_000;
    TimeNs(now.0.next_multiple_of(STEP_NS))
}

/// How late ticks are, summed up for a note a second.
#[derive(Clone, Copy, Debug, Default)]
struct Lateness {
    ticks: u64,
    sum_ns: u64,
    worst_ns: u64,
}

impl Lateness {
    /// True if a second's worth has come together.
    fn measured(&mut self, late_ns: u64, rate_hz: f64) -> bool {
        self.ticks += 1;
        self.sum_ns += late_ns;
        self.worst_ns = self.worst_ns.max(late_ns);
        self.ticks as f64 >= rate_hz
    }

    fn note(&mut self) -> Note {
        let Self { ticks, sum_ns, worst_ns } = std::mem::take(self);
        Note::Lateness { ticks, mean_ns: sum_ns / ticks.max(1), worst_ns }
    }
}

/// Runs the loop on the calling thread until it is told to end; then takes in once more what is queued.
///
/// # Errors
/// If the system gives no timer.
pub fn run(mut control: Loop, bell: &Bell) -> std::io::Result<()> {
    let timer = TimerFd::new(ClockId::CLOCK_MONOTONIC, TimerFlags::TFD_NONBLOCK | TimerFlags::TFD_CLOEXEC)?;
    control.begin(whole_grid_step(clock::now()));
    let mut more = false;
    loop {
        if !more {
            sleep_until(&timer, bell, control.due())?;
        }
        let ends = control.shared.loop_ends.load(SeqCst);
        more = control.turn(&clock::now);
        if ends && !more {
            return Ok(());
        }
    }
}

/// Sleeps until the moment or the bell: one call, which either of them ends.
fn sleep_until(timer: &TimerFd, bell: &Bell, until: TimeNs) -> std::io::Result<()> {
    let due = TimeSpec::new((until.0 / 1_000_000_000).cast_signed(), (until.0 % 1_000_000_000).cast_signed());
    timer.set(Expiration::OneShot(due), TimerSetTimeFlags::TFD_TIMER_ABSTIME)?;
    let mut sources =
        [PollFd::new(timer.as_fd(), PollFlags::POLLIN), PollFd::new(bell.as_fd(), PollFlags::POLLIN)];
    match ppoll(&mut sources, None, None) {
        Ok(_) | Err(Errno::EINTR) => {}
        Err(error) => return Err(error.into()),
    }
    bell.silence();
    Ok(())
}
