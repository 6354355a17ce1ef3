//! Programs of the predictive law, recorded from closed loops that drive it hard, and the same programs for a general
//! solver.

use clarabel::algebra::CscMatrix;
use clarabel::solver::{
    DefaultSettings, DefaultSettingsBuilder, DefaultSolver, IPSolver, NonnegativeConeT, SolverStatus,
    ZeroConeT,
};
use std::f64::consts::PI;
use std::sync::Arc;
use std::time::Instant;
use trackhold_core::geometry::{BodyVelocity, Pose};
use trackhold_core::keys::Values;
use trackhold_core::law::predictive::qp::{Limits, Program, Solver, Stage};
use trackhold_core::law::predictive::{Predictive, STEPS};
use trackhold_core::law::{self, Ahead, Context, Input, Law, Steady};
use trackhold_core::math;
use trackhold_core::plan::Reference;
use trackhold_core::vehicle::{self, Vehicle, Wheels, limit};

/// A program as it came up, and the cost of the prediction that it improves.
#[derive(Clone, Debug)]
pub struct Recorded {
    /// The program.
    pub program: Program<STEPS>,
    /// What has to be added to its cost.
    pub constant: f64,
}

/// The tick of the recorded loops, s: 100 Hz.
pub const PERIOD_S: f64 = 0.01;

/// SplitMix64 (Steele, Lea and Flood, OOPSLA 2014).
struct Random(u64);

impl Random {
    fn within(&mut self, least: f64, most: f64) -> f64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mixed = (self.0 ^ (self.0 >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        let mixed = (mixed ^ (mixed >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        let share = ((mixed ^ (mixed >> 31)) >> 11) as f64 / (1u64 << 53) as f64;
        least + share * (most - least)
    }
}

const MACHINES: [(&str, &[(&str, f64)]); 4] = [
    (
        "differential",
        &[
            ("wheel_radius_m", 0.1),
            ("track_width_m", 0.5),
            ("max_wheel_speed_rad_s", 12.0),
            ("max_wheel_accel_rad_s2", 15.0),
            ("max_wheel_decel_rad_s2", 25.0),
        ],
    ),
    (
        "unicycle",
        &[
            ("max_speed_m_s", 1.2),
            ("max_turn_rate_rad_s", 1.5),
            ("max_accel_m_s2", 0.8),
            ("max_turn_accel_rad_s2", 2.0),
        ],
    ),
    (
        "car",
        &[
            ("wheelbase_m", 1.2),
            ("max_speed_m_s", 1.5),
            ("max_accel_m_s2", 0.8),
            ("max_steer_rad", 0.5),
            ("max_steer_rate_rad_s", 0.6),
        ],
    ),
    (
        "steered-wheel",
        &[
            ("wheelbase_m", 1.0),
            ("max_speed_m_s", 1.3),
            ("max_accel_m_s2", 0.7),
            ("max_steer_rad", 1.4),
            ("max_steer_rate_rad_s", 1.0),
        ],
    ),
];

fn machine(index: usize) -> Arc<dyn Vehicle> {
    let (kind, keys) = MACHINES[index % MACHINES.len()];
    let mut values = Values::default();
    keys.iter().for_each(|(key, value)| values.set(key, *value));
    vehicle::build(kind, &values).expect("a good machine").0
}

/// So many programs, in each of which a bound is active: loops of 1.5 s from rest, 0.6 m and up to a half turn off a way
/// that takes most of what the machine has; of every fifth tick.
pub fn record(count: usize) -> Vec<Recorded> {
    let mut random = Random(2026);
    let mut recorded = Vec::with_capacity(count);
    for index in 0.. {
        let vehicle = machine(index);
        drive(&vehicle, &mut random, &mut |tick, law| {
            let (program, constant) = law.program();
            if tick % 5 == 0 && recorded.len() < count && is_bounded(program) {
                recorded.push(Recorded { program: *program, constant });
            }
        });
        if recorded.len() == count {
            break;
        }
    }
    recorded
}

/// Whether the least cost without bounds breaks one.
fn is_bounded(program: &Program<STEPS>) -> bool {
    let none = Limits { iterations: 0, tolerance: 0.0 };
    Solver::default().solve(program, 0.0, none).is_err()
}

/// Ticks of so many of these loops, as the node asks for them: whether it is a loop's first, and how long it took, s.
pub fn ticks(loops: usize, each: &mut impl FnMut(bool, f64)) {
    let mut random = Random(2027);
    for index in 0..loops {
        let mut run = Run::new(&machine(index), &mut random);
        for tick in 0..TICKS {
            run.step(|law, input| {
                let begin = Instant::now();
                let wanted = law.control(input).velocity;
                each(tick == 0, begin.elapsed().as_secs_f64());
                wanted
            });
        }
    }
}

/// Ticks of a loop.
const TICKS: u32 = 150;

fn drive(vehicle: &Arc<dyn Vehicle>, random: &mut Random, each: &mut impl FnMut(u32, &Predictive<STEPS>)) {
    let mut run = Run::new(vehicle, random);
    for tick in 0..TICKS {
        run.step(|law, input| {
            law.prepare(input);
            each(tick, law);
            law.improve().expect("it is solved within the iterations allowed");
            law.command()
        });
    }
}

/// A closed loop on an ideal machine.
struct Run {
    vehicle: Arc<dyn Vehicle>,
    law: Predictive<STEPS>,
    reference: Reference,
    pose: Pose,
    wheels: Wheels,
}

impl Run {
    fn new(vehicle: &Arc<dyn Vehicle>, random: &mut Random) -> Self {
        let context = Context { vehicle: vehicle.clone(), period_s: PERIOD_S, dead_time_s: 0.0 };
        let gains = law::gains("predictive", &Values::default(), &context).expect("defaults hold");
        let law = Predictive::new(&gains, &context).expect("the fallback law is for every machine");
        let way = if random.within(0.0, 1.0) < 0.7 { 1.0 } else { -1.0 };
        let speed_m_s = way * random.within(0.5, 0.95) * vehicle.top_speed_m_s();
        let curvature_1_m = random.within(-0.3, 0.3);
        let motion = BodyVelocity { speed_m_s, turn_rate_rad_s: speed_m_s * curvature_1_m };
        let begin = Pose::new(0.0, 0.0, random.within(-PI, PI));
        let mut off = |most: f64| random.within(-most, most);
        let turned = off(1.0);
        let heading = math::wrap(begin.heading_rad + PI * turned * turned * turned);
        let pose = Pose::new(off(0.6), off(0.6), heading);
        let reference = Reference { velocity: motion, ..Reference::at_rest(begin, curvature_1_m) };
        Self { vehicle: vehicle.clone(), law, reference, pose, wheels: [0.0; 4] }
    }

    fn step(&mut self, tick: impl FnOnce(&mut Predictive<STEPS>, &Input<'_>) -> BodyVelocity) {
        let (vehicle, reference) = (&*self.vehicle, self.reference);
        let ahead = Steady(reference);
        let last = (self.wheels, vehicle.body(&self.wheels));
        let wanted = tick(&mut self.law, &Input::new(reference, &ahead, self.pose, last, PERIOD_S));
        self.wheels = limit(vehicle, wanted, reference.curvature_1_m, &self.wheels, PERIOD_S).wheels;
        self.pose = self.pose.moved(vehicle.body(&self.wheels), PERIOD_S);
        self.reference = ahead.reference(PERIOD_S);
    }
}

/// Unknowns of one step for the general solver: two rates, the pose and the inputs at its end.
const UNKNOWNS: usize = 7;

/// A program for the general solver: its dynamics as equations, its bounds as inequalities.
#[derive(Clone, Debug)]
pub struct General {
    weight: CscMatrix<f64>,
    slope: Vec<f64>,
    rows: CscMatrix<f64>,
    bound: Vec<f64>,
    equations: usize,
    scale: f64,
}

impl General {
    /// The form of a recorded program. Its cost is scaled to that of the prediction.
    pub fn new(recorded: &Recorded) -> Self {
        let scale = 1.0 / recorded.constant;
        let count = STEPS * UNKNOWNS;
        let mut weight = Entries::default();
        let (mut slope, mut rows, mut bound) = (vec![0.0; count], Entries::default(), Vec::new());
        for (k, stage) in recorded.program.iter().enumerate() {
            costs(stage, k * UNKNOWNS, scale, &mut weight, &mut slope);
            dynamics(stage, k, &mut rows, &mut bound);
        }
        let equations = bound.len();
        for (k, stage) in recorded.program.iter().enumerate() {
            let limits = [(0, stage.rate_low, stage.rate_high), (5, stage.input_low, stage.input_high)];
            for (offset, low, high) in limits {
                for side in 0..2 {
                    let at = k * UNKNOWNS + offset + side;
                    rows.put(bound.len(), at, 1.0);
                    bound.push(high[side]);
                    rows.put(bound.len(), at, -1.0);
                    bound.push(-low[side]);
                }
            }
        }
        let (weight, rows) = (weight.matrix(count, count), rows.matrix(bound.len(), count));
        Self { weight, slope, rows, bound, equations, scale }
    }

    /// The general solver's usual settings, silent: as good as what the law's own solver is asked for.
    pub fn usual() -> DefaultSettings<f64> {
        DefaultSettings { verbose: false, ..DefaultSettings::default() }
    }

    /// Settings in which its answer is good to well below a millionth.
    pub fn settings() -> DefaultSettings<f64> {
        DefaultSettingsBuilder::default()
            .verbose(false)
            .tol_gap_abs(1e-10)
            .tol_gap_rel(1e-10)
            .tol_feas(1e-10)
            .build()
            .expect("good settings")
    }

    /// The least cost without the constant, by the general solver; none if it gives up.
    pub fn solve(&self, settings: DefaultSettings<f64>) -> Option<f64> {
        let cones = [ZeroConeT(self.equations), NonnegativeConeT(self.bound.len() - self.equations)];
        let mut solver =
            DefaultSolver::new(&self.weight, &self.slope, &self.rows, &self.bound, &cones, settings).ok()?;
        solver.solve();
        let solved = matches!(solver.solution.status, SolverStatus::Solved | SolverStatus::AlmostSolved);
        solved.then(|| solver.solution.obj_val / self.scale)
    }
}

/// Entries of a sparse matrix in any order.
#[derive(Default)]
struct Entries {
    rows: Vec<usize>,
    columns: Vec<usize>,
    values: Vec<f64>,
}

impl Entries {
    fn put(&mut self, row: usize, column: usize, value: f64) {
        self.rows.push(row);
        self.columns.push(column);
        self.values.push(value);
    }

    fn matrix(self, rows: usize, columns: usize) -> CscMatrix<f64> {
        CscMatrix::new_from_triplets(rows, columns, self.rows, self.columns, self.values)
    }
}

/// The upper triangle of the weights, and the slopes.
fn costs(stage: &Stage, begin: usize, scale: f64, weight: &mut Entries, slope: &mut [f64]) {
    let (pose, input) = (begin + 2, begin + 5);
    for side in 0..2 {
        weight.put(begin + side, begin + side, scale * stage.rate_weight[side]);
        slope[begin + side] = scale * stage.rate_slope[side];
        slope[input + side] = scale * stage.input_slope[side];
    }
    let of_pose = [(0, 0), (0, 1), (0, 2), (1, 1), (1, 2), (2, 2)];
    for ((i, j), value) in of_pose.into_iter().zip(stage.pose_weight) {
        weight.put(pose + i, pose + j, scale * value);
    }
    for (i, value) in stage.pose_slope.into_iter().enumerate() {
        slope[pose + i] = scale * value;
    }
    for ((i, j), value) in [(0, 0), (0, 1), (1, 1)].into_iter().zip(stage.input_weight) {
        weight.put(input + i, input + j, scale * value);
    }
}

/// The step's equations, from the end of the step before it: end − A begin − B (u + r a) = 0, u⁺ − u − h a = 0.
fn dynamics(stage: &Stage, k: usize, rows: &mut Entries, bound: &mut Vec<f64>) {
    let begin = k * UNKNOWNS;
    let before = k.checked_sub(1).map(|k| k * UNKNOWNS);
    for i in 0..3 {
        let row = bound.len();
        rows.put(row, begin + 2 + i, 1.0);
        for side in 0..2 {
            rows.put(row, begin + side, -stage.reach_s * stage.input[i][side]);
        }
        if let Some(before) = before {
            rows.put(row, before + 2 + i, -1.0);
            if i < 2 {
                rows.put(row, before + 4, -stage.turn[i]);
            }
            for side in 0..2 {
                rows.put(row, before + 5 + side, -stage.input[i][side]);
            }
        }
        bound.push(0.0);
    }
    for side in 0..2 {
        let row = bound.len();
        rows.put(row, begin + 5 + side, 1.0);
        rows.put(row, begin + side, -stage.length_s);
        if let Some(before) = before {
            rows.put(row, before + 5 + side, -1.0);
        }
        bound.push(0.0);
    }
}
