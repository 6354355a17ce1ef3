//! The plan as a picture needs it: poses and shares at a bounded number of instants.

use trackhold_core::geometry::Pose;
use trackhold_core::plan::Plan;
use trackhold_core::plan::check::loads_at;
use trackhold_core::vehicle::{LimitName, Vehicle};

/// Instants along a plan.
const INSTANTS: usize = 4000;

/// The plan at an instant.
#[derive(Clone, Debug)]
pub(super) struct Instant {
    /// Plan time, s.
    pub(super) t_s: f64,
    /// Pose.
    pub(super) pose: Pose,
    /// Speed, m/s; negative in reverse.
    pub(super) speed_m_s: f64,
    /// Share of each limit.
    pub(super) shares: Vec<(LimitName, f64)>,
}

/// The plan at its joints, just before and at each, and evenly in between.
pub(super) fn trace(plan: &Plan, vehicle: &dyn Vehicle) -> Vec<Instant> {
    let duration = plan.duration_s();
    let mut times: Vec<f64> = (0..=INSTANTS).map(|step| duration * step as f64 / INSTANTS as f64).collect();
    let joints: Vec<f64> = plan.segment_begins().skip(1).take(INSTANTS).collect();
    // Just before: a step between two looks shows upright.
    times.extend(joints.iter().flat_map(|joint| [joint * (1.0 - 1e-9), *joint]));
    // At its very end a closed plan rests, and asks for nothing.
    times.push(duration * (1.0 - 1e-9));
    times.sort_by(f64::total_cmp);
    let sampled: Vec<(f64, bool)> =
        plan.stretches().map(|placed| (placed.begin_s, placed.kind == "samples")).collect();
    let mut cursor = 0;
    times
        .into_iter()
        .map(|t_s| {
            let reference = plan.at(t_s, &mut cursor);
            let after = sampled.partition_point(|(begin_s, _)| *begin_s <= t_s);
            let loads = loads_at(vehicle, &reference, sampled[after.saturating_sub(1)].1);
            let shares = loads.iter().flatten().map(|load| (load.limit, load.share())).collect();
            Instant { t_s, pose: reference.pose, speed_m_s: reference.velocity.speed_m_s, shares }
        })
        .collect()
}
