//! A planner that plans anew ten times a second, with the real daemon on real sockets; the recording of it replays.

use fieldbook::client::Client;
use fieldbook::log::LogReader;
use fieldbook::record::Recorder;
use fieldbook::{orders, replay};
use std::net::SocketAddr;
use std::path::Path;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering::SeqCst};
use std::time::{Duration, Instant};
use trackhold::Daemon;
use trackhold::site::Site;
use trackhold_core::digest;
use trackhold_proto::Message;
use trackhold_proto::journal::{Body, flag};
use trackhold_proto::message::{Pose as PoseMessage, Status};
use trackhold_proto::words::{Mode, StartAt};
use trackhold_tests::programs::scratch;

/// A straight line from where the reference is at a plan time; behind the next metres each is another.
fn line_from(revision: u32, at_s: f64) -> String {
    let continues = if revision == 1 { String::new() } else { format!(r#""continues":{{"at_s":{at_s}}},"#) };
    let later = 0.3 + 0.01 * f64::from(revision % 20);
    format!(
        r#"{{"format":"trackhold-plan/1","id":"live","revision":{revision},"open":true,{continues}
        "start":{{"x_m":{},"y_m":0,"heading_rad":0}},"segments":[{{"kind":"line","length_m":0.5,"speed_m_s":0.5}},
        {{"kind":"line","length_m":1,"speed_m_s":0.5,"end_speed_m_s":{later}}}]}}"#,
        0.5 * at_s
    )
}

/// Sends the pose at the origin every 10 ms.
fn stand_still(to: SocketAddr, ended: &AtomicBool) {
    let mut client = Client::connect_to(to).expect("loopback");
    while !ended.load(SeqCst) {
        let sequence = client.next_sequence();
        let (heading_rad, position_sd_m, heading_sd_rad) = (0.0, 0.0, 0.0);
        let measured_ns = sequence * 10_000_000;
        let pose =
            PoseMessage { measured_ns, x_m: 0.0, y_m: 0.0, heading_rad, position_sd_m, heading_sd_rad };
        client.send(sequence, Message::Pose(pose));
        std::thread::sleep(Duration::from_millis(10));
    }
}

/// Plans anew ten times a second by what the status says, for so many plans; returns how many were accepted.
fn plan_anew(client: &mut Client, plans: u32) -> u32 {
    let mut accepted = 0;
    for revision in 2..2 + plans {
        std::thread::sleep(Duration::from_millis(100));
        let status = client.status().expect("a status");
        let at_s = (status.plan_time_ns as f64 * 1e-9 + 0.3).min(status.plan_duration_ns as f64 * 1e-9);
        let answer = orders::send_plan(client, line_from(revision, at_s).as_bytes()).expect("an answer");
        accepted += u32::from(answer.accepted());
    }
    accepted
}

#[test]
fn the_daemon_follows_a_planner_that_plans_anew_and_the_recording_replays() {
    const PLANS: u32 = 25;
    let site = "[vehicle]\nkind = \"differential\"\nwheel_radius_m = 0.1\ntrack_width_m = 0.5\nmax_wheel_speed_rad_s = 20\n\
                max_wheel_accel_rad_s2 = 40\n[law]\nname = \"kanayama\"\n[node]\nrate_hz = 200\npose_timeout_s = 2\n\
                [net]\nlisten = \"127.0.0.1:0\"\n";
    let daemon = Daemon::start(Site::parse(site, "test.toml").expect("a site")).expect("a daemon");
    let (to, ended) = (daemon.address(), Arc::new(AtomicBool::new(false)));
    let estimator = {
        let ended = Arc::clone(&ended);
        std::thread::spawn(move || stand_still(to, &ended))
    };
    let log = scratch("streaming").join("run.tracklog");
    let recorder =
        Recorder::begin(Client::connect_to(to).expect("loopback"), &log, false).expect("a recorder");
    let stop_recording = Arc::new(AtomicBool::new(false));
    let recording = {
        let stop = Arc::clone(&stop_recording);
        std::thread::spawn(move || recorder.record(&stop, None, false).expect("a recording"))
    };
    let mut client = Client::connect_to(to).expect("loopback");
    let first = line_from(1, 0.0);
    assert!(orders::send_plan(&mut client, first.as_bytes()).expect("an answer").accepted());
    wait_for(&mut client, "a pose", |status| status.has_pose == 1);
    let status = client.status().expect("a status");
    let started =
        orders::start(&mut client, &status, digest::of_bytes(first.as_bytes()), StartAt::Beginning, 0);
    assert!(started.expect("an answer").accepted());
    let accepted = plan_anew(&mut client, PLANS);
    assert!(accepted > PLANS - 5, "{accepted} of {PLANS}");
    // The planner falls silent: the last plan runs dry.
    let last = wait_for(&mut client, "a controlled stop", |status| status.mode == Mode::Standby);
    assert!(last.plan_revision > PLANS - 4, "{last:?}");
    ended.store(true, SeqCst);
    stop_recording.store(true, SeqCst);
    estimator.join().expect("a thread that ends");
    let recording = recording.join().expect("a thread that ends");
    daemon.stop().expect("a daemon that ends");
    assert_eq!(recording.lost, 0);
    check_recording(&log, accepted);
}

fn wait_for(client: &mut Client, what: &str, holds: impl Fn(&Status) -> bool) -> Status {
    let begun = Instant::now();
    loop {
        let status = client.status().expect("a status");
        if holds(&status) {
            return status;
        }
        assert!(begun.elapsed() < Duration::from_secs(20), "waited in vain for {what}: {status:?}");
        std::thread::sleep(Duration::from_millis(20));
    }
}

/// In every tick the reference is where it would be had there been one plan only, until it brakes.
fn check_recording(log: &Path, accepted: u32) {
    let (mut followed, mut loaded, mut braking) = (0, 0, false);
    for entry in LogReader::open(log).expect("a log") {
        match entry.expect("an entry").body {
            Body::PlanLoaded(_) => loaded += 1,
            Body::Tick(record) if record.mode == Mode::Tracking && record.has(flag::HAS_REFERENCE) => {
                let seconds = record.plan_time_ns as f64 * 1e-9;
                assert!(record.ref_x_m <= 0.5 * seconds + 1e-9, "{record:?}");
                // Behind a plan's first half metre its speed may change.
                braking |= (record.ref_x_m - 0.5 * seconds).abs() > 1e-9;
                assert!(!braking || loaded + 8 > accepted, "{record:?}");
                followed += 1;
            }
            _ => {}
        }
    }
    assert!(
        followed > 300 && loaded + 4 > accepted,
        "{followed} ticks, {loaded} plans followed of {accepted}"
    );
    let report = replay::replay_log(LogReader::open(log).expect("a log"), false).expect("a whole log");
    assert_eq!(report.difference, None);
}
