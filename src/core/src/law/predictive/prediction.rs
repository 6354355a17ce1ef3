//! A predicted motion over the horizon, and the program that improves it.
//!
//! The inputs are what is chosen; the motion follows from them, step by step on exact arcs. The program is the motion's
//! first-order change with the inputs and the cost's Gauss–Newton form about the prediction (Diehl, Bock and Schlöder, "A
//! real-time iteration scheme for nonlinear optimization in optimal feedback control", SIAM Journal on Control and
//! Optimization 43(5), 2005: the prediction goes on from one tick to the next, each tick improves it once).

use super::horizon::{Horizon, Knot};
use super::machine::{Machine, Shares};
use super::qp::{Course, Program, Stage};
use crate::geometry::{BodyVelocity, Direction, Pose};
use crate::math;

/// A predicted motion.
#[derive(Clone, Copy, Debug)]
pub(super) struct Prediction<const N: usize> {
    /// Inputs at the end of each step, within the limits of every step.
    pub(super) shares: [Shares; N],
    /// Poses at the end of each step.
    poses: [Pose; N],
    /// What it costs.
    pub(super) cost: f64,
}

/// One step's motion.
struct Move {
    /// Displacement, m.
    x_m: f64,
    y_m: f64,
    turn_rad: f64,
    /// Heading half-way.
    mean: Direction,
}

impl Move {
    fn new(heading_rad: f64, motion: BodyVelocity, seconds: f64) -> Self {
        let (length, turn_rad) = (motion.speed_m_s * seconds, motion.turn_rate_rad_s * seconds);
        let chord = length * math::sinc(0.5 * turn_rad);
        let mean = Direction::of(heading_rad + 0.5 * turn_rad);
        Self { x_m: chord * mean.cos, y_m: chord * mean.sin, turn_rad, mean }
    }

    fn from(&self, pose: Pose) -> Pose {
        Pose::new(pose.x_m + self.x_m, pose.y_m + self.y_m, pose.heading_rad + self.turn_rad)
    }
}

impl<const N: usize> Prediction<N> {
    pub(super) const BLANK: Self =
        Self { shares: [[0.0; 2]; N], poses: [Pose::new(0.0, 0.0, 0.0); N], cost: 0.0 };

    /// The motion of the inputs that `wanted` asks for at each step, as far as the limits allow. It is asked with the
    /// step's index, the pose and the inputs at the step's begin.
    pub(super) fn follow(
        &mut self,
        horizon: &Horizon<N>,
        machine: &Machine,
        mut wanted: impl FnMut(usize, Pose, Shares) -> Shares,
    ) {
        let (mut pose, mut shares) = (horizon.pose, horizon.shares);
        self.cost = 0.0;
        for (index, knot) in horizon.knots.iter().enumerate() {
            let next = machine.toward(shares, wanted(index, pose, shares), knot.change_s);
            let motion = machine.body(mean(shares, next, knot));
            pose = Move::new(pose.heading_rad, motion, knot.length_s).from(pose);
            self.cost += cost(knot, pose, next) + change_cost(knot, shares, next);
            shares = next;
            (self.shares[index], self.poses[index]) = (shares, pose);
        }
    }

    /// The program whose course are the deviations from this prediction that improve it.
    pub(super) fn linearise(&self, horizon: &Horizon<N>, machine: &Machine, program: &mut Program<N>) {
        let (mut pose, mut shares) = (horizon.pose, horizon.shares);
        let steps = program.iter_mut().zip(&horizon.knots).zip(self.poses.iter().zip(&self.shares));
        for ((stage, knot), (end, next)) in steps {
            change(stage, knot, machine, pose, mean(shares, *next, knot));
            weigh(stage, knot, *end, *next);
            weigh_change(stage, knot, shares, *next);
            bound(stage, knot, machine, shares, *next);
            (pose, shares) = (*end, *next);
        }
    }

    /// The motion of another prediction's inputs and a share of a course of the program made there.
    pub(super) fn improve(
        &mut self,
        from: &Self,
        by: &Course<N>,
        share: f64,
        horizon: &Horizon<N>,
        machine: &Machine,
    ) {
        self.follow(horizon, machine, |index, _, _| {
            let (old, change) = (from.shares[index], by.points[index].input);
            [old[0] + share * change[0], old[1] + share * change[1]]
        });
    }

    /// The motion of the same inputs `seconds` later, over a horizon that begins there; at its end the reference's.
    pub(super) fn shift(&mut self, horizon: &Horizon<N>, machine: &Machine, seconds: f64) {
        let old = self.shares;
        self.follow(horizon, machine, |index, _, _| {
            // The end of a step lies in the next one of the old grid, so many seconds after its begin.
            let Some(next) = horizon.knots.get(index + 1) else { return horizon.knots[index].shares };
            let (begin, end) = (old[index], old[index + 1]);
            let part = (seconds / next.length_s).min(1.0);
            [begin[0] + part * (end[0] - begin[0]), begin[1] + part * (end[1] - begin[1])]
        });
    }
}

/// The mean inputs of a step.
fn mean(begin: Shares, end: Shares, knot: &Knot) -> Shares {
    let part = knot.reach_s / knot.length_s;
    [begin[0] + part * (end[0] - begin[0]), begin[1] + part * (end[1] - begin[1])]
}

/// What the end of a step costs.
fn cost(knot: &Knot, pose: Pose, shares: Shares) -> f64 {
    let (pull, error) = slope(knot, pose);
    let effort = [shares[0] - knot.shares[0], shares[1] - knot.shares[1]];
    0.5 * (pull[0] * error[0] + pull[1] * error[1] + pull[2] * error[2])
        + 0.5 * knot.effort * (effort[0] * effort[0] + effort[1] * effort[1])
}

/// What a step's change of the inputs costs.
fn change_cost(knot: &Knot, begin: Shares, end: Shares) -> f64 {
    let [first, second] = rates_off(knot, begin, end);
    0.5 * knot.change * (first * first + second * second)
}

/// How far the rates are off the reference's.
fn rates_off(knot: &Knot, begin: Shares, end: Shares) -> Shares {
    core::array::from_fn(|side| (end[side] - begin[side]) / knot.length_s - knot.rates[side])
}

/// The pose cost's slope, and the error in the site frame.
fn slope(knot: &Knot, pose: Pose) -> ([f64; 3], [f64; 3]) {
    let (x, y, heading) =
        (pose.x_m - knot.pose.x_m, pose.y_m - knot.pose.y_m, pose.heading_rad - knot.pose.heading_rad);
    let [xx, xy, xh, yy, yh, hh] = knot.weight;
    let pull =
        [xx * x + xy * y + xh * heading, xy * x + yy * y + yh * heading, xh * x + yh * y + hh * heading];
    (pull, [x, y, heading])
}

/// How the end of a step changes with its begin and its mean inputs.
fn change(stage: &mut Stage, knot: &Knot, machine: &Machine, begin: Pose, mean: Shares) {
    let (motion, by_input) = (machine.body(mean), machine.slope(mean));
    let moved = Move::new(begin.heading_rad, motion, knot.length_s);
    let half = 0.5 * moved.turn_rad;
    let length = motion.speed_m_s * knot.length_s;
    // The chord is length · sinc(half), along the mean heading: by the length, and by the turn.
    let by_length = math::sinc(half);
    let by_turn = 0.5 * length * sinc_slope(half);
    let Direction { cos, sin } = moved.mean;
    stage.turn = [-moved.y_m, moved.x_m];
    stage.length_s = knot.length_s;
    stage.reach_s = knot.reach_s;
    let mean_slope = |side: usize| {
        let (length, turn) = (knot.length_s * by_input[0][side], knot.length_s * by_input[1][side]);
        let chord = by_length * length + by_turn * turn;
        [cos * chord - 0.5 * moved.y_m * turn, sin * chord + 0.5 * moved.x_m * turn, turn]
    };
    let (first, second) = (mean_slope(0), mean_slope(1));
    stage.input = core::array::from_fn(|row| [first[row], second[row]]);
}

fn weigh(stage: &mut Stage, knot: &Knot, end: Pose, shares: Shares) {
    stage.pose_weight = knot.weight;
    stage.pose_slope = slope(knot, end).0;
    stage.input_weight = [knot.effort, 0.0, knot.effort];
    stage.input_slope = core::array::from_fn(|side| knot.effort * (shares[side] - knot.shares[side]));
}

fn weigh_change(stage: &mut Stage, knot: &Knot, begin: Shares, end: Shares) {
    stage.rate_weight = [knot.change; 2];
    stage.rate_slope = rates_off(knot, begin, end).map(|off| knot.change * off);
}

/// The room that limits leave beside the prediction. The prediction itself is always within.
fn bound(stage: &mut Stage, knot: &Knot, machine: &Machine, begin: Shares, end: Shares) {
    let (down, up) = machine.reach(begin, knot.change_s);
    for side in 0..2 {
        let change = end[side] - begin[side];
        stage.rate_low[side] = ((down[side] - change) / knot.length_s).min(0.0);
        stage.rate_high[side] = ((up[side] - change) / knot.length_s).max(0.0);
        stage.input_low[side] = (-1.0 - end[side]).min(0.0);
        stage.input_high[side] = (1.0 - end[side]).max(0.0);
    }
}

/// The derivative of sin(x)/x.
fn sinc_slope(x: f64) -> f64 {
    if x.abs() < 0.1 {
        // Series; the first term left out is below x⁷/45360 < 3e-12.
        let square = x * x;
        return -x * (1.0 / 3.0 - square * (1.0 / 30.0 - square / 840.0));
    }
    (math::cos_sin(x).0 - math::sinc(x)) / x
}
