//! Timing, braking, joints and refusals of plans.

use super::segment::Travel;
use super::*;
use crate::keys::Values;
use crate::math;
use crate::vehicle::{self, Vehicle};
use alloc::format;
use alloc::sync::Arc;
use alloc::vec::Vec;

mod braking;
mod curves;
mod timing;

fn machine(kind: &str, pairs: &[(&str, f64)]) -> Arc<dyn Vehicle> {
    let mut values = Values::default();
    for (key, value) in pairs {
        values.set(key, *value);
    }
    vehicle::build(kind, &values).unwrap().0
}

fn unicycle() -> Arc<dyn Vehicle> {
    machine(
        "unicycle",
        &[
            ("max_speed_m_s", 2.0),
            ("max_turn_rate_rad_s", 2.0),
            ("max_accel_m_s2", 0.5),
            ("max_turn_accel_rad_s2", 1.0),
        ],
    )
}

fn file(segments: &str, open: bool) -> String {
    format!(
        r#"{{"format":"trackhold-plan/1","id":"t","revision":3,"open":{open},"start":{{"x_m":1,"y_m":2,"heading_rad":0.5}},"segments":[{segments}]}}"#
    )
}

fn closed(segments: &str) -> Plan {
    compile(file(segments, false).as_bytes(), &*unicycle()).unwrap()
}

fn refused(segments: &str) -> String {
    compile(file(segments, false).as_bytes(), &*unicycle()).unwrap_err().join("\n")
}

fn at(plan: &Plan, t_s: f64) -> Reference {
    plan.at(t_s, &mut 0)
}

/// Velocity, acceleration and curvature rate must be the derivatives they claim to be, everywhere but at the instants
/// given.
fn assert_consistent(plan: &Plan, jumps: &[f64]) {
    assert_consistent_but(plan, jumps, 2e-6);
}

/// Likewise, but within `room_s` of the instants given.
fn assert_consistent_but(plan: &Plan, jumps: &[f64], room_s: f64) {
    let h = 1e-6;
    for step in 0..2000 {
        let t = plan.duration_s() * (f64::from(step) + 0.37) / 2000.0;
        if jumps.iter().any(|jump| (jump - t).abs() < room_s) {
            continue;
        }
        let (before, here, after) = (at(plan, t - h), at(plan, t), at(plan, t + h));
        let (along, across) =
            here.direction.into_frame(after.pose.x_m - before.pose.x_m, after.pose.y_m - before.pose.y_m);
        let turn = math::wrap(after.pose.heading_rad - before.pose.heading_rad);
        assert!((along / (2.0 * h) - here.velocity.speed_m_s).abs() < 1e-6, "speed at {t}: {here:?}");
        assert!((across / (2.0 * h)).abs() < 1e-6, "sideways at {t}: {here:?}");
        assert!((turn / (2.0 * h) - here.velocity.turn_rate_rad_s).abs() < 1e-6, "turn at {t}: {here:?}");
        let curving = here.velocity.speed_m_s * here.curvature_1_m;
        assert!(here.velocity.speed_m_s == 0.0 || (curving - here.velocity.turn_rate_rad_s).abs() < 1e-9);
        let rate = |value: fn(&Reference) -> f64| (value(&after) - value(&before)) / (2.0 * h);
        let accel = rate(|it| it.velocity.speed_m_s);
        assert!((accel - here.accel_m_s2).abs() < 1e-6, "acceleration at {t}: {accel} {here:?}");
        let turn_accel = rate(|it| it.velocity.turn_rate_rad_s);
        assert!(
            (turn_accel - here.turn_accel_rad_s2).abs() < 1e-6,
            "turn acceleration at {t}: {turn_accel} {here:?}"
        );
        let bending = rate(|it| it.curvature_1_m);
        let expected = here.curvature_rate_1_m2 * here.velocity.speed_m_s.abs();
        assert!((bending - expected).abs() < 1e-6, "curvature rate at {t}: {bending} {here:?}");
    }
}

#[test]
fn a_line_brakes_over_its_last_metres_and_rests_at_the_final_pose() {
    let plan = closed(r#"{"kind":"line","length_m":10,"speed_m_s":1}"#);
    // v²/(2a) = 1 m: 9 m at 1 m/s, then 2 s of braking at 0.5 m/s².
    assert!((plan.duration_s() - 11.0).abs() < 1e-12);
    let middle = at(&plan, 10.0);
    assert!((middle.velocity.speed_m_s - 0.5).abs() < 1e-12 && middle.accel_m_s2 == -0.5);
    let end = at(&plan, 11.5);
    assert!(end.velocity.is_zero());
    assert!(end.pose.distance_to(crate::geometry::Pose::new(1.0, 2.0, 0.5).along_arc(10.0, 0.0)) < 1e-12);
    assert_consistent(&plan, &[9.0]);
}

#[test]
fn braking_reaches_back_over_short_segments_of_one_direction() {
    let short = r#"{"kind":"line","length_m":0.3,"speed_m_s":1},{"kind":"arc","radius_m":1,"turn_rad":0.3,"speed_m_s":1}"#;
    let plan = closed(&format!(r#"{{"kind":"line","length_m":5,"speed_m_s":1}},{short},{short}"#));
    assert_consistent(&plan, &plan.segment_begins().collect::<Vec<_>>());
    for t in 0..400 {
        let reference = at(&plan, plan.duration_s() * f64::from(t) / 400.0);
        assert!(reference.accel_m_s2 >= -0.5 - 1e-12);
    }
    let fully = closed(r#"{"kind":"line","length_m":0.25,"speed_m_s":1}"#);
    assert!(
        (at(&fully, 0.0).velocity.speed_m_s - 0.5).abs() < 1e-12,
        "the whole plan is too short for 1 m/s"
    );
}

#[test]
fn braking_stops_at_a_change_of_direction_and_pivots_brake_by_angle() {
    let plan = closed(
        r#"{"kind":"line","length_m":2,"speed_m_s":1},{"kind":"line","length_m":0.25,"speed_m_s":1,"reverse":true}"#,
    );
    assert_eq!(at(&plan, 1.9999).velocity.speed_m_s, 1.0, "forward at full speed up to the change");
    assert!((at(&plan, 2.0).velocity.speed_m_s + 0.5).abs() < 1e-12);
    assert_eq!(plan.travel(), Travel { forward: true, reverse: true });
    let pivot = closed(r#"{"kind":"pivot","turn_rad":-2,"rate_rad_s":1}"#);
    // ω²/(2α) = 0.5 rad: 1.5 s at 1 rad/s, then 1 s of braking.
    assert!((pivot.duration_s() - 2.5).abs() < 1e-12);
    assert!((at(&pivot, 9.0).pose.heading_rad + 1.5).abs() < 1e-12);
    assert_consistent(&pivot, &[1.5]);
}

#[test]
fn end_speeds_are_reached_at_constant_acceleration_and_reverse_arcs_turn_as_stated() {
    let plan = closed(
        r#"{"kind":"line","length_m":6,"speed_m_s":1,"end_speed_m_s":2},
           {"kind":"arc","radius_m":2,"turn_rad":1,"speed_m_s":0.5,"end_speed_m_s":0},
           {"kind":"arc","radius_m":2,"turn_rad":1,"speed_m_s":0.5,"reverse":true},
           {"kind":"dwell","duration_s":1}"#,
    );
    let begins: Vec<f64> = plan.segment_begins().collect();
    // 2L/(v0 + v1) = 4 s, then 8 s, then 4 s.
    assert!(
        (begins[1] - 4.0).abs() < 1e-12
            && (begins[2] - 12.0).abs() < 1e-12
            && (begins[3] - 16.0).abs() < 1e-12
    );
    assert!((at(&plan, 2.0).velocity.speed_m_s - 1.5).abs() < 1e-12);
    let reverse = at(&plan, 14.0);
    assert!(reverse.velocity.speed_m_s == -0.5 && reverse.velocity.turn_rate_rad_s == 0.25);
    assert_eq!(reverse.curvature_1_m, -0.5);
    assert!((at(&plan, 17.0).pose.heading_rad - 2.5).abs() < 1e-12);
    assert_consistent(&plan, &begins);
}

#[test]
fn a_rest_is_steered_for_what_comes_next() {
    let plan = closed(
        r#"{"kind":"dwell","duration_s":1},{"kind":"dwell","duration_s":1},
           {"kind":"arc","radius_m":2,"turn_rad":1,"speed_m_s":0.5,"end_speed_m_s":0,"reverse":true},
           {"kind":"dwell","duration_s":1},{"kind":"pivot","turn_rad":-1,"rate_rad_s":0.5,"end_rate_rad_s":0},
           {"kind":"dwell","duration_s":1}"#,
    );
    for t_s in [-1.0, 0.5, 1.5] {
        let rest = at(&plan, t_s);
        assert!(rest.velocity.is_zero() && rest.curvature_1_m == -0.5 && rest.rest_curvature_1_m == -0.5);
    }
    let begins: Vec<f64> = plan.segment_begins().collect();
    // What no formula may meet stays out of the curvature.
    for (t_s, rest_curvature_1_m) in
        [(begins[3], f64::NEG_INFINITY), (begins[4] + 0.1, f64::NEG_INFINITY), (99.0, f64::NEG_INFINITY)]
    {
        let reference = at(&plan, t_s);
        assert_eq!(
            (reference.curvature_1_m, reference.rest_curvature_1_m),
            (0.0, rest_curvature_1_m),
            "{t_s}"
        );
    }
    assert_consistent(&plan, &begins);
}

#[test]
fn samples_that_rest_are_steered_for_what_comes_next() {
    let points = r#"{"t_s":0,"x_m":1,"y_m":2,"heading_rad":0.5,"speed_m_s":0},{"t_s":1,"x_m":1,"y_m":2,"heading_rad":0.5,"speed_m_s":0},
        {"t_s":2,"x_m":1,"y_m":2,"heading_rad":0.5,"speed_m_s":0},{"t_s":4,"x_m":1,"y_m":2,"heading_rad":1.5,"speed_m_s":0},
        {"t_s":5,"x_m":1,"y_m":2,"heading_rad":1.5,"speed_m_s":0}"#;
    let plan = closed(&format!(r#"{{"kind":"samples","points":[{points}]}}"#));
    for t_s in [-1.0, 0.5, 1.5, 3.0, 4.5, 9.0] {
        assert_eq!(at(&plan, t_s).rest_curvature_1_m, f64::INFINITY, "{t_s}");
        assert_eq!(at(&plan, t_s).curvature_1_m, 0.0, "{t_s}");
    }
    let circle = circle(1.0, 5, false);
    let resting = circle.replacen(
        r#"{"t_s":0,"#,
        r#"{"t_s":-2,"x_m":5,"y_m":4,"heading_rad":1.5707963267948966,"speed_m_s":0},{"t_s":-1,"x_m":5,"y_m":4,"heading_rad":1.5707963267948966,"speed_m_s":0},{"speed_m_s":0,"t_s":0,"#,
        1,
    );
    let raw = file(&resting, false).replace(
        r#""x_m":1,"y_m":2,"heading_rad":0.5"#,
        r#""x_m":5,"y_m":4,"heading_rad":1.5707963267948966"#,
    );
    let plan = compile(raw.as_bytes(), &*unicycle()).unwrap();
    let (resting, driving) = (at(&plan, 0.5), at(&plan, 2.3));
    // The first cubic starts along the heading and bends later, so that its middle is straighter than the circle.
    assert!(resting.velocity.is_zero() && resting.rest_curvature_1_m > 0.15, "{resting:?}");
    assert!((driving.curvature_1_m - 0.5).abs() < 0.05, "{driving:?}");
}

#[test]
fn large_and_small_radii_meet_the_exact_arc() {
    for radius in [0.5, 999.0, 1001.0, 9e4] {
        let turn = 3.0 / radius;
        let plan =
            closed(&format!(r#"{{"kind":"arc","radius_m":{radius},"turn_rad":{turn},"speed_m_s":0.9}}"#));
        let exact = crate::geometry::Pose::new(1.0, 2.0, 0.5).along_arc(3.0, turn);
        assert!(at(&plan, 99.0).pose.distance_to(exact) < 1e-11, "{radius}");
    }
}

/// Points on a circle of radius 2 about (3, 4), driven at `speed`, with the headings of the motion.
fn circle(speed: f64, count: usize, stated: bool) -> String {
    let points: Vec<String> = (0..count)
        .map(|index| {
            let t = 0.2 * index as f64;
            let angle = speed.abs() * t / 2.0;
            let heading = angle + math::FRAC_PI_2 + if speed < 0.0 { math::PI } else { 0.0 };
            let (cos, sin) = math::cos_sin(angle);
            let rates = if stated { format!(r#","speed_m_s":{speed}"#) } else { String::new() };
            format!(
                r#"{{"t_s":{t},"x_m":{},"y_m":{},"heading_rad":{heading}{rates}}}"#,
                3.0 + 2.0 * cos,
                4.0 + 2.0 * sin
            )
        })
        .collect();
    format!(r#"{{"kind":"samples","points":[{}]}}"#, points.join(","))
}

fn sampled(speed: f64, count: usize, stated: bool) -> Plan {
    let heading = math::FRAC_PI_2 + if speed < 0.0 { math::PI } else { 0.0 };
    let raw = format!(
        r#"{{"format":"trackhold-plan/1","id":"s","revision":1,"start":{{"x_m":5,"y_m":4,"heading_rad":{heading}}},"segments":[{}]}}"#,
        circle(speed, count, stated)
    );
    compile(raw.as_bytes(), &*unicycle()).unwrap()
}

#[test]
fn samples_of_a_circle_give_the_circle() {
    for (speed, stated) in [(1.0, true), (1.0, false), (-0.8, true), (-0.8, false)] {
        let plan = sampled(speed, 60, stated);
        // The parabola's estimate of the speed is worse by θ²/6 than the true one; the first and last piece most.
        let tolerance = if stated { 1e-5 } else { 2e-4 };
        for step in 30..1000 {
            let t = 0.01 * f64::from(step);
            let reference = at(&plan, t);
            let radius = math::length(reference.pose.x_m - 3.0, reference.pose.y_m - 4.0);
            assert!((radius - 2.0).abs() < tolerance, "{speed} {stated} {t}: {radius}");
            assert!((reference.velocity.speed_m_s - speed).abs() < 100.0 * tolerance, "{reference:?}");
            assert!((reference.velocity.turn_rate_rad_s - speed.abs() / 2.0).abs() < 0.02, "{reference:?}");
        }
        assert_consistent(&plan, &(0..60).map(|index| 0.2 * f64::from(index)).collect::<Vec<_>>());
    }
}

#[test]
fn samples_that_end_at_speed_brake_along_their_curve() {
    let plan = sampled(1.0, 60, true);
    // 11.8 m of arc; braking at 0.5 m/s² (0.5 1/m needs only half the turn acceleration) takes the last metre.
    assert!((plan.length_m() - 11.8).abs() < 1e-4, "{}", plan.length_m());
    assert!((plan.duration_s() - 12.8).abs() < 1e-3, "{}", plan.duration_s());
    let slow = at(&plan, 11.8);
    assert!((slow.velocity.speed_m_s - 0.5).abs() < 1e-3 && (slow.accel_m_s2 + 0.5).abs() < 1e-6, "{slow:?}");
    assert!(at(&plan, 13.0).velocity.is_zero());
}

#[test]
fn samples_turn_on_the_spot_where_the_position_stays() {
    let raw = r#"{"format":"trackhold-plan/1","id":"s","revision":1,"start":{"x_m":0,"y_m":0,"heading_rad":3},"segments":[
        {"kind":"samples","points":[{"t_s":0,"x_m":0,"y_m":0,"heading_rad":3,"turn_rate_rad_s":0},
        {"t_s":2,"x_m":0,"y_m":0,"heading_rad":-2.5,"turn_rate_rad_s":0}]}]}"#;
    let plan = compile(raw.as_bytes(), &*unicycle()).unwrap();
    let middle = at(&plan, 1.0);
    // The short way round, by 0.783 rad; a cubic at rest at both ends is fastest in the middle, 1.5 times the mean.
    let turn = math::TAU - 5.5;
    assert!((middle.pose.heading_rad - math::wrap(3.0 + turn / 2.0)).abs() < 1e-12);
    assert!((middle.velocity.turn_rate_rad_s - 1.5 * turn / 2.0).abs() < 1e-12);
    assert!(plan.length_m() == 0.0 && plan.travel() == Travel::default());
}

#[test]
fn the_nearest_time_finds_the_branch_the_machine_points_along() {
    // An eight: the plan crosses its own start.
    let eight = r#"{"kind":"arc","radius_m":2,"turn_rad":6.283185307179586,"speed_m_s":1},
                   {"kind":"line","length_m":3,"speed_m_s":1},{"kind":"pivot","turn_rad":1.5707963267948966,"rate_rad_s":1}"#;
    let plan = closed(eight);
    for t in [0.7, 5.123, 11.0, 14.0, 15.0] {
        let reference = at(&plan, t);
        let found = plan.nearest_time_s(reference.pose, t);
        assert!((found - t).abs() < 1e-4, "{t}: found {found}");
    }
}

#[test]
fn the_nearest_time_keeps_to_the_lap_it_was_on() {
    let plan = closed(r#"{"kind":"arc","radius_m":2,"turn_rad":60,"speed_m_s":1}"#);
    let lap_s = 2.0 * math::TAU;
    for lap in [0.0, 3.0, 7.0] {
        let place = at(&plan, lap * lap_s + 5.0).pose;
        let found = plan.nearest_time_s(place, lap * lap_s + 3.0);
        assert!((found - lap * lap_s - 5.0).abs() < 1e-3, "lap {lap}: {found}");
    }
}

#[test]
fn a_lookup_does_not_depend_on_the_cursor() {
    let many = alloc::vec![r#"{"kind":"line","length_m":0.5,"speed_m_s":1}"#; 100].join(",");
    let plan = closed(&many);
    for cursor in [0, 1, 50, 98, 99, 100, usize::MAX - 1, usize::MAX] {
        for t in [0.0, 0.5, 25.25, 49.0, 60.0] {
            assert_eq!(plan.at(t, &mut { cursor }), plan.at(t, &mut 0), "{t} from {cursor}");
        }
    }
}

#[test]
fn bad_plans_are_refused_with_place_value_and_bound() {
    for (segments, expected) in [
        (
            r#"{"kind":"line","length_m":0,"speed_m_s":1}"#,
            "segments[0] (line).length_m: 0 m is not greater than 0",
        ),
        (r#"{"kind":"line","length_m":1}"#, "segments[0] (line).speed_m_s: missing"),
        (r#"{"kind":"line","length_m":1,"speed_m_s":0}"#, "0 m/s at both ends never gets anywhere"),
        (r#"{"kind":"line","length_m":1,"speed_m_s":1,"turn_rad":1}"#, "(line).turn_rad: no such key here"),
        (r#"{"kind":"line","length_m":"1","speed_m_s":1}"#, "length_m is not a number"),
        (r#"{"kind":"line","length_m":1,"length_m":1,"speed_m_s":1}"#, "length_m is given twice"),
        (
            r#"{"kind":"loop","length_m":1}"#,
            "no such segment; known are line, arc, clothoid, spline, nurbs, pivot, dwell, samples",
        ),
        (r#"{"length_m":1}"#, "missing field `kind`"),
        (r#"{"kind":"arc","radius_m":1,"turn_rad":0,"speed_m_s":1}"#, "an arc of 0 m"),
        (
            r#"{"kind":"arc","radius_m":-1,"turn_rad":1,"speed_m_s":1}"#,
            "radius_m: -1 m is not greater than 0",
        ),
        (
            r#"{"kind":"arc","radius_m":0.4,"turn_rad":1,"speed_m_s":1}"#,
            "turn rate 2.5000 rad/s, the limit is 2 rad/s",
        ),
        (r#"{"kind":"line","length_m":1,"speed_m_s":2.1}"#, "speed 2.1000 m/s, the limit is 2 m/s"),
        (r#"{"kind":"pivot","turn_rad":1,"rate_rad_s":2.5}"#, "turn rate 2.5000 rad/s, the limit is 2 rad/s"),
        (r#"{"kind":"pivot","turn_rad":0,"rate_rad_s":1}"#, "turn_rad: 0 rad is no turn"),
        (
            r#"{"kind":"pivot","turn_rad":1,"rate_rad_s":1,"reverse":true}"#,
            "reverse: a pivot has no direction",
        ),
        (r#"{"kind":"dwell","duration_s":-1}"#, "duration_s: -1 s is not greater than 0"),
        (r#"{"kind":"dwell","duration_s":1,"points":[]}"#, "points: a dwell has no points"),
        (r#"{"kind":"samples"}"#, "points: missing"),
        (
            r#"{"kind":"samples","points":[{"t_s":0,"x_m":1,"y_m":2,"heading_rad":0.5}]}"#,
            "1 of them, give at least two",
        ),
        (
            r#"{"kind":"samples","points":[{"t_s":0,"x_m":1.1,"y_m":2,"heading_rad":0.5},{"t_s":1,"x_m":1.2,"y_m":2,"heading_rad":0.5}]}"#,
            "points[0]: 0.1000 m and 0.0000 rad from the end of the segment before",
        ),
        (
            r#"{"kind":"samples","points":[{"t_s":0,"x_m":1,"y_m":2,"heading_rad":0.5},{"t_s":0,"x_m":1.2,"y_m":2,"heading_rad":0.5}]}"#,
            "points[1].t_s: 0 s does not lie at least 1 µs after the point before",
        ),
    ] {
        let text = refused(segments);
        assert!(text.contains(expected), "{segments}\n{text}\nexpected: {expected}");
    }
}

#[test]
fn bad_heads_are_refused() {
    for (from, to, expected) in [
        ("trackhold-plan/1", "trackhold-plan/2", "this program reads"),
        (r#""id":"t""#, r#""id":"""#, "id: 0 bytes long"),
        (r#""revision":3"#, r#""revision":-3"#, "invalid value"),
        (r#""open":false"#, r#""opne":false"#, "unknown field `opne`"),
        (r#""x_m":1"#, r#""x_m":1e300"#, "start.x_m"),
        (r#"{"kind":"dwell","duration_s":1}"#, "", "segments: 0 of them"),
    ] {
        let raw = file(r#"{"kind":"dwell","duration_s":1}"#, false).replace(from, to);
        let text = compile(raw.as_bytes(), &*unicycle()).unwrap_err().join("\n");
        assert!(text.contains(expected), "{text}");
    }
    assert!(compile(b"\xff\x00", &*unicycle()).is_err());
}

#[test]
fn a_car_refuses_pivots_and_tight_bends() {
    let car = machine(
        "car",
        &[
            ("wheelbase_m", 1.2),
            ("max_speed_m_s", 2.0),
            ("max_accel_m_s2", 1.0),
            ("max_steer_rad", 0.5),
            ("max_steer_rate_rad_s", 1.0),
        ],
    );
    for (segment, expected) in [
        (r#"{"kind":"pivot","turn_rad":1,"rate_rad_s":1}"#, "this machine steers and cannot do that"),
        (
            r#"{"kind":"arc","radius_m":2,"turn_rad":1,"speed_m_s":1}"#,
            "steering angle 0.5404 rad, the limit is 0.5 rad",
        ),
    ] {
        let text = compile(file(segment, false).as_bytes(), &*car).unwrap_err().join("\n");
        assert!(text.contains(expected), "{text}");
    }
}
