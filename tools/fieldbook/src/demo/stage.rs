//! Everything that takes part in the demo, each on its own thread and with its own sockets.

use super::relay::Relay;
use super::scenario::Scenario;
use crate::client::Client;
use crate::record::{Recorder, Recording};
use anyhow::{Context, Result, bail};
use simrobot::machine::Setup;
use simrobot::{Control, LinkCounts, Options, StandIn, Summary, TruePoint};
use std::path::Path;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::thread::{self, JoinHandle};
use std::time::{Duration, Instant};
use trackhold::Daemon;
use trackhold_proto::message::Status;

/// Seeds of the links' faults.
const ON_BOARD_SEED: u64 = 21;
const RADIO_SEED: u64 = 31;
/// How long a drive listens to standby's zeros before the start: ten ticks of the demo's site.
const HEAR_ZERO: Duration = Duration::from_millis(200);
/// How long the machine may take until it is ready for orders.
const GET_READY: Duration = Duration::from_secs(5);

/// What the stand-in robot gives at its end.
type RobotRun = Result<(Summary, Vec<TruePoint>)>;

/// The running parts.
#[derive(Debug)]
pub(super) struct Stage {
    daemon: Daemon,
    client: Client,
    relay: Relay,
    control: Arc<Control>,
    robot: JoinHandle<RobotRun>,
    stop_recording: Arc<AtomicBool>,
    recorder: JoinHandle<Result<Recording>>,
}

/// What the parts have to tell when all is over.
#[derive(Debug)]
pub(super) struct Ended {
    /// The daemon's last status.
    pub(super) status: Status,
    /// What the stand-in robot did.
    pub(super) robot: Summary,
    /// Where it truly was, in order of time.
    pub(super) truth: Vec<TruePoint>,
    /// What was recorded.
    pub(super) recording: Recording,
    /// What the radio link did to datagrams from the daemon to the recorder.
    pub(super) radio: LinkCounts,
}

impl Stage {
    /// Starts daemon, recorder and robot, and waits until poses come and the drive listens.
    ///
    /// # Errors
    /// If one of them cannot start.
    pub(super) fn begin(scenario: &Scenario, log: &Path) -> Result<Self> {
        let daemon = Daemon::start(scenario.site.clone()).context("the daemon does not start")?;
        let address = daemon.address();
        let relay = Relay::begin(address, scenario.radio_link(), RADIO_SEED)?;
        let stop_recording = Arc::new(AtomicBool::new(false));
        let recorder = spawn("recorder", {
            let begun = Recorder::begin(Client::connect_to(relay.address())?, log, false)?;
            let stop = Arc::clone(&stop_recording);
            move || begun.record(&stop, None, false)
        })?;
        let control = Arc::new(Control::default());
        let robot = spawn("robot", {
            let stand_in = StandIn::bind(Options { daemon: address, setup: setup(scenario), seconds: None })?;
            let control = Arc::clone(&control);
            move || {
                let mut truth = Vec::new();
                let summary = stand_in.run(&control, &mut |point, _| truth.push(*point))?;
                Ok((summary, truth))
            }
        })?;
        let client = Client::connect_to(address)?;
        let mut stage = Self { daemon, client, relay, control, robot, stop_recording, recorder };
        stage.await_ready()?;
        Ok(stage)
    }

    fn await_ready(&mut self) -> Result<()> {
        let begun = Instant::now();
        while begun.elapsed() < GET_READY {
            let status = self.client.status()?;
            if status.has_pose == 1 && status.command_subscribers > 0 {
                // A drive begins a session with a zero only; on a lossy link it is given a few to hear one.
                thread::sleep(HEAR_ZERO);
                return Ok(());
            }
            thread::sleep(Duration::from_millis(50));
        }
        bail!("no pose came or no drive listened within {} s", GET_READY.as_secs())
    }

    /// The operator's client.
    pub(super) fn operator(&mut self) -> &mut Client {
        &mut self.client
    }

    /// Ends all parts, the daemon last.
    ///
    /// # Errors
    /// If one of them failed.
    pub(super) fn end(mut self) -> Result<Ended> {
        let status = self.client.status()?;
        self.stop_recording.store(true, Ordering::Relaxed);
        let recording = joined(self.recorder, "the recorder")?;
        self.control.stop();
        let (robot, truth) = joined(self.robot, "the stand-in robot")?;
        let [_, radio] = self.relay.end()?;
        self.daemon.stop().context("the daemon does not end in order")?;
        Ok(Ended { status, robot, truth, recording, radio })
    }
}

fn setup(scenario: &Scenario) -> Setup {
    Setup {
        vehicle: Arc::clone(&scenario.vehicle),
        mount: scenario.mount,
        robot: scenario.robot.clone(),
        start: scenario.start(),
        link: scenario.on_board_link(),
        link_seed: ON_BOARD_SEED,
    }
}

fn spawn<T: Send + 'static>(name: &str, work: impl FnOnce() -> T + Send + 'static) -> Result<JoinHandle<T>> {
    let thread = thread::Builder::new().name(name.to_string());
    thread.spawn(work).with_context(|| format!("the system gives no thread for the {name}"))
}

fn joined<T>(thread: JoinHandle<Result<T>>, who: &str) -> Result<T> {
    match thread.join() {
        Ok(result) => result.with_context(|| format!("{who} failed")),
        Err(_) => bail!("{who} broke off; this is a mistake in this program, its text stands above"),
    }
}
