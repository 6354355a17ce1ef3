use super::*;
use crate::testing::{car, crossed, differential, front_steered, steered_wheel, unicycle};
use trackhold_proto::message::WheelLayout;
use trackhold_proto::words::Mode;

const VALID: u64 = 200_000_000;

fn drive(vehicle: Arc<dyn Vehicle>) -> Drive {
    Drive::new(vehicle, SpanNs(2_000_000_000))
}

/// A drive that has taken the zero with which session 1 begins.
fn begun(vehicle: Arc<dyn Vehicle>) -> Drive {
    let layout = vehicle.layout();
    let mut drive = drive(vehicle);
    assert_eq!(drive.on_command(TimeNs(0), 1, 0, &command(layout, [0.0, 0.0])), Taken::Taken);
    drive
}

fn command(layout: WheelLayout, wheels: [f64; 2]) -> Command {
    Command {
        mode: Mode::Tracking,
        layout,
        valid_ns: VALID,
        speed_m_s: 0.0,
        turn_rate_rad_s: 0.0,
        wheels: [wheels[0], wheels[1], 0.0, 0.0],
    }
}

fn both(speed: f64) -> Command {
    command(WheelLayout::LeftRight, [speed, speed])
}

fn wheels(drive: &mut Drive, at: u64) -> [f64; 2] {
    let output = drive.output(TimeNs(at));
    [output.wheels[0], output.wheels[1]]
}

#[test]
fn zero_until_a_command_was_taken() {
    let mut drive = drive(differential());
    assert_eq!(drive.output(TimeNs(5)), Output { wheels: [0.0; 4], commanded: false, hold_steering: false });
    assert_eq!(
        drive.on_command(TimeNs(10), 1, 7, &both(0.0)),
        Taken::Taken,
        "the first session is taken at once"
    );
    assert!(drive.output(TimeNs(10)).commanded);
    assert_eq!(drive.on_command(TimeNs(11), 1, 8, &both(3.0)), Taken::Taken);
    assert_eq!(wheels(&mut drive, 11), [3.0, 3.0]);
}

#[test]
fn a_drive_that_restarts_in_mid_run_stays_at_zero_until_a_zero_comes() {
    let mut drive = drive(differential());
    for (sequence, pair) in [(500, [3.0, 3.0]), (501, [0.0, 1e-9]), (502, [1e-9, 0.0])] {
        let moving = command(WheelLayout::LeftRight, pair);
        assert_eq!(drive.on_command(TimeNs(sequence), 1, sequence, &moving), Taken::BeginsMoving, "{pair:?}");
        assert_eq!(
            drive.output(TimeNs(sequence)),
            Output { wheels: [0.0; 4], commanded: false, hold_steering: false }
        );
    }
    assert_eq!(
        drive.on_command(TimeNs(503), 1, 503, &both(99.0)),
        Taken::BeyondLimit,
        "other reasons come first"
    );
    let zero = command(WheelLayout::LeftRight, [0.0, -0.0]);
    assert_eq!(drive.on_command(TimeNs(504), 1, 504, &zero), Taken::Taken);
    assert_eq!(drive.on_command(TimeNs(505), 1, 505, &both(3.0)), Taken::Taken);
    let later = 505 + 2 * VALID;
    assert_eq!(wheels(&mut drive, later), [0.0, 0.0]);
    assert_eq!(
        drive.on_command(TimeNs(later), 1, 506, &both(3.0)),
        Taken::Taken,
        "a pause begins no session"
    );
    assert_eq!((drive.counts().of(Taken::BeginsMoving), drive.counts().refused()), (3, 4));
}

#[test]
fn a_new_session_begins_with_zero_and_until_then_the_one_before_stays() {
    let mut drive = begun(differential());
    assert_eq!(drive.on_command(TimeNs(1), 2, 1, &both(3.0)), Taken::BeginsMoving);
    assert_eq!(drive.on_command(TimeNs(2), 1, 1, &both(1.0)), Taken::Taken);
    assert_eq!(wheels(&mut drive, 2), [1.0, 1.0]);
    assert_eq!(drive.on_command(TimeNs(2 + VALID), 2, 2, &both(3.0)), Taken::BeginsMoving);
    assert_eq!(drive.on_command(TimeNs(2 + VALID), 2, 3, &both(0.0)), Taken::Taken);
    assert_eq!(drive.on_command(TimeNs(3 + VALID), 2, 4, &both(3.0)), Taken::Taken);
}

#[test]
fn what_zero_is_depends_on_the_layout() {
    for (vehicle, layout, numbers, outcome) in [
        (unicycle(), WheelLayout::Body, [0.0, 0.1], Taken::BeginsMoving),
        (car(), WheelLayout::SpeedSteer, [0.1, 0.0], Taken::BeginsMoving),
        (car(), WheelLayout::SpeedSteer, [0.0, 0.601], Taken::BeyondLimit),
        (car(), WheelLayout::SpeedSteer, [0.0, 0.6], Taken::Taken),
        (front_steered(), WheelLayout::Ackermann, [0.0, 0.6], Taken::Taken),
        (steered_wheel(), WheelLayout::SteeredWheel, [0.0, -1.6], Taken::Taken),
        (steered_wheel(), WheelLayout::SteeredWheel, [0.1, 1.5], Taken::BeginsMoving),
    ] {
        assert_eq!(
            drive(vehicle).on_command(TimeNs(0), 1, 1, &command(layout, numbers)),
            outcome,
            "{numbers:?}"
        );
    }
    let mut unused = both(0.0);
    (unused.wheels[2], unused.wheels[3]) = (1.0, 2.0);
    assert_eq!(drive(differential()).on_command(TimeNs(0), 1, 1, &unused), Taken::Taken, "two wheels only");
}

#[test]
fn only_newer_ones_of_the_session_count() {
    let mut drive = begun(differential());
    drive.on_command(TimeNs(0), 1, 10, &both(3.0));
    for sequence in [10, 9, 0] {
        assert_eq!(drive.on_command(TimeNs(1), 1, sequence, &both(5.0)), Taken::NotNewer);
    }
    assert_eq!(wheels(&mut drive, 1), [3.0, 3.0]);
    assert_eq!(drive.on_command(TimeNs(2), 1, 4000, &both(4.0)), Taken::Taken, "gaps are no matter");
    assert_eq!(wheels(&mut drive, 2), [4.0, 4.0]);
    assert_eq!((drive.counts().of(Taken::NotNewer), drive.counts().refused()), (3, 3));
}

#[test]
fn of_a_burst_the_newest_counts_whatever_its_order() {
    let mut drive = begun(differential());
    for sequence in [3, 5, 1, 4, 2] {
        drive.on_command(TimeNs(100), 1, sequence, &both(sequence as f64));
    }
    assert_eq!(wheels(&mut drive, 100), [5.0, 5.0]);
}

#[test]
fn zero_by_itself_when_the_validity_ends_with_nothing_newer() {
    // The daemon has been killed: nothing comes any more. Duplicates and refused commands prolong nothing.
    let mut drive = begun(differential());
    drive.on_command(TimeNs(1000), 1, 1, &both(3.0));
    assert_eq!(drive.runs_out(), Some(TimeNs(1000 + VALID)));
    drive.on_command(TimeNs(500_000), 1, 1, &both(3.0));
    drive.on_command(TimeNs(600_000), 1, 2, &both(f64::NAN));
    assert_eq!(wheels(&mut drive, 1000 + VALID - 1), [3.0, 3.0]);
    assert_eq!(wheels(&mut drive, 1000 + VALID), [0.0, 0.0]);
    assert_eq!(drive.counts().ran_out, 1);
    assert_eq!(drive.runs_out(), None);
    assert_eq!(
        drive.on_command(TimeNs(2 * VALID), 1, 2, &both(1.0)),
        Taken::Taken,
        "the next newer one counts again"
    );
    assert_eq!(wheels(&mut drive, 2 * VALID), [1.0, 1.0]);
}

#[test]
fn the_validity_counts_from_the_reception_and_is_renewed() {
    let mut drive = begun(differential());
    for k in 0..100 {
        drive.on_command(TimeNs(k * 20_000_000), 1, k + 1, &both(3.0));
        assert_eq!(wheels(&mut drive, k * 20_000_000 + 19_999_999), [3.0, 3.0]);
    }
    assert_eq!(drive.counts().ran_out, 0);
}

#[test]
fn a_clock_that_went_back_gives_zero() {
    let mut drive = begun(differential());
    drive.on_command(TimeNs(1_000_000_000), 1, 1, &both(3.0));
    assert_eq!(wheels(&mut drive, 999_999_999), [0.0, 0.0]);
}

#[test]
fn a_new_session_is_taken_only_at_rest() {
    let mut drive = begun(differential());
    drive.on_command(TimeNs(0), 1, 50, &both(3.0));
    assert_eq!(drive.on_command(TimeNs(1), 2, 1, &both(0.0)), Taken::NotAtRest, "it is commanded to move");
    drive.set_moving(true);
    assert_eq!(
        drive.on_command(TimeNs(VALID), 2, 2, &both(0.0)),
        Taken::NotAtRest,
        "at zero, but it still moves"
    );
    drive.set_moving(false);
    assert_eq!(drive.on_command(TimeNs(VALID), 2, 3, &both(0.0)), Taken::Taken);
    assert_eq!(drive.on_command(TimeNs(VALID), 2, 4, &both(1.0)), Taken::Taken);
    assert_eq!(wheels(&mut drive, VALID), [1.0, 1.0]);
}

#[test]
fn a_commanded_zero_is_rest_too() {
    let mut drive = begun(differential());
    drive.on_command(TimeNs(0), 1, 50, &both(3.0));
    drive.on_command(TimeNs(1), 1, 51, &both(0.0));
    assert_eq!(drive.on_command(TimeNs(2), 2, 1, &both(0.0)), Taken::Taken);
}

#[test]
fn a_refused_command_of_a_new_session_does_not_end_the_old_one() {
    let mut drive = drive(differential());
    drive.on_command(TimeNs(0), 1, 1, &both(0.0));
    assert_eq!(drive.on_command(TimeNs(1), 2, 1, &both(99.0)), Taken::BeyondLimit);
    assert_eq!(drive.on_command(TimeNs(2), 1, 2, &both(1.0)), Taken::Taken);
}

#[test]
fn a_session_left_is_never_returned_to() {
    let mut drive = drive(differential());
    for session in 0..17 {
        assert_eq!(drive.on_command(TimeNs(session), session, 1, &both(0.0)), Taken::Taken);
    }
    for session in 0..16 {
        assert_eq!(drive.on_command(TimeNs(100), session, 9, &both(1.0)), Taken::SessionLeft);
    }
    assert_eq!(drive.on_command(TimeNs(101), 16, 2, &both(1.0)), Taken::Taken);
}

#[test]
fn what_is_not_finite_or_beyond_a_limit_is_refused_and_counted() {
    for (vehicle, layout, good, bad) in [
        (differential(), WheelLayout::LeftRight, [20.0, -20.0], [[20.001, 0.0], [0.0, -20.001]]),
        (unicycle(), WheelLayout::Body, [-2.0, 2.0], [[2.001, 0.0], [0.0, -2.001]]),
        (car(), WheelLayout::SpeedSteer, [-3.0, 0.6], [[3.001, 0.0], [0.0, -0.601]]),
        (car(), WheelLayout::SpeedSteer, [0.0, -0.6], [[1.0, 0.601], [0.0, 2.0]]),
        (steered_wheel(), WheelLayout::SteeredWheel, [-1.5, 1.6], [[1.501, 0.0], [0.0, -1.601]]),
        // Left has a gear of 20 and travels second, right one of −30 and travels first.
        (crossed(), WheelLayout::LeftRight, [600.0, -400.0], [[600.1, 0.0], [0.0, 400.1]]),
    ] {
        let mut drive = begun(vehicle);
        assert_eq!(drive.on_command(TimeNs(0), 1, 1, &command(layout, good)), Taken::Taken, "{layout:?}");
        for wheels in bad {
            assert_eq!(
                drive.on_command(TimeNs(1), 1, 9, &command(layout, wheels)),
                Taken::BeyondLimit,
                "{wheels:?}"
            );
        }
        for wheels in [[f64::NAN, 0.0], [0.0, f64::INFINITY]] {
            assert_eq!(drive.on_command(TimeNs(1), 1, 9, &command(layout, wheels)), Taken::NotFinite);
        }
        let long = Command { valid_ns: 2_000_000_001, ..command(layout, good) };
        assert_eq!(drive.on_command(TimeNs(1), 1, 9, &long), Taken::BeyondLimit);
        assert_eq!(wheels(&mut drive, 2), good, "the one before stays in force");
        assert_eq!((drive.counts().of(Taken::BeyondLimit), drive.counts().of(Taken::NotFinite)), (3, 2));
    }
}

#[test]
fn a_command_for_another_kind_of_drive_is_refused() {
    let mut drive = drive(differential());
    assert_eq!(
        drive.on_command(TimeNs(0), 1, 1, &command(WheelLayout::Body, [0.1, 0.1])),
        Taken::WrongLayout
    );
}

#[test]
fn a_steered_machine_holds_its_steering_at_zero() {
    let mut drive = begun(car());
    let steering = command(WheelLayout::SpeedSteer, [1.0, 0.3]);
    drive.on_command(TimeNs(0), 1, 1, &steering);
    let output = drive.output(TimeNs(VALID));
    assert_eq!(output, Output { wheels: [0.0, 0.3, 0.0, 0.0], commanded: false, hold_steering: true });
    let standing = command(WheelLayout::SpeedSteer, [0.0, -0.2]);
    assert_eq!(drive.on_command(TimeNs(VALID), 2, 1, &standing), Taken::Taken, "a held steering is rest");
}

#[test]
fn three_numbers_are_taken_checked_and_held() {
    let mut drive = begun(front_steered());
    let wheels = |third: f64| Command {
        wheels: [1.0, 0.3, third, 0.0],
        ..command(WheelLayout::Ackermann, [0.0, 0.0])
    };
    assert_eq!(drive.on_command(TimeNs(0), 1, 1, &wheels(0.7)), Taken::BeyondLimit);
    assert_eq!(drive.on_command(TimeNs(0), 1, 2, &wheels(0.25)), Taken::Taken);
    assert_eq!(drive.output(TimeNs(1)).wheels, [1.0, 0.3, 0.25, 0.0]);
    let output = drive.output(TimeNs(VALID));
    assert_eq!(output, Output { wheels: [0.0, 0.3, 0.25, 0.0], commanded: false, hold_steering: true });
}
