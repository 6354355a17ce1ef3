//! A time law of constant accelerations made smooth: its average over a short sliding time T.
//!
//! The average s(t) = (1/T) ∫ s̄ over [t − T/2, t + T/2] has the jerk (ā(t + T/2) − ā(t − T/2))/T, and since s̄ is made of
//! parabolas, s is made of cubics, which is what a timing's points say. (A moving average as trajectory filter: Biagiotti
//! and Melchiorri, Trajectory Planning for Automatic Machines and Robots, 2008, ch. 4.)

use super::knots::join_runs;
use super::{Run, TimingPoint, passes};
use alloc::vec;
use alloc::vec::Vec;

/// A time law of constant accelerations, going on at constant speed before and after.
pub(super) struct Law {
    knots: Vec<TimingPoint>,
}

impl Law {
    pub(super) fn new(knots: Vec<TimingPoint>) -> Self {
        Self { knots }
    }

    /// Distance, speed and acceleration at a time; at a knot the later acceleration.
    fn at(&self, t_s: f64) -> (f64, f64, f64) {
        let next = self.knots.partition_point(|knot| knot.t_s <= t_s);
        let from = self.knots[next.saturating_sub(1)];
        let accel = match self.knots.get(next) {
            Some(to) if next > 0 => (to.speed_m_s - from.speed_m_s) / (to.t_s - from.t_s),
            _ => 0.0,
        };
        let past = t_s - from.t_s;
        (from.s_m + past * (from.speed_m_s + 0.5 * accel * past), from.speed_m_s + accel * past, accel)
    }

    /// The greatest change of acceleration over `span_s`, m/s².
    pub(super) fn greatest_change(&self, span_s: f64) -> f64 {
        // Both ends of the span step at knots only; just after and just before each step all values are seen.
        let tiny = 1e-9;
        let change = |t: f64| (self.at(t + span_s).2 - self.at(t).2).abs();
        self.knots
            .iter()
            .flat_map(|knot| [knot.t_s - tiny, knot.t_s + tiny])
            .flat_map(|t| [change(t), change(t - span_s)])
            .fold(0.0, f64::max)
    }

    /// The average over `average_s`: its points where its jerk changes, but no two closer than `shortest_s`.
    pub(super) fn average(&self, run: &Run<'_>, average_s: f64, shortest_s: f64) -> Vec<TimingPoint> {
        let mut times: Vec<f64> =
            self.knots.iter().flat_map(|knot| [knot.t_s, knot.t_s + average_s]).collect();
        times.sort_by(f64::total_cmp);
        let end_s = times[times.len() - 1];
        let motion = |t: f64| {
            let (before, after) = (self.at(t - average_s), self.at(t));
            ((after.0 - before.0) / average_s, (after.1 - before.1) / average_s)
        };
        let (mut speed, mut accel) = motion(0.0);
        let mut here = TimingPoint { t_s: 0.0, s_m: 0.0, speed_m_s: run.start_speed_m_s };
        let mut points = vec![here];
        for t_s in times.into_iter().skip(1) {
            let (next_speed, next_accel) = motion(t_s);
            let dt = t_s - here.t_s;
            // Exact where the jerk is constant, as it is between two of these times.
            let s_m = here.s_m + dt * (0.5 * (speed + next_speed) + dt * (accel - next_accel) / 12.0);
            here = TimingPoint { t_s, s_m, speed_m_s: next_speed.max(0.0) };
            (speed, accel) = (next_speed, next_accel);
            let last_s = points[points.len() - 1].t_s;
            if t_s - last_s >= shortest_s && end_s - t_s >= shortest_s {
                points.push(here);
            }
        }
        points.push(TimingPoint { speed_m_s: run.end_speed_m_s, ..here });
        points
    }
}

/// Distance, speed and acceleration on the cubic between two points, `past_s` after the first.
pub(super) fn cubic(from: TimingPoint, to: TimingPoint, past_s: f64) -> (f64, f64, f64) {
    let dt = to.t_s - from.t_s;
    let mean = (to.s_m - from.s_m) / dt;
    // s = s0 + v0 t + b t² + c t³ through both distances and speeds.
    let b = (3.0 * mean - 2.0 * from.speed_m_s - to.speed_m_s) / dt;
    let c = (from.speed_m_s + to.speed_m_s - 2.0 * mean) / (dt * dt);
    let t = past_s;
    (
        from.s_m + t * (from.speed_m_s + t * (b + t * c)),
        from.speed_m_s + t * (2.0 * b + t * 3.0 * c),
        2.0 * b + 6.0 * c * t,
    )
}

/// The accelerations at both ends of the cubic between two points.
fn end_accels(from: TimingPoint, to: TimingPoint) -> (f64, f64) {
    (cubic(from, to, 0.0).2, cubic(from, to, to.t_s - from.t_s).2)
}

/// True if the cubic between two points goes backwards between them: its speed is a parabola.
fn turns_back(from: TimingPoint, to: TimingPoint) -> bool {
    let (begin, end) = end_accels(from, to);
    let dt = to.t_s - from.t_s;
    let lowest_s = if begin < 0.0 && end > 0.0 { dt * begin / (begin - end) } else { return false };
    cubic(from, to, lowest_s).1 < 0.0
}

/// Joins cubics as long as the joined one `holds` and its accelerations at its ends stay within `room` (m/s²) of those
/// before. A cubic through the ends of several has a mean of their jerks, so that no limit of the jerk is broken. Points
/// at the distances `fixed` stay.
pub(super) fn join(
    points: &[TimingPoint],
    fixed: &[f64],
    room: f64,
    holds: impl Fn(TimingPoint, TimingPoint) -> bool,
) -> Vec<TimingPoint> {
    let joins = |from: usize, to: usize| {
        let (begin, end) = end_accels(points[from], points[to]);
        let (before, after) =
            (end_accels(points[from], points[from + 1]).0, end_accels(points[to - 1], points[to]).1);
        let same = (begin - before).abs() <= room && (end - after).abs() <= room;
        same && !turns_back(points[from], points[to]) && holds(points[from], points[to])
    };
    join_runs(points, |point| fixed.contains(&point.s_m), joins)
}

/// Adds a point where two pieces of path join, on the cubic that passes there; a point that is all but there gives way.
pub(super) fn with_joints(points: Vec<TimingPoint>, joints: &[f64], shortest_s: f64) -> Vec<TimingPoint> {
    let mut whole: Vec<TimingPoint> = Vec::with_capacity(points.len() + joints.len());
    let mut next = joints.iter().copied().peekable();
    let end_s = points[points.len() - 1].t_s;
    for point in points {
        let mut near = false;
        while let Some(joint) = next.peek().copied().filter(|joint| *joint < point.s_m) {
            next.next();
            let from = whole[whole.len() - 1];
            let crossing = crossing(from, point, joint);
            if crossing.t_s - from.t_s < shortest_s && whole.len() > 1 && !joints.contains(&from.s_m) {
                whole.pop();
            }
            near = point.t_s - crossing.t_s < shortest_s;
            whole.push(crossing);
        }
        if !near || point.t_s == end_s {
            whole.push(point);
        }
    }
    whole
}

/// Where the cubic between two points reaches the distance `s_m`.
fn crossing(from: TimingPoint, to: TimingPoint, s_m: f64) -> TimingPoint {
    let dt = to.t_s - from.t_s;
    let u = passes::greatest(0.0, 1.0, |u| cubic(from, to, u * dt).0 <= s_m);
    TimingPoint { t_s: from.t_s + u * dt, s_m, speed_m_s: cubic(from, to, u * dt).1 }
}
