//! `replay`: a recorded run once more. The log's events go into a node made from the log's first entry, and everything that
//! comes out is compared with the log, bit for bit. With `--law` or `--poses` instead: open loop, see [`crate::open_loop`].

mod difference;

pub use difference::Difference;

use crate::choice::{LawChoice, problem_lines};
use crate::cli::COULD_NOT_RUN;
use crate::log::{Ending, LogError, LogReader};
use crate::{open_loop, output, poses};
use anyhow::{Context as _, bail};
use serde_json::{Value, json};
use std::collections::VecDeque;
use std::io::Read;
use std::path::PathBuf;
use std::process::ExitCode;
use thiserror::Error;
use trackhold_core::BUILD;
use trackhold_core::digest::ResultDigest;
use trackhold_core::node::tuning::Tuning;
use trackhold_core::node::{Event, Node};
use trackhold_core::plan::check::admit;
use trackhold_core::settings::Settings;
use trackhold_core::time::TimeNs;
use trackhold_proto::blob::Digest;
use trackhold_proto::journal::{Body, Boot, Entry, Gap, write_frame};

/// Exit code of a replay that computed something else than the log holds.
const DIVERGED: u8 = 1;

/// What the help says below the options.
const MORE: &str = "\
A plain replay feeds the log's events to the core and compares every tick and effect bit for bit. Exit codes: 0 \
identical; 1 diverged, the first difference is named; 2 could not run or vouch: the log is damaged, cut off or has gaps.

With --law, --gain or --poses it shows instead what a law would have commanded at those poses. That is an open loop: the \
poses do not respond to the commands.";

/// The arguments.
#[derive(Debug, clap::Args)]
#[command(after_help = MORE)]
pub struct Args {
    /// The track log.
    #[arg(required_unless_present = "poses", conflicts_with = "poses")]
    pub log: Option<PathBuf>,
    /// Accept a log without end mark that was cut off behind a whole frame.
    #[arg(long, conflicts_with = "poses")]
    pub partial: bool,
    /// Another law, other gains.
    #[command(flatten)]
    pub law: LawChoice,
    /// Poses from elsewhere.
    #[command(flatten)]
    pub poses: poses::PosesArgs,
    /// Open loop only: write what would have been commanded, a row a pose.
    #[arg(long, value_name = "FILE")]
    pub csv: Option<PathBuf>,
    /// Print the outcome as one JSON object.
    #[arg(long)]
    pub json: bool,
}

/// Runs the subcommand.
///
/// # Errors
/// Why it could not run.
pub fn run(args: &Args) -> anyhow::Result<ExitCode> {
    let Some(path) = &args.log else {
        return poses::run(&args.poses, &args.law, args.csv.as_deref(), args.json);
    };
    if args.law.is_given() {
        return open_loop::run(path, &args.law, args.partial, args.csv.as_deref(), args.json);
    }
    if args.csv.is_some() {
        bail!("--csv goes with --law, --gain or --poses: a plain replay computes what is in the log already");
    }
    let verdict = match LogReader::open(path) {
        Ok(reader) => replay_log(reader, args.partial),
        Err(error) => Err(error.into()),
    };
    let code = match &verdict {
        Ok(report) if report.difference.is_none() => ExitCode::SUCCESS,
        Ok(_) => ExitCode::from(DIVERGED),
        Err(_) => ExitCode::from(COULD_NOT_RUN),
    };
    if args.json {
        output::print(&format!("{}\n", verdict_json(&verdict)))?;
        return Ok(code);
    }
    match verdict {
        Ok(report) => output::print(&report.text()).map(|()| code).context("cannot print"),
        Err(error) => Err(error).with_context(|| format!("{}: not replayed to its end", path.display())),
    }
}

/// What a replay found.
#[derive(Clone, Debug, PartialEq)]
pub struct Report {
    /// Numbered entries compared, the first difference included.
    pub entries: u64,
    /// Ticks among them.
    pub ticks: u64,
    /// From the first entry to the last, s.
    pub duration_s: f64,
    /// SHA-256 over tick records and effects, as replayed.
    pub digest: Digest,
    /// The build that made the log, if it is another one than this program's.
    pub other_build: Option<String>,
    /// True if the log has its end mark.
    pub complete: bool,
    /// Entries that follow from the log's last event, but that the log ends before.
    pub unfinished: usize,
    /// The first difference; none if everything is identical.
    pub difference: Option<Difference>,
}

/// Why nothing can be said about a log as a whole.
#[derive(Debug, Error)]
pub enum CannotVouch {
    /// The log is not whole.
    #[error(transparent)]
    Log(#[from] LogError),
    /// It does not begin at the beginning.
    #[error(
        "does not begin with entry 0, the daemon's boot: a recording that began later cannot be replayed"
    )]
    NoBeginning,
    /// Settings that this program cannot work with.
    #[error("this program cannot work with the settings in its first entry:\n  {0}")]
    Settings(String),
    /// Entries are missing.
    #[error("entries {} to {} are missing; up to there everything is identical", .0.first, .0.last)]
    Gap(Gap),
    /// It has no end mark.
    #[error(
        "has no end mark: it was cut off behind entry {last}; up to there everything is identical (--partial accepts that)"
    )]
    NoEnd {
        /// The last entry.
        last: u64,
    },
}

/// Replays a log.
///
/// # Errors
/// Why nothing can be said about it as a whole. A difference that comes before that is reported instead.
pub fn replay_log<R: Read>(mut reader: LogReader<R>, partial: bool) -> Result<Report, CannotVouch> {
    let mut replay = match reader.next().transpose()? {
        Some(Entry { number: 0, at_ns, body: Body::Boot(boot) }) => Replay::new(at_ns, boot)?,
        _ => return Err(CannotVouch::NoBeginning),
    };
    replay.compare_boot(reader.frame_bytes());
    while replay.report.difference.is_none() {
        let Some(entry) = reader.next().transpose()? else { break };
        if let Body::Gap(gap) = entry.body {
            return Err(CannotVouch::Gap(gap));
        }
        replay.take(entry, reader.frame_bytes());
    }
    let report = replay.finish(matches!(reader.ending(), Ending::Marked(_)));
    if report.difference.is_none() && !report.complete && !partial {
        return Err(CannotVouch::NoEnd { last: report.entries.saturating_sub(1) });
    }
    Ok(report)
}

struct Replay {
    node: Node,
    /// What the node has made and the log has not yet shown.
    made: VecDeque<Entry>,
    fresh: Vec<Entry>,
    frame: Vec<u8>,
    digest: ResultDigest,
    boot: Boot,
    begin_ns: u64,
    report: Report,
}

impl Replay {
    fn new(at_ns: u64, boot: Boot) -> Result<Self, CannotVouch> {
        let settings = Settings::from_json(&boot.settings).map_err(CannotVouch::Settings)?;
        let mut fresh = Vec::new();
        let node = Node::new(&settings, boot.boot, boot.seed, TimeNs(at_ns), &mut fresh)
            .map_err(|problems| CannotVouch::Settings(problem_lines(&problems)))?;
        let report = Report {
            entries: 0,
            ticks: 0,
            duration_s: 0.0,
            digest: Digest::NONE,
            other_build: (boot.build != BUILD).then(|| boot.build.clone()),
            complete: false,
            unfinished: 0,
            difference: None,
        };
        let (made, frame, digest) =
            (VecDeque::from(std::mem::take(&mut fresh)), Vec::new(), ResultDigest::default());
        Ok(Self { node, made, fresh, frame, digest, boot, begin_ns: at_ns, report })
    }

    /// Compares entry 0. Another build is told apart: it may compute the same all the same. Keys that are younger than the
    /// log have their defaults here, and none there.
    fn compare_boot(&mut self, frame: &[u8]) {
        if let Some(Entry { body: Body::Boot(made), .. }) = self.made.front_mut() {
            made.build.clone_from(&self.boot.build);
            if completes(&made.settings, &self.boot.settings) {
                made.settings.clone_from(&self.boot.settings);
            }
        }
        let entry = Entry { number: 0, at_ns: self.begin_ns, body: Body::Boot(self.boot.clone()) };
        self.compare(entry, frame);
    }

    /// Takes the log's next entry: an event, which is fed, or a result that is due.
    fn take(&mut self, entry: Entry, frame: &[u8]) {
        if self.made.is_empty() {
            match self.event(&entry.body) {
                Some(event) => {
                    self.node.handle(TimeNs(entry.at_ns), event, &mut self.fresh);
                    self.made.extend(self.fresh.drain(..));
                }
                None => {
                    self.report.entries += 1;
                    self.report.difference = Some(Difference::surplus(&entry));
                    return;
                }
            }
        }
        self.compare(entry, frame);
    }

    /// The event that an entry stands for; none if it is a result.
    fn event(&self, body: &Body) -> Option<Event> {
        match body {
            Body::Pose(event) => Some(Event::Pose(*event)),
            Body::Exchange(event) => Some(Event::Exchange(*event)),
            Body::Plan(event) => {
                let compiled = admit(&event.raw, self.node.terms()).map(Box::new);
                Some(Event::Plan(event.clone(), compiled))
            }
            Body::Order(event) => Some(Event::Order(*event)),
            Body::Tune(event) => {
                let built = Tuning::build(&event.law, self.node.law_context());
                Some(Event::Tune(event.clone(), built))
            }
            Body::Trip(event) => Some(Event::Trip(*event)),
            Body::Note(note) => Some(Event::Note(*note)),
            Body::Tick(_) => Some(Event::Tick),
            _ => None,
        }
    }

    fn compare(&mut self, entry: Entry, frame: &[u8]) {
        let Some(made) = self.made.pop_front() else { return };
        self.frame.clear();
        write_frame(&made, &mut self.frame);
        self.digest.add(&made.body);
        self.report.entries += 1;
        self.report.ticks += u64::from(matches!(made.body, Body::Tick(_)));
        self.report.duration_s = TimeNs(entry.at_ns).since(TimeNs(self.begin_ns)).seconds();
        if self.frame != frame {
            self.report.difference = Some(Difference::between(&entry, &made));
        }
    }

    fn finish(self, complete: bool) -> Report {
        Report { digest: self.digest.finish(), complete, unfinished: self.made.len(), ..self.report }
    }
}

/// True if `whole` says all that `part` says, both JSON, and at most more keys.
fn completes(whole: &str, part: &str) -> bool {
    fn within(whole: &Value, part: &Value) -> bool {
        match (whole, part) {
            (Value::Object(whole), Value::Object(part)) => {
                part.iter().all(|(key, value)| whole.get(key).is_some_and(|found| within(found, value)))
            }
            _ => whole == part,
        }
    }
    match (serde_json::from_str(whole), serde_json::from_str(part)) {
        (Ok(whole), Ok(part)) => within(&whole, &part),
        _ => false,
    }
}

impl Report {
    fn text(&self) -> String {
        let mut text = String::new();
        if let Some(build) = &self.other_build {
            text += &format!(
                "warning: the log was made by {build}, this program is {BUILD}: another build may compute other bits\n"
            );
        }
        let counts = format!("{} entries, {} ticks, {:.3} s", self.entries, self.ticks, self.duration_s);
        match &self.difference {
            Some(difference) => text += &format!("diverged: {difference}\n  before that: {counts}\n"),
            None => {
                text += &format!("identical: {counts}\ndigest {}\n", self.digest);
                if !self.complete {
                    text += "the log has no end mark: what came after its last entry is unknown\n";
                }
                if self.unfinished > 0 {
                    text += &format!(
                        "the log ends {} entries before all results of its last event\n",
                        self.unfinished
                    );
                }
            }
        }
        text
    }
}

fn verdict_json(verdict: &Result<Report, CannotVouch>) -> serde_json::Value {
    let report = match verdict {
        Ok(report) => report,
        Err(error) => return json!({ "result": "not-vouched", "reason": error.to_string() }),
    };
    let mut object = json!({
        "result": if report.difference.is_some() { "diverged" } else { "identical" },
        "entries": report.entries,
        "ticks": report.ticks,
        "duration_s": report.duration_s,
        "digest": report.digest.to_string(),
        "complete": report.complete,
        "unfinished": report.unfinished,
        "build": BUILD,
        "log_build": report.other_build.as_deref().unwrap_or(BUILD),
    });
    if let Some(difference) = &report.difference {
        object["difference"] = difference.to_json();
    }
    object
}
