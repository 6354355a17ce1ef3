//! `fieldbook demo`: daemon, stand-in robot and recorder over loopback UDP in one command, on an invented site.
//!
//! | module | what it holds |
//! | --- | --- |
//! | `scenario` | site, machine, faults and plan, built in |
//! | `stage` | the parts, each on its own thread and sockets |
//! | `relay` | the radio link between daemon and recorder |
//! | `story` | what happened |

pub(crate) mod relay;
mod scenario;
mod stage;
mod story;

use crate::log::LogReader;
use crate::{orders, output, replay};
use anyhow::{Context, Result, bail};
use scenario::Scenario;
use stage::{Ended, Stage};
use std::path::{Path, PathBuf};
use std::process::ExitCode;
use std::thread;
use std::time::{Duration, Instant};
use story::Story;
use trackhold_proto::message::Status;
use trackhold_proto::words::{Cause, Mode, StartAt};

/// A progress line comes this often.
const PROGRESS: Duration = Duration::from_secs(2);
/// The status is looked at this often.
const LOOK: Duration = Duration::from_millis(100);

/// Arguments of `demo`.
#[derive(Debug, clap::Args)]
#[command(
    after_help = "Exit codes: 0 the plan was tracked to its end, recorded without a gap, and the log replays \
                        identical; 1 one of these is not so; 2 could not run.\nThe last line of standard output is the \
                        log's absolute path. Nothing outside this machine is touched: all sockets are on 127.0.0.1."
)]
pub struct Args {
    /// Where log, site file, robot file and plan go; a new directory among the temporary ones if not given.
    #[arg(long, value_name = "DIR")]
    pub out: Option<PathBuf>,
    /// Stop the machine if the run takes longer, s.
    #[arg(long, value_name = "T", default_value_t = 58.0)]
    pub seconds_limit: f64,
    /// A run of a few seconds, for tests of this program.
    #[arg(long, hide = true)]
    pub fast: bool,
}

/// Runs `demo`.
///
/// # Errors
/// If a part cannot start, or the log cannot be written or read.
pub fn run(args: &Args) -> Result<ExitCode> {
    let limit = crate::client::ending::duration(args.seconds_limit)?;
    let scenario = Scenario::new(args.fast)?;
    let directory = directory(args.out.as_deref())?;
    let log = free_name(&directory)?;
    scenario.write_files(&directory)?;
    output::print(&introduction(&scenario))?;
    let (end, ended) = play(&scenario, &log, limit)?;
    let (good, verdict) = verdict(&end, &ended)?;
    let story = Story::read(&ended.recording.path, &scenario, &ended.truth)?;
    let told = story.told(&scenario, &ended);
    output::print(&format!("\n{verdict}\n{told}\n{}", afterword(&directory, &ended.recording.path)))?;
    output::print(&format!("{}\n", ended.recording.path.display()))?;
    Ok(ExitCode::from(u8::from(!good)))
}

/// How the run ended, as the status had it.
#[derive(Clone, Copy, Debug)]
struct End {
    mode: Mode,
    cause: Cause,
    seconds: f64,
}

/// Sends the plan, starts it, looks on until the machine rests, and ends everything.
fn play(scenario: &Scenario, log: &Path, limit: Duration) -> Result<(End, Ended)> {
    let mut stage = Stage::begin(scenario, log)?;
    let operator = stage.operator();
    let loaded = orders::send_plan(operator, scenario.raw_plan)?;
    if !loaded.accepted() {
        bail!("the plan was refused: {}", loaded.ack.text.as_str());
    }
    let status = operator.status()?;
    let started = orders::start(operator, &status, loaded.ack.plan, StartAt::Beginning, 0)?;
    if !started.accepted() {
        bail!("the start was refused: {}", started.ack.text.as_str());
    }
    eprintln!("plan accepted, started; the machine moves");
    let end = look_on(&mut stage, limit)?;
    // The wheels' lag and the last datagrams.
    thread::sleep(Duration::from_millis(400));
    Ok((end, stage.end()?))
}

fn look_on(stage: &mut Stage, limit: Duration) -> Result<End> {
    let begun = Instant::now();
    let mut told = begun;
    loop {
        let status = stage.operator().status()?;
        let seconds = begun.elapsed().as_secs_f64();
        if status.mode != Mode::Tracking {
            return Ok(End { mode: status.mode, cause: status.cause, seconds });
        }
        if begun.elapsed() > limit {
            eprintln!("the run takes longer than {} s: controlled stop", limit.as_secs_f64());
            orders::stop(stage.operator(), trackhold_proto::words::StopKind::Controlled)?;
            return Ok(End { mode: Mode::ControlledStop, cause: Cause::Operator, seconds });
        }
        if told.elapsed() >= PROGRESS {
            eprintln!("{}", progress(&status));
            told = Instant::now();
        }
        thread::sleep(LOOK);
    }
}

fn progress(status: &Status) -> String {
    format!(
        "  {} {:5.1} of {:.1} s   at {:6.2} m {:6.2} m {:+5.2} rad   cross {:+.3} m   pose {:3.0} ms old",
        status.mode,
        status.plan_time_ns as f64 / 1e9,
        status.plan_duration_ns as f64 / 1e9,
        status.x_m,
        status.y_m,
        status.heading_rad,
        status.cross_error_m,
        status.pose_age_ns as f64 / 1e6,
    )
}

/// Whether all went well, and what did and did not.
fn verdict(end: &End, ended: &Ended) -> Result<(bool, String)> {
    let tracked = end.mode == Mode::Standby && end.cause == Cause::PlanEnded;
    let complete = ended.recording.gaps.is_empty() && ended.recording.other_boot.is_none();
    let reader = LogReader::open(&ended.recording.path).context("the log cannot be read again")?;
    let (identical, replayed) = match replay::replay_log(reader, false) {
        Ok(report) => match &report.difference {
            None => (true, format!("replays identical: {} ticks, digest {}", report.ticks, report.digest)),
            Some(difference) => (false, format!("the replay DIVERGED: {difference}")),
        },
        Err(error) => (false, format!("the log cannot be replayed: it {error}")),
    };
    let outcome = if tracked {
        format!("the plan was tracked to its end in {:.1} s", end.seconds)
    } else {
        format!(
            "the plan was NOT tracked to its end: {} after {:.1} s, cause: {}",
            end.mode, end.seconds, end.cause
        )
    };
    let recorded = if complete { "recorded without a gap" } else { "the recording HAS GAPS" };
    Ok((
        tracked && complete && identical,
        format!("outcome        {outcome}\n               {recorded}\n               {replayed}"),
    ))
}

fn introduction(scenario: &Scenario) -> String {
    format!(
        "Quince Terrace, an invented tree nursery: a pallet carrier of about 900 kg, differential drive, simulated.\n\
         Plan {}: {:.1} m in {:.1} s, with bends, a pivot and a reverse stretch; law {} at {} Hz.\n\
         It stands {:.2} m off the plan's start. Poses and commands pass a link with losses, the recorder a worse one.\n\
         Daemon, stand-in robot and recorder run here, on UDP sockets on 127.0.0.1, in real time.\n",
        scenario.plan.id(),
        scenario.plan.length_m(),
        scenario.plan.duration_s(),
        scenario.site.settings.law.name,
        scenario.site.settings.node.get("rate_hz"),
        scenario.start().distance_to(scenario.plan.at(0.0, &mut 0).pose),
    )
}

fn afterword(directory: &Path, log: &Path) -> String {
    format!(
        "cautions       This machine is simulated and its faults are chosen: the numbers say nothing about yours. A stop over a\n\
         \x20              network is a request, not a safety function; a real machine needs its own emergency stop device.\n\
         next           fieldbook replay {}\n\
         \x20              fieldbook simulate --site {1}/site.toml --plan {1}/plan.json --robot {1}/robot.toml\n",
        log.display(),
        directory.display(),
    )
}

fn directory(out: Option<&Path>) -> Result<PathBuf> {
    let chosen = match out {
        Some(out) => out.to_path_buf(),
        None => std::env::temp_dir().join(format!("trackhold-demo-{}", std::process::id())),
    };
    std::fs::create_dir_all(&chosen)
        .with_context(|| format!("cannot make the directory {}", chosen.display()))?;
    std::path::absolute(&chosen).with_context(|| format!("{} has no absolute path", chosen.display()))
}

/// A name that no log has yet: recordings are not written over.
fn free_name(directory: &Path) -> Result<PathBuf> {
    let names =
        std::iter::once("demo.tracklog".to_string()).chain((2..1000).map(|k| format!("demo-{k}.tracklog")));
    let free = names.map(|name| directory.join(name)).find(|path| !path.exists());
    free.with_context(|| format!("{} is full of logs: choose another directory", directory.display()))
}

#[cfg(test)]
mod tests;
