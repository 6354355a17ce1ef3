//! The fastest curve of squared speed under a jerk limit: an interior-point method on the grid.
//!
//! Unknown are the squared speeds x at the nodes; in each cell the acceleration a is constant. Time is a convex function of
//! x, bounds on speeds and accelerations are linear in x (Verscheure et al. 2009). The jerk limit asks that between the
//! middles of two neighbouring cells, τ apart, the acceleration changes by no more than J τ. τ is a convex function of x,
//! so this is no convex set; its slack's tangent is used at every step, which stays on the safe side (the convex-concave
//! procedure: Yuille and Rangarajan, Neural Computation 15, 2003). Every step is a Newton step of time less μ times the
//! sum of the slacks' logarithms (Boyd and Vandenberghe, Convex Optimization, 2004, ch. 11), damped so that no slack is
//! used up; μ falls. No row couples more than three neighbours, so that the matrix has five diagonals.
//!
//! What comes out keeps every bound at every step of the method, and is a local optimum within a stated gap.

use crate::math;
use alloc::vec;
use alloc::vec::Vec;

/// The method ends when the logarithms cost less than this part of the time.
const GAP: f64 = 3e-4;
/// Newton steps with one μ, and their least progress, relative.
const MOST_STEPS: usize = 60;
const SETTLED: f64 = 1e-6;
/// How fast μ falls.
const FALL: f64 = 0.2;

/// Cells with their bounds. There is one more node than cells.
#[derive(Clone, Debug)]
pub(super) struct Problem {
    /// Lengths of the cells, m.
    pub(super) lengths: Vec<f64>,
    /// Least s̈ in each cell, as (at rest, change per x).
    pub(super) least: Vec<(f64, f64)>,
    /// Greatest s̈ in each cell, likewise.
    pub(super) greatest: Vec<(f64, f64)>,
    /// Greatest x at each node.
    pub(super) caps: Vec<f64>,
    /// Greatest jerk, m/s³.
    pub(super) jerk: f64,
}

/// A bound's slack, with its slope in three neighbouring nodes from `first`.
struct Slack {
    first: usize,
    value: f64,
    slope: [f64; 3],
}

/// A symmetric matrix of five diagonals, and a right side.
struct System {
    diagonals: [Vec<f64>; 3],
    right: Vec<f64>,
}

impl Problem {
    /// True if all bounds have room.
    pub(super) fn holds(&self, squares: &[f64]) -> bool {
        let mut holds = true;
        self.each_slack(squares, &mut |slack| holds &= slack.value > 0.0);
        holds
    }

    /// For every node, the way from the beginning and the way to the end, m: each summed from its own end, so that both
    /// are exact to rounding near theirs.
    pub(super) fn ways(&self) -> (Vec<f64>, Vec<f64>) {
        let sum = |total: &mut f64, length: &f64| {
            *total += length;
            Some(*total)
        };
        let from = |lengths: &mut dyn Iterator<Item = &f64>| {
            core::iter::once(0.0).chain(lengths.scan(0.0, sum)).collect::<Vec<f64>>()
        };
        let done = from(&mut self.lengths.iter());
        let mut left = from(&mut self.lengths.iter().rev());
        left.reverse();
        (done, left)
    }

    fn nodes(&self) -> usize {
        self.caps.len()
    }

    /// The fastest x, from one that [holds](Self::holds); its ends stay as they are.
    pub(super) fn solve(&self, begin: Vec<f64>) -> Vec<f64> {
        let mut squares = begin;
        let bounds = 8.0 * self.nodes() as f64;
        let mut weight = 10.0 * self.seconds(&squares) / bounds;
        loop {
            self.settle(&mut squares, weight);
            if weight * bounds <= GAP * self.seconds(&squares) {
                return squares;
            }
            weight *= FALL;
        }
    }

    fn seconds(&self, squares: &[f64]) -> f64 {
        self.lengths.iter().zip(squares.windows(2)).map(|(length, x)| pass(*length, x[0], x[1]).value).sum()
    }

    /// Newton steps until the merit settles.
    fn settle(&self, squares: &mut Vec<f64>, weight: f64) {
        for _ in 0..MOST_STEPS {
            let gained = self.step(squares, weight);
            if gained < SETTLED * weight.max(SETTLED) * self.nodes() as f64 {
                return;
            }
        }
    }

    /// One damped Newton step; returns how much the merit fell.
    fn step(&self, squares: &mut Vec<f64>, weight: f64) -> f64 {
        let mut system = self.system(squares, weight);
        let slope = system.right.clone();
        system.solve();
        let direction = system.right;
        let expected: f64 = direction.iter().zip(&slope).map(|(step, slope)| step * slope).sum();
        let before = self.merit(squares, weight);
        let mut part = 1.0;
        for _ in 0..40 {
            let tried: Vec<f64> = squares.iter().zip(&direction).map(|(x, step)| x + part * step).collect();
            let after = self.merit(&tried, weight);
            if after <= before - 1e-4 * part * expected {
                *squares = tried;
                return before - after;
            }
            part *= 0.5;
        }
        0.0
    }

    /// Time less the weighted logarithms of all slacks; infinite where one is used up.
    fn merit(&self, squares: &[f64], weight: f64) -> f64 {
        let mut logs = 0.0;
        let mut holds = squares[1..squares.len() - 1].iter().all(|x| *x > 0.0);
        if holds {
            self.each_slack(squares, &mut |slack| {
                holds &= slack.value > 0.0;
                logs += if holds { math::ln(slack.value) } else { 0.0 };
            });
        }
        if holds { self.seconds(squares) - weight * logs } else { f64::INFINITY }
    }

    /// The Newton system: matrix, and the negative slope as its right side. The nodes at both ends do not move.
    fn system(&self, squares: &[f64], weight: f64) -> System {
        let count = self.nodes();
        let blank = || vec![0.0; count];
        let mut system = System { diagonals: [blank(), blank(), blank()], right: blank() };
        for (index, length) in self.lengths.iter().enumerate() {
            let pass = pass(*length, squares[index], squares[index + 1]);
            system.right[index] -= pass.slope[0];
            system.right[index + 1] -= pass.slope[1];
            system.diagonals[0][index] += pass.bend[0];
            system.diagonals[1][index] += pass.bend[1];
            system.diagonals[0][index + 1] += pass.bend[2];
        }
        self.each_slack(squares, &mut |slack| system.add(slack, weight, count));
        for end in [0, count - 1] {
            system.hold(end);
        }
        system
    }

    /// Visits the slack of every bound.
    fn each_slack(&self, squares: &[f64], visit: &mut dyn FnMut(&Slack)) {
        let inner = 1..self.nodes() - 1;
        for (first, (square, cap)) in
            squares.iter().zip(&self.caps).enumerate().take(inner.end).skip(inner.start)
        {
            visit(&Slack { first, value: 1.0 - square / cap, slope: [-1.0 / cap, 0.0, 0.0] });
        }
        for (index, length) in self.lengths.iter().enumerate() {
            let half = 0.5 / length;
            let accel = half * (squares[index + 1] - squares[index]);
            for end in 0..2 {
                let x = squares[index + end];
                let (at_rest, per_x) = self.greatest[index];
                let mut slope = [half, -half, 0.0];
                slope[end] += per_x;
                visit(&Slack { first: index, value: at_rest + per_x * x - accel, slope });
                let (at_rest, per_x) = self.least[index];
                let mut slope = [-half, half, 0.0];
                slope[end] -= per_x;
                visit(&Slack { first: index, value: accel - at_rest - per_x * x, slope });
            }
        }
        for node in 0..self.nodes() {
            let (change, seconds) = self.change(squares, node);
            for sign in [1.0, -1.0] {
                let mut slope = seconds.slope;
                for (slope, change) in slope.iter_mut().zip(change.slope) {
                    *slope = self.jerk * *slope - sign * change;
                }
                visit(&Slack {
                    first: change.first,
                    value: self.jerk * seconds.value - sign * change.value,
                    slope,
                });
            }
        }
    }

    /// At a node: the change of acceleration from the cell before to the cell after, and the time between their middles.
    /// Before the first and after the last cell the acceleration is 0.
    fn change(&self, squares: &[f64], node: usize) -> (Slack, Slack) {
        let first = node.saturating_sub(1).min(self.nodes() - 3);
        let mut change = Slack { first, value: 0.0, slope: [0.0; 3] };
        let mut seconds = Slack { first, value: 0.0, slope: [0.0; 3] };
        for (cell, sign) in [(node.checked_sub(1), -1.0), (Some(node), 1.0)] {
            let Some(cell) = cell.filter(|cell| *cell < self.lengths.len()) else { continue };
            let half = 0.5 / self.lengths[cell];
            let place = cell - first;
            change.value += sign * half * (squares[cell + 1] - squares[cell]);
            change.slope[place] -= sign * half;
            change.slope[place + 1] += sign * half;
            let pass = pass(self.lengths[cell], squares[cell], squares[cell + 1]);
            seconds.value += 0.5 * pass.value;
            seconds.slope[place] += 0.5 * pass.slope[0];
            seconds.slope[place + 1] += 0.5 * pass.slope[1];
        }
        (change, seconds)
    }
}

/// The time through a cell, 2h/(√x + √y), with its slope and second derivatives xx, xy, yy. A rest does not move, so its
/// slope does not matter and is 0.
struct Pass {
    value: f64,
    slope: [f64; 2],
    bend: [f64; 3],
}

fn pass(length: f64, x: f64, y: f64) -> Pass {
    let (p, q) = (math::sqrt(x), math::sqrt(y));
    let sum = p + q;
    let square = length / (sum * sum);
    let inverse = |root: f64| if root > 0.0 { 1.0 / root } else { 0.0 };
    let (ip, iq) = (inverse(p), inverse(q));
    let second = |inverse: f64| square * inverse * inverse * (1.0 / sum + 0.5 * inverse);
    Pass {
        value: 2.0 * length / sum,
        slope: [-square * ip, -square * iq],
        bend: [second(ip), square * ip * iq / sum, second(iq)],
    }
}

impl System {
    fn add(&mut self, slack: &Slack, weight: f64, count: usize) {
        let inverse = 1.0 / slack.value;
        for one in 0..3 {
            let slope = slack.slope[one];
            let node = slack.first + one;
            if slope == 0.0 || node >= count {
                continue;
            }
            self.right[node] += weight * slope * inverse;
            for other in one..3 {
                if slack.first + other < count {
                    self.diagonals[other - one][node] +=
                        weight * slope * slack.slope[other] * inverse * inverse;
                }
            }
        }
    }

    /// Keeps a node where it is.
    fn hold(&mut self, node: usize) {
        self.right[node] = 0.0;
        self.diagonals[0][node] = 1.0;
        for reach in 1..3 {
            self.diagonals[reach][node] = 0.0;
            if node >= reach {
                self.diagonals[reach][node - reach] = 0.0;
            }
        }
    }

    /// Solves in place by Cholesky's method without roots (L D Lᵀ); the solution is in `right`.
    fn solve(&mut self) {
        let [pivot, one, two] = &mut self.diagonals;
        let count = pivot.len();
        for k in 0..count {
            // Scaled rows: what is added to keep the pivot positive is rounding.
            pivot[k] = pivot[k].max(f64::MIN_POSITIVE);
            let (l1, l2) = (one[k] / pivot[k], two[k] / pivot[k]);
            if k + 1 < count {
                pivot[k + 1] -= l1 * one[k];
                one[k + 1] -= l1 * two[k];
            }
            if k + 2 < count {
                pivot[k + 2] -= l2 * two[k];
            }
            (one[k], two[k]) = (l1, l2);
        }
        let right = &mut self.right;
        for k in 0..count {
            if k + 1 < count {
                right[k + 1] -= one[k] * right[k];
            }
            if k + 2 < count {
                right[k + 2] -= two[k] * right[k];
            }
        }
        for k in 0..count {
            right[k] /= pivot[k];
        }
        for k in (0..count).rev() {
            if k + 1 < count {
                right[k] -= one[k] * right[k + 1];
            }
            if k + 2 < count {
                right[k] -= two[k] * right[k + 2];
            }
        }
    }
}
