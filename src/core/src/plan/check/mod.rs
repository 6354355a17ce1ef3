//! Whether a machine can follow a plan: every limit, every joint, every direction of travel, looked at before it moves.
//!
//! A pure function of the plan's bytes and the [`Terms`]: machine, law's domain, thresholds. The daemon takes a plan only
//! if it is fit ([`admit`]), so that a replay comes to the same verdict; `fieldbook check` tells all of it ([`check`]).
//!
//! | part | what it holds |
//! | --- | --- |
//! | `thresholds` | keys of the section `check` |
//! | `finding` | what is found, in words |
//! | `walk` | looks at a plan, dense and bounded: the step rule |
//! | `steps` | what jumps between two looks |
//! | `steering` | whether rests are long enough for the steering |
//! | `inspect` | judges look by look |
//! | `sideways` | way-poses against their headings |
//! | `ledger` | the worst place of each fault in a segment |

mod finding;
mod inspect;
mod ledger;
mod sideways;
mod steering;
mod steps;
mod thresholds;
mod walk;

pub use finding::{Fault, Finding, Place, Severity, Where, limit_name};
pub use thresholds::{KEYS, Thresholds};

use super::compile::assemble;
use super::{Plan, Reference};
use crate::vehicle::{LimitName, Load, Loads, PathState, Vehicle};
use alloc::format;
use alloc::string::String;
use alloc::sync::Arc;
use alloc::vec;
use alloc::vec::Vec;
use inspect::Inspector;
use walk::{Look, walk};

/// Below this speed a curvature of samples is rounding noise and says nothing about a machine's limits, m/s.
const CRAWL_M_S: f64 = 0.02;
/// A refusal lists no more than this many findings.
const MOST_LINES: usize = 20;

/// Where a law can follow a plan; [`crate::law::Domain::following`] gives it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Following {
    /// It follows forward.
    pub forward: bool,
    /// It follows in reverse.
    pub reverse: bool,
    /// The slowest reference that it steers for by itself, m/s.
    pub least_speed_m_s: f64,
}

impl Following {
    /// No law is asked.
    const ANYWHERE: Self = Self { forward: true, reverse: true, least_speed_m_s: 0.0 };
}

/// What a plan has to fit.
#[derive(Clone, Debug)]
pub struct Terms {
    /// The machine.
    pub vehicle: Arc<dyn Vehicle>,
    /// Where the law can follow.
    pub following: Following,
    /// From where on a finding is one.
    pub thresholds: Thresholds,
}

/// The greatest load on a limit.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Peak {
    /// The load.
    pub load: Load,
    /// Where it lies.
    pub place: Place,
}

/// What the check says of a segment.
#[derive(Clone, Debug, PartialEq)]
pub struct SegmentReport {
    /// Index in the plan.
    pub index: usize,
    /// Kind.
    pub kind: &'static str,
    /// Begin, s of plan time.
    pub begin_s: f64,
    /// Duration, s.
    pub duration_s: f64,
    /// Length of path, m.
    pub length_m: f64,
    /// The greatest load on each limit that the machine has.
    pub peaks: Vec<Peak>,
    /// 1 − the greatest share: what is left for corrections. Below 0 the segment asks for more than the machine has.
    pub authority_left: f64,
    /// Greatest curvature under way, 1/m.
    pub peak_curvature_1_m: f64,
    /// Greatest change of the curvature with the way, 1/m².
    pub peak_curvature_rate_1_m2: f64,
}

/// What the check says of a plan.
#[derive(Debug)]
pub struct Report {
    /// The plan, unless its bytes do not compile. An unfit one is there too, to be drawn.
    pub plan: Option<Plan>,
    /// What was found, in the plan's order; of each severity the first 200.
    pub findings: Vec<Finding>,
    /// How many findings there are of each severity, left out or not: information, warning, unfit.
    pub counts: [u64; 3],
    /// The segments; empty if the bytes do not compile.
    pub segments: Vec<SegmentReport>,
}

impl Report {
    /// True if the machine can follow the plan.
    pub fn is_fit(&self) -> bool {
        self.counts[Severity::Unfit as usize] == 0
    }

    /// The verdict in a word: `fit` or `unfit`.
    pub fn verdict(&self) -> &'static str {
        if self.is_fit() { "fit" } else { "unfit" }
    }
}

/// Checks a plan file for a machine.
pub fn check(raw: &[u8], terms: &Terms) -> Report {
    examine(raw, terms, true)
}

/// The report on a plan file of more bytes than the daemon takes; `key` names the setting in the site file.
pub fn too_large(bytes: usize, limit: usize, key: &str) -> Report {
    refused(vec![of_plan(Fault::TooLarge, bytes as f64, limit as f64, "bytes", key)])
}

/// The plan that its bytes describe, if it is fit. Not asked is whether the law can follow it: that may change while this
/// looks, and the node asks when it takes the plan.
///
/// # Errors
/// What makes it unfit, a line each: place, value, limit, unit, and what would mend it.
pub fn admit(raw: &[u8], terms: &Terms) -> Result<Plan, Vec<String>> {
    let terms = Terms { following: Following::ANYWHERE, ..terms.clone() };
    let Report { plan, findings, counts, .. } = examine(raw, &terms, false);
    match plan {
        Some(plan) if counts[Severity::Unfit as usize] == 0 => Ok(plan),
        _ => {
            let unfit = findings.iter().filter(|finding| finding.severity == Severity::Unfit);
            Err(unfit.take(MOST_LINES).map(Finding::line).collect())
        }
    }
}

/// What a reference asks of each limit; none if it turns on the spot and the machine cannot. `sampled`: the path was made
/// from way-poses, and its curvature at a crawl is noise.
pub fn loads_at(vehicle: &dyn Vehicle, reference: &Reference, sampled: bool) -> Option<Loads> {
    let velocity = reference.velocity;
    if velocity.speed_m_s == 0.0 && velocity.turn_rate_rad_s != 0.0 {
        return vehicle.pivot_loads(velocity.turn_rate_rad_s, reference.turn_accel_rad_s2);
    }
    let crawls = sampled && velocity.speed_m_s.abs() < CRAWL_M_S;
    let (curvature_1_m, curvature_rate_1_m2) =
        if crawls { (0.0, 0.0) } else { (reference.curvature_1_m, reference.curvature_rate_1_m2) };
    // Coming to rest in reverse ends at −0, where only the sign tells that the speed falls.
    let way = if velocity.speed_m_s.is_sign_negative() { -1.0 } else { 1.0 };
    Some(vehicle.loads(&PathState {
        speed_m_s: way * velocity.speed_m_s,
        accel_m_s2: way * reference.accel_m_s2,
        curvature_1_m,
        curvature_rate_1_m2,
    }))
}

/// A limit on how fast something changes: a short excess makes the machine fall behind a little, no more.
pub const fn is_rate(limit: LimitName) -> bool {
    !matches!(
        limit,
        LimitName::WheelSpeed
            | LimitName::Speed
            | LimitName::TurnRate
            | LimitName::SteeringAngle
            | LimitName::LateralAcceleration
    )
}

fn examine(raw: &[u8], terms: &Terms, detailed: bool) -> Report {
    match assemble(raw, &*terms.vehicle) {
        Ok(plan) => inspect(plan, terms, detailed),
        Err(lines) => refused(lines.iter().map(|line| of_compiler(line)).collect()),
    }
}

fn refused(findings: Vec<Finding>) -> Report {
    let counts = [0, 0, findings.len() as u64];
    Report { plan: None, findings, counts, segments: Vec::new() }
}

fn inspect(plan: Plan, terms: &Terms, detailed: bool) -> Report {
    let thresholds = &terms.thresholds;
    let mut samples = 0_u64;
    for slot in &plan.slots {
        slot.stretch.way_poses(&mut |_, _| samples += 1);
    }
    let mut inspector = Inspector::new(&plan, terms, detailed, samples);
    for (fault, value, limit, unit, key) in [
        (Fault::TooManySamples, samples as f64, thresholds.max_samples, "", "check.max_samples"),
        (Fault::TooLong, plan.duration_s, thresholds.max_duration_s, "s", "check.max_duration_s"),
    ] {
        if value > limit {
            inspector.ledger.add(of_plan(fault, value, limit, unit, key));
        }
    }
    if plan.continues_at().is_none() {
        let first = plan.slots[0].at(0.0);
        let reference = Reference::at_rest(plan.start, first.curvature_1_m);
        inspector.begin(Look { slot: 0, t_s: 0.0, reference });
    }
    walk(&plan, &mut |look| inspector.look(look));
    let last = plan.slots.len() - 1;
    inspector.end((!plan.open).then_some(Look { slot: last, t_s: plan.duration_s, reference: plan.end }));
    let Inspector { ledger, segments, .. } = inspector;
    let (findings, counts) = (ledger.findings, ledger.counts);
    Report { findings, counts, segments, plan: Some(plan) }
}

fn of_plan(fault: Fault, value: f64, limit: f64, unit: &'static str, key: &str) -> Finding {
    Finding {
        fault,
        severity: Severity::Unfit,
        place: Where::Plan,
        places: 1,
        value: Some((value, limit)),
        unit,
        meaning: format!("{key} in the site file sets the limit"),
        remedy: fault.remedy(),
    }
}

/// A finding from a line of the compiler's: `place.key: what`.
fn of_compiler(line: &str) -> Finding {
    let (key, what) = line.split_once(": ").unwrap_or(("", line));
    let fault = if key == "not a plan file" { Fault::Unreadable } else { Fault::Value };
    Finding {
        fault,
        severity: Severity::Unfit,
        place: Where::Key(String::from(key)),
        places: 1,
        value: None,
        unit: "",
        meaning: String::from(what),
        remedy: fault.remedy(),
    }
}

#[cfg(test)]
mod tests;
