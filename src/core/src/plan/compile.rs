//! From a plan file's bytes to a plan that answers for every instant: a pure function of bytes and machine.

use super::file::{FORMAT, RawPlan, RawSegment, read};
use super::segment::{Joint, KINDS, Stretch, Travel};
use super::{Plan, Reference, Slot, brake, compact, nearest};
use crate::digest;
use crate::geometry::Pose;
use crate::keys::Problem;
use crate::math;
use crate::time::SpanNs;
use crate::vehicle::Vehicle;
use alloc::boxed::Box;
use alloc::format;
use alloc::string::{String, ToString};
use alloc::vec;
use alloc::vec::Vec;

/// No coordinate of a plan lies farther from the origin, m. Beyond, a double's last bit is a nanometre no more.
const MAX_COORDINATE_M: f64 = 1e7;
/// Most segments in a plan.
const MAX_SEGMENTS: usize = 100_000;
/// No plan goes on later than at this plan time, s: thirty years.
const MAX_PLAN_TIME_S: f64 = 1e9;
/// Longest id, bytes.
pub(super) const MAX_ID_BYTES: usize = 64;
/// A refusal lists no more than this many findings: the first ones tell what to mend.
pub(super) const MAX_FINDINGS: usize = 20;

/// Compiles a plan for a machine.
///
/// # Errors
/// What is wrong with it, a line each: place, value, limit, unit.
pub fn compile(raw: &[u8], vehicle: &dyn Vehicle) -> Result<Plan, Vec<String>> {
    build_plan(raw, vehicle, true)
}

/// Puts a plan together for the check, which looks at limits and gaps by itself and tells more of them.
pub(super) fn assemble(raw: &[u8], vehicle: &dyn Vehicle) -> Result<Plan, Vec<String>> {
    build_plan(raw, vehicle, false)
}

fn build_plan(raw: &[u8], vehicle: &dyn Vehicle, strict: bool) -> Result<Plan, Vec<String>> {
    let file = match raw.first() {
        Some(b'{') | None => read(raw),
        Some(_) => compact::read(raw),
    };
    let file = file.map_err(|error| vec![format!("not a plan file: {error}")])?;
    let mut findings = check_head(&file);
    let mut joint = Joint { pose: start_of(&file), curvature_1_m: 0.0, rest_curvature_1_m: 0.0, strict };
    let mut slots = Vec::with_capacity(file.segments.len());
    for (index, segment) in file.segments.iter().enumerate() {
        let place = format!("segments[{index}] ({})", segment.kind);
        match build(segment, joint) {
            Ok((kind, stretch)) => {
                let excess = if strict { stretch.first_excess(vehicle) } else { None };
                findings.extend(excess.map(|(at_s, excess)| {
                    format!("{place}: {at_s:.3} s after its beginning it asks for {excess}: slow down or turn wider")
                }));
                let end = stretch.at(stretch.duration_s());
                joint = Joint {
                    pose: end.pose,
                    curvature_1_m: end.curvature_1_m,
                    rest_curvature_1_m: end.rest_curvature_1_m,
                    strict,
                };
                slots.push(Slot { kind, begin_s: 0.0, stretch, brake: None });
            }
            Err(problems) => findings.extend(problems.iter().map(|problem| format!("{place}.{problem}"))),
        }
        if findings.len() >= MAX_FINDINGS {
            break;
        }
    }
    if !findings.is_empty() {
        findings.truncate(MAX_FINDINGS);
        return Err(findings);
    }
    finish(&file, slots, vehicle, digest::of_bytes(raw)).map_err(|finding| vec![finding])
}

fn start_of(file: &RawPlan) -> Pose {
    Pose::new(file.start.x_m, file.start.y_m, math::wrap(file.start.heading_rad))
}

fn check_head(file: &RawPlan) -> Vec<String> {
    let mut findings = Vec::new();
    if file.format != FORMAT {
        findings.push(format!("format: {:?}, this program reads {FORMAT:?}", file.format));
    }
    if file.id.is_empty() || file.id.len() > MAX_ID_BYTES {
        findings.push(format!("id: {} bytes long, give 1 to {MAX_ID_BYTES}", file.id.len()));
    }
    if file.segments.is_empty() || file.segments.len() > MAX_SEGMENTS {
        findings.push(format!("segments: {} of them, give 1 to {MAX_SEGMENTS}", file.segments.len()));
    }
    if let Some(at_s) = file.continues.map(|continues| continues.at_s)
        && !(0.0..=MAX_PLAN_TIME_S).contains(&at_s)
    {
        findings.push(format!("continues.at_s: {at_s} s lies outside 0 to {MAX_PLAN_TIME_S} s"));
    }
    if let Some(origin) = &file.origin {
        for (name, value, bound) in [
            ("latitude_deg", origin.latitude_deg, 90.0),
            ("longitude_deg", origin.longitude_deg, 180.0),
            ("altitude_m", origin.altitude_m, 20_000.0),
        ] {
            if value.is_nan() || value.abs() > bound {
                findings.push(format!("origin.{name}: {value} lies outside ±{bound}"));
            }
        }
    }
    for (name, value) in
        [("x_m", file.start.x_m), ("y_m", file.start.y_m), ("heading_rad", file.start.heading_rad)]
    {
        if value.is_nan() || value.abs() > MAX_COORDINATE_M {
            findings.push(format!("start.{name}: {value} lies outside ±{MAX_COORDINATE_M}"));
        }
    }
    findings
}

fn build(segment: &RawSegment, joint: Joint) -> Result<(&'static str, Box<dyn Stretch>), Vec<Problem>> {
    let Some(kind) = KINDS.iter().find(|kind| kind.name == segment.kind) else {
        let known: Vec<&str> = KINDS.iter().map(|kind| kind.name).collect();
        return Err(vec![Problem::new("kind", format!("no such segment; known are {}", known.join(", ")))]);
    };
    let mut problems = Vec::new();
    if segment.reverse && !kind.reversible {
        problems.push(Problem::new(
            "reverse",
            format!("a {} has no direction of travel; leave it out", kind.name),
        ));
    }
    match (&segment.points, kind.has_points) {
        (Some(_), false) => {
            problems.push(Problem::new("points", format!("a {} has no points; leave them out", kind.name)));
        }
        (None, true) => problems.push(Problem::new("points", "missing; give at least two")),
        _ => {}
    }
    for (name, given) in [("profile", segment.profile.is_some()), ("timing", segment.timing.is_some())] {
        if given && !kind.timed {
            problems.push(Problem::new(name, format!("a {} has none; leave it out", kind.name)));
        }
    }
    for name in segment.lists.keys().filter(|name| !kind.lists.contains(&name.as_str())) {
        problems.push(Problem::new(name, format!("a {} has no such list; leave it out", kind.name)));
    }
    let values = match segment.numbers.checked(kind.keys) {
        Ok(values) => values,
        Err(more) => {
            problems.extend(more);
            return Err(problems);
        }
    };
    if !problems.is_empty() {
        return Err(problems);
    }
    (kind.build)(segment, &values, joint).map(|stretch| (kind.name, stretch))
}

/// Lets every rest know what comes after it.
fn steer_ahead(slots: &mut [Slot]) {
    let mut next: Option<Reference> = None;
    for slot in slots.iter_mut().rev() {
        if let Some(next) = &next {
            slot.stretch.prepare_for(next);
        }
        next = Some(slot.stretch.at(0.0));
    }
}

fn finish(
    file: &RawPlan,
    mut slots: Vec<Slot>,
    vehicle: &dyn Vehicle,
    digest: trackhold_proto::blob::Digest,
) -> Result<Plan, String> {
    steer_ahead(&mut slots);
    if !file.open {
        brake::bring_to_rest(&mut slots, vehicle);
    }
    let mut begin_s = 0.0;
    for slot in &mut slots {
        slot.begin_s = begin_s;
        begin_s += slot.duration_s();
    }
    let last = &slots[slots.len() - 1];
    let mut end = last.at(last.duration_s());
    if !file.open {
        end = end.resting();
    }
    if !(end.pose.x_m.abs() <= MAX_COORDINATE_M && end.pose.y_m.abs() <= MAX_COORDINATE_M) {
        return Err(format!(
            "the path ends beyond ±{MAX_COORDINATE_M} m; move the site frame's origin nearer"
        ));
    }
    let mut plan = Plan {
        id: file.id.to_string(),
        revision: file.revision,
        open: file.open,
        start: start_of(file),
        begin: file.continues.map(|continues| SpanNs::from_seconds(continues.at_s)),
        digest,
        travel: slots.iter().fold(Travel::default(), |travel, slot| travel.with(slot.stretch.travel())),
        length_m: slots.iter().map(|slot| slot.stretch.path_length_m()).sum(),
        slots,
        duration_s: begin_s,
        end,
        milestones: Vec::new(),
    };
    plan.milestones = nearest::milestones(&plan);
    Ok(plan)
}
