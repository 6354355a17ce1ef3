//! Lyapunov functions: along runs within a law's domain they never grow, integrated in continuous time (the classical
//! Runge–Kutta method), without limits, on references whose speed and turn rate change.
//!
//! A step takes at most a fiftieth of the loop's fastest time, so that the method's error in one is about (1/50)⁵/120, below
//! 1e-10 of the function; growth within 1e-9 of its value at the start counts as none.

use super::*;
use crate::law::testing::Random;

const RUNS: u64 = 10_000;
const STEPS: u32 = 120;
const STEP_SHARE: f64 = 0.02;
const TOLERANCE: f64 = 1e-9;

/// Pose seen from the reference, and the speed where that is a state.
type State = [f64; 4];

/// Speed and turn rate c₀ + c₁ sin(c₂ t + c₃).
#[derive(Clone, Copy)]
struct Wave([f64; 4]);

impl Wave {
    fn at(&self, t_s: f64) -> f64 {
        let [mean, swing, rate, phase] = self.0;
        mean + swing * math::cos_sin(rate * t_s + phase).1
    }

    fn rate_at(&self, t_s: f64) -> f64 {
        let [_, swing, rate, phase] = self.0;
        swing * rate * math::cos_sin(rate * t_s + phase).0
    }

    /// The greatest magnitude.
    fn most(&self) -> f64 {
        self.0[0].abs() + self.0[1].abs()
    }
}

/// A law with its gains, its function, and how it is run.
struct Run {
    law: Box<dyn Law>,
    speed: Wave,
    turn_rate: Wave,
    state: State,
    /// The speed is a state of its own.
    dynamic: bool,
}

impl Run {
    fn reference(&self, t_s: f64) -> Reference {
        let (speed, turn_rate) = (self.speed.at(t_s), self.turn_rate.at(t_s));
        Reference { accel_m_s2: self.speed.rate_at(t_s), ..moving(Pose::default(), speed, turn_rate) }
    }

    /// The state's rate; none where the law leaves the tick to another one.
    fn rate(&mut self, t_s: f64, state: &State) -> Option<State> {
        let reference = self.reference(t_s);
        let BodyVelocity { speed_m_s: v_d, turn_rate_rad_s: w_d } = reference.velocity;
        let pose = Pose::new(state[0], state[1], math::wrap(state[2]));
        let motion = BodyVelocity { speed_m_s: state[3], turn_rate_rad_s: 0.0 };
        let ahead = Steady(reference);
        // Over one second, so that a law that wants an acceleration shows it as the change of the speed.
        let wanted = self.law.control(&Input::new(reference, &ahead, pose, ([0.0; 4], motion), 1.0));
        let (v, w) = (wanted.velocity.speed_m_s, wanted.velocity.turn_rate_rad_s);
        let (moving, accel) = if self.dynamic { (state[3], v - state[3]) } else { (v, 0.0) };
        let (cos, sin) = math::cos_sin(state[2]);
        let rate = [w_d * state[1] + moving * cos - v_d, moving * sin - w_d * state[0], w - w_d, accel];
        (!wanted.fallback).then_some(rate)
    }

    fn step(&mut self, t_s: f64, step_s: f64) -> Option<State> {
        let at = self.state;
        let moved = |by: &State, seconds: f64| core::array::from_fn(|index| at[index] + by[index] * seconds);
        let first = self.rate(t_s, &at)?;
        let second = self.rate(t_s + 0.5 * step_s, &moved(&first, 0.5 * step_s))?;
        let third = self.rate(t_s + 0.5 * step_s, &moved(&second, 0.5 * step_s))?;
        let fourth = self.rate(t_s + step_s, &moved(&third, step_s))?;
        let sum: State = core::array::from_fn(|index| {
            (first[index] + 2.0 * (second[index] + third[index]) + fourth[index]) / 6.0
        });
        Some(moved(&sum, step_s))
    }

    /// Runs, and asserts that the function never grows; returns what is left of it, as a share.
    fn assert_never_grows(&mut self, fastest_1_s: f64, of: impl Fn(&State, &Reference) -> f64) -> f64 {
        let step_s = STEP_SHARE / fastest_1_s;
        let begin = of(&self.state, &self.reference(0.0));
        let mut last = begin;
        for step in 0..STEPS {
            let t_s = f64::from(step) * step_s;
            let Some(next) = self.step(t_s, step_s) else { break };
            self.state = next;
            let value = of(&next, &self.reference(t_s + step_s));
            assert!(value <= last + TOLERANCE * begin, "{:?} after {t_s} s: {last} {value}", self.law);
            last = value;
        }
        last / begin
    }
}

/// A law with these gains, on a reference that wavers about a mean of at least the given speed, from a state.
fn run(name: &str, gains: &[(&str, f64)], least_m_s: f64, state: [f64; 3], random: &mut Random) -> Run {
    let way = random.pick(&[1.0, -1.0]);
    let mean = random.within(least_m_s, 1.5);
    let wave = |mean: f64, swing: f64, random: &mut Random| {
        Wave([mean, random.within(0.0, swing), random.within(0.1, 3.0), random.within(0.0, 6.0)])
    };
    let speed = wave(way * mean, mean - least_m_s, random);
    let turn_mean = random.within(-1.0, 1.0);
    let turn_rate = wave(turn_mean, 0.5, random);
    let [x, y, heading] = state;
    let (law, dynamic) = (law_on("unicycle", name, gains), name == "dynamic");
    Run { law, speed, turn_rate, state: [x, y, heading, speed.at(0.0)], dynamic }
}

fn any_offset(random: &mut Random, most_m: f64) -> (f64, f64) {
    (random.within(-most_m, most_m), random.within(-most_m, most_m))
}

/// The share that is left of a function in the runs, by median; each run asserts.
fn over_runs(mut one: impl FnMut(&mut Random) -> f64) -> f64 {
    let mut left: Vec<f64> = (0..RUNS).map(|index| one(&mut Random(index))).collect();
    left.sort_by(f64::total_cmp);
    left[left.len() / 2]
}

// Kanayama et al. 1990: V = (e_x² + e_y²)/2 + (1 − cos e_φ)/k_y.
#[test]
fn kanayamas_function_never_grows() {
    let left = over_runs(|random| {
        let (k_x, k_y, k_heading) =
            (random.within(0.3, 6.0), random.magnitude(0.5, 70.0), random.within(0.5, 16.0));
        let (x, y) = any_offset(random, 1.0);
        let state = [x, y, random.within(-math::PI, math::PI)];
        let mut run =
            run("kanayama", &[("k_x", k_x), ("k_y", k_y), ("k_heading", k_heading)], 0.0, state, random);
        let size = math::sqrt(x * x + y * y + 4.0 / k_y);
        let fastest = k_x + run.speed.most() * (k_heading + k_y * size + 1.0 / size) + run.turn_rate.most();
        run.assert_never_grows(fastest, |state, _| {
            0.5 * (state[0] * state[0] + state[1] * state[1]) + (1.0 - math::cos_sin(state[2]).0) / k_y
        })
    });
    assert!(left < 0.9, "{left}");
}

// By derivation from the chained form: V = (x_e² + y_e² + tan² φ_e/k_2)/2, for |φ_e| < π/2.
#[test]
fn samsons_function_never_grows() {
    let left = over_runs(|random| {
        let (k_1, k_2, k_3) = (random.within(0.3, 4.0), random.magnitude(0.5, 20.0), random.within(0.5, 9.0));
        let (x, y) = any_offset(random, 1.0);
        let heading = random.within(-1.2, 1.2);
        let mut run =
            run("samson", &[("k_1", k_1), ("k_2", k_2), ("k_3", k_3)], 0.0, [x, y, heading], random);
        let tan = math::tan(heading);
        // As far as the function lets the heading go.
        let most = math::sqrt(tan * tan + k_2 * (x * x + y * y));
        let fastest = run.speed.most() * (1.0 + most * most) * (k_1 * (1.0 + most) + k_3 + k_2 + 1.0)
            + run.turn_rate.most();
        run.assert_never_grows(fastest, |state, _| {
            let tan = math::tan(state[2]);
            0.5 * (state[0] * state[0] + state[1] * state[1] + tan * tan / k_2)
        })
    });
    assert!(left < 0.99, "{left}");
}

// De Luca, Oriolo and Samson 1998: V = b (e_x² + e_y²)/2 + e_φ²/2; below π²/2 the heading error cannot come round.
#[test]
fn the_nonlinear_designs_function_never_grows() {
    let left = over_runs(|random| {
        let (b, zeta) = (random.magnitude(0.5, 40.0), random.within(0.3, 1.5));
        let heading = random.within(-3.0, 3.0);
        let room = math::sqrt((0.99 * math::PI * math::PI - heading * heading) / (2.0 * b)).min(1.0);
        let (x, y) = any_offset(random, room);
        let mut run = run("nonlinear", &[("b", b), ("zeta", zeta)], 0.0, [x, y, heading], random);
        let (speed, turn) = (run.speed.most(), run.turn_rate.most());
        let fastest = (2.0 * zeta + 4.0) * (turn + math::sqrt(b) * speed);
        run.assert_never_grows(fastest, |state, _| {
            0.5 * (b * (state[0] * state[0] + state[1] * state[1]) + state[2] * state[2])
        })
    });
    assert!(left < 0.9, "{left}");
}

// Input–output linearisation: the point's error obeys e' = −k_p e, whatever the heading.
#[test]
fn the_off_axle_points_distance_never_grows() {
    let left = over_runs(|random| {
        let (x_p, y_p) = (random.within(0.1, 0.6) * random.pick(&[1.0, -1.0]), random.within(-0.2, 0.2));
        let k_p = random.within(0.3, 4.0);
        let (x, y) = any_offset(random, 0.5);
        let state = [x, y, random.within(-math::PI, math::PI)];
        let mut run = run("off-axle", &[("x_p_m", x_p), ("y_p_m", y_p), ("k_p", k_p)], 0.0, state, random);
        // The heading turns as fast as the point moves across, by x_P.
        let reach = run.speed.most() + run.turn_rate.most() + 2.0 * k_p;
        run.assert_never_grows(k_p + reach / x_p.abs(), |state, _| {
            let (cos, sin) = math::cos_sin(state[2]);
            let off = (state[0] + cos * x_p - sin * y_p - x_p, state[1] + sin * x_p + cos * y_p - y_p);
            0.5 * (off.0 * off.0 + off.1 * off.1)
        })
    });
    assert!(left < 0.9, "{left}");
}

// Oriolo, De Luca and Vendittelli 2002: p̈ = u, so V = k_p |p − p_d|²/2 + |ṗ − ṗ_d|²/2 falls by k_d |ṗ − ṗ_d|², while ξ is
// not small: where the law falls back the run ends.
#[test]
fn dynamic_linearisations_function_never_grows() {
    let left = over_runs(|random| {
        let (k_p, k_d) = (random.within(0.2, 4.0), random.within(0.4, 5.0));
        let (x, y) = any_offset(random, 0.1);
        let state = [x, y, random.within(-0.3, 0.3)];
        let gains = &[("k_p", k_p), ("k_d", k_d), ("least_speed_m_s", 0.15)];
        let mut run = run("dynamic", gains, 0.6, state, random);
        let fastest = 4.0 * (k_d + math::sqrt(k_p) + 2.0 * run.turn_rate.most() + k_p);
        run.assert_never_grows(fastest, |state, reference| {
            let (cos, sin) = math::cos_sin(state[2]);
            let slip = (state[3] * cos - reference.velocity.speed_m_s, state[3] * sin);
            let off = state[0] * state[0] + state[1] * state[1];
            0.5 * (k_p * off + slip.0 * slip.0 + slip.1 * slip.1)
        })
    });
    assert!(left < 0.95, "{left}");
}
