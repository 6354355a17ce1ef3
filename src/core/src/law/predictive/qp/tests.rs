//! The solver against the conditions of optimality, and against a projected gradient on the same programs.

use super::{Course, Limits, Program, Solver, Stage, Unsolved};
use alloc::vec;
use alloc::vec::Vec;

const LIMITS: Limits = Limits { iterations: 30, tolerance: 1e-9 };

/// SplitMix64 (Steele, Lea and Flood, OOPSLA 2014), as numbers in [−1, 1).
struct Random(u64);

impl Random {
    fn next(&mut self) -> f64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mixed = (self.0 ^ (self.0 >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        let mixed = (mixed ^ (mixed >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        ((mixed ^ (mixed >> 31)) >> 11) as f64 / (1u64 << 52) as f64 - 1.0
    }

    fn above(&mut self, least: f64, most: f64) -> f64 {
        least + 0.5 * (self.next() + 1.0) * (most - least)
    }
}

/// A program as a machine could give it: some upper bounds lie at the prediction itself, and there is room below.
fn program<const N: usize>(random: &mut Random) -> Program<N> {
    let pull = random.above(0.1, 4.0);
    core::array::from_fn(|_| {
        let bound = |random: &mut Random, most: f64| {
            let value = random.above(-0.3 * most, most);
            value.max(0.0)
        };
        let factor: [[f64; 3]; 2] = core::array::from_fn(|_| core::array::from_fn(|_| random.next()));
        let weight = |i: usize, j: usize| {
            factor[0][i] * factor[0][j] + factor[1][i] * factor[1][j] + if i == j { 0.01 } else { 0.0 }
        };
        Stage {
            turn: [0.05 * random.next(), 0.05 * random.next()],
            input: core::array::from_fn(|_| [0.05 * random.next(), 0.05 * random.next()]),
            length_s: 0.05,
            reach_s: 0.03,
            pose_weight: [weight(0, 0), weight(0, 1), weight(0, 2), weight(1, 1), weight(1, 2), weight(2, 2)],
            pose_slope: core::array::from_fn(|_| pull * random.next()),
            input_weight: [0.01, 0.002 * random.next(), 0.01],
            input_slope: [0.01 * random.next(), 0.01 * random.next()],
            rate_weight: [1e-5; 2],
            rate_slope: [0.0; 2],
            rate_low: [-bound(random, 2.0) - 1e-2, -bound(random, 2.0) - 1e-2],
            rate_high: [bound(random, 2.0), bound(random, 2.0)],
            input_low: [-bound(random, 0.2) - 1e-3, -bound(random, 0.2) - 1e-3],
            input_high: [bound(random, 0.2), bound(random, 0.2)],
        }
    })
}

/// The cost's slope along the rates: the chain rule, back over the steps.
fn slope<const N: usize>(program: &Program<N>, course: &Course<N>) -> [[f64; 2]; N] {
    let mut slopes = [[0.0; 2]; N];
    let (mut pose, mut input) = ([0.0; 3], [0.0; 2]);
    for k in (0..N).rev() {
        let (stage, point, rate) = (&program[k], &course.points[k], course.rates[k]);
        let ([x, y, h], q, r) = (point.pose, &stage.pose_weight, &stage.input_weight);
        pose[0] += q[0] * x + q[1] * y + q[2] * h + stage.pose_slope[0];
        pose[1] += q[1] * x + q[3] * y + q[4] * h + stage.pose_slope[1];
        pose[2] += q[2] * x + q[4] * y + q[5] * h + stage.pose_slope[2];
        input[0] += r[0] * point.input[0] + r[1] * point.input[1] + stage.input_slope[0];
        input[1] += r[1] * point.input[0] + r[2] * point.input[1] + stage.input_slope[1];
        let moved = [0, 1].map(|side| (0..3).map(|row| stage.input[row][side] * pose[row]).sum::<f64>());
        for side in 0..2 {
            slopes[k][side] = stage.rate_weight[side] * rate[side]
                + stage.rate_slope[side]
                + stage.reach_s * moved[side]
                + stage.length_s * input[side];
            input[side] += moved[side];
        }
        pose[2] += stage.turn[0] * pose[0] + stage.turn[1] * pose[1];
    }
    slopes
}

fn assert_within<const N: usize>(program: &Program<N>, course: &Course<N>) {
    let along = Course::along(program, course.rates);
    for (k, stage) in program.iter().enumerate() {
        for side in 0..2 {
            let (rate, input) = (course.rates[k][side], along.points[k].input[side]);
            assert!(rate <= stage.rate_high[side] + 1e-7 && rate >= stage.rate_low[side] - 1e-7, "{rate}");
            assert!(
                input <= stage.input_high[side] + 1e-8 && input >= stage.input_low[side] - 1e-8,
                "{input}"
            );
            assert!((input - course.points[k].input[side]).abs() < 1e-12, "the course is one of the program");
        }
    }
}

#[test]
fn without_bounds_the_slope_vanishes() {
    let mut random = Random(1);
    for _ in 0..50 {
        let mut open: Program<20> = program(&mut random);
        for stage in &mut open {
            (stage.rate_low, stage.rate_high) = ([-1e9; 2], [1e9; 2]);
            (stage.input_low, stage.input_high) = ([-1e9; 2], [1e9; 2]);
        }
        let mut solver = Solver::default();
        let report = solver.solve(&open, 0.0, LIMITS).unwrap();
        assert_eq!(report.iterations, 0);
        let greatest =
            |slopes: [[f64; 2]; 20]| slopes.as_flattened().iter().fold(0.0f64, |a, b| a.max(b.abs()));
        let (begin, end) = (greatest(slope(&open, &Course::STILL)), greatest(slope(&open, solver.course())));
        assert!(end < 1e-9 * begin, "{end} of {begin}");
    }
}

/// Least cost by alternating directions (Boyd and others, "Distributed optimization and statistical learning via the
/// alternating direction method of multipliers", 2011, section 5.2), dense, slow and without a line in common.
fn by_alternating_directions<const N: usize>(program: &Program<N>) -> f64 {
    let n = 2 * N;
    let unit = |at: usize| -> Course<N> {
        let mut rates = [[0.0; 2]; N];
        rates[at / 2][at % 2] = 1.0;
        Course::along(program, rates)
    };
    let still = slope(program, &Course::STILL);
    let still = still.as_flattened();
    let mut hessian = vec![vec![0.0; n]; n];
    let mut rows: Vec<Vec<f64>> = vec![vec![0.0; n]; 2 * n];
    for at in 0..n {
        let course = unit(at);
        let column = slope(program, &course);
        for (row, value) in column.as_flattened().iter().enumerate() {
            hessian[row][at] = value - still[row];
        }
        for k in 0..N {
            for side in 0..2 {
                rows[2 * k + side][at] = course.rates[k][side];
                rows[n + 2 * k + side][at] = course.points[k].input[side] * 20.0;
            }
        }
    }
    let low = |row: usize| {
        let (stage, side) = (&program[row % n / 2], row % 2);
        if row < n { stage.rate_low[side] } else { stage.input_low[side] * 20.0 }
    };
    let high = |row: usize| {
        let (stage, side) = (&program[row % n / 2], row % 2);
        if row < n { stage.rate_high[side] } else { stage.input_high[side] * 20.0 }
    };
    let rho = 0.05;
    let mut matrix = hessian.clone();
    for i in 0..n {
        for j in 0..n {
            matrix[i][j] += rho * rows.iter().map(|row| row[i] * row[j]).sum::<f64>();
        }
    }
    let inverse = inverse(matrix);
    let (mut split, mut dual) = (vec![0.0; 2 * n], vec![0.0; 2 * n]);
    let mut rates = vec![0.0; n];
    for _ in 0..200_000 {
        let right: Vec<f64> = (0..n)
            .map(|i| {
                (0..2 * n).map(|row| rho * rows[row][i] * (split[row] - dual[row])).sum::<f64>() - still[i]
            })
            .collect();
        rates = inverse.iter().map(|row| row.iter().zip(&right).map(|(a, b)| a * b).sum()).collect();
        let mut change = 0.0f64;
        for row in 0..2 * n {
            let value: f64 = rows[row].iter().zip(&rates).map(|(a, b)| a * b).sum();
            let next = (value + dual[row]).clamp(low(row), high(row));
            change = change.max((next - split[row]).abs()).max((value - next).abs());
            dual[row] += value - next;
            split[row] = next;
        }
        if change < 1e-12 {
            break;
        }
    }
    Course::along(program, core::array::from_fn(|k| [rates[2 * k], rates[2 * k + 1]])).cost(program)
}

/// By Gauss and Jordan, with pivots.
fn inverse(mut matrix: Vec<Vec<f64>>) -> Vec<Vec<f64>> {
    let n = matrix.len();
    let mut inverse: Vec<Vec<f64>> =
        (0..n).map(|i| (0..n).map(|j| f64::from(u8::from(i == j))).collect()).collect();
    for column in 0..n {
        let pivot =
            (column..n).max_by(|a, b| matrix[*a][column].abs().total_cmp(&matrix[*b][column].abs())).unwrap();
        matrix.swap(column, pivot);
        inverse.swap(column, pivot);
        let scale = 1.0 / matrix[column][column];
        for value in matrix[column].iter_mut().chain(&mut inverse[column]) {
            *value *= scale;
        }
        for row in (0..n).filter(|row| *row != column) {
            let factor = matrix[row][column];
            for j in 0..n {
                matrix[row][j] -= factor * matrix[column][j];
                inverse[row][j] -= factor * inverse[column][j];
            }
        }
    }
    inverse
}

#[test]
fn with_bounds_the_cost_is_the_least() {
    let mut random = Random(2);
    let mut worst = 0;
    for _ in 0..40 {
        let program: Program<4> = program(&mut random);
        let mut solver = Solver::default();
        let report = solver.solve(&program, 0.0, LIMITS).unwrap();
        assert_within(&program, solver.course());
        let other = by_alternating_directions(&program);
        assert!((report.cost - other).abs() <= 1e-7 * (1e-3 + other.abs()), "{report:?} against {other}");
        worst = worst.max(report.iterations);
    }
    assert!(worst > 3, "the programs must have active bounds, or nothing was tested");
}

#[test]
fn a_thousand_programs_are_solved_within_the_iterations_allowed() {
    let mut random = Random(3);
    let mut solver = Solver::default();
    let mut worst = 0;
    for _ in 0..1000 {
        let program: Program<20> = program(&mut random);
        let report = solver.solve(&program, 0.0, LIMITS).unwrap();
        assert_within(&program, solver.course());
        worst = worst.max(report.iterations);
    }
    assert!(worst > 15, "{worst}: the programs must be hard, or nothing was tested");
}

#[test]
fn what_cannot_be_solved_is_told() {
    let mut program: Program<20> = program(&mut Random(4));
    let mut solver = Solver::default();
    let few = Limits { iterations: 2, ..LIMITS };
    assert_eq!(solver.solve(&program, 0.0, few), Err(Unsolved::Iterations));
    program[7].rate_high[0] = -0.1;
    assert_eq!(solver.solve(&program, 0.0, LIMITS), Err(Unsolved::IllPosed));
    program[7].rate_high[0] = 0.1;
    program[3].pose_slope[1] = f64::NAN;
    assert_eq!(solver.solve(&program, 0.0, LIMITS), Err(Unsolved::IllPosed));
}

#[test]
fn the_same_program_gives_the_same_bits() {
    let program: Program<20> = program(&mut Random(5));
    let (mut first, mut second) = (Solver::default(), Solver::default());
    first.solve(&program, 0.0, LIMITS).unwrap();
    second.solve(&self::program(&mut Random(6)), 0.0, LIMITS).unwrap();
    second.solve(&program, 0.0, LIMITS).unwrap();
    assert_eq!(first.course(), second.course());
}
