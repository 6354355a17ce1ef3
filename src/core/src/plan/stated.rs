//! A timing stated point by point: the cubic Hermite curve through instants of progress and rate, in which pieces of
//! constant jerk are exact.

use super::file::RawInstant;
use super::profile::{MAX_RATE, Words};
use super::timing::{Phase, Timing};
use crate::keys::Problem;
use alloc::format;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;

/// A timing must end within this of the segment's length (turn), m or rad; its last point is then moved there.
const END_TOLERANCE: f64 = 1e-6;
/// Instants closer than this are a planner's slip, and the speeds between them would be nonsense, s.
const SHORTEST_S: f64 = 1e-6;
/// Latest instant, s: thirty years.
const LATEST_S: f64 = 1e9;
/// Rates below zero by no more than this are rounding, m/s or rad/s.
const BACKWARDS: f64 = 1e-6;
/// A refusal lists no more findings of one timing.
const MAX_PROBLEMS: usize = 20;

/// Progress and its rate at a moment.
#[derive(Clone, Copy, Debug)]
struct Instant {
    t_s: f64,
    at: f64,
    rate: f64,
}

pub(super) fn build(raw: &[RawInstant], extent: f64, words: &Words) -> Result<Timing, Vec<Problem>> {
    let mut instants = read(raw, words)?;
    let last = instants.len() - 1;
    check_ends(&instants[0], &instants[last], extent, words)
        .map_err(|(index, what)| vec![Problem::new(&format!("timing[{}]", index * last), what)])?;
    instants[last].at = extent;
    let phases: Vec<Phase> = instants.windows(2).map(|pair| hermite(pair[0], pair[1])).collect();
    let problems: Vec<Problem> = phases
        .iter()
        .zip(&instants[1..])
        .enumerate()
        .filter_map(|(index, (phase, next))| backwards(index, phase, next.t_s, words))
        .take(MAX_PROBLEMS)
        .collect();
    if problems.is_empty() { Ok(Timing::new(phases, extent, instants[last].t_s)) } else { Err(problems) }
}

/// What is wrong with the first (0) or last (1) instant.
fn check_ends(first: &Instant, last: &Instant, extent: f64, words: &Words) -> Result<(), (usize, String)> {
    let unit = words.unit;
    if first.t_s != 0.0 || first.at != 0.0 {
        let what = format!("begins at {} s and {} {unit}; it must begin at 0 and 0", first.t_s, first.at);
        return Err((0, what));
    }
    if (last.at - extent).abs() > END_TOLERANCE {
        let what = format!(
            "ends at {} {unit}, the segment has {extent} {unit}; they may differ by {END_TOLERANCE} {unit}",
            last.at
        );
        return Err((1, what));
    }
    Ok(())
}

fn read(raw: &[RawInstant], words: &Words) -> Result<Vec<Instant>, Vec<Problem>> {
    if raw.len() < 2 {
        return Err(vec![Problem::new("timing", format!("{} points, give at least two", raw.len()))]);
    }
    let mut problems = Vec::new();
    let mut instants: Vec<Instant> = Vec::with_capacity(raw.len());
    for (index, point) in raw.iter().enumerate() {
        let Some((at, rate)) = (words.instant)(point) else {
            let what = format!("give t_s, {} and {}, and nothing else", words.progress, words.rate);
            problems.push(Problem::new(&format!("timing[{index}]"), what));
            break;
        };
        let instant = Instant { t_s: point.t_s, at, rate };
        for (name, what) in check(instants.last(), &instant, words).into_iter().flatten() {
            problems.push(Problem::new(&format!("timing[{index}].{name}"), what));
        }
        if problems.len() >= MAX_PROBLEMS {
            break;
        }
        instants.push(instant);
    }
    if problems.is_empty() { Ok(instants) } else { Err(problems) }
}

/// What is wrong with an instant after the one before it.
fn check(before: Option<&Instant>, instant: &Instant, words: &Words) -> [Option<(&'static str, String)>; 4] {
    let Instant { t_s, at, rate } = *instant;
    [
        (!(0.0..=MAX_RATE).contains(&rate))
            .then(|| (words.rate, format!("{rate} lies outside 0 to {MAX_RATE}"))),
        (t_s > LATEST_S).then(|| ("t_s", format!("{t_s} s is later than {LATEST_S} s"))),
        before.filter(|before| t_s - before.t_s < SHORTEST_S).map(|before| {
            ("t_s", format!("{t_s} s does not lie at least 1 µs after the point before, {} s", before.t_s))
        }),
        before
            .filter(|before| at < before.at)
            .map(|before| (words.progress, format!("{at} is less than {} of the point before", before.at))),
    ]
}

fn hermite(from: Instant, to: Instant) -> Phase {
    let seconds = to.t_s - from.t_s;
    let mean = (to.at - from.at) / seconds;
    Phase {
        begin_s: from.t_s,
        at: from.at,
        rate: from.rate,
        accel: (6.0 * mean - 4.0 * from.rate - 2.0 * to.rate) / seconds,
        jerk: (6.0 * (from.rate + to.rate) - 12.0 * mean) / (seconds * seconds),
    }
}

/// The problem of a cubic that runs backwards between its points.
fn backwards(index: usize, phase: &Phase, end_s: f64, words: &Words) -> Option<Problem> {
    // The rate is a parabola; between two ends that are not negative it can only dip where its slope is 0.
    let t = -phase.accel / phase.jerk;
    if !(t > 0.0 && t < end_s - phase.begin_s) {
        return None;
    }
    let least = phase.rate + 0.5 * phase.accel * t;
    (least < -BACKWARDS).then(|| {
        let what = format!(
            "from here to the next point the cubic through {} and {} runs backwards, at {least:.4} {}/s; state a truer speed, or more points",
            words.progress, words.rate, words.unit
        );
        Problem::new(&format!("timing[{index}]"), what)
    })
}
