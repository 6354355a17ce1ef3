//! Trapezoids, jerk-limited profiles, timings stated point by point, on paths and pivots.

use super::*;

fn line(length: f64, timing: &str) -> String {
    format!(r#"{{"kind":"line","length_m":{length},{timing}}}"#)
}

fn trapezoid(length: f64, more: &str) -> Plan {
    closed(&line(length, &format!(r#""profile":"trapezoid","speed_m_s":1,"accel_m_s2":0.5{more}"#)))
}

/// The distance from the plan's start, along its line.
fn way(plan: &Plan, t_s: f64) -> f64 {
    let pose = at(plan, t_s).pose;
    math::length(pose.x_m - 1.0, pose.y_m - 2.0)
}

#[test]
fn trapezoids_take_the_textbooks_time() {
    // D 10, v 1, a 0.5: 12 s; D 1: triangular, peak 0.707107 m/s, 2.828427 s (computed with SciPy 1.17).
    let long = trapezoid(10.0, "");
    assert_eq!(long.duration_s(), 12.0);
    assert_eq!(at(&long, 6.0).velocity.speed_m_s, 1.0);
    assert!((way(&long, 2.0) - 1.0).abs() < 1e-15 && (way(&long, 10.0) - 9.0).abs() < 1e-14);
    let short = trapezoid(1.0, "");
    assert!((short.duration_s() - math::sqrt(8.0)).abs() < 1e-15, "{}", short.duration_s());
    assert!((short.duration_s() - 2.828_427).abs() < 1e-6);
    let peak = at(&short, 0.5 * short.duration_s()).velocity.speed_m_s;
    assert!((peak - core::f64::consts::FRAC_1_SQRT_2).abs() < 1e-15, "{peak}");
    for plan in [&long, &short] {
        assert!(at(plan, plan.duration_s()).velocity.is_zero());
        assert_consistent(plan, &[2.0, 10.0, math::sqrt(2.0)]);
    }
}

#[test]
fn trapezoids_keep_their_ends_speeds_and_a_deceleration_of_their_own() {
    let plan = compile(
        file(
            &line(
                8.0,
                r#""profile":"trapezoid","speed_m_s":1.5,"start_speed_m_s":0.5,"end_speed_m_s":1,"accel_m_s2":0.5,"decel_m_s2":0.25"#,
            ),
            true,
        )
        .as_bytes(),
        &*unicycle(),
    )
    .unwrap();
    // 2 s at 1 m/s, then 2 s at 1.25 m/s: 2 m + 2.5 m; 3.5 m at 1.5 m/s.
    assert!((plan.duration_s() - (4.0 + 3.5 / 1.5)).abs() < 1e-12);
    assert_eq!(at(&plan, 0.0).velocity.speed_m_s, 0.5);
    let end = at(&plan, plan.duration_s() - 1e-9);
    assert!((end.velocity.speed_m_s - 1.0).abs() < 1e-8 && end.accel_m_s2 == -0.25, "{end:?}");
    assert!((way(&plan, plan.duration_s()) - 8.0).abs() < 1e-12);
    // Exactly long enough to brake from 1 m/s to rest.
    let stop = trapezoid(1.0, r#","start_speed_m_s":1"#);
    assert!((stop.duration_s() - 2.0).abs() < 1e-9);
}

#[test]
fn jerk_limited_profiles_have_seven_phases_or_fewer() {
    // v 1, a 0.5, j 1: each change takes v/a + a/j = 2.5 s and v/2 × 2.5 s = 1.25 m; 10 m take 2 × 2.5 + 7.5 s.
    let plan = trapezoid(10.0, r#","jerk_m_s3":1"#);
    assert!((plan.duration_s() - 12.5).abs() < 1e-12, "{}", plan.duration_s());
    let bends = [0.5, 2.0, 2.5, 10.0, 10.5, 12.0];
    assert_consistent(&plan, &bends);
    assert_eq!(at(&plan, 1.0).accel_m_s2, 0.5);
    assert!((at(&plan, 2.25).accel_m_s2 - 0.25).abs() < 1e-12);
    // Short: neither the speed nor the acceleration is reached; four phases of (D/(2j))^⅓ s each.
    let short = trapezoid(0.1, r#","jerk_m_s3":1"#);
    let phase = libm::cbrt(0.05);
    assert!((short.duration_s() - 4.0 * phase).abs() < 1e-9, "{}", short.duration_s());
    for plan in [&plan, &short] {
        let (mut before, steps) = (at(plan, 0.0).accel_m_s2, 20_000);
        for step in 1..=steps {
            let t = plan.duration_s() * f64::from(step) / f64::from(steps);
            let reference = at(plan, t.min(plan.duration_s() - 1e-12));
            let jerk = (reference.accel_m_s2 - before) * f64::from(steps) / plan.duration_s();
            assert!(
                jerk.abs() < 1.0 + 1e-6 && reference.accel_m_s2.abs() < 0.5 + 1e-12,
                "{t}: {jerk} {reference:?}"
            );
            before = reference.accel_m_s2;
        }
        assert!(before.abs() < 1e-6 && at(plan, plan.duration_s()).velocity.is_zero());
    }
}

#[test]
fn a_timing_point_by_point_is_the_cubic_through_its_points() {
    // A jerk of 0.75 m/s³ from rest, then constant acceleration, then steady: exact, since each is a cubic.
    let points = r#""timing":[{"t_s":0,"s_m":0,"speed_m_s":0},{"t_s":0.5,"s_m":0.015625,"speed_m_s":0.09375},
        {"t_s":1.5,"s_m":0.296875,"speed_m_s":0.46875},{"t_s":4,"s_m":1.46875,"speed_m_s":0.46875}]"#;
    let plan = compile(file(&line(1.46875, points), true).as_bytes(), &*unicycle()).unwrap();
    assert_eq!(plan.duration_s(), 4.0);
    assert!((at(&plan, 0.25).accel_m_s2 - 0.75 * 0.25).abs() < 1e-14);
    assert!((at(&plan, 1.0).accel_m_s2 - 0.375).abs() < 1e-14);
    assert!((way(&plan, 0.25) - 0.75 / 6.0 * 0.25 * 0.25 * 0.25).abs() < 1e-14);
    assert!((at(&plan, 3.0).velocity.speed_m_s - 0.468_75).abs() < 1e-14);
    assert_consistent(&plan, &[0.5, 1.5]);
    // Closed, it brakes over its last v²/(2a) metres all the same.
    let braked = closed(&line(1.46875, points));
    let metres = 0.46875 * 0.46875;
    assert!((braked.duration_s() - (4.0 - metres / 0.46875 + 0.46875 / 0.5)).abs() < 1e-12);
    assert!((way(&braked, 99.0) - 1.46875).abs() < 1e-12);
}

#[test]
fn braking_meets_a_timing_whose_speed_swings() {
    // Fast, slow, fast again: the braking curve takes over after the last swing, wherever it is slower for good.
    for end in [0.6, 1.0, 1.4] {
        let points = format!(
            r#""timing":[{{"t_s":0,"s_m":0,"speed_m_s":1}},{{"t_s":2,"s_m":1.4,"speed_m_s":0.4}},{{"t_s":5,"s_m":4,"speed_m_s":{end}}}]"#
        );
        let plan = closed(&line(4.0, &points));
        let stretch = plan.stretches().next().unwrap();
        assert!(stretch.duration_s > 4.0);
        let mut before = at(&plan, 0.0).velocity.speed_m_s;
        for step in 1..=5000 {
            let t = plan.duration_s() * f64::from(step) / 5000.0;
            let speed = at(&plan, t).velocity.speed_m_s;
            assert!((speed - before).abs() < 2e-3, "{end}: no jump of the speed at {t}");
            before = speed;
        }
        assert!((way(&plan, 99.0) - 4.0).abs() < 1e-9);
    }
}

#[test]
fn pivots_take_the_same_timings_in_radians() {
    let pivot = |timing: &str| closed(&format!(r#"{{"kind":"pivot","turn_rad":-2,{timing}}}"#));
    let plan = pivot(r#""profile":"trapezoid","rate_rad_s":1,"accel_rad_s2":1"#);
    assert!((plan.duration_s() - 3.0).abs() < 1e-12);
    assert!((at(&plan, 0.5).velocity.turn_rate_rad_s + 0.5).abs() < 1e-12);
    assert_consistent(&plan, &[1.0, 2.0]);
    let stated = pivot(r#""timing":[{"t_s":0,"s_rad":0,"rate_rad_s":0},{"t_s":4,"s_rad":2,"rate_rad_s":0}]"#);
    let middle = at(&stated, 2.0);
    assert!((middle.velocity.turn_rate_rad_s + 0.75).abs() < 1e-12, "1.5 times the mean: {middle:?}");
    assert!((at(&stated, 99.0).pose.heading_rad + 1.5).abs() < 1e-12);
}

#[test]
fn a_timing_of_ten_thousand_points_is_found_by_search() {
    let points: Vec<String> = (0..10_000)
        .map(|index| {
            let t = 0.01 * f64::from(index);
            format!(r#"{{"t_s":{t},"s_m":{},"speed_m_s":0.5}}"#, 0.5 * t)
        })
        .collect();
    let plan = compile(
        file(&line(49.995, &format!(r#""timing":[{}]"#, points.join(","))), true).as_bytes(),
        &*unicycle(),
    )
    .unwrap();
    for t in [0.0, 0.004, 12.345, 99.98] {
        assert!(
            (way(&plan, t) - 0.5 * t).abs() < 1e-9 && (at(&plan, t).velocity.speed_m_s - 0.5).abs() < 1e-9
        );
    }
}

#[test]
fn bad_timings_are_refused_with_place_value_and_bound() {
    let point = |t: f64, s: f64, v: f64| format!(r#"{{"t_s":{t},"s_m":{s},"speed_m_s":{v}}}"#);
    let timing = |points: &[String]| format!(r#""timing":[{}]"#, points.join(","));
    let (begin, end) = (point(0.0, 0.0, 1.0), point(2.0, 2.0, 1.0));
    for (given, expected) in [
        (timing(core::slice::from_ref(&begin)), "segments[0] (line).timing: 1 points, give at least two"),
        (
            timing(&[point(1.0, 0.0, 1.0), end.clone()]),
            "timing[0]: begins at 1 s and 0 m; it must begin at 0 and 0",
        ),
        (
            timing(&[begin.clone(), point(2.0, 1.9, 1.0)]),
            "timing[1]: ends at 1.9 m, the segment has 2 m; they may differ by",
        ),
        (
            timing(&[begin.clone(), point(0.0, 1.0, 1.0), end.clone()]),
            "timing[1].t_s: 0 s does not lie at least 1 µs after",
        ),
        (timing(&[begin.clone(), point(1.0, -0.1, 1.0), end.clone()]), "timing[1].s_m: -0.1 is less than 0"),
        (
            timing(&[begin.clone(), point(1.0, 1.0, -1.0), end.clone()]),
            "timing[1].speed_m_s: -1 lies outside 0 to 30",
        ),
        (
            timing(&[point(0.0, 0.0, 5.0), point(2.0, 2.0, 5.0)]),
            "the cubic through s_m and speed_m_s runs backwards",
        ),
        (
            timing(&[begin.clone(), String::from(r#"{"t_s":2,"s_rad":2,"rate_rad_s":1}"#)]),
            "timing[1]: give t_s, s_m and speed_m_s, and nothing else",
        ),
        (
            format!(r#"{},"speed_m_s":1"#, timing(&[begin.clone(), end.clone()])),
            "speed_m_s: leave it out: timing says it all",
        ),
        (
            format!(r#"{},"profile":"trapezoid""#, timing(&[begin.clone(), end.clone()])),
            "profile: leave it out: timing says it all",
        ),
        (
            String::from(r#""profile":"sine","speed_m_s":1"#),
            "profile: no profile \"sine\"; known is trapezoid",
        ),
        (String::from(r#""profile":"trapezoid","speed_m_s":1"#), "accel_m_s2: missing"),
        (String::from(r#""speed_m_s":1,"accel_m_s2":1"#), "accel_m_s2: leave it out, or say \"profile\""),
        (
            String::from(r#""profile":"trapezoid","speed_m_s":1,"accel_m_s2":1,"start_speed_m_s":1.5"#),
            "start_speed_m_s: 1.5 is greater than speed_m_s = 1",
        ),
        (
            String::from(r#""profile":"trapezoid","speed_m_s":2,"accel_m_s2":0.5,"end_speed_m_s":2"#),
            "accel_m_s2: to get from 0 to 2 m/s takes 4.0000 m, the segment has 2.0000 m",
        ),
        (
            String::from(r#""profile":"trapezoid","speed_m_s":0,"accel_m_s2":0.5"#),
            "speed_m_s: 0 never gets anywhere",
        ),
        (
            String::from(r#""profile":"trapezoid","speed_m_s":1,"accel_m_s2":0"#),
            "accel_m_s2: 0 m/s² is not greater than 0",
        ),
    ] {
        let text = refused(&line(2.0, &given));
        assert!(text.contains(expected), "{given}\n{text}\nexpected: {expected}");
    }
    let dwell = r#"{"kind":"dwell","duration_s":1,"profile":"trapezoid"}"#;
    assert!(refused(dwell).contains("profile: a dwell has none; leave it out"));
}
