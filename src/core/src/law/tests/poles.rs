//! Closed loops, linearised about the reference, against poles from outside (`tests/reference/laws/poles.json`, NumPy).

use super::values::{cases, gains_of, number};
use super::*;

const POLES: &str = include_str!("../../../../../tests/reference/laws/poles.json");

/// A closed loop: a law on a reference in steady motion.
struct Loop {
    law: Box<dyn Law>,
    reference: Reference,
    /// The speed is a state as well.
    dynamic: bool,
}

impl Loop {
    fn order(&self) -> usize {
        if self.dynamic { 4 } else { 3 }
    }

    /// The rate of the state: the pose seen from the reference, and the speed where it is a state.
    fn rate(&mut self, state: [f64; 4]) -> [f64; 4] {
        let BodyVelocity { speed_m_s: v_d, turn_rate_rad_s: w_d } = self.reference.velocity;
        let pose = Pose::new(state[0], state[1], state[2]);
        let motion = if self.dynamic {
            BodyVelocity { speed_m_s: state[3], ..self.reference.velocity }
        } else {
            self.reference.velocity
        };
        let ahead = Steady(self.reference);
        // Over one second, so that a law that wants an acceleration shows it as the change of the speed.
        let wanted = self.law.control(&Input::new(self.reference, &ahead, pose, ([0.0; 4], motion), 1.0));
        assert!(!wanted.fallback);
        let (v, w) = (wanted.velocity.speed_m_s, wanted.velocity.turn_rate_rad_s);
        let (moving, accel) = if self.dynamic { (state[3], v - state[3]) } else { (v, 0.0) };
        let (cos, sin) = math::cos_sin(state[2]);
        [w_d * state[1] + moving * cos - v_d, moving * sin - w_d * state[0], w - w_d, accel]
    }

    /// Central differences.
    fn jacobian(&mut self) -> [[f64; 4]; 4] {
        let at = [0.0, 0.0, 0.0, self.reference.velocity.speed_m_s];
        let (step, mut jacobian) = (1e-5, [[0.0; 4]; 4]);
        for column in 0..self.order() {
            let (mut above, mut below) = (at, at);
            above[column] += step;
            below[column] -= step;
            let (above, below) = (self.rate(above), self.rate(below));
            for row in 0..4 {
                jacobian[row][column] = (above[row] - below[row]) / (2.0 * step);
            }
        }
        jacobian
    }
}

/// The characteristic polynomial of an n × n matrix, from λⁿ⁻¹ down: Faddeev and LeVerrier.
fn characteristic(matrix: &[[f64; 4]; 4], order: usize) -> Vec<f64> {
    let mut coefficients = Vec::new();
    let mut product = [[0.0; 4]; 4];
    for step in 1..=order {
        let last = coefficients.last().copied().unwrap_or(1.0);
        let mut inner = product;
        (0..order).for_each(|index| inner[index][index] += last);
        product = [[0.0; 4]; 4];
        for row in 0..order {
            for column in 0..order {
                product[row][column] = (0..order).map(|k| matrix[row][k] * inner[k][column]).sum();
            }
        }
        let trace: f64 = (0..order).map(|index| product[index][index]).sum();
        coefficients.push(-trace / step as f64);
    }
    coefficients
}

/// The polynomial with these poles (real and imaginary parts; conjugates are among them), from λⁿ⁻¹ down.
fn polynomial(poles: &[(f64, f64)]) -> Vec<f64> {
    let mut coefficients = vec![(1.0, 0.0)];
    for (re, im) in poles {
        coefficients.push((0.0, 0.0));
        for index in (1..coefficients.len()).rev() {
            let before = coefficients[index - 1];
            coefficients[index].0 -= re * before.0 - im * before.1;
            coefficients[index].1 -= re * before.1 + im * before.0;
        }
    }
    coefficients.into_iter().skip(1).map(|(re, _)| re).collect()
}

#[test]
fn linearised_loops_have_the_poles_that_numpy_found() {
    let cases = cases(POLES, None);
    assert!(cases.len() > 50);
    for case in &cases {
        let name = case["law"].as_str().expect("a name");
        let (speed, turn_rate) = (number(case, "ref_speed_m_s"), number(case, "ref_turn_rate_rad_s"));
        let mut looped = Loop {
            law: law_on("unicycle", name, &gains_of(case)),
            reference: moving(Pose::new(0.0, 0.0, 0.0), speed, turn_rate),
            dynamic: name == "dynamic",
        };
        let poles: Vec<(f64, f64)> = case["poles"]
            .as_array()
            .expect("a list of poles")
            .iter()
            .map(|pole| (pole[0].as_f64().expect("a number"), pole[1].as_f64().expect("a number")))
            .collect();
        let found = characteristic(&looped.jacobian(), looped.order());
        for (found, expected) in found.iter().zip(polynomial(&poles)) {
            assert!((found - expected).abs() < 1e-7 * expected.abs().max(1.0), "{case}: {found} {expected}");
        }
    }
}

/// The natural frequency of the fastest pair or pole of the motion across the path bounds what dead time allows.
#[test]
fn the_bandwidth_is_the_natural_frequency_of_the_lateral_motion() {
    for (name, gains, speed, natural) in [
        // De Luca, Oriolo and Samson: a = √b |v_d| on a line; overdamped ζa.
        ("linear", &[("b", 9.0), ("zeta", 0.6)][..], -0.5, 1.5),
        ("nonlinear", &[("b", 9.0), ("zeta", 2.0)], 0.5, 3.0),
        // Kanayama: |v_d| √k_y.
        ("kanayama", &[("k_y", 64.0), ("k_heading", 16.0)], 0.3, 2.4),
        ("samson", &[("k_2", 4.0), ("k_3", 1.0)], 0.5, 1.0),
        ("off-axle", &[("k_p", 1.5)], 0.5, 1.5),
        ("dynamic", &[("k_p", 4.0), ("k_d", 2.4)], 0.5, 2.0),
    ] {
        assert!((law_on("unicycle", name, gains).bandwidth_rad_s(speed) - natural).abs() < 1e-12, "{name}");
    }
}
