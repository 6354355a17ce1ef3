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
    // `-- plan` measures that part alone.
    let all = !std::env::args().any(|argument| argument == "plan");
    if all {
        quiet_loop();
    }
    println!(
        "\nlateness of a tick at 1 kHz while a plan of 60 MB arrives, against the same daemon without, µs"
    );
    lateness_with_plan("normal scheduling", None);
    lateness_with_plan("SCHED_FIFO 80, processor 1", Some((80, 1)));
    if all {
        stops_and_shares();
    }
}

fn quiet_loop() {
    println!(
        "lateness of a tick at 1 kHz against an absolute sleep of the same rate, {ROUNDS} rounds of 2 s each, µs"
    );
    lateness("normal scheduling", None);
    lateness("SCHED_FIFO 80, processor 1", Some((80, 1)));
}

fn stops_and_shares() {
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
        ring_bytes: 512 << 20,
        ..Net::default()
    };
    Daemon::start(Site { settings: settings(rate_hz), net }).expect("a daemon on loopback")
}

fn percentile(sorted: &[f64], share: f64) -> f64 {
    sorted[((sorted.len() - 1) as f64 * share).round() as usize]
}

/// Ticks from a daemon's journal while a long plan arrives, is checked, loaded and freed again, against ticks before.
fn lateness_with_plan(name: &str, privileges: Option<(i32, usize)>) {
    let plans = [long_plan(1), long_plan(2)];
    let daemon = daemon(1000.0, privileges);
    let mut planner = Client::connect_to(daemon.address()).expect("loopback");
    std::thread::sleep(Duration::from_millis(200));
    let (mut spans, mut quiet) = (Vec::new(), Vec::new());
    for raw in &plans {
        let begin = now_ns();
        std::thread::sleep(2 * ROUND);
        quiet.push(begin..now_ns());
        let begin = now_ns();
        let answer = orders::send_plan(&mut planner, raw).expect("an answer");
        assert!(answer.accepted(), "{}", answer.ack.text.as_str());
        println!(
            "    {} bytes in {:.2} s, {} rounds",
            raw.len(),
            answer.round_trip.as_secs_f64(),
            answer.sent
        );
        // The plan before is freed within the worker's next sweeps.
        std::thread::sleep(Duration::from_millis(500));
        spans.push(begin..now_ns());
    }
    let moments = recorded(&daemon, Duration::from_secs(20));
    daemon.stop().expect("a daemon that ends");
    let within = |spans: &[std::ops::Range<u64>]| -> Vec<f64> {
        let of = |span: &std::ops::Range<u64>| {
            let inside: Vec<u64> = moments.iter().copied().filter(|at| span.contains(at)).collect();
            late_us(&inside)
        };
        spans.iter().flat_map(of).collect()
    };
    report(name, within(&spans), within(&quiet));
}

/// Samples on a circle, 60 MB in the compact form.
fn long_plan(revision: u32) -> Vec<u8> {
    let (count, bytes) = (1_875_000_u32, 32);
    let mut raw = Vec::with_capacity(144 + bytes * count as usize);
    raw.extend_from_slice(b"TRKHPLN1");
    raw.extend_from_slice(&revision.to_le_bytes());
    raw.extend_from_slice(&[0; 4 + 4 * 8]);
    raw.extend_from_slice(&count.to_le_bytes());
    raw.extend_from_slice(&[0; 4]);
    raw.extend_from_slice(b"long");
    raw.resize(144, 0);
    for index in 0..count {
        let (t_s, turn) = (0.02 * f64::from(index), 0.02 * f64::from(index) / 50.0);
        for value in [t_s, 50.0 * turn.sin(), 50.0 - 50.0 * turn.cos(), turn] {
            raw.extend_from_slice(&value.to_le_bytes());
        }
    }
    raw
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
    let moments = recorded(&daemon, Duration::from_millis(500));
    daemon.stop().expect("a daemon that ends");
    moments.into_iter().filter(|at| *at < end).collect()
}

/// The moments of all ticks that a recording of so long gets from a daemon's journal.
fn recorded(daemon: &Daemon, seconds: Duration) -> Vec<u64> {
    let log = scratch("lateness").join("ticks.tracklog");
    let client = Client::connect_to(daemon.address()).expect("loopback");
    let recorder = Recorder::begin(client, &log, false).expect("a recording");
    let recording = recorder.record(&AtomicBool::new(false), Some(seconds), false).expect("a recording");
    assert_eq!(recording.lost, 0, "{:?}", recording.gaps);
    let ticks =
        LogReader::open(&log).expect("a log").filter_map(|entry| match entry.expect("an entry").body {
            Body::Tick(record) => Some(record.at_ns),
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
