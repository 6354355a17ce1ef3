//! `rank`: every law that fits, on this machine and plan, under the same errors.

mod measure;
mod told;

use crate::choice::LawChoice;
use crate::output;
use anyhow::Context as _;
use measure::{Conditions, Score};
use simrobot::RobotSpec;
use std::path::PathBuf;
use std::process::ExitCode;
use told::{LeftOut, Ranking};
use trackhold::site::Site;
use trackhold_core::keys::Problem;
use trackhold_core::law;
use trackhold_core::plan::check::admit;
use trackhold_core::settings::Settings;

/// Exit code where no law can follow the plan on this machine.
const NONE_FITS: u8 = 1;

/// What the help says below the options.
const MORE: &str = "\
Each law drives the plan --seeds times, from start offsets that are spread evenly over ±--offset-m along and across and \
±--offset-rad, with the seeds of the robot file counted up from its own: the same runs for every law. The law of the site \
file has its gains, every other one its defaults; gains decide as much as laws do, so tune the two or three best ones. \
Without --robot the machine and its estimator are ideal.

Errors, effort and limits count up to the plan's end: then the machine settles, whatever the law.

cost        ∫(along² + cross² + 0.1 heading²) dt of the true errors in m and rad, mean of the runs, over the least one
path        the same without the along-track error, over the least one
at the end  greatest distance to the final pose of any run, once settled
mean time   of a run: longer than the plan where its time slows for the machine, and where it settles
effort      rms of what the command changes in a tick, as a share of what the limits allow
at limits   share of the ticks in which a limit changed what the law wanted
dead time   how much more of it than in the robot file the law bears on the first run: to the plan's end, with its \
greatest cross-track error below twice the one without and 0.05 m more, and its heading error likewise with 0.1 rad; \
sought up to 1 s, to 5 ms

The choice: of the laws within 10 % of the least cost, those that bear at least 200 ms more dead time; of these the one with the least path cost. Where none bears as much, the one that bears most.

Exit codes: 0 ranked, 1 no law fits, 2 could not run.";

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
    /// Rank only this law; may be given several times.
    #[arg(long = "law", value_name = "NAME", value_parser = parse_law)]
    pub laws: Vec<String>,
    /// A stand-in robot with lag, dead time, slip and an imperfect estimator, instead of the ideal one.
    #[arg(long, value_name = "ROBOT.toml")]
    pub robot: Option<PathBuf>,
    /// How many runs for each law.
    #[arg(long, value_name = "N", default_value_t = 5, value_parser = clap::value_parser!(u32).range(1..=1000))]
    pub seeds: u32,
    /// Greatest start offset along and across, m.
    #[arg(long, value_name = "M", default_value_t = 0.1, value_parser = parse_offset)]
    pub offset_m: f64,
    /// Greatest start offset of the heading, rad.
    #[arg(long, value_name = "RAD", default_value_t = 0.1, value_parser = parse_offset)]
    pub offset_rad: f64,
    /// Print the ranking as one JSON object.
    #[arg(long)]
    pub json: bool,
}

fn parse_law(text: &str) -> Result<String, String> {
    law::find(text).map(|kind| kind.name.to_owned()).map_err(|problem| problem.what)
}

fn parse_offset(text: &str) -> Result<f64, String> {
    let held = text.parse().ok().filter(|value: &f64| value.is_finite() && *value >= 0.0);
    held.ok_or_else(|| format!("{text:?} is not an offset of at least 0"))
}

/// Runs the subcommand.
///
/// # Errors
/// If the files cannot be read, or the robot does not go with the site file.
pub fn run(args: &Args) -> anyhow::Result<ExitCode> {
    let site = Site::load(&args.site)?;
    let plan = std::fs::read(&args.plan).with_context(|| format!("cannot read {}", args.plan.display()))?;
    let robot = args.robot.as_deref().map(RobotSpec::load).transpose()?.unwrap_or_default();
    let conditions =
        Conditions { plan, robot, seeds: args.seeds, offset_m: args.offset_m, offset_rad: args.offset_rad };
    let mut ranking = Ranking {
        head: format!(
            "{} on {}, {}",
            args.plan.display(),
            args.site.display(),
            args.robot.as_ref().map_or("ideal robot".to_owned(), |robot| robot.display().to_string())
        ),
        conditions: &conditions,
        scores: Vec::new(),
        left_out: Vec::new(),
    };
    let asked_for = |name: &str| args.laws.is_empty() || args.laws.iter().any(|law| law == name);
    for kind in law::KINDS.iter().filter(|kind| asked_for(kind.name)) {
        match fitting(&site.settings, kind.name, &conditions.plan) {
            Ok(settings) => {
                let own = kind.name == site.settings.law.name;
                ranking.scores.push(Score::of(&settings, own, &conditions)?);
            }
            Err(why) => ranking.left_out.push(LeftOut { law: kind.name, why }),
        }
    }
    ranking.scores.sort_by(Score::better_first);
    output::print(&if args.json { ranking.json() } else { ranking.text() })?;
    Ok(if ranking.scores.is_empty() { ExitCode::from(NONE_FITS) } else { ExitCode::SUCCESS })
}

/// The settings with this law, if it fits machine and plan.
fn fitting(site: &Settings, law: &str, plan: &[u8]) -> Result<Settings, String> {
    let choice = LawChoice { law: Some(law.to_owned()), gains: Vec::new() };
    let settings = choice.apply(site).map_err(|problems| why_not_built(&problems))?;
    let checked = settings.checked().map_err(|problems| why_not_built(&problems))?;
    let plan = admit(plan, &checked.terms()).map_err(|lines| match lines.len() {
        1 => lines[0].clone(),
        more => format!("{} (and {} more findings)", lines[0], more - 1),
    })?;
    match checked.law.domain().unfit_direction(plan.travel()) {
        None => Ok(settings),
        Some(reverse) => Err(format!(
            "it would turn the machine round on the plan's {} stretches: its domain is the other direction",
            if reverse { "reverse" } else { "forward" }
        )),
    }
}

fn why_not_built(problems: &[Problem]) -> String {
    let text = |problem: &Problem| match problem.key.as_str() {
        "law.name" => problem.what.split_once(": ").map_or(&*problem.what, |(_law, why)| why).to_owned(),
        _ => problem.to_string(),
    };
    problems.iter().map(text).collect::<Vec<_>>().join("; ")
}
