//! An entry of the journal in one line, for people.

use trackhold_proto::journal::{AckEffect, Body, Note, Order, TickRecord, flag};
use trackhold_proto::words::Regime;

/// The line, without its moment.
pub(super) fn of(body: &Body) -> String {
    match body {
        Body::Tick(record) => tick(record),
        Body::Boot(boot) => format!("-- boot {}, built with {}", boot.boot, boot.build),
        Body::Pose(event) => {
            let pose = event.pose;
            format!(
                "-- pose {:.3} m {:.3} m {:.4} rad, sequence {}",
                pose.x_m, pose.y_m, pose.heading_rad, event.sequence
            )
        }
        Body::Exchange(event) => {
            let there_and_back = event.reply_received_ns.saturating_sub(event.request_sent_ns);
            let held = event.reply_sent_ns.saturating_sub(event.request_received_ns);
            let delay_ms = there_and_back.saturating_sub(held) as f64 / 1e6;
            format!("-- clock exchange with session {}, {delay_ms:.3} ms on the way", event.session)
        }
        Body::Plan(event) => {
            format!("-- plan of {} bytes from session {}, {}", event.raw.len(), event.session, event.digest)
        }
        Body::Order(event) => format!("-- order: {} from session {}", order(&event.order), event.session),
        Body::Tune(event) => format!("-- tune from session {}: {}", event.session, event.law),
        Body::LawChanged(law) => format!(
            "-- law {} {} in force, bandwidth {:.3} rad/s at {:.3} m/s",
            law.name.as_str(),
            law.gains,
            law.bandwidth_rad_s,
            law.speed_m_s
        ),
        Body::Trip(event) => format!("-- trip past the loop: {}", event.cause),
        Body::Note(note) => self::note(note),
        Body::Ack(ack) => self::ack(ack),
        Body::Command(command) => {
            format!("-- command at once: {} {:?}", command.mode, &command.wheels[..command.layout.count()])
        }
        Body::ModeChange(change) => format!("-- {} -> {}, cause: {}", change.from, change.to, change.cause),
        Body::PoseRefused(refused) => format!("-- pose refused: {}", refused.refusal),
        Body::PlanLoaded(plan) => format!(
            "-- plan {} revision {} loaded: {:.3} m, {:.3} s{}",
            plan.id.as_str(),
            plan.revision,
            plan.length_m,
            plan.duration_ns as f64 / 1e9,
            if plan.open { ", open" } else { "" }
        ),
        Body::PlanWaits(waits) => format!(
            "-- plan revision {} goes on at plan time {:.3} s, step {:.4} m, curvature {:+.4} 1/m; {} waiting",
            waits.revision,
            waits.at_ns as f64 / 1e9,
            waits.position_step_m,
            waits.curvature_step_1_m,
            waits.waiting
        ),
        Body::Gap(gap) => format!("-- entries {} to {} could not be had", gap.first, gap.last),
        Body::End(end) => format!("-- end, {} entries", end.entries),
    }
}

fn order(order: &Order) -> String {
    match order {
        Order::Start(start) => format!("start of plan {}", start.plan),
        Order::Stop(kind) => format!("stop, {kind:?}").to_lowercase(),
        Order::Reset => "reset".to_string(),
        Order::Cap { share } => format!("cap at {:.0} %", 100.0 * share),
    }
}

fn note(note: &Note) -> String {
    match note {
        Note::Malformed { count, last } => {
            format!("-- {count} malformed datagrams, the last: {}", last.as_str())
        }
        Note::EventsDropped { count } => format!("-- {count} events dropped, the loop's queue was full"),
        Note::Lateness { ticks, mean_ns, worst_ns } => format!(
            "-- {ticks} ticks, late by {:.3} ms on average, {:.3} ms at worst",
            *mean_ns as f64 / 1e6,
            *worst_ns as f64 / 1e6
        ),
        Note::Refused { text } => format!("-- refused by the system: {}", text.as_str()),
    }
}

fn ack(ack: &AckEffect) -> String {
    let what = match ack.order_kind {
        2 => "plan",
        3 => "start",
        4 => "stop",
        5 => "reset",
        10 => "cap",
        11 => "tune",
        _ => "order",
    };
    match ack.refusal {
        None => format!("-- {what} accepted"),
        Some(refusal) if ack.findings.is_empty() => format!("-- {what} refused: {refusal}"),
        Some(refusal) => format!("-- {what} refused: {refusal}: {}", ack.findings.join("; ")),
    }
}

fn tick(record: &TickRecord) -> String {
    let mut line = record.mode.to_string();
    if record.regime != Regime::None {
        line.push_str(&format!(" {}", record.regime));
    }
    let mut line = format!("{line:20} plan {:8.3} s ", record.plan_time_ns as f64 / 1e9);
    if record.plan_rate != 1.0 {
        line.push_str(&format!(" rate {:.3} ", record.plan_rate));
    }
    if record.speed_cap != 1.0 {
        line.push_str(&format!(" cap {:.1} % ", 100.0 * record.speed_cap));
    }
    if record.has(flag::HAS_REFERENCE) {
        line.push_str(&format!(
            " along {:+.4} cross {:+.4} m heading {:+.4} rad ",
            record.along_error_m, record.cross_error_m, record.heading_error_rad
        ));
    }
    if record.has(flag::HAS_POSE) {
        line.push_str(&format!(" pose age {:.1} ms ", record.pose_age_ns as f64 / 1e6));
    }
    let command = &record.command;
    line.push_str(&format!(" v {:+.3} m/s w {:+.3} rad/s ", command.speed_m_s, command.turn_rate_rad_s));
    for (value, name) in command.wheels.iter().zip(command.layout.columns()) {
        line.push_str(&format!(" {name} {value:+.3}"));
    }
    for name in flags(record.flags & !(flag::HAS_POSE | flag::HAS_REFERENCE)) {
        line.push_str("  ");
        line.push_str(name);
    }
    line
}

/// The names of the bits that are set.
fn flags(bits: u32) -> impl Iterator<Item = &'static str> {
    flag::NAMES.into_iter().enumerate().filter(move |(bit, _)| bits & (1 << bit) != 0).map(|(_, name)| name)
}

#[cfg(test)]
mod tests {
    use super::*;
    use trackhold_proto::message::WheelLayout;

    #[test]
    fn a_tick_names_its_regime_and_whatever_slows_the_plan() {
        let mut record = TickRecord::blank(WheelLayout::LeftRight);
        let plain = of(&Body::Tick(record));
        assert!(!plain.contains("rate") && !plain.contains("cap") && !plain.contains("none"), "{plain}");
        record.mode = trackhold_proto::words::Mode::Tracking;
        (record.regime, record.plan_rate, record.speed_cap) = (Regime::Moving, 0.35, 0.4);
        let line = of(&Body::Tick(record));
        assert!(line.starts_with("tracking moving      plan    0.000 s  rate 0.350  cap 40.0 % "), "{line}");
    }

    #[test]
    fn a_tick_names_its_flags_and_hides_what_is_absent() {
        let mut record = TickRecord::blank(WheelLayout::LeftRight);
        record.flags = flag::POSE_STALE | flag::STEP_LIMITED;
        let line = of(&Body::Tick(record));
        assert!(line.contains("step-limited  pose-stale"), "{line}");
        assert!(line.contains("left_wheel_rad_s +0.000"), "{line}");
        assert!(!line.contains("cross"), "{line}");
    }
}
