//! The daemon: its threads, started and ended.
//!
//! | thread | does | may wait for |
//! | --- | --- | --- |
//! | control | the node, on its grid of ticks | its timer and its bell |
//! | intake | receives, decodes, routes; zero past the loop on an emergency stop | the socket |
//! | plan worker | digests and compiles plans; frees what the loop is done with | jobs, room in its queue |
//! | law worker | builds laws | jobs, room in its queue |
//! | supervisor | zero past the loop when ticks are missing | time |
//! | publisher | journal, outcomes, status | entries, letters |

use crate::assembly::{Common, Identity, Parts, listen};
use crate::gate::Source;
use crate::lanes::Item;
use crate::site::{Net, Site};
use crate::{control, realtime};
use anyhow::{Context, anyhow};
use rtrb::Producer;
use std::net::SocketAddr;
use std::sync::Arc;
use std::sync::atomic::Ordering::SeqCst;
use std::thread::JoinHandle;
use std::time::{Duration, Instant};
use tokio::runtime;
use tokio::sync::Notify;
use trackhold_core::node::Event;
use trackhold_proto::blob::{BootId, Text};
use trackhold_proto::journal::{Note, TripEvent};
use trackhold_proto::words::{Cause, Mode};

/// A thread that has not ended after this long is given up.
const PATIENCE: Duration = Duration::from_secs(2);

/// What the log says at every start.
const CAUTION: &str = "A network stop is a request, not a safety function: emergency stop devices, risk assessment, \
                       local codes and competent persons come first.";

/// A running daemon. Dropping it ends it like [`Daemon::stop`], but without telling what went wrong.
#[derive(Debug)]
pub struct Daemon {
    address: SocketAddr,
    boot: BootId,
    common: Common,
    trips: Producer<Item>,
    end_intake: Arc<Notify>,
    control: Option<JoinHandle<()>>,
    intake: Option<JoinHandle<()>>,
    others: Vec<JoinHandle<()>>,
}

impl Daemon {
    /// Starts a daemon in standby.
    ///
    /// # Errors
    /// If the settings do not hold, the address cannot be listened on, or the system gives no threads.
    pub fn start(site: Site) -> anyhow::Result<Self> {
        let checked = site.checked()?;
        let identity = Identity::draw()?;
        let (outlet, address) = listen(site.net.listen, identity.boot)?;
        let common = Common::new(&checked, &outlet)?;
        let (rate_hz, settings) = (checked.params.rate_hz, &site.settings);
        tracing::info!(
            "listening on {address}; vehicle {}, law {}, {rate_hz} Hz; boot {}",
            settings.vehicle.kind,
            settings.law.name,
            identity.boot
        );
        tracing::info!("{CAUTION}");
        if let Some(warning) = checked.margin().warning(&settings.law.name) {
            tracing::warn!("{warning}");
        }
        let (parts, trips) = Parts::new(&site, checked, identity, outlet, &common)?;
        let mut daemon = Self {
            address,
            boot: identity.boot,
            common,
            trips,
            end_intake: Arc::new(Notify::new()),
            control: None,
            intake: None,
            others: Vec::new(),
        };
        // If one does not start, dropping the daemon ends those that did.
        daemon.start_threads(parts, &site.net).context("a thread could not be started")?;
        Ok(daemon)
    }

    /// Where it listens; the port is the one chosen by the system if the site file says 0.
    pub fn address(&self) -> SocketAddr {
        self.address
    }

    /// Its boot identity.
    pub fn boot(&self) -> BootId {
        self.boot
    }

    /// The first thread that panicked or failed, if any; zero is on the wire then, and no command will come any more.
    pub fn failure(&self) -> Option<String> {
        self.common.failures.first()
    }

    /// Makes a panic of any thread of this process send zero and then abort the process.
    pub fn abort_on_panic(&self) {
        crate::guard::abort_on_panic(Arc::clone(&self.common.zero));
    }

    /// Ends it: zero out at once, the trip journaled, what recorders wait for sent, threads joined.
    ///
    /// # Errors
    /// If a thread had failed before, or does not end.
    pub fn stop(mut self) -> anyhow::Result<()> {
        self.end()
    }

    fn start_threads(&mut self, parts: Parts, net: &Net) -> std::io::Result<()> {
        let Parts { control, intake, publisher, worker, whole_plans, law_worker, tunes, supervisor } = parts;
        let (common, net) = (self.common.clone(), net.clone());
        let priority = net.realtime_priority;
        let bell = Arc::clone(&common.publisher_bell);
        self.others.push(common.spawn("publisher", move || publisher.run(&bell))?);
        self.others.push(common.spawn("plan worker", move || {
            worker.run(&whole_plans);
            Ok(())
        })?);
        self.others.push(common.spawn("law worker", move || {
            law_worker.run(&tunes);
            Ok(())
        })?);
        let end = Arc::clone(&self.end_intake);
        self.intake = Some(common.spawn("intake", move || {
            // A stop comes in here: just below the loop.
            ask_priority("intake", priority.map(|priority| (priority - 1).max(1)));
            block_on(async { intake.run(&end).await })
        })?);
        self.others.push(common.spawn("supervisor", move || {
            // Above the loop: one that never lets go of its processor is just what it watches for.
            ask_priority("supervisor", priority.map(|priority| priority + 1));
            supervisor.run();
            Ok(())
        })?);
        // The last one: memory locked by it includes what the others have begun with.
        let bell = Arc::clone(&common.loop_bell);
        self.control = Some(common.spawn("control", move || {
            let mut control = control;
            for refusal in ask_privileges(&net) {
                control.take(
                    crate::clock::now(),
                    Event::Note(Note::Refused { text: Text::cut(&refusal) }),
                    None,
                );
            }
            control::run(control, &bell)
        })?);
        Ok(())
    }

    fn end(&mut self) -> anyhow::Result<()> {
        let Common { zero, shared, loop_bell, publisher_bell, failures } = &self.common;
        if shared.shell_ends.load(SeqCst) {
            return Ok(());
        }
        let ticket = zero.trip(Source::Shutdown, Mode::ProtectiveStop);
        let event = Event::Trip(TripEvent { cause: Cause::Shutdown });
        // The queue is this function's alone, so that it has room.
        drop(self.trips.push(Item { event, ticket: Some(ticket) }));
        shared.loop_ends.store(true, SeqCst);
        loop_bell.ring();
        let control_ended = self.control.take().is_none_or(wait_for);
        self.end_intake.notify_one();
        let intake_ended = self.intake.take().is_none_or(wait_for);
        shared.shell_ends.store(true, SeqCst);
        publisher_bell.ring();
        let others_ended = self.others.drain(..).map(wait_for).filter(|ended| !ended).count() == 0;
        if let Some(what) = failures.first() {
            return Err(anyhow!(what));
        }
        if !(control_ended && intake_ended && others_ended) {
            return Err(anyhow!("a thread did not end within {} s; zero was sent", PATIENCE.as_secs()));
        }
        Ok(())
    }
}

impl Drop for Daemon {
    fn drop(&mut self) {
        if let Err(error) = self.end() {
            tracing::error!("{error:#}");
        }
    }
}

/// Joins a thread; false if it does not end.
fn wait_for(thread: JoinHandle<()>) -> bool {
    let begun = Instant::now();
    while !thread.is_finished() {
        if begun.elapsed() > PATIENCE {
            return false;
        }
        std::thread::sleep(Duration::from_millis(1));
    }
    thread.join().is_ok()
}

fn block_on(body: impl Future<Output = std::io::Result<()>>) -> std::io::Result<()> {
    runtime::Builder::new_current_thread().enable_io().enable_time().build()?.block_on(body)
}

/// Asks for what the site file wants for the loop, and returns what was refused.
fn ask_privileges(net: &Net) -> Vec<String> {
    let memory = net.lock_memory.then(realtime::lock_memory);
    let asked = [net.cpu.map(realtime::pin), net.realtime_priority.map(realtime::fifo), memory];
    asked.into_iter().flatten().filter_map(Result::err).collect()
}

/// The loop's own refusal is journaled; that of the threads beside it is logged.
fn ask_priority(name: &str, priority: Option<i32>) {
    if let Some(Err(refusal)) = priority.map(realtime::fifo) {
        tracing::warn!("{name} thread: {refusal}");
    }
}
