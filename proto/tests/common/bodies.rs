//! A fixed sample of every journal body.

use super::{command, counting, pose, start};
use trackhold_proto::blob::{Hex, Text};
use trackhold_proto::journal::*;
use trackhold_proto::message::WheelLayout;
use trackhold_proto::words::*;

/// One frame as bytes.
pub(crate) fn frame_of(number: u64, body: Body) -> Vec<u8> {
    let mut bytes = Vec::new();
    write_frame(&Entry { number, at_ns: 1_000_000_000 + number, body }, &mut bytes);
    bytes
}

/// A pose as it arrived.
pub(crate) fn pose_event() -> Body {
    Body::Pose(PoseEvent { session: u64::MAX, sequence: 1, received_ns: 2, pose: pose() })
}

fn tick() -> TickRecord {
    TickRecord {
        tick: 7,
        at_ns: 70_000_000,
        mode: Mode::Tracking,
        cause: Cause::Operator,
        regime: Regime::Pivoting,
        flags: flag::HAS_POSE | flag::HAS_REFERENCE | flag::POSE_GAP,
        start_number: u64::MAX,
        plan_time_ns: 60_000_000,
        plan_rate: 0.5,
        speed_cap: 0.75,
        pose_age_ns: 12_000_000,
        clock_offset_ns: -5_000_000_000,
        x_m: -1.0,
        y_m: 2.0,
        heading_rad: 3.0,
        ref_x_m: -1.125,
        ref_y_m: 2.25,
        ref_heading_rad: 3.0625,
        ref_speed_m_s: -0.5,
        ref_turn_rate_rad_s: 0.125,
        ref_curvature_1_m: -0.25,
        ref_accel_m_s2: 0.75,
        along_error_m: 0.1,
        cross_error_m: -0.2,
        heading_error_rad: -0.0625,
        wanted_speed_m_s: -0.55,
        wanted_turn_rate_rad_s: 0.13,
        command: command(WheelLayout::LeftRight),
    }
}

fn order(sequence: u64, order: Order) -> Body {
    Body::Order(OrderEvent { session: 1 << 63, sequence, received_ns: 44, order })
}

fn ack(order_kind: u32, refusal: Option<Refusal>, findings: &[&str]) -> Body {
    Body::Ack(AckEffect {
        session: u64::MAX,
        sequence: 9,
        order_kind,
        plan: Hex(counting(0)),
        refusal,
        findings: findings.iter().map(ToString::to_string).collect(),
    })
}

fn events() -> Vec<Body> {
    let exchange = ExchangeEvent {
        session: u64::MAX,
        request_sent_ns: 1,
        request_received_ns: u64::MAX - 3,
        reply_sent_ns: u64::MAX - 2,
        reply_received_ns: 5,
    };
    let raw = super::PLAN.as_bytes().to_vec();
    vec![
        Body::Boot(Boot {
            boot: Hex(counting(0x80)),
            seed: u64::MAX,
            settings: "{\"node\":{\"rate_hz\":100}}".into(),
            build: "0.1.0 – Prüfstand".into(),
        }),
        pose_event(),
        Body::Exchange(exchange),
        Body::Plan(PlanEvent { session: 3, sequence: 4, digest: Hex(counting(0)), raw }),
        order(5, Order::Start(start())),
        order(6, Order::Stop(StopKind::Controlled)),
        order(7, Order::Reset),
        order(8, Order::Cap { share: 0.4 }),
        Body::Trip(TripEvent { cause: Cause::StalledLoop }),
        Body::Note(Note::Malformed { count: 3, last: Text::cut("byte 4: protocol version 9") }),
        Body::Note(Note::EventsDropped { count: 1 }),
        Body::Note(Note::Lateness { ticks: 1000, mean_ns: 21_000, worst_ns: 480_000 }),
        Body::Note(Note::Refused { text: Text::cut("real-time priority: not permitted – läuft ohne") }),
    ]
}

/// At least one of every body.
pub(crate) fn bodies() -> Vec<Body> {
    let change = ModeChange {
        from: Mode::Tracking,
        to: Mode::ProtectiveStop,
        cause: Cause::StalePose,
        start_number: u64::MAX,
    };
    let refused = PoseRefused {
        session: u64::MAX,
        sequence: 10,
        refusal: Refusal::StampNotRising { stamp_ns: 1, last_ns: u64::MAX },
    };
    let loaded = PlanLoaded {
        digest: Hex(counting(0)),
        id: Text::cut("Hof Süd — Reihe 3"),
        revision: u32::MAX,
        open: true,
        duration_ns: 61_000_000_001,
        length_m: 30.5,
    };
    let waits = PlanWaits {
        digest: Hex(counting(0)),
        revision: 8,
        at_ns: 12_500_000_000,
        position_step_m: 0.0005,
        curvature_step_1_m: 0.25,
        waiting: 2,
    };
    let changed = LawChanged {
        name: Text::cut("kanayama"),
        gains: "{\"k_heading\":6.0,\"k_x\":1.5,\"k_y\":9.0}".into(),
        bandwidth_rad_s: 4.5,
        speed_m_s: 1.5,
    };
    let mut all = events();
    all.extend([
        Body::Tick(tick()),
        ack(3, None, &[]),
        ack(3, Some(Refusal::TurnedAway { heading_error_rad: -1.5, limit_rad: 0.5 }), &[]),
        ack(2, Some(Refusal::PlanUnfit), &["segment 3: end_speed_m_s −1 < 0", ""]),
        Body::Command(command(WheelLayout::SpeedSteer)),
        Body::ModeChange(change),
        Body::PoseRefused(refused),
        Body::PlanLoaded(loaded),
        Body::Gap(Gap { first: 4, last: 1 << 53 }),
        Body::End(End { entries: 21, digest: Hex(counting(0x40)) }),
        Body::PlanWaits(waits),
        Body::Tune(TuneEvent { session: u64::MAX, sequence: 11, received_ns: 45, law: super::LAW.into() }),
        Body::LawChanged(changed),
    ]);
    all
}
