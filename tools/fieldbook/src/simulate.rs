//! `simulate`: a plan in closed loop, in the core, faster than real time.

mod summary;

use crate::choice::{LawChoice, problem_lines};
use crate::log::LogWriter;
use crate::output;
use crate::sim::csv::CsvRows;
use crate::sim::observe::Logging;
use crate::sim::{self, Options};
use crate::stats::Statistics;
use anyhow::{Context as _, anyhow};
use simrobot::RobotSpec;
use std::path::PathBuf;
use std::process::ExitCode;
use summary::Summary;
use trackhold::site::Site;
use trackhold_core::digest::ResultDigest;
use trackhold_core::geometry::Pose;

/// What the help says below the options.
const MORE: &str = "\
The very core that drives the robot runs here. Without --robot the robot is ideal: a command holds from its tick to the \
next, and the chassis moves on the exact arc.

Poses, errors and statistics are the true ones: the true pose of the chassis point against the reference, also where \
--robot lets the estimator see another one. A tick's reference means the moment at which its command acts, \
node.dead_time_s after the tick, and the true pose in its row is that moment's. With --robot, t = 0 is the moment at which its first pose arrives. Boot \
identity (zeros) and seed (1) are fixed: the same run has the same digest everywhere.

Exit codes: 0 it ran, whatever it reached; 2 it could not, or the start was refused.";

/// The arguments.
#[derive(Debug, clap::Args)]
#[command(after_help = MORE)]
pub struct Args {
    /// The site file.
    #[arg(long)]
    pub site: PathBuf,
    /// The plan.
    #[arg(long)]
    pub plan: PathBuf,
    /// Another law, other gains.
    #[command(flatten)]
    pub law: LawChoice,
    /// Pose of the chassis point at t = 0 in m, m, rad; without it the plan's start. Write --start=-1,0,0.5 with the =.
    #[arg(long, value_name = "X,Y,HEADING", value_parser = parse_start, allow_hyphen_values = true)]
    pub start: Option<Pose>,
    /// A stand-in robot with lag, dead time, slip and an imperfect estimator, instead of the ideal one.
    #[arg(long, value_name = "ROBOT.toml")]
    pub robot: Option<PathBuf>,
    /// End the run at this time, wherever it is then.
    #[arg(long, value_name = "T", value_parser = parse_seconds)]
    pub seconds: Option<f64>,
    /// Write a row a tick.
    #[arg(long, value_name = "FILE")]
    pub csv: Option<PathBuf>,
    /// Write the run as a track log, in the place of an old one of that name.
    #[arg(long, value_name = "FILE")]
    pub log: Option<PathBuf>,
    /// Print the outcome as one JSON object.
    #[arg(long)]
    pub json: bool,
}

fn parse_start(text: &str) -> Result<Pose, String> {
    let wrong =
        || format!("{text:?} is not X,Y,HEADING: three numbers in m, m, rad with commas between them");
    let numbers: Vec<f64> = text
        .split(',')
        .map(|number| number.trim().parse().ok().filter(|value: &f64| value.is_finite()))
        .collect::<Option<_>>()
        .ok_or_else(wrong)?;
    match numbers[..] {
        [x_m, y_m, heading_rad] => Ok(Pose::new(x_m, y_m, heading_rad)),
        _ => Err(wrong()),
    }
}

fn parse_seconds(text: &str) -> Result<f64, String> {
    let held = text.parse().ok().filter(|value: &f64| value.is_finite() && *value >= 0.0);
    held.ok_or_else(|| format!("{text:?} is not a time of at least 0 s"))
}

/// Runs the subcommand.
///
/// # Errors
/// Why the run could not begin, or its files could not be written.
pub fn run(args: &Args) -> anyhow::Result<ExitCode> {
    let site = Site::load(&args.site)?;
    let settings = args
        .law
        .apply(&site.settings)
        .map_err(|problems| anyhow!("the settings do not hold:\n  {}", problem_lines(&problems)))?;
    let plan = std::fs::read(&args.plan).with_context(|| format!("cannot read {}", args.plan.display()))?;
    let robot = args.robot.as_deref().map(RobotSpec::load).transpose()?;
    let made = |path: &PathBuf| format!("cannot make {}", path.display());
    let layout = settings.checked().map_err(|problems| anyhow!(problem_lines(&problems)))?.vehicle.layout();
    let csv = args
        .csv
        .as_ref()
        .map(|path| CsvRows::create(path, layout).with_context(|| made(path)))
        .transpose()?;
    let log =
        args.log.as_ref().map(|path| LogWriter::replace(path).with_context(|| made(path))).transpose()?;
    let options = Options { start: args.start, seconds: args.seconds };
    let mut watching = (Statistics::default(), (ResultDigest::default(), (csv, log.map(Logging::new))));
    let outcome = match robot {
        Some(robot) => sim::robot::simulate(&settings, &plan, &options, &robot, &mut watching)?,
        None => sim::simulate(&settings, &plan, &options, &mut watching)?,
    };
    let (statistics, (digest, (csv, log))) = watching;
    csv.map_or(Ok(()), CsvRows::finish).context("cannot write the table")?;
    log.map_or(Ok(()), Logging::finish).context("cannot write the track log")?;
    let summary = Summary { outcome, errors: statistics.errors(), digest: digest.finish(), settings };
    output::print(&if args.json { summary.json()? } else { summary.text() })?;
    Ok(ExitCode::SUCCESS)
}
