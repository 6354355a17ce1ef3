use super::*;
use crate::testing::{car, differential};
use trackhold_proto::message::{Command, Subscribed, TimeRequest, WheelLayout};
use trackhold_proto::words::Mode;

const MS: u64 = 1_000_000;

fn setup(vehicle: Arc<dyn Vehicle>) -> Setup {
    Setup {
        vehicle,
        mount: Mount::default(),
        robot: RobotSpec::default(),
        start: Pose::default(),
        link: LinkSpec::default(),
        link_seed: 0,
    }
}

fn machine(setup: &Setup) -> Machine {
    Machine::new(setup, [11, 22], TimeNs(0)).unwrap()
}

/// A machine whose drive has taken, at 0 ms, the zero with which session 5 begins.
fn begun(setup: &Setup) -> Machine {
    let mut machine = machine(setup);
    command_as(&mut machine, setup.vehicle.layout(), 0, 0, [0.0, 0.0]);
    machine.step(TimeNs(0));
    machine
}

/// Runs to `until`, ms, and returns all datagrams with their sender and the ms they came out.
fn run(machine: &mut Machine, from: u64, until: u64) -> Vec<(u64, Party, Envelope)> {
    let mut out = Vec::new();
    for ms in from..=until {
        let now = TimeNs(ms * MS);
        machine.step(now);
        while let Some((party, bytes)) = machine.next_datagram(now) {
            out.push((ms, party, Envelope::decode(&bytes).unwrap()));
        }
    }
    out
}

fn command(machine: &mut Machine, at_ms: u64, sequence: u64, wheels: [f64; 2]) {
    command_as(machine, WheelLayout::LeftRight, at_ms, sequence, wheels);
}

fn command_as(machine: &mut Machine, layout: WheelLayout, at_ms: u64, sequence: u64, wheels: [f64; 2]) {
    command_from(machine, 5, layout, at_ms, sequence, wheels);
}

fn command_from(
    machine: &mut Machine,
    session: u64,
    layout: WheelLayout,
    at_ms: u64,
    sequence: u64,
    wheels: [f64; 2],
) {
    let message = Message::Command(Command {
        mode: Mode::Tracking,
        layout,
        valid_ns: 200 * MS,
        speed_m_s: 0.0,
        turn_rate_rad_s: 0.0,
        wheels: [wheels[0], wheels[1], 0.0, 0.0],
    });
    let datagram = Envelope { session, sequence, stamp_ns: 0, message }.to_vec();
    machine.receive(TimeNs(at_ms * MS), Party::Drive, &datagram);
}

#[test]
fn poses_go_out_at_the_rate_with_rising_sequence_and_stamp() {
    let mut machine = machine(&setup(differential()));
    let poses: Vec<_> =
        run(&mut machine, 0, 999).into_iter().filter(|(_, party, _)| *party == Party::Estimator).collect();
    assert_eq!(poses.len(), 50);
    for (k, (ms, _, envelope)) in poses.iter().enumerate() {
        assert_eq!((*ms, envelope.session, envelope.sequence), (k as u64 * 20, 11, k as u64 + 1));
        let Message::Pose(pose) = envelope.message else { panic!("{envelope:?}") };
        assert_eq!(pose.measured_ns, k as u64 * 20 * MS);
    }
    assert_eq!(std::iter::from_fn(|| machine.next_point()).count(), 50, "and a true point for each");
}

#[test]
fn it_asks_four_times_a_second_and_then_renews_each_third_of_the_lease() {
    let mut machine = machine(&setup(differential()));
    let asked = |out: Vec<(u64, Party, Envelope)>| -> Vec<u64> {
        let drive = out.into_iter().filter(|(_, party, _)| *party == Party::Drive);
        drive
            .map(|(ms, _, envelope)| match envelope.message {
                Message::Subscribe(Subscribe { want: WANT_COMMANDS, lease_ms: LEASE_MS }) => ms,
                other => panic!("{other:?}"),
            })
            .collect()
    };
    assert_eq!(asked(run(&mut machine, 0, 999)), [0, 250, 500, 750]);
    let grant = |want| {
        let message = Message::Subscribed(Subscribed {
            boot: trackhold_proto::blob::BootId::NONE,
            want,
            lease_ms: 900,
            oldest_entry: 0,
            next_entry: 0,
        });
        Envelope { session: 5, sequence: 1, stamp_ns: 0, message }.to_vec()
    };
    machine.receive(TimeNs(999 * MS), Party::Drive, &grant(WANT_COMMANDS));
    assert_eq!(asked(run(&mut machine, 1000, 2199)), [1000, 1300, 1600, 1900]);
    machine.receive(TimeNs(2199 * MS), Party::Drive, &grant(0));
    assert_eq!(asked(run(&mut machine, 2200, 2999)), [2200, 2450, 2700, 2950], "no room: it goes on asking");
}

#[test]
fn with_the_daemon_killed_it_stands_when_the_validity_ends() {
    let mut machine = begun(&setup(differential()));
    for k in 0..50 {
        command(&mut machine, k * 20, k + 1, [10.0, 10.0]);
        run(&mut machine, k * 20, k * 20 + 19);
    }
    // The last command came at 980 ms: 1 m/s until 1180 ms, however seldom the machine is stepped.
    machine.step(TimeNs(5000 * MS));
    let point = machine.point();
    assert!((point.pose.x_m - 1.18).abs() < 1e-12, "{point:?}");
    assert_eq!((point.wheels, point.commanded), ([0.0; 4], false));
    assert_eq!(machine.drive_counts().ran_out, 1);
}

#[test]
fn a_restarted_daemon_is_obeyed_only_once_the_wheels_rest() {
    let mut lagging = setup(differential());
    lagging.robot.drive.wheel_lag_s = 0.1;
    let mut machine = begun(&lagging);
    command(&mut machine, 0, 1, [10.0, 10.0]);
    run(&mut machine, 0, 250);
    // Zero by itself since 200 ms, but the wheels still run down.
    let mut again = |until, sequence| {
        machine.step(TimeNs(until * MS));
        let layout = WheelLayout::LeftRight;
        command_from(&mut machine, 6, layout, until, sequence, [0.0, 0.0]);
        machine.step(TimeNs(until * MS));
        machine.point().commanded
    };
    assert!(!again(300, 1));
    assert!(again(1300, 2), "10 exp(−11) is below a thousandth");
}

#[test]
fn a_measurement_comes_before_a_command_of_the_same_moment() {
    let mut machine = machine(&setup(differential()));
    for k in 0..50 {
        command(&mut machine, k * 20, k + 1, [k as f64 / 5.0, k as f64 / 5.0]);
    }
    machine.step(TimeNs(999 * MS));
    let wheels: Vec<f64> = std::iter::from_fn(|| machine.next_point()).map(|point| point.wheels[0]).collect();
    let before: Vec<f64> = (0..50).map(|k: u32| f64::from(k.saturating_sub(1)) / 5.0).collect();
    assert_eq!(wheels, before);
}

#[test]
fn of_a_burst_only_the_newest_moves_it() {
    let mut machine = begun(&setup(differential()));
    for (sequence, speed) in [(1, 20.0), (3, 5.0), (2, -20.0)] {
        command(&mut machine, 100, sequence, [speed, speed]);
    }
    machine.step(TimeNs(200 * MS));
    assert!((machine.point().travelled_m - 0.05).abs() < 1e-15, "0.5 m/s for 0.1 s, and nothing else");
}

#[test]
fn a_steered_machine_stands_with_its_steering_where_it_is() {
    let mut steered = setup(car());
    steered.robot.drive.steer_lag_s = 0.1;
    let mut machine = begun(&steered);
    command_as(&mut machine, WheelLayout::SpeedSteer, 0, 1, [1.0, 0.5]);
    machine.step(TimeNs(200 * MS));
    // First-order lag: 0.5 (1 − exp(−2)), and it stays there.
    let held = 0.5 * (1.0 - (-2.0_f64).exp());
    for ms in [200, 201, 400, 3000] {
        machine.step(TimeNs(ms * MS));
        let wheels = machine.point().wheels;
        assert!(wheels[0] == 0.0 && (wheels[1] - held).abs() < 1e-9, "{wheels:?} {held}");
    }
}

#[test]
fn it_answers_time_requests_in_the_estimators_clock() {
    let mut ahead = setup(differential());
    ahead.robot.sensor.clock_offset_s = 3.0;
    ahead.link.delay_s = 0.004;
    let mut machine = machine(&ahead);
    let message = Message::TimeRequest(TimeRequest { sent_ns: 77 });
    let request = Envelope { session: 5, sequence: 1, stamp_ns: 77, message }.to_vec();
    machine.receive(TimeNs(10 * MS), Party::Estimator, &request);
    let replies: Vec<_> = run(&mut machine, 0, 100)
        .into_iter()
        .filter_map(|(ms, _, envelope)| match envelope.message {
            Message::TimeReply(reply) => Some((ms, reply)),
            _ => None,
        })
        .collect();
    let expected =
        TimeReply { request_sent_ns: 77, request_received_ns: 3_014 * MS, reply_sent_ns: 3_014 * MS };
    assert_eq!(replies, [(18, expected)], "4 ms there, 4 ms back");
}

#[test]
fn a_silenced_estimator_says_nothing() {
    let mut machine = machine(&setup(differential()));
    machine.set_silent(true);
    let out = run(&mut machine, 0, 499);
    assert!(out.iter().all(|(_, party, _)| *party == Party::Drive));
    assert_eq!((machine.counts().poses_silenced, machine.counts().poses_sent), (25, 0));
    machine.set_silent(false);
    assert_eq!(
        run(&mut machine, 500, 599).iter().filter(|(_, party, _)| *party == Party::Estimator).count(),
        5
    );
}

#[test]
fn rubbish_is_counted_and_changes_nothing() {
    let mut machine = begun(&setup(differential()));
    command(&mut machine, 10, 1, [5.0, 5.0]);
    machine.receive(TimeNs(20 * MS), Party::Drive, b"rubbish");
    machine.receive(TimeNs(20 * MS), Party::Estimator, &[0xA7; 60]);
    let stray = Message::StatusRequest(trackhold_proto::message::StatusRequest {});
    machine.receive(
        TimeNs(20 * MS),
        Party::Drive,
        &Envelope { session: 5, sequence: 9, stamp_ns: 0, message: stray }.to_vec(),
    );
    machine.step(TimeNs(30 * MS));
    assert_eq!((machine.counts().malformed, machine.counts().ignored), (2, 1));
    assert_eq!(machine.point().wheels, [5.0, 5.0, 0.0, 0.0]);
}

#[test]
fn a_run_depends_on_its_seeds_alone_and_not_on_how_often_it_is_stepped() {
    let mut faulty = setup(differential());
    faulty.robot = RobotSpec::parse(
        "seed = 4\n[drive]\nwheel_lag_s = 0.05\ndead_time_s = 0.013\n\
         [sensor]\nposition_sd_m = 0.01\njitter_s = 0.03\ndropout_probability = 0.1\n",
        "robot.toml",
    )
    .unwrap();
    (faulty.link.loss, faulty.link.jitter_s, faulty.link.reorder) = (0.1, 0.02, 0.1);
    let run = |step_ms: usize| {
        let mut machine = machine(&faulty);
        for k in 0..100 {
            // Several zeros to begin with: the link loses some.
            let pair = if k < 10 { [0.0, 0.0] } else { [k as f64 / 10.0, 5.0] };
            command(&mut machine, k * 20, k + 1, pair);
        }
        for ms in (0..=3000).step_by(step_ms) {
            machine.step(TimeNs(ms * MS));
        }
        assert!(machine.point().travelled_m > 0.5, "the run is one in motion");
        let poses = std::iter::from_fn(|| machine.next_datagram(TimeNs(u64::MAX)))
            .filter(|(party, _)| *party == Party::Estimator)
            .map(|(_, bytes)| Envelope::decode(&bytes).unwrap().message)
            .collect::<Vec<_>>();
        (poses, std::iter::from_fn(|| machine.next_point()).collect::<Vec<_>>(), machine.drive_counts())
    };
    assert_eq!(run(1), run(50));
}
