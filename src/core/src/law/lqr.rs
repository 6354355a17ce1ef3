//! Time-varying linear-quadratic regulator: the gains that cost least over the motion ahead (textbook; e.g. Anderson and
//! Moore, Optimal Control: Linear Quadratic Methods, 1990), on the robot-frame error model of Kanayama's and the linear
//! design.
//!
//! In each tick the Riccati recursion runs backward over the references ahead in steps of its own, each about the motion in
//! its middle; the first stage is the tick itself, so that the gain is the best one to hold for just that. Beyond the horizon
//! the motion is reckoned to go on for ten seconds or somewhat more at its mean speed and turn rate over the horizon. v = v_d cos e_φ + u_1, ω = ω_d + u_2,
//! u = −K e. At rest the heading and the along-track error are still corrected; the cross-track error is as soon as motion
//! lies ahead, by a heading that anticipates it.
//!
//! Before a rest the lateral gains rise, with the default weights to about twice: what is left at the end stays.
//!
//! Steady on a line: the lateral gains tend to √(q_cross/r) and √(q_heading/r + 2 |v| √(q_cross/r)), r = r_turn_rate.

use super::integral::{self, CrossIntegral};
use super::riccati::{Gain, Held, Weights};
use super::{Context, Domain, Input, Kind, Law, Machines, Wanted};
use crate::geometry::BodyVelocity;
use crate::keys::{Bound, Key, Problem, Values};
use crate::math;
use alloc::boxed::Box;
use alloc::format;
use alloc::vec;
use alloc::vec::Vec;

/// The most steps of a horizon: what bounds a tick's work.
const MOST_STEPS: usize = 200;
/// So long at least the motion is reckoned to go on beyond the horizon, s: long enough for an error to fall, and for a
/// reference that comes to rest the time in which an error that is left there goes on costing.
const TAIL_S: f64 = 10.0;

pub(super) const KIND: Kind = Kind {
    name: "lqr",
    gains: &[
        Key::with_default(
            "q_along",
            "1/m²",
            4.0,
            Bound::positive(1e6),
            "cost of the along-track error, beside r_speed",
        ),
        Key::with_default(
            "q_cross",
            "1/m²",
            10.0,
            Bound::positive(1e6),
            "cost of the cross-track error, beside r_turn_rate; more of it steers harder",
        ),
        Key::with_default(
            "q_heading",
            "1/rad²",
            1.0,
            Bound::within(0.0, 1e6),
            "cost of the heading error, beside r_turn_rate; more of it damps, and lets the cross-track error fall slower",
        ),
        Key::with_default(
            "r_speed",
            "s²/m²",
            1.0,
            Bound::within(1e-3, 1e6),
            "cost of a speed other than the reference's",
        ),
        Key::with_default(
            "r_turn_rate",
            "s²/rad²",
            1.0,
            Bound::within(1e-3, 1e6),
            "cost of a turn rate other than the reference's",
        ),
        Key::with_default(
            "horizon_s",
            "s",
            2.0,
            Bound::within(0.1, 20.0),
            "how far ahead changes of the motion count; no longer than it takes an error to fall is of use",
        ),
        Key::with_default(
            "step_s",
            "s",
            0.05,
            Bound::within(0.005, 0.5),
            "the horizon's steps; a longer one takes less time in the tick and blurs changes of the motion",
        ),
        integral::KEY,
    ],
    design: Some(|design| {
        // Steady on a line at the design speed, r = 1: v K_y = a² and K_φ = 2ζa.
        let (natural, zeta) = (design.bandwidth_rad_s, design.damping);
        let cross = design.per_metre_1_m * natural;
        vec![
            ("q_along", natural * natural),
            ("q_cross", cross * cross),
            ("q_heading", natural * natural * (4.0 * zeta * zeta - 2.0)),
            ("r_speed", 1.0),
            ("r_turn_rate", 1.0),
        ]
    }),
    machines: Machines::All,
    build: Lqr::build,
};

#[derive(Debug)]
struct Lqr {
    weights: Weights,
    step_s: f64,
    period_s: f64,
    integral: CrossIntegral,
    /// Beyond the horizon lie 2^doublings steps.
    doublings: u32,
    /// The motion in the middle of each step of the horizon.
    motions: Vec<BodyVelocity>,
}

impl Lqr {
    fn build(gains: &Values, context: &Context) -> Result<Box<dyn Law>, Vec<Problem>> {
        let (horizon, step) = (gains.get("horizon_s"), gains.get("step_s"));
        // A horizon of whole steps may come out a rounding error longer.
        let steps = math::ceil(horizon / step - 1e-9) as usize;
        if steps > MOST_STEPS {
            let longest = MOST_STEPS as f64 * step;
            let what = format!(
                "{horizon} s are {steps} steps of {step} s; at most {MOST_STEPS} fit a tick: give at most {longest} s, or longer steps"
            );
            return Err(vec![Problem::new("horizon_s", what)]);
        }
        let weights = Weights {
            error: [gains.get("q_along"), gains.get("q_cross"), gains.get("q_heading")],
            effort: [gains.get("r_speed"), gains.get("r_turn_rate")],
        };
        let top = context.vehicle.top_speed_m_s();
        let (k_y, k_heading) = steady_lateral(&weights, top);
        // The gains are those of time: per metre at the speed v they are K_y/v and K_φ/v, least at top speed.
        let integral = CrossIntegral::new(gains.get("k_i"), k_y * k_heading / (top * top))?;
        Ok(Box::new(Self {
            weights,
            step_s: step,
            period_s: context.period_s,
            integral,
            doublings: doublings(step),
            motions: vec![BodyVelocity::ZERO; steps],
        }))
    }

    /// The gain to hold in this tick.
    fn gain(&mut self, input: &Input<'_>) -> Gain {
        let Self { weights, step_s, period_s, doublings, motions, .. } = self;
        let mut mean = BodyVelocity::ZERO;
        for (index, motion) in motions.iter_mut().enumerate() {
            let middle_s = *period_s + (index as f64 + 0.5) * *step_s;
            *motion = input.ahead.reference(middle_s).velocity;
            mean.speed_m_s += motion.speed_m_s.abs();
            mean.turn_rate_rad_s += motion.turn_rate_rad_s;
        }
        let mut cost = Held::new(tail(mean, motions), *step_s).repeated(weights, *doublings);
        for motion in motions.iter().rev() {
            cost = Held::new(*motion, *step_s).backward(&cost, weights).0;
        }
        let now = input.ahead.reference(0.5 * *period_s).velocity;
        Held::new(now, *period_s).backward(&cost, weights).1
    }
}

/// How often a step is doubled to last at least [`TAIL_S`].
fn doublings(step_s: f64) -> u32 {
    let (mut count, mut reached_s) = (0, step_s);
    while reached_s < TAIL_S {
        reached_s *= 2.0;
        count += 1;
    }
    count
}

/// The motion beyond the horizon, from the sums over it: its mean, the way that it ends.
fn tail(sums: BodyVelocity, motions: &[BodyVelocity]) -> BodyVelocity {
    let count = motions.len() as f64;
    let speed = sums.speed_m_s / count;
    let backward = motions.last().is_some_and(|motion| motion.speed_m_s.is_sign_negative());
    BodyVelocity {
        speed_m_s: if backward { -speed } else { speed },
        turn_rate_rad_s: sums.turn_rate_rad_s / count,
    }
}

/// The steady gains across the path on a line in continuous time: 1/(m s) and 1/s.
fn steady_lateral(weights: &Weights, speed_m_s: f64) -> (f64, f64) {
    let effort = weights.effort[1];
    let k_y = math::sqrt(weights.error[1] / effort);
    (k_y, math::sqrt(weights.error[2] / effort + 2.0 * speed_m_s.abs() * k_y))
}

impl Law for Lqr {
    fn control(&mut self, input: &Input<'_>) -> Wanted {
        let gain = self.gain(input);
        let wanted = input.reference.velocity;
        let (e_x, e_y) = input.robot_frame_error_m();
        let e_heading = -input.error.heading_rad;
        let feedback = gain.map(|row| -(row[0] * e_x + row[1] * e_y + row[2] * e_heading));
        let cos = input.reference.direction.relative_to(input.direction).cos;
        BodyVelocity {
            speed_m_s: wanted.speed_m_s * cos + feedback[0],
            turn_rate_rad_s: self.integral.added_to(wanted.turn_rate_rad_s + feedback[1], input),
        }
        .into()
    }

    fn bandwidth_rad_s(&self, speed_m_s: f64) -> f64 {
        let (k_y, k_heading) = steady_lateral(&self.weights, speed_m_s);
        // Overdamped, the heading's pole is the faster one.
        math::sqrt(speed_m_s.abs() * k_y).max(0.5 * k_heading)
    }

    fn domain(&self) -> Domain {
        // Designed about zero: past a right angle the feed-forward v_d cos e_φ drives backwards.
        Domain { max_heading_error_rad: math::FRAC_PI_2, ..Domain::EVERYWHERE }
    }

    fn settle(&mut self, input: &Input<'_>, limited: bool, seconds: f64) {
        self.integral.settle(input, limited, seconds);
    }

    fn reset(&mut self, _motion: BodyVelocity) {
        self.integral.reset();
    }
}

#[cfg(test)]
mod tests;
