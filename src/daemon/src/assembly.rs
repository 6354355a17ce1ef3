//! Puts the daemon's parts together: who holds which end of which queue.

use crate::builder::LawWorker;
use crate::clock;
use crate::control::Loop;
use crate::gate::Gate;
use crate::guard::{self, Failures};
use crate::intake::transfer::Whole;
use crate::intake::{Ends, Intake};
use crate::lanes::{Bell, Item, Shared, lanes};
use crate::mail::Mail;
use crate::publish::Publisher;
use crate::publish::margins::Margins;
use crate::publish::status::Summary;
use crate::site::Site;
use crate::site::net::demand_loopback;
use crate::supervisor::Supervisor;
use crate::worker::Worker;
use crate::zero::{Outlet, ZeroSide};
use anyhow::{Context, anyhow};
use rtrb::Producer;
use std::net::{SocketAddr, UdpSocket};
use std::sync::Arc;
use std::sync::mpsc::{Receiver, sync_channel};
use std::thread::JoinHandle;
use trackhold_core::node::tuning;
use trackhold_core::settings::Checked;
use trackhold_core::time::SpanNs;
use trackhold_proto::blob::{BootId, Hex};
use trackhold_proto::journal::TuneEvent;

/// Whole plans that wait for the worker.
const PLAN_JOBS: usize = 4;
/// Tunes that wait for the worker.
const TUNE_JOBS: usize = 4;

/// What tells this life of the daemon from every other.
#[derive(Clone, Copy, Debug)]
pub(crate) struct Identity {
    /// The boot identity.
    pub(crate) boot: BootId,
    /// Seed of the start numbers.
    pub(crate) seed: u64,
}

impl Identity {
    /// Draws one from the system's random source.
    pub(crate) fn draw() -> anyhow::Result<Self> {
        let mut boot = [0; 16];
        let none = |error| anyhow!("the system has no random numbers: {error}");
        getrandom::fill(&mut boot).map_err(none)?;
        let seed = getrandom::u64().map_err(none)?;
        Ok(Self { boot: Hex(boot), seed })
    }
}

/// The daemon's session: the first eight bytes of its boot identity, little endian.
pub(crate) fn session_of(boot: BootId) -> u64 {
    let [a, b, c, d, e, f, g, h, ..] = boot.0;
    u64::from_le_bytes([a, b, c, d, e, f, g, h])
}

/// Opens the one socket, and returns it with the address it got.
pub(crate) fn listen(address: SocketAddr, boot: BootId) -> anyhow::Result<(Outlet, SocketAddr)> {
    demand_loopback(address).map_err(|what| anyhow!("net.listen: {what}"))?;
    let socket =
        UdpSocket::bind(address).with_context(|| format!("net.listen: cannot listen on {address}"))?;
    socket.set_nonblocking(true)?;
    let address = socket.local_addr()?;
    Ok((Outlet { socket, gate: Arc::new(Gate::default()), session: session_of(boot) }, address))
}

/// What every thread shares.
#[derive(Clone, Debug)]
pub(crate) struct Common {
    pub(crate) zero: Arc<ZeroSide>,
    pub(crate) shared: Arc<Shared>,
    pub(crate) loop_bell: Arc<Bell>,
    pub(crate) publisher_bell: Arc<Bell>,
    pub(crate) failures: Failures,
}

impl Common {
    pub(crate) fn new(checked: &Checked, outlet: &Outlet) -> std::io::Result<Self> {
        let shared = Arc::new(Shared::default());
        let (layout, valid_ns) = (checked.vehicle.layout(), checked.params.command_validity.0);
        Ok(Self {
            zero: Arc::new(ZeroSide::new(outlet.another()?, layout, valid_ns, Arc::clone(&shared))),
            shared,
            loop_bell: Arc::new(Bell::new()?),
            publisher_bell: Arc::new(Bell::new()?),
            failures: Failures::default(),
        })
    }

    /// Starts a guarded thread.
    pub(crate) fn spawn(
        &self,
        name: &'static str,
        body: impl FnOnce() -> std::io::Result<()> + Send + 'static,
    ) -> std::io::Result<JoinHandle<()>> {
        guard::spawn(name, Arc::clone(&self.zero), self.failures.clone(), body)
    }
}

/// What the threads run.
#[derive(Debug)]
pub(crate) struct Parts {
    pub(crate) control: Loop,
    pub(crate) intake: Intake,
    pub(crate) publisher: Publisher,
    pub(crate) worker: Worker,
    pub(crate) whole_plans: Receiver<Whole>,
    pub(crate) law_worker: LawWorker,
    pub(crate) tunes: Receiver<TuneEvent>,
    pub(crate) supervisor: Supervisor,
}

impl Parts {
    /// Everything in its place, nothing running yet; and the queue on which the end of the program trips the loop.
    pub(crate) fn new(
        site: &Site,
        checked: Checked,
        identity: Identity,
        outlet: Outlet,
        common: &Common,
    ) -> anyhow::Result<(Self, Producer<Item>)> {
        let Common { zero, shared, loop_bell, publisher_bell, .. } = common;
        let (inlets, outlets, ends) = lanes();
        let (mail, letters) = Mail::new(Arc::clone(publisher_bell), Arc::clone(shared));
        let (jobs, whole_plans) = sync_channel(PLAN_JOBS);
        let (tune_jobs, tunes) = sync_channel(TUNE_JOBS);
        let drawn = (identity.boot, identity.seed);
        let outward = (outlets, Arc::clone(publisher_bell));
        let control = Loop::new(
            &site.settings,
            drawn,
            clock::now(),
            inlets,
            outward,
            outlet.another()?,
            Arc::clone(shared),
        )
        .map_err(|problems| anyhow!("the settings do not hold: {problems:?}"))?;
        let gains = tuning::gains_text(&checked.settings.law.gains);
        let law = tuning::told(&checked.settings.law.name, gains, &*checked.law, &*checked.vehicle);
        let summary =
            Summary::new(identity.boot, checked.vehicle.layout(), control.node().start_number(), law);
        let publisher = Publisher::new(
            ends.entries,
            letters,
            outlet.another()?,
            Arc::clone(shared),
            (site.net.ring_bytes, site.net.max_plan_bytes),
            (summary, Margins::new(checked.margin())),
        );
        let supervisor = Supervisor {
            limit: SpanNs::from_seconds(checked.params.stall_periods * checked.params.period_s()),
            zero: Arc::clone(zero),
            trips: ends.supervisor_trips,
            bell: Arc::clone(loop_bell),
            shared: Arc::clone(shared),
            tripped_at: None,
        };
        let worker = Worker {
            terms: checked.terms(),
            plans: ends.plans,
            waste: ends.waste,
            bell: Arc::clone(loop_bell),
            mail: mail.clone(),
            shared: Arc::clone(shared),
        };
        let law_worker = LawWorker {
            context: checked.context(),
            laws: ends.laws,
            bell: Arc::clone(loop_bell),
            shared: Arc::clone(shared),
        };
        let bell = Arc::clone(loop_bell);
        let (stream, orders, drives) = (ends.stream, ends.orders, ends.drives);
        let intake_ends = Ends { stream, orders, drives, jobs, tune_jobs, mail, bell };
        let intake =
            Intake::new(intake_ends, outlet, Arc::clone(zero), Arc::clone(shared), site.net.max_plan_bytes);
        let parts = Self { control, intake, publisher, worker, whole_plans, law_worker, tunes, supervisor };
        Ok((parts, ends.shutdown_trips))
    }
}
