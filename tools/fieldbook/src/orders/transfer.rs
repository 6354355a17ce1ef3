//! A plan on its way to a daemon: all its parts, then those that the daemon says are missing, until its outcome is known.

use crate::client::{Answer, Client};
use anyhow::{Result, bail};
use std::time::{Duration, Instant};
use trackhold_core::digest;
use trackhold_proto::blob::{Blob, Digest};
use trackhold_proto::journal::MAX_PLAN_BYTES;
use trackhold_proto::message::{Ack, PART_BYTES, PlanMissing, PlanPart};
use trackhold_proto::{Envelope, Message};

/// So many parts are sent, then a pause is made: receive buffers are small.
const BURST: usize = 32;
/// The pause.
const PAUSE: Duration = Duration::from_millis(1);
/// So many bursts lie between two looks whether the outcome is there already.
const LISTEN_EVERY: usize = 64;
/// How long an answer is waited for after the first round; each silent round waits longer, for a large plan takes its time
/// to be checked.
const FIRST_WAIT: Duration = Duration::from_millis(150);
/// The longest wait.
const LONGEST_WAIT: Duration = Duration::from_secs(2);
/// So many rounds without any progress, and the plan is given up.
const SILENT_ROUNDS: u32 = 20;

/// What the daemon said.
enum Heard {
    Outcome(Box<Ack>),
    Missing(Box<PlanMissing>),
    Nothing,
}

/// Sends a plan and returns the daemon's verdict.
///
/// # Errors
/// If the plan has a length that no plan has, or no answer comes.
pub fn send_plan(client: &mut Client, raw: &[u8]) -> Result<Answer> {
    if raw.is_empty() || raw.len() > MAX_PLAN_BYTES {
        bail!("the plan has {} bytes, 1 to {MAX_PLAN_BYTES} can be sent", raw.len());
    }
    let digest = digest::of_bytes(raw);
    let parts: Vec<(u64, Message)> =
        parts_of(raw, digest).map(|part| (client.next_sequence(), part)).collect();
    let last = parts.len() - 1;
    let mut next: Vec<usize> = (0..=last).collect();
    let (begun, mut wait, mut rounds, mut silent) = (Instant::now(), FIRST_WAIT, 0, 0);
    let mut left = u32::MAX;
    while silent < SILENT_ROUNDS {
        rounds += 1;
        let heard = match send_parts(client, &parts, &next, digest) {
            Some(ack) => Heard::Outcome(Box::new(ack)),
            None => hear(client, Instant::now() + wait, digest),
        };
        match heard {
            Heard::Outcome(ack) => {
                return Ok(Answer { ack: *ack, round_trip: begun.elapsed(), sent: rounds });
            }
            Heard::Missing(missing) => {
                silent = if missing.missing < left { 0 } else { silent + 1 };
                (left, wait) = (missing.missing, FIRST_WAIT);
                next = missing.parts().map(|part| part as usize).filter(|part| *part < last).collect();
                // It asks what is missing still.
                next.push(last);
            }
            Heard::Nothing => {
                silent += 1;
                wait = (wait * 3 / 2).min(LONGEST_WAIT);
                // First a question only: the plan may be there, and be looked at.
                next = if silent % 2 == 1 { vec![last] } else { (0..=last).collect() };
            }
        }
    }
    Err(client.silent(rounds, begun.elapsed()).context("the plan was not acknowledged"))
}

/// Sends parts, a little spread out; an outcome that comes meanwhile ends it.
fn send_parts(client: &mut Client, parts: &[(u64, Message)], which: &[usize], digest: Digest) -> Option<Ack> {
    let bursts = which.chunks(BURST).count();
    for (number, burst) in which.chunks(BURST).enumerate() {
        for (sequence, part) in burst.iter().map(|index| parts[*index]) {
            client.send(sequence, part);
        }
        if number + 1 == bursts {
            break;
        }
        std::thread::sleep(PAUSE);
        // Now and then only: a socket's timeout is many times longer than the pause.
        if number % LISTEN_EVERY == LISTEN_EVERY - 1
            && let Some(ack) = client.await_ack(Instant::now(), |ack| is_outcome(ack, digest))
        {
            return Some(ack);
        }
    }
    None
}

fn is_outcome(ack: &Ack, digest: Digest) -> bool {
    ack.order_kind == 2 && ack.plan == digest
}

fn hear(client: &mut Client, until: Instant, digest: Digest) -> Heard {
    let session = client.session();
    loop {
        match client.receive(until.saturating_duration_since(Instant::now())) {
            Some(Envelope { message: Message::Ack(ack), .. })
                if ack.order_session == session && is_outcome(&ack, digest) =>
            {
                return Heard::Outcome(Box::new(ack));
            }
            Some(Envelope { message: Message::PlanMissing(missing), .. }) if missing.digest == digest => {
                return Heard::Missing(Box::new(missing));
            }
            _ if Instant::now() >= until => return Heard::Nothing,
            _ => {}
        }
    }
}

fn parts_of(raw: &[u8], digest: Digest) -> impl Iterator<Item = Message> {
    let total_bytes = u32::try_from(raw.len()).unwrap_or(u32::MAX);
    (0_u32..).zip(raw.chunks(PART_BYTES)).filter_map(move |(part, chunk)| {
        let bytes = Blob::new(chunk)?;
        Some(Message::PlanPart(PlanPart { digest, total_bytes, part_bytes: PART_BYTES as u32, part, bytes }))
    })
}
