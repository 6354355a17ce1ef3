//! `check`: can this machine follow this plan? The very check that the daemon makes before it takes a plan, told in full.

mod axes;
mod picture;
mod report;
mod shares;
mod trace;

use crate::output;
use anyhow::Context as _;
use std::path::PathBuf;
use std::process::ExitCode;
use trackhold::site::Site;
use trackhold_core::plan::check::{Report, check, too_large};

/// Exit code of a plan that the machine cannot follow.
const UNFIT: u8 = 1;

/// What the help says below the options.
const MORE: &str = "\
Each finding says where it lies, its value and limit, what it means and what would mend it. Information is good to know; \
a warning is a plan that the machine follows with a lag or with little authority left; unfit is a plan that it cannot \
follow, and that the daemon refuses. The section [check] of the site file sets the thresholds.

Authority left is 1 minus the greatest share of a limit: what remains for corrections.

Exit codes: 0 fit, 1 unfit, 2 could not run.";

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
    /// Print the report as one JSON object.
    #[arg(long)]
    pub json: bool,
    /// Draw the path, and below it the shares of the limits along plan time, in the place of an old file of that name.
    #[arg(long, value_name = "FILE")]
    pub svg: Option<PathBuf>,
}

/// Runs the subcommand.
///
/// # Errors
/// If the files cannot be read or written, or the site file does not hold.
pub fn run(args: &Args) -> anyhow::Result<ExitCode> {
    let site = Site::load(&args.site)?;
    let checked = site.checked()?;
    let raw = std::fs::read(&args.plan).with_context(|| format!("cannot read {}", args.plan.display()))?;
    let terms = checked.terms();
    let limit = site.net.max_plan_bytes;
    let report = if raw.len() > limit {
        too_large(raw.len(), limit, "net.max_plan_bytes")
    } else {
        check(&raw, &terms)
    };
    if let Some(path) = &args.svg {
        draw(&report, &*terms.vehicle, path)?;
    }
    let name = args.plan.display().to_string();
    let text = if args.json { report::json(&report, &name) } else { report::text(&report, &name) };
    output::print(&text)?;
    Ok(if report.is_fit() { ExitCode::SUCCESS } else { ExitCode::from(UNFIT) })
}

fn draw(
    report: &Report,
    vehicle: &dyn trackhold_core::vehicle::Vehicle,
    path: &std::path::Path,
) -> anyhow::Result<()> {
    let Some(plan) = &report.plan else {
        eprintln!("fieldbook: {}: nothing to draw, the plan does not compile", path.display());
        return Ok(());
    };
    let svg = picture::draw(report, plan, vehicle);
    std::fs::write(path, svg).with_context(|| format!("cannot write {}", path.display()))
}
