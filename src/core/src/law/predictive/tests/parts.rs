//! The parts: the linearised motion, the tail's weight, the cost.

use super::super::gains::Weights;
use super::super::horizon::Horizon;
use super::super::machine::Machine;
use super::super::prediction::Prediction;
use super::super::qp::{Course, Stage};
use super::super::tail;
use super::{Way, gains, machines};
use crate::geometry::{BodyVelocity, Pose};
use crate::law::{Ahead, Input};

const N: usize = 12;

/// A horizon of a machine, and a motion that swings within half of its limits.
fn swinging(context: &crate::law::Context) -> (Machine, Horizon<N>, Prediction<N>) {
    let machine = Machine::new(context.vehicle.clone());
    let way = Way::endless(0.5, 0.2);
    let reference = way.reference(0.0);
    let pose =
        Pose::new(reference.pose.x_m + 0.2, reference.pose.y_m - 0.3, reference.pose.heading_rad + 0.4);
    let wheels =
        context.vehicle.wheels(BodyVelocity { speed_m_s: 0.4, turn_rate_rad_s: 0.1 }, 0.25, &[0.4; 4]);
    let input = Input::new(reference, &way, pose, (wheels, context.vehicle.body(&wheels)), 0.02);
    let mut horizon = Horizon::BLANK;
    horizon.look(&input, 0.4, &machine, &Weights::new(&gains(&[("cross_weight", 2.0)])), 0.02);
    let mut prediction = Prediction::BLANK;
    prediction.follow(&horizon, &machine, |index, _, shares| {
        [shares[0] + 0.01, shares[1] + if index < 5 { 0.01 } else { -0.02 }]
    });
    (machine, horizon, prediction)
}

/// The program's value and slope are those of the true cost: central differences along single inputs.
#[test]
fn the_program_is_the_cost_to_first_order() {
    for context in machines() {
        let (machine, horizon, prediction) = swinging(&context);
        let mut program = [Stage::BLANK; N];
        prediction.linearise(&horizon, &machine, &mut program);
        let mut trial = Prediction::BLANK;
        for at in 0..2 * N {
            // One input differs at one point: up to it and down again.
            let mut rates = [[0.0; 2]; N];
            let (k, side) = (at / 2, at % 2);
            rates[k][side] = 1.0 / program[k].length_s;
            if k + 1 < N {
                rates[k + 1][side] = -1.0 / program[k + 1].length_s;
            }
            let course = Course::along(&program, rates);
            let tiny = 1e-6;
            let mut cost = |share: f64| {
                trial.improve(&prediction, &course, share, &horizon, &machine);
                trial.cost
            };
            let found = (cost(tiny) - cost(-tiny)) / (2.0 * tiny);
            let scaled = |share: f64| {
                let rates = rates.map(|rate| rate.map(|value| value * share));
                Course::along(&program, rates).cost(&program)
            };
            let stated = (scaled(tiny) - scaled(-tiny)) / (2.0 * tiny);
            assert!(
                (found - stated).abs() < 1e-5 * (1.0 + found.abs()),
                "{:?} input {side} at {k}: {found} against {stated}",
                context.vehicle
            );
        }
    }
}

#[test]
fn the_prediction_is_within_its_program() {
    for context in machines() {
        let (machine, horizon, mut prediction) = swinging(&context);
        prediction.follow(
            &horizon,
            &machine,
            |index, _, _| if index < 6 { [5.0, -5.0] } else { [-5.0, 5.0] },
        );
        let mut program = [Stage::BLANK; N];
        prediction.linearise(&horizon, &machine, &mut program);
        for stage in &program {
            for side in 0..2 {
                assert!(stage.rate_low[side] <= 0.0 && stage.rate_high[side] >= 0.0);
                assert!(stage.input_low[side] <= 0.0 && stage.input_high[side] >= 0.0);
                let widest = stage.rate_high[side] - stage.rate_low[side];
                assert!(widest > 0.1 && widest < 10.0, "{widest}");
            }
        }
    }
}

/// The doubled tail is the plain recursion of 64 steps (textbook: P ← Q + A'PA − A'PB (R + B'PB)⁻¹ B'PA).
#[test]
fn the_tail_is_the_cost_of_64_steps() {
    let weights = tail::Weights { error: [1.0, 2.0, 0.1], effort: [0.02, 0.001] };
    let h = 0.05;
    for (v, w) in [(0.6, 0.0), (0.5, 0.8), (-0.7, 0.3), (0.0, 1.0), (0.0, 0.0)] {
        let motion = BodyVelocity { speed_m_s: v, turn_rate_rad_s: w };
        let [xx, xy, xh, yy, yh, hh] = tail::weight(motion, h, &weights);
        let doubled = [[xx, xy, xh], [xy, yy, yh], [xh, yh, hh]];
        let plain = by_recursion(v, w, h, &weights);
        for i in 0..3 {
            for j in 0..3 {
                let (one, other) = (doubled[i][j], plain[i][j]);
                assert!((one - other).abs() < 1e-9, "{v}, {w}: {one} against {other} at {i}, {j}");
            }
        }
    }
}

fn by_recursion(v: f64, w: f64, h: f64, weights: &tail::Weights) -> [[f64; 3]; 3] {
    let (sin, cos) = (libm::sin(w * h), libm::cos(w * h));
    let (along, across) = if w == 0.0 { (h, 0.0) } else { (sin / w, (1.0 - cos) / w) };
    let a = [[cos, sin, v * across], [-sin, cos, v * along], [0.0, 0.0, 1.0]];
    let b = [[h, 0.0], [0.0, 0.5 * v * h * h], [0.0, h]];
    let mut p = [[0.0; 3]; 3];
    for _ in 0..64 {
        let pa: [[f64; 3]; 3] =
            core::array::from_fn(|i| core::array::from_fn(|j| (0..3).map(|k| p[i][k] * a[k][j]).sum()));
        let pb: [[f64; 2]; 3] =
            core::array::from_fn(|i| core::array::from_fn(|j| (0..3).map(|k| p[i][k] * b[k][j]).sum()));
        let m = |i: usize, j: usize| {
            (0..3).map(|k| b[k][i] * pb[k][j]).sum::<f64>() + if i == j { weights.effort[i] * h } else { 0.0 }
        };
        let (m00, m01, m11) = (m(0, 0), m(0, 1), m(1, 1));
        let determinant = m00 * m11 - m01 * m01;
        let bpa = |i: usize, j: usize| (0..3).map(|k| b[k][i] * pa[k][j]).sum::<f64>();
        p = core::array::from_fn(|i| {
            core::array::from_fn(|j| {
                let apa: f64 = (0..3).map(|k| a[k][i] * pa[k][j]).sum();
                let (left, right) = ([bpa(0, i), bpa(1, i)], [bpa(0, j), bpa(1, j)]);
                let saved = (left[0] * (m11 * right[0] - m01 * right[1])
                    + left[1] * (m00 * right[1] - m01 * right[0]))
                    / determinant;
                apa - saved + if i == j { weights.error[i] * h } else { 0.0 }
            })
        });
    }
    p
}
