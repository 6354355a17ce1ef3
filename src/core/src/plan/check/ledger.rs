//! Collects what is found: of each fault the worst place of a segment, in numbers; words are made at the segment's end.

use super::super::Plan;
use super::finding::{Fault, Finding, Place, Severity, Where};
use super::walk::Look;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

/// Findings of a severity that are kept; the rest is counted.
const MOST: usize = 200;

/// What a finding means, in numbers.
#[derive(Clone, Copy, Debug)]
pub(super) enum Meaning {
    /// The fault's own sentence.
    Plain,
    /// Δv²/(2a) behind or ahead, m, after Δv/a, s, with the acceleration a, m/s².
    Along { lag_m: f64, after_s: f64, accel_m_s2: f64 },
    /// Δω²/(2α) behind, rad, after Δω/α, s, where the turn rate steps by Δω, rad/s.
    Turning { lag_rad: f64, after_s: f64, step_rad_s: f64 },
    /// The steering needs this long, s; this far is travelled meanwhile, m; the heading ends off by so much, rad.
    Steering { after_s: f64, way_m: f64, off_rad: f64 },
    /// Steering at rest takes this long, s.
    SteeringAtRest { after_s: f64 },
    /// The steering arrives this late, s; the reference has then gone so far, m, and the heading is off by so much, rad.
    SteeringLate { late_s: f64, way_m: f64, off_rad: f64 },
    /// Likewise on the spot, where the heading is lost.
    SpotLate { late_s: f64, off_rad: f64 },
    /// The braked end of a plan that is stated to end at speed.
    BrakedEnd,
    /// Beyond the limit for so long, s.
    Lasts { seconds: f64 },
}

/// A finding in numbers.
#[derive(Clone, Copy, Debug)]
pub(super) struct Draft {
    pub(super) fault: Fault,
    pub(super) severity: Severity,
    pub(super) look: Look,
    pub(super) value: f64,
    pub(super) limit: f64,
    pub(super) unit: &'static str,
    pub(super) meaning: Meaning,
}

/// Everything found so far.
#[derive(Debug, Default)]
pub(super) struct Ledger {
    /// Of the segment at hand, with the number of places each.
    drafts: Vec<(Draft, u64)>,
    pub(super) findings: Vec<Finding>,
    /// How many there were of each severity, kept or not.
    pub(super) counts: [u64; 3],
}

impl Ledger {
    /// Notes a finding; of the same fault and severity in a segment the one with the greatest value stays.
    pub(super) fn note(&mut self, draft: Draft) {
        let same =
            |known: &&mut (Draft, u64)| known.0.fault == draft.fault && known.0.severity == draft.severity;
        match self.drafts.iter_mut().find(same) {
            Some((known, places)) => {
                *places += 1;
                if draft.value * known.limit.max(f64::MIN_POSITIVE)
                    > known.value * draft.limit.max(f64::MIN_POSITIVE)
                {
                    *known = draft;
                }
            }
            None => self.drafts.push((draft, 1)),
        }
    }

    /// Puts the drafts of a segment that is over into words.
    pub(super) fn close_segment(&mut self, plan: &Plan) {
        let mut drafts = core::mem::take(&mut self.drafts);
        let worse = |one: &Draft| {
            let all = drafts.iter().map(|(draft, _)| draft);
            all.filter(|other| other.fault == one.fault).any(|other| other.severity > one.severity)
        };
        let covered: Vec<bool> = drafts.iter().map(|(draft, _)| worse(draft)).collect();
        let mut covered = covered.into_iter();
        drafts.retain(|_| !covered.next().unwrap_or(false));
        drafts.sort_by(|(one, _), (other, _)| one.look.t_s.total_cmp(&other.look.t_s));
        for (draft, places) in drafts.drain(..) {
            if self.has_room(draft.severity) {
                let finding = in_words(plan, &draft, places);
                self.add(finding);
            }
        }
        self.drafts = drafts;
    }

    /// Adds a finding that is in words already.
    pub(super) fn add(&mut self, finding: Finding) {
        if self.has_room(finding.severity) {
            self.counts[finding.severity as usize] += 1;
            self.findings.push(finding);
        }
    }

    /// Counts a finding beyond the room as well.
    fn has_room(&mut self, severity: Severity) -> bool {
        let room = self.counts[severity as usize] < MOST as u64;
        if !room {
            self.counts[severity as usize] += 1;
        }
        room
    }
}

/// The place of a look, its progress included.
pub(super) fn place(plan: &Plan, look: &Look) -> Place {
    let slot = &plan.slots[look.slot];
    let t_s = look.t_s - slot.begin_s;
    let progress = match &slot.brake {
        Some(brake) if t_s >= brake.from_s => brake.progress(t_s),
        _ => slot.stretch.timing(t_s.min(slot.stretch.duration_s())),
    };
    Place {
        segment: look.slot,
        kind: slot.kind,
        t_s: look.t_s,
        progress: progress.at,
        pose: look.reference.pose,
    }
}

fn in_words(plan: &Plan, draft: &Draft, places: u64) -> Finding {
    Finding {
        fault: draft.fault,
        severity: draft.severity,
        place: Where::At(place(plan, &draft.look)),
        places,
        value: Some((draft.value, draft.limit)),
        unit: draft.unit,
        meaning: words(draft),
        remedy: draft.fault.remedy(),
    }
}

fn words(draft: &Draft) -> String {
    match draft.meaning {
        Meaning::Plain => String::from(plain(draft)),
        Meaning::Along { lag_m, after_s, accel_m_s2 } => format!(
            "the machine needs {after_s:.2} s for it and is then {lag_m:.3} m off along the track: step²/(2 a) with a = {accel_m_s2:.3} m/s²"
        ),
        Meaning::Turning { lag_rad, after_s, step_rad_s } => format!(
            "the turn rate has to jump by {step_rad_s:.3} rad/s; the machine needs {after_s:.2} s for it and its heading is then {lag_rad:.3} rad behind: step²/(2 α)"
        ),
        Meaning::Steering { after_s, way_m, off_rad } => format!(
            "the steering needs {after_s:.2} s for it; the machine travels {way_m:.3} m meanwhile and its heading ends {off_rad:.3} rad off: step × way / 2"
        ),
        Meaning::SteeringAtRest { after_s } => {
            format!("the steering needs {after_s:.2} s for it")
        }
        Meaning::SteeringLate { late_s, way_m, off_rad } => format!(
            "the steering arrives {late_s:.2} s late; the reference is {way_m:.3} m ahead by then, and the heading up to {off_rad:.3} rad off"
        ),
        Meaning::SpotLate { late_s, off_rad } => format!(
            "the steering arrives {late_s:.2} s late; the reference has turned by {off_rad:.3} rad by then, which the machine does not make up for"
        ),
        Meaning::BrakedEnd => String::from(
            "the plan is stated to end at speed, so that its last metres are braked with all that the machine has; a last segment that ends at rest by itself keeps a reserve",
        ),
        Meaning::Lasts { seconds } => {
            format!("beyond the limit for {seconds:.3} s; the machine falls behind meanwhile")
        }
    }
}

const fn plain(draft: &Draft) -> &'static str {
    match (draft.fault, draft.severity) {
        (Fault::Limit(_), Severity::Warning) => "little authority is left for corrections",
        (Fault::Limit(_), _) => "the machine cannot do it, and leaves the path or falls behind",
        (Fault::Gap, _) => "the machine cannot jump; the law would chase the step",
        (Fault::Kink, _) => "the heading cannot jump; the law would chase the step",
        (Fault::Sideways, _) => {
            "wheels roll along the heading only; the path that would be driven is not the one stated"
        }
        // Its line has told that it changes at rest.
        (Fault::Cusp, _) => "",
        (Fault::Pivot, _) => "a machine that steers cannot turn on the spot",
        (Fault::LawSpeed, _) => "the law that it falls back to steers here",
        (Fault::LawDirection, _) => "the law's point would turn the machine round",
        _ => "",
    }
}
