//! What the tests of this crate share: fixed samples of every message and every journal body, and where files lie.
#![allow(dead_code, reason = "each test program uses its own part of this")]

pub(crate) mod arbitrary;
pub(crate) mod bodies;
pub(crate) mod spec;

use std::path::PathBuf;
use trackhold_proto::blob::{Blob, Hex, Text};
use trackhold_proto::message::*;
use trackhold_proto::words::*;
use trackhold_proto::{Envelope, Message};

/// The folder of the golden files.
pub(crate) fn vectors() -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("vectors")
}

/// Compares `bytes` with the golden file, or writes it where `TRACKHOLD_WRITE_VECTORS=1` asks for that.
pub(crate) fn check_golden(file: &str, bytes: &[u8]) {
    let path = vectors().join(file);
    if std::env::var_os("TRACKHOLD_WRITE_VECTORS").is_some_and(|value| value == "1") {
        std::fs::write(&path, bytes).unwrap();
    }
    let golden = std::fs::read(&path)
        .unwrap_or_else(|error| panic!("vectors/{file}: {error}; TRACKHOLD_WRITE_VECTORS=1 writes it anew"));
    assert!(golden == bytes, "vectors/{file} holds other bytes than this program writes");
}

/// Fixed bytes that differ from each other.
pub(crate) fn counting<const N: usize>(from: u8) -> [u8; N] {
    core::array::from_fn(|at| from.wrapping_add(at as u8))
}

fn blob<const N: usize>(bytes: &[u8]) -> Blob<N> {
    Blob::new(bytes).unwrap()
}

/// The plan that the plan-part vectors carry.
pub(crate) const PLAN: &str = "{\"id\":\"Hof Süd — Reihe 3\",\"revision\":4294967295}";

/// The law that the tune vectors carry.
pub(crate) const LAW: &str = "{\"name\":\"kanayama\",\"gains\":{\"k_x\":1.5,\"k_y\":9,\"k_heading\":6}}";

/// Fixed messages: at least one of every kind, named kind or kind.variant.
pub(crate) fn samples() -> Vec<(&'static str, Envelope)> {
    let mut all = requests();
    all.extend(replies());
    all
}

fn envelope(sequence: u64, message: Message) -> Envelope {
    Envelope { session: 0xfedc_ba98_7654_3210, sequence, stamp_ns: 1_234_567_890_123_456_789, message }
}

/// A pose with every field in use.
pub(crate) fn pose() -> Pose {
    Pose {
        measured_ns: u64::MAX - 1,
        x_m: -12.34375,
        y_m: 0.1,
        heading_rad: -core::f64::consts::PI,
        position_sd_m: 0.015,
        heading_sd_rad: 1e-310,
    }
}

/// A start with every field in use.
pub(crate) fn start() -> Start {
    Start {
        boot: Hex(counting(0x80)),
        plan: Hex(counting(0xf0)),
        start_number: u64::MAX,
        at: StartAt::PlanTime,
        plan_time_ns: 9_007_199_254_740_993,
    }
}

fn requests() -> Vec<(&'static str, Envelope)> {
    use Message as M;
    let (whole, short) = (PLAN.as_bytes(), &PLAN.as_bytes()[32..]);
    let part = |part, bytes| PlanPart {
        digest: Hex(counting(0)),
        total_bytes: whole.len() as u32,
        part_bytes: 32,
        part,
        bytes: blob(bytes),
    };
    let resume = Start {
        at: StartAt::Nearest,
        plan_time_ns: 0,
        start_number: 1 << 63,
        plan: Hex(counting(3)),
        ..start()
    };
    let reply = TimeReply {
        request_sent_ns: 1 << 63,
        request_received_ns: 9_007_199_254_740_993,
        reply_sent_ns: 9_007_199_254_740_995,
    };
    vec![
        ("pose", envelope(1, M::Pose(pose()))),
        ("plan-part", envelope(2, M::PlanPart(part(0, &whole[..32])))),
        ("plan-part.last", envelope(3, M::PlanPart(part(1, short)))),
        ("start", envelope(4, M::Start(start()))),
        ("start.nearest", envelope(5, M::Start(resume))),
        ("stop", envelope(6, M::Stop(Stop { stop: StopKind::Emergency }))),
        ("stop.controlled", envelope(7, M::Stop(Stop { stop: StopKind::Controlled }))),
        ("reset", envelope(u64::MAX, M::Reset(Reset {}))),
        ("subscribe", envelope(8, M::Subscribe(Subscribe { want: 5, lease_ms: 3000 }))),
        (
            "journal-request",
            envelope(9, M::JournalRequest(JournalRequest { first: (1 << 53) + 1, last: u64::MAX - 1 })),
        ),
        ("status-request", envelope(0, M::StatusRequest(StatusRequest {}))),
        ("time-reply", envelope(10, M::TimeReply(reply))),
        ("cap", envelope(15, M::Cap(Cap { share: 0.4 }))),
        ("tune", envelope(16, M::Tune(Tune { law: Text::cut(LAW) }))),
    ]
}

/// A command in each layout.
pub(crate) fn command(layout: WheelLayout) -> Command {
    let wheels = match layout {
        WheelLayout::Body => [-0.75, 0.3, 0.0, 0.0],
        WheelLayout::LeftRight => [-7.1, -5.3, 0.0, 0.0],
        WheelLayout::SpeedSteer => [1.25, -0.45, 0.0, 0.0],
        WheelLayout::Ackermann => [1.25, 0.43, 0.34, 0.0],
        WheelLayout::SteeredWheel => [-0.85, 1.5, 0.0, 0.0],
    };
    Command {
        mode: Mode::Tracking,
        layout,
        valid_ns: 100_000_000,
        speed_m_s: -0.625,
        turn_rate_rad_s: 0.2,
        wheels,
    }
}

/// A status with every field in use.
pub(crate) fn status() -> Status {
    Status {
        boot: Hex(counting(0x80)),
        start_number: u64::MAX,
        mode: Mode::ProtectiveStop,
        cause: Cause::StalePose,
        plan: Hex(counting(0xf0)),
        plan_id: Text::cut("Hof Süd — Reihe 3 ✓"),
        plan_revision: u32::MAX,
        plan_duration_ns: 61_000_000_001,
        plan_time_ns: 60_999_999_999,
        tick: 6_100,
        has_pose: 1,
        x_m: -12.34375,
        y_m: 0.1,
        heading_rad: -3.0000000000000004,
        pose_age_ns: 17_000_001,
        clock_offset_ns: -9_007_199_254_740_993,
        along_error_m: -0.0125,
        cross_error_m: 1e-9,
        heading_error_rad: -2.5e-3,
        command_subscribers: 1,
        journal_subscribers: 2,
        oldest_entry: 3,
        next_entry: 123_456,
        counters: Counters {
            datagrams: 11,
            malformed: 12,
            misdirected: 13,
            poses: 14,
            poses_refused: 15,
            orders_refused: 16,
            plans_refused: 17,
            events_dropped: 18,
            entries_lost: 19,
            ticks_late: u64::MAX,
            ticks_thin: 20,
        },
        regime: Regime::Moving,
        plan_rate: 0.375,
        speed_cap: 0.4,
        bandwidth_rad_s: 4.5,
        law: Text::cut("kanayama"),
        gains: Text::cut("{\"k_heading\":6.0,\"k_x\":1.5,\"k_y\":9.0}"),
    }
}

fn acks() -> [Ack; 2] {
    let refused = Ack {
        order_session: 0xfedc_ba98_7654_3210,
        order_sequence: u64::MAX,
        order_kind: 3,
        accepted: 0,
        plan: Hex([0; 32]),
        text: Text::cut(
            "start: the heading is −1.571 rad off\n\"turn\" the machine first – größer als 0,5 rad",
        ),
    };
    [refused, Ack { order_kind: 2, accepted: 1, plan: Hex(counting(0)), text: Text::cut(""), ..refused }]
}

fn replies() -> Vec<(&'static str, Envelope)> {
    use Message as M;
    let [refused, accepted] = acks();
    let frames = JournalPart {
        first: 6_000,
        entries: 1,
        part: 0,
        parts: 1,
        bytes: blob(&bodies::frame_of(6_000, bodies::pose_event())),
    };
    let part = JournalPart { first: 0, part: 2, parts: 3, bytes: blob(&[0, 0xff, 0x7b, 0xa7]), ..frames };
    let granted = Subscribed {
        boot: Hex(counting(0x80)),
        want: 5,
        lease_ms: 3000,
        oldest_entry: (1 << 53) + 1,
        next_entry: u64::MAX - 1,
    };
    vec![
        ("ack", envelope(1, M::Ack(refused))),
        ("ack.accepted", envelope(2, M::Ack(accepted))),
        ("command", envelope(3, M::Command(command(WheelLayout::LeftRight)))),
        ("command.body", envelope(4, M::Command(command(WheelLayout::Body)))),
        ("command.speed-steer", envelope(5, M::Command(command(WheelLayout::SpeedSteer)))),
        ("command.ackermann", envelope(12, M::Command(command(WheelLayout::Ackermann)))),
        ("command.steered-wheel", envelope(13, M::Command(command(WheelLayout::SteeredWheel)))),
        ("journal-part", envelope(6, M::JournalPart(frames))),
        ("journal-part.third-of-three", envelope(7, M::JournalPart(part))),
        (
            "plan-missing",
            envelope(
                14,
                M::PlanMissing(PlanMissing {
                    digest: Hex(counting(0)),
                    missing: 70_000,
                    first: 33,
                    marks: blob(&[0b1000_0011, 0, 0xff]),
                }),
            ),
        ),
        ("journal-gone", envelope(8, M::JournalGone(JournalGone { first: 1, last: (1 << 53) + 1 }))),
        ("subscribed", envelope(9, M::Subscribed(granted))),
        ("status", envelope(10, M::Status(status()))),
        ("time-request", envelope(11, M::TimeRequest(TimeRequest { sent_ns: (1 << 63) + 1 }))),
    ]
}
