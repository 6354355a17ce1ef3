//! Pure pursuit and Stanley's law against values from outside (`tests/reference/laws-steered`, SciPy and mpmath), and in
//! closed loop on a car.

use super::testing::{ask, context, law_on, moving};
use super::*;
use crate::geometry::{Pose, TrackingError};
use crate::math::{self, PI};
use crate::plan::{self, Plan, Reference};
use crate::vehicle::limit;
use alloc::string::String;
use serde_json::Value;

const TABLE: &str = include_str!("../../../../tests/reference/laws-steered/laws_steered.json");
/// The wheelbase of the test car and of the table, m.
const WHEELBASE_M: f64 = 1.2;
const LAWS: [&str; 2] = ["pure-pursuit", "stanley"];

fn table(name: &str) -> Value {
    let whole: Value = serde_json::from_str(TABLE).unwrap();
    assert_eq!(number(&whole, "wheelbase_m"), WHEELBASE_M);
    whole[name].clone()
}

fn rows(name: &str) -> Vec<Value> {
    table(name).as_array().unwrap().clone()
}

fn number(row: &Value, name: &str) -> f64 {
    row[name].as_f64().unwrap()
}

fn pose(row: &Value) -> Pose {
    let place = |index: usize| row[index].as_f64().unwrap();
    Pose::new(place(0), place(1), place(2))
}

/// An open plan from (0, 0, 0), for a machine of a kind.
fn plan(kind: &str, segments: &str) -> Plan {
    let raw = format!(
        r#"{{"format":"trackhold-plan/1","id":"t","revision":1,"open":true,"start":{{"x_m":0,"y_m":0,"heading_rad":0}},"segments":[{segments}]}}"#
    );
    plan::compile(raw.as_bytes(), &*context(kind).vehicle).unwrap()
}

/// A row's path, passed at 0.5 m/s.
fn path(row: &Value) -> Plan {
    let (start, rate) = (number(row, "curvature_start_1_m"), number(row, "curvature_rate_1_m2"));
    let segment = format!(
        r#"{{"kind":"clothoid","curvature_start_1_m":{start},"curvature_end_1_m":{},"length_m":6,"speed_m_s":0.5,"reverse":{}}}"#,
        start + 6.0 * rate,
        row["way"].as_f64() == Some(-1.0)
    );
    plan("unicycle", &segment)
}

fn control(
    law: &mut dyn Law,
    reference: Reference,
    ahead: &dyn Ahead,
    pose: Pose,
    motion: BodyVelocity,
) -> BodyVelocity {
    law.control(&Input::new(reference, ahead, pose, ([0.0; 4], motion), 0.02)).velocity
}

/// What a law wants at a place of a row's path, the plan's time running at a rate, and the motion it believes in.
fn on_path(law: &mut dyn Law, row: &Value, rate: f64, motion: BodyVelocity) -> BodyVelocity {
    let plan = path(row);
    let ahead = OnPlan { plan: &plan, t_s: number(row, "s_m") / 0.5, rate };
    control(law, ahead.reference(0.0), &ahead, pose(&row["pose"]), motion)
}

#[test]
fn pursuit_bends_to_the_goal_at_the_distance() {
    for row in rows("pursuit") {
        let gains = [("least_lookahead_m", number(&row, "lookahead_m")), ("lookahead_time_s", 0.0)];
        // However slowly the plan runs, the path is the same.
        for rate in [1.0, 0.01] {
            // The speed's feedback as weak as can be, so that its sign is the reference's.
            let gains = [&gains[..], &[("k_along", 1e-9)]].concat();
            let wanted = on_path(&mut *law_on("car", "pure-pursuit", &gains), &row, rate, BodyVelocity::ZERO);
            let curvature = wanted.turn_rate_rad_s / wanted.speed_m_s;
            assert!(wanted.speed_m_s * number(&row, "way") > 0.0, "{row}");
            assert!((curvature - number(&row, "curvature_1_m")).abs() < 1e-9, "{row}: {curvature}");
        }
    }
}

#[test]
fn stanley_steers_for_the_nearest_place_of_the_front_axles_path() {
    for row in rows("stanley") {
        let gains = [("k", number(&row, "k")), ("k_soft", number(&row, "k_soft"))];
        let motion = BodyVelocity { speed_m_s: number(&row, "front_speed_m_s"), turn_rate_rad_s: 0.0 };
        let wanted = on_path(&mut *law_on("car", "stanley", &gains), &row, 1.0, motion);
        let steer = math::atan(WHEELBASE_M * wanted.turn_rate_rad_s / wanted.speed_m_s);
        assert!((steer - number(&row, "steer_rad")).abs() < 1e-9, "{row}: {steer}");
    }
}

/// What a law wants at a constant speed beside a circle or a line that begins at (0, 0, 0), the reference beside the
/// machine, its motion the one it wants: the curvature times that speed.
fn beside(law: &mut dyn Law, bend_1_m: f64, speed_m_s: f64, pose: Pose) -> BodyVelocity {
    let nearest = if bend_1_m == 0.0 {
        Pose::new(pose.x_m, 0.0, 0.0)
    } else {
        let turn = math::atan2(pose.x_m, 1.0 / bend_1_m - pose.y_m);
        Pose::default().along_arc(turn / bend_1_m, turn)
    };
    let reference = moving(nearest, speed_m_s, speed_m_s * bend_1_m);
    let reference = Reference { curvature_1_m: bend_1_m, ..reference };
    let mut motion = reference.velocity;
    for _ in 0..100 {
        let wanted = control(law, reference, &Steady(reference), pose, motion);
        motion = BodyVelocity {
            speed_m_s,
            turn_rate_rad_s: speed_m_s * wanted.turn_rate_rad_s / wanted.speed_m_s,
        };
    }
    motion
}

/// Follows a case's states in continuous time (Runge and Kutta's method of fourth order, 20 ms).
fn assert_meets_run(law: &mut dyn Law, bend_1_m: f64, speed_m_s: f64, case: &Value) {
    let rate = |at: Pose, law: &mut dyn Law| {
        let velocity = beside(law, bend_1_m, speed_m_s, at);
        let (cos, sin) = math::cos_sin(at.heading_rad);
        [velocity.speed_m_s * cos, velocity.speed_m_s * sin, velocity.turn_rate_rad_s]
    };
    let on = |at: Pose, rate: [f64; 3], seconds: f64| {
        Pose::new(at.x_m + seconds * rate[0], at.y_m + seconds * rate[1], at.heading_rad + seconds * rate[2])
    };
    let (mut at, mut step) = (pose(&case["start"]), 0_u32);
    for row in case["states"].as_array().unwrap() {
        while f64::from(step) * 0.02 < number(row, "t_s") - 1e-9 {
            let a = rate(at, law);
            let b = rate(on(at, a, 0.01), law);
            let c = rate(on(at, b, 0.01), law);
            let d = rate(on(at, c, 0.02), law);
            let whole = [0, 1, 2].map(|i| (a[i] + 2.0 * b[i] + 2.0 * c[i] + d[i]) / 6.0);
            (at, step) = (on(at, whole, 0.02), step + 1);
        }
        let wanted = pose(&row["state"]);
        let off = at.distance_to(wanted) + (at.heading_rad - wanted.heading_rad).abs();
        assert!(off < 1e-7, "{row}: {at:?}");
    }
}

#[test]
fn pursuit_runs_as_integrated_by_scipy() {
    let case = table("pursuit_run");
    let gains = [("least_lookahead_m", number(&case, "lookahead_m")), ("lookahead_time_s", 0.0)];
    assert_meets_run(&mut *law_on("car", "pure-pursuit", &gains), 0.0, number(&case, "speed_m_s"), &case);
}

#[test]
fn stanley_runs_as_integrated_by_scipy() {
    for case in rows("stanley_car") {
        let gains = [("k", number(&case, "k")), ("k_soft", number(&case, "k_soft"))];
        let (bend, speed) = (number(&case, "curvature_1_m"), number(&case, "speed_m_s"));
        assert_meets_run(&mut *law_on("car", "stanley", &gains), bend, speed, &case);
    }
    let case = table("reverse_run");
    let gains = [("reverse_damping", number(&case, "damping"))];
    assert_meets_run(&mut *law_on("car", "stanley", &gains), 0.0, -number(&case, "speed_m_s"), &case);
}

#[test]
fn stanleys_front_axle_comes_in_as_published() {
    // Hoffmann and others 2007: e' = −v sin(atan(k e/v)) for the front axle at speed v, without softening.
    let case = table("stanley_run");
    let front_speed = number(&case, "front_speed_m_s");
    let gains = [("k", number(&case, "k")), ("k_soft", 0.0)];
    let mut law = law_on("car", "stanley", &gains);
    let (mut at, mut step) = (Pose::new(0.0, 1.0, 0.0), 0_u32);
    for row in case["states"].as_array().unwrap() {
        while f64::from(step) < number(row, "t_s") * 1e4 - 0.5 {
            let motion = BodyVelocity { speed_m_s: front_speed, turn_rate_rad_s: 0.0 };
            let reference = moving(Pose::new(at.x_m, 0.0, 0.0), front_speed, 0.0);
            let wanted = control(&mut *law, reference, &Steady(reference), at, motion);
            let stretch = math::length(1.0, WHEELBASE_M * wanted.turn_rate_rad_s / wanted.speed_m_s);
            at = at.moved(wanted.scaled(front_speed / (wanted.speed_m_s * stretch)), 1e-4);
            step += 1;
        }
        let front = at.y_m + WHEELBASE_M * math::cos_sin(at.heading_rad).1;
        assert!((front - number(row, "e_m")).abs() < 1e-4, "{row}: {front}");
    }
}

/// What the turn rate answers to the cross-track and to the heading error on a line: ω = −(a y + b φ).
fn slopes(law: &mut dyn Law, speed_m_s: f64) -> (f64, f64) {
    let reference = moving(Pose::default(), speed_m_s, 0.0);
    let mut turn =
        |pose: Pose| control(law, reference, &Steady(reference), pose, reference.velocity).turn_rate_rad_s;
    let slope = |less: f64, more: f64| (less - more) / 2e-6;
    (
        slope(turn(Pose::new(0.0, -1e-6, 0.0)), turn(Pose::new(0.0, 1e-6, 0.0))),
        slope(turn(Pose::new(0.0, 0.0, -1e-6)), turn(Pose::new(0.0, 0.0, 1e-6))),
    )
}

#[test]
fn pursuit_is_damped_by_one_over_root_two_either_way() {
    for speed in [0.3, -0.3, 2.0, -2.0] {
        let mut law = law_on("car", "pure-pursuit", &[("least_lookahead_m", 0.7), ("lookahead_time_s", 0.8)]);
        let (cross, heading) = slopes(&mut *law, speed);
        // y'' = v φ', φ' = −(a y + b φ): natural frequency √(v a), damping b/(2 √(v a)).
        let natural = math::sqrt(speed * cross);
        assert!((heading / (2.0 * natural) - 1.0 / math::sqrt(2.0)).abs() < 1e-6);
        assert!((natural - law.bandwidth_rad_s(speed)).abs() < 1e-6 * natural, "{speed}: {natural}");
    }
}

#[test]
fn stanley_in_reverse_has_the_poles_of_the_linear_model() {
    for row in rows("reverse_poles") {
        let (damping, speed) = (number(&row, "damping"), number(&row, "speed_m_s"));
        let mut law = law_on("car", "stanley", &[("reverse_damping", damping)]);
        let (cross, heading) = slopes(&mut *law, -speed);
        let square = -speed * cross;
        let (real, imaginary) = (number(&row, "real_1_s"), number(&row, "imag_1_s"));
        assert!(
            (-0.5 * heading - real).abs() < 1e-6
                && (square - real * real - imaginary * imaginary).abs() < 1e-6
        );
        assert!((math::sqrt(square) - law.bandwidth_rad_s(-speed)).abs() < 1e-6);
    }
}

/// How much a small swing has grown between 20 s and 60 s, with a dead time and the goal 1 m ahead at 1 m/s.
fn growth(dead_time_s: f64) -> f64 {
    const TICK_S: f64 = 2e-3;
    let mut law =
        law_on("differential", "pure-pursuit", &[("least_lookahead_m", 1.0), ("lookahead_time_s", 0.0)]);
    // A command held for a tick is late by half of one more.
    let late = math::round(dead_time_s / TICK_S - 0.5) as usize;
    let mut under_way = vec![BodyVelocity { speed_m_s: 1.0, turn_rate_rad_s: 0.0 }; late];
    let mut at = Pose::new(0.0, 1e-6, 0.0);
    let mut swing = [0.0_f64; 2];
    for step in 0..30_000 {
        let reference = moving(Pose::new(at.x_m, 0.0, 0.0), 1.0, 0.0);
        let wanted = control(&mut *law, reference, &Steady(reference), at, reference.velocity);
        let acting = core::mem::replace(&mut under_way[step % late], wanted);
        at = at.moved(acting, TICK_S);
        match step {
            5_000..10_000 => swing[0] = swing[0].max(at.y_m.abs()),
            25_000..30_000 => swing[1] = swing[1].max(at.y_m.abs()),
            _ => {}
        }
    }
    swing[1] / swing[0]
}

#[test]
fn pursuit_with_dead_time_is_stable_down_to_the_bound_and_no_further() {
    let bound = table("pursuit_bound").as_f64().unwrap();
    assert!((bound - 1.9213).abs() < 1e-4);
    let (stable, unstable) = (growth(1.0 / (bound * 1.03)), growth(1.0 / (bound * 0.97)));
    assert!(stable < 0.5 && unstable > 2.0, "{stable} {unstable}");
}

/// How a drive went: the greatest cross-track error after a time, and the last error.
#[derive(Debug)]
struct Drive {
    greatest_cross_m: f64,
    last: TrackingError,
}

/// Drives a car along a plan, 50 ticks a second, within its limits.
fn drive(law: &mut dyn Law, plan: &Plan, start: Pose, from_s: f64) -> Drive {
    let vehicle = context("car").vehicle;
    let (mut at, mut wheels, mut greatest_cross_m) = (start, [0.0; 4], 0.0_f64);
    let mut last = TrackingError::default();
    for tick in 0..math::ceil(plan.duration_s() / 0.02) as u32 {
        let ahead = OnPlan { plan, t_s: f64::from(tick) * 0.02, rate: 1.0 };
        let reference = ahead.reference(0.0);
        let motion = vehicle.body(&wheels);
        let input = Input::new(reference, &ahead, at, (wheels, motion), 0.02);
        let wanted = law.control(&input).velocity;
        assert!(wanted.is_finite());
        if ahead.t_s >= from_s {
            greatest_cross_m = greatest_cross_m.max(input.error.cross_m.abs());
        }
        last = input.error;
        wheels = limit(&*vehicle, wanted, reference.curvature_1_m, &wheels, 0.02).wheels;
        at = at.moved(vehicle.body(&wheels), 0.02);
    }
    Drive { greatest_cross_m, last }
}

fn lobe(side: f64, reverse: bool) -> String {
    let bend = 0.35 * side;
    format!(
        r#"{{"kind":"clothoid","curvature_start_1_m":0,"curvature_end_1_m":{bend},"length_m":1.5,"speed_m_s":0.6,"reverse":{reverse}}},
           {{"kind":"arc","radius_m":{},"turn_rad":{},"speed_m_s":0.6,"reverse":{reverse}}},
           {{"kind":"clothoid","curvature_start_1_m":{bend},"curvature_end_1_m":0,"length_m":1.5,"speed_m_s":0.6,"reverse":{reverse}}},
           {{"kind":"line","length_m":3,"speed_m_s":0.6,"reverse":{reverse}}}"#,
        1.0 / 0.35,
        if reverse { -3.9 * side } else { 3.9 * side },
    )
}

#[test]
fn the_car_comes_back_to_lines_arcs_and_clothoids_either_way() {
    for reverse in [false, true] {
        let turn = if reverse { -2.5 } else { 2.5 };
        for segment in [
            format!(r#"{{"kind":"line","length_m":9,"speed_m_s":0.6,"reverse":{reverse}}}"#),
            format!(
                r#"{{"kind":"arc","radius_m":3.6,"turn_rad":{turn},"speed_m_s":0.6,"reverse":{reverse}}}"#
            ),
            format!(
                r#"{{"kind":"clothoid","curvature_start_1_m":-0.3,"curvature_end_1_m":0.3,"length_m":9,"speed_m_s":0.6,"reverse":{reverse}}}"#
            ),
        ] {
            let plan = plan("car", &segment);
            for name in LAWS {
                let run = drive(&mut *law_on("car", name, &[]), &plan, Pose::new(-0.1, 0.3, 0.2), 10.0);
                assert!(
                    run.greatest_cross_m < 0.03 && run.last.cross_m.abs() < 0.01,
                    "{name} on {segment}: {run:?}"
                );
                assert!(run.last.along_m.abs() < 0.005, "{name} on {segment}: {run:?}");
            }
        }
    }
}

#[test]
fn the_car_stays_on_a_figure_eight_either_way() {
    for reverse in [false, true] {
        let plan = plan("car", &format!("{},{}", lobe(1.0, reverse), lobe(-1.0, reverse)));
        for name in LAWS {
            let run = drive(&mut *law_on("car", name, &[]), &plan, Pose::default(), 2.0);
            assert!(run.greatest_cross_m < 0.015 && run.last.cross_m.abs() < 0.002, "{name}: {run:?}");
        }
    }
}

/// Numbers that look random and are the same everywhere (a linear congruence; Knuth, The Art of Computer Programming,
/// volume 2, 3.3.4), in [−1, 1).
struct Dice(u64);

impl Dice {
    fn next(&mut self) -> f64 {
        self.0 = self.0.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        (self.0 >> 11) as f64 / (1_u64 << 52) as f64 - 1.0
    }

    /// Of any size from 1e-6 to 1e3, either sign; at times 0.
    fn any_size(&mut self) -> f64 {
        let (sign, size) = (self.next(), self.next());
        if size > 0.9 { 0.0 } else { math::exp(10.0 * size - 4.0).copysign(sign) }
    }
}

#[test]
fn no_state_makes_the_laws_want_the_impossible() {
    let mut dice = Dice(1);
    for _ in 0..20_000 {
        let reference = moving(
            Pose::new(dice.any_size(), dice.any_size(), PI * dice.next()),
            dice.any_size(),
            dice.any_size(),
        );
        let at = Pose::new(dice.any_size(), dice.any_size(), PI * dice.next());
        let motion = BodyVelocity { speed_m_s: dice.any_size(), turn_rate_rad_s: dice.any_size() };
        for name in LAWS {
            let wanted = control(&mut *law_on("car", name, &[]), reference, &Steady(reference), at, motion);
            let error = TrackingError::between(at, reference.pose, reference.direction);
            let most = reference.velocity.speed_m_s.abs() + error.along_m.abs();
            assert!(wanted.speed_m_s.abs() <= most + 1e-9, "{name} {reference:?} {at:?}: {wanted:?}");
            // The goal is never nearer than 0.35 m; the steering angle wanted is never above 1.4 rad.
            let turned = (wanted.turn_rate_rad_s.abs() - reference.velocity.turn_rate_rad_s.abs()).max(0.0);
            assert!(turned <= 5.8 * most + 1e-9, "{name} {reference:?} {at:?}: {wanted:?}");
        }
    }
}

#[test]
fn the_laws_state_their_machines_and_domain() {
    assert!(build("pure-pursuit", &Values::default(), &context("differential")).is_ok());
    let problems = build("stanley", &Values::default(), &context("differential")).unwrap_err();
    assert!(problems[0].what.contains("for machines that steer"), "{problems:?}");
    for name in LAWS {
        let domain = law_on("car", name, &[]).domain();
        assert!(domain.forward && domain.reverse && !domain.at_rest);
        assert!((domain.max_heading_error_rad - math::FRAC_PI_2).abs() < 1e-15);
    }
}

/// What a law wants where the reference rests at the end of an arc to the left, the machine `late_m` before the end.
fn at_the_end(name: &str, late_m: f64) -> BodyVelocity {
    let end = Reference::at_rest(Pose::default(), 0.25);
    let at = Pose::default().along_arc(-late_m, -0.25 * late_m);
    ask(&mut *law_on("car", name, &[]), end, at).velocity
}

#[test]
fn the_path_goes_on_as_it_ended_and_the_last_centimetres_are_driven_along_it() {
    for name in LAWS {
        for late in [0.3, 0.02, -0.02, -0.3] {
            let wanted = at_the_end(name, late);
            let (curvature, speed) = (wanted.turn_rate_rad_s / wanted.speed_m_s, wanted.speed_m_s);
            assert!((speed - late).abs() < 0.05 * late.abs(), "{name} {late}: {wanted:?}");
            assert!((curvature - 0.25).abs() < 1e-6, "{name} {late}: {curvature}");
        }
    }
}

#[test]
fn a_goal_beyond_a_turning_point_lies_on_the_path_that_leads_there() {
    // 0.4 m before a cusp the arc is left as it is; the way back, which begins on the same arc, must not bend it.
    let plan = plan(
        "car",
        r#"{"kind":"arc","radius_m":4,"turn_rad":0.25,"speed_m_s":0.5,"end_speed_m_s":0},
           {"kind":"line","length_m":3,"speed_m_s":0.5,"reverse":true}"#,
    );
    for name in LAWS {
        let mut law = law_on("car", name, &[("k_along", 1.0)]);
        let mut t_s = 0.0;
        while t_s < plan.duration_s() {
            let ahead = OnPlan { plan: &plan, t_s, rate: 1.0 };
            let reference = ahead.reference(0.0);
            let wanted = control(&mut *law, reference, &ahead, reference.pose, reference.velocity);
            let curvature = wanted.turn_rate_rad_s - reference.velocity.turn_rate_rad_s;
            assert!(curvature.abs() < 1e-6, "{name} at {t_s}: {wanted:?} {reference:?}");
            t_s += 0.05;
        }
    }
}

#[test]
fn a_machine_too_far_ahead_waits_and_one_far_behind_makes_for_the_reference() {
    let reference = moving(Pose::default(), 0.5, 0.0);
    for name in LAWS {
        let mut law = law_on("car", name, &[]);
        assert_eq!(ask(&mut *law, reference, Pose::new(2.0, 0.1, 0.0)).velocity.speed_m_s, 0.0, "{name}");
        let behind = ask(&mut *law, reference, Pose::new(-3.0, 0.5, 0.0)).velocity;
        assert!(behind.speed_m_s > 3.0 && behind.turn_rate_rad_s < 0.0, "{name}: {behind:?}");
    }
}

#[test]
fn pursuit_goes_round_a_bend_tighter_than_its_distance() {
    // On a circle of 0.3 m no point is 0.7 m away; the farthest one leads along the circle too.
    let reference = moving(Pose::default(), 0.3, 1.0);
    let reference = Reference { curvature_1_m: 1.0 / 0.3, ..reference };
    let wanted = ask(&mut *law_on("differential", "pure-pursuit", &[]), reference, Pose::default()).velocity;
    assert!((wanted.turn_rate_rad_s - 1.0).abs() < 1e-9, "{wanted:?}");
}
