//! The daemon on loopback, each figure beside a baseline measured in the same run: how late its ticks are beside a bare
//! absolute sleep, how fast a stop puts zero on the wire beside a bare UDP echo, and its share of a processor.
//!
//! Rounds of daemon and baseline alternate, so that whatever else the machine does falls on both.

use fieldbook::client::Client;
use fieldbook::log::LogReader;
use fieldbook::orders;
use fieldbook::record::Recorder;
use nix::sys::time::TimeSpec;
use nix::time::{ClockId, ClockNanosleepFlags, clock_gettime, clock_nanosleep};
use std::net::{SocketAddr, UdpSocket};
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering::SeqCst};
use std::time::{Duration, Instant};
use trackhold::site::{Net, Site};
use trackhold::{Daemon, realtime};
use trackhold_core::keys::Values;
use trackhold_core::settings::{LawSettings, Settings, VehicleSettings};
use trackhold_proto::Envelope;
use trackhold_proto::journal::Body;
use trackhold_proto::message::{Message, Pose, Stop};
use trackhold_proto::words::{Mode, StopKind};
use trackhold_tests::drive::DriveSocket;
use trackhold_tests::programs::{Running, free_address, scratch};

const ROUNDS: usize = 6;
const ROUND: Duration = Duration::from_secs(2);
const PERIOD_NS: u64 = 1_000_000;
/// Silence before a measured exchange, of stop and echo alike: both come out of the blue.
const SILENCE: Duration = Duration::from_millis(5);

fn main() {
    println!(
        "lateness of a tick at 1 kHz against an absolute sleep of the same rate, {ROUNDS} rounds of 2 s each, µs"
    );
    lateness("normal scheduling", None);
    lateness("SCHED_FIFO 80, processor 1", Some((80, 1)));
    println!("\nstop to zero at 10 Hz against a UDP echo, µs");
    stop_to_zero();
    println!("\nshare of one processor, with 50 poses a second and a drive");
    for rate_hz in [100, 1000] {
        println!("  {rate_hz:>4} Hz: {:.2} %", 100.0 * processor_share(rate_hz));
    }
}

fn settings(rate_hz: f64) -> Settings {
    let mut vehicle = Values::default();
    for (key, value) in [
        ("wheel_radius_m", 0.1),
        ("track_width_m", 0.5),
        ("max_wheel_speed_rad_s", 12.0),
        ("max_wheel_accel_rad_s2", 15.0),
    ] {
        vehicle.set(key, value);
    }
    let mut node = Values::default();
    node.set("rate_hz", rate_hz);
    node.set("command_validity_s", 0.5);
    let settings = Settings {
        vehicle: VehicleSettings { kind: "differential".into(), values: vehicle },
        law: LawSettings { name: "kanayama".into(), gains: Values::default() },
        node,
        ..Settings::default()
    };
    settings.checked().expect("settings hold").settings
}

fn daemon(rate_hz: f64, privileges: Option<(i32, usize)>) -> Daemon {
    let net = Net {
        listen: "127.0.0.1:0".parse().expect("an address"),
        realtime_priority: privileges.map(|(priority, _)| priority),
        cpu: privileges.map(|(_, cpu)| cpu),
        ..Net::default()
    };
    Daemon::start(Site { settings: settings(rate_hz), net }).expect("a daemon on loopback")
}

fn percentile(sorted: &[f64], share: f64) -> f64 {
    sorted[((sorted.len() - 1) as f64 * share).round() as usize]
}

fn report(name: &str, mut ours: Vec<f64>, mut baseline: Vec<f64>) {
    for values in [&mut ours, &mut baseline] {
        values.sort_by(f64::total_cmp);
    }
    println!("  {name}: {} and {} samples", ours.len(), baseline.len());
    for (label, share) in [("p50", 0.5), ("p99", 0.99), ("p99.9", 0.999), ("max", 1.0)] {
        let (our, base) = (percentile(&ours, share), percentile(&baseline, share));
        println!("    {label:>5}: daemon {our:9.1}   baseline {base:9.1}   ratio {:.2}", our / base);
    }
}

/// How late moments are on a grid of whole milliseconds of the clock, µs. A moment that comes periods late counts against
/// the first period missed, and what follows it against the grid from there.
fn late_us(moments: &[u64]) -> Vec<f64> {
    let mut due = moments[0] - moments[0] % PERIOD_NS;
    let late = moments.iter().map(|at| {
        let late = at - due;
        due += PERIOD_NS * (late / PERIOD_NS + 1);
        late as f64 * 1e-3
    });
    late.collect()
}

fn lateness(name: &str, privileges: Option<(i32, usize)>) {
    let (mut ours, mut baseline) = (Vec::new(), Vec::new());
    for _ in 0..ROUNDS {
        ours.extend(late_us(&daemon_moments(privileges)));
        baseline.extend(late_us(&bare_moments(privileges)));
    }
    report(name, ours, baseline);
}

/// When a daemon's ticks were, from its journal; fetched after the measured time, so that fetching disturbs nothing.
fn daemon_moments(privileges: Option<(i32, usize)>) -> Vec<u64> {
    let daemon = daemon(1000.0, privileges);
    std::thread::sleep(ROUND);
    let end = now_ns();
    let log = scratch("lateness").join("ticks.tracklog");
    let client = Client::connect_to(daemon.address()).expect("loopback");
    let recorder = Recorder::begin(client, &log, false).expect("a recording");
    recorder.record(&AtomicBool::new(false), Some(Duration::from_millis(500)), false).expect("a recording");
    daemon.stop().expect("a daemon that ends");
    let ticks =
        LogReader::open(&log).expect("a log").filter_map(|entry| match entry.expect("an entry").body {
            Body::Tick(record) if record.at_ns < end => Some(record.at_ns),
            _ => None,
        });
    ticks.collect()
}

fn bare_moments(privileges: Option<(i32, usize)>) -> Vec<u64> {
    let sleeper = std::thread::spawn(move || {
        if let Some((priority, cpu)) = privileges {
            for refused in [realtime::fifo(priority).err(), realtime::pin(cpu).err()].into_iter().flatten() {
                println!("    not granted: {refused}");
            }
        }
        let mut moments = Vec::with_capacity(1 + (ROUND.as_nanos() as u64 / PERIOD_NS) as usize);
        let end = now_ns() + ROUND.as_nanos() as u64;
        while now_ns() < end {
            // The next whole period: those that were missed are left out, as the daemon does.
            let due = (now_ns() / PERIOD_NS + 1) * PERIOD_NS;
            let due = TimeSpec::new((due / 1_000_000_000) as i64, (due % 1_000_000_000) as i64);
            let _ = clock_nanosleep(ClockId::CLOCK_MONOTONIC, ClockNanosleepFlags::TIMER_ABSTIME, &due);
            moments.push(now_ns());
        }
        moments
    });
    sleeper.join().expect("a thread that ends")
}

fn now_ns() -> u64 {
    let now = clock_gettime(ClockId::CLOCK_MONOTONIC).expect("the monotonic clock");
    now.tv_sec() as u64 * 1_000_000_000 + now.tv_nsec() as u64
}

fn stop_to_zero() {
    let daemon = daemon(10.0, None);
    let mut drive = DriveSocket::subscribe(daemon.address());
    drive.wait_for("comes", |_| true);
    let echo = echo_server();
    let (mut ours, mut baseline) = (Vec::new(), Vec::new());
    let socket = UdpSocket::bind("127.0.0.1:0").expect("a loopback port");
    let mut operator = Client::connect_to(daemon.address()).expect("loopback");
    for trial in 0..1500_u64 {
        assert!(orders::reset(&mut operator).expect("an answer").accepted());
        while drive.next(SILENCE).is_some() {}
        let stop = Message::Stop(Stop { stop: StopKind::Emergency });
        let datagram = Envelope { session: 4, sequence: trial, stamp_ns: 0, message: stop }.to_vec();
        let begin = Instant::now();
        socket.send_to(&datagram, daemon.address()).expect("loopback");
        let zero = drive.wait_for("stops", |command| command.mode == Mode::EmergencyStop);
        ours.push(zero.at.duration_since(begin).as_secs_f64() * 1e6);
        baseline.push(echo_us(echo, &datagram));
    }
    report("stop", ours, baseline);
    daemon.stop().expect("a daemon that ends");
}

/// Sends back what comes.
fn echo_server() -> SocketAddr {
    let server = UdpSocket::bind("127.0.0.1:0").expect("a loopback port");
    let address = server.local_addr().expect("a bound socket");
    std::thread::spawn(move || {
        let mut datagram = [0; 1200];
        while let Ok((length, from)) = server.recv_from(&mut datagram) {
            let _ = server.send_to(&datagram[..length], from);
        }
    });
    address
}

fn echo_us(server: SocketAddr, datagram: &[u8]) -> f64 {
    thread_local!(static SOCKET: UdpSocket = UdpSocket::bind("127.0.0.1:0").expect("a loopback port"));
    SOCKET.with(|socket| {
        let mut answer = [0; 1200];
        socket.set_read_timeout(Some(Duration::from_millis(500))).expect("a timeout");
        std::thread::sleep(SILENCE);
        let begin = Instant::now();
        socket.send_to(datagram, server).expect("loopback");
        socket.recv(&mut answer).expect("an echo");
        begin.elapsed().as_secs_f64() * 1e6
    })
}

/// Processor time over time of a daemon process.
fn processor_share(rate_hz: u32) -> f64 {
    let (folder, address) = (scratch("share"), free_address());
    let site = folder.join("site.toml");
    let text = format!(
        "[vehicle]\nkind = \"differential\"\nwheel_radius_m = 0.1\ntrack_width_m = 0.5\nmax_wheel_speed_rad_s = 12\n\
         max_wheel_accel_rad_s2 = 15\n[law]\nname = \"kanayama\"\n[node]\nrate_hz = {rate_hz}\n[net]\nlisten = \"{address}\"\n"
    );
    std::fs::write(&site, text).expect("a site file");
    let running = Running::start("trackhold", &["run", "--config", &site.display().to_string()]);
    running.wait_for("listening on");
    let ended = Arc::new(AtomicBool::new(false));
    let estimator = {
        let ended = Arc::clone(&ended);
        std::thread::spawn(move || send_poses(address, &ended))
    };
    let mut drive = DriveSocket::subscribe(address);
    drive.wait_for("comes", |_| true);
    let (begin, used) = (Instant::now(), processor_seconds(running.id()));
    while begin.elapsed() < Duration::from_secs(5) {
        drive.next(Duration::from_millis(100));
    }
    let share = (processor_seconds(running.id()) - used) / begin.elapsed().as_secs_f64();
    ended.store(true, SeqCst);
    estimator.join().expect("a thread that ends");
    share
}

fn send_poses(to: SocketAddr, ended: &AtomicBool) {
    let socket = UdpSocket::bind("127.0.0.1:0").expect("a loopback port");
    for sequence in 1.. {
        if ended.load(SeqCst) {
            return;
        }
        let pose = Pose {
            measured_ns: now_ns(),
            x_m: 0.0,
            y_m: 0.0,
            heading_rad: 0.0,
            position_sd_m: 0.0,
            heading_sd_rad: 0.0,
        };
        let envelope = Envelope { session: 8, sequence, stamp_ns: now_ns(), message: Message::Pose(pose) };
        let _ = socket.send_to(&envelope.to_vec(), to);
        std::thread::sleep(Duration::from_millis(20));
    }
}

/// User and system time of a process, s; its clock ticks a hundred times a second on Linux.
fn processor_seconds(id: u32) -> f64 {
    let stat = std::fs::read_to_string(format!("/proc/{id}/stat")).expect("a running process");
    let fields: Vec<&str> = stat.rsplit(')').next().unwrap_or_default().split_whitespace().collect();
    (fields[11].parse::<f64>().unwrap_or(0.0) + fields[12].parse::<f64>().unwrap_or(0.0)) / 100.0
}
