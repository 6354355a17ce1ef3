//! The measured run through the core, at its own stamps: what is accepted, flagged, stopped, and for which reason.

use trackhold_core::digest;
use trackhold_core::node::{Event, Node};
use trackhold_core::plan::compile;
use trackhold_core::time::TimeNs;
use trackhold_proto::blob::Hex;
use trackhold_proto::journal::{Body, Entry, Order, OrderEvent, PlanEvent, PoseEvent, TickRecord, flag};
use trackhold_proto::message::{Pose, Start};
use trackhold_proto::words::{Cause, Mode, StartAt};
use trackhold_tests::measured::{FIRST_ROW, Row, Track, rows, settings};

/// Transport delay of the simulated estimator, ns.
const DELAY_NS: u64 = 3_000_000;
const TICK_NS: u64 = 20_000_000;

struct Run {
    node: Node,
    log: Vec<Entry>,
    digest: Hex<32>,
}

impl Run {
    fn new(pose_timeout_s: f64, plan: &str) -> Self {
        let mut log = Vec::new();
        let mut node = Node::new(&settings(pose_timeout_s), Hex([3; 16]), 5, TimeNs(0), &mut log).unwrap();
        let raw = plan.as_bytes().to_vec();
        let digest = digest::of_bytes(&raw);
        let compiled = compile(&raw, &**node.vehicle()).map(Box::new);
        assert!(compiled.is_ok(), "{:?}", compiled.unwrap_err());
        let event = PlanEvent { session: 1, sequence: 1, digest, raw };
        node.handle(TimeNs(0), Event::Plan(event, compiled), &mut log);
        Self { node, log, digest }
    }

    fn start(&mut self, at_ns: u64, at: StartAt) {
        let (boot, start_number) = (self.node.boot(), self.node.start_number());
        let order = Order::Start(Start { boot, plan: self.digest, start_number, at, plan_time_ns: 0 });
        self.order(at_ns, order);
    }

    fn order(&mut self, at_ns: u64, order: Order) {
        let event = OrderEvent { session: 2, sequence: at_ns, received_ns: at_ns, order };
        self.node.handle(TimeNs(at_ns), Event::Order(event), &mut self.log);
        let refusal = self.log.iter().rev().find_map(|entry| match &entry.body {
            Body::Ack(ack) => Some(ack.refusal),
            _ => None,
        });
        assert_eq!(refusal.unwrap(), None, "at {} s", at_ns as f64 * 1e-9);
    }

    /// Feeds every row at its own stamp; starts with the driven stretch, and after a stop resets and resumes with the
    /// second pose that comes.
    fn feed(&mut self, rows: &[Row]) {
        let mut tick = 0;
        let mut poses_since_stop = 0;
        for (index, row) in rows.iter().enumerate() {
            let received_ns = row.stamp_ns() + DELAY_NS;
            while tick * TICK_NS <= received_ns {
                self.node.handle(TimeNs(tick * TICK_NS), Event::Tick, &mut self.log);
                tick += 1;
            }
            let pose = Pose {
                measured_ns: row.stamp_ns(),
                x_m: row.x_m,
                y_m: row.y_m,
                heading_rad: row.heading_rad,
                position_sd_m: 0.0,
                heading_sd_rad: 0.0,
            };
            let event = PoseEvent { session: 9, sequence: index as u64, received_ns, pose };
            self.node.handle(TimeNs(received_ns), Event::Pose(event), &mut self.log);
            if index == FIRST_ROW {
                self.start(received_ns + 1, StartAt::Beginning);
            }
            if self.node.mode() == Mode::ProtectiveStop {
                poses_since_stop += 1;
                if poses_since_stop == 2 {
                    self.order(received_ns + 1, Order::Reset);
                    self.start(received_ns + 2, StartAt::Nearest);
                }
            }
        }
    }

    fn records(&self) -> impl Iterator<Item = &TickRecord> {
        self.log.iter().filter_map(|entry| match &entry.body {
            Body::Tick(record) => Some(record),
            _ => None,
        })
    }

    /// Stamps (s) of the poses that were refused, with the refusal.
    fn refused(&self) -> usize {
        self.log.iter().filter(|entry| matches!(entry.body, Body::PoseRefused(_))).count()
    }

    fn flagged_at_s(&self, flags: u32) -> Vec<f64> {
        self.records().filter(|record| record.has(flags)).map(|record| record.at_ns as f64 * 1e-9).collect()
    }

    fn stops(&self) -> Vec<(f64, Cause)> {
        self.log
            .iter()
            .filter_map(|entry| match &entry.body {
                Body::ModeChange(change) if change.to == Mode::ProtectiveStop => {
                    Some((entry.at_ns as f64 * 1e-9, change.cause))
                }
                _ => None,
            })
            .collect()
    }
}

fn rms(values: impl Iterator<Item = f64>) -> f64 {
    let (sum, count) = values.fold((0.0, 0_u32), |(sum, count), value| (sum + value * value, count + 1));
    (sum / f64::from(count)).sqrt()
}

#[test]
fn the_smoothed_track_is_the_one_computed_with_scipy() {
    let Some(rows) = rows() else { return };
    let track = Track::through(&rows);
    // SciPy 1.17, banded solve of the same normal equations: position, velocity, acceleration at t = 100 s.
    let expected = [[-3.867_221, -3.297_039, 0.193_100], [-0.507_819, 0.891_563, 1.373_350]];
    for (spline, expected) in [&track.x, &track.y].into_iter().zip(expected) {
        for (value, expected) in spline.at(100.0).into_iter().zip(expected) {
            assert!((value - expected).abs() < 2e-6, "{value} {expected}");
        }
    }
}

#[test]
fn a_quarter_second_timeout_stops_over_the_gap_and_nowhere_else() {
    let Some(rows) = rows() else { return };
    let mut run = Run::new(0.25, &Track::through(&rows).plan());
    run.feed(&rows);
    assert_eq!(run.refused(), 0, "every pose is well formed, in range and in order");
    // The gap of 0.3496 s begins at 214.640 s: stale a quarter of a second later, flagged when the next pose comes.
    let stops = run.stops();
    assert_eq!(stops.len(), 1, "{stops:?}");
    assert_eq!(stops[0].1, Cause::StalePose);
    assert!((214.64 + 0.25..214.64 + 0.25 + 0.024).contains(&stops[0].0), "{stops:?}");
    let gaps = run.flagged_at_s(flag::POSE_GAP);
    assert!(gaps.len() == 1 && (214.98..215.02).contains(&gaps[0]), "{gaps:?}");
    assert!(run.flagged_at_s(flag::POSE_IMPLAUSIBLE).is_empty(), "6 m/s explains every step");
    // The reference is the same track smoothed: what is left is what smoothing took away, and the poses' own age.
    let tracked =
        || run.records().filter(|record| record.mode == Mode::Tracking && !record.has(flag::SETTLING));
    assert!(tracked().count() > 18_000);
    let cross = rms(tracked().map(|record| record.cross_error_m));
    let worst = tracked().map(|record| record.cross_error_m.abs()).fold(0.0, f64::max);
    let heading = rms(tracked().map(|record| record.heading_error_rad));
    println!("cross-track RMS {cross:.4} m, worst {worst:.4} m, heading RMS {heading:.4} rad");
    assert!(cross < 0.01 && worst < 0.06 && heading < 0.05, "{cross} {worst} {heading}");
}

#[test]
fn a_shorter_timeout_flags_the_late_stamp_too_and_a_longer_one_drives_over_the_gap() {
    let Some(rows) = rows() else { return };
    let plan = Track::through(&rows).plan();
    let mut short = Run::new(0.15, &plan);
    short.feed(&rows);
    let gaps = short.flagged_at_s(flag::POSE_GAP);
    // Row 4047 is stamped 0.192 s after the row before; the plan is over by then, so nothing stops.
    assert!(gaps.len() == 2 && (405.30..405.34).contains(&gaps[1]), "{gaps:?}");
    assert_eq!(short.stops().len(), 1);
    let mut long = Run::new(0.5, &plan);
    long.feed(&rows);
    assert!(long.stops().is_empty() && long.flagged_at_s(flag::POSE_GAP).is_empty());
}

#[test]
fn without_the_heading_offset_the_start_is_refused_or_the_machine_flees() {
    let Some(rows) = rows() else { return };
    let plan = Track::through(&rows).plan();
    let mut log = Vec::new();
    let mut site = settings(0.25);
    site.pose.set("heading_offset_rad", 0.0);
    site.node.set("start_heading_rad", 1.0);
    let mut node = Node::new(&site, Hex([3; 16]), 5, TimeNs(0), &mut log).unwrap();
    let raw = plan.into_bytes();
    let digest = digest::of_bytes(&raw);
    let compiled = compile(&raw, &**node.vehicle()).map(Box::new);
    node.handle(
        TimeNs(0),
        Event::Plan(PlanEvent { session: 1, sequence: 1, digest, raw }, compiled),
        &mut log,
    );
    let row = rows[FIRST_ROW];
    let pose = Pose {
        measured_ns: row.stamp_ns(),
        x_m: row.x_m,
        y_m: row.y_m,
        heading_rad: row.heading_rad,
        position_sd_m: 0.0,
        heading_sd_rad: 0.0,
    };
    node.handle(
        TimeNs(1),
        Event::Pose(PoseEvent { session: 9, sequence: 1, received_ns: 1, pose }),
        &mut log,
    );
    let (boot, start_number) = (node.boot(), node.start_number());
    let start = Start { boot, plan: digest, start_number, at: StartAt::Beginning, plan_time_ns: 0 };
    let order = OrderEvent { session: 2, sequence: 1, received_ns: 1, order: Order::Start(start) };
    node.handle(TimeNs(1), Event::Order(order), &mut log);
    let Some(Body::Ack(ack)) = log.last().map(|entry| &entry.body) else {
        panic!("an order is acknowledged")
    };
    assert_eq!(ack.refusal.unwrap().name(), "turned-away");
}
