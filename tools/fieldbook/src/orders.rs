//! `fieldbook send-plan`, `start`, `stop`, `reset`, `cap`, `tune`: orders to a daemon, repeated until their outcome is known.

mod cap;
mod transfer;
mod tune;

pub use cap::{CapArgs, cap, run_cap};
pub use transfer::send_plan;
pub(crate) use tune::told as law_told;
pub use tune::{TuneArgs, run_tune, tune};

use crate::client::{Answer, Client, DEFAULT_ADDRESS, Pace};
use crate::output;
use anyhow::{Context, Result, bail};
use serde_json::json;
use std::path::{Path, PathBuf};
use std::process::ExitCode;
use std::time::Duration;
use trackhold_core::digest;
use trackhold_proto::Message;
use trackhold_proto::blob::Digest;
use trackhold_proto::message::{Reset, Start, Status, Stop};
use trackhold_proto::words::{StartAt, StopKind};

/// A stop that is not acknowledged by then is told of.
const WARN_AFTER: Duration = Duration::from_millis(300);

const AFTER_HELP: &str = "Exit codes: 0 accepted, 1 refused, 2 could not run.";

/// Arguments of `send-plan`.
#[derive(Debug, clap::Args)]
#[command(after_help = AFTER_HELP)]
pub struct SendPlanArgs {
    /// The plan file: JSON, or the compact form that `pack` makes.
    #[arg(value_name = "PLAN")]
    pub plan: PathBuf,
    #[command(flatten)]
    to: To,
}

/// Arguments of `start`.
#[derive(Debug, clap::Args)]
#[command(
    after_help = "The machine moves at once: see that nobody stands in its way and that its emergency stop is in \
                        reach.\nExit codes: 0 accepted, 1 refused, 2 could not run."
)]
pub struct StartArgs {
    /// Start only if this plan is the one loaded; without it, whichever is loaded.
    #[arg(long, value_name = "PLAN.json")]
    pub plan: Option<PathBuf>,
    /// Begin at this plan time, s.
    #[arg(long, value_name = "T", conflicts_with = "nearest")]
    pub at_plan_time: Option<f64>,
    /// Begin where the plan passes nearest to where the machine is.
    #[arg(long)]
    pub nearest: bool,
    #[command(flatten)]
    to: To,
}

/// Arguments of `stop`.
#[derive(Debug, clap::Args)]
#[command(
    after_help = "This is a request over a network, not a safety function: it may be lost, and the program it goes to \
                        may hang. Where somebody is in danger use the machine's emergency stop device.\nExit codes: 0 \
                        accepted, 1 refused, 2 not confirmed."
)]
pub struct StopArgs {
    /// Brake on a ramp along the path, then stand by; without it: emergency stop, zero at once, latched until a reset.
    #[arg(long)]
    pub controlled: bool,
    #[command(flatten)]
    to: To,
}

/// Arguments of `reset`.
#[derive(Debug, clap::Args)]
#[command(after_help = AFTER_HELP)]
pub struct ResetArgs {
    #[command(flatten)]
    to: To,
}

#[derive(Debug, clap::Args)]
struct To {
    /// The daemon's address.
    #[arg(long, value_name = "ADDR", default_value = DEFAULT_ADDRESS)]
    to: String,
    /// Print the outcome as one JSON object.
    #[arg(long)]
    json: bool,
}

/// Starts the plan with this digest: quotes boot and start number of `status`.
///
/// # Errors
/// If no answer comes.
pub fn start(
    client: &mut Client,
    status: &Status,
    plan: Digest,
    at: StartAt,
    plan_time_ns: u64,
) -> Result<Answer> {
    let order = Start { boot: status.boot, plan, start_number: status.start_number, at, plan_time_ns };
    client.order(Message::Start(order), Pace::ORDER)
}

/// Stops the machine: at once, and again and again until it is acknowledged. Says so on standard error if that takes long.
///
/// # Errors
/// If no answer comes.
pub fn stop(client: &mut Client, kind: StopKind) -> Result<Answer> {
    let mut warned = false;
    client.order_heard(Message::Stop(Stop { stop: kind }), Pace::STOP, &mut |waited| {
        if waited >= WARN_AFTER && !warned {
            eprintln!(
                "no answer yet: use the machine's emergency stop device; the stop is sent again and again"
            );
            warned = true;
        }
    })
}

/// Leaves a latched stop.
///
/// # Errors
/// If no answer comes.
pub fn reset(client: &mut Client) -> Result<Answer> {
    client.order(Message::Reset(Reset {}), Pace::ORDER)
}

/// Runs `send-plan`.
///
/// # Errors
/// If the file cannot be read or nobody answers.
pub fn run_send_plan(args: &SendPlanArgs) -> Result<ExitCode> {
    let raw = read_plan(&args.plan)?;
    let answer = send_plan(&mut Client::connect(&args.to.to)?, &raw)?;
    let good = format!("loaded, digest {}\nnext: fieldbook start --to {}", answer.ack.plan, args.to.to);
    let bad = "the plan that was loaded before stays loaded";
    tell("plan", &answer, &args.to, &good, bad)
}

/// Runs `start`.
///
/// # Errors
/// If a plan file cannot be read or nobody answers.
pub fn run_start(args: &StartArgs) -> Result<ExitCode> {
    let (at, plan_time_ns) = where_to_begin(args)?;
    let wanted = args.plan.as_deref().map(read_plan).transpose()?.map(|raw| digest::of_bytes(&raw));
    let mut client = Client::connect(&args.to.to)?;
    let status = client.status()?;
    if let Some(problem) = unfit(&status, wanted) {
        let text =
            if args.to.json { json!({ "accepted": false, "text": problem }).to_string() } else { problem };
        output::print(&format!("{text}\n"))?;
        return Ok(ExitCode::from(1));
    }
    let plan = wanted.unwrap_or(status.plan);
    eprintln!(
        "caution: the machine will move along plan {} revision {}; keep its emergency stop in reach",
        status.plan_id.as_str(),
        status.plan_revision
    );
    let answer = start(&mut client, &status, plan, at, plan_time_ns)?;
    let good = format!(
        "tracking; watch it with: fieldbook tail --from {0}\nstop it with: fieldbook stop --to {0}",
        args.to.to
    );
    tell("start", &answer, &args.to, &good, "the machine was not set in motion")
}

/// What speaks against a start before it is sent.
fn unfit(status: &Status, wanted: Option<Digest>) -> Option<String> {
    if status.plan == Digest::NONE {
        return Some("refused: no plan is loaded; first: fieldbook send-plan PLAN.json".to_string());
    }
    let wanted = wanted.filter(|wanted| *wanted != status.plan)?;
    Some(format!(
        "refused: plan {} revision {} is loaded, digest {}, and not the one given, digest {wanted}; first: fieldbook \
         send-plan PLAN.json",
        status.plan_id.as_str(),
        status.plan_revision,
        status.plan
    ))
}

fn where_to_begin(args: &StartArgs) -> Result<(StartAt, u64)> {
    match args.at_plan_time {
        _ if args.nearest => Ok((StartAt::Nearest, 0)),
        None => Ok((StartAt::Beginning, 0)),
        Some(seconds) if seconds.is_finite() && (0.0..1e9).contains(&seconds) => {
            Ok((StartAt::PlanTime, (seconds * 1e9).round() as u64))
        }
        Some(seconds) => bail!("--at-plan-time {seconds}: give seconds from 0 to 1e9"),
    }
}

/// Runs `stop`.
///
/// # Errors
/// If nobody answers: then the stop is not confirmed.
pub fn run_stop(args: &StopArgs) -> Result<ExitCode> {
    let kind = if args.controlled { StopKind::Controlled } else { StopKind::Emergency };
    let sent = Client::connect(&args.to.to).and_then(|mut client| stop(&mut client, kind));
    let answer = sent.context("THE STOP IS NOT CONFIRMED: use the machine's emergency stop device")?;
    let round_trip_ms = answer.round_trip.as_secs_f64() * 1e3;
    let good = match kind {
        StopKind::Emergency => format!(
            "emergency stop in force, confirmed {round_trip_ms:.2} ms after it was sent; latched: fieldbook reset --to {} \
             leaves it\nThis was a request over a network, not a safety function.",
            args.to.to
        ),
        StopKind::Controlled => format!(
            "controlled stop confirmed {round_trip_ms:.2} ms after it was sent: a machine that was tracking now brakes along \
             its path\nThis was a request over a network, not a safety function."
        ),
    };
    tell("stop", &answer, &args.to, &good, "")
}

/// Runs `reset`.
///
/// # Errors
/// If nobody answers.
pub fn run_reset(args: &ResetArgs) -> Result<ExitCode> {
    let answer = reset(&mut Client::connect(&args.to.to)?)?;
    let good = format!("standing by; nothing moves before a new start: fieldbook start --to {}", args.to.to);
    tell("reset", &answer, &args.to, &good, "")
}

fn read_plan(path: &Path) -> Result<Vec<u8>> {
    std::fs::read(path).with_context(|| format!("cannot read the plan {}", path.display()))
}

/// The outcome of an order as a JSON object.
fn outcome(what: &str, answer: &Answer) -> serde_json::Value {
    json!({
        "order": what,
        "accepted": answer.accepted(),
        "text": answer.ack.text,
        "plan": answer.ack.plan,
        "round_trip_s": answer.round_trip.as_secs_f64(),
        "sent": answer.sent,
    })
}

fn tell(what: &str, answer: &Answer, to: &To, good: &str, bad: &str) -> Result<ExitCode> {
    let accepted = answer.accepted();
    let reason = answer.ack.text.as_str();
    let text = if to.json {
        outcome(what, answer).to_string()
    } else if accepted {
        format!("{what} accepted: {good}")
    } else {
        format!("{what} refused: {reason}\n{bad}").trim_end().to_string()
    };
    output::print(&format!("{text}\n"))?;
    Ok(ExitCode::from(u8::from(!accepted)))
}

#[cfg(test)]
mod tests;
