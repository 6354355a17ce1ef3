//! The true motion of the chassis under wheel commands.
//!
//! - A command begins to act exactly `dead_time_s` after it was given, and wheel speeds follow with their lag as exact
//!   exponentials: w(t) = w∞ + (w₀ − w∞) exp(−t/τ).
//! - While the wheels hold their speed the chassis moves on one exact arc, anchored where they last changed.
//! - While they change, the motion is made of substeps of [`SUBSTEP`], or a quarter of the shorter lag if that is less,
//!   counted from the last command that began to act. In each, the way travelled and the turn are the exact integrals,
//!   or Simpson's rule over the substep for the turn of a machine that steers and the way of a steered wheel. The
//!   chassis takes them as one arc, which is off by at most |v₀ω₁ − v₁ω₀| h²/12 a substep, in the order of a nanometre.
//! - Behind a drive map the plant knows the machine's own numbers: left is left, whatever the wires say.
//! - Wheels nearer than [`REACHED`] to what was commanded have reached it at the next substep.
//! - Asking changes nothing: the true pose of a moment does not depend, to the last bit, on which moments were asked
//!   for before.

use crate::spec::{ChassisSpec, RobotSpec};
use std::collections::VecDeque;
use std::sync::Arc;
use trackhold_core::geometry::{BodyVelocity, Direction, Pose};
use trackhold_core::keys::Problem;
use trackhold_core::math;
use trackhold_core::time::{SpanNs, TimeNs};
use trackhold_core::vehicle::{Vehicle, Wheels};
use trackhold_proto::message::WheelLayout;

/// Longest substep while the wheel speeds change.
pub const SUBSTEP: SpanNs = SpanNs(1_000_000);

/// Wheels this near to what was commanded have reached it, in the command's own units (rad/s, m/s, rad).
pub const REACHED: f64 = 1e-9;

/// Below this the wheels count as resting, in the command's own units (rad/s, m/s).
const REST: f64 = 1e-3;

/// Most numbers of a command that change by themselves.
const NUMBERS: usize = 3;

/// What the chassis does at a moment: a body velocity with a sideways part.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
struct Twist {
    body: BodyVelocity,
    side_m_s: f64,
}

/// Where everything is at a moment.
#[derive(Clone, Copy, Debug)]
struct State {
    at: TimeNs,
    pose: Pose,
    wheels: Wheels,
    travelled_m: f64,
}

/// The chassis and its wheels.
#[derive(Clone, Debug)]
pub struct Plant {
    vehicle: Arc<dyn Vehicle>,
    chassis: ChassisSpec,
    lags: Lags,
    dead_time: SpanNs,
    /// Commands that have not begun to act, with the moment when they will.
    pending: VecDeque<(TimeNs, Wheels)>,
    target: Wheels,
    /// Where the wheels last changed, or the last whole substep.
    anchor: State,
    /// The moment last asked for.
    now: State,
}

impl Plant {
    /// A machine at rest.
    ///
    /// # Errors
    /// If the specification does not hold for this machine.
    pub fn new(
        spec: &RobotSpec,
        vehicle: Arc<dyn Vehicle>,
        start: Pose,
        at: TimeNs,
    ) -> Result<Self, Vec<Problem>> {
        spec.check_for(&*vehicle)?;
        let state = State { at, pose: start, wheels: [0.0; 4], travelled_m: 0.0 };
        Ok(Self {
            lags: Lags::new(spec, vehicle.layout()),
            vehicle,
            chassis: spec.chassis,
            dead_time: SpanNs::from_seconds(spec.drive.dead_time_s),
            pending: VecDeque::new(),
            target: [0.0; 4],
            anchor: state,
            now: state,
        })
    }

    /// Gives a command at a moment; of several at one moment the last counts. A moment before the one last reached
    /// counts as that one. The numbers must be finite, which [`crate::drive::Drive`] sees to.
    pub fn command(&mut self, at: TimeNs, wheels: &Wheels) {
        debug_assert!(wheels.iter().all(|value| value.is_finite()), "{wheels:?}");
        self.advance(at);
        let acts = self.now.at + self.dead_time;
        let wheels = self.vehicle.to_machine(wheels);
        match self.pending.back_mut().filter(|(last, _)| *last == acts) {
            Some((_, last)) => *last = wheels,
            None => self.pending.push_back((acts, wheels)),
        }
        self.act();
    }

    /// Moves on to a moment, and returns the true pose of the chassis point then. A moment before the one last reached
    /// counts as that one.
    pub fn advance(&mut self, to: TimeNs) -> Pose {
        let to = to.max(self.now.at);
        while let Some(&(acts, _)) = self.pending.front().filter(|(acts, _)| *acts <= to) {
            self.run(acts);
            self.act();
        }
        self.run(to);
        self.now.pose
    }

    /// The moment last reached.
    pub fn at(&self) -> TimeNs {
        self.now.at
    }

    /// The true pose of the chassis point at that moment.
    pub fn pose(&self) -> Pose {
        self.now.pose
    }

    /// What the wheels really do at that moment, in the layout of a command.
    pub fn wheels(&self) -> Wheels {
        self.vehicle.to_drive(&self.now.wheels)
    }

    /// A command's speeds, with the steering left where it really is at that moment.
    pub fn with_steering_held(&self, wheels: &Wheels) -> Wheels {
        let (layout, real) = (self.vehicle.layout(), self.wheels());
        std::array::from_fn(|index| if layout.is_angle(index) { real[index] } else { wheels[index] })
    }

    /// The true body velocity at that moment, without what it slides sideways.
    pub fn velocity(&self) -> BodyVelocity {
        self.twist(&self.now.wheels).body
    }

    /// The way travelled up to that moment, backwards counted like forwards, m.
    pub fn travelled_m(&self) -> f64 {
        self.now.travelled_m
    }

    /// True if the wheels turn, or would by a command that has not begun to act.
    pub fn is_moving(&self) -> bool {
        let turning =
            |wheels: &Wheels| self.vehicle.zero(wheels).iter().zip(wheels).any(|(a, b)| (a - b).abs() > REST);
        turning(&self.now.wheels)
            || turning(&self.target)
            || self.pending.iter().any(|(_, wheels)| turning(wheels))
    }

    /// Lets the commands begin to act whose moment is the one reached.
    fn act(&mut self) {
        while let Some((_, wheels)) = self.pending.front().copied().filter(|(acts, _)| *acts <= self.now.at) {
            self.pending.pop_front();
            self.target = wheels;
            self.anchor = self.now;
            self.lags.reach_at_once(&mut self.anchor.wheels, &wheels);
            self.now = self.anchor;
        }
    }

    /// Moves on to a moment before which no command begins to act.
    fn run(&mut self, to: TimeNs) {
        while self.anchor.wheels != self.target && to.since(self.anchor.at) >= self.lags.substep {
            self.anchor = self.substep(self.lags.substep, self.lags.whole);
            if self
                .anchor
                .wheels
                .iter()
                .zip(&self.target)
                .all(|(wheel, target)| (wheel - target).abs() <= REACHED)
            {
                self.anchor.wheels = self.target;
            }
        }
        let rest = to.since(self.anchor.at);
        self.now = if self.anchor.wheels == self.target {
            self.moved(self.twist(&self.target), rest, self.target)
        } else {
            self.substep(rest, self.lags.decays(rest.seconds()))
        };
    }

    /// The state after a substep in which the wheels change.
    fn substep(&self, span: SpanNs, decays: [Decay; NUMBERS]) -> State {
        if span.0 == 0 {
            return self.anchor;
        }
        let along = |share: fn(&Decay) -> f64| {
            let mut wheels = self.target;
            for (index, decay) in decays.iter().enumerate() {
                wheels[index] += (self.anchor.wheels[index] - self.target[index]) * share(decay);
            }
            wheels
        };
        let end = along(|decay| decay.end);
        let mut mean = self.twist(&along(|decay| decay.mean));
        if self.vehicle.layout().is_steered() {
            let [first, middle, last] =
                [self.anchor.wheels, along(|decay| decay.middle), end].map(|wheels| self.twist(&wheels).body);
            let simpson =
                |value: fn(&BodyVelocity) -> f64| (value(&first) + 4.0 * value(&middle) + value(&last)) / 6.0;
            mean.body.turn_rate_rad_s = simpson(|body| body.turn_rate_rad_s);
            if self.vehicle.layout() == WheelLayout::SteeredWheel {
                mean.body.speed_m_s = simpson(|body| body.speed_m_s);
            }
        }
        self.moved(mean, span, end)
    }

    /// The state after moving from the anchor on one arc.
    fn moved(&self, twist: Twist, span: SpanNs, wheels: Wheels) -> State {
        let seconds = span.seconds();
        let mut pose = self.anchor.pose.moved(twist.body, seconds);
        if twist.side_m_s != 0.0 {
            // The chord of an arc: sinc of half the turn, along the mean heading; here its sideways part.
            let half = 0.5 * twist.body.turn_rate_rad_s * seconds;
            let chord = twist.side_m_s * seconds * math::sinc(half);
            let (x, y) = Direction::of(self.anchor.pose.heading_rad + half).out_of_frame(0.0, chord);
            pose = Pose { x_m: pose.x_m + x, y_m: pose.y_m + y, ..pose };
        }
        State {
            at: self.anchor.at + span,
            pose,
            wheels,
            travelled_m: self.anchor.travelled_m + twist.body.speed_m_s.abs() * seconds,
        }
    }

    /// What the chassis really does at these wheel speeds.
    fn twist(&self, wheels: &Wheels) -> Twist {
        let ChassisSpec {
            left_radius_error,
            right_radius_error,
            track_error,
            slip,
            side_drift,
            steer_offset_rad,
        } = self.chassis;
        let (left, right) = (1.0 + left_radius_error, 1.0 + right_radius_error);
        let mut wheels = *wheels;
        match self.vehicle.layout() {
            WheelLayout::LeftRight => (wheels[0], wheels[1]) = (wheels[0] * left, wheels[1] * right),
            // Its own controller turns the body velocity into wheel speeds with the stated radius and track.
            WheelLayout::Body => (wheels[0], wheels[1]) = (wheels[0] * left, wheels[1] * right),
            // The axle's differential gear: its midpoint has the mean of the rim speeds.
            WheelLayout::SpeedSteer => {
                (wheels[0], wheels[1]) = (wheels[0] * (0.5 * (left + right)), wheels[1] + steer_offset_rad);
            }
            WheelLayout::Ackermann => {
                let speed = wheels[0] * (0.5 * (left + right));
                wheels = [speed, wheels[1] + steer_offset_rad, wheels[2] + steer_offset_rad, 0.0];
            }
            // Its one wheel: left and right have the same error.
            WheelLayout::SteeredWheel => {
                (wheels[0], wheels[1]) = (wheels[0] * left, wheels[1] + steer_offset_rad);
            }
        }
        let mut body = self.vehicle.body(&self.vehicle.to_drive(&wheels)).scaled(1.0 - slip);
        body.turn_rate_rad_s /= 1.0 + track_error;
        Twist { body, side_m_s: side_drift * body.speed_m_s.abs() }
    }
}

/// The lag of each number of a command.
#[derive(Clone, Copy, Debug)]
struct Lags {
    /// Time constants, s; 0 for none.
    time_constant_s: [f64; NUMBERS],
    substep: SpanNs,
    /// The decays over a whole substep.
    whole: [Decay; NUMBERS],
}

/// What is left of the way to the target during a span.
#[derive(Clone, Copy, Debug)]
struct Decay {
    /// At the middle of the span.
    middle: f64,
    /// At its end.
    end: f64,
    /// On the mean over it.
    mean: f64,
}

impl Lags {
    fn new(spec: &RobotSpec, layout: WheelLayout) -> Self {
        let wheel = spec.drive.wheel_lag_s;
        let time_constant_s =
            std::array::from_fn(|index| if layout.is_angle(index) { spec.drive.steer_lag_s } else { wheel });
        let shortest = time_constant_s.into_iter().filter(|lag| *lag > 0.0).fold(f64::INFINITY, f64::min);
        let substep = SpanNs::from_seconds(0.25 * shortest).min(SUBSTEP);
        let mut lags = Self { time_constant_s, substep, whole: [Decay::NONE; NUMBERS] };
        lags.whole = lags.decays(substep.seconds());
        lags
    }

    fn decays(&self, seconds: f64) -> [Decay; NUMBERS] {
        self.time_constant_s.map(|time_constant_s| Decay::over(seconds, time_constant_s))
    }

    /// Numbers without a lag take their target at once.
    fn reach_at_once(&self, wheels: &mut Wheels, target: &Wheels) {
        for (index, target) in target.iter().enumerate() {
            if self.time_constant_s.get(index).is_none_or(|lag| *lag == 0.0) {
                wheels[index] = *target;
            }
        }
    }
}

impl Decay {
    const NONE: Self = Self { middle: 0.0, end: 0.0, mean: 0.0 };

    /// First-order lag: exp(−t/τ), whose mean over a span T is (1 − exp(−T/τ)) τ/T.
    fn over(seconds: f64, time_constant_s: f64) -> Self {
        if time_constant_s == 0.0 || seconds == 0.0 {
            return Self::NONE;
        }
        let end = math::exp(-seconds / time_constant_s);
        Self {
            middle: math::exp(-0.5 * seconds / time_constant_s),
            end,
            mean: (1.0 - end) * time_constant_s / seconds,
        }
    }
}

#[cfg(test)]
#[path = "plant_tests.rs"]
mod tests;
