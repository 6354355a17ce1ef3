//! The quadratic regulator's arithmetic: the error model, held over a step, and the Riccati recursion backward over it.
//!
//! The robot-frame error e = reference − pose obeys, linearised about the reference, e' = A e + B u with
//! A = [[0, ω, 0], [−ω, 0, v], [0, 0, 0]], B = [[−1, 0], [0, 0], [0, −1]] and u = (v − v_d cos e_φ, ω − ω_d). Held over h, with
//! a = ω h (by integration of the rotation e^(A t)):
//!
//! A_h = [[cos a, sin a, v ω c₂], [−sin a, cos a, v c₁], [0, 0, 1]], B_h = [[−c₁, −v ω c₃], [ω c₂, −v c₂], [0, −h]],
//! c₁ = h sin a/a, c₂ = h² (1 − cos a)/a², c₃ = h³ (a − sin a)/a³.
//!
//! Beyond what is known the recursion goes on by doubling (structure-preserving, e.g. Chu, Fan, Lin and Wang,
//! International Journal of Control 77(8), 2004): k doublings are 2^k steps.

use crate::geometry::BodyVelocity;
use crate::math;

/// A 3 × 3 matrix, row by row.
pub(super) type Matrix = [[f64; 3]; 3];
/// Gains: u = −K e, a row for the speed and one for the turn rate.
pub(super) type Gain = [[f64; 3]; 2];

/// The weights of the cost ∫ (eᵀ Q e + uᵀ R u) dt; both matrices are diagonal.
#[derive(Clone, Copy, Debug)]
pub(super) struct Weights {
    /// Q: along, across, heading.
    pub(super) error: [f64; 3],
    /// R: speed, turn rate.
    pub(super) effort: [f64; 2],
}

/// The error model, held over a step.
#[derive(Clone, Copy, Debug)]
pub(super) struct Held {
    a: Matrix,
    b: [[f64; 2]; 3],
    seconds: f64,
}

impl Held {
    /// About a reference that moves like this, over `seconds`.
    pub(super) fn new(motion: BodyVelocity, seconds: f64) -> Self {
        let (v, w, h) = (motion.speed_m_s, motion.turn_rate_rad_s, seconds);
        let angle = w * h;
        let (cos, sin) = math::cos_sin(angle);
        let half = math::sinc(0.5 * angle);
        let (c_1, c_2, c_3) =
            (h * math::sinc(angle), 0.5 * h * h * half * half, h * h * h * cubic_rest(angle, sin));
        Self {
            a: [[cos, sin, v * w * c_2], [-sin, cos, v * c_1], [0.0, 0.0, 1.0]],
            b: [[-c_1, -v * w * c_3], [w * c_2, -v * c_2], [0.0, -h]],
            seconds,
        }
    }

    /// One step backward: the cost to go before the step and the gain in it, from the cost to go after it.
    pub(super) fn backward(&self, after: &Matrix, weights: &Weights) -> (Matrix, Gain) {
        let Self { a, b, seconds } = self;
        let (after_a, after_b) = (product(after, a), product(after, b));
        let mut effort = transposed_product(b, &after_b);
        effort[0][0] += weights.effort[0] * seconds;
        effort[1][1] += weights.effort[1] * seconds;
        let coupling = transposed_product(b, &after_a);
        let gain = solved(&effort, &coupling);
        let mut before = transposed_product(a, &after_a);
        for row in 0..3 {
            for column in 0..3 {
                before[row][column] -=
                    coupling[0][row] * gain[0][column] + coupling[1][row] * gain[1][column];
            }
            before[row][row] += weights.error[row] * seconds;
        }
        (symmetric(&before), gain)
    }

    /// The cost to go of 2^`doublings` such steps, nothing after them.
    pub(super) fn repeated(&self, weights: &Weights, doublings: u32) -> Matrix {
        let mut a = self.a;
        // B R⁻¹ Bᵀ, R over the step.
        let scaled = self.b.map(|row| [0, 1].map(|k| row[k] / (weights.effort[k] * self.seconds)));
        let mut effort: Matrix =
            scaled.map(|left| self.b.map(|right| left[0] * right[0] + left[1] * right[1]));
        let mut cost: Matrix = [[0.0; 3]; 3];
        (0..3).for_each(|index| cost[index][index] = weights.error[index] * self.seconds);
        for _ in 0..doublings {
            // (I + G H)⁻¹ A and (I + G H)⁻¹ G
            let mut inner = product(&effort, &cost);
            (0..3).for_each(|index| inner[index][index] += 1.0);
            let inverse = inverted(&inner);
            let (next, reach) = (product(&inverse, &a), product(&inverse, &effort));
            let cost_next = transposed_product(&a, &product(&cost, &next));
            let effort_next = product(&a, &product_transposed(&reach, &a));
            a = product(&a, &next);
            cost = symmetric(&sum(&cost, &cost_next));
            effort = symmetric(&sum(&effort, &effort_next));
        }
        cost
    }
}

/// (a − sin a)/a³.
fn cubic_rest(angle: f64, sin: f64) -> f64 {
    let square = angle * angle;
    if square < 0.25 {
        // Alternating Taylor series; the first term left out is below a¹²/15! < 2e-16 · (1/6).
        let inner = 1.0 / 39_916_800.0 - square / 6_227_020_800.0;
        let inner = 1.0 / 362_880.0 - square * inner;
        let inner = 1.0 / 5040.0 - square * inner;
        let inner = 1.0 / 120.0 - square * inner;
        return 1.0 / 6.0 - square * inner;
    }
    (angle - sin) / (angle * square)
}

fn product<const N: usize, const M: usize>(left: &[[f64; M]; 3], right: &[[f64; N]; M]) -> [[f64; N]; 3] {
    let mut result = [[0.0; N]; 3];
    for (row, left) in result.iter_mut().zip(left) {
        for (column, value) in row.iter_mut().enumerate() {
            *value = left.iter().zip(right).map(|(factor, right)| factor * right[column]).sum();
        }
    }
    result
}

/// leftᵀ right.
fn transposed_product<const N: usize, const M: usize>(
    left: &[[f64; M]; 3],
    right: &[[f64; N]; 3],
) -> [[f64; N]; M] {
    let mut result = [[0.0; N]; M];
    for (row, result) in result.iter_mut().enumerate() {
        for (column, value) in result.iter_mut().enumerate() {
            *value = left.iter().zip(right).map(|(left, right)| left[row] * right[column]).sum();
        }
    }
    result
}

/// left rightᵀ.
fn product_transposed(left: &Matrix, right: &Matrix) -> Matrix {
    left.map(|left| right.map(|right| left[0] * right[0] + left[1] * right[1] + left[2] * right[2]))
}

fn sum(left: &Matrix, right: &Matrix) -> Matrix {
    let mut result = *left;
    for (row, right) in result.iter_mut().zip(right) {
        row.iter_mut().zip(right).for_each(|(value, right)| *value += right);
    }
    result
}

/// The symmetric part: rounding would let the matrix drift away from it.
fn symmetric(matrix: &Matrix) -> Matrix {
    let mut result = *matrix;
    for (row, values) in result.iter_mut().enumerate() {
        for (column, value) in values.iter_mut().enumerate() {
            *value = 0.5 * (matrix[row][column] + matrix[column][row]);
        }
    }
    result
}

/// The solution of a positive definite system of two equations, column by column.
fn solved(matrix: &[[f64; 2]; 2], right: &Gain) -> Gain {
    let [[a, b], [c, d]] = *matrix;
    let determinant = a * d - b * c;
    let mut result = [[0.0; 3]; 2];
    for column in 0..3 {
        let (first, second) = (right[0][column], right[1][column]);
        result[0][column] = (d * first - b * second) / determinant;
        result[1][column] = (a * second - c * first) / determinant;
    }
    result
}

/// The inverse of I + G H with G and H positive semidefinite: its eigenvalues are at least 1, so it always exists.
fn inverted(matrix: &Matrix) -> Matrix {
    let [[a, b, c], [d, e, f], [g, h, i]] = *matrix;
    let (first, second, third) = (e * i - f * h, f * g - d * i, d * h - e * g);
    let determinant = a * first + b * second + c * third;
    [
        [first, c * h - b * i, b * f - c * e],
        [second, a * i - c * g, c * d - a * f],
        [third, b * g - a * h, a * e - b * d],
    ]
    .map(|row| row.map(|value| value / determinant))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::law::testing::Random;
    use alloc::vec::Vec;

    fn cost_of(cost: &Matrix, e: &[f64; 3]) -> f64 {
        (0..3).map(|row| (0..3).map(|column| e[row] * cost[row][column] * e[column]).sum::<f64>()).sum()
    }

    /// The cost to go is the regulator's Lyapunov function on the linear error model, whatever the motion ahead: over
    /// a step it falls by what the step costs. 10,000 runs; growth within 1e-12 of the beginning counts as none.
    #[test]
    fn the_cost_to_go_never_grows() {
        for run in 0..10_000 {
            let mut random = Random(run);
            let weights = Weights {
                error: [0.1, 0.1, 0.01].map(|low| random.magnitude(low, 100.0 * low)),
                effort: [0.1, 0.1].map(|low| random.magnitude(low, 100.0 * low)),
            };
            let mut cost = [[0.0; 3]; 3];
            let mut steps = Vec::new();
            for _ in 0..20 {
                let motion = BodyVelocity {
                    speed_m_s: random.within(-1.5, 1.5),
                    turn_rate_rad_s: random.within(-2.0, 2.0),
                };
                let held = Held::new(motion, 0.05);
                let (before, gain) = held.backward(&cost, &weights);
                cost = before;
                steps.push((held, gain, before));
            }
            let mut e: [f64; 3] = core::array::from_fn(|_| random.within(-1.0, 1.0));
            let begin = cost_of(&cost, &e);
            let mut last = begin;
            for (held, gain, before) in steps.iter().rev() {
                let value = cost_of(before, &e);
                assert!(value <= last + 1e-12 * begin, "{last} {value}");
                last = value;
                let u = gain.map(|row| -(row[0] * e[0] + row[1] * e[1] + row[2] * e[2]));
                e = core::array::from_fn(|row| {
                    let own: f64 = held.a[row].iter().zip(e).map(|(factor, e)| factor * e).sum();
                    own + held.b[row][0] * u[0] + held.b[row][1] * u[1]
                });
            }
        }
    }

    #[test]
    fn doubling_is_the_recursion_repeated() {
        let weights = Weights { error: [4.0, 10.0, 1.0], effort: [1.0, 0.5] };
        for (v, w) in [(1.0, 0.0), (-0.3, 0.8), (0.0, 0.5), (0.0, 0.0)] {
            let held = Held::new(BodyVelocity { speed_m_s: v, turn_rate_rad_s: w }, 0.05);
            let mut cost = [[0.0; 3]; 3];
            (0..64).for_each(|_| cost = held.backward(&cost, &weights).0);
            let doubled = held.repeated(&weights, 6);
            for (cost, doubled) in cost.iter().flatten().zip(doubled.iter().flatten()) {
                assert!((cost - doubled).abs() < 1e-10 * cost.abs().max(1.0), "{cost} {doubled}");
            }
        }
    }

    #[test]
    fn the_series_joins_the_formula() {
        for angle in [-0.500_001, -0.499_999, 0.499_999, 0.500_001_f64] {
            let direct = (angle - math::cos_sin(angle).1) / (angle * angle * angle);
            assert!((cubic_rest(angle, math::cos_sin(angle).1) - direct).abs() < 1e-14, "{angle}");
        }
        assert_eq!(cubic_rest(0.0, 0.0), 1.0 / 6.0);
    }
}
