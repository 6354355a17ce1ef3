//! Clothoids, splines and NURBS against values from outside (`tests/reference/curves`), and their refusals.

use super::*;
use crate::plan::segment::Progress;
use alloc::string::ToString;
use serde_json::Value;

const TABLE: &str = include_str!("../../../../../tests/reference/curves/curves.json");

fn table(name: &str) -> Vec<Value> {
    let whole: Value = serde_json::from_str(TABLE).unwrap();
    whole[name].as_array().unwrap().clone()
}

fn number(row: &Value, name: &str) -> f64 {
    row[name].as_f64().unwrap()
}

/// A machine that limits nothing these curves ask for.
fn nimble() -> Arc<dyn Vehicle> {
    machine(
        "unicycle",
        &[
            ("max_speed_m_s", 10.0),
            ("max_turn_rate_rad_s", 30.0),
            ("max_accel_m_s2", 0.5),
            ("max_turn_accel_rad_s2", 100.0),
        ],
    )
}

fn from(start: (f64, f64, f64), segments: &str) -> Result<Plan, Vec<String>> {
    let raw = format!(
        r#"{{"format":"trackhold-plan/1","id":"c","revision":1,"start":{{"x_m":{},"y_m":{},"heading_rad":{}}},"segments":[{segments}]}}"#,
        start.0, start.1, start.2
    );
    compile(raw.as_bytes(), &*nimble())
}

#[test]
fn fresnel_integrals_meet_scipy() {
    for row in table("fresnel") {
        let (c, s) = math::fresnel::fresnel(number(&row, "z"));
        assert!(
            (c - number(&row, "c")).abs() < 5e-16 && (s - number(&row, "s")).abs() < 5e-16,
            "{row} {c} {s}"
        );
    }
}

#[test]
fn clothoids_meet_scipy_near_lines_and_arcs_too() {
    for row in table("clothoids") {
        let start = (
            row["start"][0].as_f64().unwrap(),
            row["start"][1].as_f64().unwrap(),
            row["start"][2].as_f64().unwrap(),
        );
        let segment = format!(
            r#"{{"kind":"clothoid","curvature_start_1_m":{},"curvature_end_1_m":{},"length_m":{},"reverse":{},"speed_m_s":1,"end_speed_m_s":0}}"#,
            row["curvature_start_1_m"], row["curvature_end_1_m"], row["length_m"], row["reverse"]
        );
        let plan = from(start, &segment).unwrap();
        let end = at(&plan, plan.duration_s());
        let (x, y, heading) = (number(&row, "x_m"), number(&row, "y_m"), number(&row, "heading_rad"));
        let scale = 1e-14 * (1.0 + number(&row, "length_m"));
        assert!((end.pose.x_m - x).abs() < scale && (end.pose.y_m - y).abs() < scale, "{row}\n{end:?}");
        assert!(math::wrap(end.pose.heading_rad - heading).abs() < 1e-13, "{row}\n{end:?}");
        assert!((end.curvature_1_m - number(&row, "curvature_end_1_m")).abs() < 1e-15);
    }
}

#[test]
fn the_clothoids_of_the_literature() {
    // Ends from (0, 0, 0), by (κ0, κ', L); computed with SciPy 1.17, to the digits printed.
    for (begin, rate, x, y, heading) in [
        (0.0, 0.1, 4.273_269_142_008_9, 1.862_068_112_816_2, 1.25),
        (0.2, 0.1, 2.494_566_521_213_7, 3.121_464_584_056_4, 2.25),
        (0.0, 1e-9, 5.0, 2.083_333_333_3e-8, 1.25e-8),
    ] {
        let end = begin + 5.0 * rate;
        let plan = from(
            (0.0, 0.0, 0.0),
            &format!(
                r#"{{"kind":"clothoid","curvature_start_1_m":{begin},"curvature_end_1_m":{end},"length_m":5,"speed_m_s":1,"end_speed_m_s":0}}"#
            ),
        )
        .unwrap();
        let reference = at(&plan, 99.0);
        assert!(
            (reference.pose.x_m - x).abs() < 1e-13 && (reference.pose.y_m - y).abs() < 1e-13,
            "{reference:?}"
        );
        assert!((reference.pose.heading_rad - heading).abs() < 1e-15, "{reference:?}");
    }
}

#[test]
fn a_clothoid_of_fresnels_parameter_draws_fresnels_integrals() {
    // κ = π s: C(z), S(z).
    for z in [0.3, 1.0, 2.0, 4.0] {
        let end = math::PI * z;
        let plan = from(
            (0.0, 0.0, 0.0),
            &format!(
                r#"{{"kind":"clothoid","curvature_start_1_m":0,"curvature_end_1_m":{end},"length_m":{z},"speed_m_s":1,"end_speed_m_s":0}}"#
            ),
        )
        .unwrap();
        let (c, s) = math::fresnel::fresnel(z);
        let pose = at(&plan, 99.0).pose;
        assert!((pose.x_m - c).abs() < 3e-15 && (pose.y_m - s).abs() < 3e-15, "{z}: {pose:?}, {c}, {s}");
    }
}

/// Every place of a table's curve, looked up by arc length.
fn assert_places(row: &Value, plan: &Plan) {
    let name = row["name"].as_str().unwrap();
    let placed = plan.stretches().next().unwrap();
    let length = number(row, "length_m");
    assert!((placed.stretch.extent() - length).abs() < 1e-10, "{name}: {} {length}", placed.stretch.extent());
    for place in row["places"].as_array().unwrap() {
        let progress = Progress { at: number(place, "s_m"), rate: 1.0, accel: 0.0 };
        let reference = placed.stretch.at_progress(progress);
        // At 5,000 km a double's last bit is a nanometre.
        let room = 1e-10 + 4.0 * f64::EPSILON * reference.pose.y_m.abs();
        let distance = math::length(
            reference.pose.x_m - number(place, "x_m"),
            reference.pose.y_m - number(place, "y_m"),
        );
        assert!(distance < room, "{name}: {place}\n{reference:?}\n{distance:e}");
        let turn = math::wrap(reference.pose.heading_rad - number(place, "heading_rad"));
        let scale = if room > 1e-9 { 1e-6 } else { 1e-9 };
        assert!(turn.abs() < scale, "{name}: {place}\n{reference:?}");
        // At a knot a rounding of the arc length decides which side is looked at.
        let seam = placed.stretch.seams().iter().any(|seam| (seam - progress.at).abs() < 1e-9);
        if !seam {
            for (ours, theirs) in [
                (reference.curvature_1_m, number(place, "curvature_1_m")),
                (reference.curvature_rate_1_m2, number(place, "curvature_rate_1_m2")),
            ] {
                assert!(
                    (ours - theirs).abs() < scale * (1.0 + theirs.abs()),
                    "{name}: {place}\n{reference:?}"
                );
            }
        }
    }
}

fn nurbs_of(row: &Value) -> String {
    let points: Vec<String> = row["points"]
        .as_array()
        .unwrap()
        .iter()
        .map(|point| format!(r#"{{"x_m":{},"y_m":{}}}"#, point[0], point[1]))
        .collect();
    let weights =
        if row["weights"].is_null() { String::new() } else { format!(r#""weights":{},"#, row["weights"]) };
    format!(
        r#"{{"kind":"nurbs","degree":{},"knots":{},{weights}"points":[{}],"reverse":{},"speed_m_s":1}}"#,
        row["degree"],
        row["knots"],
        points.join(","),
        row["reverse"]
    )
}

fn first_pose(row: &Value) -> (f64, f64, f64) {
    let first = &row["places"][0];
    (number(first, "x_m"), number(first, "y_m"), number(first, "heading_rad"))
}

#[test]
fn nurbs_meet_scipy_span_by_span() {
    for row in table("nurbs") {
        let plan = from(first_pose(&row), &nurbs_of(&row)).unwrap();
        assert_places(&row, &plan);
    }
}

#[test]
fn the_quarter_circle_of_the_nurbs_book() {
    // Piegl & Tiller, 7.3; u 0.25 → (0.9297883, 0.36809471), computed with SciPy 1.17.
    let plan = from(
        (1.0, 0.0, math::FRAC_PI_2),
        r#"{"kind":"nurbs","degree":2,"knots":[0,0,0,1,1,1],"weights":[1,0.7071067811865476,1],
            "points":[{"x_m":1,"y_m":0},{"x_m":1,"y_m":1},{"x_m":0,"y_m":1}],"speed_m_s":1}"#,
    )
    .unwrap();
    assert!((plan.length_m() - math::FRAC_PI_2).abs() < 1e-11, "{}", plan.length_m());
    let angle = math::atan2(0.368_094_71, 0.929_788_3);
    let stretch = plan.stretches().next().unwrap().stretch;
    let reference = stretch.at_progress(Progress { at: angle, rate: 1.0, accel: 0.0 });
    assert!(
        (reference.pose.x_m - 0.929_788_3).abs() < 1e-8 && (reference.pose.y_m - 0.368_094_71).abs() < 1e-8
    );
    for step in 0..=100 {
        let at = plan.length_m() * f64::from(step) / 100.0;
        let reference = stretch.at_progress(Progress { at, rate: 1.0, accel: 0.0 });
        assert!((reference.curvature_1_m - 1.0).abs() < 1e-13, "{reference:?}");
        assert!((reference.pose.heading_rad - math::FRAC_PI_2 - at).abs() < 1e-10, "{reference:?}");
        assert!(reference.curvature_rate_1_m2.abs() < 1e-12, "{reference:?}");
    }
}

fn spline_of(row: &Value) -> String {
    let points: Vec<String> = row["points"]
        .as_array()
        .unwrap()
        .iter()
        .map(|point| {
            let curvature = match point[3].as_f64() {
                Some(curvature) => format!(r#","curvature_1_m":{curvature}"#),
                None => String::new(),
            };
            format!(r#"{{"x_m":{},"y_m":{},"heading_rad":{}{curvature}}}"#, point[0], point[1], point[2])
        })
        .collect();
    format!(
        r#"{{"kind":"spline","points":[{}],"reverse":{},"speed_m_s":1}}"#,
        points.join(","),
        row["reverse"]
    )
}

#[test]
fn splines_meet_scipy_and_keep_their_curvature_over_the_points() {
    for row in table("splines") {
        let plan = from(first_pose(&row), &spline_of(&row)).unwrap();
        assert_places(&row, &plan);
        let stretch = plan.stretches().next().unwrap().stretch;
        for seam in stretch.seams() {
            let near = |at: f64| stretch.at_progress(Progress { at, rate: 1.0, accel: 0.0 }).curvature_1_m;
            assert!((near(seam - 1e-9) - near(seam + 1e-9)).abs() < 1e-7, "{row}: {seam}");
        }
    }
}

#[test]
fn a_spline_through_a_circle_is_nearly_the_circle() {
    let row = &table("splines")[0];
    let plan = from(first_pose(row), &spline_of(row)).unwrap();
    let stretch = plan.stretches().next().unwrap().stretch;
    for step in 0..=500 {
        let at = stretch.extent() * f64::from(step) / 500.0;
        let reference = stretch.at_progress(Progress { at, rate: 1.0, accel: 0.0 });
        let radius = math::length(reference.pose.x_m, reference.pose.y_m - 2.0);
        assert!((radius - 2.0).abs() < 5e-5, "{at}: {radius}");
        assert!((reference.curvature_1_m - 0.5).abs() < 3e-3, "{reference:?}");
    }
}

#[test]
fn velocities_and_curvature_rates_are_the_derivatives_of_the_path() {
    let mut plans: Vec<Plan> = Vec::new();
    for row in table("nurbs").iter().filter(|row| row["name"] != "far away") {
        plans.push(from(first_pose(row), &nurbs_of(row)).unwrap());
    }
    for row in table("splines") {
        plans.push(from(first_pose(&row), &spline_of(&row)).unwrap());
    }
    for reverse in [false, true] {
        let clothoid = format!(
            r#"{{"kind":"clothoid","curvature_start_1_m":-0.3,"curvature_end_1_m":0.6,"length_m":7,"speed_m_s":0.5,"end_speed_m_s":1.2,"reverse":{reverse}}}"#
        );
        plans.push(from((1.0, 2.0, 3.0), &clothoid).unwrap());
    }
    for plan in &plans {
        let placed = plan.stretches().next().unwrap();
        let mut jumps = Vec::new();
        // Where braking begins, and each seam, at whatever instant it is passed.
        for step in 0..20_000 {
            let t = plan.duration_s() * f64::from(step) / 20_000.0;
            let later = t + plan.duration_s() / 20_000.0;
            let (from, to) = (placed.stretch.timing(t).at, placed.stretch.timing(later).at);
            if placed.stretch.seams().iter().any(|seam| (from - 1e-3..to + 1e-3).contains(seam)) {
                jumps.extend((0..200).map(|part| t + (later - t) * f64::from(part) / 200.0));
            }
            if at(plan, t).accel_m_s2 != at(plan, later).accel_m_s2 {
                jumps.push(0.5 * (t + later));
            }
        }
        assert_consistent_but(plan, &jumps, plan.duration_s() / 10_000.0);
    }
}

#[test]
fn paths_that_end_at_speed_brake_along_their_geometry() {
    for segment in [
        r#"{"kind":"clothoid","curvature_start_1_m":0,"curvature_end_1_m":0.4,"length_m":6,"speed_m_s":1}"#.to_string(),
        r#"{"kind":"spline","points":[{"x_m":0,"y_m":0,"heading_rad":0},{"x_m":3,"y_m":1,"heading_rad":0.6},{"x_m":6,"y_m":2,"heading_rad":0}],"speed_m_s":1}"#.to_string(),
        nurbs_of(&table("nurbs")[2]),
    ] {
        let plan = from((0.0, 0.0, 0.0), &segment).unwrap();
        let length = plan.length_m();
        // v²/(2a) = 1 m takes 2 s.
        assert!((plan.duration_s() - (length - 1.0 + 2.0)).abs() < 1e-9, "{}", plan.duration_s());
        let late = at(&plan, plan.duration_s() - 1.0);
        assert!((late.velocity.speed_m_s - 0.5).abs() < 1e-9 && late.accel_m_s2 == -0.5, "{late:?}");
        let end = at(&plan, plan.duration_s());
        assert!(end.velocity.is_zero());
        let literal = plan.stretches().next().unwrap().stretch.at_progress(Progress::resting(length));
        assert!(end.pose.distance_to(literal.pose) < 1e-12);
    }
}

#[test]
fn a_repeated_look_gives_the_same_place_and_progress_outside_ends_at_the_ends() {
    let row = &table("nurbs")[3];
    let plan = from(first_pose(row), &nurbs_of(row)).unwrap();
    let stretch = plan.stretches().next().unwrap().stretch;
    let place = |at: f64| stretch.at_progress(Progress::resting(at)).pose;
    assert_eq!(place(-1.0), place(0.0));
    assert_eq!(place(1e9), place(stretch.extent()));
    // Arc length itself: the chord of two near places is as long as their progress differs.
    for step in 0..5000 {
        let at = (stretch.extent() - 1e-3) * f64::from(step) / 5000.0;
        let chord = place(at).distance_to(place(at + 1e-3));
        assert!((chord - 1e-3).abs() < 5e-10, "{at}: {chord}");
    }
}

const S: &str = r#"{"x_m":0,"y_m":0},{"x_m":1,"y_m":0},{"x_m":2,"y_m":1}"#;

fn nurbs(degree: &str, knots: &str, points: &str, more: &str) -> String {
    format!(r#"{{"kind":"nurbs","degree":{degree},"knots":{knots},"points":[{points}],"speed_m_s":1{more}}}"#)
}

fn spline(points: &str) -> String {
    format!(r#"{{"kind":"spline","points":[{points}],"speed_m_s":1}}"#)
}

fn assert_refused(segment: &str, expected: &str) {
    let text = match from((0.0, 0.0, 0.0), segment) {
        Ok(_) => String::from("accepted"),
        Err(findings) => findings.join("\n"),
    };
    assert!(text.contains(expected), "{segment}\n{text}\nexpected: {expected}");
}

#[test]
fn bad_nurbs_are_refused_with_place_value_and_bound() {
    let clamped = "[0,0,0,1,1,1]";
    let five = r#"{"x_m":0,"y_m":0},{"x_m":1,"y_m":0},{"x_m":2,"y_m":0},{"x_m":2,"y_m":1},{"x_m":2,"y_m":2}"#;
    for (segment, expected) in [
        (nurbs("2.5", clamped, S, ""), "(nurbs).degree: 2.5 is not a whole number"),
        (nurbs("11", clamped, S, ""), "degree: 11 is not at least 1 and at most 10"),
        (nurbs("3", clamped, S, ""), "points: 3 of them; a curve of degree 3 needs at least 4"),
        (
            nurbs("2", "[0,0,0,1,1]", S, ""),
            "knots: 5 of them; 3 points and degree 2 need points + degree + 1 = 6",
        ),
        (
            nurbs("2", "[0,0,0.1,1,1,1]", S, ""),
            "knots[2]: 0.1; the vector must be clamped: the first 3 knots 0",
        ),
        (nurbs("2", "[0,0,0,1,1,2]", S, ""), "knots[5]: 2; the vector must be clamped"),
        (nurbs("2", "[0,0,0,0.6,0.5,1,1,1]", five, ""), "knots[4]: 0.5 is less than 0.6 before it"),
        (
            nurbs("2", "[0,0,0,0.5,0.5000000000001,1,1,1]", five, ""),
            "differ by less than 0.000000001; make them equal",
        ),
        (
            nurbs("1", "[0,0,0.5,0.5,0.7,1,1]", five, ""),
            "knots[2]: 0.5 more than 1 times; the curve would be torn apart there",
        ),
        (
            nurbs("2", "[0,0,0,0.5,0.5,1,1,1]", five, ""),
            "knots[4]: at 0.5 the curve has a corner of 1.5708 rad",
        ),
        (nurbs("2", clamped, S, r#","weights":[1,1]"#), "weights: 2 of them for 3 points"),
        (nurbs("2", clamped, S, r#","weights":[1,0,1]"#), "weights[1]: 0 lies outside"),
        (nurbs("2", clamped, S, r#","weights":[1,-1,1]"#), "weights[1]: -1 lies outside"),
        (nurbs("2", clamped, S, r#","weigths":[1,1,1]"#), "weigths: a nurbs has no such list"),
        (nurbs("2", clamped, S, r#","weights":[1,"a",1]"#), "invalid type: string \"a\", expected f64"),
        (nurbs("2", clamped, S, r#","weights":{}"#), "weights is not a number, nor a list of numbers"),
        (
            nurbs("2", clamped, r#"{"x_m":0,"y_m":0},{"x_m":0,"y_m":0},{"x_m":2,"y_m":1}"#, ""),
            "the curve stands still or turns back at parameter 0.000000; do control points coincide, or",
        ),
        (
            nurbs("2", clamped, r#"{"x_m":0,"y_m":0},{"x_m":0,"y_m":1},{"x_m":2,"y_m":1}"#, ""),
            "points[0]: 0.0000 m and 1.5708 rad from the end of the segment before",
        ),
        (
            nurbs("2", clamped, r#"{"x_m":0,"y_m":0,"t_s":1},{"x_m":1,"y_m":0},{"x_m":2,"y_m":1}"#, ""),
            "points[0].t_s: no such number in a point of this kind",
        ),
        (
            nurbs("2", clamped, r#"{"x_m":0,"y_m":0},{"x_m":1e8,"y_m":0},{"x_m":2,"y_m":1}"#, ""),
            "points[1].x_m: 100000000 lies outside ±10000000",
        ),
        (nurbs("2", clamped, r#"{"x_m":0,"y_m":0},{"x_m":1,"y_m":0}"#, ""), "points: 2 of them"),
        (format!(r#"{{"kind":"nurbs","degree":2,"points":[{S}],"speed_m_s":1}}"#), "knots: 0 of them"),
    ] {
        assert_refused(&segment, expected);
    }
}

#[test]
fn bad_splines_and_clothoids_are_refused_with_place_value_and_bound() {
    let first = r#"{"x_m":0,"y_m":0,"heading_rad":0}"#;
    for (segment, expected) in [
        (spline(first), "points: 1 of them, give at least two"),
        (spline(&format!(r#"{first},{{"x_m":1,"y_m":0}}"#)), "points[1].heading_rad: missing"),
        (spline(&format!(r#"{first},{{"x_m":0,"y_m":0,"heading_rad":0}}"#)), "points[1]: 0 m from the point before"),
        (
            spline(&format!(r#"{first},{{"x_m":1,"y_m":0,"heading_rad":0,"curvature_1_m":101}}"#)),
            "points[1].curvature_1_m: 101 lies outside ±100",
        ),
        (
            spline(&format!(r#"{first},{{"x_m":1,"y_m":0,"heading_rad":0,"t_s":1}}"#)),
            "points[1].t_s: no such number in a point of this kind",
        ),
        (
            spline(r#"{"x_m":0.03,"y_m":0,"heading_rad":0},{"x_m":1,"y_m":0,"heading_rad":0}"#),
            "points[0]: 0.0300 m and 0.0000 rad from the end of the segment before",
        ),
        (
            r#"{"kind":"clothoid","curvature_start_1_m":0,"curvature_end_1_m":1,"length_m":0,"speed_m_s":1}"#.into(),
            "(clothoid).length_m: 0 m is not greater than 0",
        ),
        (
            r#"{"kind":"clothoid","curvature_start_1_m":0,"curvature_end_1_m":101,"length_m":1,"speed_m_s":1}"#.into(),
            "curvature_end_1_m: 101 1/m is not at least -100 and at most 100",
        ),
        (
            r#"{"kind":"clothoid","curvature_start_1_m":9,"curvature_end_1_m":11,"length_m":101,"speed_m_s":1}"#.into(),
            "length_m: turns by 1010 rad with these curvatures; at most 1000 rad are allowed",
        ),
        (
            r#"{"kind":"clothoid","curvature_start_1_m":0,"curvature_end_1_m":1,"length_m":1,"speed_m_s":11}"#.into(),
            "speed 11.0000 m/s, the limit is 10 m/s",
        ),
        (
            r#"{"kind":"clothoid","curvature_start_1_m":0,"curvature_end_1_m":100,"length_m":1,"speed_m_s":2}"#.into(),
            "it asks for turn rate",
        ),
    ] {
        assert_refused(&segment, expected);
    }
}
