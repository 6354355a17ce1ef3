//! Severity, places, lags and bounds of the check. The corpus in `tests/plans` holds the faults one by one.

use super::*;
use crate::keys::Values;
use crate::math;
use crate::vehicle;

const ROLLING: Following = Following { forward: true, reverse: true, least_speed_m_s: 0.0 };

fn terms(kind: &str, pairs: &[(&str, f64)]) -> Terms {
    let mut values = Values::default();
    pairs.iter().for_each(|(key, value)| values.set(key, *value));
    let vehicle = vehicle::build(kind, &values).unwrap().0;
    Terms { vehicle, following: ROLLING, thresholds: Thresholds::default() }
}

/// 1 m/s and 2 m/s² straight ahead, on the spot 4 rad/s and 8 rad/s².
fn cart() -> Terms {
    terms(
        "differential",
        &[
            ("wheel_radius_m", 0.1),
            ("track_width_m", 0.5),
            ("max_wheel_speed_rad_s", 10.0),
            ("max_wheel_accel_rad_s2", 20.0),
        ],
    )
}

fn car() -> Terms {
    terms(
        "car",
        &[
            ("wheelbase_m", 1.2),
            ("max_speed_m_s", 3.0),
            ("max_accel_m_s2", 1.0),
            ("max_steer_rad", 0.5),
            ("max_steer_rate_rad_s", 0.5),
        ],
    )
}

fn file(segments: &str) -> String {
    format!(
        r#"{{"format":"trackhold-plan/1","id":"t","revision":1,"start":{{"x_m":0,"y_m":0,"heading_rad":0}},"segments":[{segments}]}}"#
    )
}

fn report(segments: &str, terms: &Terms) -> Report {
    check(file(segments).as_bytes(), terms)
}

fn found<'a>(report: &'a Report, name: &str) -> &'a Finding {
    let names: Vec<&str> = report.findings.iter().map(|finding| finding.fault.name()).collect();
    match report.findings.iter().find(|finding| finding.fault.name() == name) {
        Some(finding) => finding,
        None => panic!("no {name} among {names:?}"),
    }
}

fn has(report: &Report, name: &str) -> bool {
    report.findings.iter().any(|finding| finding.fault.name() == name)
}

#[test]
fn a_speed_step_is_a_warning_with_the_lag_it_causes() {
    let report = report(r#"{"kind":"line","length_m":4,"speed_m_s":0.8}"#, &cart());
    assert!(report.is_fit());
    let step = found(&report, "speed-step");
    assert_eq!(step.severity, Severity::Warning);
    assert_eq!(step.value, Some((0.8, 0.05)));
    // 0.8 m/s at 2 m/s²: 0.4 s, and 0.8²/4 m behind.
    assert!(step.meaning.contains("0.40 s") && step.meaning.contains("0.160 m"), "{}", step.meaning);
}

#[test]
fn a_curvature_step_is_a_warning_where_the_machine_can_turn_in_place_and_unfit_where_it_steers() {
    let segments = r#"{"kind":"line","length_m":2,"speed_m_s":0.8},{"kind":"arc","radius_m":4,"turn_rad":1,"speed_m_s":0.8}"#;
    let on_cart = report(segments, &cart());
    let step = found(&on_cart, "curvature-step");
    assert!(on_cart.is_fit() && step.severity == Severity::Warning);
    // Δω = 0.2 rad/s at 8 rad/s²: 0.2²/16 rad behind.
    assert!(step.meaning.contains("0.200 rad/s") && step.meaning.contains("0.003 rad"), "{}", step.meaning);
    let on_car = report(segments, &car());
    let step = found(&on_car, "curvature-step");
    assert!(!on_car.is_fit() && step.severity == Severity::Unfit);
    let place = step.at().unwrap();
    assert_eq!((place.segment, place.progress), (1, 0.0));
    assert!((place.t_s - 2.5).abs() < 1e-12 && (place.pose.x_m - 2.0).abs() < 1e-12);
    // atan(1.2/4) at 0.5 rad/s takes 0.583 s.
    assert!(step.meaning.contains("0.58 s"), "{}", step.meaning);
}

#[test]
fn a_car_may_steer_at_rest() {
    let segments = r#"{"kind":"arc","radius_m":4,"turn_rad":1,"speed_m_s":0.8,"end_speed_m_s":0},
        {"kind":"arc","radius_m":4,"turn_rad":-1,"speed_m_s":0.5,"end_speed_m_s":0}"#;
    let report = report(segments, &car());
    assert!(report.is_fit(), "{:#?}", report.findings);
    assert_eq!(found(&report, "curvature-step").severity, Severity::Information);
}

/// Turns on the spot; from straight ahead its wheel needs π/2 s for that.
fn stacker() -> Terms {
    terms(
        "steered-wheel",
        &[
            ("wheelbase_m", 1.2),
            ("max_speed_m_s", 1.5),
            ("max_accel_m_s2", 1.0),
            ("max_steer_rad", 1.6),
            ("max_steer_rate_rad_s", 1.0),
        ],
    )
}

#[test]
fn a_rest_too_short_for_the_steering_is_told_with_both_times() {
    let rest_s = |duration: f64| {
        format!(
            r#"{{"kind":"line","length_m":1,"speed_m_s":0.5,"profile":"trapezoid","accel_m_s2":0.5}},{{"kind":"dwell","duration_s":{duration}}},
            {{"kind":"pivot","turn_rad":1,"rate_rad_s":0.2,"profile":"trapezoid","accel_rad_s2":0.2}}"#
        )
    };
    let long = report(&rest_s(1.58), &stacker());
    assert!(long.is_fit() && !has(&long, "steering-time"), "{:#?}", long.findings);
    let short = report(&rest_s(1.0), &stacker());
    let finding = found(&short, "steering-time");
    assert_eq!((finding.severity, finding.at().unwrap().segment), (Severity::Unfit, 2));
    let (needed_s, rest_s_found) = finding.value.unwrap();
    assert!((needed_s - math::FRAC_PI_2).abs() < 1e-12 && (rest_s_found - 1.0).abs() < 1e-5, "{finding:?}");
    // In 0.571 s the turn makes 0.1 · 0.571².
    assert!(finding.meaning.contains("0.57 s late") && finding.meaning.contains("0.033 rad"), "{finding:?}");
    let hardly = report(&rest_s(1.3), &stacker());
    assert_eq!(found(&hardly, "steering-time").severity, Severity::Warning, "0.27 s: 0.007 rad are lost");
}

#[test]
fn a_path_that_begins_unsteered_is_a_warning_and_unfit_where_it_strays() {
    let arcs = |speed: f64, dwell: &str| {
        format!(
            r#"{{"kind":"arc","radius_m":4,"turn_rad":1,"speed_m_s":0.5,"end_speed_m_s":0}},{dwell}
            {{"kind":"arc","radius_m":4,"turn_rad":-1,"speed_m_s":{speed},"end_speed_m_s":0}}"#
        )
    };
    // Half a circle's curvature to each side takes 2 atan(0.3)/0.5 = 1.17 s.
    let slow = report(&arcs(0.5, ""), &car());
    let finding =
        slow.findings.iter().find(|one| one.fault == Fault::SteeringTime && one.at().unwrap().segment == 1);
    let finding = finding.unwrap();
    assert_eq!(finding.severity, Severity::Warning);
    assert!((finding.value.unwrap().0 - 1.1658).abs() < 1e-4, "{finding:?}");
    let fast = report(&arcs(1.4, ""), &car());
    assert!(!fast.is_fit() && found(&fast, "steering-time").severity == Severity::Warning, "the beginning");
    assert_eq!(fast.findings.iter().filter(|one| one.severity == Severity::Unfit).count(), 1);
    let hardly = report(&arcs(0.5, r#"{"kind":"dwell","duration_s":1.08},"#), &car());
    let late = hardly.findings.iter().rfind(|one| one.fault == Fault::SteeringTime).unwrap();
    assert_eq!(late.severity, Severity::Information, "0.09 s: {late:?}");
    assert!(late.line().contains("the rest there lasts 1.08 s"), "{}", late.line());
    let rested = report(&arcs(1.4, r#"{"kind":"dwell","duration_s":1.2},"#), &car());
    let late = rested.findings.iter().filter(|one| one.fault == Fault::SteeringTime);
    assert_eq!(late.map(|one| one.at().unwrap().segment).collect::<Vec<_>>(), [0], "{:#?}", rested.findings);
}

#[test]
fn after_a_turn_on_the_spot_the_machine_lags_and_at_the_beginning_straight_ahead_is_assumed() {
    let line = r#"{"kind":"line","length_m":1,"speed_m_s":0.4,"end_speed_m_s":0}"#;
    let pivot = r#"{"kind":"pivot","turn_rad":1,"rate_rad_s":0.4,"end_rate_rad_s":0}"#;
    let told = report(&format!("{pivot},{line}"), &stacker());
    assert!(told.is_fit(), "{:#?}", told.findings);
    let late: Vec<_> = told.findings.iter().filter(|one| one.fault == Fault::SteeringTime).collect();
    assert_eq!(late.iter().map(|one| one.at().unwrap().segment).collect::<Vec<_>>(), [0, 1]);
    assert!(late[1].meaning.contains("0.000 rad off"), "it steers first: {}", late[1].meaning);
    // Where a plan goes on from another one's end, that end tells.
    let text =
        file(&format!("{pivot},{line}")).replace(r#""revision":1"#, r#""revision":1,"continues":{"at_s":3}"#);
    let going_on = check(text.as_bytes(), &stacker());
    assert_eq!(going_on.findings.iter().filter(|one| one.fault == Fault::SteeringTime).count(), 1);
    assert!(!has(&report(&format!("{pivot},{line}"), &cart()), "steering-time"));
}

#[test]
fn a_short_excess_of_acceleration_is_a_warning_and_a_long_one_unfit() {
    let ramp = |length: f64| {
        format!(
            r#"{{"kind":"line","length_m":2,"speed_m_s":0.5}},{{"kind":"line","length_m":{length},"speed_m_s":0.5,"end_speed_m_s":0.9}},{{"kind":"line","length_m":2,"speed_m_s":0.9}}"#
        )
    };
    // 0.056 s and 0.171 s beyond 2 m/s².
    let short = report(&ramp(0.0392), &cart());
    assert!(short.is_fit() && has(&short, "wheel-acceleration"));
    let long = report(&ramp(0.12), &cart());
    assert_eq!(found(&long, "wheel-acceleration").severity, Severity::Unfit);
    assert_eq!(long.counts[2], 1, "the warning of its first tenth is covered: {:#?}", long.findings);
}

#[test]
fn shares_and_authority_are_those_of_the_vehicle() {
    let report = report(
        r#"{"kind":"line","length_m":2,"speed_m_s":0.5},{"kind":"arc","radius_m":1,"turn_rad":1,"speed_m_s":0.5}"#,
        &cart(),
    );
    let [line, arc] = &report.segments[..] else { panic!("two segments") };
    assert!((line.authority_left - 0.5).abs() < 1e-12);
    // The outer wheel is faster by the half track: 0.5 · 1.25.
    assert!(arc.peaks.iter().any(|peak| (peak.load.share() - 0.625).abs() < 1e-9));
    assert!((arc.peak_curvature_1_m - 1.0).abs() < 1e-12);
}

#[test]
fn a_segment_slower_than_the_law_steers_for_is_told() {
    let segments =
        r#"{"kind":"line","length_m":1,"speed_m_s":0.5},{"kind":"line","length_m":1,"speed_m_s":0.08}"#;
    let following = Following { least_speed_m_s: 0.1, ..ROLLING };
    let told = report(segments, &Terms { following, ..cart() });
    let slow = found(&told, "law-speed");
    assert_eq!((slow.at().unwrap().segment, slow.value), (1, Some((0.08, 0.1))));
    assert_eq!(slow.severity, Severity::Information);
    assert!(!has(&report(segments, &cart()), "law-speed"));
}

#[test]
fn a_refused_plan_has_findings_and_admit_gives_their_lines() {
    let raw = file(r#"{"kind":"line","length_m":-1,"speed_m_s":0.5}"#);
    let told = check(raw.as_bytes(), &cart());
    assert!(told.plan.is_none() && told.verdict() == "unfit");
    assert_eq!(told.findings[0].place, Where::Key(String::from("segments[0] (line).length_m")));
    let lines = admit(raw.as_bytes(), &cart()).unwrap_err();
    assert!(lines[0].starts_with("segments[0] (line).length_m: -1 m is not greater than 0"), "{lines:?}");
    let fast = file(r#"{"kind":"line","length_m":2,"speed_m_s":1.5}"#);
    let lines = admit(fast.as_bytes(), &cart()).unwrap_err();
    assert_eq!(
        lines,
        ["segments[0] (line), 0.000 s: wheel speed 15 rad/s, the limit is 10 rad/s: slow down or turn wider"]
    );
}

#[test]
fn an_admitted_plan_is_the_compiled_one() {
    let raw = file(r#"{"kind":"line","length_m":2,"speed_m_s":0.5}"#);
    let (admitted, compiled) = (
        admit(raw.as_bytes(), &cart()).unwrap(),
        super::super::compile(raw.as_bytes(), &*cart().vehicle).unwrap(),
    );
    assert_eq!(admitted.digest(), compiled.digest());
    for step in 0..100 {
        let t_s = 0.045 * f64::from(step);
        assert_eq!(admitted.at(t_s, &mut 0), compiled.at(t_s, &mut 0));
    }
}

#[test]
fn a_plan_of_many_segments_is_looked_at_boundedly() {
    let many = alloc::vec![r#"{"kind":"line","length_m":0.5,"speed_m_s":0.5}"#; 50_000].join(",");
    let plan = super::super::compile(file(&many).as_bytes(), &*cart().vehicle).unwrap();
    let mut looks = 0_usize;
    walk(&plan, &mut |_| looks += 1);
    assert!(looks <= walk::MOST_LOOKS + 2 * 50_000, "{looks}");
}

#[test]
fn many_findings_are_counted_and_the_first_ones_kept() {
    let pair = r#"{"kind":"line","length_m":1,"speed_m_s":0.5},{"kind":"line","length_m":1,"speed_m_s":0.8}"#;
    let many = alloc::vec![pair; 400].join(",");
    let report = report(&many, &cart());
    assert!(report.is_fit() && report.counts[1] > 700);
    assert!(report.findings.len() <= 400);
}

#[test]
fn a_step_within_samples_is_found_at_its_instant_and_a_coarse_look_at_a_bend_is_none() {
    let bend =
        r#"{"kind":"clothoid","curvature_start_1_m":0,"curvature_end_1_m":2,"length_m":200,"speed_m_s":0.3}"#;
    let told = report(bend, &cart());
    assert!(
        !has(&told, "kink") && !has(&told, "gap") && !has(&told, "curvature-step"),
        "{:#?}",
        told.findings
    );
    let stated = r#"{"kind":"samples","points":[{"t_s":0,"x_m":0,"y_m":0,"heading_rad":0,"speed_m_s":0.5},
        {"t_s":2,"x_m":1,"y_m":0,"heading_rad":0,"speed_m_s":0.5},{"t_s":3.0,"x_m":1.5,"y_m":0.2,"heading_rad":0.6,"speed_m_s":0.5}]}"#;
    let told = report(stated, &cart());
    let step = found(&told, "curvature-step");
    assert!((step.at().unwrap().t_s - 2.0).abs() < 1e-9, "{step:?}");
}

#[test]
fn thresholds_go_together() {
    let mut values = Values::default();
    values.set("share_unfit", 0.8);
    let problems = Thresholds::new(&values.checked(KEYS).unwrap()).unwrap_err();
    assert!(problems[0].what.contains("0.9 lies above check.share_unfit = 0.8"));
}
