//! Where a plan passes nearest to a pose, to resume a run: bounded work, no allocation.

use super::Plan;
use crate::geometry::Pose;
use crate::math;
use alloc::vec::Vec;

/// How many places of the plan are looked at first.
const MOST_MILESTONES: usize = 4096;
/// Milestones lie no closer than this, s.
const CLOSEST_S: f64 = 0.25;
/// How many places are looked at between the milestones beside the best one.
const SCAN: u32 = 256;
/// Halvings of the last interval: 256 places in 0.5 s are 2 ms apart, 2⁻³⁰ of that is below a picosecond.
const REFINEMENTS: usize = 45;
/// A heading error of a right angle weighs as much as this distance, m: where a path crosses itself, the branch that the
/// machine points along counts.
const RIGHT_ANGLE_M: f64 = 1.0;
/// A second between a place and the plan time reached before weighs as much as this distance, m: where a plan passes the
/// same place again and again, the passage it was at counts. It moves the result on a single passage by 0.01 % of the way.
const SECOND_M: f64 = 0.01;

/// A place of the plan.
#[derive(Clone, Copy, Debug)]
pub(super) struct Milestone {
    t_s: f64,
    pose: Pose,
}

/// Places all along a plan, computed once when it is compiled.
pub(super) fn milestones(plan: &Plan) -> Vec<Milestone> {
    let steps = math::round(plan.duration_s / CLOSEST_S).clamp(1.0, MOST_MILESTONES as f64) as usize;
    let mut cursor = 0;
    (0..=steps)
        .map(|step| {
            let t_s = plan.duration_s * step as f64 / steps as f64;
            Milestone { t_s, pose: plan.at(t_s, &mut cursor).pose }
        })
        .collect()
}

pub(super) fn time_s(plan: &Plan, milestones: &[Milestone], pose: Pose, reached_s: f64) -> f64 {
    let cost = |t_s: f64, reference: Pose| {
        let (x, y) = (reference.x_m - pose.x_m, reference.y_m - pose.y_m);
        let turn = RIGHT_ANGLE_M * math::wrap(reference.heading_rad - pose.heading_rad) / math::FRAC_PI_2;
        let late = SECOND_M * (t_s - reached_s);
        x * x + y * y + turn * turn + late * late
    };
    let mut best = (f64::INFINITY, 0);
    for (index, milestone) in milestones.iter().enumerate() {
        let cost = cost(milestone.t_s, milestone.pose);
        if cost < best.0 {
            best = (cost, index);
        }
    }
    let low = milestones[best.1.saturating_sub(1)].t_s;
    let high = milestones[(best.1 + 1).min(milestones.len() - 1)].t_s;
    let mut cursor = 0;
    let mut cost_at = |t_s: f64| cost(t_s, plan.at(t_s, &mut cursor).pose);
    let place = |step: u32| low + (high - low) * f64::from(step) / f64::from(SCAN);
    let mut closest = (f64::INFINITY, 0);
    for step in 0..=SCAN {
        let cost = cost_at(place(step));
        if cost < closest.0 {
            closest = (cost, step);
        }
    }
    let (mut low, mut high) = (place(closest.1.saturating_sub(1)), place((closest.1 + 1).min(SCAN)));
    for _ in 0..REFINEMENTS {
        let third = (high - low) / 3.0;
        if cost_at(low + third) <= cost_at(high - third) {
            high -= third;
        } else {
            low += third;
        }
    }
    0.5 * (low + high)
}
