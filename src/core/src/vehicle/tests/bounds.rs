//! Loads and bounds: against formulas by hand, and against each other.

use super::*;
use proptest::prelude::*;

fn state(speed: f64, accel: f64, curvature: f64, curvature_rate: f64) -> PathState {
    PathState {
        speed_m_s: speed,
        accel_m_s2: accel,
        curvature_1_m: curvature,
        curvature_rate_1_m2: curvature_rate,
    }
}

fn value(machine: &dyn Vehicle, state: &PathState, limit: LimitName) -> f64 {
    machine.loads(state).of(limit).unwrap_or_else(|| panic!("{limit} is not listed")).value
}

fn near(value: f64, expected: f64) {
    assert!((value - expected).abs() < 1e-13, "{value}, expected {expected}");
}

#[test]
fn differential_loads_are_those_of_the_formula() {
    // ω̇ = (s̈ (1 ∓ κW/2) ∓ ṡ² κ' W/2)/r with W 0.5, r 0.1.
    let machine = machine("differential", &with(&DIFFERENTIAL, &[("max_wheel_decel_rad_s2", 30.0)]));
    let (v, a, k, rate) = (0.6, 0.4, 0.8, 1.5);
    let right = (a * (1.0 + k * 0.25) + v * v * rate * 0.25) / 0.1;
    let left = (a * (1.0 - k * 0.25) - v * v * rate * 0.25) / 0.1;
    assert!(right > 0.0 && left > 0.0);
    let moving = state(v, a, k, rate);
    near(value(&*machine, &moving, LimitName::WheelSpeed), v * (1.0 + k * 0.25) / 0.1);
    near(value(&*machine, &moving, LimitName::WheelAcceleration), right);
    near(value(&*machine, &moving, LimitName::WheelDeceleration), 0.0);
    // Braking: both wheels fall; the curvature's growth holds the right one up and pulls the left one down.
    let braking = state(v, -a, k, rate);
    let left = (-a * (1.0 - k * 0.25) - v * v * rate * 0.25) / 0.1;
    near(value(&*machine, &braking, LimitName::WheelDeceleration), -left);
    near(value(&*machine, &braking, LimitName::WheelAcceleration), 0.0);
    assert_eq!(
        machine.loads(&moving).iter().count(),
        3,
        "limits that the machine does not have are not listed"
    );
    let reverse = state(-v, -a, k, rate);
    assert_eq!(machine.loads(&reverse), machine.loads(&moving), "reversing changes no load");
}

#[test]
fn bounds_by_hand() {
    let differential = machine("differential", &DIFFERENTIAL);
    // Of the right wheel ±r A = s̈ (1 + κ W/2) + ṡ² κ' W/2; the left one, 1 − κ W/2, binds less at both ends.
    let (least, greatest) = differential.accel_bounds_m_s2(0.5, 0.8, 1.2, 0.9);
    near(greatest, (0.1 * 18.0 - 0.25 * 1.2 * 0.25) / 1.2);
    near(least, (-0.1 * 18.0 - 0.25 * 1.2 * 0.25) / 1.2);
    near(differential.speed_bound_m_s(2.0, 0.0, 0.5), 0.5 / 1.5);
    let (rate, accel) = differential.pivot_bounds(0.5).unwrap();
    near(rate, 0.5 * 10.0 * 0.1 / 0.25);
    near(accel, 0.5 * 20.0 * 0.1 / 0.25);

    let car = machine("car", &CAR);
    // δ' = L v κ'/(1 + (Lκ)²): 0.8 rad/s at κ 0.4, κ' 1: v = 0.8 (1 + 0.48²)/1.2.
    near(car.speed_bound_m_s(0.4, 1.0, 1.0), 0.8 * (1.0 + 0.48 * 0.48) / 1.2);
    near(value(&*car, &state(0.5, 0.0, 0.4, 1.0), LimitName::SteeringRate), 0.6 / (1.0 + 0.48 * 0.48));
    near(
        value(&*car, &state(0.5, 0.0, 0.25, 0.0), LimitName::SteeringAngle).to_degrees(),
        math::atan(0.3).to_degrees(),
    );
    assert_eq!(car.speed_bound_m_s(0.6, 0.0, 1.0), 0.0, "0.6·1.2 is beyond tan 0.6");
    assert!(car.pivot_bounds(1.0).is_none() && car.pivot_loads(0.1, 0.0).is_none());

    let steered = machine("steered-wheel", &STEERED_WHEEL);
    // v_s = v √(1 + (Lκ)²), and on the spot ω L.
    near(steered.speed_bound_m_s(1.0, 0.0, 0.8), 1.2 / 2.44_f64.sqrt());
    near(steered.pivot_bounds(1.0).unwrap().0, 1.5 / 1.2);

    let unicycle = machine("unicycle", &UNICYCLE);
    near(unicycle.speed_bound_m_s(4.0, 0.0, 1.0), 0.5);
    // ω̇ = κ s̈ + κ' ṡ² ≤ 3: s̈ ≤ (3 − 2·0.16)/4, and ≥ (−3 − 0.32)/4.
    let (least, greatest) = unicycle.accel_bounds_m_s2(0.4, 4.0, 2.0, 1.0);
    near(greatest, (3.0 - 0.32) / 4.0);
    near(least, -(3.0 + 0.32) / 4.0);
}

#[test]
fn each_front_wheel_has_its_own_angle_and_rate() {
    // L 1.2, R 3, track 0.8: inner 24.775141° (SciPy 1.17); its rate by a central difference of the angle.
    let car = machine("car", &with(&CAR, &[("front_track_m", 0.8)]));
    let curvature = 1.0 / 3.0;
    let angle = |curvature: f64| value(&*car, &state(1.0, 0.0, curvature, 0.0), LimitName::SteeringAngle);
    assert!((angle(curvature).to_degrees() - 24.775_141).abs() < 1e-6);
    let slope = (angle(curvature + 1e-6) - angle(curvature - 1e-6)) / 2e-6;
    let rate = value(&*car, &state(0.7, 0.0, curvature, 0.3), LimitName::SteeringRate);
    assert!((rate - slope * 0.3 * 0.7).abs() < 1e-9, "{rate}");
    assert!(angle(3.0) > 1.5, "beyond the inner wheel's pole the angle is beyond every limit");
}

#[test]
fn where_the_curvature_changes_too_fast_there_is_no_acceleration() {
    let machine = machine("differential", &DIFFERENTIAL);
    let (least, greatest) = machine.accel_bounds_m_s2(1.0, 0.0, 100.0, 1.0);
    assert!(least > greatest, "{least} {greatest}");
    // κ W/2 = 1: the left wheel rests whatever the speed, and only the curvature's change moves it.
    let (_, greatest) = machine.accel_bounds_m_s2(0.5, 4.0, 0.0, 1.0);
    near(greatest, 1.0);
    let (least, greatest) = machine.accel_bounds_m_s2(1.0, 4.0, 9.0, 1.0);
    assert!(least > greatest);
}

#[test]
fn a_pivot_loads_the_farther_side_most() {
    let pairs = [
        ("wheel_radius_m", 0.1),
        ("left_icr_m", 0.6),
        ("right_icr_m", 0.4),
        ("max_wheel_speed_rad_s", 10.0),
        ("max_wheel_accel_rad_s2", 20.0),
    ];
    let machine = machine("skid-steer", &pairs);
    let loads = machine.pivot_loads(1.0, -2.0).unwrap();
    near(loads.of(LimitName::WheelSpeed).unwrap().value, 6.0);
    near(loads.of(LimitName::WheelDeceleration).unwrap().value, 12.0);
    near(loads.greatest().unwrap().share(), 0.6);
}

#[test]
fn what_a_machine_cannot_do_is_said_with_value_and_bound() {
    let text = |machine: &dyn Vehicle, motion: Motion| machine.excess(motion).unwrap();
    let along = |speed_m_s: f64, curvature_1_m: f64| Motion::Along { speed_m_s, curvature_1_m };
    let differential = machine("differential", &DIFFERENTIAL);
    assert_eq!(
        text(&*differential, along(-0.9, 2.0)),
        "speed of the faster wheel 13.5000 rad/s, the limit is 10 rad/s"
    );
    let car = machine("car", &with(&CAR, &[("max_lateral_accel_m_s2", 0.5)]));
    assert_eq!(text(&*car, along(1.0, 1.0)), "steering angle 0.8761 rad, the limit is 0.6 rad");
    assert_eq!(text(&*car, along(-2.5, 0.0)), "speed 2.5000 m/s, the limit is 2 m/s");
    assert_eq!(text(&*car, along(1.6, 0.5)), "lateral acceleration 1.2800 m/s², the limit is 0.5 m/s²");
    assert_eq!(differential.excess(along(1.0 + 1e-12, 0.0)), None, "rounding is no excess");
}

const SPEED_LIKE: [LimitName; 5] = [
    LimitName::WheelSpeed,
    LimitName::Speed,
    LimitName::TurnRate,
    LimitName::SteeringRate,
    LimitName::LateralAcceleration,
];
const ACCEL_LIKE: [LimitName; 6] = [
    LimitName::WheelAcceleration,
    LimitName::WheelDeceleration,
    LimitName::Acceleration,
    LimitName::Deceleration,
    LimitName::TurnAcceleration,
    LimitName::TurnDeceleration,
];

/// The greatest share among some limits.
fn share_of(machine: &dyn Vehicle, state: &PathState, limits: &[LimitName]) -> f64 {
    let loads = machine.loads(state);
    let shares = loads.iter().filter(|load| limits.contains(&load.limit)).map(Load::share);
    shares.fold(0.0, f64::max)
}

proptest! {
    #[test]
    fn loads_at_the_bounds_are_at_the_limits_and_not_beyond(
        curvature in -0.45..0.45_f64,
        curvature_rate in -2.0..2.0_f64,
        share in 0.05..1.0_f64,
        part in 0.0..1.0_f64,
    ) {
        for machine in machines() {
            let top = machine.speed_bound_m_s(curvature, curvature_rate, share);
            prop_assert!(top > 0.0 && top.is_finite());
            let at_top = state(top, 0.0, curvature, curvature_rate);
            // Lateral acceleration goes with the square of the speed; its share is reached like the others'.
            let reached = share_of(&*machine, &at_top, &SPEED_LIKE);
            prop_assert!(reached <= share && reached > share - 1e-9, "{machine:?}: {reached} of {share}");
            let speed = part * top;
            let (least, greatest) = machine.accel_bounds_m_s2(speed, curvature, curvature_rate, share);
            if least > greatest {
                let none = share_of(&*machine, &state(speed, 0.0, curvature, curvature_rate), &ACCEL_LIKE);
                prop_assert!(none > share, "{machine:?}: nothing is possible, but 0 is");
                continue;
            }
            for accel in [least, greatest] {
                let reached = share_of(&*machine, &state(speed, accel, curvature, curvature_rate), &ACCEL_LIKE);
                prop_assert!(reached <= share && reached > share - 1e-9, "{machine:?} {accel}: {reached} of {share}");
            }
            let middle = state(speed, 0.5 * (least + greatest), curvature, curvature_rate);
            prop_assert!(share_of(&*machine, &middle, &ACCEL_LIKE) <= share);
        }
    }

    #[test]
    fn loads_are_those_of_the_wheel_commands(
        speed in 0.05..0.5_f64,
        accel in -0.5..0.5_f64,
        curvature in -0.4..0.4_f64,
        curvature_rate in -0.5..0.5_f64,
        reverse in any::<bool>(),
    ) {
        // The commands a moment before and after, along the path; their difference is the change of each number.
        let h = 1e-5;
        let way = if reverse { -1.0 } else { 1.0 };
        for machine in machines() {
            let command = |t: f64| {
                let v = speed + accel * t;
                let k = curvature + curvature_rate * (speed * t + 0.5 * accel * t * t);
                let velocity = BodyVelocity { speed_m_s: way * v, turn_rate_rad_s: way * v * k };
                let moving = machine.to_drive(&[way, 0.0, 0.0, 0.0]);
                machine.to_machine(&machine.wheels(velocity, 0.0, &moving))
            };
            let (before, at, after) = (command(-h), command(0.0), command(h));
            let loads = machine.loads(&state(way * speed, way * accel, curvature, curvature_rate));
            let layout = machine.layout();
            let size = |limit: LimitName| loads.of(limit).map_or(0.0, |load| load.value);
            let changes = |index: usize| (after[index] - before[index]) / (2.0 * h);
            let (angles, numbers): (Vec<usize>, Vec<usize>) =
                (0..layout.count()).partition(|index| layout.is_angle(*index));
            let greatest = |value: &dyn Fn(usize) -> f64, of: &[usize]| of.iter().map(|index| value(*index)).fold(0.0, f64::max);
            let angle = greatest(&|index| at[index].abs(), &angles);
            let rate = greatest(&|index| changes(index).abs(), &angles);
            prop_assert!((angle - size(LimitName::SteeringAngle)).abs() < 1e-12, "{machine:?}");
            prop_assert!((rate - size(LimitName::SteeringRate)).abs() < 1e-6, "{machine:?}");
            if layout == WheelLayout::Body {
                prop_assert!((at[0].abs() - size(LimitName::Speed)).abs() < 1e-12);
                let turn = size(LimitName::TurnAcceleration).max(size(LimitName::TurnDeceleration));
                prop_assert!((changes(1).abs() - turn).abs() < 1e-6);
                continue;
            }
            let speeds = size(LimitName::WheelSpeed).max(size(LimitName::Speed));
            prop_assert!((greatest(&|index| at[index].abs(), &numbers) - speeds).abs() < 1e-12, "{machine:?}");
            let grows = greatest(&|index| changes(index) * at[index].signum(), &numbers);
            let falls = greatest(&|index| -changes(index) * at[index].signum(), &numbers);
            let grown = size(LimitName::WheelAcceleration).max(size(LimitName::Acceleration));
            let fallen = size(LimitName::WheelDeceleration).max(size(LimitName::Deceleration));
            prop_assert!((grows - grown).abs() < 1e-6, "{machine:?}: {grows} {grown}");
            prop_assert!((falls - fallen).abs() < 1e-6, "{machine:?}: {falls} {fallen}");
        }
    }
}
