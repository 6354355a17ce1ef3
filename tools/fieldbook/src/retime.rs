//! `retime`: the fastest timing of a plan's geometry within a machine's limits, with a reserve kept for feedback.

mod bounds;
mod rewrite;
mod smooth;

use crate::output;
use anyhow::{Context as _, anyhow, bail, ensure};
use rewrite::Document;
use std::fmt::Write as _;
use std::path::PathBuf;
use std::process::ExitCode;
use trackhold::site::Site;
use trackhold_core::plan::check::{Report, Severity, Terms, check};
use trackhold_core::plan::retime::{Dwell, Options, Retimed, StepRule, of_plan};
use trackhold_core::plan::{Placed, Plan};

/// What the help says below the options.
const MORE: &str = "\
The geometry stays; what timing the plan has does not matter. Every speed is the highest from which the rest of the way \
can be driven within the site file's limits, less the reserve: speed and acceleration of each wheel, steering angle and \
rate, lateral acceleration, jerk. A limit that the site file does not give is none.

The plan rests at cusps, pivots and dwells, and on a steered machine where the curvature steps by more than \
check.curvature_step_1_m. A machine that can turn in place passes a curvature step at the speed at which the step of its \
wheel speeds takes check.excess_s within the limits. Where the steering has to swing, from straight ahead at the beginning \
too, it rests until the steering is there: a dwell is put in or made longer.

A segment of samples becomes a spline through its way-poses, since samples have a time at every point; how far the two \
paths lie apart is told.

Exit codes: 0 done, 1 there is no such timing or the result is not fit, 2 could not run.";

/// Exit code if there is no such timing.
const NO_TIMING: u8 = 1;

/// The arguments.
#[derive(Debug, clap::Args)]
#[command(after_help = MORE)]
pub struct Args {
    /// The site file.
    #[arg(long)]
    pub site: PathBuf,
    /// The plan, JSON.
    #[arg(long)]
    pub plan: PathBuf,
    /// Part of every limit that is kept for feedback, 0 to 0.95.
    #[arg(long, value_name = "SHARE", default_value_t = 0.2)]
    pub reserve: f64,
    /// Speed at the plan's beginning, m/s: for a plan that continues another one.
    #[arg(long, value_name = "V", default_value_t = 0.0)]
    pub start_speed: f64,
    /// Speed at the plan's end, m/s: for an open plan.
    #[arg(long, value_name = "V", default_value_t = 0.0)]
    pub end_speed: f64,
    /// No faster than this anywhere, m/s.
    #[arg(long, value_name = "V")]
    pub max_speed: Option<f64>,
    /// On no segment faster than the plan is there now: keeps the speed limits of a site or an order.
    #[arg(long)]
    pub keep_speeds: bool,
    /// Where the new plan goes, in the place of an old file of that name.
    #[arg(long, value_name = "FILE")]
    pub out: PathBuf,
}

/// Runs the subcommand.
///
/// # Errors
/// If an option does not hold, or files cannot be read or written.
pub fn run(args: &Args) -> anyhow::Result<ExitCode> {
    for (name, value, bound) in [
        ("--reserve", args.reserve, 0.95),
        ("--start-speed", args.start_speed, 30.0),
        ("--end-speed", args.end_speed, 30.0),
    ] {
        ensure!((0.0..=bound).contains(&value), "{name}: {value} lies outside 0 to {bound}");
    }
    let checked = Site::load(&args.site)?.checked()?;
    let terms = checked.terms();
    let name = args.plan.display().to_string();
    let raw = std::fs::read(&args.plan).with_context(|| format!("cannot read {name}"))?;
    let mut document = Document::read(&raw).map_err(|what| anyhow!("{name}: {what}"))?;
    if let Some(speed) = args.max_speed {
        ensure!(
            speed > 0.0 && speed <= 30.0,
            "--max-speed: {speed} m/s is not greater than 0 and at most 30 m/s"
        );
    }
    if args.end_speed > 0.0 && !document.is_open() {
        bail!(
            "--end-speed: {name} is closed and rests at its end; say \"open\": true in the plan, or leave it out"
        );
    }
    let old = check(&raw, &terms).plan;
    ensure!(
        old.is_some() || !args.keep_speeds,
        "--keep-speeds: {name} does not compile as it is, so that it has no speeds to keep; mend its timing, or leave the option out"
    );
    let mut told = String::new();
    let found = match solve(args, &terms, old.as_ref(), &mut document, &mut told) {
        Ok(found) => found,
        Err(findings) => return refuse(&name, &findings),
    };
    let fresh = document.timed(&found);
    let report = check(fresh.as_bytes(), &terms);
    std::fs::write(&args.out, &fresh).with_context(|| format!("cannot write {}", args.out.display()))?;
    tell(args, &terms, &report, &found, old.as_ref(), &mut told)?;
    output::print(&told)?;
    Ok(if report.is_fit() { ExitCode::SUCCESS } else { ExitCode::from(NO_TIMING) })
}

/// The new timing, or what stands in its way.
fn solve(
    args: &Args,
    terms: &Terms,
    old: Option<&Plan>,
    document: &mut Document,
    told: &mut String,
) -> Result<Retimed, Vec<String>> {
    let smoothed = smooth::samples_to_splines(document)?;
    // Any timing will do to compile the geometry.
    let report = check(document.slow().as_bytes(), terms);
    let Some(plan) = &report.plan else {
        return Err(report.findings.iter().map(|finding| finding.line()).collect());
    };
    for segment in &smoothed {
        told.push_str(&segment.line(plan));
        told.push('\n');
    }
    let options = Options {
        reserve: args.reserve,
        start_speed_m_s: args.start_speed,
        end_speed_m_s: args.end_speed,
        steps: StepRule {
            curvature_step_1_m: terms.thresholds.curvature_step_1_m,
            settle_s: terms.thresholds.excess_s,
        },
    };
    let tops: Vec<f64> = old
        .filter(|_| args.keep_speeds)
        .map_or_else(Vec::new, |old| old.stretches().map(top_speed_m_s).collect());
    let greatest = args.max_speed.unwrap_or(f64::INFINITY);
    let top = |segment: usize| tops.get(segment).map_or(greatest, |top| greatest.min(*top));
    of_plan(plan, &*terms.vehicle, &options, &top)
}

/// The greatest speed of a segment, m/s.
fn top_speed_m_s(placed: Placed<'_>) -> f64 {
    // Way-poses may be many; a stated timing has few phases.
    let looks = if placed.kind == "samples" { 20_000 } else { 500 };
    let speed = |index: u32| {
        let t_s = placed.stretch.duration_s() * f64::from(index) / f64::from(looks);
        placed.stretch.at(t_s).velocity.speed_m_s.abs()
    };
    (0..=looks).map(speed).fold(0.0, f64::max)
}

fn refuse(name: &str, findings: &[String]) -> anyhow::Result<ExitCode> {
    eprintln!("fieldbook: {name}: no timing within the limits:");
    for finding in findings {
        eprintln!("  {finding}");
    }
    Ok(ExitCode::from(NO_TIMING))
}

/// Segments are counted as in the plan that was given.
fn tell_dwells(found: &Retimed, told: &mut String) -> std::fmt::Result {
    for Dwell { segment, at_m, duration_s, longer } in &found.dwells {
        let what = match longer {
            Some(index) => format!("the dwell segments[{index}] lasts {duration_s:.3} s longer"),
            None if *at_m > 0.0 => format!("{duration_s:.3} s of it at {at_m:.3} m of segments[{segment}]"),
            None => format!("a dwell of {duration_s:.3} s is put in before segments[{segment}]"),
        };
        writeln!(told, "the steering takes time: {what}")?;
    }
    Ok(())
}

fn tell(
    args: &Args,
    terms: &Terms,
    report: &Report,
    found: &Retimed,
    old: Option<&Plan>,
    told: &mut String,
) -> anyhow::Result<()> {
    let (site, out) = (args.site.display(), args.out.display());
    let plan = report.plan.as_ref().ok_or_else(|| {
        let lines: Vec<String> = report.findings.iter().map(|finding| finding.line()).collect();
        anyhow!("the result does not compile, which is a fault of this program:\n  {}", lines.join("\n  "))
    })?;
    for rest in &found.rests {
        match rest.curvatures_1_m {
            None => writeln!(
                told,
                "rests at {:.3} m of segments[{}]: the direction of travel changes",
                rest.at_m, rest.segment
            )?,
            Some((before, after)) => writeln!(
                told,
                "rests at {:.3} m of segments[{}]: the curvature steps from {before:.4} to {after:.4} 1/m, and steering takes time; a clothoid between would save the stop",
                rest.at_m, rest.segment
            )?,
        }
    }
    tell_dwells(found, told)?;
    let new_s = plan.duration_s();
    match old {
        Some(old) => writeln!(told, "duration   {new_s:.3} s, before {:.3} s", old.duration_s())?,
        None => writeln!(told, "duration   {new_s:.3} s; as it was, the plan did not compile")?,
    }
    writeln!(told, "length     {:.3} m", plan.length_m())?;
    bounds::Bounds::of(plan, &*terms.vehicle, args.reserve).tell(told)?;
    if report.is_fit() {
        writeln!(told, "next       fieldbook check --site {site} --plan {out}")?;
        writeln!(told, "           fieldbook simulate --site {site} --plan {out}")?;
    } else {
        writeln!(told, "the result is written to {out}, but it is not fit:")?;
        for finding in report.findings.iter().filter(|finding| finding.severity != Severity::Information) {
            writeln!(told, "  {}", finding.line())?;
        }
    }
    Ok(())
}
