//! `fieldbook record`: a daemon's journal into a track log, complete over a bad link.

use crate::client::collect::{Item, Tally};
use crate::client::follow::{Follower, From};
use crate::client::{Client, DEFAULT_ADDRESS, ending};
use crate::log::LogWriter;
use crate::output;
use anyhow::{Context, Result};
use serde_json::json;
use std::path::{Path, PathBuf};
use std::process::ExitCode;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::{Duration, Instant};
use trackhold_proto::blob::BootId;
use trackhold_proto::journal::{Body, Entry, flag, read_frame};

/// A number asked for this often in vain is written as a gap (`PROTOCOL.md`, section 6).
const GIVE_UP: u32 = 20;
/// How long what is still missing is waited for at the end.
const LAST_CALL: Duration = Duration::from_secs(5);
/// A report comes this often.
const REPORT: Duration = Duration::from_secs(5);
/// What was recorded is handed to the system this often, so that a crash of this program loses little.
const FLUSH: Duration = Duration::from_secs(1);

/// Arguments of `record`.
#[derive(Debug, clap::Args)]
#[command(
    after_help = "Exit codes: 0 recorded without a gap as long as asked; 1 recorded, but with gaps or ended early \
                        because the daemon was restarted; 2 could not run.\nEnds with Ctrl-C, SIGTERM or --seconds, and \
                        then writes the end mark. Next: fieldbook replay FILE."
)]
pub struct Args {
    /// The daemon's address.
    #[arg(long, value_name = "ADDR", default_value = DEFAULT_ADDRESS)]
    pub from: String,
    /// The track log to write; a file that is there already is not written over.
    #[arg(long, value_name = "FILE.tracklog")]
    pub out: PathBuf,
    /// Record for so long.
    #[arg(long, value_name = "T")]
    pub seconds: Option<f64>,
    /// Begin at the present instead of at the daemon's boot. Such a log cannot be replayed: a replay needs the whole past.
    #[arg(long)]
    pub from_now: bool,
    /// Print the summary as one JSON object.
    #[arg(long)]
    pub json: bool,
}

/// What a recording was.
#[derive(Clone, Debug)]
pub struct Recording {
    /// The log's absolute path.
    pub path: PathBuf,
    /// The daemon's boot.
    pub boot: BootId,
    /// True if it was to begin at the present: what was before is left out, and written as a gap.
    pub from_now: bool,
    /// Numbered entries written.
    pub entries: u64,
    /// Numbers that could not be had.
    pub lost: u64,
    /// The gaps, both ends included; what was left out among them.
    pub gaps: Vec<(u64, u64)>,
    /// Ticks whose law had too thin a margin against dead time.
    pub ticks_thin: u64,
    /// Bytes of entries written.
    pub bytes: u64,
    /// The boot that took the recorded one's place, if the daemon was restarted.
    pub other_boot: Option<BootId>,
    /// What was seen on the way.
    pub tally: Tally,
}

/// Runs `record`.
///
/// # Errors
/// If nobody answers, or the log cannot be written.
pub fn run(args: &Args) -> Result<ExitCode> {
    let seconds = args.seconds.map(ending::duration).transpose()?;
    let stop = ending::stop_on_signal()?;
    let recorder = Recorder::begin(Client::connect(&args.from)?, &args.out, args.from_now)?;
    eprintln!("{}", recorder.greeting(args));
    let recording = recorder.record(stop, seconds, true)?;
    output::print(&if args.json { recording.json() } else { recording.told() })?;
    Ok(ExitCode::from(u8::from(recording.lost > 0 || recording.other_boot.is_some())))
}

/// A recording under way.
#[derive(Debug)]
pub struct Recorder {
    follower: Follower,
    log: LogWriter,
    boot: BootId,
    from_now: bool,
    pending_gap: Option<(u64, u64)>,
    gaps: Vec<(u64, u64)>,
    bytes: u64,
    ticks_thin: u64,
    entries: u64,
    lost: u64,
}

impl Recorder {
    /// Subscribes and begins the log.
    ///
    /// # Errors
    /// If nobody answers, or the file cannot be made or is there already.
    pub fn begin(client: Client, out: &Path, from_now: bool) -> Result<Self> {
        let from = if from_now { From::BootThenNow } else { From::Boot };
        let follower = Follower::begin(client, from, GIVE_UP)?;
        let log = LogWriter::create(out).with_context(|| {
            format!(
                "cannot begin the log {}; a file that is there already is not written over",
                out.display()
            )
        })?;
        let boot = follower.subscribed().boot;
        Ok(Self {
            follower,
            log,
            boot,
            from_now,
            pending_gap: None,
            gaps: Vec::new(),
            bytes: 0,
            ticks_thin: 0,
            entries: 0,
            lost: 0,
        })
    }

    fn greeting(&self, args: &Args) -> String {
        let subscribed = self.follower.subscribed();
        let mut text = format!(
            "recording boot {} at {} into {}; end with Ctrl-C",
            self.boot,
            self.follower.client().peer(),
            args.out.display()
        );
        if args.from_now {
            text.push_str("\ncaution: from the present on; such a log cannot be replayed, a replay needs the whole past");
        } else if subscribed.oldest_entry > 1 {
            text.push_str(&format!(
                "\ncaution: entries 1 to {} have left the daemon's ring; such a log cannot be replayed. Begin to record \
                 soon after the daemon has started, or give it a larger ring ([net] ring_bytes)",
                subscribed.oldest_entry - 1
            ));
        }
        text
    }

    /// Records until `stop` is set, `seconds` are over or the daemon is restarted; then ends the log.
    ///
    /// # Errors
    /// If the log cannot be written.
    pub fn record(mut self, stop: &AtomicBool, seconds: Option<Duration>, report: bool) -> Result<Recording> {
        let begun = Instant::now();
        let (mut reported, mut flushed) = (begun, begun);
        let over = |begun: Instant| seconds.is_some_and(|seconds| begun.elapsed() >= seconds);
        while !stop.load(Ordering::Relaxed) && !over(begun) && self.follower.other_boot().is_none() {
            self.follower.poll(Duration::from_millis(10));
            self.drain(u64::MAX)?;
            if flushed.elapsed() >= FLUSH {
                self.log.flush().context("cannot write the log")?;
                flushed = Instant::now();
            }
            if report && reported.elapsed() >= REPORT {
                eprintln!("{}", self.report());
                reported = Instant::now();
            }
        }
        self.finish()
    }

    fn report(&self) -> String {
        let tally = self.follower.tally();
        let waiting = self.follower.end().saturating_sub(self.follower.expected());
        let mut text = format!(
            "{} entries, {} lost, {} asked for again, {waiting} to come, {:.1} MB",
            self.entries,
            self.lost,
            tally.asked_again,
            self.bytes as f64 / 1e6
        );
        let quiet = self.follower.quiet_for();
        if quiet > Duration::from_secs(2) {
            text.push_str(&format!("; nothing heard for {:.0} s, still listening", quiet.as_secs_f64()));
        }
        text
    }

    /// Writes what is here in order, below `until`.
    fn drain(&mut self, until: u64) -> Result<()> {
        while self.follower.expected() < until {
            match self.follower.next_item() {
                Some(Item::Frame(frame)) => {
                    self.write_gap()?;
                    self.log.write_frame_bytes(&frame).context("cannot write the log")?;
                    self.entries += 1;
                    self.ticks_thin += u64::from(is_thin_tick(&frame));
                    self.bytes += frame.len() as u64;
                }
                Some(Item::Gap(first, last)) => self.note_gap(first, last),
                None => break,
            }
        }
        Ok(())
    }

    /// Gaps side by side are written as one.
    fn note_gap(&mut self, first: u64, last: u64) {
        if !(self.from_now && first == 1) {
            self.lost += last - first + 1;
        }
        let first = self.pending_gap.map_or(first, |(earlier, _)| earlier);
        self.pending_gap = Some((first, last));
    }

    fn write_gap(&mut self) -> Result<()> {
        if let Some((first, last)) = self.pending_gap.take() {
            self.log.gap(first, last).context("cannot write the log")?;
            self.gaps.push((first, last));
        }
        Ok(())
    }

    /// Waits for what is still missing up to the present, gives the rest up, writes the end mark.
    fn finish(mut self) -> Result<Recording> {
        if self.follower.other_boot().is_none() {
            self.follower.refresh(Duration::from_secs(1));
        }
        let until = self.follower.end();
        let begun = Instant::now();
        self.drain(until)?;
        let still_there = |follower: &Follower| {
            follower.other_boot().is_none() && follower.quiet_for() < Duration::from_secs(2)
        };
        while self.follower.expected() < until && begun.elapsed() < LAST_CALL && still_there(&self.follower) {
            self.follower.poll(Duration::from_millis(10));
            self.drain(until)?;
        }
        self.follower.give_up_below(until);
        self.drain(until)?;
        self.write_gap()?;
        self.follower.end_subscription();
        Ok(Recording {
            boot: self.boot,
            from_now: self.from_now,
            entries: self.entries,
            lost: self.lost,
            gaps: self.gaps,
            bytes: self.bytes,
            ticks_thin: self.ticks_thin,
            other_boot: self.follower.other_boot(),
            tally: self.follower.tally(),
            path: self.log.finish().context("cannot write the log's end mark")?,
        })
    }
}

/// True for a tick with the flag that its law's margin was too thin.
fn is_thin_tick(frame: &[u8]) -> bool {
    // A tick is short; a long plan is not read for this.
    const SHORT: usize = 1024;
    frame.len() <= SHORT
        && matches!(read_frame(frame), Ok((Entry { body: Body::Tick(record), .. }, _)) if record.has(flag::THIN_MARGIN))
}

impl Recording {
    /// The recording as one JSON object and a line break.
    pub fn json(&self) -> String {
        let object = json!({
            "path": self.path,
            "boot": self.boot,
            "entries": self.entries,
            "lost": self.lost,
            "gaps": self.gaps,
            "bytes": self.bytes,
            "ticks_thin": self.ticks_thin,
            "asked_again": self.tally.asked_again,
            "duplicates": self.tally.duplicates,
            "damaged": self.tally.damaged,
            "restarted": self.other_boot.is_some(),
        });
        format!("{object}\n")
    }

    /// The recording in words.
    pub fn told(&self) -> String {
        let megabytes = self.bytes as f64 / 1e6;
        let mut text = format!("{} entries, {megabytes:.1} MB, in {}\n", self.entries, self.path.display());
        if let Some(other) = self.other_boot {
            text.push_str(&format!(
                "the daemon was restarted (boot {other}): a log holds one boot, this one ends here; record again for the \
                 next\n"
            ));
        }
        if self.ticks_thin > 0 {
            text.push_str(&format!(
                "in {} ticks the law was too fast for the dead time and the pose's age: trackhold check-config tells the margin\n",
                self.ticks_thin
            ));
        }
        if self.gaps.is_empty() {
            text.push_str(&format!(
                "no gap; entries lost on the way were asked for again, {} by number\nnext: fieldbook replay {}\n",
                self.tally.asked_again,
                self.path.display()
            ));
            return text;
        }
        if self.from_now {
            text.push_str("what was before the recording began is left out, as asked\n");
        }
        text.push_str(&format!("{} entries could not be had; gaps in the log:", self.lost));
        for (first, last) in self.gaps.iter().take(10) {
            text.push_str(&format!(" {first}..{last}"));
        }
        if self.gaps.len() > 10 {
            text.push_str(&format!(" and {} more", self.gaps.len() - 10));
        }
        text.push_str("\na log with gaps cannot be replayed\n");
        text
    }
}

#[cfg(test)]
mod live;
#[cfg(test)]
mod tests;
