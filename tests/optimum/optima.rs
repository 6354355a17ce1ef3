//! The optima drive through our own vehicle: plan, limits, motion and cost are what the script computed without us.

use crate::scenario::{self, Scenario};
use trackhold_core::geometry::Pose;
use trackhold_core::math;
use trackhold_core::plan::check;
use trackhold_core::vehicle::{Vehicle, Wheels, limit};

/// The tables are rounded to 1e-9; a reference may be half of that and a rounding error away.
const ROUNDED: f64 = 1e-9;

fn gap(a: Pose, b: Pose) -> f64 {
    a.distance_to(b).max(math::wrap(a.heading_rad - b.heading_rad).abs())
}

/// Every command lies within the limits, and the tick's rule lets it through as it is.
fn assert_within_limits(
    scenario: &Scenario,
    vehicle: &dyn Vehicle,
    last: &Wheels,
    wheels: &Wheels,
    k: usize,
) {
    let steps = vehicle.largest_steps(last, wheels, scenario.period_s);
    for side in 0..2 {
        let (step, top) = ((wheels[side] - last[side]).abs(), vehicle.greatest()[side]);
        assert!(
            step <= steps[side] + 1e-12 && wheels[side].abs() <= top,
            "{} {k}: {last:?} {wheels:?}",
            scenario.name
        );
    }
    let passed = limit(vehicle, vehicle.body(wheels), 0.0, last, scenario.period_s).wheels;
    let changed = (0..2).map(|side| (passed[side] - wheels[side]).abs()).fold(0.0, f64::max);
    assert!(changed < 1e-9, "{} {k}: {wheels:?} became {passed:?}", scenario.name);
}

/// Drives a table's commands from the start; returns the poses, and the greatest distance from the table's.
fn driven(scenario: &Scenario, vehicle: &dyn Vehicle) -> (Vec<Pose>, f64) {
    let (mut pose, mut last, mut worst) = (scenario.start, vehicle.zero(&[0.0; 4]), 0.0_f64);
    let mut poses = Vec::with_capacity(scenario.ticks);
    for (k, row) in (1..).zip(scenario.rows()) {
        let wheels = [row.wheels[0], row.wheels[1], 0.0, 0.0];
        assert_within_limits(scenario, vehicle, &last, &wheels, k);
        pose = pose.moved(vehicle.body(&wheels), scenario.period_s);
        worst = worst.max(gap(pose, row.pose));
        last = wheels;
        poses.push(pose);
    }
    (poses, worst)
}

#[test]
fn twelve_scenarios_as_the_aim_states_them() {
    let checked = scenario::settings().checked().unwrap();
    let scenarios = scenario::all(&checked.vehicle);
    assert_eq!(scenarios.len(), 12);
    let farthest = |of: fn(Pose, Pose) -> f64| {
        let mut all: Vec<f64> = scenarios.iter().map(|one| of(one.start, one.reference(0).pose)).collect();
        all.sort_by(f64::total_cmp);
        (all[11], all[10])
    };
    let (distance, _) = farthest(Pose::distance_to);
    let (turned_round, heading) = farthest(|a, b| math::wrap(a.heading_rad - b.heading_rad).abs());
    assert!((distance - 0.6).abs() < 1e-9, "{distance}");
    assert!((turned_round - 2.8).abs() < 1e-9 && (heading - 0.9).abs() < 1e-9, "{turned_round} {heading}");
}

#[test]
fn the_plans_are_fit_and_pass_where_the_script_says() {
    let checked = scenario::settings().checked().unwrap();
    for scenario in scenario::all(&checked.vehicle) {
        let report = check::check(&scenario.raw, &checked.terms());
        assert!(report.is_fit(), "{}: {:?}", scenario.name, report.findings);
        let mut worst = 0.0_f64;
        for (k, row) in (1..).zip(scenario.rows()) {
            assert!((row.t_s - k as f64 * scenario.period_s).abs() < ROUNDED);
            worst = worst.max(gap(scenario.reference(k).pose, row.reference));
        }
        println!("{}: reference within {worst:.1e}", scenario.name);
        assert!(worst < ROUNDED, "{}: {worst:e}", scenario.name);
    }
}

#[test]
fn the_optima_drive_through_our_vehicle_and_cost_what_the_script_says() {
    let checked = scenario::settings().checked().unwrap();
    for scenario in scenario::all(&checked.vehicle) {
        let (poses, worst) = driven(&scenario, &*checked.vehicle);
        let excess = scenario.cost(&poses) / scenario.optimum - 1.0;
        println!("{}: poses within {worst:.1e}, cost within {excess:.1e}", scenario.name);
        assert!(worst < 1e-8, "{}: {worst:e}", scenario.name);
        assert!(gap(poses[poses.len() - 1], scenario.end) < 1e-8, "{}", scenario.name);
        assert!(excess.abs() < 1e-9, "{}: {excess:e}", scenario.name);
    }
}
