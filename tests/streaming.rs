//! A planner that plans anew ten times a second, over a link that loses, doubles and reorders: what it sends is followed
//! whole or refused, and the reference never jumps. Core, the daemon's assembler and the faulty link, in simulated time.

use simrobot::{Link, LinkSpec};
use std::collections::{BTreeMap, BTreeSet};
use trackhold::intake::transfer::{Assembler, Outcome};
use trackhold_core::digest;
use trackhold_core::geometry::{BodyVelocity, Pose};
use trackhold_core::keys::Values;
use trackhold_core::math;
use trackhold_core::node::{Event, Node};
use trackhold_core::plan;
use trackhold_core::settings::{LawSettings, Settings, VehicleSettings};
use trackhold_core::time::{TimeNs, tick_offset};
use trackhold_proto::blob::{Blob, Digest, Hex, Text};
use trackhold_proto::journal::{Body, Entry, Order, OrderEvent, PlanEvent, PoseEvent, TickRecord};
use trackhold_proto::message::{Ack, PlanPart, Pose as PoseMessage, Start};
use trackhold_proto::words::{Mode, Refusal, StartAt};
use trackhold_proto::{Envelope, Message};

const RATE_HZ: f64 = 100.0;
const TICKS: u64 = 10_000;
const SPEED_M_S: f64 = 1.0;
const TOP_CURVATURE_1_M: f64 = 0.5;
/// Points lie a planner's period apart, s.
const GRID_S: f64 = 0.1;
const GRID_TICKS: u64 = 10;
/// A plan begins so many points ahead of now, keeps the next ones, and draws those behind them anew.
const AHEAD: usize = 3;
const KEPT: usize = 10;
const HORIZON: usize = 20;
/// Every so manieth plan is half a metre off and has to be refused.
const BAD_EVERY: u32 = 17;
/// The planner is killed at this tick and its successor begins at that one.
const KILLED: u64 = 4_005;
const REPLACED: u64 = 4_065;

/// A planner with its own idea of the way, of which it changes everything beyond the next second with each plan.
struct Planner {
    seed: u64,
    way: Vec<(Pose, f64)>,
    session: u64,
    sequence: u64,
    revision: u32,
    parts: Vec<(u64, PlanPart)>,
    good: BTreeSet<Digest>,
    bad: BTreeSet<Digest>,
    outcomes: BTreeMap<Digest, bool>,
}

impl Planner {
    fn new() -> Self {
        Self {
            seed: 7,
            way: vec![(Pose::default(), 0.0)],
            session: 100,
            sequence: 0,
            revision: 0,
            parts: Vec::new(),
            good: BTreeSet::new(),
            bad: BTreeSet::new(),
            outcomes: BTreeMap::new(),
        }
    }

    fn draw_way(&mut self, from: usize, to: usize) {
        self.way.truncate(from + 1);
        while self.way.len() <= to {
            let (pose, curvature) = self.way[self.way.len() - 1];
            // Marsaglia's xorshift64, Journal of Statistical Software 8(14), 2003.
            self.seed ^= self.seed << 13;
            self.seed ^= self.seed >> 7;
            self.seed ^= self.seed << 17;
            let change = 0.1 * (self.seed as f64 / u64::MAX as f64 - 0.5);
            let next = (curvature + change).clamp(-TOP_CURVATURE_1_M, TOP_CURVATURE_1_M);
            let length = SPEED_M_S * GRID_S;
            self.way.push((pose.along_arc(length, 0.5 * (curvature + next) * length), next));
        }
    }

    /// The plan from a point on: the next ones as before, those behind anew.
    fn plan(&mut self, first: usize) -> Vec<u8> {
        self.draw_way(first + KEPT, first + HORIZON);
        self.revision += 1;
        let off_m = if self.revision.is_multiple_of(BAD_EVERY) { 0.5 } else { 0.0 };
        let point = |index: usize| {
            let (pose, _) = self.way[index];
            (index as f64 * GRID_S, pose.x_m + off_m, pose.y_m, pose.heading_rad)
        };
        let points: Vec<String> = (first..=first + HORIZON)
            .map(|index| {
                let (t_s, x_m, y_m, heading_rad) = point(index);
                format!(
                    r#"{{"t_s":{t_s},"x_m":{x_m},"y_m":{y_m},"heading_rad":{heading_rad},"speed_m_s":{SPEED_M_S}}}"#
                )
            })
            .collect();
        let (at_s, x_m, y_m, heading_rad) = point(first);
        let continues =
            if self.revision == 1 { String::new() } else { format!(r#""continues":{{"at_s":{at_s}}},"#) };
        let json = format!(
            r#"{{"format":"trackhold-plan/1","id":"anew","revision":{},"open":true,{continues}
            "start":{{"x_m":{x_m},"y_m":{y_m},"heading_rad":{heading_rad}}},"segments":[{{"kind":"samples","points":[{}]}}]}}"#,
            self.revision,
            points.join(",")
        );
        let raw = plan::pack(json.as_bytes()).expect("plain samples");
        let digest = digest::of_bytes(&raw);
        if off_m == 0.0 {
            self.good.insert(digest)
        } else {
            self.bad.insert(digest)
        };
        raw
    }

    fn cut(&mut self, raw: &[u8]) {
        let (digest, part_bytes) = (digest::of_bytes(raw), 400);
        self.parts.clear();
        for (part, bytes) in raw.chunks(part_bytes).enumerate() {
            self.sequence += 1;
            let (total_bytes, part_bytes, part) = (raw.len() as u32, part_bytes as u32, part as u32);
            let bytes = Blob::new(bytes).expect("short");
            self.parts.push((self.sequence, PlanPart { digest, total_bytes, part_bytes, part, bytes }));
        }
    }

    /// All parts of the newest plan, until its outcome is known.
    fn send(&self, at: TimeNs, link: &mut Link) {
        for (sequence, part) in &self.parts {
            if !self.outcomes.contains_key(&part.digest) {
                let message = Message::PlanPart(*part);
                link.send(
                    at,
                    &Envelope { session: self.session, sequence: *sequence, stamp_ns: at.0, message }
                        .to_vec(),
                );
            }
        }
    }

    fn hear(&mut self, ack: &Ack) {
        if ack.order_session == self.session {
            self.outcomes.insert(ack.plan, ack.accepted == 1);
        }
    }

    /// Another process in its place: a session of its own, and the revision that the status shows.
    fn restart(&mut self, in_force: u32) {
        self.session += 1;
        self.sequence = 0;
        self.parts.clear();
        self.revision = self.revision.max(in_force);
    }
}

/// The robot's side: assembler, compiler and node, and an ideal machine.
struct Robot {
    node: Node,
    assembler: Assembler,
    fresh: Vec<Entry>,
    entries: Vec<Entry>,
    acks: BTreeMap<(u64, Digest), Ack>,
    pose: Pose,
}

impl Robot {
    fn new() -> Self {
        let mut fresh = Vec::new();
        let node = Node::new(&settings(), Hex([1; 16]), 1, TimeNs(0), &mut fresh).expect("settings hold");
        let (assembler, entries, acks) = Default::default();
        Self { node, assembler, fresh, entries, acks, pose: Pose::default() }
    }

    fn handle(&mut self, at: TimeNs, event: Event) {
        self.node.handle(at, event, &mut self.fresh);
        self.entries.append(&mut self.fresh);
    }

    fn datagram(&mut self, at: TimeNs, bytes: &[u8]) -> Option<Ack> {
        let Envelope { session, sequence, message, .. } =
            Envelope::decode(bytes).expect("nothing is damaged");
        let Message::PlanPart(part) = message else { unreachable!() };
        match self.assembler.part(session, sequence, &part, at) {
            Outcome::Whole(whole) => {
                assert_eq!(digest::of_bytes(&whole.raw), whole.digest, "never mixed");
                let compiled = plan::compile(&whole.raw, &**self.node.vehicle()).map(Box::new);
                let (digest, raw) = (whole.digest, whole.raw);
                self.handle(at, Event::Plan(PlanEvent { session, sequence, digest, raw }, compiled));
                let ack = self.last_ack(digest);
                self.acks.insert((session, digest), ack);
                Some(ack)
            }
            Outcome::Again => self.acks.get(&(session, part.digest)).copied(),
            _ => None,
        }
    }

    fn last_ack(&self, digest: Digest) -> Ack {
        let ack = self.entries.iter().rev().find_map(|entry| match &entry.body {
            Body::Ack(ack) => Some(ack),
            _ => None,
        });
        let ack = ack.expect("every plan is answered");
        Ack {
            order_session: ack.session,
            order_sequence: ack.sequence,
            order_kind: ack.order_kind,
            accepted: u32::from(ack.refusal.is_none()),
            plan: digest,
            text: Text::cut(&ack.refusal.map(|refusal| refusal.to_string()).unwrap_or_default()),
        }
    }

    fn tick(&mut self, k: u64) -> TickRecord {
        let at = TimeNs(tick_offset(k, RATE_HZ).0);
        self.send_pose(at);
        self.handle(at, Event::Tick);
        let record = self.entries.iter().rev().find_map(|entry| match &entry.body {
            Body::Tick(record) => Some(*record),
            _ => None,
        });
        let record = record.expect("a tick has a record");
        let velocity = BodyVelocity {
            speed_m_s: record.command.speed_m_s,
            turn_rate_rad_s: record.command.turn_rate_rad_s,
        };
        self.pose = self
            .pose
            .moved(velocity, tick_offset(k + 1, RATE_HZ).seconds() - tick_offset(k, RATE_HZ).seconds());
        record
    }

    fn send_pose(&mut self, at: TimeNs) {
        let Pose { x_m, y_m, heading_rad } = self.pose;
        let pose = PoseMessage {
            measured_ns: at.0 + 1,
            x_m,
            y_m,
            heading_rad,
            position_sd_m: 0.0,
            heading_sd_rad: 0.0,
        };
        self.handle(at, Event::Pose(PoseEvent { session: 1, sequence: at.0, received_ns: at.0, pose }));
    }

    fn start(&mut self, at: TimeNs, plan: Digest) {
        self.send_pose(at);
        let (boot, start_number) = (self.node.boot(), self.node.start_number());
        let start = Start { boot, plan, start_number, at: StartAt::Beginning, plan_time_ns: 0 };
        let order = Order::Start(start);
        self.handle(at, Event::Order(OrderEvent { session: 2, sequence: 1, received_ns: at.0, order }));
        assert_eq!(self.node.mode(), Mode::Tracking);
    }
}

fn settings() -> Settings {
    let of = |pairs: &[(&str, f64)]| {
        let mut values = Values::default();
        pairs.iter().for_each(|(key, value)| values.set(key, *value));
        values
    };
    let vehicle = of(&[
        ("wheel_radius_m", 0.1),
        ("track_width_m", 0.5),
        ("max_wheel_speed_rad_s", 20.0),
        ("max_wheel_accel_rad_s2", 30.0),
    ]);
    Settings {
        vehicle: VehicleSettings { kind: "differential".into(), values: vehicle },
        law: LawSettings { name: "kanayama".into(), gains: Values::default() },
        node: of(&[("rate_hz", RATE_HZ), ("planner_lease_s", 0.3)]),
        ..Settings::default()
    }
}

fn faulty(seed: u64) -> Link {
    let spec = LinkSpec {
        loss: 0.2,
        delay_s: 0.005,
        jitter_s: 0.01,
        duplicate: 0.1,
        reorder: 0.1,
        ..LinkSpec::default()
    };
    Link::new(spec, seed).expect("a link")
}

fn assert_no_jump(before: &TickRecord, now: &TickRecord) {
    let place = |record: &TickRecord| Pose::new(record.ref_x_m, record.ref_y_m, record.ref_heading_rad);
    let step_m = place(now).distance_to(place(before));
    assert!(step_m <= SPEED_M_S / RATE_HZ * 1.001, "{step_m} m at tick {}", now.tick);
    let turn = math::wrap(now.ref_heading_rad - before.ref_heading_rad).abs();
    assert!(turn <= TOP_CURVATURE_1_M * SPEED_M_S / RATE_HZ * 1.2, "{turn} rad at tick {}", now.tick);
}

#[test]
fn replacing_a_plan_ten_times_a_second_over_a_bad_link_never_jumps() {
    let (mut planner, mut robot) = (Planner::new(), Robot::new());
    let (mut there, mut back) = (faulty(1), faulty(2));
    // The first plan comes at rest, before the start.
    let first = planner.plan(0);
    planner.cut(&first);
    for (sequence, part) in planner.parts.clone() {
        let message = Message::PlanPart(part);
        let part = Envelope { session: planner.session, sequence, stamp_ns: 0, message }.to_vec();
        robot.datagram(TimeNs(0), &part).iter().for_each(|ack| planner.hear(ack));
    }
    robot.start(TimeNs(0), digest::of_bytes(&first));
    let mut before: Option<TickRecord> = None;
    for k in 0..TICKS {
        let at = TimeNs(tick_offset(k, RATE_HZ).0);
        if k == KILLED {
            // In the middle of a plan.
            planner.parts.clear();
        }
        if k == REPLACED {
            planner.restart(robot.node.plan().map_or(0, plan::Plan::revision));
        }
        let alive = !(KILLED..REPLACED).contains(&k);
        if k > 0 && alive && k.is_multiple_of(GRID_TICKS) {
            let raw = planner.plan((k / GRID_TICKS) as usize + AHEAD);
            planner.cut(&raw);
        }
        if matches!(k % GRID_TICKS, 0 | 3 | 6 | 8) {
            planner.send(at, &mut there);
        }
        while let Some((arrival, bytes)) = there.poll(at) {
            if let Some(ack) = robot.datagram(arrival, &bytes) {
                back.send(
                    arrival,
                    &Envelope { session: 9, sequence: 1, stamp_ns: 0, message: Message::Ack(ack) }.to_vec(),
                );
            }
        }
        while let Some((_, bytes)) = back.poll(at) {
            let Ok(Envelope { message: Message::Ack(ack), .. }) = Envelope::decode(&bytes) else {
                unreachable!()
            };
            planner.hear(&ack);
        }
        let record = robot.tick(k);
        assert_eq!(record.mode, Mode::Tracking, "tick {k}: {}", record.cause);
        if let Some(before) = before.replace(record) {
            assert_no_jump(&before, &record);
        }
    }
    assert!(there.counts().lost > 500 && there.counts().held_back > 300, "{:?}", there.counts());
    check_outcomes(&planner, &robot);
}

fn check_outcomes(planner: &Planner, robot: &Robot) {
    let taken: Vec<Digest> = robot
        .entries
        .iter()
        .filter_map(|entry| match &entry.body {
            Body::PlanLoaded(loaded) => Some(loaded.digest),
            _ => None,
        })
        .collect();
    assert!(taken.iter().all(|digest| planner.good.contains(digest)), "whole, and none that steps");
    assert!(taken.len() > 850, "{} of {} plans were followed", taken.len(), planner.good.len());
    let refused = robot.entries.iter().filter_map(|entry| match &entry.body {
        Body::Ack(ack) => Some((ack.plan, ack.refusal?)),
        _ => None,
    });
    let mut steps = 0;
    for (digest, refusal) in refused {
        match refusal {
            Refusal::PositionStep { step_m, limit_m, .. } => {
                assert!(planner.bad.contains(&digest) && step_m > 0.4 && limit_m == 0.01);
                steps += 1;
            }
            Refusal::TooSoon { .. } | Refusal::RevisionNotRising { .. } | Refusal::Lease { .. } => {}
            other => panic!("{other}"),
        }
    }
    assert!(steps > 40, "{steps} of {} bad plans arrived", planner.bad.len());
    let heard = planner.outcomes.values().filter(|accepted| **accepted).count();
    assert!(heard > 700, "{heard} plans were acknowledged");
}
