//! Prediction within the limits: each tick the inputs over a horizon of about a second are chosen so that the error ahead
//! costs least, with what the machine can do as bounds; the first of them is the command.
//!
//! The cost is ∫ e_x² + w_y e_y² + w_φ e_φ² + r |u − u_d|² dt in the reference's frame, and after the horizon's end what
//! the linear-quadratic law would still pay ([`tail`]). The motion is the nonlinear one: each tick it is predicted anew
//! from the inputs of the tick before, the cost is made quadratic about it, and the program of [`qp`] is solved once. A
//! change that does not lower the true cost is halved, and left out at the end: the cost never grows from one iterate to
//! the next.
//!
//! Where the law has no prediction to go on from, and whenever that is cheaper, the motion under [`FALLBACK`] is the one
//! to improve. Where the program is not solved within the iterations allowed, the tick is left to that law, with its
//! gains as by default, and says so.
//!
//! What a limit on the acceleration across the path takes off is not predicted.
//!
//! | file | what it holds |
//! | --- | --- |
//! | `machine` | inputs in shares of their greatest, and how far a step takes them |
//! | `horizon` | the grid, the reference ahead, the weights |
//! | `tail` | the cost after the horizon's end |
//! | `prediction` | a motion over the horizon, its cost and its program |
//! | `qp` | the bounded program |

mod horizon;
mod machine;
mod prediction;
pub mod qp;
mod tail;

use super::{Context, Domain, Input, Kind, Law, Machines, Wanted};
use crate::geometry::BodyVelocity;
use crate::keys::{Bound, Key, Problem, Values};
use crate::math;
use alloc::boxed::Box;
use alloc::vec::Vec;
use horizon::Horizon;
use machine::{Machine, Shares};
use prediction::Prediction;
use qp::{Limits, Program, Report, Solver, Stage, Unsolved};

/// Steps of the horizon.
pub const STEPS: usize = 20;

/// The law that a tick is left to.
pub const FALLBACK: &str = "kanayama";

/// How near to the least cost a program is solved, as a share of the cost.
const TOLERANCE: f64 = 1e-8;

/// A change that does not lower the cost is halved so often.
const HALVINGS: u32 = 3;

pub(super) const KIND: Kind = Kind {
    name: "predictive",
    gains: &[
        Key::with_default(
            "step_s",
            "s",
            0.05,
            Bound::within(0.005, 0.5),
            "length of a step; the horizon is 20 of them, the first as long as a tick. A horizon shorter than a recovery \
             takes turns too late, long steps are coarse",
        ),
        Key::with_default(
            "cross_weight",
            "",
            1.0,
            Bound::positive(1000.0),
            "what a cross-track error costs beside the same along-track error",
        ),
        Key::with_default(
            "heading_weight_m2_rad2",
            "m²/rad²",
            0.1,
            Bound::positive(1000.0),
            "what a heading error of 1 rad costs beside an along-track error of 1 m; below 0.01 the machine turns steeply",
        ),
        Key::with_default(
            "effort_m2",
            "m²",
            1e-3,
            Bound::within(1e-6, 100.0),
            "what an input costs that is off the reference's by its greatest value; more of it is calmer and slower",
        ),
        Key::with_default(
            "tail_effort_m2",
            "m²",
            1e-2,
            Bound::within(1e-6, 100.0),
            "the same after the horizon's end: more of it makes what is left there count more",
        ),
        Key::with_default(
            "iterations",
            "",
            30.0,
            Bound::within(5.0, 100.0),
            "most iterations of one program; with too few the law often falls back",
        ),
    ],
    machines: Machines::All,
    build: |gains, context| Ok(Box::new(Predictive::<STEPS>::new(gains, context)?)),
};

/// The weights, from the gains.
#[derive(Clone, Copy, Debug)]
struct Weights {
    step_s: f64,
    /// Along-track, cross-track, heading.
    error: [f64; 3],
    effort: f64,
    tail_effort: f64,
}

/// The law with a horizon of N steps.
#[derive(Debug)]
pub struct Predictive<const N: usize> {
    machine: Machine,
    weights: Weights,
    iterations: u32,
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
            weights: Weights {
                step_s: gains.get("step_s"),
                error: [1.0, gains.get("cross_weight"), gains.get("heading_weight_m2_rad2")],
                effort: gains.get("effort_m2"),
                tail_effort: gains.get("tail_effort_m2"),
            },
            iterations: gains.get("iterations") as u32,
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

    /// Looks ahead and predicts: the program of this tick, and the cost of the prediction that it improves.
    pub fn prepare(&mut self, input: &Input<'_>) -> (&Program<N>, f64) {
        let error = input.error.heading_rad;
        // Near the opposite heading the error keeps the side it is on, or the law would turn to and fro.
        let followed = self.heading_error_rad.map(|last| last + math::wrap(error - last));
        let heading = followed.filter(|followed| followed.abs() < math::PI + 1.0).unwrap_or(error);
        self.horizon.look(input, heading, &self.machine, &self.weights, self.period_s);
        self.predict(input);
        self.heading_error_rad = Some(heading);
        self.linearise()
    }

    /// The program that improves the prediction as it is, and the prediction's cost.
    pub fn linearise(&mut self) -> (&Program<N>, f64) {
        self.prediction.linearise(&self.horizon, &self.machine, &mut self.program);
        (&self.program, self.prediction.cost)
    }

    /// The motion to improve: that of the last tick's inputs, or the one under the law to fall back to if that is cheaper.
    fn predict(&mut self, input: &Input<'_>) {
        let Self { machine, horizon, prediction, trial, fallback, .. } = self;
        let mut at_s = 0.0;
        let mut reference = input.reference;
        trial.follow(horizon, machine, |index, pose, shares| {
            let motion = machine.body(shares);
            let input = Input::new(reference, input.ahead, pose, (input.wheels, motion), input.seconds);
            let wanted = fallback.control(&input).velocity;
            let shares = machine.of_velocity(wanted, reference.curvature_1_m, shares);
            at_s += horizon.knots[index].length_s;
            reference = input.ahead.reference(at_s);
            shares
        });
        if self.heading_error_rad.is_some() {
            let old = *prediction;
            prediction
                .follow(horizon, machine, |index, _, _| shifted(&old.shares, horizon, index, input.seconds));
            if prediction.cost <= trial.cost {
                return;
            }
        }
        core::mem::swap(prediction, trial);
    }

    /// Solves the program once and takes of its change what lowers the true cost.
    ///
    /// # Errors
    /// If the program is not solved; the prediction then stays as it is.
    pub fn improve(&mut self) -> Result<Report, Unsolved> {
        let limits = Limits { iterations: self.iterations, tolerance: TOLERANCE };
        let report = self.solver.solve(&self.program, self.prediction.cost, limits)?;
        let mut share = 1.0;
        for _ in 0..=HALVINGS {
            let Self { trial, solver, prediction, horizon, machine, .. } = self;
            trial.improved(solver.course(), share, prediction, horizon, machine);
            if trial.cost < prediction.cost {
                core::mem::swap(prediction, trial);
                break;
            }
            share *= 0.5;
        }
        Ok(report)
    }

    /// The command of this tick.
    pub fn command(&self) -> BodyVelocity {
        self.machine.body(self.prediction.shares.first().copied().unwrap_or_default())
    }
}

/// The inputs of the last tick's horizon, `seconds` on: at the end of a step of this tick's.
fn shifted<const N: usize>(shares: &[Shares; N], horizon: &Horizon<N>, index: usize, seconds: f64) -> Shares {
    // The end of step `index` lies in the step after it, `seconds` from its begin; both grids are the same.
    let Some(next) = horizon.knots.get(index + 1) else { return horizon.knots[index].shares };
    let (begin, end) = (shares[index], shares[index + 1]);
    let part = (seconds / next.length_s).min(1.0);
    [begin[0] + part * (end[0] - begin[0]), begin[1] + part * (end[1] - begin[1])]
}

impl<const N: usize> Law for Predictive<N> {
    fn control(&mut self, input: &Input<'_>) -> Wanted {
        self.prepare(input);
        match self.improve() {
            Ok(_) => self.command().into(),
            Err(_) => Wanted { fallback: true, ..self.fallback.control(input) },
        }
    }

    fn domain(&self) -> Domain {
        Domain { max_heading_error_rad: math::PI, forward: true, reverse: true, at_rest: true }
    }

    fn bandwidth_rad_s(&self, speed_m_s: f64) -> f64 {
        // Where no limit stands in the way: the cross-track chain y' = v φ, φ' = ω with weights q_y and q_φ of the errors
        // and r of ω has the closed loop s⁴ − (q_φ/r) s² + q_y v²/r: natural frequency (q_y v²/r)^¼.
        let (_, top_turn_rate) = self.machine.top();
        let effort = self.weights.effort / (top_turn_rate * top_turn_rate);
        math::sqrt(math::sqrt(self.weights.error[1] * speed_m_s * speed_m_s / effort))
    }

    fn reset(&mut self, motion: BodyVelocity) {
        self.heading_error_rad = None;
        self.fallback.reset(motion);
    }
}
