//! Braking at a closed plan's end where the curvature changes: the wheels' own limits hold.

use super::*;
use crate::plan::check::{is_rate, loads_at};
use proptest::prelude::*;

/// Machines whose wheels gain or lose speed with the curvature.
fn machines() -> [Arc<dyn Vehicle>; 3] {
    let differential = [
        ("wheel_radius_m", 0.1),
        ("track_width_m", 0.6),
        ("max_wheel_speed_rad_s", 20.0),
        ("max_wheel_accel_rad_s2", 15.0),
    ];
    let steered = [
        ("wheelbase_m", 1.2),
        ("max_speed_m_s", 3.0),
        ("max_accel_m_s2", 0.8),
        ("max_decel_m_s2", 1.2),
        ("max_steer_rad", 1.6),
        ("max_steer_rate_rad_s", 50.0),
    ];
    [machine("differential", &differential), machine("steered-wheel", &steered), unicycle()]
}

/// The greatest share of a limit on acceleration or deceleration from `from_s` to the end.
fn greatest_share(plan: &Plan, vehicle: &dyn Vehicle, from_s: f64) -> f64 {
    let mut greatest = 0.0_f64;
    for look in 0..=2000 {
        let t_s = from_s + (plan.duration_s() - from_s) * f64::from(look) / 2000.0 - 1e-9;
        let loads = loads_at(vehicle, &at(plan, t_s), false).unwrap();
        let rates = loads.iter().filter(|load| is_rate(load.limit) && load.unit != "rad/s");
        greatest = rates.map(|load| load.share()).fold(greatest, f64::max);
    }
    greatest
}

/// Where the plan's braking begins, s.
fn braked_from_s(plan: &Plan) -> f64 {
    let braked = plan.slots.iter().find_map(|slot| Some(slot.begin_s + slot.brake.as_ref()?.from_s));
    braked.unwrap_or(plan.duration_s())
}

fn clothoid(from: f64, to: f64, length: f64, speed: f64) -> String {
    format!(
        r#"{{"kind":"clothoid","curvature_start_1_m":{from},"curvature_end_1_m":{to},"length_m":{length},"speed_m_s":{speed}}}"#
    )
}

#[test]
fn a_wheel_that_slows_with_the_bend_has_less_left_for_braking() {
    // From 3 1/m to straight ahead within 1 m: the outer wheel loses 0.9 times the speed squared on top of the braking.
    let [differential, ..] = machines();
    let plan = compile(file(&clothoid(3.0, 0.0, 1.0, 0.8), false).as_bytes(), &*differential).unwrap();
    let greatest = greatest_share(&plan, &*differential, 0.0);
    assert!(greatest <= 1.0 + 1e-9 && greatest > 0.9, "{greatest}");
    // Where the curvature stays the braking is the greatest there is, 15 rad/s² · 0.1 m.
    let arc = r#"{"kind":"line","length_m":4,"speed_m_s":0.8}"#;
    let plan = compile(file(arc, false).as_bytes(), &*differential).unwrap();
    assert_eq!(at(&plan, plan.duration_s() - 0.1).accel_m_s2, -1.5);
}

#[test]
fn a_curve_that_brakes_in_its_last_bend_keeps_every_wheel_within_its_limits() {
    let nurbs = r#"{"kind":"nurbs","degree":3,"knots":[0,0,0,0,0.5,1,1,1,1],"speed_m_s":0.7,
        "points":[{"x_m":1,"y_m":2},{"x_m":1.8,"y_m":2.4370241},{"x_m":2.2,"y_m":1.6},{"x_m":2.6,"y_m":1.6},{"x_m":2.9,"y_m":2.4}]}"#;
    let [differential, ..] = machines();
    let plan = compile(file(nurbs, false).as_bytes(), &*differential).unwrap();
    let greatest = greatest_share(&plan, &*differential, braked_from_s(&plan));
    assert!(greatest <= 1.0 + 1e-3 && greatest > 0.9, "{greatest}");
}

proptest! {
    #[test]
    fn braking_on_clothoids_keeps_every_wheel_within_its_limits(
        from in -2.0..2.0_f64, middle in -2.0..2.0_f64, to in -2.0..2.0_f64,
        long in 0.5..3.0_f64, short in 0.05..0.5_f64, speed in 0.1..0.8_f64,
    ) {
        for vehicle in machines() {
            let segments = [clothoid(from, middle, long, speed), clothoid(middle, to, short, speed)].join(",");
            let raw = file(&segments, true);
            // Only plans that the machine can follow at speed, apart from their braking.
            let Ok(literal) = compile(raw.as_bytes(), &*vehicle) else { continue };
            if greatest_share(&literal, &*vehicle, 0.0) > 0.5 { continue }
            let plan = compile(file(&segments, false).as_bytes(), &*vehicle).unwrap();
            let greatest = greatest_share(&plan, &*vehicle, braked_from_s(&plan));
            prop_assert!(greatest <= 1.0 + 1e-3, "{greatest} of {vehicle:?}");
        }
    }
}
