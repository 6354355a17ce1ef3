//! `fieldbook status`: what a daemon is doing, once.

use crate::client::{Client, DEFAULT_ADDRESS};
use crate::orders::law_told;
use crate::output;
use anyhow::Result;
use serde_json::json;
use std::process::ExitCode;
use trackhold_proto::blob::Digest;
use trackhold_proto::message::{Counters, Status};
use trackhold_proto::words::{Mode, Regime};

/// Arguments of `status`.
#[derive(Debug, clap::Args)]
#[command(after_help = "Exit codes: 0 answered, 2 no answer.")]
pub struct Args {
    /// The daemon's address.
    #[arg(long, value_name = "ADDR", default_value = DEFAULT_ADDRESS)]
    pub from: String,
    /// Print it as one JSON object.
    #[arg(long)]
    pub json: bool,
}

/// Runs `status`.
///
/// # Errors
/// If nobody answers.
pub fn run(args: &Args) -> Result<ExitCode> {
    let status = Client::connect(&args.from)?.status()?;
    let text = if args.json { format!("{}\n", json!(status)) } else { told(&status) };
    output::print(&text)?;
    Ok(ExitCode::SUCCESS)
}

/// The status in words, a line each thing.
pub fn told(status: &Status) -> String {
    let mut lines = vec![format!("mode      {}, cause: {}", status.mode, status.cause)];
    lines.push(format!("plan      {}", plan(status)));
    lines.push(format!("pose      {}", pose(status)));
    if matches!(status.mode, Mode::Tracking | Mode::ControlledStop) {
        lines.push(format!(
            "error     along {:+.4} m, cross {:+.4} m, heading {:+.4} rad",
            status.along_error_m, status.cross_error_m, status.heading_error_rad
        ));
    }
    lines.extend(pace(status).map(|pace| format!("pace      {pace}")));
    lines.push(format!("law       {}", law_told(status)));
    lines.push(format!("ticks     {} since boot", status.tick));
    lines.push(format!(
        "journal   entries {} to {} at hand",
        status.oldest_entry,
        status.next_entry.saturating_sub(1)
    ));
    lines.push(format!(
        "listening {} to commands, {} to the journal",
        status.command_subscribers, status.journal_subscribers
    ));
    let counted: Vec<String> = counters(&status.counters)
        .filter(|(count, _)| *count > 0)
        .map(|(count, name)| format!("{count} {name}"))
        .collect();
    lines.push(format!(
        "counters  {}",
        if counted.is_empty() { "all 0".to_string() } else { counted.join(", ") }
    ));
    if status.counters.ticks_thin > 0 {
        lines.push(format!(
            "warning   in {} ticks the law was too fast for the dead time and the pose's age: slower gains, a lower cap, or a \
             fresher pose; trackhold check-config tells the margin",
            status.counters.ticks_thin
        ));
    }
    lines.push(format!("boot      {}", status.boot));
    lines.push(format!("next      {}", advice(status)));
    lines.join("\n") + "\n"
}

fn plan(status: &Status) -> String {
    if status.plan == Digest::NONE {
        return "none".to_string();
    }
    format!(
        "{} revision {}, at {:.3} of {:.3} s, digest {}",
        status.plan_id.as_str(),
        status.plan_revision,
        status.plan_time_ns as f64 / 1e9,
        status.plan_duration_ns as f64 / 1e9,
        status.plan
    )
}

fn pose(status: &Status) -> String {
    if status.has_pose == 0 {
        return "none yet".to_string();
    }
    format!(
        "{:.3} m, {:.3} m, {:.4} rad, {:.1} ms old; the source's clock is {:+.6} s off",
        status.x_m,
        status.y_m,
        status.heading_rad,
        status.pose_age_ns as f64 / 1e6,
        // The offset is the daemon's minus the source's: what the source's clock shows too much is its negative.
        -(status.clock_offset_ns as f64) / 1e9
    )
}

/// Regime and pace, where there is something to tell.
fn pace(status: &Status) -> Option<String> {
    let mut parts = Vec::new();
    if status.regime != Regime::None {
        parts.push(status.regime.to_string());
    }
    if status.plan_rate != 1.0 && matches!(status.mode, Mode::Tracking | Mode::ControlledStop) {
        parts.push(format!("the plan's time runs at {:.3} of its pace", status.plan_rate));
    }
    if status.speed_cap != 1.0 {
        parts.push(format!("capped at {:.1} %", 100.0 * status.speed_cap));
    }
    (!parts.is_empty()).then(|| parts.join(", "))
}

fn counters(counters: &Counters) -> impl Iterator<Item = (u64, &'static str)> {
    [
        (counters.datagrams, "datagrams"),
        (counters.malformed, "malformed"),
        (counters.misdirected, "of a kind only a daemon sends"),
        (counters.poses, "poses"),
        (counters.poses_refused, "poses refused"),
        (counters.orders_refused, "orders refused"),
        (counters.plans_refused, "plans refused"),
        (counters.events_dropped, "events dropped"),
        (counters.entries_lost, "journal entries lost"),
        (counters.ticks_late, "ticks late"),
        (counters.ticks_thin, "ticks with too thin a margin"),
    ]
    .into_iter()
}

fn advice(status: &Status) -> &'static str {
    match status.mode {
        Mode::Standby if status.plan == Digest::NONE => "fieldbook send-plan PLAN.json",
        Mode::Standby if status.has_pose == 0 => "start the estimator: no pose has come",
        Mode::Standby => "fieldbook start (the machine will move)",
        Mode::Tracking => "fieldbook stop, or wait for the plan's end",
        Mode::ControlledStop => "wait until the ramp has ended",
        Mode::ProtectiveStop => "remove the cause, then fieldbook reset, then start anew",
        Mode::EmergencyStop => "see that all is safe, then fieldbook reset, then start anew",
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use trackhold_proto::blob::{BootId, Hex, Text};
    use trackhold_proto::words::Cause;

    fn status() -> Status {
        Status {
            boot: BootId::NONE,
            start_number: 1,
            mode: Mode::ProtectiveStop,
            cause: Cause::StalePose,
            plan: Hex([7; 32]),
            plan_id: Text::cut("row 3"),
            plan_revision: 2,
            plan_duration_ns: 30_000_000_000,
            plan_time_ns: 1_500_000_000,
            tick: 99,
            has_pose: 1,
            x_m: 1.0,
            y_m: -2.0,
            heading_rad: 0.5,
            pose_age_ns: 300_000_000,
            clock_offset_ns: -2_000_000,
            along_error_m: 0.0,
            cross_error_m: 0.0,
            heading_error_rad: 0.0,
            command_subscribers: 1,
            journal_subscribers: 0,
            oldest_entry: 0,
            next_entry: 12,
            counters: Counters { malformed: 3, ..Counters::default() },
            ..crate::client::fake::status()
        }
    }

    #[test]
    fn it_tells_cause_plan_pose_and_only_counters_that_count() {
        let text = told(&status());
        for part in [
            "protective-stop, cause: stale-pose",
            "row 3 revision 2, at 1.500 of 30.000 s",
            "300.0 ms old; the source's clock is +0.002000 s off",
            "counters  3 malformed\n",
            "entries 0 to 11",
            "fieldbook reset",
        ] {
            assert!(text.contains(part), "{part} is not in\n{text}");
        }
        assert!(!text.contains("events dropped"));
    }

    #[test]
    fn pace_and_law_are_told() {
        let text = told(&Status {
            mode: Mode::Tracking,
            regime: Regime::Pivoting,
            plan_rate: 0.25,
            speed_cap: 0.4,
            counters: Counters { ticks_thin: 7, ..Counters::default() },
            ..status()
        });
        for part in [
            "pace      pivoting, the plan's time runs at 0.250 of its pace, capped at 40.0 %\n",
            "law       kanayama: k_heading 4, k_x 1, k_y 4; bandwidth 2.000 rad/s at top speed\n",
            "warning   in 7 ticks the law was too fast",
        ] {
            assert!(text.contains(part), "{part} is not in\n{text}");
        }
        assert!(!told(&status()).contains("pace "), "nothing to tell at rest and without a cap");
    }

    #[test]
    fn without_plan_and_pose_it_says_what_comes_next() {
        let text = told(&Status { plan: Digest::NONE, has_pose: 0, mode: Mode::Standby, ..status() });
        assert!(
            text.contains("plan      none") && text.contains("none yet") && text.contains("send-plan"),
            "{text}"
        );
    }
}
