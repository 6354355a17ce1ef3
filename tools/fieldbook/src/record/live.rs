//! Recording the real daemon, over a bad link too; what was recorded replays identical.

use super::tests::Scratch;
use super::*;
use crate::client::fake::bad_link;
use crate::log::LogReader;
use crate::{orders, replay};
use std::net::{SocketAddr, UdpSocket};
use std::sync::Arc;
use std::thread;
use trackhold::Daemon;
use trackhold::site::Site;
use trackhold_proto::Message;
use trackhold_proto::message::Pose;
use trackhold_proto::words::{Mode, StopKind};

fn daemon(listen: SocketAddr, rate_hz: f64) -> Daemon {
    let text = format!(
        "[vehicle]\nkind = \"unicycle\"\nmax_speed_m_s = 1.5\nmax_turn_rate_rad_s = 1.0\nmax_accel_m_s2 = 1.0\n\
         max_turn_accel_rad_s2 = 2.0\n[law]\nname = \"kanayama\"\n[node]\nrate_hz = {rate_hz:?}\npose_lease_s = 0.2\n\
         planner_lease_s = 0.2\n[net]\nlisten = \"{listen}\"\n"
    );
    Daemon::start(Site::parse(&text, "test site").unwrap()).unwrap()
}

fn any_port() -> SocketAddr {
    "127.0.0.1:0".parse().unwrap()
}

/// A plan long enough to travel in several parts.
fn plan() -> Vec<u8> {
    let segments = vec![r#"{"kind":"line","length_m":1.0,"speed_m_s":0.5}"#; 100].join(",");
    format!(
        r#"{{"format":"trackhold-plan/1","id":"test row","revision":1,"open":false,"start":{{"x_m":0,"y_m":0,"heading_rad":0}},"segments":[{segments}]}}"#
    )
    .into_bytes()
}

/// Some life in the daemon: poses, a plan, an emergency stop, a reset.
fn exercise(client: &mut Client, seconds: f64) {
    let begun = Instant::now();
    assert!(orders::send_plan(client, &plan()).unwrap().accepted());
    while begun.elapsed().as_secs_f64() < seconds {
        let measured_ns = u64::try_from(begun.elapsed().as_nanos()).unwrap();
        let pose = Pose {
            measured_ns,
            x_m: 0.0,
            y_m: 0.0,
            heading_rad: 0.0,
            position_sd_m: 0.0,
            heading_sd_rad: 0.0,
        };
        let sequence = client.next_sequence();
        client.send(sequence, Message::Pose(pose));
        thread::sleep(Duration::from_millis(10));
    }
    assert!(orders::stop(client, StopKind::Emergency).unwrap().accepted());
    assert_eq!(client.status().unwrap().mode, Mode::EmergencyStop);
    assert!(orders::reset(client).unwrap().accepted());
}

fn record_in_background(recorder: Recorder) -> (Arc<AtomicBool>, thread::JoinHandle<Recording>) {
    let stop = Arc::new(AtomicBool::new(false));
    let told = Arc::clone(&stop);
    (stop, thread::spawn(move || recorder.record(&told, None, false).unwrap()))
}

#[test]
fn a_recording_over_a_bad_link_is_complete_and_replays_identical() {
    let daemon = daemon(any_port(), 500.0);
    let (link, operators_link) = (bad_link(daemon.address(), 0.2), bad_link(daemon.address(), 0.1));
    // Something to fetch from before the recording began.
    exercise(&mut Client::connect_to(daemon.address()).unwrap(), 0.5);
    let out = Scratch::new("live");
    let recorder = Recorder::begin(Client::connect_to(link.address()).unwrap(), &out.0, false).unwrap();
    let (stop, recording) = record_in_background(recorder);
    // One pose source and one planner at a time: the next ones wait for the leases to end.
    thread::sleep(Duration::from_millis(400));
    exercise(&mut Client::connect_to(operators_link.address()).unwrap(), 2.5);
    stop.store(true, Ordering::Relaxed);
    let recording = recording.join().unwrap();
    daemon.stop().unwrap();
    assert_eq!(recording.gaps, []);
    assert!(recording.tally.asked_again > 0);
    let report = replay::replay_log(LogReader::open(&out.0).unwrap(), false).unwrap();
    assert!(report.difference.is_none(), "{:?}", report.difference);
    assert!(report.ticks > 200 && report.complete);
}

#[test]
fn a_daemon_that_is_restarted_ends_the_log() {
    let listen = UdpSocket::bind("127.0.0.1:0").unwrap().local_addr().unwrap();
    let first = daemon(listen, 50.0);
    let out = Scratch::new("live-restart");
    let recorder = Recorder::begin(Client::connect_to(listen).unwrap(), &out.0, false).unwrap();
    let (_, recording) = record_in_background(recorder);
    thread::sleep(Duration::from_millis(400));
    first.stop().unwrap();
    let second = daemon(listen, 50.0);
    let recording = recording.join().unwrap();
    second.stop().unwrap();
    assert!(recording.other_boot.is_some());
    let report = replay::replay_log(LogReader::open(&out.0).unwrap(), false).unwrap();
    assert!(report.difference.is_none() && report.ticks > 10);
}
