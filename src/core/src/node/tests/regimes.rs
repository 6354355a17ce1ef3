//! Regimes, the plan's pace, and poses carried forward.

use super::*;
use crate::geometry::Direction;
use trackhold_proto::words::Regime;

const DT_S: f64 = 1.0 / RATE_HZ;

/// Regimes of a run, each named once where it begins.
fn regimes(records: &[TickRecord]) -> Vec<Regime> {
    let mut all: Vec<Regime> = records.iter().map(|record| record.regime).collect();
    all.dedup();
    all
}

fn with(node: &[(&str, f64)], segments: &str, pose: Pose) -> Rig {
    let mut all = vec![("rate_hz", RATE_HZ)];
    all.extend_from_slice(node);
    let mut rig = Rig::new(&all);
    assert_eq!(rig.load(segments, false), None);
    rig.pose = pose;
    rig.tick();
    rig
}

fn car() -> Settings {
    Settings {
        vehicle: VehicleSettings {
            kind: "car".to_string(),
            values: values(&[
                ("wheelbase_m", 1.0),
                ("max_steer_rad", 0.6),
                ("max_steer_rate_rad_s", 1.0),
                ("max_speed_m_s", 2.0),
                ("max_accel_m_s2", 1.0),
            ]),
        },
        ..settings(&[("rate_hz", RATE_HZ)])
    }
}

#[test]
fn a_machine_that_turns_on_the_spot_realigns_while_the_plan_waits_and_then_tracks() {
    for heading in [core::f64::consts::PI, 3.0, -2.0] {
        let mut rig = with(&[], LINE, Pose::new(0.0, 0.05, heading));
        assert_eq!(rig.start(), None);
        let records = rig.until_standby();
        assert_eq!(
            regimes(&records),
            [Regime::Realigning, Regime::Moving, Regime::Settling],
            "from {heading} rad"
        );
        for record in records.iter().filter(|record| record.regime == Regime::Realigning) {
            assert_eq!((record.plan_time_ns, record.command.speed_m_s), (0, 0.0));
        }
        assert_eq!(records.last().unwrap().cause, Cause::PlanEnded);
        assert!(rig.pose.distance_to(Pose::new(4.0, 0.0, 0.0)) < 0.005, "{:?}", rig.pose);
        assert!(rig.pose.heading_rad.abs() < 0.5_f64.to_radians(), "{:?}", rig.pose);
    }
}

#[test]
fn a_machine_that_steers_is_refused_where_it_cannot_realign_and_stops_on_the_way() {
    let mut rig = Rig::with_settings(&car());
    assert_eq!(rig.load(LINE, false), None);
    rig.pose = Pose::new(0.0, 0.0, core::f64::consts::PI);
    rig.tick();
    let refusal = rig.start();
    assert!(matches!(refusal, Some(Refusal::TurnedAway { limit_rad: 1.4, .. })), "{refusal:?}");
    rig.pose = Pose::default();
    rig.tick();
    assert_eq!(rig.start(), None);
    rig.ticks(50);
    // Turned by hand, or by a blow: slowly enough that no pose jumps.
    let stopped = (0..200).find_map(|_| {
        rig.pose.heading_rad += 0.05;
        Some(rig.tick()).filter(|record| record.mode == Mode::ProtectiveStop)
    });
    let stopped = stopped.expect("it stops");
    assert_eq!(stopped.cause, Cause::OutsideLawDomain);
    assert!(stopped.has(flag::OUTSIDE_LAW_DOMAIN) && stopped.heading_error_rad.abs() > 1.4);
    assert_eq!(stopped.command.speed_m_s, 0.0);
}

#[test]
fn each_regime_takes_over_without_a_step_in_what_it_adds() {
    let segments = r#"{"kind":"line","length_m":2,"speed_m_s":0.5,"profile":"trapezoid","accel_m_s2":0.5},
        {"kind":"dwell","duration_s":1},
        {"kind":"pivot","turn_rad":1.5,"rate_rad_s":0.8,"profile":"trapezoid","accel_rad_s2":1.5},
        {"kind":"line","length_m":2,"speed_m_s":0.5,"profile":"trapezoid","accel_m_s2":0.5}"#;
    let mut rig = with(&[], segments, Pose::new(-0.05, 0.1, 0.1));
    assert_eq!(rig.start(), None);
    let records = rig.until_standby();
    let wanted = [
        Regime::Settling,
        Regime::Moving,
        Regime::Settling,
        Regime::Pivoting,
        Regime::Moving,
        Regime::Settling,
    ];
    // The reference rests in the first instant of a trapezoid, so that another settling may lie between two regimes.
    let mut seen = regimes(&records).into_iter();
    assert!(wanted.iter().all(|regime| seen.any(|other| other == *regime)), "{:?}", regimes(&records));
    for pair in records.windows(2).filter(|pair| pair[0].regime != pair[1].regime) {
        if pair[1].mode != Mode::Tracking {
            continue;
        }
        let added = |record: &TickRecord| {
            (
                record.wanted_speed_m_s - record.ref_speed_m_s,
                record.wanted_turn_rate_rad_s - record.ref_turn_rate_rad_s,
            )
        };
        let (before, after) = (added(&pair[0]), added(&pair[1]));
        let step = (before.0 - after.0).abs().max((before.1 - after.1).abs());
        assert!(step < 1e-9, "{} to {}: {before:?} {after:?}", pair[0].regime, pair[1].regime);
    }
    assert_eq!(records.last().unwrap().cause, Cause::PlanEnded);
}

#[test]
fn the_plans_time_slows_while_the_machine_lags_and_only_if_the_site_lets_it() {
    let line = r#"{"kind":"line","length_m":30,"speed_m_s":1.2}"#;
    let behind = Pose::new(-1.5, 0.0, 0.0);
    let mut rig = with(&[], line, behind);
    assert_eq!(rig.start(), None);
    let records = rig.ticks(1000);
    let slowest = records.iter().map(|record| record.plan_rate).fold(1.0, f64::min);
    assert!((0.25 - 1e-12..0.5).contains(&slowest), "{slowest}");
    for record in records.iter().filter(|record| record.plan_rate < 1.0 - 1e-9) {
        assert!(record.has(flag::PLAN_SLOWED) || record.along_error_m > -0.5 - 0.05);
    }
    // The reference slows and speeds up within 0.7 of the machine's 1 m/s².
    for pair in records.windows(2) {
        let change = (pair[1].ref_speed_m_s - pair[0].ref_speed_m_s).abs();
        assert!(change <= 0.7 * DT_S + 1e-12, "{change} at tick {}", pair[1].tick);
    }
    let last = records.last().unwrap();
    assert!(last.plan_rate == 1.0 && last.along_error_m.abs() < 0.01, "{last:?}");
    let mut rig = with(&[("min_plan_rate", 1.0)], line, behind);
    assert_eq!(rig.start(), None);
    assert!(rig.ticks(1000).iter().all(|record| record.plan_rate == 1.0));
}

/// A machine whose commands act late, and whose poses arrive late.
struct Late {
    rig: Rig,
    /// True poses at the ticks so far, tick 0 first.
    truth: Vec<Pose>,
    commands: Vec<BodyVelocity>,
    dead_ticks: usize,
    pose_ticks: usize,
}

impl Late {
    fn started(node: &[(&str, f64)], dead_ticks: usize, pose_ticks: usize) -> Self {
        let rig = with(node, r#"{"kind":"arc","radius_m":2,"turn_rad":12,"speed_m_s":1}"#, Pose::default());
        let mut late = Self { rig, truth: vec![Pose::default()], commands: vec![], dead_ticks, pose_ticks };
        // One pose without delay: the least delay counts as none.
        late.send(0);
        assert_eq!(late.rig.start(), None);
        late
    }

    /// Sends the true pose of so many ticks ago.
    fn send(&mut self, ago: usize) {
        let ago = ago.min(self.truth.len() - 1);
        let pose = self.truth[self.truth.len() - 1 - ago];
        let measured = self.rig.at.0 - tick_offset(ago as u64, RATE_HZ).0;
        let (now, at) = (self.rig.pose, self.rig.at);
        (self.rig.pose, self.rig.at) = (pose, TimeNs(measured));
        let pose = message::Pose {
            measured_ns: measured + 2,
            x_m: pose.x_m,
            y_m: pose.y_m,
            heading_rad: pose.heading_rad,
            position_sd_m: 0.0,
            heading_sd_rad: 0.0,
        };
        (self.rig.pose, self.rig.at) = (now, at);
        self.rig.event(Event::Pose(PoseEvent { session: 1, sequence: 1, received_ns: at.0, pose }));
    }

    fn tick(&mut self) -> TickRecord {
        self.send(self.pose_ticks);
        self.rig.event(Event::Tick);
        let record = self.rig.records().next_back().unwrap();
        let (speed_m_s, turn_rate_rad_s) = (record.command.speed_m_s, record.command.turn_rate_rad_s);
        self.commands.push(BodyVelocity { speed_m_s, turn_rate_rad_s });
        let acting = self.commands.len().checked_sub(1 + self.dead_ticks);
        let motion = acting.map_or(BodyVelocity::ZERO, |index| self.commands[index]);
        let next = TimeNs(tick_offset(record.tick + 1, RATE_HZ).0);
        let pose = *self.truth.last().unwrap();
        self.truth.push(pose.moved(motion, next.since(self.rig.at).seconds()));
        self.rig.at = next;
        record
    }
}

impl Late {
    /// How far the true pose is from the reference at the moment at which a tick's command acts, m.
    fn off(&self, record: &TickRecord) -> f64 {
        let index = record.tick as usize - 2 + self.dead_ticks;
        self.truth[index].distance_to(Pose::new(record.ref_x_m, record.ref_y_m, record.ref_heading_rad))
    }
}

#[test]
fn a_late_pose_is_carried_forward_to_the_moment_at_which_the_command_acts() {
    // Commands act three ticks late, poses are five ticks old.
    let mut late = Late::started(&[("dead_time_s", 0.06)], 3, 5);
    let records: Vec<TickRecord> = (0..600).map(|_| late.tick()).collect();
    for (index, record) in records.iter().enumerate().skip(10).take(500) {
        let truth = late.truth[index + 3];
        let seen = Pose::new(record.x_m, record.y_m, record.heading_rad);
        assert!(seen.distance_to(truth) < 1e-9, "tick {index}: {seen:?} {truth:?}");
        assert!(crate::math::wrap(seen.heading_rad - truth.heading_rad).abs() < 1e-9);
        assert_eq!(record.pose_age_ns, 100_000_000);
    }
    assert!(late.off(&records[590]) < 1e-4, "{}", late.off(&records[590]));
    // Without, the law takes the machine for where it was 0.16 s ago, and drives that far ahead.
    let mut late = Late::started(&[("dead_time_s", 0.06), ("carry_forward", 0.0)], 3, 5);
    let records: Vec<TickRecord> = (0..600).map(|_| late.tick()).collect();
    let seen = Pose::new(records[500].x_m, records[500].y_m, records[500].heading_rad);
    assert!(seen.distance_to(late.truth[500 - 5]) < 1e-12);
    assert!((late.off(&records[590]) - 0.16).abs() < 1e-3, "{}", late.off(&records[590]));
}

#[test]
fn a_jump_of_the_estimator_is_slewed_in_or_stops_the_machine() {
    let line = r#"{"kind":"line","length_m":20,"speed_m_s":0.5}"#;
    let mut rig = with(&[], line, Pose::default());
    assert_eq!(rig.start(), None);
    let before = rig.ticks(150).pop().unwrap();
    rig.pose.y_m += 0.4;
    rig.pose.heading_rad += 0.3;
    let records = rig.ticks(200);
    assert!(records[0].has(flag::POSE_SLEWED) && !records[199].has(flag::POSE_SLEWED));
    // It takes 0.4 m at 0.2 m/s.
    let slewed = records.iter().filter(|record| record.has(flag::POSE_SLEWED)).count();
    assert!((95..=105).contains(&slewed), "{slewed} ticks");
    let mut last = before;
    for record in &records {
        let moved =
            Direction::of(last.ref_heading_rad).into_frame(record.x_m - last.x_m, record.y_m - last.y_m);
        let turned = crate::math::wrap(record.heading_rad - last.heading_rad).abs();
        assert!(moved.1.abs() < (0.2 + 0.3) * DT_S && turned < (0.2 + 2.0) * DT_S, "{moved:?} {turned}");
        last = *record;
    }
    assert_eq!(last.mode, Mode::Tracking);
    rig.pose.x_m += 1.5;
    let record = rig.tick();
    assert_eq!((record.mode, record.cause), (Mode::ProtectiveStop, Cause::PoseJump));
    assert_eq!(record.command.wheels, [0.0; 4]);
    // Another estimator may see it elsewhere: that is no jump, and in standby nothing is slewed.
    assert_eq!(rig.order(Order::Reset), None);
    rig.pose.x_m -= 1.5;
    let record = rig.tick();
    assert!(!record.has(flag::POSE_SLEWED));
    assert!((record.x_m - rig.pose.x_m).abs() < 1e-9);
}

#[test]
fn a_machine_that_stands_while_it_is_driven_is_not_taken_for_one_that_moves() {
    // Five poses a second, so that each differs by more than a jump from where the commands should have brought it.
    let mut rig = with(&[], r#"{"kind":"line","length_m":20,"speed_m_s":1}"#, Pose::default());
    assert_eq!(rig.start(), None);
    rig.ticks(100);
    let stuck = rig.pose;
    rig.blind = true;
    let stopped = (0..400).find_map(|tick| {
        rig.pose = stuck;
        if tick % 10 == 9 {
            rig.send_pose(1);
        }
        Some(rig.tick()).filter(|record| record.mode == Mode::ProtectiveStop)
    });
    let stopped = stopped.expect("it stops");
    assert_eq!((stopped.cause, stopped.command.wheels), (Cause::PoseJump, [0.0; 4]));
}
