//! The bounds: a primal–dual interior point with Mehrotra's predictor and corrector ("On the implementation of a
//! primal-dual interior point method", SIAM Journal on Optimization 2(4), 1992; its form for quadratic programs as in
//! Nocedal and Wright, Numerical Optimization, 2nd edition, section 16.6).
//!
//! A bound c ≤ d with slack s = d − c and multiplier z adds the weight z/s and a slope to the program without bounds, so
//! that an iteration is one factoring and two solutions in O(N). Every iteration costs the same: the cap on their number
//! bounds the time.

use super::riccati::{Barrier, Factors};
use super::{Course, Point, Program, Stage};
use core::fmt;

/// Bounds of one step: upper and lower, of two rates and two inputs.
const BOUNDS: usize = 8;

/// How near to a bound an iterate may come in one step, as a share of the way: the rest keeps it inside.
const KEEP_INSIDE: f64 = 0.995;

/// A begin nearer to a bound than this share of its width is moved off it.
const LEAST_BEGIN: f64 = 0.02;

/// A slope's and a slack's residual shrink by one factor; both count as gone once it is this small.
const RESIDUAL_GONE: f64 = 1e-8;

/// A cost that is not worth a deviation, m²·s: that of a tenth of a micrometre over a second.
const NOTHING: f64 = 1e-14;

/// When a solution ends.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Limits {
    /// Most iterations.
    pub iterations: u32,
    /// The greatest distance from the least cost, as a share of the cost.
    pub tolerance: f64,
}

/// How a solution was found.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Report {
    /// Iterations; 0 if no bound stood in the way.
    pub iterations: u32,
    /// The cost, the constant part included.
    pub cost: f64,
}

/// Why there is no solution.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Unsolved {
    /// The iterations were used up.
    Iterations,
    /// A number that is not finite, or a bound that excludes zero.
    IllPosed,
}

impl fmt::Display for Unsolved {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Self::Iterations => "not within the tolerance after the iterations allowed",
            Self::IllPosed => "a number is not finite, or a bound excludes staying with the prediction",
        })
    }
}

/// One step's slacks and multipliers.
#[derive(Clone, Copy, Debug, Default)]
struct Pair {
    bound: [f64; BOUNDS],
    slack: [f64; BOUNDS],
    multiplier: [f64; BOUNDS],
    /// Changes found by the last solution.
    slack_step: [f64; BOUNDS],
    multiplier_step: [f64; BOUNDS],
}

/// Room for solutions; holds nothing from one to the next.
#[derive(Clone, Debug)]
pub struct Solver<const N: usize> {
    factors: Factors<N>,
    barriers: [Barrier; N],
    pairs: [Pair; N],
    course: Course<N>,
    aim: Course<N>,
}

impl<const N: usize> Default for Solver<N> {
    fn default() -> Self {
        Self {
            factors: Factors::BLANK,
            barriers: [Barrier::default(); N],
            pairs: [Pair::default(); N],
            course: Course::STILL,
            aim: Course::STILL,
        }
    }
}

impl<const N: usize> Solver<N> {
    /// The course found last.
    pub fn course(&self) -> &Course<N> {
        &self.course
    }

    /// Finds the course of least cost, to which `constant` is added. It is within the bounds but for rounding.
    ///
    /// # Errors
    /// If it is not found; [`Solver::course`] then means nothing.
    pub fn solve(&mut self, program: &Program<N>, constant: f64, limits: Limits) -> Result<Report, Unsolved> {
        self.barriers = [Barrier::default(); N];
        self.factors.factor(program, &self.barriers);
        self.factors.solve(program, &self.barriers, &mut self.course);
        let least = self.course.cost(program);
        if !least.is_finite() || !self.take_bounds(program) {
            return Err(Unsolved::IllPosed);
        }
        if self.is_within_bounds() {
            return Ok(Report { iterations: 0, cost: constant + least });
        }
        if -least <= limits.tolerance * constant + NOTHING {
            self.course = Course::STILL;
            return Ok(Report { iterations: 0, cost: constant });
        }
        self.begin(-least);
        let mut residual = 1.0;
        for iterations in 1..=limits.iterations {
            residual *= 1.0 - self.iterate(program)?;
            let cost = constant + self.course.cost(program);
            let gap = self.complementarity();
            if residual <= RESIDUAL_GONE && gap <= limits.tolerance * cost.abs() {
                return Ok(Report { iterations, cost });
            }
            if !gap.is_finite() {
                return Err(Unsolved::IllPosed);
            }
        }
        Err(Unsolved::Iterations)
    }

    /// Notes the bounds; false if one excludes zero.
    fn take_bounds(&mut self, program: &Program<N>) -> bool {
        let mut hold = true;
        for (pair, stage) in self.pairs.iter_mut().zip(program) {
            pair.bound = bounds(stage);
            hold &= pair.bound.iter().all(|bound| *bound >= 0.0);
        }
        hold
    }

    fn is_within_bounds(&self) -> bool {
        self.pairs.iter().zip(self.course.rates.iter().zip(&self.course.points)).all(
            |(pair, (rate, point))| {
                values(*rate, point).iter().zip(&pair.bound).all(|(value, bound)| value <= bound)
            },
        )
    }

    /// Begins at no deviation, off the bounds, at a complementarity that goes with what there is to gain.
    fn begin(&mut self, gain: f64) {
        self.course = Course::STILL;
        let target = gain / (N * BOUNDS) as f64;
        for pair in &mut self.pairs {
            for at in 0..BOUNDS {
                let width = pair.bound[at] + pair.bound[at ^ 1];
                pair.slack[at] = pair.bound[at].max(LEAST_BEGIN * width);
                pair.multiplier[at] = target / pair.slack[at];
            }
            (pair.slack_step, pair.multiplier_step) = ([0.0; BOUNDS], [0.0; BOUNDS]);
        }
    }

    /// The sum of slack times multiplier: how far the cost is from the least one, once the residuals are gone.
    fn complementarity(&self) -> f64 {
        let product = |pair: &Pair| -> f64 {
            pair.slack.iter().zip(&pair.multiplier).map(|(slack, multiplier)| slack * multiplier).sum()
        };
        self.pairs.iter().map(product).sum()
    }

    /// One predictor and corrector; returns the share of the way gone.
    fn iterate(&mut self, program: &Program<N>) -> Result<f64, Unsolved> {
        let count = (N * BOUNDS) as f64;
        let mean = self.complementarity() / count;
        self.weigh();
        self.factors.factor(program, &self.barriers);
        self.aim(program, 0.0, 0.0);
        let share = self.longest_share().min(1.0);
        let ratio = self.complementarity_after(share) / count / mean;
        // The correction for products of the predictor's steps holds for as far as those steps go; a full one where they
        // go half the way makes the iterates run in circles.
        self.aim(program, ratio * ratio * ratio * mean, share * share);
        let share = (KEEP_INSIDE * self.longest_share()).min(1.0);
        if !share.is_finite() {
            return Err(Unsolved::IllPosed);
        }
        self.advance(share);
        Ok(share)
    }

    /// The weights that the bounds add.
    fn weigh(&mut self) {
        for (pair, barrier) in self.pairs.iter().zip(&mut self.barriers) {
            let weight = |at: usize| pair.multiplier[at] / pair.slack[at];
            let both = |at: usize| weight(at) + weight(at + 1);
            barrier.rate_weight = [both(0), both(2)];
            barrier.input_weight = [both(4), both(6)];
        }
    }

    /// Solves for the course aimed at with complementarity `target`, and for the steps of slacks and multipliers on the
    /// way there. `correct` is how much of the products of the last solution's steps is taken off.
    fn aim(&mut self, program: &Program<N>, target: f64, correct: f64) {
        for (pair, barrier) in self.pairs.iter_mut().zip(&mut self.barriers) {
            let mut slope = [0.0; BOUNDS];
            for (at, slope) in slope.iter_mut().enumerate() {
                let product = pair.slack_step[at] * pair.multiplier_step[at];
                // What slack times multiplier shall be, over the slack; kept for the multiplier's step.
                let wanted = (target - correct * product) / pair.slack[at];
                pair.multiplier_step[at] = wanted;
                *slope = wanted + pair.multiplier[at] - pair.multiplier[at] / pair.slack[at] * pair.bound[at];
            }
            barrier.rate_slope = [slope[0] - slope[1], slope[2] - slope[3]];
            barrier.input_slope = [slope[4] - slope[5], slope[6] - slope[7]];
        }
        self.factors.solve(program, &self.barriers, &mut self.aim);
        for (pair, (rate, point)) in self.pairs.iter_mut().zip(self.aim.rates.iter().zip(&self.aim.points)) {
            for (at, value) in values(*rate, point).into_iter().enumerate() {
                let (slack, multiplier) = (pair.slack[at], pair.multiplier[at]);
                let step = pair.bound[at] - value - slack;
                pair.slack_step[at] = step;
                pair.multiplier_step[at] -= multiplier + multiplier / slack * step;
            }
        }
    }

    /// The longest share of the steps, at most 1/[`KEEP_INSIDE`], at which no slack and no multiplier is below zero.
    fn longest_share(&self) -> f64 {
        let mut fastest = KEEP_INSIDE;
        for pair in &self.pairs {
            for at in 0..BOUNDS {
                fastest = fastest.max(-pair.slack_step[at] / pair.slack[at]);
                fastest = fastest.max(-pair.multiplier_step[at] / pair.multiplier[at]);
            }
        }
        1.0 / fastest
    }

    fn complementarity_after(&self, share: f64) -> f64 {
        let mut sum = 0.0;
        for pair in &self.pairs {
            for at in 0..BOUNDS {
                let slack = pair.slack[at] + share * pair.slack_step[at];
                sum += slack * (pair.multiplier[at] + share * pair.multiplier_step[at]);
            }
        }
        sum
    }

    fn advance(&mut self, share: f64) {
        self.course.approach(&self.aim, share);
        for pair in &mut self.pairs {
            for at in 0..BOUNDS {
                pair.slack[at] += share * pair.slack_step[at];
                pair.multiplier[at] += share * pair.multiplier_step[at];
            }
        }
    }
}

/// A step's bounds as upper bounds of [`values`].
fn bounds(stage: &Stage) -> [f64; BOUNDS] {
    let of = |high: [f64; 2], low: [f64; 2]| [high[0], -low[0], high[1], -low[1]];
    let ([a, b, c, d], [e, f, g, h]) =
        (of(stage.rate_high, stage.rate_low), of(stage.input_high, stage.input_low));
    [a, b, c, d, e, f, g, h]
}

/// What is bounded from above: rates and inputs, each with both signs.
fn values(rate: [f64; 2], point: &Point) -> [f64; BOUNDS] {
    let input = point.input;
    [rate[0], -rate[0], rate[1], -rate[1], input[0], -input[0], input[1], -input[1]]
}
