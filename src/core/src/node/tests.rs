//! Orders, guards and closed loops against the node, with an ideal machine.

mod continuing;
mod live;
mod regimes;
mod settling;
mod sources;

use super::*;
use crate::geometry::{BodyVelocity, Pose};
use crate::plan::compile;
use crate::settings::{LawSettings, VehicleSettings};
use crate::time::tick_offset;
use crate::{digest, keys::Values};
use alloc::string::ToString;
use alloc::vec;
use trackhold_proto::blob::Hex;
use trackhold_proto::journal::{AckEffect, Order, TickRecord, flag};
use trackhold_proto::message::{self, Start};
use trackhold_proto::words::{Refusal, StartAt, StopKind};

fn values(pairs: &[(&str, f64)]) -> Values {
    let mut values = Values::default();
    for (key, value) in pairs {
        values.set(key, *value);
    }
    values
}

fn settings(node: &[(&str, f64)]) -> Settings {
    Settings {
        vehicle: VehicleSettings {
            kind: "unicycle".to_string(),
            values: values(&[
                ("max_speed_m_s", 2.0),
                ("max_turn_rate_rad_s", 2.0),
                ("max_accel_m_s2", 1.0),
                ("max_turn_accel_rad_s2", 3.0),
            ]),
        },
        law: LawSettings { name: "kanayama".to_string(), gains: Values::default() },
        node: values(node),
        pose: Values::default(),
        check: Values::default(),
    }
}

/// A node with an ideal machine: the pose is the true one, the command holds until the next tick.
struct Rig {
    node: Node,
    log: Vec<Entry>,
    pose: Pose,
    at: TimeNs,
    sequence: u64,
    digest: Hex<32>,
    blind: bool,
}

const RATE_HZ: f64 = 50.0;
const LINE: &str = r#"{"kind":"line","length_m":4,"speed_m_s":1}"#;

impl Rig {
    fn new(node: &[(&str, f64)]) -> Self {
        Self::with_settings(&settings(node))
    }

    fn with_settings(settings: &Settings) -> Self {
        let mut log = Vec::new();
        let node = Node::new(settings, Hex([7; 16]), 99, TimeNs(0), &mut log).unwrap();
        let mut rig = Self {
            node,
            log,
            pose: Pose::default(),
            at: TimeNs(0),
            sequence: 0,
            digest: Hex::NONE,
            blind: false,
        };
        rig.ticks(1);
        rig
    }

    fn event(&mut self, event: Event) {
        self.node.handle(self.at, event, &mut self.log);
    }

    fn load(&mut self, segments: &str, open: bool) -> Option<Refusal> {
        let raw = alloc::format!(
            r#"{{"format":"trackhold-plan/1","id":"t","revision":1,"open":{open},"start":{{"x_m":0,"y_m":0,"heading_rad":0}},"segments":[{segments}]}}"#
        );
        let refusal = self.send(&raw);
        if refusal.is_none() {
            self.digest = digest::of_bytes(raw.as_bytes());
        }
        refusal
    }

    /// A plan's bytes, as they are.
    fn send(&mut self, raw: &str) -> Option<Refusal> {
        let raw = raw.as_bytes().to_vec();
        let compiled = compile(&raw, &**self.node.vehicle()).map(Box::new);
        self.sequence += 1;
        let digest = digest::of_bytes(&raw);
        self.event(Event::Plan(PlanEvent { session: 5, sequence: self.sequence, digest, raw }, compiled));
        self.last_ack().refusal
    }

    fn order(&mut self, order: Order) -> Option<Refusal> {
        self.sequence += 1;
        self.order_again(order)
    }

    fn order_again(&mut self, order: Order) -> Option<Refusal> {
        let event = OrderEvent { session: 6, sequence: self.sequence, received_ns: self.at.0, order };
        self.event(Event::Order(event));
        self.last_ack().refusal
    }

    fn start_order(&self) -> Start {
        Start {
            boot: self.node.boot(),
            plan: self.digest,
            start_number: self.node.start_number(),
            at: StartAt::Beginning,
            plan_time_ns: 0,
        }
    }

    fn start(&mut self) -> Option<Refusal> {
        self.order(Order::Start(self.start_order()))
    }

    fn last_ack(&self) -> AckEffect {
        let acks = self.log.iter().rev().find_map(|entry| match &entry.body {
            Body::Ack(ack) => Some(ack.clone()),
            _ => None,
        });
        acks.unwrap()
    }

    fn send_pose(&mut self, session: u64) {
        let pose = message::Pose {
            measured_ns: self.at.0 + 1,
            x_m: self.pose.x_m,
            y_m: self.pose.y_m,
            heading_rad: self.pose.heading_rad,
            position_sd_m: 0.0,
            heading_sd_rad: 0.0,
        };
        self.event(Event::Pose(PoseEvent { session, sequence: 1, received_ns: self.at.0, pose }));
    }

    /// Pose and tick, then one period of motion; returns the record.
    fn tick(&mut self) -> TickRecord {
        if !self.blind {
            self.send_pose(1);
        }
        self.event(Event::Tick);
        let record = self.records().next_back().unwrap();
        let velocity = BodyVelocity {
            speed_m_s: record.command.speed_m_s,
            turn_rate_rad_s: record.command.turn_rate_rad_s,
        };
        let next = TimeNs(tick_offset(record.tick + 1, RATE_HZ).0);
        self.pose = self.pose.moved(velocity, next.since(self.at).seconds());
        self.at = next;
        record
    }

    fn ticks(&mut self, count: usize) -> Vec<TickRecord> {
        (0..count).map(|_| self.tick()).collect()
    }

    fn until_standby(&mut self) -> Vec<TickRecord> {
        let mut records = vec![];
        while records.len() < 10_000 {
            records.push(self.tick());
            if self.node.mode() == Mode::Standby {
                return records;
            }
        }
        panic!("still {} after {} ticks", self.node.mode(), records.len());
    }

    fn records(&self) -> impl DoubleEndedIterator<Item = TickRecord> {
        self.log
            .iter()
            .filter_map(|entry| if let Body::Tick(record) = entry.body { Some(record) } else { None })
    }

    fn started(segments: &str) -> Self {
        let mut rig = Self::new(&[("rate_hz", RATE_HZ)]);
        assert_eq!(rig.load(segments, false), None);
        rig.send_pose(1);
        assert_eq!(rig.start(), None);
        rig
    }
}

fn assert_within_steps(records: &[TickRecord]) {
    for pair in records.windows(2) {
        let step = (pair[1].command.speed_m_s - pair[0].command.speed_m_s).abs();
        assert!(step <= 1.0 / RATE_HZ + 1e-12, "step of {step} m/s at tick {}", pair[1].tick);
    }
}

#[test]
fn a_plan_is_followed_to_rest_and_every_entry_is_numbered() {
    let mut rig = Rig::started(LINE);
    let records = rig.until_standby();
    let last = records.last().unwrap();
    assert_eq!((last.mode, last.cause), (Mode::Standby, Cause::PlanEnded));
    assert!(rig.pose.distance_to(Pose::new(4.0, 0.0, 0.0)) < 0.005, "{:?}", rig.pose);
    assert_within_steps(&records);
    assert!(rig.log.iter().enumerate().all(|(index, entry)| entry.number == index as u64));
}

#[test]
fn a_million_ticks_stay_on_the_circle_and_within_limits() {
    let mut rig = Rig::started(r#"{"kind":"arc","radius_m":30,"turn_rad":700,"speed_m_s":1}"#);
    rig.pose = Pose::new(-0.3, 0.2, 0.4);
    for block in 0..100 {
        let records = rig.ticks(10_000);
        rig.log.clear();
        assert_within_steps(&records);
        for record in &records {
            assert_eq!(record.mode, Mode::Tracking);
            assert!(record.command.speed_m_s.abs() <= 2.0 && record.command.turn_rate_rad_s.abs() <= 2.0);
        }
        let last = records.last().unwrap();
        assert!(block == 0 || last.cross_error_m.abs() < 1e-9, "{last:?}");
    }
}

#[test]
fn an_emergency_stop_puts_zero_out_without_a_tick_and_latches() {
    let mut rig = Rig::started(LINE);
    rig.ticks(60);
    let before = rig.log.len();
    assert_eq!(rig.order(Order::Stop(StopKind::Emergency)), None);
    let zero = rig.log[before..].iter().find_map(|entry| match &entry.body {
        Body::Command(command) => Some(*command),
        _ => None,
    });
    assert_eq!(zero.unwrap().wheels, [0.0; 4]);
    assert_eq!(rig.node.mode(), Mode::EmergencyStop);
    assert_eq!(rig.start(), Some(Refusal::Mode { mode: Mode::EmergencyStop }));
    assert_eq!(rig.order(Order::Reset), None);
    assert!(
        rig.ticks(50).iter().all(|record| record.command.wheels == [0.0; 4] && record.mode == Mode::Standby)
    );
}

#[test]
fn a_stale_pose_stops_within_the_timeout_and_a_tick_and_needs_reset_and_a_new_start() {
    let mut rig = Rig::started(LINE);
    rig.ticks(60);
    let recorded = rig.start_order();
    rig.blind = true;
    let blind_since = rig.at;
    let stopped =
        (0..100).find_map(|_| Some(rig.tick()).filter(|record| record.mode == Mode::ProtectiveStop)).unwrap();
    assert!(stopped.at_ns - blind_since.0 <= 250_000_000 + 20_000_000);
    assert_eq!((stopped.cause, stopped.command.wheels), (Cause::StalePose, [0.0; 4]));
    assert_eq!(rig.order(Order::Reset), Some(Refusal::CauseRemains { cause: Cause::StalePose }));
    rig.blind = false;
    assert!(rig.ticks(20).iter().all(|record| record.mode == Mode::ProtectiveStop));
    assert_eq!(rig.order(Order::Reset), None);
    assert!(
        rig.ticks(20).iter().all(|record| record.mode == Mode::Standby && record.command.wheels == [0.0; 4])
    );
    assert_eq!(rig.order(Order::Start(recorded)), Some(Refusal::StartNumber));
    let mut resume = rig.start_order();
    resume.at = StartAt::Nearest;
    assert_eq!(rig.order(Order::Start(resume)), None);
    assert!(rig.tick().ref_x_m > 0.5, "resumes where the machine is, not at the beginning");
}

#[test]
fn a_start_passes_every_gate_or_is_refused_by_name() {
    let mut rig = Rig::new(&[("rate_hz", RATE_HZ)]);
    assert_eq!(rig.start(), Some(Refusal::NoPlan));
    assert_eq!(rig.load(LINE, false), None);
    let good = rig.start_order();
    let with = |change: fn(&mut Start)| {
        let mut start = good;
        change(&mut start);
        Order::Start(start)
    };
    assert_eq!(rig.order(with(|start| start.boot.0[0] ^= 1)), Some(Refusal::Boot));
    assert_eq!(rig.order(with(|start| start.plan.0[0] ^= 1)), Some(Refusal::PlanDigest));
    assert_eq!(rig.order(with(|start| start.start_number ^= 1)), Some(Refusal::StartNumber));
    let beyond = rig.order(with(|start| (start.at, start.plan_time_ns) = (StartAt::PlanTime, u64::MAX)));
    assert!(matches!(beyond, Some(Refusal::PlanTime { .. })), "{beyond:?}");
    rig.pose = Pose::new(0.0, 2.5, 0.0);
    rig.tick();
    assert!(matches!(rig.start(), Some(Refusal::TooFar { .. })));
    rig.at = rig.at + SpanNs(400_000_000);
    assert!(matches!(rig.start(), Some(Refusal::StalePose { .. })));
    assert_eq!(rig.node.mode(), Mode::Standby);
}

#[test]
fn a_repeated_order_gets_the_first_outcome_and_a_delayed_one_moves_nothing() {
    let mut rig = Rig::started(LINE);
    let start = rig.log.iter().rev().find_map(|entry| match entry.body {
        Body::Order(OrderEvent { order: Order::Start(start), .. }) => Some(start),
        _ => None,
    });
    let start = Order::Start(start.unwrap());
    rig.ticks(10);
    assert_eq!(rig.order_again(start), None, "the sender repeated it, for it had no answer");
    assert_eq!(rig.order_again(Order::Reset), Some(Refusal::SequenceReused));
    let sequence = rig.sequence;
    rig.order(Order::Stop(StopKind::Emergency));
    rig.order(Order::Reset);
    rig.sequence = sequence;
    rig.order_again(start);
    assert_eq!(rig.node.mode(), Mode::Standby, "a delayed duplicate of a start moves nothing");
    assert!(rig.ticks(20).iter().all(|record| record.command.wheels == [0.0; 4]));
}

#[test]
fn a_controlled_stop_brakes_on_the_path_with_its_share_of_the_deceleration() {
    let mut rig = Rig::started(r#"{"kind":"arc","radius_m":3,"turn_rad":6,"speed_m_s":1}"#);
    rig.ticks(700);
    let begin = rig.pose;
    assert_eq!(rig.order(Order::Stop(StopKind::Controlled)), None);
    let records = rig.until_standby();
    assert_eq!(records.last().unwrap().cause, Cause::RampEnded);
    assert_within_steps(&records);
    // v²/(2 · 0.7 a), as a chord of the arc; the discrete ramp is up to two ticks longer.
    let distance = rig.pose.distance_to(begin);
    assert!((0.70..0.76).contains(&distance), "{distance}");
    assert!(records.iter().all(|record| record.cross_error_m.abs() < 0.005));
}

#[test]
fn an_open_plan_that_runs_dry_stops_along_its_last_curvature() {
    let mut rig = Rig::new(&[("rate_hz", RATE_HZ)]);
    assert_eq!(rig.load(r#"{"kind":"arc","radius_m":3,"turn_rad":2,"speed_m_s":1}"#, true), None);
    rig.send_pose(1);
    assert_eq!(rig.start(), None);
    let records = rig.until_standby();
    assert!(records.iter().any(|record| record.has(flag::PLAN_DRY) && record.cause == Cause::PlanRanDry));
    assert!(
        (rig.pose.distance_to(Pose::new(0.0, 3.0, 0.0)) - 3.0).abs() < 0.01,
        "on the circle: {:?}",
        rig.pose
    );
    assert!(crate::math::wrap(rig.pose.heading_rad - 2.0) > 0.2, "beyond the plan's end: {:?}", rig.pose);
}

#[test]
fn one_estimator_at_a_time_and_stamps_that_rise() {
    let mut rig = Rig::new(&[("rate_hz", RATE_HZ)]);
    rig.send_pose(1);
    let refused = |rig: &Rig| match rig.log.last().unwrap().body {
        Body::PoseRefused(refused) => Some(refused.refusal),
        _ => None,
    };
    assert!(matches!(refused(&rig), Some(Refusal::StampNotRising { .. }) | None));
    rig.send_pose(1);
    assert!(matches!(refused(&rig), Some(Refusal::StampNotRising { .. })));
    rig.send_pose(2);
    assert!(matches!(refused(&rig), Some(Refusal::Lease { holder: 1, .. })));
    rig.at = rig.at + SpanNs(1_100_000_000);
    rig.send_pose(2);
    assert_eq!(refused(&rig), None);
    rig.at = rig.at + SpanNs(1);
    rig.pose.x_m = 1e9;
    rig.send_pose(2);
    assert!(matches!(refused(&rig), Some(Refusal::OutOfRange { .. })));
}

#[test]
fn a_plan_is_not_taken_while_one_is_followed() {
    let mut rig = Rig::started(LINE);
    rig.ticks(5);
    assert_eq!(rig.load(LINE, false), None, "the same plan again is no change");
    assert_eq!(
        rig.load(r#"{"kind":"dwell","duration_s":1}"#, false),
        Some(Refusal::Mode { mode: Mode::Tracking })
    );
    let refused = rig.load(r#"{"kind":"line","length_m":4,"speed_m_s":9}"#, false);
    assert!(refused.is_some());
    assert_eq!(rig.until_standby().last().unwrap().cause, Cause::PlanEnded);
    let finding = rig.load(r#"{"kind":"line","length_m":4,"speed_m_s":9}"#, false);
    assert_eq!(finding, Some(Refusal::PlanUnfit));
    assert!(
        rig.last_ack().findings[0].contains("speed 9.0000 m/s, the limit is 2 m/s"),
        "{:?}",
        rig.last_ack()
    );
}

#[test]
fn a_protective_stop_ramps_if_the_site_asks_for_it() {
    let mut rig = Rig::new(&[("rate_hz", RATE_HZ), ("protective_ramp_s", 0.5)]);
    rig.load(LINE, false);
    rig.send_pose(1);
    rig.start();
    rig.ticks(100);
    rig.blind = true;
    let records = rig.ticks(60);
    let ramp: Vec<f64> = records
        .iter()
        .filter(|record| record.mode == Mode::ProtectiveStop)
        .map(|record| record.command.speed_m_s)
        .collect();
    assert!(ramp[0] > 0.9 && (ramp[12] / ramp[0] - 0.52).abs() < 0.03, "{ramp:?}");
    assert!(ramp[25..].iter().all(|speed| *speed == 0.0), "{ramp:?}");
}

#[test]
fn a_trip_of_the_shell_is_zero_and_latched_past_every_ramp() {
    let mut rig = Rig::new(&[("rate_hz", RATE_HZ), ("protective_ramp_s", 0.5)]);
    rig.load(LINE, false);
    rig.send_pose(1);
    rig.start();
    rig.ticks(100);
    rig.event(Event::Trip(TripEvent { cause: Cause::StalledLoop }));
    assert_eq!(rig.node.mode(), Mode::ProtectiveStop);
    assert!(rig.ticks(5).iter().all(|record| record.command.wheels == [0.0; 4]));
}

#[test]
fn the_same_events_give_the_same_bits() {
    let run = || {
        let mut rig = Rig::started(LINE);
        rig.ticks(50);
        rig.order(Order::Stop(StopKind::Controlled));
        rig.until_standby();
        let mut results = digest::ResultDigest::default();
        rig.log.iter().for_each(|entry| results.add(&entry.body));
        (results.finish(), rig.log)
    };
    assert_eq!(run(), run());
}
