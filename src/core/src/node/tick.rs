//! One control period: guards, reference, law, limits, record.

use super::ahead::PlanAhead;
use super::mode::Trigger;
use super::pace::Bearing;
use super::{Node, Sink};
use crate::geometry::{BodyVelocity, Pose, TrackingError};
use crate::law::Input;
use crate::plan::Reference;
use crate::time::{SpanNs, TimeNs};
use crate::vehicle::{Limited, limit};
use trackhold_proto::journal::{Body, ModeChange, TickRecord, flag};
use trackhold_proto::words::{Cause, Mode, Regime};

impl Node {
    pub(super) fn tick(&mut self, sink: &mut impl Sink) {
        let at = self.at;
        let seconds = self.step_seconds(at);
        let mut record = TickRecord::blank(self.vehicle.layout());
        record.flags = self.poses.take_warnings();
        let pose = self.see_pose(at, seconds, &mut record);
        let (mut change, mut taken_over) = (None, false);
        match self.mode {
            Mode::Standby | Mode::EmergencyStop => self.wheels = self.vehicle.zero(&self.wheels),
            Mode::ProtectiveStop => self.wheels = self.protective_wheels(at),
            Mode::Tracking | Mode::ControlledStop => {
                self.run.advance(at);
                taken_over = self.take_over(sink);
                change = self.follow_plan(at, seconds, pose, &mut record)
            }
        }
        record.tick = self.ticks;
        record.at_ns = at.0;
        record.mode = self.mode;
        record.cause = self.cause;
        record.start_number = self.numbers.current;
        record.plan_time_ns = self.run.plan_time().0;
        record.plan_rate = self.run.rate();
        record.speed_cap = self.run.cap();
        record.command = self.command();
        self.note_margin(&mut record);
        self.carrier.commanded(at, self.vehicle.body(&self.wheels));
        self.ticks += 1;
        self.last_tick = Some(at);
        self.emit(Body::Tick(record), sink);
        if taken_over {
            self.emit_loaded(sink);
        }
        self.emit_change(change, sink);
    }

    /// Goes over to the plan whose plan time was reached, if there is one.
    fn take_over(&mut self, sink: &mut impl Sink) -> bool {
        let Some(next) = self.successors.due(self.run.plan_time(), sink) else { return false };
        if let Some(old) = self.plan.replace(next) {
            sink.retire(old);
        }
        self.run.change_plan();
        true
    }

    /// The time over which the limits count: a late tick may not step farther than a punctual one, an early one only as
    /// far as its time allows. Ticks fall on whole nanoseconds, so one that is early by less than that is punctual.
    fn step_seconds(&self, at: TimeNs) -> f64 {
        let period = self.params.period_s();
        let Some(last) = self.last_tick else { return period };
        let elapsed = at.since(last);
        if (elapsed + SpanNs(1)).seconds() >= period { period } else { elapsed.seconds() }
    }

    /// Notes the pose in the record, and returns it if it is fresh.
    fn see_pose(&mut self, at: TimeNs, seconds: f64, record: &mut TickRecord) -> Option<Pose> {
        let Some(estimate) = self.poses.estimate() else {
            record.flags |= flag::POSE_STALE;
            return None;
        };
        let pose = self.carrier.at(at, estimate.pose, seconds, &self.params);
        record.flags |= if self.carrier.is_slewing() { flag::POSE_SLEWED } else { 0 };
        (record.x_m, record.y_m, record.heading_rad) = (pose.x_m, pose.y_m, pose.heading_rad);
        record.pose_age_ns = estimate.age(at).0;
        record.clock_offset_ns = estimate.clock_offset_ns;
        record.flags |= flag::HAS_POSE;
        if estimate.staleness(at) > self.params.pose_timeout {
            record.flags |= flag::POSE_STALE;
            return None;
        }
        Some(pose)
    }

    fn follow_plan(
        &mut self,
        at: TimeNs,
        seconds: f64,
        pose: Option<Pose>,
        record: &mut TickRecord,
    ) -> Option<ModeChange> {
        let Some(pose) = pose else { return self.guard_protective(at, Cause::StalePose) };
        if self.carrier.take_too_great(&self.params).is_some() {
            return self.guard_protective(at, Cause::PoseJump);
        }
        match self.control(at, pose, seconds, record) {
            Ok(body) => self.end_of_run(body, record),
            Err(cause) => self.guard_protective(at, cause),
        }
    }

    /// Chooses the regime, asks its feedback and applies the limits; the body velocity that the new command amounts to, or
    /// why the machine has to stop.
    fn control(
        &mut self,
        at: TimeNs,
        pose: Pose,
        seconds: f64,
        record: &mut TickRecord,
    ) -> Result<BodyVelocity, Cause> {
        let since_end = self.past_end().filter(|_| self.mode == Mode::Tracking);
        let Self {
            plan: Some(plan), successors, run, feedback, carrier, vehicle, params, wheels, mode, ..
        } = self
        else {
            unreachable!("a start needs a plan, and none is taken away while one is followed")
        };
        let literal = run.literal(plan);
        let error = TrackingError::between(pose, literal.pose, literal.direction);
        feedback.rely_on(carrier.rested());
        record.regime = feedback.choose(literal.velocity, error.heading_rad, since_end.is_some());
        let holding = record.regime == Regime::Realigning;
        let bearing = Bearing { literal: &literal, vehicle: &**vehicle, params, seconds };
        let reference = run.pace(&bearing, &error, (*mode == Mode::ControlledStop, holding), record);
        let ahead = PlanAhead::new(plan, successors, run);
        let input = Input::new(reference, &ahead, pose, (*wheels, vehicle.body(wheels)), seconds);
        fill_reference(record, &input);
        let Ok(mut wanted) = feedback.control(at, &input) else {
            record.flags |= flag::OUTSIDE_LAW_DOMAIN;
            return Err(Cause::OutsideLawDomain);
        };
        record.flags |= if wanted.fallback { flag::LAW_FALLBACK } else { 0 };
        if let Some(since_end) = since_end {
            record.flags |= flag::SETTLING;
            run.settle(feedback.is_settled(), since_end, params);
        }
        if run.coming_to_rest {
            wanted = BodyVelocity::ZERO.into();
        }
        let wanted = wanted.velocity;
        if !wanted.is_finite() {
            record.flags |= flag::LAW_NOT_FINITE;
            return Err(Cause::LawNotFinite);
        }
        let limited = limit(&**vehicle, wanted, reference.rest_curvature_1_m, wheels, seconds);
        feedback.settle(&input, limited.speed_limited || limited.step_limited, params.period_s());
        *wheels = limited.wheels;
        fill_wanted(record, wanted, &limited);
        Ok(limited.body)
    }

    /// How long ago a closed plan ended.
    fn past_end(&self) -> Option<SpanNs> {
        let plan = self.plan.as_deref().filter(|plan| !plan.is_open())?;
        let (reached, end) = (self.run.plan_time(), plan.end());
        // A plan that waits then goes on within a microsecond, see `successors`.
        (reached >= end && self.successors.count() == 0).then(|| reached - end)
    }

    /// Whether the run is over, or an open plan has run dry.
    fn end_of_run(&mut self, body: BodyVelocity, record: &mut TickRecord) -> Option<ModeChange> {
        if self.run.coming_to_rest && body.is_zero() {
            let cause = match (self.mode, self.run.settled_late) {
                (Mode::ControlledStop, _) => Cause::RampEnded,
                (_, true) => Cause::NotSettled,
                (_, false) => Cause::PlanEnded,
            };
            return self.change(Trigger::CameToRest, cause);
        }
        let dry =
            self.plan.as_deref().is_some_and(|plan| plan.is_open() && self.run.plan_time() >= plan.end());
        if dry && self.successors.count() == 0 && self.mode == Mode::Tracking {
            record.flags |= flag::PLAN_DRY;
            return self.change(Trigger::GuardControlled, Cause::PlanRanDry);
        }
        None
    }

    fn guard_protective(&mut self, at: TimeNs, cause: Cause) -> Option<ModeChange> {
        let change = self.change(Trigger::GuardProtective, cause);
        if self.params.protective_ramp > SpanNs(0) {
            self.run.begin_ramp(at, self.wheels);
        }
        self.wheels = self.protective_wheels(at);
        change
    }

    fn protective_wheels(&mut self, at: TimeNs) -> crate::vehicle::Wheels {
        self.run.protective(at, &*self.vehicle, &self.wheels, &self.params)
    }
}

fn fill_reference(record: &mut TickRecord, input: &Input<'_>) {
    let Reference { pose, velocity, .. } = input.reference;
    record.flags |= flag::HAS_REFERENCE;
    (record.ref_x_m, record.ref_y_m, record.ref_heading_rad) = (pose.x_m, pose.y_m, pose.heading_rad);
    record.ref_speed_m_s = velocity.speed_m_s;
    record.ref_turn_rate_rad_s = velocity.turn_rate_rad_s;
    record.ref_curvature_1_m = input.reference.curvature_1_m;
    record.ref_accel_m_s2 = input.reference.accel_m_s2;
    record.along_error_m = input.error.along_m;
    record.cross_error_m = input.error.cross_m;
    record.heading_error_rad = input.error.heading_rad;
}

fn fill_wanted(record: &mut TickRecord, wanted: BodyVelocity, limited: &Limited) {
    record.wanted_speed_m_s = wanted.speed_m_s;
    record.wanted_turn_rate_rad_s = wanted.turn_rate_rad_s;
    record.flags |= if limited.speed_limited { flag::SPEED_LIMITED } else { 0 };
    record.flags |= if limited.step_limited { flag::STEP_LIMITED } else { 0 };
}
