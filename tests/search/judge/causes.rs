//! What has to stop the machine, by what the judge itself saw: poses, jumps, the plan's end.

use super::{Asked, Broken, Heard, Judge, Rule, drives};
use crate::setup::{JUMP_STOP_M, PERIOD, POSE_TIMEOUT, SETTLE_TIME};
use trackhold_core::time::{SpanNs, TimeNs};
use trackhold_proto::journal::{Body, Order, PlanLoaded, PoseEvent, TickRecord};
use trackhold_proto::words::Mode;

/// A pose may differ from the one before by this much for having moved along the plan, m.
const MOVED_M: f64 = 0.5;
/// Punctual ticks within which a ramp ends: two for the pace, and what is then left of the speed, and one to see it.
const RAMP_TICKS: u32 = 6;

#[derive(Debug)]
pub(super) struct Causes {
    /// The last pose that was taken, and how many were.
    pose: Option<PoseEvent>,
    taken: u64,
    /// What the last tick saw: how far to the left, and the heading.
    seen: Option<(f64, f64)>,
    /// The source of the poses at that tick.
    source: Option<u64>,
    plan: Option<PlanLoaded>,
    /// The plan times at which plans that wait begin, ns.
    waiting: Vec<u64>,
    /// Punctual ticks in the controlled stop.
    ramp_ticks: u32,
    last_tick: TimeNs,
    /// Up to when the plan's time has run, and its rate.
    run_at: TimeNs,
    rate: f64,
    cap: f64,
}

impl Causes {
    pub(super) fn new() -> Self {
        Self {
            pose: None,
            taken: 0,
            seen: None,
            source: None,
            plan: None,
            waiting: Vec::new(),
            ramp_ticks: 0,
            last_tick: TimeNs(0),
            run_at: TimeNs(0),
            rate: 1.0,
            cap: 1.0,
        }
    }

    /// True if a pose that was taken is no older than `timeout`, neither by its stamp nor by its arrival.
    pub(super) fn is_fresh(&self, at: TimeNs, timeout: SpanNs) -> bool {
        self.pose.is_some_and(|pose| {
            let stamp = at.since(TimeNs(pose.pose.measured_ns));
            stamp <= timeout && at.since(TimeNs(pose.received_ns)) <= timeout
        })
    }

    fn hear(&mut self, heard: &Heard<'_>) {
        let refused = heard.out.iter().any(|entry| matches!(entry.body, Body::PoseRefused(_)));
        if let Asked::Pose(event) = heard.asked
            && !refused
        {
            self.pose = Some(*event);
            self.taken += 1;
        }
        for entry in heard.out {
            match &entry.body {
                Body::PlanWaits(waits) => {
                    self.waiting.truncate(waits.waiting.saturating_sub(1) as usize);
                    self.waiting.push(waits.at_ns);
                }
                Body::PlanLoaded(loaded) => self.plan = Some(*loaded),
                _ => (),
            }
        }
        if let Some(record) = heard.record {
            self.waiting.retain(|begin_ns| *begin_ns > record.plan_time_ns);
        }
        if !drives(heard.after) {
            self.waiting.clear();
        }
        if heard.change.is_some_and(|change| change.to == Mode::Tracking) {
            // What a machine at rest saw before its start is no jump.
            self.see_pose();
            (self.run_at, self.rate) = (heard.at, self.cap);
        }
        if let (Some(Order::Cap { share }), None) = (heard.order(), heard.refusal()) {
            self.cap = share;
        }
    }

    fn see_pose(&mut self) {
        self.seen = self.pose.map(|pose| (pose.pose.y_m, pose.pose.heading_rad));
        self.source = self.pose.map(|pose| pose.session);
    }

    /// Whether the pose that this tick sees is too far from the one that the last tick saw.
    fn jumped(&self) -> bool {
        let (Some(pose), Some((seen_m, _))) = (self.pose, self.seen) else { return false };
        (pose.pose.y_m - seen_m).abs() > JUMP_STOP_M + MOVED_M
    }

    fn see(&mut self, heard: &Heard<'_>) {
        self.see_pose();
        self.run_at = heard.at;
        self.rate = heard.record.map_or(self.rate, |record| record.plan_rate);
        let punctual = heard.at.since(self.last_tick) >= PERIOD;
        let ramps = heard.after == Mode::ControlledStop;
        self.ramp_ticks = if ramps { self.ramp_ticks + u32::from(punctual) } else { 0 };
        self.last_tick = heard.at;
    }

    /// Whether the plan in force is over for good.
    fn ran_out(&self, record: &TickRecord) -> bool {
        let Some(plan) = self.plan.filter(|_| self.waiting.is_empty()) else { return false };
        let settling = SpanNs(SETTLE_TIME.0 + 3 * PERIOD.0);
        let last_ns = plan.duration_ns + if plan.open { 0 } else { settling.0 };
        record.plan_time_ns >= last_ns
    }
}

impl Judge {
    pub(super) fn judge_causes(&mut self, heard: &Heard<'_>) -> Result<(), Broken> {
        self.causes.hear(heard);
        let Some(record) = heard.record else { return Ok(()) };
        let (drove, driven) = (drives(heard.before), drives(heard.after));
        let told = || format!("{record:?}");
        let fresh = self.causes.is_fresh(heard.at, POSE_TIMEOUT);
        Broken::unless(!driven || fresh, Rule::Fresh, told)?;
        Broken::unless(!(drove && driven && self.causes.jumped()), Rule::Jump, told)?;
        let over = heard.after == Mode::Tracking && self.causes.ran_out(record);
        Broken::unless(!over, Rule::RunsOut, told)?;
        self.causes.see(heard);
        Broken::unless(self.causes.ramp_ticks <= RAMP_TICKS, Rule::RampEnds, told)
    }

    /// Punctual ticks in the controlled stop in force.
    pub(crate) fn ramp_ticks(&self) -> u32 {
        self.causes.ramp_ticks
    }

    /// How many poses were taken.
    pub(crate) fn poses_taken(&self) -> u64 {
        self.causes.taken
    }

    /// The last pose that was taken.
    pub(crate) fn pose(&self) -> Option<&PoseEvent> {
        self.causes.pose.as_ref()
    }

    /// How long before `at` the plan's time ran last.
    pub(crate) fn behind(&self, at: TimeNs) -> SpanNs {
        at.since(self.causes.run_at)
    }

    /// How far the plan's time goes until `at`, s.
    pub(crate) fn runs_s(&self, at: TimeNs) -> f64 {
        self.causes.rate * at.since(self.causes.run_at).seconds()
    }

    /// The rate of the plan's time: that of the last tick, or the cap at the start.
    pub(crate) fn rate(&self) -> f64 {
        self.causes.rate
    }

    /// True if a tick passed at this moment.
    pub(crate) fn ticked(&self, at: TimeNs) -> bool {
        self.causes.last_tick == at
    }

    /// True if the last pose came from another source than the one that the last tick saw.
    pub(crate) fn changed_source(&self) -> bool {
        self.causes.source != self.causes.pose.map(|pose| pose.session)
    }

    /// What the last tick saw: how far to the left, m, and the heading, rad.
    pub(crate) fn seen(&self) -> Option<(f64, f64)> {
        self.causes.seen
    }

    /// The plan times at which plans that wait begin, ns.
    pub(crate) fn waiting(&self) -> &[u64] {
        &self.causes.waiting
    }
}
