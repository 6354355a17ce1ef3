//! The rule for limits, on machines of every kind.

use super::*;
use crate::geometry::Pose;
use proptest::prelude::*;

/// The changes that the limits allow from one command to the next, each number in the machine's own terms.
fn is_step_within(machine: &dyn Vehicle, last: &Wheels, next: &Wheels, seconds: f64) -> bool {
    let steps = machine.largest_steps(last, next, seconds);
    (0..4).all(|index| (next[index] - last[index]).abs() <= steps[index] * (1.0 + 1e-9) + 1e-12)
}

proptest! {
    #[test]
    fn no_command_exceeds_speed_or_step_limits(
        wanted in prop::collection::vec((-8.0..8.0_f64, -8.0..8.0_f64), 1..60),
        curvature in -1.0..1.0_f64,
    ) {
        for machine in machines() {
            let mut last = [0.0; 4];
            let greatest = machine.greatest();
            for &(speed_m_s, turn_rate_rad_s) in &wanted {
                let wanted = BodyVelocity { speed_m_s, turn_rate_rad_s };
                let limited = limit(&*machine, wanted, curvature, &last, 0.02);
                prop_assert!(is_step_within(&*machine, &last, &limited.wheels, 0.02), "{machine:?}");
                for (value, bound) in limited.wheels.iter().zip(&greatest) {
                    prop_assert!(value.abs() <= bound * (1.0 + 1e-12), "{machine:?}");
                }
                last = limited.wheels;
            }
        }
    }

    #[test]
    fn the_command_gets_where_it_is_wanted(speed_m_s in -0.5..0.5_f64, curvature in -0.3..0.3_f64) {
        prop_assume!(speed_m_s.abs() > 0.02);
        let wanted = BodyVelocity { speed_m_s, turn_rate_rad_s: speed_m_s * curvature };
        for machine in machines() {
            let mut last = [0.0; 4];
            for _ in 0..400 {
                last = limit(&*machine, wanted, 0.0, &last, 0.02).wheels;
            }
            let body = machine.body(&last);
            prop_assert!((body.speed_m_s - wanted.speed_m_s).abs() < 1e-13, "{machine:?} {body:?}");
            prop_assert!((body.turn_rate_rad_s - wanted.turn_rate_rad_s).abs() < 1e-13, "{machine:?} {body:?}");
        }
    }

    #[test]
    fn wheel_conversion_goes_both_ways(speed_m_s in -1.0..1.0_f64, curvature in -0.45..0.45_f64) {
        prop_assume!(speed_m_s.abs() > 0.02);
        for machine in machines() {
            let velocity = BodyVelocity { speed_m_s, turn_rate_rad_s: speed_m_s * curvature };
            let moving = machine.to_drive(&[speed_m_s, 0.0, 0.0, 0.0]);
            let back = machine.body(&machine.wheels(velocity, 0.0, &moving));
            prop_assert!((back.speed_m_s - velocity.speed_m_s).abs() < 1e-14, "{machine:?}");
            prop_assert!((back.turn_rate_rad_s - velocity.turn_rate_rad_s).abs() < 1e-14, "{machine:?}");
        }
    }

    #[test]
    fn a_pair_of_angles_never_works_against_itself(
        wanted in prop::collection::vec((-2.0..2.0_f64, -2.0..2.0_f64), 1..60),
    ) {
        // Ackermann's condition, cot δ_right − cot δ_left = T/L, kept in the middle of every step.
        let car = machine("car", &with(&CAR, &[("front_track_m", 0.8)]));
        let mut last = [0.0; 4];
        for (speed_m_s, turn_rate_rad_s) in wanted {
            let wanted = BodyVelocity { speed_m_s, turn_rate_rad_s };
            last = limit(&*car, wanted, 0.0, &last, 0.02).wheels;
            let (left, right) = (math::tan(last[1]), math::tan(last[2]));
            prop_assert!((left - right - left * right * 0.8 / 1.2).abs() < 1e-12, "{last:?}");
        }
    }
}

#[test]
fn speed_limits_keep_the_curvature() {
    // Oriolo et al. 2002: v ≤ v_w/(1 + |κ|W/2); W 0.5, v_w 1: κ 0.5 → 0.8889, κ 2 → 0.6667.
    let differential = machine("differential", &DIFFERENTIAL);
    for (curvature, top) in [(0.5, 0.888_888_9), (2.0, 0.666_666_7)] {
        let wanted = BodyVelocity { speed_m_s: 3.0, turn_rate_rad_s: 3.0 * curvature };
        let limited = limit(&*differential, wanted, 0.0, &[0.0; 4], 100.0);
        assert!((limited.body.speed_m_s - top).abs() < 1e-7, "{limited:?}");
        assert!((limited.body.turn_rate_rad_s / limited.body.speed_m_s - curvature).abs() < 1e-12);
        assert!(limited.speed_limited && !limited.step_limited);
    }
}

#[test]
fn lateral_acceleration_scales_speed_and_turn_rate_alike() {
    // v ≤ √(a_lat/|κ|): a 0.2, κ 0.8 → 0.5 m/s, on every kind that can drive this bend.
    let lateral = [("max_lateral_accel_m_s2", 0.2)];
    let wanted = BodyVelocity { speed_m_s: 0.9, turn_rate_rad_s: 0.72 };
    for machine in [
        machine("differential", &with(&DIFFERENTIAL, &lateral)),
        machine("unicycle", &with(&UNICYCLE, &lateral)),
        machine("car", &with(&CAR, &[lateral[0], ("max_steer_rad", 1.0)])),
        machine("steered-wheel", &with(&STEERED_WHEEL, &lateral)),
    ] {
        let factor = machine.speed_factor(wanted);
        assert!((0.9 * factor - 0.5).abs() < 1e-15, "{machine:?}: {factor}");
        assert!((machine.speed_bound_m_s(0.8, 0.0, 1.0) - 0.5).abs() < 1e-14);
    }
}

#[test]
fn a_speed_falls_by_the_deceleration_and_rises_by_the_acceleration() {
    let pairs = with(&UNICYCLE, &[("max_accel_m_s2", 1.0), ("max_decel_m_s2", 2.0)]);
    let machine = machine("unicycle", &pairs);
    let step = |last: f64, wanted: f64| {
        let wanted = BodyVelocity { speed_m_s: wanted, turn_rate_rad_s: 0.0 };
        limit(&*machine, wanted, 0.0, &[last, 0.0, 0.0, 0.0], 0.1).wheels[0] - last
    };
    // By hand: a·Δt away from zero, d·Δt towards it; through zero the rest of the time at a.
    for (last, wanted, expected) in [
        (0.0, 1.0, 0.1),
        (0.5, 1.0, 0.1),
        (0.5, 0.0, -0.2),
        (-0.5, 0.0, 0.2),
        (-0.5, 1.0, 0.2),
        (0.05, -1.0, -0.05 - 0.075),
        (0.05, 0.0, -0.05),
        (-0.5, -1.0, -0.1),
    ] {
        assert!((step(last, wanted) - expected).abs() < 1e-15, "{last} to {wanted}: {}", step(last, wanted));
    }
}

#[test]
fn a_steered_wheel_turns_on_the_spot_without_leaving_it() {
    // From straight ahead: 1.2 rad/s of steering take 1.3 s to the right angle, then ω = 0.5 rad/s from 0.8 m/s².
    let machine = machine("steered-wheel", &STEERED_WHEEL);
    let wanted = BodyVelocity { speed_m_s: 0.0, turn_rate_rad_s: 0.5 };
    let (mut pose, mut last) = (Pose::new(0.0, 0.0, 0.0), [0.0; 4]);
    let mut farthest = 0.0_f64;
    for _ in 0..250 {
        let limited = limit(&*machine, wanted, 0.0, &last, 0.02);
        last = limited.wheels;
        pose = pose.moved(limited.body, 0.02);
        farthest = farthest.max(math::length(pose.x_m, pose.y_m));
    }
    assert!(farthest < 0.01, "{farthest} m off the spot");
    let turned = 0.5 * (5.0 - math::FRAC_PI_2 / 1.2);
    assert!(
        (pose.heading_rad - turned).abs() < 0.25,
        "{pose:?}, {turned} rad without the time to gain speed"
    );
    // Back to zero: the wheel holds its angle until it stands, so the machine stays where it is.
    for _ in 0..60 {
        let limited = limit(&*machine, BodyVelocity::ZERO, 0.0, &last, 0.02);
        last = limited.wheels;
        pose = pose.moved(limited.body, 0.02);
    }
    assert!(last[0] == 0.0 && math::length(pose.x_m, pose.y_m) < 0.01, "{last:?} {pose:?}");
}
