//! The regulator's gains against SciPy's and python-control's (`tests/reference/laws/riccati.json`).

use super::*;
use crate::geometry::{Direction, Pose};
use crate::law::testing::{context, law_on, moving};
use crate::law::{Ahead, Steady, gains};
use crate::plan::Reference;
use serde_json::Value;

const TABLE: &str = include_str!("../../../../../tests/reference/laws/riccati.json");

fn table() -> Value {
    serde_json::from_str(TABLE).expect("the script writes JSON")
}

fn number(value: &Value) -> f64 {
    value.as_f64().expect("a number")
}

/// The gain of a regulator with a case's weights and more gains, about a way ahead.
fn gain(case: &Value, more: &[(&str, f64)], period_s: f64, ahead: &dyn Ahead) -> Gain {
    let mut values = Values::default();
    let given = case["gains"].as_object().expect("gains");
    given.iter().for_each(|(name, value)| values.set(name, number(value)));
    more.iter().for_each(|(name, value)| values.set(name, *value));
    let context = Context { period_s, ..context("unicycle") };
    let gains = gains("lqr", &values, &context).unwrap();
    let reference = ahead.reference(0.0);
    let input = Input::new(reference, ahead, reference.pose, ([0.0; 4], reference.velocity), period_s);
    let mut law = Lqr {
        weights: Weights {
            error: ["q_along", "q_cross", "q_heading"].map(|name| gains.get(name)),
            effort: ["r_speed", "r_turn_rate"].map(|name| gains.get(name)),
        },
        step_s: gains.get("step_s"),
        period_s,
        integral: CrossIntegral::default(),
        doublings: doublings(gains.get("step_s")),
        motions: vec![
            BodyVelocity::ZERO;
            (gains.get("horizon_s") / gains.get("step_s") - 1e-9).ceil() as usize
        ],
    };
    law.gain(&input)
}

#[track_caller]
fn assert_gain(found: &Gain, expected: &Value, tolerance: f64) {
    for (row, found) in found.iter().enumerate() {
        for (column, found) in found.iter().enumerate() {
            let expected = number(&expected[row][column]);
            assert!((found - expected).abs() < tolerance, "{found} {expected}");
        }
    }
}

fn steady(case: &Value) -> Steady {
    let (speed, turn_rate) = (number(&case["ref_speed_m_s"]), number(&case["ref_turn_rate_rad_s"]));
    Steady(moving(Pose::new(0.3, -0.2, 0.4), speed, turn_rate))
}

#[test]
fn steady_gains_in_steps_of_a_tick_are_those_of_the_algebraic_equation() {
    let table = table();
    let cases = table["steady"].as_array().expect("cases");
    assert_eq!(cases.len(), 20);
    for case in cases {
        let period = number(&case["period_s"]);
        let found = gain(case, &[("step_s", period), ("horizon_s", 2.0)], period, &steady(case));
        assert_gain(&found, &case["k"], 1e-9);
    }
}

/// A longer step changes the cost to go alone, not the model nor the tick's own stage: the gains stay close.
#[test]
fn steps_longer_than_a_tick_change_the_steady_gains_by_little() {
    for case in table()["steady"].as_array().expect("cases") {
        let found = gain(case, &[], number(&case["period_s"]), &steady(case));
        let expected = &case["k"];
        let size = (0..2)
            .flat_map(|row| (0..3).map(move |column| number(&expected[row][column]).abs()))
            .fold(0.0, f64::max);
        assert_gain(&found, expected, 0.03 * size);
    }
}

// methods: the lateral chain with v = 1, q = (10, 1), r = 1, held for 20 ms.
#[test]
fn the_published_lateral_chain() {
    let table = table();
    let lateral = &table["lateral_20_ms"];
    assert!(
        (number(&lateral[0]) + 3.077_844_46).abs() < 1e-8
            && (number(&lateral[1]) + 2.665_145_70).abs() < 1e-8
    );
    let case = &table["steady"][0];
    let [_, [_, k_y, k_heading]] = gain(case, &[("step_s", 0.02), ("horizon_s", 1.0)], 0.02, &steady(case));
    assert!((k_y - number(&lateral[0])).abs() < 1e-9 && (k_heading - number(&lateral[1])).abs() < 1e-9);
    // In continuous time [√q₁, √(q₂ + 2v√q₁)]: by algebra.
    let weights = Weights { error: [4.0, 10.0, 1.0], effort: [1.0, 1.0] };
    let (k_y, k_heading) = steady_lateral(&weights, 1.0);
    assert!((k_y - 3.162_277_66).abs() < 1e-8 && (k_heading - 2.706_391_57).abs() < 1e-8);
}

/// A motion given by formula: c₀ + c₁ t + c₂ sin t, and for the turn rate sin 2t.
#[derive(Debug)]
struct Formula {
    speed: [f64; 3],
    turn_rate: [f64; 3],
}

impl Ahead for Formula {
    fn reference(&self, seconds: f64) -> Reference {
        let part = |c: &[f64; 3], angle: f64| c[0] + c[1] * seconds + c[2] * math::cos_sin(angle).1;
        let velocity = BodyVelocity {
            speed_m_s: part(&self.speed, seconds),
            turn_rate_rad_s: part(&self.turn_rate, 2.0 * seconds),
        };
        let pose = Pose::default();
        Reference { velocity, direction: Direction::default(), ..Reference::at_rest(pose, 0.0) }
    }
}

#[test]
fn time_varying_gains_are_those_of_the_recursion_step_by_step() {
    let table = table();
    let cases = table["varying"].as_array().expect("cases");
    assert_eq!(cases.len(), 8);
    for case in cases {
        let three = |key: &str| [0, 1, 2].map(|index| number(&case[key][index]));
        let ahead = Formula { speed: three("speed"), turn_rate: three("turn_rate") };
        assert_gain(&gain(case, &[], number(&case["period_s"]), &ahead), &case["k"], 1e-9);
    }
}

#[test]
fn at_rest_the_heading_is_corrected_and_motion_ahead_turns_it_towards_the_path() {
    let case = &table()["steady"][0];
    let resting = Steady(moving(Pose::default(), 0.0, 0.0));
    let [[k_x, ..], [_, k_y, k_heading]] = gain(case, &[], 0.02, &resting);
    assert!(k_x < -1.0 && k_heading < -0.5 && k_y.abs() < 1e-12, "{k_x} {k_y} {k_heading}");
    // Sets out with 0.5 m/s².
    let ahead = Formula { speed: [0.0, 0.5, 0.0], turn_rate: [0.0; 3] };
    let [_, [_, k_y, _]] = gain(case, &[], 0.02, &ahead);
    assert!(k_y < -0.5, "{k_y}");
}

#[test]
fn a_horizon_of_too_many_steps_is_refused() {
    let mut values = Values::default();
    values.set("horizon_s", 10.0);
    values.set("step_s", 0.02);
    let problems = crate::law::build("lqr", &values, &context("unicycle")).unwrap_err();
    assert_eq!(problems[0].key, "gains.horizon_s");
    assert!(
        problems[0].what.contains("10 s are 500 steps of 0.02 s; at most 200 fit a tick: give at most 4 s")
    );
}

#[test]
fn a_damping_that_no_quadratic_cost_gives_is_refused() {
    let ask = |damping: f64| {
        let mut values = Values::default();
        values.set("damping", damping);
        values.set("bandwidth_rad_s", 1.0);
        gains("lqr", &values, &context("unicycle"))
    };
    let problems = ask(0.6).unwrap_err();
    assert_eq!(problems[0].key, "gains.damping");
    assert!(problems[0].what.starts_with("0.6 asks for q_heading = -0.56 1/rad², which is not at least 0"));
    assert!(ask(0.71).is_ok());
}

#[test]
fn the_bandwidth_is_that_of_the_steady_lateral_motion() {
    // s² + K_φ s + v K_y with K = (2, √(1 + 2·0.5·2)): natural frequency 1, damping √3/2.
    let law = law_on("unicycle", "lqr", &[("q_cross", 4.0), ("q_heading", 1.0)]);
    assert!((law.bandwidth_rad_s(-0.5) - 1.0).abs() < 1e-12);
}
/// A reference that brakes from 0.5 m/s with 0.5 m/s² to rest after a time, s.
#[derive(Debug)]
struct Braking(f64);

impl Ahead for Braking {
    fn reference(&self, seconds: f64) -> Reference {
        moving(Pose::default(), (0.5 * (self.0 - seconds)).clamp(0.0, 0.5), 0.0)
    }
}

/// An error that is left at the end stays, so it pays to steer harder before: but bounded.
#[test]
fn before_a_rest_the_gains_rise_by_little_more_than_twice() {
    let case = &table()["steady"][0];
    let [_, [_, steady, _]] = gain(case, &[], 0.02, &Steady(moving(Pose::default(), 0.5, 0.0)));
    let mut most = 0.0_f64;
    for tick in 0..250 {
        let [_, [_, k_y, k_heading]] = gain(case, &[], 0.02, &Braking(f64::from(tick) * 0.02));
        most = most.max(k_y / steady);
        assert!(k_heading < -1.0 && k_heading > -2.5, "{k_heading}");
    }
    assert!(most > 1.5 && most < 2.3, "{most}");
}
