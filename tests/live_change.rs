//! Law, gains and cap changed while a machine is on its way: told, recorded, without a jerk, and replayed to the same bits.

use fieldbook::log::LogReader;
use fieldbook::orders;
use std::path::Path;
use std::time::{Duration, Instant};
use trackhold_proto::journal::{Body, TickRecord};
use trackhold_proto::message::Status;
use trackhold_proto::words::{Mode, Regime, StopKind};
use trackhold_tests::drive::DriveSocket;
use trackhold_tests::field::Field;
use trackhold_tests::programs::{Running, run, stdout, told};

/// What the site file of a [`Field`] grants: 15 rad/s² at 50 ticks a second.
const WHEEL_STEP_RAD_S: f64 = 15.0 / 50.0;

/// Runs an order of fieldbook's; its exit code and what it printed.
fn order(field: &Field, name: &str, arguments: &[&str]) -> (Option<i32>, String) {
    let to = field.address.to_string();
    let output = run("fieldbook", &[&[name, "--to", &to], arguments].concat());
    (output.status.code(), told(&output))
}

fn wait_for(field: &Field, what: &str, holds: impl Fn(&Status) -> bool) -> Status {
    let mut client = field.client();
    let until = Instant::now() + Duration::from_secs(20);
    loop {
        let status = client.status().unwrap();
        if holds(&status) {
            return status;
        }
        assert!(Instant::now() < until, "never {what}: {status:?}");
        std::thread::sleep(Duration::from_millis(20));
    }
}

/// Lets a change come in whole: half a second is longer than `node.blend_s`.
fn drive_on(field: &Field) {
    let tick = field.client().status().unwrap().tick;
    wait_for(field, "another half second", |status| status.tick >= tick + 25);
}

/// The numbered entries of a log.
fn bodies(log: &Path) -> Vec<Body> {
    LogReader::open(log).unwrap().map(|entry| entry.unwrap().body).collect()
}

fn ticks(bodies: &[Body]) -> Vec<TickRecord> {
    bodies
        .iter()
        .filter_map(|body| if let Body::Tick(record) = body { Some(*record) } else { None })
        .collect()
}

fn tune_and_cap(field: &Field) {
    let (code, said) = order(field, "tune", &["--gain", "k_y=16", "--gain", "k_heading=8", "--json"]);
    assert_eq!(code, Some(0), "{said}");
    // k_x stays; at 12 rad/s on wheels of 0.1 m the bandwidth is 1.2 m/s times √16.
    for part in ["\"accepted\":true", "\"k_x\":1.0", "\"k_y\":16.0", "\"bandwidth_rad_s\":4.8"] {
        assert!(said.contains(part), "{part} is not in {said}");
    }
    drive_on(field);
    let (code, said) = order(field, "cap", &["40"]);
    assert!(code == Some(0) && said.contains("40 %"), "{said}");
    let capped = wait_for(field, "slowed down", |status| status.plan_rate == 0.4);
    assert_eq!((capped.mode, capped.regime, capped.speed_cap), (Mode::Tracking, Regime::Moving, 0.4));
    let (code, said) = order(field, "tune", &["--law", "off-axle"]);
    assert!(code == Some(0) && said.contains("off-axle: "), "{said}");
    drive_on(field);
    assert!(
        told(&run("fieldbook", &["status", "--from", &field.address.to_string()]))
            .contains("capped at 40.0 %")
    );
    let (code, _) = order(field, "cap", &["100"]);
    assert_eq!(code, Some(0));
    wait_for(field, "at full speed again", |status| status.plan_rate == 1.0);
}

fn refusals(field: &Field) {
    let cases: [(&[&str], i32, &str); 5] = [
        (&["--gain", "x_p_m=-0.3"], 1, "forward stretches"),
        (&["--gain", "x_p_m=0.001"], 1, "law.gains.x_p_m: 0.001 m is too near to the axle"),
        (&["--gain", "k_q=1"], 1, "law.gains.k_q: no such key here"),
        (&["--law", "nobody"], 1, "no law \"nobody\"; known are"),
        (&[], 2, "name a law with --law"),
    ];
    let before = field.client().status().unwrap();
    for (arguments, code, expected) in cases {
        let (exit, said) = order(field, "tune", arguments);
        assert!(exit == Some(code) && said.contains(expected), "{arguments:?}: {exit:?} {said}");
    }
    assert_eq!(order(field, "cap", &["3"]).0, Some(2));
    let after = field.client().status().unwrap();
    assert_eq!((after.law, after.gains, after.speed_cap), (before.law, before.gains, 1.0));
    assert_eq!(after.counters.orders_refused, before.counters.orders_refused + 2, "those that went out");
}

#[test]
fn law_gains_and_cap_change_on_the_way_without_a_jerk_and_the_run_replays() {
    let field = Field::new("live-change", 50);
    let mut wire = DriveSocket::subscribe(field.address);
    let log = field.folder.join("run.tracklog");
    let (from, out) = (field.address.to_string(), log.display().to_string());
    let mut recorder = Running::start("fieldbook", &["record", "--from", &from, "--out", &out]);
    // The robot's drive takes a motion only after a zero: let it hear some.
    let listening = wait_for(&field, "listened to", |status| status.command_subscribers == 2);
    wait_for(&field, "at rest for a while", |status| status.tick > listening.tick + 10);
    field.drive_off();
    wire.wait_for("moves", |command| command.wheels[0] > 1.0);
    tune_and_cap(&field);
    refusals(&field);
    assert!(orders::stop(&mut field.client(), StopKind::Controlled).unwrap().accepted());
    field.wait_for_mode(Mode::Standby);
    assert_eq!(recorder.end("-TERM"), Some(0));
    let replayed = run("fieldbook", &["replay", &out]);
    assert!(replayed.status.success() && stdout(&replayed).starts_with("identical"), "{}", told(&replayed));
    let bodies = bodies(&log);
    let named = |name: &str| bodies.iter().filter(|body| body.name() == name).count();
    assert_eq!((named("tune"), named("law-changed")), (4, 2), "two of them refused");
    let records = ticks(&bodies);
    assert!(records.iter().any(|record| record.speed_cap == 0.4 && record.plan_rate == 0.4));
    let followed = |record: &TickRecord| matches!(record.mode, Mode::Tracking | Mode::ControlledStop);
    let mut followed_pairs = 0;
    for pair in records.windows(2).filter(|pair| followed(&pair[0]) && followed(&pair[1])) {
        followed_pairs += 1;
        for wheel in 0..2 {
            let step = (pair[1].command.wheels[wheel] - pair[0].command.wheels[wheel]).abs();
            assert!(step <= WHEEL_STEP_RAD_S + 1e-9, "a step of {step} rad/s at tick {}", pair[1].tick);
        }
    }
    assert!(followed_pairs > 100, "{followed_pairs}");
}
