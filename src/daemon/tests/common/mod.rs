//! A daemon on the loopback and those who speak with it.

use std::net::{SocketAddr, UdpSocket};
use std::time::{Duration, Instant};
use trackhold::site::Site;
use trackhold::{Daemon, clock};
use trackhold_core::digest;
use trackhold_proto::blob::{Blob, Digest};
use trackhold_proto::message::{
    Ack, Command, PlanPart, Pose, Start, Status, StatusRequest, Stop, Subscribe, WANT_COMMANDS, WANT_JOURNAL,
};
use trackhold_proto::words::{Mode, StartAt, StopKind};
use trackhold_proto::{Envelope, Message};

/// Nothing here takes longer, however busy the machine.
pub(crate) const PATIENCE: Duration = Duration::from_secs(5);

/// A quick differential machine at so many ticks a second, with more lines for its site file.
pub(crate) fn site(rate_hz: u32, more: &str) -> Site {
    let text = format!(
        "[vehicle]\nkind = \"differential\"\nwheel_radius_m = 0.1\ntrack_width_m = 0.5\n\
         max_wheel_speed_rad_s = 10\nmax_wheel_accel_rad_s2 = 20\n[law]\nname = \"kanayama\"\n\
         [net]\nlisten = \"127.0.0.1:0\"\n[node]\nrate_hz = {rate_hz}\n{more}"
    );
    Site::parse(&text, "test.toml").unwrap()
}

pub(crate) fn daemon(rate_hz: u32, more: &str) -> Daemon {
    Daemon::start(site(rate_hz, more)).unwrap()
}

/// A straight line of 50 m at 0.5 m/s.
pub(crate) const PLAN: &str = r#"{"format":"trackhold-plan/1","id":"straight","revision":1,
"start":{"x_m":0,"y_m":0,"heading_rad":0},"segments":[{"kind":"line","length_m":50,"speed_m_s":0.5}]}"#;

/// Bytes of a plan in a part: small, so that the short plan above has several.
const PART: usize = 100;

/// Someone with a socket and a session.
pub(crate) struct Client {
    pub(crate) socket: UdpSocket,
    session: u64,
    sequence: u64,
    to: SocketAddr,
}

impl Client {
    pub(crate) fn new(daemon: &Daemon, session: u64) -> Self {
        let socket = UdpSocket::bind("127.0.0.1:0").unwrap();
        socket.set_read_timeout(Some(Duration::from_millis(20))).unwrap();
        Self { socket, session, sequence: 0, to: daemon.address() }
    }

    /// Sends a message and returns its bytes.
    pub(crate) fn send(&mut self, message: Message) -> Vec<u8> {
        self.sequence += 1;
        let (session, sequence) = (self.session, self.sequence);
        let bytes = Envelope { session, sequence, stamp_ns: clock::now().0, message }.to_vec();
        self.send_bytes(&bytes);
        bytes
    }

    pub(crate) fn send_bytes(&self, bytes: &[u8]) {
        self.socket.send_to(bytes, self.to).unwrap();
    }

    /// What comes next, if anything does within a moment.
    pub(crate) fn receive(&self) -> Option<Envelope> {
        let mut bytes = [0; 9000];
        let length = self.socket.recv(&mut bytes).ok()?;
        Some(Envelope::decode(&bytes[..length]).or_else(|_| Envelope::from_json(&bytes[..length])).unwrap())
    }

    /// Waits for a message that `pick` takes.
    pub(crate) fn wait<T>(&self, what: &str, mut pick: impl FnMut(Message) -> Option<T>) -> T {
        let begun = Instant::now();
        while begun.elapsed() < PATIENCE {
            if let Some(found) = self.receive().and_then(|envelope| pick(envelope.message)) {
                return found;
            }
        }
        panic!("waited in vain for {what}");
    }

    pub(crate) fn subscribe(&mut self, want: u32) {
        self.send(Message::Subscribe(Subscribe { want, lease_ms: 30_000 }));
        let granted = self.wait("subscribed", |message| match message {
            Message::Subscribed(subscribed) => Some(subscribed.want),
            _ => None,
        });
        assert_eq!(granted, want);
    }

    pub(crate) fn status(&mut self) -> Status {
        self.send(Message::StatusRequest(StatusRequest {}));
        self.wait("status", |message| match message {
            Message::Status(status) => Some(status),
            _ => None,
        })
    }

    /// Asks for the status until it holds.
    pub(crate) fn status_that(&mut self, what: &str, holds: impl Fn(&Status) -> bool) -> Status {
        let begun = Instant::now();
        loop {
            let status = self.status();
            if holds(&status) {
                return status;
            }
            assert!(begun.elapsed() < PATIENCE, "waited in vain for {what}: {status:?}");
        }
    }

    pub(crate) fn ack(&self) -> Ack {
        self.wait("ack", |message| match message {
            Message::Ack(ack) => Some(ack),
            _ => None,
        })
    }

    pub(crate) fn command(&self) -> Command {
        self.wait("command", |message| match message {
            Message::Command(command) => Some(command),
            _ => None,
        })
    }

    pub(crate) fn pose(&mut self, x_m: f64) {
        let pose = Pose {
            measured_ns: clock::now().0,
            x_m,
            y_m: 0.0,
            heading_rad: 0.0,
            position_sd_m: 0.0,
            heading_sd_rad: 0.0,
        };
        self.send(Message::Pose(pose));
    }

    /// Sends a plan in parts, a little spread out, and returns its digest.
    pub(crate) fn send_plan(&mut self, plan: &str) -> Digest {
        let digest = digest::of_bytes(plan.as_bytes());
        for (part, bytes) in plan.as_bytes().chunks(PART).enumerate() {
            if part % 32 == 31 {
                std::thread::sleep(Duration::from_millis(1));
            }
            let (total_bytes, part_bytes) = (plan.len() as u32, PART as u32);
            let bytes = Blob::new(bytes).unwrap();
            self.send(Message::PlanPart(PlanPart {
                digest,
                total_bytes,
                part_bytes,
                part: part as u32,
                bytes,
            }));
        }
        digest
    }

    pub(crate) fn stop(&mut self, stop: StopKind) {
        self.send(Message::Stop(Stop { stop }));
    }

    /// Starts the plan loaded, and returns the order's bytes.
    pub(crate) fn start(&mut self) -> Vec<u8> {
        let Status { boot, plan, start_number, .. } = self.status();
        self.send(Message::Start(Start { boot, plan, start_number, at: StartAt::Beginning, plan_time_ns: 0 }))
    }
}

/// An estimator that sends the pose at the origin every 10 ms until it is killed or dropped, on a thread of its own.
pub(crate) struct Estimator {
    end: std::sync::mpsc::Sender<()>,
    thread: Option<std::thread::JoinHandle<()>>,
}

impl Estimator {
    pub(crate) fn new(daemon: &Daemon, session: u64) -> Self {
        let mut client = Client::new(daemon, session);
        let (end, ended) = std::sync::mpsc::channel();
        let thread = std::thread::spawn(move || {
            while ended.recv_timeout(Duration::from_millis(10))
                == Err(std::sync::mpsc::RecvTimeoutError::Timeout)
            {
                client.pose(0.0);
            }
        });
        Self { end, thread: Some(thread) }
    }

    /// Ends it; silent from here on.
    pub(crate) fn kill(mut self) {
        self.end.send(()).unwrap();
        self.thread.take().unwrap().join().unwrap();
    }
}

impl Drop for Estimator {
    fn drop(&mut self) {
        let _ = self.end.send(());
        if let Some(thread) = self.thread.take() {
            let _ = thread.join();
        }
    }
}

/// A daemon that tracks `PLAN`, with its estimator, an operator and a drive.
pub(crate) fn tracking(rate_hz: u32, more: &str) -> (Daemon, Estimator, Client, Client) {
    let daemon = daemon(rate_hz, more);
    let estimator = Estimator::new(&daemon, 1);
    let (mut operator, mut drive) = (Client::new(&daemon, 2), Client::new(&daemon, 3));
    drive.subscribe(WANT_COMMANDS);
    operator.send_plan(PLAN);
    let loaded = operator.ack();
    assert_eq!((loaded.accepted, loaded.text.as_str()), (1, ""));
    operator.status_that("a pose", |status| status.has_pose == 1);
    operator.start();
    let started = operator.ack();
    assert_eq!((started.accepted, started.text.as_str()), (1, ""));
    drive.wait("motion", |message| match message {
        Message::Command(command) => {
            (command.mode == Mode::Tracking && command.wheels[0] > 0.0).then_some(())
        }
        _ => None,
    });
    (daemon, estimator, operator, drive)
}

/// A recorder with everything from now on.
pub(crate) fn recorder(daemon: &Daemon) -> Client {
    let mut recorder = Client::new(daemon, 9);
    recorder.subscribe(WANT_JOURNAL);
    recorder
}
