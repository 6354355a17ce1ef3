//! `import`: a path from another program's file into a plan.
//!
//! Each source has a file of its own; all of them make a [`draft`] of a plan, which [`finish`] compiles, times and writes.

pub mod columns;
pub mod corners;
pub mod csv;
pub mod curve;
pub mod draft;
pub mod finish;
pub mod geographic;
pub mod geojson;
pub mod gpx;
pub mod heading;
pub mod path;
pub mod simplify;
pub mod smooth;
pub mod stamp;
pub mod track;
pub mod vda5050;

use crate::output;
use anyhow::{Context as _, anyhow};
use clap::Subcommand;
use draft::{Draft, Name};
use std::path::{Path, PathBuf};
use std::process::ExitCode;
use std::sync::Arc;
use track::Refused;
use trackhold::site::Site;
use trackhold_core::vehicle::Vehicle;

/// What the help says below the subcommands.
const MORE: &str = "\
Nothing is mended silently: what is left out, joined or taken for granted is told. What cannot be driven is refused with \
its line or index.

Exit codes: 0 the plan is written; 1 the file was refused; 2 it could not be read, or the plan not be written.";

/// The largest file that is read, bytes.
const MAX_FILE_BYTES: u64 = 512 << 20;

/// The arguments.
#[derive(Debug, clap::Args)]
#[command(after_help = MORE)]
pub struct Args {
    /// Where the path comes from.
    #[command(subcommand)]
    pub source: Source,
}

/// The sources.
#[derive(Debug, Subcommand)]
pub enum Source {
    /// A table of points: t, x, y, heading, or a path only.
    Csv(csv::Args),
    /// The released part of a VDA 5050 order.
    #[command(name = "vda5050")]
    Vda5050(vda5050::Args),
    /// A LineString in geographic coordinates.
    #[command(name = "geojson")]
    GeoJson(geojson::Args),
    /// A track or a route in geographic coordinates.
    Gpx(gpx::Args),
}

/// What comes out.
#[derive(Clone, Debug, clap::Args)]
pub struct Output {
    /// Where the plan goes, in the place of an old file of that name.
    #[arg(long, value_name = "PLAN.json")]
    pub out: PathBuf,
    /// The plan's id; without it the file's name (of an order, its orderId).
    #[arg(long)]
    pub id: Option<String>,
    /// The plan's revision; without it 1 (of an order, its orderUpdateId).
    #[arg(long)]
    pub revision: Option<u32>,
    /// Let the speed rise and fall with this acceleration, from rest to rest, m/s². Without it every segment has its speed
    /// from the first instant; `fieldbook retime` fits a timing to the machine.
    #[arg(long, value_name = "M/S²", value_parser = positive)]
    pub accel: Option<f64>,
    /// The same for turns on the spot, with --accel, rad/s².
    #[arg(long, value_name = "RAD/S²", value_parser = positive, default_value = "0.5")]
    pub pivot_accel: f64,
    /// The machine this is for: turns on the spot that it cannot make are refused, and what its limits say is told.
    #[arg(long, value_name = "SITE.toml")]
    pub site: Option<PathBuf>,
}

/// What a source gave.
#[derive(Clone, Debug)]
pub struct Imported {
    /// The plan, drafted.
    pub draft: Draft,
    /// What the file held, in words.
    pub what: String,
    /// Names that the source itself has.
    pub id: Option<String>,
    /// The source's own revision.
    pub revision: Option<u32>,
    /// The source's points as straight pieces, to tell how far the path strays from them.
    pub line: Option<Vec<(f64, f64)>>,
    /// What was left out, joined or taken for granted.
    pub notes: Vec<String>,
}

impl Imported {
    fn of_path(drafted: path::Drafted, what: String, notes: Vec<String>) -> Self {
        Self { draft: drafted.draft, what, id: None, revision: None, line: Some(drafted.line), notes }
    }
}

impl Source {
    fn file(&self) -> &Path {
        match self {
            Self::Csv(args) => &args.file,
            Self::Vda5050(args) => &args.file,
            Self::GeoJson(args) => &args.file,
            Self::Gpx(args) => &args.file,
        }
    }

    fn output(&self) -> &Output {
        match self {
            Self::Csv(args) => &args.output,
            Self::Vda5050(args) => &args.output,
            Self::GeoJson(args) => &args.output,
            Self::Gpx(args) => &args.output,
        }
    }
}

/// Runs the subcommand.
///
/// # Errors
/// If a file cannot be read or written.
pub fn run(args: &Args) -> anyhow::Result<ExitCode> {
    let (file, wanted) = (args.source.file(), args.source.output());
    match make(args)? {
        Ok(finished) => {
            std::fs::write(&wanted.out, &finished.json)
                .with_context(|| format!("cannot write {}", wanted.out.display()))?;
            output::print(&finished.summary(file, wanted))?;
            Ok(ExitCode::SUCCESS)
        }
        Err(refused) => {
            eprintln!("fieldbook: {} is refused, nothing was written:\n  {refused}", file.display());
            Ok(ExitCode::FAILURE)
        }
    }
}

/// Makes the plan without writing it, or says why the file is refused.
///
/// # Errors
/// If a file cannot be read.
pub fn make(args: &Args) -> anyhow::Result<Result<finish::Finished, Refused>> {
    let (file, wanted) = (args.source.file(), args.source.output());
    let text = read_text(file)?;
    let machine = wanted.site.as_deref().map(machine).transpose()?;
    Ok(import(&args.source, &text).and_then(|imported| {
        let name = name(&imported, wanted, file);
        finish::finish(imported, &name, wanted, machine.as_deref())
    }))
}

/// Reads a source's text into a draft.
fn import(source: &Source, text: &str) -> Result<Imported, Refused> {
    match source {
        Source::Csv(args) => csv::import(args, text),
        Source::Vda5050(args) => vda5050::import(args, text),
        Source::GeoJson(args) => geojson::import(args, text),
        Source::Gpx(args) => gpx::import(args, text),
    }
}

fn read_text(file: &Path) -> anyhow::Result<String> {
    let context = || format!("cannot read {}", file.display());
    let bytes = std::fs::metadata(file).with_context(context)?.len();
    if bytes > MAX_FILE_BYTES {
        return Err(anyhow!("{} has {bytes} bytes, at most {MAX_FILE_BYTES} are read", file.display()));
    }
    let raw = std::fs::read(file).with_context(context)?;
    String::from_utf8(raw).map_err(|error| {
        let at = error.utf8_error().valid_up_to();
        anyhow!("{} is not text in UTF-8: byte {at} does not belong there", file.display())
    })
}

fn machine(path: &Path) -> anyhow::Result<Arc<dyn Vehicle>> {
    let site = Site::load(path)?;
    let checked = site.settings.checked();
    Ok(checked.map_err(|problems| anyhow!(crate::choice::problem_lines(&problems)))?.vehicle)
}

fn name(imported: &Imported, wanted: &Output, file: &Path) -> Name {
    let stem =
        || file.file_stem().map_or_else(|| "path".to_owned(), |stem| stem.to_string_lossy().into_owned());
    Name {
        id: wanted.id.clone().or_else(|| imported.id.clone()).unwrap_or_else(stem),
        revision: wanted.revision.or(imported.revision).unwrap_or(1),
    }
}

/// Reads a positive number.
pub(crate) fn positive(text: &str) -> Result<f64, String> {
    let held = text.trim().parse().ok().filter(|value: &f64| value.is_finite() && *value > 0.0);
    held.ok_or_else(|| format!("{text:?} is not a positive number"))
}
