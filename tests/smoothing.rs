//! A smooth track through measured positions: penalised cubic B-splines (Eilers and Marx, "Flexible smoothing with
//! B-splines and penalties", Statistical Science 11(2), 1996), with third differences as the penalty.

/// Knot distance, s.
const KNOT_S: f64 = 0.2;
/// Weight of the penalty: a corner near 1 Hz at this knot distance.
const PENALTY: f64 = 1.0;

/// A twice continuously differentiable function of time.
#[derive(Debug)]
pub struct Spline {
    begin_s: f64,
    pieces: usize,
    coefficients: Vec<f64>,
}

impl Spline {
    /// Fits `values` at rising `times_s`.
    pub fn fit(times_s: &[f64], values: &[f64]) -> Self {
        let begin_s = times_s[0];
        let span_s = times_s[times_s.len() - 1] - begin_s;
        let pieces = (span_s / KNOT_S).ceil() as usize;
        let mut spline = Self { begin_s, pieces, coefficients: Vec::new() };
        let mut normal = Banded::zero(pieces + 3);
        let mut right = vec![0.0; pieces + 3];
        for (t, value) in times_s.iter().zip(values) {
            let (piece, u) = spline.piece(*t);
            let basis = basis(u);
            for (i, b) in basis.iter().enumerate() {
                right[piece + i] += b * value;
                for (j, c) in basis.iter().enumerate().take(i + 1) {
                    normal.add(piece + i, piece + j, b * c);
                }
            }
        }
        let difference = [-1.0, 3.0, -3.0, 1.0];
        for row in 0..pieces {
            for (i, b) in difference.iter().enumerate() {
                for (j, c) in difference.iter().enumerate().take(i + 1) {
                    normal.add(row + i, row + j, PENALTY * b * c);
                }
            }
        }
        spline.coefficients = normal.solve(right);
        spline
    }

    /// Value, first and second derivative.
    pub fn at(&self, t_s: f64) -> [f64; 3] {
        let (piece, u) = self.piece(t_s);
        let sum = |basis: [f64; 4]| -> f64 {
            basis
                .iter()
                .zip(&self.coefficients[piece..])
                .map(|(weight, coefficient)| weight * coefficient)
                .sum()
        };
        [sum(basis(u)), sum(slope(u)) / KNOT_S, sum(bend(u)) / (KNOT_S * KNOT_S)]
    }

    fn piece(&self, t_s: f64) -> (usize, f64) {
        let s = (t_s - self.begin_s) / KNOT_S;
        let piece = (s.floor() as usize).min(self.pieces - 1);
        (piece, s - piece as f64)
    }
}

fn basis(u: f64) -> [f64; 4] {
    let v = 1.0 - u;
    let (u2, u3) = (u * u, u * u * u);
    [
        v * v * v / 6.0,
        (3.0 * u3 - 6.0 * u2 + 4.0) / 6.0,
        (-3.0 * u3 + 3.0 * u2 + 3.0 * u + 1.0) / 6.0,
        u3 / 6.0,
    ]
}

fn slope(u: f64) -> [f64; 4] {
    let v = 1.0 - u;
    [-v * v / 2.0, (3.0 * u * u - 4.0 * u) / 2.0, (-3.0 * u * u + 2.0 * u + 1.0) / 2.0, u * u / 2.0]
}

fn bend(u: f64) -> [f64; 4] {
    [1.0 - u, 3.0 * u - 2.0, 1.0 - 3.0 * u, u]
}

/// A symmetric positive definite matrix with three diagonals beside the main one; row i holds columns i−3 to i.
struct Banded(Vec<[f64; 4]>);

impl Banded {
    fn zero(size: usize) -> Self {
        Self(vec![[0.0; 4]; size])
    }

    fn add(&mut self, row: usize, column: usize, value: f64) {
        self.0[row][3 + column - row] += value;
    }

    fn at(&self, row: usize, column: usize) -> f64 {
        self.0[row][3 + column - row]
    }

    /// Solves by Cholesky's factorisation within the band.
    fn solve(mut self, mut right: Vec<f64>) -> Vec<f64> {
        let size = self.0.len();
        for row in 0..size {
            for column in row.saturating_sub(3)..=row {
                let shared = row.saturating_sub(3)..column;
                let sum: f64 = shared
                    .map(|k| self.at(row, k) * if column >= k + 4 { 0.0 } else { self.at(column, k) })
                    .sum();
                let left = self.at(row, column) - sum;
                self.0[row][3 + column - row] =
                    if column == row { left.sqrt() } else { left / self.at(column, column) };
            }
        }
        for row in 0..size {
            let sum: f64 = (row.saturating_sub(3)..row).map(|k| self.at(row, k) * right[k]).sum();
            right[row] = (right[row] - sum) / self.at(row, row);
        }
        for row in (0..size).rev() {
            let sum: f64 = (row + 1..(row + 4).min(size)).map(|k| self.at(k, row) * right[k]).sum();
            right[row] = (right[row] - sum) / self.at(row, row);
        }
        right
    }
}
