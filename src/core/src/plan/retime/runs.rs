//! A whole plan: where it rests, what is driven in one go, and a vehicle's limits as bounds on progress.
//!
//! A plan rests at cusps, pivots and dwells, and at its ends unless other speeds are given. A steered machine also rests
//! at curvature steps, since its wheels take time to turn. A machine that can turn in place passes a curvature step at
//! the speed at which the step of its wheel speeds takes no longer than a settling time within its limits.
//! Where the steering has to swing at a rest, the rest lasts as long as that takes.

use super::swings::{self, Dwell};
use super::{Bend, Limits, Path, Run, TimingPoint, Unsolvable, passes};
use crate::geometry::BodyVelocity;
use crate::math;
use crate::plan::segment::{Progress, Stretch};
use crate::plan::{Placed, Plan};
use crate::vehicle::Vehicle;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

/// Curvatures closer than this are one, 1/m: rounding in arcs of 100 km.
const SAME_CURVATURE_1_M: f64 = 1e-9;
/// Steps of the search for curvature steps inside a segment, m, and their least number.
const LOOK_M: f64 = 0.05;
const MIN_LOOKS: f64 = 64.0;
/// Most steps of that search in a segment.
const MAX_LOOKS: f64 = 100_000.0;

/// Where a step of the curvature is one, and how it is passed.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct StepRule {
    /// A steered machine does not rest at steps up to this, 1/m.
    pub curvature_step_1_m: f64,
    /// A machine that can turn in place passes a step of the curvature at the speed at which the step of its wheel speeds
    /// takes this long within its limits less the reserve, s.
    pub settle_s: f64,
}

/// What to retime for.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Options {
    /// Part of every limit that is kept for feedback, in [0, 1).
    pub reserve: f64,
    /// Speed at the plan's beginning, m/s.
    pub start_speed_m_s: f64,
    /// Speed at the plan's end, m/s.
    pub end_speed_m_s: f64,
    /// How curvature steps are passed.
    pub steps: StepRule,
}

/// The new timing of one segment.
#[derive(Clone, Debug, PartialEq)]
pub enum NewTiming {
    /// Of a path: points to which s(t) is the cubic with these speeds.
    Path(Vec<TimingPoint>),
    /// Of a pivot: from rest to rest, rad/s and rad/s² as much as is needed and allowed.
    Pivot {
        /// Greatest turn rate, rad/s.
        rate_rad_s: f64,
        /// Turn acceleration and deceleration, rad/s².
        accel_rad_s2: f64,
    },
    /// A dwell keeps its duration.
    Kept,
    /// A dwell that was too short for the steering.
    Dwell {
        /// Duration, s.
        duration_s: f64,
    },
}

/// A rest that the plan's geometry makes, apart from its ends, pivots and dwells.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Rest {
    /// Index of the segment.
    pub segment: usize,
    /// Distance from the segment's beginning, m.
    pub at_m: f64,
    /// The curvature before and after, 1/m, if that is why; else the direction of travel changes.
    pub curvatures_1_m: Option<(f64, f64)>,
}

/// A plan's new timing.
#[derive(Clone, Debug, PartialEq)]
pub struct Retimed {
    /// One for each segment, in order.
    pub timings: Vec<NewTiming>,
    /// Rests on the way.
    pub rests: Vec<Rest>,
    /// Rests that the steering needs, in order. Those inside a segment are in its timing, and the plan's own dwells that
    /// are made longer in theirs.
    pub dwells: Vec<Dwell>,
}

/// Gives a compiled plan's geometry its fastest timing. What timing it has now does not matter. `top_m_s` says for a
/// segment's index the greatest speed wanted on it, infinite where only the limits count.
///
/// # Errors
/// What stands in the way, a line each: place, value, what to do.
pub fn of_plan(
    plan: &Plan,
    vehicle: &dyn Vehicle,
    options: &Options,
    top_m_s: &dyn Fn(usize) -> f64,
) -> Result<Retimed, Vec<String>> {
    let placed: Vec<Placed<'_>> = plan.stretches().collect();
    let mut findings = Vec::new();
    let mut pieces = Vec::new();
    let mut timings = Vec::with_capacity(placed.len());
    for segment in &placed {
        let place = format!("segments[{}] ({})", segment.index, segment.kind);
        match segment.kind {
            "dwell" => timings.push(NewTiming::Kept),
            "pivot" => match vehicle.pivot_bounds(1.0 - options.reserve) {
                Some((rate_rad_s, accel_rad_s2)) => {
                    timings.push(NewTiming::Pivot { rate_rad_s, accel_rad_s2 });
                }
                None => findings.push(format!("{place}: this machine cannot turn on the spot; drive a bend instead")),
            },
            "samples" => findings.push(format!(
                "{place}: samples have a time at every point and no other timing; give their way-poses as a spline"
            )),
            _ => {
                timings.push(NewTiming::Path(Vec::new()));
                cut_at_steps(segment, top_m_s(segment.index), &mut pieces);
            }
        }
    }
    if !findings.is_empty() {
        return Err(findings);
    }
    let limits = VehicleLimits { vehicle, steps: options.steps };
    let mut rests = Vec::new();
    let runs = runs(&pieces, &limits, placed.len(), &mut rests);
    let dwells = swings::dwells(&placed, &runs, vehicle, options, plan.continues_at().is_some());
    swings::lengthen(&dwells, &placed, &mut timings);
    for run in &runs {
        if let Err(finding) = solve(run, &placed, &limits, options, &dwells, &mut timings) {
            findings.push(finding);
        }
    }
    if findings.is_empty() { Ok(Retimed { timings, rests, dwells }) } else { Err(findings) }
}

/// A part of a segment on which the curvature is continuous.
#[derive(Clone, Copy, Debug)]
pub(super) struct Piece<'a> {
    pub(super) segment: usize,
    stretch: &'a dyn Stretch,
    uniform: bool,
    pub(super) from_m: f64,
    to_m: f64,
    reverse: bool,
    top_m_s: f64,
}

impl Path for Piece<'_> {
    fn length_m(&self) -> f64 {
        self.to_m - self.from_m
    }

    fn bend(&self, s_m: f64) -> Bend {
        // Just inside, so that a step at an end is seen from this side.
        let length = self.length_m();
        let inside = (1e-9_f64).min(1e-3 * length);
        bend_at(self.stretch, self.from_m + s_m.clamp(inside, length - inside))
    }

    fn is_uniform(&self) -> bool {
        self.uniform
    }

    fn top_speed_m_s(&self) -> f64 {
        self.top_m_s
    }
}

fn bend_at(stretch: &dyn Stretch, at: f64) -> Bend {
    let reference = stretch.at_progress(Progress { at, rate: 1.0, accel: 0.0 });
    Bend { curvature_1_m: reference.curvature_1_m, curvature_rate_1_m2: reference.curvature_rate_1_m2 }
}

/// Cuts a segment where its curvature steps. Lines, arcs and clothoids have no steps.
fn cut_at_steps<'a>(segment: &Placed<'a>, top_m_s: f64, pieces: &mut Vec<Piece<'a>>) {
    let stretch = segment.stretch;
    let uniform = matches!(segment.kind, "line" | "arc");
    let reverse = stretch.travel().reverse;
    let length = stretch.extent();
    let mut add = |from_m, to_m| {
        pieces.push(Piece { segment: segment.index, stretch, uniform, from_m, to_m, reverse, top_m_s });
    };
    if uniform || segment.kind == "clothoid" {
        return add(0.0, length);
    }
    let count = math::ceil(length / LOOK_M).clamp(MIN_LOOKS, MAX_LOOKS);
    let step = length / count;
    let mut from = 0.0;
    for index in 0..count as usize {
        let (low, high) = (step * index as f64, step * (index as f64 + 1.0));
        if let Some(at) = step_inside(stretch, low, high)
            && at - from > 1e-6
            && length - at > 1e-6
        {
            add(from, at);
            from = at;
        }
    }
    add(from, length);
}

/// Where the curvature has stepped between two places, if it does: by halving, towards the greater change.
fn step_inside(stretch: &dyn Stretch, mut low: f64, mut high: f64) -> Option<f64> {
    let curvature = |at: f64| bend_at(stretch, at).curvature_1_m;
    let (mut before, mut after) = (curvature(low), curvature(high));
    let whole = (after - before).abs();
    // A curvature that changes less than this in a step is passed at any speed.
    if whole < 1e-4 {
        return None;
    }
    while high - low > 2e-10 {
        let middle = 0.5 * (low + high);
        let at = curvature(middle);
        if (at - before).abs() > (after - at).abs() {
            (high, after) = (middle, at);
        } else {
            (low, before) = (middle, at);
        }
        // A continuous change halves with the way; a step keeps its size.
        if (after - before).abs() < 0.01 * whole {
            return None;
        }
    }
    Some(high)
}

/// Pieces that are driven without a rest between, and the speeds at their ends that are not rests.
pub(super) struct RunOf<'a, 'b> {
    pub(super) pieces: &'b [Piece<'a>],
    begins_plan: bool,
    ends_plan: bool,
}

fn runs<'a, 'b>(
    pieces: &'b [Piece<'a>],
    limits: &VehicleLimits<'_>,
    segments: usize,
    rests: &mut Vec<Rest>,
) -> Vec<RunOf<'a, 'b>> {
    let mut runs = Vec::new();
    let mut first = 0;
    for index in 0..pieces.len() {
        let here = &pieces[index];
        let ends = pieces.get(index + 1).is_none_or(|next| rests_between(here, next, limits, rests));
        if ends {
            runs.push(RunOf {
                pieces: &pieces[first..=index],
                begins_plan: first == 0 && pieces[0].segment == 0,
                ends_plan: index + 1 == pieces.len() && here.segment + 1 == segments,
            });
            first = index + 1;
        }
    }
    runs
}

fn rests_between(
    before: &Piece<'_>,
    after: &Piece<'_>,
    limits: &VehicleLimits<'_>,
    rests: &mut Vec<Rest>,
) -> bool {
    if after.segment > before.segment + 1 {
        // A pivot or a dwell lies between.
        return true;
    }
    let rest = |curvatures_1_m| Rest { segment: after.segment, at_m: after.from_m, curvatures_1_m };
    if before.reverse != after.reverse {
        rests.push(rest(None));
        return true;
    }
    let (one, other) = (before.bend(f64::INFINITY).curvature_1_m, after.bend(0.0).curvature_1_m);
    let steered = limits.vehicle.layout().is_steered();
    if steered && (other - one).abs() > limits.steps.curvature_step_1_m {
        rests.push(rest(Some((one, other))));
        return true;
    }
    false
}

fn solve(
    run: &RunOf<'_, '_>,
    placed: &[Placed<'_>],
    limits: &VehicleLimits<'_>,
    options: &Options,
    dwells: &[Dwell],
    timings: &mut [NewTiming],
) -> Result<(), String> {
    let paths: Vec<&dyn Path> = run.pieces.iter().map(|piece| piece as &dyn Path).collect();
    let problem = Run {
        pieces: &paths,
        start_speed_m_s: if run.begins_plan { options.start_speed_m_s } else { 0.0 },
        end_speed_m_s: if run.ends_plan { options.end_speed_m_s } else { 0.0 },
        share: 1.0 - options.reserve,
    };
    let found = super::fastest(&problem, limits).map_err(|why| place_of(&why, run, placed))?;
    for (piece, points) in run.pieces.iter().zip(found) {
        let NewTiming::Path(whole) = &mut timings[piece.segment] else { continue };
        if let Some(last) = whole.last_mut() {
            let here = |dwell: &&Dwell| (dwell.segment, dwell.at_m) == (piece.segment, piece.from_m);
            let rest = dwells.iter().find(here).map(|dwell| {
                let t_s = last.t_s + dwell.duration_s;
                *last = TimingPoint { s_m: piece.from_m, ..*last };
                TimingPoint { t_s, ..*last }
            });
            whole.extend(rest);
        }
        let begin_s = whole.last().map_or(0.0, |last| last.t_s);
        let fresh = usize::from(!whole.is_empty());
        whole.extend(points.into_iter().skip(fresh).map(|point| TimingPoint {
            t_s: begin_s + point.t_s,
            s_m: piece.from_m + point.s_m,
            ..point
        }));
    }
    Ok(())
}

fn place_of(why: &Unsolvable, run: &RunOf<'_, '_>, placed: &[Placed<'_>]) -> String {
    let (index, from_m) = match *why {
        Unsolvable::NoSpeed { piece, .. } | Unsolvable::TooRough { piece, .. } => {
            (run.pieces[piece].segment, run.pieces[piece].from_m)
        }
        Unsolvable::EndSpeed { .. } => (run.pieces[run.pieces.len() - 1].segment, 0.0),
        Unsolvable::StartSpeed { .. } | Unsolvable::TooShortForJerk { .. } | Unsolvable::EndsWithinJerk => {
            (run.pieces[0].segment, 0.0)
        }
    };
    let why = match *why {
        Unsolvable::NoSpeed { piece, at_m, curvature_1_m } => {
            Unsolvable::NoSpeed { piece, at_m: at_m + from_m, curvature_1_m }
        }
        Unsolvable::TooRough { piece, at_m } => Unsolvable::TooRough { piece, at_m: at_m + from_m },
        other => other,
    };
    format!("segments[{index}] ({}): {why}", placed[index].kind)
}

/// A vehicle's limits.
struct VehicleLimits<'a> {
    vehicle: &'a dyn Vehicle,
    steps: StepRule,
}

impl VehicleLimits<'_> {
    /// True if the wheels get from one curvature to the other at this speed in the settling time.
    fn settles(&self, speed_m_s: f64, before_1_m: f64, after_1_m: f64, share: f64) -> bool {
        let motion = |curvature: f64| BodyVelocity { speed_m_s, turn_rate_rad_s: speed_m_s * curvature };
        let from = self.vehicle.wheels(motion(before_1_m), before_1_m, &[0.0; 4]);
        let to = self.vehicle.wheels(motion(after_1_m), after_1_m, &from);
        self.vehicle.step(&from, &to, share * self.steps.settle_s).share >= 1.0
    }
}

impl Limits for VehicleLimits<'_> {
    fn speed_bound_m_s(&self, bend: Bend, share: f64) -> f64 {
        self.vehicle.speed_bound_m_s(bend.curvature_1_m, bend.curvature_rate_1_m2, share)
    }

    fn accel_bounds_m_s2(&self, speed_m_s: f64, bend: Bend, share: f64) -> (f64, f64) {
        self.vehicle.accel_bounds_m_s2(speed_m_s, bend.curvature_1_m, bend.curvature_rate_1_m2, share)
    }

    fn step_speed_m_s(&self, before_1_m: f64, after_1_m: f64, share: f64) -> f64 {
        let step = (after_1_m - before_1_m).abs();
        let steered = self.vehicle.layout().is_steered();
        if step <= SAME_CURVATURE_1_M || steered && step <= self.steps.curvature_step_1_m {
            return f64::INFINITY;
        }
        let top = self.vehicle.top_speed_m_s();
        let settles = |speed: f64| self.settles(speed, before_1_m, after_1_m, share);
        if settles(top) { f64::INFINITY } else { passes::greatest(0.0, top, settles) }
    }

    fn jerk_m_s3(&self) -> Option<f64> {
        self.vehicle.max_jerk_m_s3()
    }
}
