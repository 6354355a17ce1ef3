//! Strategies: any message that keeps its own bounds, any journal body, and the largest message of each kind.

use proptest::array::uniform4;
use proptest::collection::vec;
use proptest::prelude::*;
use proptest::sample::select;
use trackhold_proto::blob::{Blob, Hex, Text};
use trackhold_proto::journal::*;
use trackhold_proto::message::*;
use trackhold_proto::words::*;
use trackhold_proto::{Envelope, Message};

/// Any finite number, with both zeros and the subnormal ones.
pub(crate) fn number() -> BoxedStrategy<f64> {
    use proptest::num::f64::{NEGATIVE, NORMAL, POSITIVE, SUBNORMAL, ZERO};
    let ends = select(vec![0.0, -0.0, f64::MAX, f64::MIN, f64::MIN_POSITIVE, 5e-324, 0.1, 1e23]);
    prop_oneof![4 => POSITIVE | NEGATIVE | NORMAL | SUBNORMAL | ZERO, 1 => ends].boxed()
}

/// Any u64, the ends and the neighbours of 2^53 more often.
pub(crate) fn whole() -> BoxedStrategy<u64> {
    let ends = select(vec![0, 1, u64::MAX, u64::MAX - 1, 1 << 63, (1 << 53) + 1, i64::MAX as u64]);
    prop_oneof![2 => any::<u64>(), 1 => ends].boxed()
}

fn hex<const N: usize>() -> BoxedStrategy<Hex<N>> {
    any::<[u8; N]>().prop_map(Hex).boxed()
}

fn blob<const N: usize>() -> BoxedStrategy<Blob<N>> {
    vec(any::<u8>(), 0..=N).prop_map(|bytes| Blob::new(&bytes).unwrap()).boxed()
}

fn text<const N: usize>() -> BoxedStrategy<Text<N>> {
    prop_oneof![".{0,80}", vec(any::<char>(), 0..N).prop_map(String::from_iter)]
        .prop_map(|text| Text::cut(&text))
        .boxed()
}

fn mode() -> BoxedStrategy<Mode> {
    select(Mode::ALL.to_vec()).boxed()
}

fn cause() -> BoxedStrategy<Cause> {
    use Cause::*;
    let all = [
        Boot,
        Operator,
        PlanEnded,
        NotSettled,
        PlanRanDry,
        RampEnded,
        StalePose,
        OutsideLawDomain,
        LawNotFinite,
        StalledLoop,
        LostTrip,
        Shutdown,
        PoseJump,
    ];
    select(all.to_vec()).boxed()
}

fn regime() -> BoxedStrategy<Regime> {
    select(Regime::ALL.to_vec()).boxed()
}

fn pose() -> BoxedStrategy<Pose> {
    let deviation = || number().prop_map(f64::abs);
    (whole(), number(), number(), number(), deviation(), deviation())
        .prop_map(|(measured_ns, x_m, y_m, heading_rad, position_sd_m, heading_sd_rad)| Pose {
            measured_ns,
            x_m,
            y_m,
            heading_rad,
            position_sd_m,
            heading_sd_rad,
        })
        .boxed()
}

fn plan_part() -> BoxedStrategy<PlanPart> {
    (hex(), 1..=MAX_PLAN_BYTES as u32, 1..=PART_BYTES as u32, any::<prop::sample::Index>(), any::<[u8; 32]>())
        .prop_map(|(digest, total_bytes, part_bytes, which, pattern)| {
            let part = which.index(total_bytes.div_ceil(part_bytes) as usize) as u32;
            let held = (total_bytes - part * part_bytes).min(part_bytes) as usize;
            let bytes: Vec<u8> = pattern.into_iter().cycle().take(held).collect();
            PlanPart { digest, total_bytes, part_bytes, part, bytes: Blob::new(&bytes).unwrap() }
        })
        .boxed()
}

fn start() -> BoxedStrategy<Start> {
    let at = select(vec![StartAt::Beginning, StartAt::PlanTime, StartAt::Nearest]);
    (hex(), hex(), whole(), at, whole())
        .prop_map(|(boot, plan, start_number, at, plan_time_ns)| Start {
            boot,
            plan,
            start_number,
            at,
            plan_time_ns,
        })
        .boxed()
}

fn stop_kind() -> BoxedStrategy<StopKind> {
    select(vec![StopKind::Emergency, StopKind::Controlled]).boxed()
}

fn command() -> BoxedStrategy<Command> {
    let layout = select(vec![
        WheelLayout::Body,
        WheelLayout::LeftRight,
        WheelLayout::SpeedSteer,
        WheelLayout::Ackermann,
        WheelLayout::SteeredWheel,
    ]);
    (mode(), layout, whole(), number(), number(), uniform4(number()))
        .prop_map(|(mode, layout, valid_ns, speed_m_s, turn_rate_rad_s, wheels)| Command {
            mode,
            layout,
            valid_ns,
            speed_m_s,
            turn_rate_rad_s,
            wheels,
        })
        .boxed()
}

fn journal_part() -> BoxedStrategy<JournalPart> {
    let numbers = prop_oneof![
        (1..=u32::MAX).prop_map(|entries| (entries, 0, 1)),
        (1..=u32::MAX)
            .prop_flat_map(|parts| (0..parts, Just(parts)))
            .prop_map(|(part, parts)| (1, part, parts)),
    ];
    (whole(), numbers, blob())
        .prop_map(|(first, (entries, part, parts), bytes)| JournalPart { first, entries, part, parts, bytes })
        .boxed()
}

fn ack() -> BoxedStrategy<Ack> {
    (whole(), whole(), any::<u32>(), 0..=1u32, hex(), text())
        .prop_map(|(order_session, order_sequence, order_kind, accepted, plan, text)| Ack {
            order_session,
            order_sequence,
            order_kind,
            accepted,
            plan,
            text,
        })
        .boxed()
}

fn status() -> BoxedStrategy<Status> {
    let words = (hex(), hex(), mode(), cause(), text(), 0..=1u32);
    let numbers = proptest::array::uniform9(number());
    let wholes = proptest::array::uniform18(whole());
    let law = (regime(), text(), text());
    (words, numbers, wholes, (any::<i64>(), law), any::<[u32; 3]>())
        .prop_map(
            |(
                (boot, plan, mode, cause, plan_id, has_pose),
                f,
                w,
                (clock_offset_ns, (regime, law, gains)),
                n,
            )| Status {
                boot,
                start_number: w[0],
                mode,
                cause,
                plan,
                plan_id,
                plan_revision: n[0],
                plan_duration_ns: w[1],
                plan_time_ns: w[2],
                tick: w[3],
                has_pose,
                x_m: f[0],
                y_m: f[1],
                heading_rad: f[2],
                pose_age_ns: w[4],
                clock_offset_ns,
                along_error_m: f[3],
                cross_error_m: f[4],
                heading_error_rad: f[5],
                command_subscribers: n[1],
                journal_subscribers: n[2],
                oldest_entry: w[5],
                next_entry: w[6],
                counters: counters(&w[7..]),
                regime,
                plan_rate: f[6],
                speed_cap: f[7],
                bandwidth_rad_s: f[8],
                law,
                gains,
            },
        )
        .boxed()
}

fn counters(w: &[u64]) -> Counters {
    Counters {
        datagrams: w[0],
        malformed: w[1],
        misdirected: w[2],
        poses: w[3],
        poses_refused: w[4],
        orders_refused: w[5],
        plans_refused: w[6],
        events_dropped: w[7],
        entries_lost: w[8],
        ticks_late: w[9],
        ticks_thin: w[10],
    }
}

/// Any message whose values keep the bounds of its kind.
pub(crate) fn any_message() -> BoxedStrategy<Message> {
    use Message as M;
    let range = || (whole(), whole()).prop_map(|(a, b)| (a.min(b), a.max(b)));
    let subscribed = (hex(), any::<u32>(), any::<u32>(), whole(), whole());
    prop_oneof![
        pose().prop_map(M::Pose),
        plan_part().prop_map(M::PlanPart),
        start().prop_map(M::Start),
        stop_kind().prop_map(|stop| M::Stop(Stop { stop })),
        Just(M::Reset(Reset {})),
        (0..=7u32, 100..=60_000u32).prop_map(|(want, lease_ms)| M::Subscribe(Subscribe { want, lease_ms })),
        range().prop_map(|(first, last)| M::JournalRequest(JournalRequest { first, last })),
        Just(M::StatusRequest(StatusRequest {})),
        [whole(), whole(), whole()].prop_map(|[request_sent_ns, request_received_ns, reply_sent_ns]| {
            M::TimeReply(TimeReply { request_sent_ns, request_received_ns, reply_sent_ns })
        }),
        (LEAST_SHARE..=1.0).prop_map(|share| M::Cap(Cap { share })),
        text().prop_map(|law| M::Tune(Tune { law })),
        ack().prop_map(M::Ack),
        command().prop_map(M::Command),
        journal_part().prop_map(M::JournalPart),
        (hex(), 1..=u32::MAX, any::<u32>(), blob()).prop_map(|(digest, missing, first, marks)| {
            M::PlanMissing(PlanMissing { digest, missing, first, marks })
        }),
        range().prop_map(|(first, last)| M::JournalGone(JournalGone { first, last })),
        subscribed.prop_map(|(boot, want, lease_ms, oldest_entry, next_entry)| {
            M::Subscribed(Subscribed { boot, want, lease_ms, oldest_entry, next_entry })
        }),
        status().prop_map(M::Status),
        whole().prop_map(|sent_ns| M::TimeRequest(TimeRequest { sent_ns })),
    ]
    .boxed()
}

/// Any message in an envelope.
pub(crate) fn any_envelope() -> BoxedStrategy<Envelope> {
    (whole(), whole(), whole(), any_message())
        .prop_map(|(session, sequence, stamp_ns, message)| Envelope { session, sequence, stamp_ns, message })
        .boxed()
}

fn any_refusal() -> BoxedStrategy<Refusal> {
    use Refusal as R;
    prop_oneof![
        mode().prop_map(|mode| R::Mode { mode }),
        select(vec![
            R::Boot,
            R::StartNumber,
            R::PlanDigest,
            R::NoPlan,
            R::NoPose,
            R::PlanUnfit,
            R::SequenceReused,
            R::OtherPlan,
            R::CapOutOfRange,
            R::LawUnfit
        ]),
        [whole(), whole()].prop_map(|[age_ns, limit_ns]| R::StalePose { age_ns, limit_ns }),
        [number(), number()].prop_map(|[distance_m, limit_m]| R::TooFar { distance_m, limit_m }),
        [number(), number()]
            .prop_map(|[heading_error_rad, limit_rad]| R::TurnedAway { heading_error_rad, limit_rad }),
        any::<bool>().prop_map(|reverse| R::LawDirection { reverse }),
        [whole(), whole()].prop_map(|[plan_time_ns, duration_ns]| R::PlanTime { plan_time_ns, duration_ns }),
        cause().prop_map(|cause| R::CauseRemains { cause }),
        [whole(), whole()].prop_map(|[holder, left_ns]| R::Lease { holder, left_ns }),
        [whole(), whole()].prop_map(|[stamp_ns, last_ns]| R::StampNotRising { stamp_ns, last_ns }),
        [number(), number()].prop_map(|[value, bound]| R::OutOfRange { value, bound }),
        mode().prop_map(|mode| R::NothingToContinue { mode }),
        any::<[u32; 2]>().prop_map(|[revision, last]| R::RevisionNotRising { revision, last }),
        [whole(), whole()].prop_map(|[at_ns, least_ns]| R::TooSoon { at_ns, least_ns }),
        any::<u32>().prop_map(|limit| R::TooManyWaiting { limit }),
        any_step(),
    ]
    .boxed()
}

fn any_step() -> BoxedStrategy<Refusal> {
    use Refusal as R;
    (whole(), number(), number(), 0..5u8)
        .prop_map(|(at_ns, step, limit, which)| match which {
            0 => R::PositionStep { at_ns, step_m: step, limit_m: limit },
            1 => R::HeadingStep { at_ns, step_rad: step, limit_rad: limit },
            2 => R::SpeedStep { at_ns, step_m_s: step, limit_m_s: limit },
            3 => R::TurnRateStep { at_ns, step_rad_s: step, limit_rad_s: limit },
            _ => R::CurvatureStep { at_ns, step_1_m: step, limit_1_m: limit },
        })
        .boxed()
}

fn any_tick() -> BoxedStrategy<TickRecord> {
    let numbers = vec(number(), 17);
    ((mode(), cause(), regime(), any::<u32>()), vec(whole(), 5), any::<i64>(), numbers, command())
        .prop_map(|((mode, cause, regime, flags), w, clock_offset_ns, f, command)| TickRecord {
            tick: w[0],
            at_ns: w[1],
            mode,
            cause,
            regime,
            flags,
            start_number: w[2],
            plan_time_ns: w[3],
            plan_rate: f[0],
            speed_cap: f[16],
            pose_age_ns: w[4],
            clock_offset_ns,
            x_m: f[1],
            y_m: f[2],
            heading_rad: f[3],
            ref_x_m: f[4],
            ref_y_m: f[5],
            ref_heading_rad: f[6],
            ref_speed_m_s: f[7],
            ref_turn_rate_rad_s: f[8],
            ref_curvature_1_m: f[9],
            ref_accel_m_s2: f[10],
            along_error_m: f[11],
            cross_error_m: f[12],
            heading_error_rad: f[13],
            wanted_speed_m_s: f[14],
            wanted_turn_rate_rad_s: f[15],
            command,
        })
        .boxed()
}

fn any_event() -> BoxedStrategy<Body> {
    let order = prop_oneof![
        start().prop_map(Order::Start),
        stop_kind().prop_map(Order::Stop),
        Just(Order::Reset),
        number().prop_map(|share| Order::Cap { share }),
    ];
    let note = prop_oneof![
        (whole(), text()).prop_map(|(count, last)| Note::Malformed { count, last }),
        whole().prop_map(|count| Note::EventsDropped { count }),
        [whole(), whole(), whole()].prop_map(|[ticks, mean_ns, worst_ns]| Note::Lateness {
            ticks,
            mean_ns,
            worst_ns
        }),
        text().prop_map(|text| Note::Refused { text }),
    ];
    prop_oneof![
        (hex(), whole(), ".*", ".*")
            .prop_map(|(boot, seed, settings, build)| { Body::Boot(Boot { boot, seed, settings, build }) }),
        ([whole(), whole(), whole()], pose()).prop_map(|([session, sequence, received_ns], pose)| {
            Body::Pose(PoseEvent { session, sequence, received_ns, pose })
        }),
        proptest::array::uniform5(whole()).prop_map(|w| {
            Body::Exchange(ExchangeEvent {
                session: w[0],
                request_sent_ns: w[1],
                request_received_ns: w[2],
                reply_sent_ns: w[3],
                reply_received_ns: w[4],
            })
        }),
        (whole(), whole(), hex(), vec(any::<u8>(), 0..3000)).prop_map(|(session, sequence, digest, raw)| {
            Body::Plan(PlanEvent { session, sequence, digest, raw })
        }),
        ([whole(), whole(), whole()], order).prop_map(|([session, sequence, received_ns], order)| {
            Body::Order(OrderEvent { session, sequence, received_ns, order })
        }),
        cause().prop_map(|cause| Body::Trip(TripEvent { cause })),
        ([whole(), whole(), whole()], ".*").prop_map(|([session, sequence, received_ns], law)| {
            Body::Tune(TuneEvent { session, sequence, received_ns, law })
        }),
        note.prop_map(Body::Note),
    ]
    .boxed()
}

/// Any journal body.
pub(crate) fn any_body() -> BoxedStrategy<Body> {
    let ack = (whole(), whole(), any::<u32>(), hex(), prop::option::of(any_refusal()), vec(".{0,40}", 0..8));
    let ack = ack.prop_map(|(session, sequence, order_kind, plan, refusal, findings)| {
        Body::Ack(AckEffect { session, sequence, order_kind, plan, refusal, findings })
    });
    let loaded = (hex(), text(), any::<u32>(), any::<bool>(), whole(), number());
    let loaded = loaded.prop_map(|(digest, id, revision, open, duration_ns, length_m)| {
        Body::PlanLoaded(PlanLoaded { digest, id, revision, open, duration_ns, length_m })
    });
    let waits = (hex(), any::<[u32; 2]>(), whole(), number(), number());
    let waits =
        waits.prop_map(|(digest, [revision, waiting], at_ns, position_step_m, curvature_step_1_m)| {
            Body::PlanWaits(PlanWaits {
                digest,
                revision,
                at_ns,
                position_step_m,
                curvature_step_1_m,
                waiting,
            })
        });
    let changed = (text(), ".*", number(), number());
    let changed = changed.prop_map(|(name, gains, bandwidth_rad_s, speed_m_s)| {
        Body::LawChanged(LawChanged { name, gains, bandwidth_rad_s, speed_m_s })
    });
    prop_oneof![
        3 => any_event(),
        1 => waits,
        1 => changed,
        1 => any_tick().prop_map(Body::Tick),
        1 => ack,
        1 => command().prop_map(Body::Command),
        1 => (mode(), mode(), cause(), whole()).prop_map(|(from, to, cause, start_number)| {
            Body::ModeChange(ModeChange { from, to, cause, start_number })
        }),
        1 => (whole(), whole(), any_refusal()).prop_map(|(session, sequence, refusal)| {
            Body::PoseRefused(PoseRefused { session, sequence, refusal })
        }),
        1 => loaded,
        1 => [whole(), whole()].prop_map(|[first, last]| Body::Gap(Gap { first, last })),
        1 => (whole(), hex()).prop_map(|(entries, digest)| Body::End(End { entries, digest })),
    ]
    .boxed()
}
