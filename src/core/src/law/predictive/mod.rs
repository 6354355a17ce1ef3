//! Prediction within the limits: each tick the inputs over a horizon of about two seconds are chosen so that the error
//! ahead costs least, with what the machine can do as bounds; the first of them is the command.
//!
//! The cost is ∫ e_x² + w_y e_y² + w_φ e_φ² + r |u − u_d|² + c |u' − u_d'|² dt in the reference's frame, and after the
//! horizon's end what the linear-quadratic law would still pay (`tail`). The motion is the nonlinear one: each tick it is
//! predicted anew from the inputs of the tick before, the cost is made quadratic about it, and the program of [`qp`] is
//! solved once. A change that does not lower the true cost is halved, and left out at the end: the cost never grows from
//! one iterate to the next.
//!
//! The horizon was set by measuring: from 2.8 rad off, the integral of the errors' squares is 1.28 times the least with
//! steps of 0.05 s and 1.0001 times with 0.1 s; a horizon of one second does not see that turning round at once pays.
//!
//! Where the law has no prediction to go on from it improves two simple motions a few times and takes the cheaper: the one
//! under the law [`FALLBACK`], and the one that turns on the spot first. Later a simple motion takes over whenever it is
//! cheaper. Where the program is not solved within the iterations allowed, the tick is left to [`FALLBACK`], with its gains
//! as by default, and says so.
//!
//! What a limit on the acceleration across the path takes off is not predicted.
//!
//! | file | what it holds |
//! | --- | --- |
//! | `gains` | the gains and the weights |
//! | `machine` | inputs in shares of their greatest, and how far a step takes them |
//! | `horizon` | the grid, the reference ahead, the weights |
//! | `tail` | the cost after the horizon's end |
//! | `begin` | motions to begin from |
//! | `prediction` | a motion over the horizon, its cost and its program |
//! | `qp` | the bounded program |

mod begin;
mod gains;
mod horizon;
mod machine;
mod prediction;
pub mod qp;
mod tail;
#[cfg(test)]
mod tests;

use super::{Context, Domain, Input, Kind, Law, Machines, Wanted};
use crate::geometry::BodyVelocity;
use crate::keys::{Problem, Values};
use crate::math;
use alloc::boxed::Box;
use alloc::vec::Vec;
use begin::Simple;
use gains::Weights;
use horizon::Horizon;
use machine::Machine;
use prediction::Prediction;
use qp::{Limits, Program, Report, Solver, Stage, Unsolved};

/// Steps of the horizon.
pub const STEPS: usize = 20;

/// The law that a tick is left to.
pub const FALLBACK: &str = "kanayama";

/// How near to the least cost a program is solved, as a share of the cost.
const TOLERANCE: f64 = 1e-8;

/// Improvements of each simple motion where the law begins.
const FIRST_ROUNDS: u32 = 3;

/// A change that does not lower the cost is halved so often.
const HALVINGS: u32 = 3;

/// Newton's steps for the bandwidth: on a cubic from above each takes off a third of what is left at least.
const NEWTON_STEPS: u32 = 40;

/// How far the heading error is followed beyond a half turn before it counts from the other side, rad.
const FOLLOWED_PAST_RAD: f64 = 1.0;

pub(super) const KIND: Kind = Kind {
    name: "predictive",
    gains: gains::KEYS,
    machines: Machines::All,
    design: None,
    build: |gains, context| Ok(Box::new(Predictive::<STEPS>::new(gains, context)?)),
};

/// The law with a horizon of N steps.
#[derive(Debug)]
pub struct Predictive<const N: usize> {
    machine: Machine,
    weights: Weights,
    limits: Limits,
    period_s: f64,
    fallback: Box<dyn Law>,
    horizon: Horizon<N>,
    prediction: Prediction<N>,
    trial: Prediction<N>,
    program: Program<N>,
    solver: Solver<N>,
    /// The error's heading at the last tick, by whole turns as followed; none where there is no prediction to go on from.
    heading_error_rad: Option<f64>,
}

impl<const N: usize> Predictive<N> {
    /// A law from checked gains.
    ///
    /// # Errors
    /// If the law to fall back to cannot be made.
    pub fn new(gains: &Values, context: &Context) -> Result<Self, Vec<Problem>> {
        let (fallback, _) = super::build(FALLBACK, &Values::default(), context)?;
        Ok(Self {
            machine: Machine::new(context.vehicle.clone()),
            weights: Weights::new(gains),
            limits: Limits { iterations: gains.get("iterations") as u32, tolerance: TOLERANCE },
            period_s: context.period_s,
            fallback,
            horizon: Horizon::BLANK,
            prediction: Prediction::BLANK,
            trial: Prediction::BLANK,
            program: [Stage::BLANK; N],
            solver: Solver::default(),
            heading_error_rad: None,
        })
    }

    /// Looks ahead, and predicts the motion to improve. [`Predictive::control`] does this, then improves it once.
    pub fn prepare(&mut self, input: &Input<'_>) {
        let error = input.error.heading_rad;
        // Near the opposite heading the error keeps the side that it is on, or the law would turn to and fro.
        let followed = self.heading_error_rad.map(|last| last + math::wrap(error - last));
        let heading = followed.filter(|rad| rad.abs() < math::PI + FOLLOWED_PAST_RAD).unwrap_or(error);
        self.horizon.look(input, heading, &self.machine, &self.weights, self.period_s);
        if self.heading_error_rad.is_some() {
            self.go_on(input);
        } else {
            self.begin(input);
        }
        self.heading_error_rad = Some(heading);
        self.prediction.linearise(&self.horizon, &self.machine, &mut self.program);
    }

    /// The program that improves the prediction, and the prediction's cost.
    pub fn program(&self) -> (&Program<N>, f64) {
        (&self.program, self.prediction.cost)
    }

    /// Solves the program, takes of its change what lowers the true cost, and makes the program of the outcome.
    ///
    /// # Errors
    /// If the program is not solved; the prediction then stays as it is.
    pub fn improve(&mut self) -> Result<Report, Unsolved> {
        let report = self.solve()?;
        self.prediction.linearise(&self.horizon, &self.machine, &mut self.program);
        Ok(report)
    }

    /// The body velocity with which the predicted motion begins.
    pub fn command(&self) -> BodyVelocity {
        self.machine.body(self.prediction.shares.first().copied().unwrap_or_default())
    }

    /// Predicts what the last tick's inputs lead to from here, or a simple motion if that is cheaper.
    fn go_on(&mut self, input: &Input<'_>) {
        let Self { machine, horizon, prediction, trial, fallback, .. } = self;
        prediction.shift(horizon, machine, input.seconds);
        Simple::TurnFirst.predict(input, horizon, machine, &mut **fallback, trial);
        if trial.cost < prediction.cost {
            core::mem::swap(prediction, trial);
        }
    }

    /// Improves each simple motion a few times, and keeps the cheapest.
    fn begin(&mut self, input: &Input<'_>) {
        let mut best = Prediction::BLANK;
        best.cost = f64::INFINITY;
        for simple in Simple::ALL {
            let Self { machine, horizon, prediction, fallback, .. } = self;
            simple.predict(input, horizon, machine, &mut **fallback, prediction);
            for _ in 0..FIRST_ROUNDS {
                self.prediction.linearise(&self.horizon, &self.machine, &mut self.program);
                if self.solve().is_err() {
                    break;
                }
            }
            if self.prediction.cost < best.cost {
                best = self.prediction;
            }
        }
        self.prediction = best;
    }

    fn solve(&mut self) -> Result<Report, Unsolved> {
        let Self { solver, program, prediction, trial, horizon, machine, .. } = self;
        let report = solver.solve(program, prediction.cost, self.limits)?;
        let mut share = 1.0;
        for _ in 0..=HALVINGS {
            trial.improve(prediction, solver.course(), share, horizon, machine);
            if trial.cost < prediction.cost {
                core::mem::swap(prediction, trial);
                break;
            }
            share *= 0.5;
        }
        Ok(report)
    }
}

impl<const N: usize> Law for Predictive<N> {
    fn control(&mut self, input: &Input<'_>) -> Wanted {
        self.prepare(input);
        match self.solve() {
            Ok(_) => self.command().into(),
            Err(_) => Wanted { fallback: true, ..self.fallback.control(input) },
        }
    }

    fn domain(&self) -> Domain {
        Domain::EVERYWHERE
    }

    fn bandwidth_rad_s(&self, speed_m_s: f64) -> f64 {
        // Where no limit binds the chain y' = v φ, φ' = ω, ω' = a with the weights q of y, r of ω and c of a: the
        // frequency, x its square, at which effort and change weigh as much as the error, q v² = c x³ + r x². With c = 0
        // that is the natural frequency (q v²/r)^¼ of the chain of two. The weight of the heading only damps.
        let [_, of_turn_rate] = self.machine.effort();
        let (effort, change) = (self.weights.effort * of_turn_rate, self.weights.change * of_turn_rate);
        let error = self.weights.error[1] * speed_m_s * speed_m_s;
        let mut square = math::sqrt(error / effort);
        for _ in 0..NEWTON_STEPS {
            let value = (change * square + effort) * square * square - error;
            let slope = (3.0 * change * square + 2.0 * effort) * square;
            square -= if slope > 0.0 { value / slope } else { 0.0 };
        }
        math::sqrt(square)
    }

    fn reset(&mut self, motion: BodyVelocity) {
        self.heading_error_rad = None;
        self.fallback.reset(motion);
    }
}
