//! Following a plan: the plan's own clock, the ramps that end a run, settling on the final pose.

use super::params::Params;
use crate::geometry::BodyVelocity;
use crate::math;
use crate::plan::{Plan, Reference};
use crate::time::{SpanNs, TimeNs};
use crate::vehicle::{Vehicle, Wheels};

/// Below this speed (m/s) and turn rate (rad/s) a reference rests, and there is nothing to brake.
const RESTING: f64 = 1e-6;

/// State of a run; everything starts anew with a start.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Run {
    time: SpanNs,
    at: TimeNs,
    /// How fast the plan's time runs.
    rate: f64,
    rate_change_1_s: f64,
    cursor: usize,
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

impl Run {
    /// Begins at a plan time.
    pub(super) fn begin(&mut self, time: SpanNs, at: TimeNs) {
        *self = Self { time, at, rate: 1.0, ..Self::default() };
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
        self.rate
    }

    /// Lets the plan's time run up to `at`. Whole nanoseconds: at rate 1 no rounding adds up over hours.
    pub(super) fn advance(&mut self, at: TimeNs) {
        let elapsed = at.since(self.at);
        self.at = at;
        self.time = self.time
            + if self.rate == 1.0 {
                elapsed
            } else {
                SpanNs(math::round(elapsed.0 as f64 * self.rate) as u64)
            };
    }

    /// Slows the plan's time so that the reference brakes along its path with a share of the machine's deceleration.
    pub(super) fn ramp_down(&mut self, plan: &Plan, vehicle: &dyn Vehicle, share: f64, seconds: f64) {
        let reference = plan.at(self.place_s(plan), &mut self.cursor);
        let (speed, turn_rate) =
            (reference.velocity.speed_m_s.abs(), reference.velocity.turn_rate_rad_s.abs());
        self.rate_change_1_s = if speed > RESTING {
            -share * vehicle.path_decel_m_s2(reference.curvature_1_m) / speed
        } else if turn_rate > RESTING {
            -share * vehicle.pivot_decel_rad_s2().unwrap_or(f64::INFINITY) / turn_rate
        } else {
            f64::NEG_INFINITY
        };
        self.rate = (self.rate + self.rate_change_1_s * seconds).max(0.0);
        if self.rate == 0.0 {
            self.rate_change_1_s = 0.0;
            self.coming_to_rest = true;
        }
    }

    /// The reference at the plan's time.
    pub(super) fn reference(&mut self, plan: &Plan) -> Reference {
        let reference = plan.at(self.place_s(plan), &mut self.cursor);
        if self.rate == 1.0 { reference } else { reference.slowed(self.rate, self.rate_change_1_s) }
    }

    /// After the plan's end: decides whether what the law still wants is worth moving for.
    pub(super) fn settle(&mut self, wanted: BodyVelocity, since_end: SpanNs, params: &Params) {
        let small = wanted.speed_m_s.abs() < params.settle_speed_m_s
            && wanted.turn_rate_rad_s.abs() < params.settle_turn_rate_rad_s;
        let late = since_end >= params.settle_time;
        if !self.coming_to_rest && (small || late) {
            self.coming_to_rest = true;
            self.settled_late = !small;
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
