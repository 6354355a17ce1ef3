//! The quadratic program of one tick: a horizon of N steps, two rates a step, bounds on every rate and every input.
//!
//! Unknowns are deviations from a predicted motion. With the pose's deviation p (x m, y m, heading rad), the inputs'
//! deviation u and the rates' deviation a, both two numbers in shares of their greatest value:
//!
//! ```text
//! p_0 = 0, u_0 = 0,   p_{k+1} = A_k p_k + B_k (u_k + r_k a_k),   u_{k+1} = u_k + h_k a_k
//! minimise Σ ½ p'Qp + q'p + ½ u'Ru + r'u + ½ a'Sa + s'a   within   rate_low ≤ a ≤ rate_high, input_low ≤ u ≤ input_high
//! ```
//!
//! | file | what it holds |
//! | --- | --- |
//! | `riccati` | the program without its bounds, in one sweep back and one forth |
//! | `interior` | the bounds: a primal–dual interior point |

mod interior;
mod riccati;
#[cfg(test)]
mod tests;

pub use interior::{Limits, Report, Solver, Unsolved};

/// One step of the horizon, and the point it ends at.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Stage {
    /// What a heading that differs by 1 rad at the step's begin changes at its end, m: the last column of A beside 1.
    pub turn: [f64; 2],
    /// What a mean input that differs by its greatest value changes at the step's end (x m, y m, heading rad): B.
    pub input: [[f64; 2]; 3],
    /// The step's length h, s.
    pub length_s: f64,
    /// The mean input over the step is the one at its begin and so many times the rate: r, s.
    pub reach_s: f64,
    /// Weight Q of the pose at the end: xx, xy, xφ, yy, yφ, φφ; positive semidefinite.
    pub pose_weight: [f64; 6],
    /// Slope q.
    pub pose_slope: [f64; 3],
    /// Weight R of the inputs at the end: 00, 01, 11; positive semidefinite.
    pub input_weight: [f64; 3],
    /// Slope r.
    pub input_slope: [f64; 2],
    /// Weight S of the rates, diagonal, greater than zero.
    pub rate_weight: [f64; 2],
    /// Slope s.
    pub rate_slope: [f64; 2],
    /// Least rates, 1/s; at most 0.
    pub rate_low: [f64; 2],
    /// Greatest rates, 1/s; at least 0.
    pub rate_high: [f64; 2],
    /// Least inputs at the end; at most 0.
    pub input_low: [f64; 2],
    /// Greatest inputs at the end; at least 0.
    pub input_high: [f64; 2],
}

impl Stage {
    /// A step without weights or bounds.
    pub const BLANK: Self = Self {
        turn: [0.0; 2],
        input: [[0.0; 2]; 3],
        length_s: 0.0,
        reach_s: 0.0,
        pose_weight: [0.0; 6],
        pose_slope: [0.0; 3],
        input_weight: [0.0; 3],
        input_slope: [0.0; 2],
        rate_weight: [0.0; 2],
        rate_slope: [0.0; 2],
        rate_low: [0.0; 2],
        rate_high: [0.0; 2],
        input_low: [0.0; 2],
        input_high: [0.0; 2],
    };

    /// Where the step leads from a point.
    fn next(&self, from: &Point, rate: [f64; 2]) -> Point {
        let [turn_x, turn_y] = self.turn;
        let mean = [from.input[0] + self.reach_s * rate[0], from.input[1] + self.reach_s * rate[1]];
        let [x, y, heading] = from.pose;
        let moved = self.input.map(|row| row[0] * mean[0] + row[1] * mean[1]);
        Point {
            pose: [x + turn_x * heading + moved[0], y + turn_y * heading + moved[1], heading + moved[2]],
            input: [from.input[0] + self.length_s * rate[0], from.input[1] + self.length_s * rate[1]],
        }
    }

    /// The cost of a step with these rates and of the point it ends at.
    fn cost(&self, end: &Point, rate: [f64; 2]) -> f64 {
        let ([x, y, heading], [u, v]) = (end.pose, end.input);
        let (q, r) = (&self.pose_weight, &self.input_weight);
        let pose = x * (0.5 * q[0] * x + q[1] * y + q[2] * heading + self.pose_slope[0])
            + y * (0.5 * q[3] * y + q[4] * heading + self.pose_slope[1])
            + heading * (0.5 * q[5] * heading + self.pose_slope[2]);
        let input = u * (0.5 * r[0] * u + r[1] * v + self.input_slope[0])
            + v * (0.5 * r[2] * v + self.input_slope[1]);
        let of_rate =
            |side: usize| rate[side] * (0.5 * self.rate_weight[side] * rate[side] + self.rate_slope[side]);
        pose + input + of_rate(0) + of_rate(1)
    }
}

/// Deviation of a point of the horizon.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Point {
    /// Pose: x and y, m; heading, rad.
    pub pose: [f64; 3],
    /// Inputs, in shares of their greatest value.
    pub input: [f64; 2],
}

/// A program of N steps.
pub type Program<const N: usize> = [Stage; N];

/// Rates of N steps and the points they lead to.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Course<const N: usize> {
    /// Rates, shares of the greatest input per second.
    pub rates: [[f64; 2]; N],
    /// The point at the end of each step.
    pub points: [Point; N],
}

impl<const N: usize> Course<N> {
    /// No deviation at all.
    pub const STILL: Self =
        Self { rates: [[0.0; 2]; N], points: [Point { pose: [0.0; 3], input: [0.0; 2] }; N] };

    /// Where rates lead in a program.
    pub fn along(program: &Program<N>, rates: [[f64; 2]; N]) -> Self {
        let mut course = Self { rates, ..Self::STILL };
        let mut from = Point::default();
        for (stage, (rate, point)) in program.iter().zip(rates.iter().zip(&mut course.points)) {
            *point = stage.next(&from, *rate);
            from = *point;
        }
        course
    }

    /// Its cost in a program.
    pub fn cost(&self, program: &Program<N>) -> f64 {
        program
            .iter()
            .zip(self.rates.iter().zip(&self.points))
            .map(|(stage, (rate, point))| stage.cost(point, *rate))
            .sum()
    }

    /// Goes a share of the way to another course.
    fn approach(&mut self, other: &Self, share: f64) {
        let step = |value: &mut f64, to: f64| *value += share * (to - *value);
        for (rate, to) in self.rates.iter_mut().zip(&other.rates) {
            rate.iter_mut().zip(to).for_each(|(value, to)| step(value, *to));
        }
        for (point, to) in self.points.iter_mut().zip(&other.points) {
            point.pose.iter_mut().zip(&to.pose).for_each(|(value, to)| step(value, *to));
            point.input.iter_mut().zip(&to.input).for_each(|(value, to)| step(value, *to));
        }
    }
}
