//! The timing of a segment as a plan file states it: a speed, a trapezoid (with or without a limit of the jerk), or the
//! progress instant by instant. One reader for paths (m) and pivots (rad).

use super::file::{RawInstant, RawSegment};
use super::stated;
use super::timing::{Phase, Timing};
use crate::keys::{Bound, Key, Problem, Values};
use crate::math;
use alloc::format;
use alloc::vec;
use alloc::vec::Vec;

/// Fastest speed or turn rate, m/s or rad/s.
pub(super) const MAX_RATE: f64 = 30.0;
/// Greatest acceleration and jerk, m/s² and m/s³ (rad/s² and rad/s³).
const MAX_ACCEL: f64 = 1000.0;

pub(super) const SPEED: Key = Key::optional(
    "speed_m_s",
    "m/s",
    Bound::within(0.0, MAX_RATE),
    "speed from the segment's first instant, a trapezoid's greatest speed; in reverse too a positive number",
);
pub(super) const END_SPEED: Key = Key::optional(
    "end_speed_m_s",
    "m/s",
    Bound::within(0.0, MAX_RATE),
    "speed at the end, reached at constant acceleration; without it the speed stays (a trapezoid ends at rest)",
);
pub(super) const START_SPEED: Key = Key::optional(
    "start_speed_m_s",
    "m/s",
    Bound::within(0.0, MAX_RATE),
    "a trapezoid's speed at its beginning",
);
pub(super) const ACCEL: Key =
    Key::optional("accel_m_s2", "m/s²", Bound::positive(MAX_ACCEL), "a trapezoid's acceleration");
pub(super) const DECEL: Key = Key::optional(
    "decel_m_s2",
    "m/s²",
    Bound::positive(MAX_ACCEL),
    "a trapezoid's deceleration; without it as its acceleration",
);
pub(super) const JERK: Key = Key::optional(
    "jerk_m_s3",
    "m/s³",
    Bound::positive(MAX_ACCEL),
    "a trapezoid's jerk; without it the acceleration steps",
);

/// The keys of a pivot's timing.
pub(super) const PIVOT_KEYS: [Key; 6] = [
    Key::optional(
        "rate_rad_s",
        "rad/s",
        Bound::within(0.0, MAX_RATE),
        "turn rate from the first instant, a trapezoid's greatest turn rate; positive",
    ),
    Key::optional(
        "end_rate_rad_s",
        "rad/s",
        Bound::within(0.0, MAX_RATE),
        "turn rate at the end, reached at constant acceleration; without it the rate stays (a trapezoid ends at rest)",
    ),
    Key::optional(
        "start_rate_rad_s",
        "rad/s",
        Bound::within(0.0, MAX_RATE),
        "a trapezoid's turn rate at its beginning",
    ),
    Key::optional("accel_rad_s2", "rad/s²", Bound::positive(MAX_ACCEL), "a trapezoid's turn acceleration"),
    Key::optional(
        "decel_rad_s2",
        "rad/s²",
        Bound::positive(MAX_ACCEL),
        "a trapezoid's turn deceleration; without it as its acceleration",
    ),
    Key::optional(
        "jerk_rad_s3",
        "rad/s³",
        Bound::positive(MAX_ACCEL),
        "a trapezoid's jerk; without it the turn acceleration steps",
    ),
];

/// What the parts of a timing are called.
#[derive(Debug)]
pub(super) struct Words {
    pub(super) unit: &'static str,
    pub(super) rate: &'static str,
    end_rate: &'static str,
    start_rate: &'static str,
    accel: &'static str,
    decel: &'static str,
    jerk: &'static str,
    pub(super) progress: &'static str,
    /// Progress and rate of an instant; none if they are missing or another kind's are given.
    pub(super) instant: fn(&RawInstant) -> Option<(f64, f64)>,
}

/// A path's words.
pub(super) const ALONG: Words = Words {
    unit: "m",
    rate: SPEED.name,
    end_rate: END_SPEED.name,
    start_rate: START_SPEED.name,
    accel: ACCEL.name,
    decel: DECEL.name,
    jerk: JERK.name,
    progress: "s_m",
    instant: |raw| match *raw {
        RawInstant { s_m: Some(at), speed_m_s: Some(rate), s_rad: None, rate_rad_s: None, .. } => {
            Some((at, rate))
        }
        _ => None,
    },
};

/// A pivot's words.
pub(super) const TURNING: Words = Words {
    unit: "rad",
    rate: PIVOT_KEYS[0].name,
    end_rate: PIVOT_KEYS[1].name,
    start_rate: PIVOT_KEYS[2].name,
    accel: PIVOT_KEYS[3].name,
    decel: PIVOT_KEYS[4].name,
    jerk: PIVOT_KEYS[5].name,
    progress: "s_rad",
    instant: |raw| match *raw {
        RawInstant { s_rad: Some(at), rate_rad_s: Some(rate), s_m: None, speed_m_s: None, .. } => {
            Some((at, rate))
        }
        _ => None,
    },
};

/// The timing that a segment of this `extent` (greater than 0) states.
pub(super) fn build(
    raw: &RawSegment,
    values: &Values,
    extent: f64,
    words: &Words,
) -> Result<Timing, Vec<Problem>> {
    let trapezoids = [words.start_rate, words.accel, words.decel, words.jerk];
    match (&raw.timing, raw.profile.as_deref()) {
        (Some(_), Some(_)) => Err(vec![Problem::new("profile", "leave it out: timing says it all")]),
        (Some(instants), None) => {
            refuse(values, &trapezoids, "leave it out: timing says it all")?;
            refuse(values, &[words.rate, words.end_rate], "leave it out: timing says it all")?;
            stated::build(instants, extent, words)
        }
        (None, Some("trapezoid")) => trapezoid(values, extent, words),
        (None, Some(other)) => {
            Err(vec![Problem::new("profile", format!("no profile {other:?}; known is trapezoid"))])
        }
        (None, None) => {
            refuse(values, &trapezoids, "leave it out, or say \"profile\": \"trapezoid\"")?;
            uniform(values, extent, words)
        }
    }
}

fn refuse(values: &Values, names: &[&str], what: &str) -> Result<(), Vec<Problem>> {
    let given: Vec<Problem> = names
        .iter()
        .filter(|name| values.find(name).is_some())
        .map(|name| Problem::new(name, what))
        .collect();
    if given.is_empty() { Ok(()) } else { Err(given) }
}

fn needed(values: &Values, name: &str, words: &Words, what: &str) -> Result<f64, Vec<Problem>> {
    values.find(name).ok_or_else(|| {
        let what = format!("missing; give {what}, or a timing: points of t_s, {} and a rate", words.progress);
        vec![Problem::new(name, what)]
    })
}

fn uniform(values: &Values, extent: f64, words: &Words) -> Result<Timing, Vec<Problem>> {
    let begin = needed(values, words.rate, words, "a value")?;
    let end = values.find(words.end_rate).unwrap_or(begin);
    if begin + end == 0.0 {
        let what = format!("0 {}/s at both ends never gets anywhere; give a speed", words.unit);
        return Err(vec![Problem::new(words.rate, what)]);
    }
    Ok(Timing::uniform(extent, begin, end))
}

/// A change of rate at a limited acceleration: the seconds of jerk at each end, and those of constant acceleration.
#[derive(Clone, Copy)]
struct Change {
    from: f64,
    to: f64,
    accel: f64,
    jerk: Option<f64>,
}

impl Change {
    fn seconds(&self) -> (f64, f64) {
        let step = (self.to - self.from).abs();
        match self.jerk {
            None => (0.0, step / self.accel),
            Some(jerk) if step * jerk >= self.accel * self.accel => {
                let bent_s = self.accel / jerk;
                (bent_s, step / self.accel - bent_s)
            }
            Some(jerk) => (math::sqrt(step / jerk), 0.0),
        }
    }

    /// By symmetry the mean rate is the mean of both ends'.
    fn way(&self) -> f64 {
        let (bent_s, straight_s) = self.seconds();
        0.5 * (self.from + self.to) * (2.0 * bent_s + straight_s)
    }
}

/// Accelerates, keeps a speed, brakes: as fast as its own limits allow.
struct Trapezoid {
    begin: f64,
    end: f64,
    greatest: f64,
    accel: f64,
    decel: f64,
    jerk: Option<f64>,
}

impl Trapezoid {
    fn rise(&self, peak: f64) -> Change {
        Change { from: self.begin, to: peak, accel: self.accel, jerk: self.jerk }
    }

    fn fall(&self, peak: f64) -> Change {
        Change { from: peak, to: self.end, accel: self.decel, jerk: self.jerk }
    }

    fn way(&self, peak: f64) -> f64 {
        self.rise(peak).way() + self.fall(peak).way()
    }

    /// The rate that it reaches within `extent`; the way needed if even the ends' rates are too far apart.
    fn peak(&self, extent: f64) -> Result<f64, f64> {
        let least = self.begin.max(self.end);
        let needed = self.way(least);
        // A planner rounds its lengths; what is left over by rounding is no reason to refuse.
        if needed > extent * (1.0 + 1e-9) {
            return Err(needed);
        }
        if self.way(self.greatest) <= extent {
            return Ok(self.greatest);
        }
        if self.jerk.is_none() {
            let (a, d) = (self.accel, self.decel);
            let square =
                (2.0 * a * d * extent + d * self.begin * self.begin + a * self.end * self.end) / (a + d);
            return Ok(math::sqrt(square).max(least));
        }
        let (mut low, mut high) = (least, self.greatest);
        // A double has 53 bits: more halvings than that change nothing.
        for _ in 0..60 {
            let middle = 0.5 * (low + high);
            if self.way(middle) <= extent { low = middle } else { high = middle }
        }
        Ok(low)
    }
}

fn trapezoid(values: &Values, extent: f64, words: &Words) -> Result<Timing, Vec<Problem>> {
    let accel = needed(values, words.accel, words, "a trapezoid's acceleration")?;
    let shape = Trapezoid {
        begin: values.find(words.start_rate).unwrap_or(0.0),
        end: values.find(words.end_rate).unwrap_or(0.0),
        greatest: needed(values, words.rate, words, "a trapezoid's greatest value")?,
        accel,
        decel: values.find(words.decel).unwrap_or(accel),
        jerk: values.find(words.jerk),
    };
    for (name, rate) in [(words.start_rate, shape.begin), (words.end_rate, shape.end)] {
        if rate > shape.greatest {
            let what = format!("{rate} is greater than {} = {}", words.rate, shape.greatest);
            return Err(vec![Problem::new(name, what)]);
        }
    }
    if shape.greatest == 0.0 {
        return Err(vec![Problem::new(words.rate, "0 never gets anywhere; give a speed")]);
    }
    let peak = shape.peak(extent).map_err(|way| {
        let unit = words.unit;
        let what = format!(
            "to get from {} to {} {unit}/s takes {way:.4} {unit}, the segment has {extent:.4} {unit}; allow more, or bring the speeds at both ends nearer",
            shape.begin, shape.end
        );
        vec![Problem::new(if shape.begin < shape.end { words.accel } else { words.decel }, what)]
    })?;
    Ok(phases_of(&shape, peak, extent))
}

fn phases_of(shape: &Trapezoid, peak: f64, extent: f64) -> Timing {
    let mut made = Phases { list: Vec::new(), t_s: 0.0, at: 0.0 };
    made.change(&shape.rise(peak));
    let cruise = (extent - shape.way(peak)).max(0.0) / peak;
    made.push(cruise, peak, 0.0, 0.0);
    made.change(&shape.fall(peak));
    Timing::new(made.list, extent, made.t_s)
}

/// Phases being laid one behind the other.
struct Phases {
    list: Vec<Phase>,
    t_s: f64,
    at: f64,
}

impl Phases {
    fn push(&mut self, seconds: f64, rate: f64, accel: f64, jerk: f64) {
        if seconds > 0.0 {
            self.list.push(Phase { begin_s: self.t_s, at: self.at, rate, accel, jerk });
            self.t_s += seconds;
            self.at += seconds * (rate + seconds * (0.5 * accel + seconds * (jerk / 6.0)));
        }
    }

    fn change(&mut self, change: &Change) {
        let (bent_s, straight_s) = change.seconds();
        let sign = if change.to < change.from { -1.0 } else { 1.0 };
        let jerk = sign * change.jerk.unwrap_or(0.0);
        let accel = if bent_s > 0.0 { jerk * bent_s } else { sign * change.accel };
        let bend = 0.5 * accel * bent_s;
        self.push(bent_s, change.from, 0.0, jerk);
        self.push(straight_s, change.from + bend, accel, 0.0);
        self.push(bent_s, change.to - bend, accel, -jerk);
    }
}
