//! Dynamic feedback linearisation: its value from outside, and what becomes of its singularity at speed 0.

use super::values::{VALUES, number, parsed};
use super::*;

/// What the law wants of a machine that moves at `moving_m_s`.
fn ask_moving(law: &mut dyn Law, reference: Reference, pose: Pose, moving_m_s: f64) -> Wanted {
    let motion = BodyVelocity { speed_m_s: moving_m_s, turn_rate_rad_s: 0.0 };
    law.control(&Input::new(reference, &Steady(reference), pose, ([0.0; 4], motion), 1.0))
}

#[test]
fn dynamic_check_value() {
    // A reference at the machine's own speed and heading, but with a position error that asks for u by k_p = 1 alone.
    let case = &parsed(VALUES)["dynamic"];
    let (heading, speed) = (number(case, "heading_rad"), number(case, "speed_m_s"));
    let u = (number(case, "u_x_m_s2"), number(case, "u_y_m_s2"));
    let mut law = law_on("differential", "dynamic", &[("k_p", 1.0)]);
    let reference = moving(Pose::new(u.0, u.1, heading), speed, 0.0);
    let wanted = ask_moving(&mut *law, reference, Pose::new(0.0, 0.0, heading), speed);
    assert!(!wanted.fallback);
    // Over one second, so the acceleration is the change of the speed.
    assert!((wanted.velocity.speed_m_s - speed - number(case, "accel_m_s2")).abs() < 1e-12);
    assert!((wanted.velocity.turn_rate_rad_s - number(case, "turn_rate_rad_s")).abs() < 1e-12);
}

#[test]
fn where_it_is_singular_the_nonlinear_design_steers_and_the_result_says_so() {
    let pose = Pose::new(-0.1, 0.1, 0.2);
    let gains = &[("k_p", 4.0), ("k_d", 2.8), ("b", 9.0), ("least_speed_m_s", 0.2)];
    for (wanted, moving_m_s) in [(0.5, 0.0), (0.5, 0.19), (0.1, 0.5), (0.0, 0.0), (0.5, -0.5), (-0.5, 0.5)] {
        let reference = moving(Pose::new(0.0, 0.0, 0.0), wanted, 0.1);
        let mut law = law_on("unicycle", "dynamic", gains);
        // ζ = k_d/(2√k_p)
        let mut other = law_on("unicycle", "nonlinear", &[("b", 9.0), ("zeta", 0.7)]);
        let result = ask_moving(&mut *law, reference, pose, moving_m_s);
        assert!(result.fallback, "{wanted} at {moving_m_s}");
        assert_eq!(result.velocity, ask_moving(&mut *other, reference, pose, moving_m_s).velocity);
    }
    assert_eq!(law_on("unicycle", "dynamic", gains).domain().least_speed_m_s, 0.2);
}

#[test]
fn it_takes_over_above_the_least_speed_and_gives_up_below_it() {
    let mut law = law_on("unicycle", "dynamic", &[("least_speed_m_s", 0.2)]);
    let reference = moving(Pose::new(0.0, 0.0, 0.0), 0.5, 0.0);
    let mut falls_back = |speed| ask_moving(&mut *law, reference, reference.pose, speed).fallback;
    let speeds = [0.0, 0.22, 0.26, 0.22, 0.19, 0.22, 0.26];
    assert_eq!(speeds.map(&mut falls_back), [true, true, false, false, true, true, false]);
    law.reset(BodyVelocity::ZERO);
    assert!(ask_moving(&mut *law, reference, reference.pose, 0.22).fallback, "a start begins anew");
}

#[test]
fn what_the_limits_took_away_is_not_kept_in_mind() {
    // Held at 0.3 m/s for a long while, with the reference running away: the next result begins at 0.3 m/s all the same.
    let mut law = law_on("unicycle", "dynamic", &[]);
    for tick in 0..500 {
        let reference = moving(Pose::new(f64::from(tick) * 0.02, 0.0, 0.0), 1.0, 0.0);
        let ahead = Steady(reference);
        let input = Input::new(
            reference,
            &ahead,
            Pose::new(0.0, 0.0, 0.0),
            ([0.0; 4], BodyVelocity { speed_m_s: 0.3, turn_rate_rad_s: 0.0 }),
            0.02,
        );
        let wanted = law.control(&input).velocity;
        law.settle(&input, true, 0.02);
        let way = reference.pose.x_m;
        assert!((wanted.speed_m_s - (0.3 + 0.02 * (2.0 * 0.7 + way))).abs() < 1e-12);
    }
}
