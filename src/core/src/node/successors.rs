//! Plans that continue the one in force: each waits for its plan time, and takes over in the tick that reaches it.
//!
//! One clock runs through a plan and all that continue it, so that a planner names a place on it without knowing which
//! of its last plans have arrived. What is in force at a plan time T is the last plan that begins before T; a new plan
//! that goes on at T has to meet it there, and takes the place of every plan that would begin at T or later. So each plan
//! is followed whole from its beginning up to the next one's, or not at all.

use super::Sink;
use super::params::Params;
use crate::math;
use crate::plan::segment::Travel;
use crate::plan::{Plan, Reference};
use crate::time::SpanNs;
use crate::vehicle::Vehicle;
use alloc::boxed::Box;
use alloc::vec::Vec;
use trackhold_proto::words::Refusal;

/// So many plans can wait: more than a second's worth of a planner that plans ten times a second.
const MOST: usize = 16;
/// A plan that is appended may name the end of the one before this much too late: seconds as decimals are rounded.
const LATE_APPEND: SpanNs = SpanNs(1_000);
/// Below this speed a machine turns on the spot or rests, m/s.
const ON_THE_SPOT_M_S: f64 = 1e-3;

/// The plans that wait, in the order of their beginnings.
#[derive(Debug)]
pub(super) struct Successors {
    #[expect(clippy::vec_box, reason = "a plan stays boxed: to unbox it would free memory within the loop")]
    plans: Vec<Box<Plan>>,
    /// The greatest revision taken in this run.
    revision: u32,
}

/// How far the reference steps where a plan goes on.
#[derive(Clone, Copy, Debug)]
pub(super) struct JointStep {
    pub(super) position_m: f64,
    pub(super) curvature_1_m: f64,
}

impl Successors {
    /// None waits; room for all that ever will.
    pub(super) fn new() -> Self {
        Self { plans: Vec::with_capacity(MOST), revision: 0 }
    }

    /// How many wait.
    pub(super) fn count(&self) -> usize {
        self.plans.len()
    }

    /// The ways of driving of all that wait.
    pub(super) fn travel(&self) -> Travel {
        self.plans.iter().fold(Travel::default(), |travel, plan| travel.with(plan.travel()))
    }

    /// True if a plan with these bytes waits.
    pub(super) fn holds(&self, digest: trackhold_proto::blob::Digest) -> bool {
        self.plans.iter().any(|plan| plan.digest() == digest)
    }

    /// None waits any more; revisions count from that of the plan loaded.
    pub(super) fn begin(&mut self, revision: u32, sink: &mut impl Sink) {
        self.revision = revision;
        self.clear(sink);
    }

    /// None waits any more.
    pub(super) fn clear(&mut self, sink: &mut impl Sink) {
        self.plans.drain(..).for_each(|plan| sink.retire(plan));
    }

    /// Whether `plan`, which goes on at plan time `at`, may be taken while `in_force` is followed and the clock shows
    /// `reached`; and the steps at its joint.
    pub(super) fn admit(
        &self,
        plan: &Plan,
        at: SpanNs,
        (in_force, reached): (&Plan, SpanNs),
        vehicle: &dyn Vehicle,
        params: &Params,
    ) -> Result<JointStep, Refusal> {
        if plan.id() != in_force.id() {
            return Err(Refusal::OtherPlan);
        }
        if plan.revision() <= self.revision {
            return Err(Refusal::RevisionNotRising { revision: plan.revision(), last: self.revision });
        }
        let least = reached + params.continue_lead;
        if at < least {
            return Err(Refusal::TooSoon { at_ns: at.0, least_ns: least.0 });
        }
        let earlier = self.plans.partition_point(|waiting| waiting.begin() < at);
        if earlier >= MOST {
            return Err(Refusal::TooManyWaiting { limit: MOST as u32 });
        }
        let before = earlier.checked_sub(1).map_or(in_force, |last| &self.plans[last]);
        if at > before.end() + LATE_APPEND {
            return Err(Refusal::PlanTime { plan_time_ns: at.0, duration_ns: before.end().0 });
        }
        let (old, new) = (before.at((at - before.begin()).seconds(), &mut 0), plan.at(0.0, &mut 0));
        check_joint(at, &old, &new, vehicle, params)
    }

    /// Takes a plan that was admitted.
    pub(super) fn take(&mut self, plan: Box<Plan>, sink: &mut impl Sink) {
        let earlier = self.plans.partition_point(|waiting| waiting.begin() < plan.begin());
        self.plans.drain(earlier..).for_each(|replaced| sink.retire(replaced));
        self.revision = plan.revision();
        self.plans.push(plan);
    }

    /// The waiting plan that will be in force at a plan time; none if that is the one in force now.
    pub(super) fn in_force_at(&self, time: SpanNs) -> Option<&Plan> {
        let begun = self.plans.partition_point(|waiting| waiting.begin() <= time);
        begun.checked_sub(1).map(|last| &*self.plans[last])
    }

    /// The plan that is in force from now on, if one's plan time was reached.
    pub(super) fn due(&mut self, reached: SpanNs, sink: &mut impl Sink) -> Option<Box<Plan>> {
        let due = self.plans.partition_point(|waiting| waiting.begin() <= reached);
        // Those of which no tick has seen anything.
        self.plans.drain(..due.saturating_sub(1)).for_each(|passed| sink.retire(passed));
        (due > 0).then(|| self.plans.remove(0))
    }
}

fn check_joint(
    at: SpanNs,
    old: &Reference,
    new: &Reference,
    vehicle: &dyn Vehicle,
    params: &Params,
) -> Result<JointStep, Refusal> {
    let at_ns = at.0;
    let (step_m, limit_m) = (old.pose.distance_to(new.pose), params.joint_distance_m);
    if step_m > limit_m {
        return Err(Refusal::PositionStep { at_ns, step_m, limit_m });
    }
    let step_rad = math::wrap(new.pose.heading_rad - old.pose.heading_rad).abs();
    let limit_rad = params.joint_heading_rad;
    if step_rad > limit_rad {
        return Err(Refusal::HeadingStep { at_ns, step_rad, limit_rad });
    }
    let (from, to) = (old.velocity, new.velocity);
    let (step_m_s, limit_m_s) = ((to.speed_m_s - from.speed_m_s).abs(), params.joint_speed_m_s);
    if step_m_s > limit_m_s {
        return Err(Refusal::SpeedStep { at_ns, step_m_s, limit_m_s });
    }
    let on_the_spot = from.speed_m_s.abs().min(to.speed_m_s.abs()) < ON_THE_SPOT_M_S;
    let (step_rad_s, limit_rad_s) =
        ((to.turn_rate_rad_s - from.turn_rate_rad_s).abs(), params.joint_turn_rate_rad_s);
    if on_the_spot && step_rad_s > limit_rad_s {
        return Err(Refusal::TurnRateStep { at_ns, step_rad_s, limit_rad_s });
    }
    let step_1_m = new.curvature_1_m - old.curvature_1_m;
    let (steers, limit_1_m) = (vehicle.layout().is_steered(), params.joint_curvature_1_m);
    if steers && !on_the_spot && step_1_m.abs() > limit_1_m {
        return Err(Refusal::CurvatureStep { at_ns, step_1_m: step_1_m.abs(), limit_1_m });
    }
    Ok(JointStep { position_m: step_m, curvature_1_m: step_1_m })
}
