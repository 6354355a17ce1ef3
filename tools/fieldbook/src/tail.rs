//! `fieldbook tail`: a daemon's journal as it comes, a line a tick.

mod line;

use crate::client::collect::Item;
use crate::client::follow::{Follower, From};
use crate::client::{Client, DEFAULT_ADDRESS, ending};
use anyhow::Result;
use serde_json::json;
use std::io::{self, Write};
use std::process::ExitCode;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::{Duration, Instant};
use trackhold_proto::journal::{Body, Entry, FrameError, read_frame};

/// Somebody looks on: a number asked for this often in vain is passed over.
const GIVE_UP: u32 = 4;

/// Arguments of `tail`.
#[derive(Debug, clap::Args)]
#[command(
    after_help = "Ends with Ctrl-C, or when the reader of its output has gone (exit 0); 1 if the daemon was \
                        restarted meanwhile, 2 if it could not run."
)]
pub struct Args {
    /// The daemon's address.
    #[arg(long, value_name = "ADDR", default_value = DEFAULT_ADDRESS)]
    pub from: String,
    /// Every entry as one JSON object a line.
    #[arg(long)]
    pub json: bool,
    /// Only every N-th tick; whatever else happens is still told.
    #[arg(long, value_name = "N", default_value_t = 1, value_parser = clap::value_parser!(u64).range(1..))]
    pub every: u64,
    /// Tell of every pose that arrives, too.
    #[arg(long)]
    pub poses: bool,
    /// End after so long.
    #[arg(long, value_name = "T")]
    pub seconds: Option<f64>,
}

/// Runs `tail`.
///
/// # Errors
/// If nobody answers, or the output cannot be written.
pub fn run(args: &Args) -> Result<ExitCode> {
    let seconds = args.seconds.map(ending::duration).transpose()?;
    let stop = ending::stop_on_signal()?;
    let follower = Follower::begin(Client::connect(&args.from)?, From::Now, GIVE_UP)?;
    let restarted = follow(follower, args, &mut io::stdout().lock(), stop, seconds)?;
    Ok(ExitCode::from(u8::from(restarted)))
}

/// Writes what comes to `out` until `stop` is set or `seconds` are over; true if the daemon was restarted.
///
/// # Errors
/// If the socket or `out` fails, a reader who has gone among it.
pub fn follow(
    mut follower: Follower,
    args: &Args,
    out: &mut impl Write,
    stop: &AtomicBool,
    seconds: Option<Duration>,
) -> Result<bool> {
    let begun = Instant::now();
    let mut told_quiet = false;
    while !stop.load(Ordering::Relaxed) && seconds.is_none_or(|seconds| begun.elapsed() < seconds) {
        follower.poll(Duration::from_millis(10));
        let mut wrote = false;
        while let Some(item) = follower.next_item() {
            wrote |= write_item(&item, args, out)?;
        }
        if wrote {
            out.flush()?;
        }
        if let Some(boot) = follower.other_boot() {
            writeln!(io::stderr(), "the daemon was restarted, boot {boot}: begin again to follow it")?;
            return Ok(true);
        }
        let quiet = follower.quiet_for() > Duration::from_secs(2);
        if quiet && !told_quiet {
            writeln!(
                io::stderr(),
                "nothing heard from {} for 2 s, still listening",
                follower.client().peer()
            )?;
        }
        told_quiet = quiet;
    }
    follower.end_subscription();
    Ok(false)
}

fn write_item(item: &Item, args: &Args, out: &mut impl Write) -> io::Result<bool> {
    let entry = match item {
        Item::Frame(frame) => match read_frame(frame) {
            Ok((entry, _)) => entry,
            Err(error) => return write_unknown(&error, args.json, out),
        },
        Item::Gap(first, last) if args.json => {
            writeln!(out, "{}", json!({ "gap": { "first": first, "last": last } }))?;
            return Ok(true);
        }
        Item::Gap(first, last) => {
            writeln!(out, "-- entries {first} to {last} did not come")?;
            return Ok(true);
        }
    };
    if args.json { write_json(&entry, args, out) } else { write_line(&entry, args, out) }
}

fn write_unknown(error: &FrameError, as_json: bool, out: &mut impl Write) -> io::Result<bool> {
    match as_json {
        true => writeln!(out, "{}", json!({ "unknown": error.to_string() }))?,
        false => writeln!(out, "-- {error}")?,
    }
    Ok(true)
}

/// Whether an entry is to be told at all.
fn is_wanted(body: &Body, args: &Args) -> bool {
    match body {
        Body::Tick(record) => record.tick.is_multiple_of(args.every),
        Body::Pose(_) | Body::Exchange(_) => args.poses || args.json && args.every == 1,
        _ => true,
    }
}

fn write_json(entry: &Entry, args: &Args, out: &mut impl Write) -> io::Result<bool> {
    if !is_wanted(&entry.body, args) {
        return Ok(false);
    }
    writeln!(out, "{}", json!({ "number": entry.number, "at_ns": entry.at_ns, "body": entry.body }))?;
    Ok(true)
}

fn write_line(entry: &Entry, args: &Args, out: &mut impl Write) -> io::Result<bool> {
    if !is_wanted(&entry.body, args) {
        return Ok(false);
    }
    let seconds = entry.at_ns as f64 / 1e9;
    writeln!(out, "{seconds:12.4} {}", line::of(&entry.body))?;
    Ok(true)
}

#[cfg(test)]
mod tests;
