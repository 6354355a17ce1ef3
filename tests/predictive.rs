//! The predictive law's solver beside a general one (Clarabel) on programs recorded from closed loops.

use trackhold_core::law::predictive::STEPS;
use trackhold_core::law::predictive::qp::{Course, Limits, Program, Solver};
use trackhold_tests::horizons::{General, record};

const PROGRAMS: usize = 1000;

/// How far a course is beyond the bounds at most, in shares of the greatest input.
fn excess(program: &Program<STEPS>, course: &Course<STEPS>) -> f64 {
    let mut most = f64::NEG_INFINITY;
    for (stage, (rate, point)) in program.iter().zip(course.rates.iter().zip(&course.points)) {
        for side in 0..2 {
            let (rate, input) = (rate[side], point.input[side]);
            for over in [
                (rate - stage.rate_high[side]) * stage.length_s,
                (stage.rate_low[side] - rate) * stage.length_s,
                input - stage.input_high[side],
                stage.input_low[side] - input,
            ] {
                most = most.max(over);
            }
        }
    }
    most
}

/// How many bounds hold the course.
fn active(program: &Program<STEPS>, course: &Course<STEPS>) -> usize {
    let mut count = 0;
    for (stage, (rate, point)) in program.iter().zip(course.rates.iter().zip(&course.points)) {
        for side in 0..2 {
            let (rate, input) = (rate[side], point.input[side]);
            let near = |value: f64, bound: f64| (value - bound).abs() < 1e-5;
            let rates = near(rate, stage.rate_high[side]) || near(rate, stage.rate_low[side]);
            let inputs = near(input, stage.input_high[side]) || near(input, stage.input_low[side]);
            count += usize::from(rates) + usize::from(inputs);
        }
    }
    count
}

#[test]
fn a_thousand_recorded_programs_cost_what_a_general_solver_finds() {
    let limits = Limits { iterations: 30, tolerance: 1e-8 };
    let recorded = record(PROGRAMS);
    let mut solver = Solver::default();
    let (mut worst, mut beyond, mut held, mut most) = (0.0f64, f64::NEG_INFINITY, Vec::new(), 0);
    for one in &recorded {
        let report = solver.solve(&one.program, one.constant, limits).expect("it is solved");
        // The cost of its rates alone, so that a course that is not the program's would show.
        let course = Course::along(&one.program, solver.course().rates);
        let ours = course.cost(&one.program);
        let theirs = General::new(one).solve(General::settings()).expect("the general solver solves it");
        worst = worst.max((ours - theirs).abs() / (one.constant + theirs));
        beyond = beyond.max(excess(&one.program, &course));
        held.push(active(&one.program, &course));
        most = most.max(report.iterations);
    }
    held.sort_unstable();
    println!(
        "{PROGRAMS} programs: worst {worst:.1e} of the cost, {beyond:.1e} beyond a bound, at most {most} iterations; \
         bounds that hold: {} in the middle, {} at most",
        held[PROGRAMS / 2],
        held[PROGRAMS - 1]
    );
    assert!(worst < 1e-6, "{worst}");
    assert!(beyond < 1e-7, "{beyond}");
    assert!(held[PROGRAMS / 2] >= 10, "the programs must be hard, or nothing was tested");
}
