//! What an error costs after the horizon's end.
//!
//! The error in the reference's frame, linear about a reference that goes on at (v, ω), steered with what is left of the
//! inputs: e_x' = ω e_y + δv, e_y' = −ω e_x + v e_φ, e_φ' = δω (the error model of the time-varying linear-quadratic
//! design; e.g. Klančar and Škrjanc, Robotics and Autonomous Systems 55, 2007). The cost to go over 2^n steps comes from
//! n doublings (Anderson, "Second-order convergent algorithms for the steady-state Riccati equation", International
//! Journal of Control 28(2), 1978). So it exists also where the infinite one does not: an error across a reference at rest
//! cannot be steered away by a linear law, and counts for as long as the tail is.

use crate::geometry::BodyVelocity;
use crate::math;

/// The tail is 2⁶ steps.
const DOUBLINGS: u32 = 6;

type Matrix = [[f64; 3]; 3];

/// Weights of the tail's cost per second.
#[derive(Clone, Copy, Debug)]
pub(super) struct Weights {
    /// Along-track, cross-track, heading.
    pub(super) error: [f64; 3],
    /// Speed and turn rate.
    pub(super) effort: [f64; 2],
}

/// The weight P of the error at the tail's begin: its upper triangle, row by row.
pub(super) fn weight(motion: BodyVelocity, step_s: f64, weights: &Weights) -> [f64; 6] {
    let (v, w) = (motion.speed_m_s, motion.turn_rate_rad_s);
    let turn = w * step_s;
    let (cos, sin) = math::cos_sin(turn);
    let (along, across) =
        (step_s * math::sinc(turn), step_s * math::cos_sin(0.5 * turn).1 * math::sinc(0.5 * turn));
    let mut a = [[cos, sin, v * across], [-sin, cos, v * along], [0.0, 0.0, 1.0]];
    // B R⁻¹ B' with B = [[h, 0], [0, v h²/2], [0, h]] over the step h.
    let (by_speed, by_turn) = (step_s / weights.effort[0], step_s / weights.effort[1]);
    let aside = 0.5 * v * step_s;
    let mut g = [
        [by_speed, 0.0, 0.0],
        [0.0, by_turn * aside * aside, by_turn * aside],
        [0.0, by_turn * aside, by_turn],
    ];
    let [x, y, heading] = weights.error.map(|weight| weight * step_s);
    let mut h = [[x, 0.0, 0.0], [0.0, y, 0.0], [0.0, 0.0, heading]];
    for _ in 0..DOUBLINGS {
        let inverse = inverse(&plus_identity(&times(&g, &h)));
        let ahead = times(&inverse, &a);
        let (a_inverse, h_ahead) = (times(&a, &inverse), times(&h, &ahead));
        g = sum(&g, &times(&times(&a_inverse, &g), &transposed(&a)));
        h = sum(&h, &times(&transposed(&a), &h_ahead));
        a = times(&a, &ahead);
    }
    let both = |i: usize, j: usize| 0.5 * (h[i][j] + h[j][i]);
    [h[0][0], both(0, 1), both(0, 2), h[1][1], both(1, 2), h[2][2]]
}

fn times(a: &Matrix, b: &Matrix) -> Matrix {
    a.map(|row| core::array::from_fn(|j| row[0] * b[0][j] + row[1] * b[1][j] + row[2] * b[2][j]))
}

fn sum(a: &Matrix, b: &Matrix) -> Matrix {
    core::array::from_fn(|i| core::array::from_fn(|j| a[i][j] + b[i][j]))
}

fn transposed(a: &Matrix) -> Matrix {
    core::array::from_fn(|i| core::array::from_fn(|j| a[j][i]))
}

fn plus_identity(a: &Matrix) -> Matrix {
    core::array::from_fn(|i| core::array::from_fn(|j| a[i][j] + if i == j { 1.0 } else { 0.0 }))
}

/// By cofactors. I + G H with G and H positive semidefinite has no eigenvalue below 1.
fn inverse(a: &Matrix) -> Matrix {
    let cofactor = |i: usize, j: usize| {
        let (r, s, c, d) = ((i + 1) % 3, (i + 2) % 3, (j + 1) % 3, (j + 2) % 3);
        a[r][c] * a[s][d] - a[r][d] * a[s][c]
    };
    let scale = 1.0 / (a[0][0] * cofactor(0, 0) + a[0][1] * cofactor(0, 1) + a[0][2] * cofactor(0, 2));
    core::array::from_fn(|i| core::array::from_fn(|j| scale * cofactor(j, i)))
}
