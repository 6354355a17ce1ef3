//! Wheel conversion both ways, against values computed outside.

use super::*;

fn velocity(speed_m_s: f64, turn_rate_rad_s: f64) -> BodyVelocity {
    BodyVelocity { speed_m_s, turn_rate_rad_s }
}

fn near(value: f64, expected: f64, tolerance: f64) {
    assert!((value - expected).abs() <= tolerance, "{value}, expected {expected}");
}

#[test]
fn unequal_wheels_turn_by_their_own_radius() {
    // V = v ∓ ωW/2: 0.5 − 0.8·0.25 = 0.3 and 0.7 m/s, over 0.1 and 0.125 m (textbook kinematics).
    let pairs = [
        ("left_wheel_radius_m", 0.1),
        ("right_wheel_radius_m", 0.125),
        ("track_width_m", 0.5),
        ("max_wheel_speed_rad_s", 10.0),
        ("max_wheel_accel_rad_s2", 20.0),
    ];
    let machine = machine("differential", &pairs);
    let wheels = machine.wheels(velocity(0.5, 0.8), 0.0, &[0.0; 4]);
    near(wheels[0], 3.0, 1e-14);
    near(wheels[1], 5.6, 1e-14);
    // The greatest speed is that of the smaller wheel; the greatest turn rate (0.1 + 0.125)·10/0.5.
    assert_eq!(machine.top_speed_m_s(), 1.0);
    near(machine.top_turn_rate_rad_s(), 4.5, 1e-14);
}

#[test]
fn skid_steer_is_a_differential_drive_with_another_track() {
    let factor = machine("skid-steer", &with(&DIFFERENTIAL, &[("track_factor", 1.6)]));
    let wide = machine("differential", &with(&DIFFERENTIAL, &[("track_width_m", 0.8)]));
    let usual = machine("skid-steer", &DIFFERENTIAL);
    let wanted = velocity(0.4, -0.9);
    assert_eq!(factor.wheels(wanted, 0.0, &[0.0; 4]), wide.wheels(wanted, 0.0, &[0.0; 4]));
    // χ = 1.5 by default: rims 0.4 ± 0.9·0.375.
    let wheels = usual.wheels(wanted, 0.0, &[0.0; 4]);
    near(wheels[0], 7.375, 1e-13);
    near(wheels[1], 0.625, 1e-13);
}

#[test]
fn a_skidding_side_rolls_at_its_own_centre_of_rotation() {
    let pairs = [
        ("wheel_radius_m", 0.1),
        ("left_icr_m", 0.6),
        ("right_icr_m", 0.4),
        ("max_wheel_speed_rad_s", 10.0),
        ("max_wheel_accel_rad_s2", 20.0),
    ];
    let machine = machine("skid-steer", &pairs);
    // V_l = v − ω y_l = 0.5 − 0.5·0.6, V_r = v + ω y_r = 0.5 + 0.5·0.4 (by algebra from the definition of the centres).
    let wheels = machine.wheels(velocity(0.5, 0.5), 0.0, &[0.0; 4]);
    near(wheels[0], 2.0, 1e-14);
    near(wheels[1], 7.0, 1e-14);
    // Rims of ±0.5 m/s: ω = 1/1.0, v = (0.4·(−0.5) + 0.6·0.5)/1.0.
    let body = machine.body(&[-5.0, 5.0, 0.0, 0.0]);
    near(body.turn_rate_rad_s, 1.0, 1e-14);
    near(body.speed_m_s, 0.1, 1e-14);
}

#[test]
fn a_car_steers_by_ackermanns_condition() {
    // L 1.2, R 3, track 0.8: inner 24.775141°, outer 19.440035°; L 1.2, κ 0.25: 16.699244° (SciPy 1.17).
    let single = machine("car", &CAR);
    near(single.wheels(BodyVelocity::ZERO, 0.25, &[0.0; 4])[1].to_degrees(), 16.699_244, 1e-6);
    let both = machine("car", &with(&CAR, &[("front_track_m", 0.8)]));
    assert_eq!((both.layout(), single.layout()), (WheelLayout::Ackermann, WheelLayout::SpeedSteer));
    for (turn, inner, outer) in [(1.0, 1, 2), (-1.0, 2, 1)] {
        let wanted = velocity(1.5, turn * 0.5);
        let wheels = both.wheels(wanted, 0.0, &[0.0; 4]);
        near(wheels[inner].to_degrees(), turn * 24.775_141, 1e-6);
        near(wheels[outer].to_degrees(), turn * 19.440_035, 1e-6);
        let body = both.body(&wheels);
        near(body.speed_m_s, wanted.speed_m_s, 1e-15);
        near(body.turn_rate_rad_s, wanted.turn_rate_rad_s, 1e-15);
    }
}

#[test]
fn the_inner_wheel_ends_the_steering() {
    let both = machine("car", &with(&CAR, &[("front_track_m", 0.8)]));
    let wheels = both.wheels(velocity(1.0, 3.0), 0.0, &[0.0; 4]);
    near(wheels[1], 0.6, 1e-15);
    assert!(wheels[1] <= 0.6 && wheels[2] < 0.5, "{wheels:?}");
    // Both axes meet in one point: cot δ_outer − cot δ_inner = T/L (Ackermann's condition).
    near(1.0 / math::tan(wheels[2]) - 1.0 / math::tan(wheels[1]), 0.8 / 1.2, 1e-13);
    near(both.body(&wheels).turn_rate_rad_s, both.top_turn_rate_rad_s() / 2.0, 1e-13);
    let bent = limit(&*both, velocity(1.0, 3.0), 0.0, &[0.0; 4], 100.0);
    assert!(bent.speed_limited && bent.body.speed_m_s == 1.0, "{bent:?}");
}

#[test]
fn a_steered_wheel_pulls_the_axle() {
    // v_s 1, 30°, L 1.2: v 0.866025, ω 0.416667 (v = v_s cos δ, ω = v_s sin δ/L; SciPy 1.17).
    let machine = machine("steered-wheel", &STEERED_WHEEL);
    let body = machine.body(&[1.0, 30.0_f64.to_radians(), 0.0, 0.0]);
    near(body.speed_m_s, 0.866_025_403_784_438_6, 1e-15);
    near(body.turn_rate_rad_s, 0.416_666_666_666_666_7, 1e-15);
    let wheels = machine.wheels(body, 0.0, &[1.0, 0.5, 0.0, 0.0]);
    near(wheels[0], 1.0, 1e-15);
    near(wheels[1].to_degrees(), 30.0, 1e-12);
    // Reverse travel turns the wheel's speed, not its angle.
    let back = machine.wheels(body.scaled(-1.0), 0.0, &[-1.0, 0.5, 0.0, 0.0]);
    near(back[0], -1.0, 1e-15);
    near(back[1].to_degrees(), 30.0, 1e-12);
}

#[test]
fn near_a_turn_on_the_spot_the_wheel_stays_on_its_side() {
    let machine = machine("steered-wheel", &STEERED_WHEEL);
    for side in [1.0, -1.0] {
        for speed in [-0.02, -0.001, 0.0, 0.001, 0.02] {
            let last = [side * 0.6, side * 1.57, 0.0, 0.0];
            let wheels = machine.wheels(velocity(speed, 0.5), 0.0, &last);
            assert!((wheels[1] - side * 1.57).abs() < 0.04, "{speed}: {wheels:?}");
            near(machine.body(&wheels).turn_rate_rad_s, 0.5, 1e-3);
        }
    }
    assert_eq!(machine.pivot_decel_rad_s2(), Some(0.8 / 1.2));
    let short = super::machine("steered-wheel", &with(&STEERED_WHEEL, &[("max_steer_rad", 1.57)]));
    assert_eq!(short.pivot_decel_rad_s2(), None, "1.57 is less than π/2");
    let excess = short.excess(Motion::Pivot { turn_rate_rad_s: 0.1 });
    assert!(excess.is_some_and(|text| text.contains("turning on the spot")));
    // What it cannot steer it steers as far as it can, at the speed wanted.
    let wheels = short.wheels(velocity(0.0, 0.5), 0.0, &[0.5, 0.0, 0.0, 0.0]);
    near(machine.body(&wheels).speed_m_s, 0.0, 1e-15);
}

#[test]
fn a_standing_steered_wheel_steers_first_and_a_turning_one_holds_near_rest() {
    let machine = machine("steered-wheel", &STEERED_WHEEL);
    let standing = machine.wheels(velocity(0.0, 0.5), 0.0, &[0.0; 4]);
    assert_eq!(standing, [0.0, math::FRAC_PI_2, 0.0, 0.0]);
    let arrived = machine.wheels(velocity(0.0, 0.5), 0.0, &[0.0, 1.5, 0.0, 0.0]);
    near(arrived[0], 0.6, 1e-15);
    assert_eq!(machine.wheels(BodyVelocity::ZERO, 0.3, &[0.4, 1.5, 0.0, 0.0])[1], 1.5, "still turning");
    near(machine.wheels(BodyVelocity::ZERO, 0.3, &[0.0, 1.5, 0.0, 0.0])[1], math::atan(0.36), 1e-15);
    assert_eq!(machine.zero(&[0.7, -0.4, 0.0, 0.0]), [0.0, -0.4, 0.0, 0.0]);
}

#[test]
fn at_rest_a_steered_wheel_goes_to_the_nearer_end_before_a_turn_on_the_spot() {
    let machine = machine("steered-wheel", &STEERED_WHEEL);
    let steer = |curvature: f64, last: &Wheels| machine.wheels(BodyVelocity::ZERO, curvature, last);
    let quarter = math::FRAC_PI_2;
    for (curvature, last_rad, expected) in [
        (f64::INFINITY, 0.0, quarter),
        (f64::NEG_INFINITY, 0.0, -quarter),
        (f64::INFINITY, -0.05, quarter),
        (f64::INFINITY, -0.3, -quarter),
        (f64::NEG_INFINITY, 1.57, quarter),
    ] {
        assert_eq!(steer(curvature, &[0.0, last_rad, 0.0, 0.0]), [0.0, expected, 0.0, 0.0], "{last_rad}");
    }
    // A law's last millimetres give way to a wheel that has to swing: it stops first, then it steers.
    let creeping = machine.wheels(velocity(0.005, 0.0), f64::INFINITY, &[0.005, 0.0, 0.0, 0.0]);
    assert_eq!(creeping, [0.0; 4]);
    let stopped = machine.wheels(velocity(0.005, 0.0), f64::INFINITY, &creeping);
    assert_eq!(stopped, [0.0, quarter, 0.0, 0.0]);
}

#[test]
fn a_swing_takes_the_angle_over_the_rate() {
    let (wheel, car) = (machine("steered-wheel", &STEERED_WHEEL), machine("car", &CAR));
    let swing = |machine: &dyn Vehicle, from: f64, to: f64| machine.swing_s(from, to).unwrap();
    near(swing(&*wheel, 0.0, f64::INFINITY), math::FRAC_PI_2 / 1.2, 1e-15);
    near(swing(&*wheel, f64::NEG_INFINITY, 0.25), (math::FRAC_PI_2 + math::atan(0.3)) / 1.2, 1e-15);
    near(swing(&*wheel, f64::NEG_INFINITY, f64::INFINITY), 0.0, 0.0);
    near(swing(&*car, 0.25, -0.25), 2.0 * math::atan(0.3) / 0.8, 1e-15);
    // Left of straight ahead the left wheel is the inner one and has the longer way, right of it the right one.
    let both = machine("car", &with(&CAR, &[("front_track_m", 0.8)]));
    near(swing(&*both, 0.25, -0.25), 2.0 * math::atan2(0.3, 0.9) / 0.8, 1e-15);
    near(swing(&*both, 0.0, 0.25), math::atan2(0.3, 0.9) / 0.8, 1e-15);
    let wired = machine(
        "car",
        &with(&CAR, &[("front_track_m", 0.8), ("swap_left_right", 1.0), ("steer_ratio", -3.1)]),
    );
    near(swing(&*wired, 0.25, -0.25), 2.0 * math::atan2(0.3, 0.9) / 0.8, 1e-15);
    assert_eq!(machine("differential", &DIFFERENTIAL).swing_s(0.0, 1.0), None);
}

#[test]
fn zero_holds_every_steering_angle() {
    let both = machine("car", &with(&CAR, &[("front_track_m", 0.8)]));
    assert_eq!(both.zero(&[1.5, 0.3, 0.2, 0.0]), [0.0, 0.3, 0.2, 0.0]);
    assert_eq!(machine("car", &CAR).zero(&[1.5, 0.3, 0.0, 0.0]), [0.0, 0.3, 0.0, 0.0]);
    assert_eq!(machine("differential", &DIFFERENTIAL).zero(&[1.5, 0.3, 0.0, 0.0]), [0.0; 4]);
}

#[test]
fn keys_that_exclude_each_other_are_refused_by_name() {
    let radius = [("left_wheel_radius_m", 0.1)];
    let skid = &DIFFERENTIAL[..];
    let icr = [("left_icr_m", 0.5), ("right_icr_m", 0.5)];
    let cases = [
        (
            "differential",
            with(&DIFFERENTIAL[1..], &[]),
            "wheel_radius_m: missing; give a value greater than 0",
        ),
        ("differential", with(&DIFFERENTIAL[1..], &radius), "right_wheel_radius_m: missing"),
        ("differential", with(&DIFFERENTIAL, &radius), "wheel_radius_m: given together with"),
        ("skid-steer", with(skid, &icr), "track_width_m: given together with"),
        ("skid-steer", with(skid, &icr[..1]), "track_width_m: given together with"),
        ("skid-steer", [&skid[..1], &skid[2..]].concat(), "track_width_m: missing"),
        ("skid-steer", [&skid[..1], &skid[2..], &icr[1..]].concat(), "left_icr_m: missing"),
        (
            "skid-steer",
            [&skid[..1], &skid[2..], &icr, &[("track_factor", 1.5)]].concat(),
            "track_factor: given together with",
        ),
        ("differential", with(&DIFFERENTIAL, &[("swap_left_right", 0.5)]), "swap_left_right: 0.5 is neither"),
        ("differential", with(&DIFFERENTIAL, &[("left_gear_ratio", 0.0)]), "left_gear_ratio: 0 would send"),
        (
            "car",
            with(&CAR, &[("swap_left_right", 1.0)]),
            "swap_left_right: 1, but this command has one angle",
        ),
    ];
    for (kind, pairs, expected) in cases {
        let problems = build_from(kind, &pairs).unwrap_err();
        let said = format!("{}", problems[0]);
        assert!(problems.len() == 1 && said.starts_with(expected), "{said}");
    }
}

#[test]
fn machines_that_steer_have_a_wheelbase_wired_or_not() {
    for machine in machines() {
        assert_eq!(machine.wheelbase_m().is_some(), machine.layout().is_steered(), "{machine:?}");
    }
    let wired = machine("car", &with(&CAR, &[("steer_ratio", -2.0)]));
    assert_eq!(wired.wheelbase_m(), Some(1.2));
}
