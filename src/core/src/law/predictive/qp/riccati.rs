//! The program without its bounds: Riccati's recursion back over the steps gives the feedback of each, a sweep forth the
//! course (textbook linear-quadratic control; for interior points Rao, Wright and Rawlings, "Application of interior-point
//! methods to model predictive control", Journal of Optimization Theory and Applications 99(3), 1998).
//!
//! The cost to go from a point (p, u) is ½ (p, u)' [X Y; Y' Z] (p, u) + (y_p, y_u)'(p, u). The blocks are kept apart: A
//! differs from the identity in two entries, and the inputs' part of the dynamics is the identity.

use super::{Course, Point, Program, Stage};

/// What the bounds add to the cost of a step: diagonal weights, and slopes, of its rates and of the inputs at its end.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Barrier {
    pub(super) rate_weight: [f64; 2],
    pub(super) rate_slope: [f64; 2],
    pub(super) input_weight: [f64; 2],
    pub(super) input_slope: [f64; 2],
}

/// What one step's recursion leaves behind for its solutions.
#[derive(Clone, Copy, Debug, Default)]
struct Feedback {
    /// Inverse of the rates' Hessian: 00, 01, 11.
    inverse: [f64; 3],
    /// The rates' Hessian against the point at the step's begin.
    cross: [[f64; 5]; 2],
    /// Rates per deviation of that point.
    gain: [[f64; 5]; 2],
}

/// The cost to go, symmetric blocks as their upper triangles.
#[derive(Clone, Copy, Debug)]
struct ToGo {
    x: [f64; 6],
    y: [[f64; 2]; 3],
    z: [f64; 3],
}

/// The factored program.
#[derive(Clone, Debug)]
pub(super) struct Factors<const N: usize> {
    feedback: [Feedback; N],
    /// Constant part of each step's rates.
    offset: [[f64; 2]; N],
}

impl<const N: usize> Factors<N> {
    pub(super) const BLANK: Self = Self {
        feedback: [Feedback { inverse: [0.0; 3], cross: [[0.0; 5]; 2], gain: [[0.0; 5]; 2] }; N],
        offset: [[0.0; 2]; N],
    };

    /// Factors the program with what the bounds add; only weights count.
    pub(super) fn factor(&mut self, program: &Program<N>, barriers: &[Barrier; N]) {
        let mut to_go = ToGo { x: [0.0; 6], y: [[0.0; 2]; 3], z: [0.0; 3] };
        let steps = program.iter().zip(barriers).zip(&mut self.feedback);
        for ((stage, barrier), feedback) in steps.rev() {
            to_go.add_end(stage, barrier);
            *feedback = to_go.step_back(stage, barrier);
        }
    }

    /// The course of least cost of the factored program, with these slopes.
    pub(super) fn solve(&mut self, program: &Program<N>, barriers: &[Barrier; N], course: &mut Course<N>) {
        self.sweep_back(program, barriers);
        let mut from = Point::default();
        let steps = program.iter().zip(&self.feedback).zip(&self.offset);
        for (((stage, feedback), offset), (rate, point)) in
            steps.zip(course.rates.iter_mut().zip(&mut course.points))
        {
            let at = |side: usize| offset[side] - along(&feedback.gain[side], &from);
            *rate = [at(0), at(1)];
            *point = stage.next(&from, *rate);
            from = *point;
        }
    }

    fn sweep_back(&mut self, program: &Program<N>, barriers: &[Barrier; N]) {
        let (mut pose, mut input) = ([0.0; 3], [0.0; 2]);
        let steps = program.iter().zip(barriers).zip(self.feedback.iter().zip(&mut self.offset));
        for ((stage, barrier), (feedback, offset)) in steps.rev() {
            for (slope, end) in pose.iter_mut().zip(&stage.pose_slope) {
                *slope += end;
            }
            for (side, slope) in input.iter_mut().enumerate() {
                *slope += stage.input_slope[side] + barrier.input_slope[side];
            }
            let moved = [0, 1].map(|side| column_times(&stage.input, side, &pose));
            let slope = [0, 1].map(|side| {
                let of_rate = stage.rate_slope[side] + barrier.rate_slope[side];
                of_rate + stage.reach_s * moved[side] + stage.length_s * input[side]
            });
            let [i, j, k] = feedback.inverse;
            *offset = [-(i * slope[0] + j * slope[1]), -(j * slope[0] + k * slope[1])];
            let [first, second] = &feedback.cross;
            let kept = |index: usize| first[index] * offset[0] + second[index] * offset[1];
            let heading = pose[2] + stage.turn[0] * pose[0] + stage.turn[1] * pose[1];
            pose = [pose[0] + kept(0), pose[1] + kept(1), heading + kept(2)];
            input = [input[0] + moved[0] + kept(3), input[1] + moved[1] + kept(4)];
        }
    }
}

fn along(gain: &[f64; 5], point: &Point) -> f64 {
    let ([x, y, heading], [u, v]) = (point.pose, point.input);
    gain[0] * x + gain[1] * y + gain[2] * heading + gain[3] * u + gain[4] * v
}

fn column_times(matrix: &[[f64; 2]; 3], side: usize, vector: &[f64; 3]) -> f64 {
    matrix[0][side] * vector[0] + matrix[1][side] * vector[1] + matrix[2][side] * vector[2]
}

impl ToGo {
    /// Adds the cost of a step's end.
    fn add_end(&mut self, stage: &Stage, barrier: &Barrier) {
        for (entry, weight) in self.x.iter_mut().zip(&stage.pose_weight) {
            *entry += weight;
        }
        for (entry, weight) in self.z.iter_mut().zip(&stage.input_weight) {
            *entry += weight;
        }
        self.z[0] += barrier.input_weight[0];
        self.z[2] += barrier.input_weight[1];
    }

    /// From a step's end to its begin, the rates chosen best.
    fn step_back(&mut self, stage: &Stage, barrier: &Barrier) -> Feedback {
        let (b, [turn_x, turn_y]) = (&stage.input, stage.turn);
        let (reach, length) = (stage.reach_s, stage.length_s);
        let [xx, xy, xh, yy, yh, hh] = self.x;
        // X B, then W = X B + Y and what the inputs make of both.
        let xb = [[xx, xy, xh], [xy, yy, yh], [xh, yh, hh]]
            .map(|row| [0, 1].map(|side| column_times(b, side, &row)));
        let w: [[f64; 2]; 3] =
            core::array::from_fn(|row| [xb[row][0] + self.y[row][0], xb[row][1] + self.y[row][1]]);
        let bxb = |i: usize, j: usize| b[0][i] * xb[0][j] + b[1][i] * xb[1][j] + b[2][i] * xb[2][j];
        let by =
            |i: usize, j: usize| b[0][i] * self.y[0][j] + b[1][i] * self.y[1][j] + b[2][i] * self.y[2][j];
        let bxb = [bxb(0, 0), bxb(0, 1), bxb(1, 1)];
        let by = [[by(0, 0), by(0, 1)], [by(1, 0), by(1, 1)]];
        let twice_by = [2.0 * by[0][0], by[0][1] + by[1][0], 2.0 * by[1][1]];
        // The rates' Hessian and its inverse.
        let entry = |index: usize| {
            reach * (reach * bxb[index] + length * twice_by[index]) + length * length * self.z[index]
        };
        let first = entry(0) + stage.rate_weight[0] + barrier.rate_weight[0];
        let second = entry(2) + stage.rate_weight[1] + barrier.rate_weight[1];
        let both = entry(1);
        let scale = 1.0 / (first * second - both * both);
        let inverse = [second * scale, -both * scale, first * scale];
        // The rates' Hessian against the point at the begin: G'P F, rows for the two rates.
        let on_pose = |side: usize| {
            let at = |row: usize| reach * xb[row][side] + length * self.y[row][side];
            let (x, y, heading) = (at(0), at(1), at(2));
            [x, y, heading + turn_x * x + turn_y * y]
        };
        let zed = [[self.z[0], self.z[1]], [self.z[1], self.z[2]]];
        let index = [[0, 1], [1, 2]];
        let on_input = |side: usize, other: usize| {
            reach * (bxb[index[side][other]] + by[side][other])
                + length * (by[other][side] + zed[side][other])
        };
        let cross = [0, 1].map(|side| {
            let [x, y, heading] = on_pose(side);
            [x, y, heading, on_input(side, 0), on_input(side, 1)]
        });
        let gain = [
            core::array::from_fn(|at| inverse[0] * cross[0][at] + inverse[1] * cross[1][at]),
            core::array::from_fn(|at| inverse[1] * cross[0][at] + inverse[2] * cross[1][at]),
        ];
        // F'P F less what the rates save.
        let saved = |i: usize, j: usize| cross[0][i] * gain[0][j] + cross[1][i] * gain[1][j];
        let (x_turned, y_turned) = (xh + turn_x * xx + turn_y * xy, yh + turn_x * xy + turn_y * yy);
        let h_turned = hh + turn_x * (xh + x_turned) + turn_y * (yh + y_turned);
        self.x = [
            xx - saved(0, 0),
            xy - saved(0, 1),
            x_turned - saved(0, 2),
            yy - saved(1, 1),
            y_turned - saved(1, 2),
            h_turned - saved(2, 2),
        ];
        self.z = [
            self.z[0] + bxb[0] + twice_by[0] - saved(3, 3),
            self.z[1] + bxb[1] + twice_by[1] - saved(3, 4),
            self.z[2] + bxb[2] + twice_by[2] - saved(4, 4),
        ];
        let turned = |side: usize| w[2][side] + turn_x * w[0][side] + turn_y * w[1][side];
        self.y = [
            [w[0][0] - saved(0, 3), w[0][1] - saved(0, 4)],
            [w[1][0] - saved(1, 3), w[1][1] - saved(1, 4)],
            [turned(0) - saved(2, 3), turned(1) - saved(2, 4)],
        ];
        Feedback { inverse, cross, gain }
    }
}
