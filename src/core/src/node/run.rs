//! Following a plan: the plan's own clock, the ramps that end a run, settling on the final pose.

use super::pace::{Bearing, Pace};
use super::params::Params;
use crate::geometry::TrackingError;
use crate::math;
use crate::plan::{Plan, Reference};
use crate::time::{SpanNs, TimeNs};
use crate::vehicle::{Vehicle, Wheels};
use trackhold_proto::journal::{TickRecord, flag};

/// State of a run; everything starts anew with a start.
#[derive(Clone, Copy, Debug)]
pub(super) struct Run {
    time: SpanNs,
    at: TimeNs,
    pace: Pace,
    cursor: usize,
    /// The operator's cap on the plan time's rate; it outlasts the run.
    cap: f64,
    /// True until the first tick of the run has passed.
    fresh: bool,
    /// The law has no more say: zero is wanted until the machine rests.
    pub(super) coming_to_rest: bool,
    /// Settling took longer than allowed.
    pub(super) settled_late: bool,
    ramp: Option<Ramp>,
}

/// A protective stop's bounded ramp.
#[derive(Clone, Copy, Debug)]
struct Ramp {
    from: TimeNs,
    wheels: Wheels,
}

impl Default for Run {
    fn default() -> Self {
        Self {
            time: SpanNs(0),
            at: TimeNs(0),
            pace: Pace::LITERAL,
            cursor: 0,
            cap: 1.0,
            fresh: true,
            coming_to_rest: false,
            settled_late: false,
            ramp: None,
        }
    }
}

impl Run {
    /// Begins at a plan time.
    pub(super) fn begin(&mut self, time: SpanNs, at: TimeNs) {
        let cap = self.cap;
        *self = Self { time, at, cap, pace: Pace { rate: cap, change_1_s: 0.0 }, ..Self::default() };
    }

    /// The operator's cap on the plan time's rate.
    pub(super) fn cap(&self) -> f64 {
        self.cap
    }

    /// Caps the plan time's rate from now on.
    pub(super) fn set_cap(&mut self, share: f64) {
        self.cap = share;
    }

    /// Goes on with another plan on the same clock.
    pub(super) fn change_plan(&mut self) {
        self.cursor = 0;
    }

    /// The place on the plan's own clock, which begins with the plan.
    fn place_s(&self, plan: &Plan) -> f64 {
        (self.time - plan.begin()).seconds()
    }

    pub(super) fn plan_time(&self) -> SpanNs {
        self.time
    }

    /// The segment of the last lookup.
    pub(super) fn cursor(&self) -> usize {
        self.cursor
    }

    pub(super) fn rate(&self) -> f64 {
        self.pace.rate
    }

    /// Lets the plan's time run up to `at`. Whole nanoseconds: at rate 1 no rounding adds up over hours.
    pub(super) fn advance(&mut self, at: TimeNs) {
        let elapsed = at.since(self.at);
        self.at = at;
        self.time = self.time
            + if self.pace.rate == 1.0 {
                elapsed
            } else {
                SpanNs(math::round(elapsed.0 as f64 * self.pace.rate) as u64)
            };
    }

    /// The reference at the plan's time, its time running at rate 1.
    pub(super) fn literal(&mut self, plan: &Plan) -> Reference {
        plan.at(self.place_s(plan), &mut self.cursor)
    }

    /// Sets the pace of a tick and returns the reference at it. `stopping`: on a controlled stop's ramp; `holding`: the
    /// machine realigns.
    pub(super) fn pace(
        &mut self,
        bearing: &Bearing<'_>,
        error: &TrackingError,
        (stopping, holding): (bool, bool),
        record: &mut TickRecord,
    ) -> Reference {
        let params = bearing.params;
        if stopping {
            self.pace = self.pace.ramp_down(bearing);
            self.coming_to_rest |= self.pace.rate == 0.0;
        } else if holding && params.min_plan_rate < 1.0 {
            let rate = if self.fresh { 0.0 } else { self.pace.rate };
            self.pace = Pace { rate, ..self.pace }.towards(0.0, bearing);
        } else {
            let allowed = bearing.allowed_by_lag(error);
            record.flags |= if allowed < 1.0 { flag::PLAN_SLOWED } else { 0 };
            self.pace = self.pace.towards(allowed.min(self.cap), bearing);
        }
        self.fresh = false;
        let Pace { rate, change_1_s } = self.pace;
        if rate == 1.0 && change_1_s == 0.0 {
            *bearing.literal
        } else {
            bearing.literal.slowed(rate, change_1_s)
        }
    }

    /// After the plan's end: the run is over once the machine has settled, or may not settle any longer.
    pub(super) fn settle(&mut self, settled: bool, since_end: SpanNs, params: &Params) {
        let late = since_end >= params.settle_time;
        if !self.coming_to_rest && (settled || late) {
            self.coming_to_rest = true;
            self.settled_late = !settled;
        }
    }

    /// Begins a protective stop's ramp from the last command.
    pub(super) fn begin_ramp(&mut self, from: TimeNs, wheels: Wheels) {
        self.ramp = Some(Ramp { from, wheels });
    }

    pub(super) fn cancel_ramp(&mut self) {
        self.ramp = None;
    }

    /// The command of a protective stop: zero, or on the way there along a straight ramp.
    pub(super) fn protective(
        &mut self,
        at: TimeNs,
        vehicle: &dyn Vehicle,
        last: &Wheels,
        params: &Params,
    ) -> Wheels {
        let zero = vehicle.zero(last);
        let Some(ramp) = self.ramp else { return zero };
        let elapsed = at.since(ramp.from);
        if elapsed >= params.protective_ramp {
            self.ramp = None;
            return zero;
        }
        let left = 1.0 - elapsed.seconds() / params.protective_ramp.seconds();
        let mut wheels = zero;
        for ((wheel, zero), begin) in wheels.iter_mut().zip(&zero).zip(&ramp.wheels) {
            *wheel = zero + left * (begin - zero);
        }
        wheels
    }
}
