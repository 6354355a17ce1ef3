//! Another pose source takes over while the machine is on its way, as it can where the lease is shorter than the timeout.

use super::*;

const LONG_LINE: &str = r#"{"kind":"line","length_m":20,"speed_m_s":0.5}"#;

/// Under way by poses of session 1, which then fall silent until their lease has ended.
fn deserted() -> Rig {
    let mut rig = Rig::new(&[("rate_hz", RATE_HZ), ("pose_lease_s", 0.1), ("pose_timeout_s", 0.5)]);
    assert_eq!(rig.load(LONG_LINE, false), None);
    rig.send_pose(1);
    assert_eq!(rig.start(), None);
    rig.ticks(100);
    rig.blind = true;
    assert!(rig.ticks(6).iter().all(|record| record.mode == Mode::Tracking));
    rig
}

#[test]
fn a_source_that_sees_the_machine_elsewhere_stops_it() {
    let mut rig = deserted();
    rig.pose.y_m += 3.0;
    rig.send_pose(2);
    let record = rig.tick();
    assert_eq!((record.mode, record.cause), (Mode::ProtectiveStop, Cause::PoseJump));
    assert_eq!(record.command.wheels, [0.0; 4]);
}

#[test]
fn a_source_that_sees_it_a_little_off_is_slewed_in() {
    let mut rig = deserted();
    rig.pose.y_m += 0.4;
    rig.send_pose(2);
    let record = rig.tick();
    assert!(record.mode == Mode::Tracking && record.has(flag::POSE_SLEWED), "{record:?}");
    assert!((record.y_m - 0.004).abs() < 0.01, "{}", record.y_m);
}

#[test]
fn a_source_that_sees_it_where_it_is_takes_over_without_a_word() {
    let mut rig = deserted();
    rig.send_pose(2);
    let record = rig.tick();
    assert!(record.mode == Mode::Tracking && !record.has(flag::POSE_SLEWED), "{record:?}");
}
