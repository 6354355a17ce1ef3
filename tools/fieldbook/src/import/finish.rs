//! The last steps of every import: the draft is compiled, timed if asked, compiled again, and told about.

use super::draft::{Draft, Name, Piece, Ramp, Shape};
use super::simplify::{distances, window_m};
use super::track::Refused;
use super::{Imported, Output};
use std::path::Path;
use std::sync::Arc;
use trackhold_core::geometry::Pose;
use trackhold_core::keys::Values;
use trackhold_core::math;
use trackhold_core::plan::segment::Progress;
use trackhold_core::plan::{self, Plan};
use trackhold_core::vehicle::{self, Vehicle};

/// Room for rounding where a ramp is as long as its piece.
const ROUNDING: f64 = 1e-9;
/// A path is looked at this often at least, to tell how far it strays from its source.
const LOOKS: usize = 400;
/// A path that strays further than this from its source's straight lines is worth a word, m.
const STRAYS_M: f64 = 0.5;

/// A plan, ready to be written.
#[derive(Debug)]
pub struct Finished {
    /// The plan file.
    pub json: String,
    /// The plan.
    pub plan: Plan,
    /// The name it has.
    pub name: Name,
    /// What it came from.
    pub imported: Imported,
}

/// Compiles a draft.
///
/// # Errors
/// What the core says against it, with the places in the source.
pub fn finish(
    mut imported: Imported,
    name: &Name,
    wanted: &Output,
    machine: Option<&dyn Vehicle>,
) -> Result<Finished, Refused> {
    let draft = &mut imported.draft;
    if machine.is_some_and(|machine| machine.pivot_decel_rad_s2().is_none()) {
        refuse_pivots(&draft.pieces)?;
    }
    if let Some(accel) = wanted.accel {
        if draft.pieces.iter().any(|piece| piece.pace.is_none()) {
            return Err(Refused::because(
                "--accel is for paths; these points have times of their own: leave it out",
            ));
        }
        let literal = compile(draft, &draft.to_json(name))?;
        let lengths: Vec<f64> = literal.stretches().map(|placed| placed.stretch.extent()).collect();
        ramp(&mut draft.pieces, &lengths, accel, wanted.pivot_accel);
    }
    let json = draft.to_json(name);
    let plan = compile(draft, &json)?;
    if wanted.accel.is_none() {
        imported.notes.extend(steps(&imported.draft.pieces));
    }
    if let Some(Err(findings)) = machine.map(|machine| plan::compile(json.as_bytes(), machine)) {
        imported.notes.extend(findings.iter().map(|finding| format!("this machine: {finding}")));
    }
    let mut finished = Finished { json, plan, name: name.clone(), imported };
    if finished.strays().is_some_and(|metres| metres > STRAYS_M) {
        finished.imported.notes.push(
            "the curve strays far from straight lines between the points; if those are meant, give --corners round or pivot"
                .to_owned(),
        );
    }
    Ok(finished)
}

/// For a machine that cannot turn on the spot.
fn refuse_pivots(pieces: &[Piece]) -> Result<(), Refused> {
    let pivots = pieces.iter().filter_map(|piece| match piece.shape {
        Shape::Pivot(turn) => Some(format!(
            "{}: the heading must change there by {turn:.3} rad ({:.1}°), and this machine cannot turn on the spot",
            piece.place,
            turn.to_degrees()
        )),
        _ => None,
    });
    Refused::unless_none(pivots.collect())
}

/// A machine that can do whatever a plan may ask for: here only the file and the geometry are in question.
fn any_machine() -> Result<Arc<dyn Vehicle>, Refused> {
    let mut values = Values::default();
    for (key, value) in [
        ("max_speed_m_s", 30.0),
        ("max_turn_rate_rad_s", 30.0),
        ("max_accel_m_s2", 50.0),
        ("max_turn_accel_rad_s2", 200.0),
    ] {
        values.set(key, value);
    }
    match vehicle::build("unicycle", &values) {
        Ok((machine, _)) => Ok(machine),
        Err(problems) => Err(Refused(problems.iter().map(ToString::to_string).collect())),
    }
}

/// Compiles a draft for a machine that can do whatever a plan may ask for.
pub(super) fn compile(draft: &Draft, json: &str) -> Result<Plan, Refused> {
    plan::compile(json.as_bytes(), &*any_machine()?).map_err(|findings| {
        Refused(findings.iter().map(|finding| with_place(finding, &draft.pieces)).collect())
    })
}

/// The core names segments by index; this adds where the segment comes from.
fn with_place(finding: &str, pieces: &[Piece]) -> String {
    let index = finding.strip_prefix("segments[").and_then(|rest| rest.split_once(']'));
    let piece = index.and_then(|(index, _)| index.parse::<usize>().ok()).and_then(|index| pieces.get(index));
    match piece {
        Some(piece) => format!("{}: {finding}", piece.place),
        None => finding.to_owned(),
    }
}

/// True if a machine can pass from one piece to the next without stopping.
fn flows(before: &Piece, after: &Piece) -> bool {
    let rests = |piece: &Piece| matches!(piece.shape, Shape::Pivot(_) | Shape::Samples(_));
    !rests(before) && !rests(after) && before.reverse == after.reverse
}

/// Gives every piece a rise and a fall of its speed: from rest, over the joints at the lower of both speeds, to rest.
fn ramp(pieces: &mut [Piece], lengths: &[f64], accel: f64, pivot_accel: f64) {
    let rate = |piece: &Piece| piece.pace.map_or(0.0, |pace| pace.rate);
    // The speed at each joint, the ends of the plan included.
    let mut joints = vec![0.0; pieces.len() + 1];
    for (index, pair) in pieces.windows(2).enumerate() {
        if flows(&pair[0], &pair[1]) {
            joints[index + 1] = rate(&pair[0]).min(rate(&pair[1]));
        }
    }
    // What can be reached over a piece from its slower end, forward and then backward.
    let reached = |from: f64, length: f64| math::sqrt(from * from + 2.0 * accel * length) * (1.0 - ROUNDING);
    for index in 0..pieces.len() {
        joints[index + 1] = joints[index + 1].min(reached(joints[index], lengths[index]));
    }
    for index in (0..pieces.len()).rev() {
        joints[index] = joints[index].min(reached(joints[index + 1], lengths[index]));
    }
    for (index, piece) in pieces.iter_mut().enumerate() {
        let on_the_spot = matches!(piece.shape, Shape::Pivot(_));
        if let Some(pace) = &mut piece.pace {
            pace.ramp = Some(if on_the_spot {
                Ramp { accel: pivot_accel, start: 0.0, end: 0.0 }
            } else {
                Ramp { accel, start: joints[index], end: joints[index + 1] }
            });
        }
    }
}

/// A word on the joints where a speed that is there from the first instant steps.
fn steps(pieces: &[Piece]) -> Option<String> {
    let steps =
        pieces.windows(2).filter(|pair| !flows(&pair[0], &pair[1]) || pair[0].pace != pair[1].pace).count();
    (steps > 0).then(|| format!("the speed steps at {steps} joints; retime the plan, or give --accel"))
}

impl Finished {
    /// What came out, in words, and what to do next.
    pub fn summary(&self, file: &Path, wanted: &Output) -> String {
        let plan = &self.plan;
        let end = plan.at(plan.duration_s(), &mut 0).pose;
        let seen = self.seen();
        let mut lines = vec![
            format!("{}: {}", file.display(), self.imported.what),
            format!(
                "plan      {} revision {}: {}",
                self.name.id,
                self.name.revision,
                kinds(&self.imported.draft)
            ),
            format!("length    {:.3} m in {:.2} s", plan.length_m(), self.duration_s()),
            format!("start     {}", pose(self.imported.draft.start)),
            format!("end       {}, at rest", pose(end)),
            format!("extent    {}", extent(&seen)),
        ];
        if let Some(origin) = &self.imported.draft.origin {
            lines.push(format!(
                "origin    latitude {}°, longitude {}°, {} m; x is east, y is north",
                origin.latitude_deg, origin.longitude_deg, origin.altitude_m
            ));
        }
        lines.extend(self.strays().map(|metres| {
            format!("strays    at most {metres:.3} m from the straight lines between the source's points")
        }));
        lines.extend(self.imported.notes.iter().map(|note| format!("note      {note}")));
        let site = wanted.site.as_ref().map_or("SITE.toml".to_owned(), |site| site.display().to_string());
        let out = wanted.out.display();
        lines.push(format!("written   {out}"));
        lines.push(format!("next      fieldbook check --site {site} --plan {out}"));
        lines.join("\n") + "\n"
    }

    /// Its duration as written, without a brake at its end, which is the machine's matter, s.
    pub fn duration_s(&self) -> f64 {
        self.plan.stretches().map(|placed| placed.stretch.duration_s()).sum()
    }

    /// The greatest distance of the path from the source's points as straight pieces, m.
    pub fn strays(&self) -> Option<f64> {
        let line = self.imported.line.as_ref()?;
        let off = distances(&self.seen(), line, window_m(line));
        Some(off.iter().map(|(off, _)| *off).fold(0.0, f64::max))
    }

    fn seen(&self) -> Vec<(f64, f64)> {
        seen(&self.plan, self.imported.line.as_ref().map_or(0, Vec::len))
    }
}

/// Positions along a path, at least four for each of so many points of its source.
pub(super) fn seen(plan: &Plan, points: usize) -> Vec<(f64, f64)> {
    let (all_m, wanted) = (plan.length_m().max(f64::MIN_POSITIVE), LOOKS.max(4 * points) as f64);
    plan.stretches()
        .flat_map(|placed| {
            let looks = (wanted * placed.stretch.path_length_m() / all_m).ceil().max(1.0) as usize;
            (0..=looks).map(move |look| {
                let at = placed.stretch.extent() * look as f64 / looks as f64;
                let pose = placed.stretch.at_progress(Progress::resting(at)).pose;
                (pose.x_m, pose.y_m)
            })
        })
        .collect()
}

fn pose(pose: Pose) -> String {
    format!("x {:.3} m, y {:.3} m, heading {:.4} rad", pose.x_m, pose.y_m, pose.heading_rad)
}

fn extent(seen: &[(f64, f64)]) -> String {
    let bounds = |pick: fn(&(f64, f64)) -> f64| {
        seen.iter()
            .map(pick)
            .fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), value| (low.min(value), high.max(value)))
    };
    let ((west, east), (south, north)) = (bounds(|point| point.0), bounds(|point| point.1));
    format!("x {west:.3} to {east:.3} m, y {south:.3} to {north:.3} m")
}

/// "3 segments (2 nurbs, 1 pivot)".
fn kinds(draft: &Draft) -> String {
    let mut counts: Vec<(&str, usize)> = Vec::new();
    for piece in &draft.pieces {
        let kind = piece.shape.kind();
        match counts.iter_mut().find(|(known, _)| *known == kind) {
            Some((_, count)) => *count += 1,
            None => counts.push((kind, 1)),
        }
    }
    let list: Vec<String> = counts.iter().map(|(kind, count)| format!("{count} {kind}")).collect();
    let all = if draft.pieces.len() == 1 {
        "1 segment".to_owned()
    } else {
        format!("{} segments", draft.pieces.len())
    };
    format!("{all} ({})", list.join(", "))
}

#[cfg(test)]
mod tests {
    use super::super::draft::Pace;
    use super::*;

    fn piece(shape: Shape, rate: f64) -> Piece {
        Piece { place: String::new(), shape, pace: Some(Pace { rate, ramp: None }), reverse: false }
    }

    #[test]
    fn ramps_pass_joints_at_the_lower_speed_and_stop_for_turns() {
        let mut pieces = vec![
            piece(Shape::Line(10.0), 1.0),
            piece(Shape::Line(10.0), 0.4),
            piece(Shape::Pivot(1.0), 0.5),
            piece(Shape::Line(0.01), 1.0),
            piece(Shape::Line(10.0), 1.0),
        ];
        ramp(&mut pieces, &[10.0, 10.0, 1.0, 0.01, 10.0], 0.5, 0.7);
        let ends: Vec<(f64, f64)> = pieces
            .iter()
            .map(|piece| {
                piece.pace.and_then(|pace| pace.ramp).map_or((-1.0, -1.0), |ramp| (ramp.start, ramp.end))
            })
            .collect();
        assert_eq!(ends[0], (0.0, 0.4));
        assert_eq!(ends[1], (0.4, 0.0));
        assert_eq!(ends[2], (0.0, 0.0));
        // Half a metre per second squared over a centimetre: 0.1 m/s.
        assert!(ends[3].0 == 0.0 && (ends[3].1 - 0.1).abs() < 1e-8 && ends[4] == (ends[3].1, 0.0));
    }

    #[test]
    fn findings_name_the_source() {
        let pieces = [Piece { place: "edges[0] (e1)".to_owned(), ..piece(Shape::Line(1.0), 1.0) }];
        assert_eq!(
            with_place("segments[0] (line).length_m: too long", &pieces),
            "edges[0] (e1): segments[0] (line).length_m: too long"
        );
        assert_eq!(with_place("id: empty", &pieces), "id: empty");
    }
}
