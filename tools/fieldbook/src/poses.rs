//! `replay --poses FILE.csv --site S --plan P`: what the law would have commanded at poses from any source, open loop.

use crate::choice::LawChoice;
use crate::open_loop::{Asked, CAUTION, Question, choose, create_csv, law_text, write_csv};
use crate::output;
use crate::stats::Spread;
use anyhow::{Context as _, anyhow, bail};
use serde_json::json;
use std::fs::File;
use std::io::{BufRead, BufReader};
use std::path::{Path, PathBuf};
use std::process::ExitCode;
use trackhold::site::Site;
use trackhold_core::geometry::{Mount, Pose};
use trackhold_core::law::OnPlan;
use trackhold_core::plan::{self, Plan};
use trackhold_core::settings::Settings;
use trackhold_core::time::{SpanNs, TimeNs};

/// The columns that a table of poses must have.
const COLUMNS: [&str; 4] = ["t_s", "x_m", "y_m", "heading_rad"];

/// Poses from any source instead of a log.
#[derive(Clone, Debug, Default, clap::Args)]
pub struct PosesArgs {
    /// Table of poses with the columns t_s, x_m, y_m, heading_rad in any order, others are passed over (a table of
    /// `simulate` will do). They mean the chassis point in the site frame; t_s is the plan's time.
    #[arg(long, value_name = "FILE.csv", requires = "site", requires = "plan")]
    pub poses: Option<PathBuf>,
    /// With --poses: the site file.
    #[arg(long, requires = "poses")]
    pub site: Option<PathBuf>,
    /// With --poses: the plan.
    #[arg(long, requires = "poses")]
    pub plan: Option<PathBuf>,
    /// With --poses: the t_s at which the plan began.
    #[arg(
        long,
        value_name = "T",
        default_value_t = 0.0,
        requires = "poses",
        value_parser = finite,
        allow_negative_numbers = true
    )]
    pub plan_begin: f64,
    /// With --poses: the poses mean the estimator's point and axis, as the site file's [pose] says.
    #[arg(long, requires = "poses")]
    pub estimator_poses: bool,
}

fn finite(text: &str) -> Result<f64, String> {
    text.parse()
        .ok()
        .filter(|value: &f64| value.is_finite())
        .ok_or_else(|| format!("{text:?} is not a number"))
}

/// Runs the subcommand's part for a table of poses.
///
/// # Errors
/// Why it could not run.
pub fn run(
    args: &PosesArgs,
    choice: &LawChoice,
    csv: Option<&Path>,
    as_json: bool,
) -> anyhow::Result<ExitCode> {
    let (Some(poses), Some(site), Some(plan)) = (&args.poses, &args.site, &args.plan) else {
        bail!("--poses, --site and --plan go together");
    };
    let (settings, checked) = choose(&Site::load(site)?.settings, choice)?;
    let mount = if args.estimator_poses { checked.mount } else { Mount::default() };
    let mut asked = Asked::new(checked);
    let raw = std::fs::read(plan).with_context(|| format!("cannot read {}", plan.display()))?;
    let plan = plan::compile(&raw, &**asked.vehicle())
        .map_err(|findings| anyhow!("{}:\n  {}", plan.display(), findings.join("\n  ")))?;
    let rows = read_table(poses)?;
    let within = |row: &&TimedPose| (0.0..=plan.duration_s()).contains(&(row.t_s - args.plan_begin));
    if !rows.iter().any(|row| within(&row)) {
        bail!(
            "{}: no pose lies within the plan, which lasts from t_s = {} to {} s: say with --plan-begin when it began",
            poses.display(),
            args.plan_begin,
            args.plan_begin + plan.duration_s()
        );
    }
    let totals = ask_all(&mut asked, &plan, &rows, args.plan_begin, mount, csv)?;
    output::print(&totals.summary(&settings, as_json))?;
    Ok(ExitCode::SUCCESS)
}

fn ask_all(
    asked: &mut Asked,
    plan: &Plan,
    rows: &[TimedPose],
    plan_begin: f64,
    mount: Mount,
    csv: Option<&Path>,
) -> anyhow::Result<Totals> {
    let vehicle = std::sync::Arc::clone(asked.vehicle());
    let create = |path: &Path| {
        create_csv(path, &*vehicle, &[]).with_context(|| format!("cannot make {}", path.display()))
    };
    let mut csv = csv.map(create).transpose()?;
    let mut totals = Totals::default();
    let (mut cursor, mut step_s) = (0, asked.period_s());
    asked.begin();
    for (index, row) in rows.iter().enumerate() {
        if let Some(before) = index.checked_sub(1) {
            step_s = row.t_s - rows[before].t_s;
        }
        let settle_s = rows.get(index + 1).map_or(step_s, |next| next.t_s - row.t_s);
        let plan_time_s = row.t_s - plan_begin;
        let (reference, pose) = (plan.at(plan_time_s, &mut cursor), mount.chassis(row.pose));
        let ahead = OnPlan { plan, t_s: plan_time_s, rate: 1.0 };
        let (at, literal) = (TimeNs(0) + SpanNs::from_seconds(row.t_s - rows[0].t_s), reference.velocity);
        let ended = !plan.is_open() && plan_time_s >= plan.duration_s();
        let question =
            Question { at, literal, reference, ahead, pose, step_s, settle_s, resting: false, ended };
        let answer = asked.ask(&question);
        totals.poses += 1;
        totals.limited += u64::from(answer.limited);
        totals.stopped += u64::from(answer.stopped);
        totals.errors.iter_mut().zip(answer.error).for_each(|(spread, error)| spread.add(error));
        totals.speed.add(answer.body.speed_m_s);
        totals.turn_rate.add(answer.body.turn_rate_rad_s);
        if let Some(csv) = &mut csv {
            write_csv(csv, &*vehicle, row.t_s, plan_time_s, &answer);
            csv.end_row();
        }
    }
    csv.map_or(Ok(()), output::CsvFile::finish).context("cannot write the table")?;
    Ok(totals)
}

/// What came out, over all poses.
#[derive(Debug, Default)]
struct Totals {
    poses: u64,
    limited: u64,
    stopped: u64,
    errors: [Spread; 3],
    speed: Spread,
    turn_rate: Spread,
}

impl Totals {
    fn summary(&self, settings: &Settings, as_json: bool) -> String {
        let [along, cross, heading] = &self.errors;
        if as_json {
            let object = json!({
                "open_loop": true,
                "caution": CAUTION,
                "law": settings.law.name,
                "gains": settings.law.gains,
                "poses": self.poses,
                "rms_along_m": along.rms(),
                "rms_cross_m": cross.rms(),
                "max_cross_m": cross.greatest(),
                "rms_heading_rad": heading.rms(),
                "max_speed_m_s": self.speed.greatest(),
                "max_turn_rate_rad_s": self.turn_rate.greatest(),
                "outside_domain_poses": self.stopped,
                "limited_poses": self.limited,
            });
            return format!("{object}\n");
        }
        let row = |name: &str, spread: &Spread, unit: &str| {
            format!("{name:<22}{:>12.6}    {:>12.6} {unit}\n", spread.rms(), spread.greatest())
        };
        [
            format!(
                "{CAUTION}\n{} at {} poses\n{:22}         rms        greatest\n",
                law_text(settings),
                self.poses,
                ""
            ),
            row("along-track error", along, "m"),
            row("cross-track error", cross, "m"),
            row("heading error", heading, "rad"),
            row("commanded speed", &self.speed, "m/s"),
            row("commanded turn rate", &self.turn_rate, "rad/s"),
            format!(
                "limits acted at {} poses; a guard would have stopped the machine at {}\n",
                self.limited, self.stopped
            ),
        ]
        .concat()
    }
}

/// A row of a table of poses.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TimedPose {
    /// Moment, s.
    pub t_s: f64,
    /// Pose in the site frame.
    pub pose: Pose,
}

/// Reads a table of poses.
///
/// # Errors
/// File and line, and what is wrong there: a column missing, not a number, a time that does not rise.
pub fn read_table(path: &Path) -> anyhow::Result<Vec<TimedPose>> {
    let file = File::open(path).with_context(|| format!("cannot read {}", path.display()))?;
    parse_table(BufReader::new(file)).map_err(|(line, what)| anyhow!("{}:{line}: {what}", path.display()))
}

fn parse_table(source: impl BufRead) -> Result<Vec<TimedPose>, (usize, String)> {
    let mut places = None;
    let mut rows: Vec<TimedPose> = Vec::new();
    for (index, line) in source.lines().enumerate() {
        let at = |what: String| (index + 1, what);
        let line = line.map_err(|error| at(error.to_string()))?;
        let line = line.trim_start_matches('\u{feff}').trim();
        if line.is_empty() || line.starts_with('#') {
            continue;
        }
        let Some(places) = &places else {
            places = Some(find_columns(line).map_err(at)?);
            continue;
        };
        let row = parse_row(line, places).map_err(at)?;
        if let Some(before) = rows.last().filter(|before| row.t_s <= before.t_s) {
            return Err(at(format!("t_s = {} does not lie after the row before, {}", row.t_s, before.t_s)));
        }
        rows.push(row);
    }
    if rows.is_empty() {
        return Err((
            1,
            format!("holds no poses; give a header with {} and a row a pose", COLUMNS.join(", ")),
        ));
    }
    Ok(rows)
}

fn find_columns(header: &str) -> Result<[usize; 4], String> {
    let names: Vec<&str> = header.split(',').map(|name| name.trim().trim_matches('"')).collect();
    let mut places = [0; 4];
    for (place, column) in places.iter_mut().zip(COLUMNS) {
        *place = names
            .iter()
            .position(|name| *name == column)
            .ok_or_else(|| format!("the header has no column {column}; it needs {}", COLUMNS.join(", ")))?;
    }
    Ok(places)
}

fn parse_row(line: &str, places: &[usize; 4]) -> Result<TimedPose, String> {
    let cells: Vec<&str> = line.split(',').map(str::trim).collect();
    let mut values = [0.0; 4];
    for ((value, place), column) in values.iter_mut().zip(places).zip(COLUMNS) {
        let cell = cells.get(*place).ok_or_else(|| format!("{column} is missing"))?;
        *value = finite(cell).map_err(|what| format!("{column}: {what}"))?;
    }
    let [t_s, x_m, y_m, heading_rad] = values;
    Ok(TimedPose { t_s, pose: Pose::new(x_m, y_m, trackhold_core::math::wrap(heading_rad)) })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn columns_are_found_by_name() {
        let table = "# from the survey\nmode,heading_rad,t_s,y_m,x_m\nx,0.5,1,3,2\n\nx,0.6,1.5,3,2.5\n";
        let rows = parse_table(table.as_bytes()).unwrap();
        assert_eq!(rows[0], TimedPose { t_s: 1.0, pose: Pose::new(2.0, 3.0, 0.5) });
        assert_eq!(rows.len(), 2);
    }

    #[test]
    fn what_is_wrong_is_told_with_its_line() {
        let header = "t_s,x_m,y_m,heading_rad\n";
        for (table, line, what) in [
            ("t_s,x_m,y_m\n0,0,0\n", 1, "no column heading_rad"),
            (&*format!("{header}0,0,0,0\n1,a,0,0\n"), 3, "x_m: \"a\" is not a number"),
            (&*format!("{header}0,0,0\n"), 2, "heading_rad is missing"),
            (&*format!("{header}1,0,0,0\n1,0,0,0\n"), 3, "does not lie after"),
            (&*format!("{header}0,0,NaN,0\n"), 2, "y_m"),
            (header, 1, "no poses"),
        ] {
            let error = parse_table(table.as_bytes()).unwrap_err();
            assert_eq!(error.0, line, "{table}");
            assert!(error.1.contains(what), "{table}: {}", error.1);
        }
    }
}
