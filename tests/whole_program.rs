//! Real processes on loopback: what a user starts, kills, stops and records.

use fieldbook::client::{Client, Pace};
use fieldbook::{orders, replay};
use simrobot::drive::Drive;
use std::path::Path;
use std::sync::Arc;
use std::time::{Duration, Instant};
use trackhold::site::Site;
use trackhold_core::time::{SpanNs, TimeNs};
use trackhold_core::vehicle::Vehicle;
use trackhold_proto::message::Message;
use trackhold_proto::words::{Mode, StopKind};
use trackhold_tests::drive::DriveSocket;
use trackhold_tests::field::{Field, LONG_LINE, start_daemon};
use trackhold_tests::programs::{Running, run, scratch, stdout, told};

fn moves(command: &trackhold_proto::message::Command) -> bool {
    command.wheels[0] > 1.0
}

#[test]
fn a_killed_daemon_leaves_the_drive_at_zero_when_validity_ends() {
    let mut field = Field::new("kill-9", 50);
    let mut wire = DriveSocket::subscribe(field.address);
    let vehicle: Arc<dyn Vehicle> = Site::load(&field.site).unwrap().settings.checked().unwrap().vehicle;
    let mut drive = Drive::new(vehicle, SpanNs(1_000_000_000));
    let epoch = Instant::now();
    let at = |instant: Instant| TimeNs(u64::try_from(instant.duration_since(epoch).as_nanos()).unwrap());
    // A drive begins a session with a zero only.
    let zero = wire.wait_for("stands by", |command| command.mode == Mode::Standby);
    drive.on_command(at(zero.at), zero.session, zero.sequence, &zero.command);
    field.drive_off();
    let mut last = epoch;
    let mut killed = None;
    while let Some(received) = wire.next(Duration::from_millis(400)) {
        drive.on_command(at(received.at), received.session, received.sequence, &received.command);
        last = received.at;
        if killed.is_none() && moves(&received.command) {
            field.daemon.kill();
            killed = Some(Instant::now());
        }
    }
    assert!(killed.is_some(), "it moved");
    let valid = Duration::from_millis(250);
    assert!(drive.output(at(last + valid - Duration::from_millis(1))).wheels[0] > 1.0, "still valid");
    assert_eq!(drive.output(at(last + valid)).wheels, [0.0; 4]);
    assert!(last <= killed.unwrap() + Duration::from_millis(50), "nothing comes from a killed daemon");
}

#[test]
fn a_killed_estimator_stops_the_machine_and_only_a_reset_and_a_start_move_it_again() {
    let mut field = Field::new("estimator", 50);
    let mut wire = DriveSocket::subscribe(field.address);
    field.drive_off();
    wire.wait_for("moves", moves);
    field.robot.kill();
    let killed = Instant::now();
    let stopped = wire.wait_for("is a protective stop", |command| command.mode == Mode::ProtectiveStop);
    assert_eq!(stopped.command.wheels, [0.0; 4]);
    // Pose timeout and one tick by the daemon's clock; the rest is this test's own scheduling.
    let took = stopped.at.duration_since(killed);
    assert!(took < Duration::from_millis(500 + 20 + 400), "{took:?}");
    let refused = orders::reset(&mut field.client()).unwrap();
    assert!(!refused.accepted() && refused.ack.text.as_str().contains("stale-pose"), "{refused:?}");
    let (to, site) = (field.address.to_string(), field.site.display().to_string());
    field.robot = Running::start("simrobot", &["--to", &to, "--site", &site]);
    let until = Instant::now() + Duration::from_secs(20);
    while !orders::reset(&mut field.client()).unwrap().accepted() {
        assert!(Instant::now() < until, "the estimator is back, a reset must pass");
        std::thread::sleep(Duration::from_millis(100));
    }
    field.wait_for_mode(Mode::Standby);
    for _ in 0..25 {
        let received = wire.next(Duration::from_secs(1)).unwrap();
        assert_eq!(received.command.wheels, [0.0; 4], "a reset moves nothing");
    }
}

#[test]
fn an_emergency_stop_does_not_wait_for_a_tick_at_ten_hertz() {
    let field = Field::new("ten-hertz", 10);
    let mut wire = DriveSocket::subscribe(field.address);
    let mut client = field.client();
    let mut sooner = 0;
    for trial in 0..8 {
        field.drive_off();
        let tick = wire.wait_for("moves", moves);
        // At a phase of its own between two ticks, 100 ms apart.
        std::thread::sleep(Duration::from_millis(5 + 7 * trial));
        let stop = std::thread::spawn({
            let address = field.address;
            move || orders::stop(&mut Client::connect_to(address).unwrap(), StopKind::Emergency).unwrap()
        });
        let zero = wire.wait_for("is an emergency stop", |command| command.mode == Mode::EmergencyStop);
        assert_eq!(zero.command.wheels, [0.0; 4]);
        sooner += u32::from(zero.at.duration_since(tick.at) < Duration::from_millis(90));
        assert!(stop.join().unwrap().accepted());
        assert!(orders::reset(&mut client).unwrap().accepted());
        field.wait_for_mode(Mode::Standby);
    }
    assert!(sooner >= 6, "zero came before the next tick was due in {sooner} of 8 trials");
}

#[test]
fn a_start_recorded_before_a_restart_or_delayed_past_a_stop_moves_nothing() {
    let mut field = Field::new("recorded-start", 50);
    let mut wire = DriveSocket::subscribe(field.address);
    let recorded = field.drive_off();
    wire.wait_for("moves", moves);
    assert!(orders::stop(&mut field.client(), StopKind::Emergency).unwrap().accepted());
    assert!(orders::reset(&mut field.client()).unwrap().accepted());
    let again = |field: &Field| field.client().order(Message::Start(recorded), Pace::ORDER).unwrap();
    let delayed = again(&field);
    assert!(!delayed.accepted() && delayed.ack.text.as_str().contains("start number"), "{delayed:?}");
    field.daemon.kill();
    field.daemon = start_daemon(&field.site);
    assert!(orders::send_plan(&mut field.client(), LONG_LINE.as_bytes()).unwrap().accepted());
    let restarted = again(&field);
    assert!(!restarted.accepted() && restarted.ack.text.as_str().contains("another boot"), "{restarted:?}");
    let until = Instant::now() + Duration::from_millis(500);
    while Instant::now() < until {
        if let Some(received) = wire.next(Duration::from_millis(100)) {
            assert_eq!(received.command.wheels, [0.0; 4]);
        }
    }
}

#[test]
fn bad_input_of_every_kind_is_refused_with_its_reason_and_changes_nothing() {
    let field = Field::new("bad-input", 50);
    field.drive_off();
    field.wait_for_mode(Mode::Tracking);
    let before = field.client().status().unwrap();
    let socket = std::net::UdpSocket::bind("127.0.0.1:0").unwrap();
    let pose = |x: &str| {
        format!(
            r#"{{"kind":"pose","session":1,"sequence":1,"stamp_ns":0,"measured_ns":1,"x_m":{x},"y_m":0,"heading_rad":0}}"#
        )
    };
    let bad: [Vec<u8>; 6] = [
        b"no datagram at all".to_vec(),
        vec![0xA7; 60],
        vec![b'{'; 1300],
        pose("\"far\"").into_bytes(),
        pose("1e999").into_bytes(),
        pose("0,\"z_m\":1").into_bytes(),
    ];
    for datagram in &bad {
        socket.send_to(datagram, field.address).unwrap();
    }
    // Well formed, but from a second estimator.
    socket.send_to(pose("50").as_bytes(), field.address).unwrap();
    let until = Instant::now() + Duration::from_secs(10);
    let after = loop {
        let status = field.client().status().unwrap();
        if status.counters.malformed >= 6 && status.counters.poses_refused >= 1 {
            break status;
        }
        assert!(Instant::now() < until, "{:?}", status.counters);
        std::thread::sleep(Duration::from_millis(20));
    };
    assert_eq!((after.counters.malformed, after.counters.poses_refused), (6, 1));
    assert_eq!(
        (after.mode, after.plan, after.start_number),
        (Mode::Tracking, before.plan, before.start_number)
    );
    let refused = orders::send_plan(&mut field.client(), LONG_LINE.replace("0.8", "8").as_bytes()).unwrap();
    assert!(!refused.accepted(), "{refused:?}");
    assert_eq!(field.client().status().unwrap().plan, before.plan);
    for (text, expected) in [
        ("[vehicle]\nkind = \"hovercraft\"\n[law]\nname = \"kanayama\"\n", "differential"),
        ("[vehicle]\nkind = \"unicycle\"\n", "max_speed_m_s"),
        ("[law]\nname = \"kanayama\"\n[net]\nlisten = \"0.0.0.0:4710\"\n", "loopback"),
    ] {
        let site = field.folder.join("bad.toml");
        std::fs::write(&site, text).unwrap();
        for arguments in [["run", "--config"].as_slice(), &["check-config"]] {
            let output = run("trackhold", &[arguments, &[site.to_str().unwrap()]].concat());
            assert!(!output.status.success() && told(&output).contains(expected), "{}", told(&output));
        }
    }
}

#[test]
fn a_recorded_run_replays_identical_and_a_terminated_daemon_leaves_zero() {
    let mut field = Field::new("record", 50);
    let mut wire = DriveSocket::subscribe(field.address);
    let log = field.folder.join("run.tracklog").display().to_string();
    let from = field.address.to_string();
    field.drive_off();
    // The recorder comes late, and has to ask for what was before.
    let mut recorder = Running::start("fieldbook", &["record", "--from", &from, "--out", &log]);
    wire.wait_for("moves", moves);
    std::thread::sleep(Duration::from_secs(1));
    assert_eq!(recorder.end("-TERM"), Some(0));
    let output = run("fieldbook", &["replay", &log]);
    assert_eq!(output.status.code(), Some(0), "{}", told(&output));
    let mut altered = std::fs::read(&log).unwrap();
    let middle = altered.len() / 2;
    altered[middle] ^= 0x10;
    let other = field.folder.join("altered.tracklog");
    std::fs::write(&other, altered).unwrap();
    assert_eq!(run("fieldbook", &["replay", other.to_str().unwrap()]).status.code(), Some(2));
    // A drive that nobody read meanwhile has lost its lease, and what its socket still holds is old.
    let mut wire = DriveSocket::subscribe(field.address);
    wire.wait_for("moves", moves);
    assert_eq!(field.daemon.end("-TERM"), Some(0));
    let mut last = None;
    while let Some(received) = wire.next(Duration::from_millis(300)) {
        last = Some(received);
    }
    assert_eq!(last.unwrap().command.wheels, [0.0; 4]);
}

#[test]
fn the_demo_ends_with_the_path_of_a_log_that_replays() {
    let folder = scratch("demo");
    let output = run("fieldbook", &["demo", "--out", folder.to_str().unwrap()]);
    assert!(output.status.success(), "{}", told(&output));
    let text = stdout(&output);
    let log = Path::new(text.lines().last().unwrap());
    assert!(log.is_absolute() && log.extension().is_some_and(|extension| extension == "tracklog"), "{text}");
    let reader = fieldbook::log::LogReader::open(log).unwrap();
    let report = replay::replay_log(reader, false).unwrap();
    assert!(report.difference.is_none(), "{report:?}");
}
