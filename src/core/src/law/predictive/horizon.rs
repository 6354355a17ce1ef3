//! What lies ahead at one tick: the grid of the prediction, the reference at its points, and what errors there cost.
//!
//! The first step is the tick's own, so that its command is held to the very limits of this tick; the others have the
//! law's own length. Within a step an input changes at one rate. The command goes on tick by tick, in stairs: the first
//! of them is taken at once, so that the mean over a step of length h is the input at its begin and (h + T)/2 times the
//! rate.

use super::gains::Weights;
use super::machine::{Machine, Shares};
use super::tail;
use crate::geometry::{Direction, Pose};
use crate::law::Input;
use crate::math;
use crate::plan::Reference;

/// A step, and the reference at its end.
#[derive(Clone, Copy, Debug)]
pub(super) struct Knot {
    pub(super) length_s: f64,
    pub(super) reach_s: f64,
    /// The time in which the step's change has to be possible, s.
    pub(super) change_s: f64,
    /// The reference's pose, its heading without jumps.
    pub(super) pose: Pose,
    /// The reference's inputs.
    pub(super) shares: Shares,
    /// Weight of the pose's deviation from the reference, in the site frame: xx, xy, xφ, yy, yφ, φφ.
    pub(super) weight: [f64; 6],
    /// Weight of the inputs' deviation from the reference's.
    pub(super) effort: f64,
    /// How the reference's inputs change in the step, as far as the machine's can, 1/s.
    pub(super) rates: Shares,
    /// Weight of the rates' deviation from those.
    pub(super) change: f64,
}

/// The horizon of one tick.
#[derive(Clone, Debug)]
pub(super) struct Horizon<const N: usize> {
    pub(super) knots: [Knot; N],
    /// Where the machine is; its heading goes with the references'.
    pub(super) pose: Pose,
    /// The reference's heading now; its heading at the first point goes on from it.
    pub(super) heading_rad: f64,
    /// The last command.
    pub(super) shares: Shares,
}

impl<const N: usize> Horizon<N> {
    pub(super) const BLANK: Self = {
        let pose = Pose::new(0.0, 0.0, 0.0);
        let (shares, rates, weight) = ([0.0; 2], [0.0; 2], [0.0; 6]);
        let knot = Knot {
            length_s: 0.0,
            reach_s: 0.0,
            change_s: 0.0,
            pose,
            shares,
            rates,
            weight,
            effort: 0.0,
            change: 0.0,
        };
        Self { knots: [knot; N], pose, heading_rad: 0.0, shares }
    };

    /// Looks ahead. `heading_error_rad` is the error's heading, by whole turns as the law has followed it.
    pub(super) fn look(
        &mut self,
        input: &Input<'_>,
        heading_error_rad: f64,
        machine: &Machine,
        weights: &Weights,
        period_s: f64,
    ) {
        self.pose = input.pose;
        self.shares = machine.of_last(&input.wheels, input.motion);
        self.heading_rad = input.pose.heading_rad - heading_error_rad;
        let mut heading = self.heading_rad;
        let mut at_s = 0.0;
        let (mut shares, mut wheels) = machine.of_reference(&input.reference, &input.wheels);
        let step_s = weights.step_s.max(period_s);
        let mut reference = input.reference;
        for (index, knot) in self.knots.iter_mut().enumerate() {
            let length_s = if index == 0 { period_s } else { step_s };
            at_s += length_s;
            reference = input.ahead.reference(at_s);
            heading += math::wrap(reference.pose.heading_rad - heading);
            (knot.shares, wheels) = machine.of_reference(&reference, &wheels);
            knot.rates = machine.rates(shares, knot.shares, length_s);
            shares = knot.shares;
            knot.length_s = length_s;
            knot.reach_s = 0.5 * (length_s + period_s);
            knot.change_s = if index == 0 { input.seconds } else { length_s };
            knot.pose = Pose { heading_rad: heading, ..reference.pose };
            // Each point stands for half of the steps beside it.
            let until_next = if index + 1 < N { step_s } else { 0.0 };
            let duration = 0.5 * (length_s + until_next);
            knot.effort = weights.effort * duration;
            knot.change = weights.change * length_s;
            let [along, cross, heading] = weights.error;
            let weight = [along, 0.0, 0.0, cross, 0.0, heading].map(|weight| weight * duration);
            knot.weight = out_of_frame(&weight, reference.direction);
        }
        self.add_tail(&reference, machine, weights, step_s);
    }

    fn add_tail(&mut self, end: &Reference, machine: &Machine, weights: &Weights, step_s: f64) {
        let effort = machine.effort().map(|of_share| weights.tail_effort * of_share);
        let weights = tail::Weights { error: weights.error, effort };
        let tail = out_of_frame(&tail::weight(end.velocity, step_s, &weights), end.direction);
        if let Some(last) = self.knots.last_mut() {
            last.weight.iter_mut().zip(tail).for_each(|(weight, more)| *weight += more);
        }
    }
}

/// A weight in a frame that points this way, in the site frame.
fn out_of_frame(weight: &[f64; 6], Direction { cos, sin }: Direction) -> [f64; 6] {
    let [xx, xy, xh, yy, yh, hh] = *weight;
    let both = cos * sin;
    [
        cos * cos * xx - 2.0 * both * xy + sin * sin * yy,
        both * (xx - yy) + (cos * cos - sin * sin) * xy,
        cos * xh - sin * yh,
        sin * sin * xx + 2.0 * both * xy + cos * cos * yy,
        sin * xh + cos * yh,
        hh,
    ]
}
