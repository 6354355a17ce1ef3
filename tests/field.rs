//! Daemon and stand-in robot as processes of their own, on a straight line that does not end.

use crate::programs::{Running, free_address, scratch};
use fieldbook::client::Client;
use fieldbook::orders;
use std::net::SocketAddr;
use std::path::{Path, PathBuf};
use std::time::{Duration, Instant};
use trackhold_proto::blob::Digest;
use trackhold_proto::message::Start;
use trackhold_proto::words::{Mode, StartAt};

/// A long straight line: whatever a test does to the machine, it is on the way when it does.
pub const LONG_LINE: &str = r#"{"format":"trackhold-plan/1","id":"long-line","revision":1,
"start":{"x_m":0,"y_m":0,"heading_rad":0},"segments":[{"kind":"line","length_m":400,"speed_m_s":0.8}]}"#;

/// A site file of a test's own: another address, another rate.
fn site_file(folder: &Path, address: SocketAddr, rate_hz: u32) -> PathBuf {
    let text = format!(
        "[vehicle]\nkind = \"differential\"\nwheel_radius_m = 0.1\ntrack_width_m = 0.5\nmax_wheel_speed_rad_s = 12\n\
         max_wheel_accel_rad_s2 = 15\n[law]\nname = \"kanayama\"\n[node]\nrate_hz = {rate_hz}\npose_timeout_s = 0.5\n\
         command_validity_s = 0.25\n[net]\nlisten = \"{address}\"\n"
    );
    let path = folder.join("site.toml");
    std::fs::write(&path, text).expect("a scratch folder takes files");
    path
}

/// Daemon and stand-in robot as processes of their own.
pub struct Field {
    /// The daemon's address.
    pub address: SocketAddr,
    /// Its site file.
    pub site: PathBuf,
    /// A folder of the test's own.
    pub folder: PathBuf,
    /// The daemon.
    pub daemon: Running,
    /// The stand-in robot.
    pub robot: Running,
}

impl Field {
    /// Both, at a tick rate.
    pub fn new(test: &str, rate_hz: u32) -> Self {
        let (folder, address) = (scratch(test), free_address());
        let site = site_file(&folder, address, rate_hz);
        let daemon = start_daemon(&site);
        let (to, site_path) = (address.to_string(), site.display().to_string());
        let robot = Running::start("simrobot", &["--to", &to, "--site", &site_path]);
        Self { address, site, folder, daemon, robot }
    }

    /// An operator's session with the daemon.
    pub fn client(&self) -> Client {
        Client::connect_to(self.address).expect("a loopback address")
    }

    /// Loads the long line and starts; returns the start order that was accepted.
    pub fn drive_off(&self) -> Start {
        let mut client = self.client();
        if client.status().expect("the daemon answers").plan == Digest::NONE {
            let loaded = orders::send_plan(&mut client, LONG_LINE.as_bytes()).expect("the daemon answers");
            assert!(loaded.accepted(), "{loaded:?}");
        }
        let until = Instant::now() + Duration::from_secs(20);
        loop {
            let status = client.status().expect("the daemon answers");
            let answer = orders::start(&mut client, &status, status.plan, StartAt::Beginning, 0)
                .expect("the daemon answers");
            if answer.accepted() {
                let (boot, plan, start_number) = (status.boot, status.plan, status.start_number);
                return Start { boot, plan, start_number, at: StartAt::Beginning, plan_time_ns: 0 };
            }
            assert!(Instant::now() < until, "never started: {answer:?}");
            std::thread::sleep(Duration::from_millis(50));
        }
    }

    /// Waits until the daemon is in a mode.
    pub fn wait_for_mode(&self, mode: Mode) {
        let mut client = self.client();
        let until = Instant::now() + Duration::from_secs(20);
        while client.status().expect("the daemon answers").mode != mode {
            assert!(Instant::now() < until, "never {mode}");
            std::thread::sleep(Duration::from_millis(20));
        }
    }
}

/// Starts a daemon and waits until it listens.
pub fn start_daemon(site: &Path) -> Running {
    let daemon = Running::start("trackhold", &["run", "--config", &site.display().to_string()]);
    daemon.wait_for("listening on");
    daemon
}
