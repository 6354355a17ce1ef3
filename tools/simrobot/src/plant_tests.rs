use super::*;
use crate::testing::{car, crossed, differential, front_steered, steered_wheel, unicycle};
use proptest::prelude::*;

fn plant(spec: &RobotSpec, vehicle: Arc<dyn Vehicle>) -> Plant {
    Plant::new(spec, vehicle, Pose::default(), TimeNs(0)).unwrap()
}

fn at(seconds: f64) -> TimeNs {
    TimeNs(0) + SpanNs::from_seconds(seconds)
}

/// Commands once at t = 0 and returns the pose after some seconds.
fn after(spec: &RobotSpec, vehicle: Arc<dyn Vehicle>, wheels: Wheels, seconds: f64) -> Pose {
    let mut plant = plant(spec, vehicle);
    plant.command(at(0.0), &wheels);
    plant.advance(at(seconds))
}

fn chassis(change: impl FnOnce(&mut ChassisSpec)) -> RobotSpec {
    let mut spec = RobotSpec::default();
    change(&mut spec.chassis);
    spec
}

#[test]
fn a_constant_command_gives_the_arc_of_the_closed_form() {
    // Circle of radius v/ω through the origin: x = v/ω sin ωt, y = v/ω (1 − cos ωt).
    let (v, w, t) = (0.8, 0.5, 3.0_f64);
    let pose = after(&RobotSpec::default(), unicycle(), [v, w, 0.0, 0.0], t);
    assert!((pose.x_m - v / w * (w * t).sin()).abs() < 1e-14, "{pose:?}");
    assert!((pose.y_m - v / w * (1.0 - (w * t).cos())).abs() < 1e-14);
    assert!((pose.heading_rad - w * t).abs() < 1e-15);
}

#[test]
fn an_ideal_robot_moves_bit_for_bit_as_the_core_does() {
    let vehicle = differential();
    let mut plant = plant(&RobotSpec::default(), vehicle.clone());
    let mut pose = Pose::default();
    for k in 0..500_u64 {
        let (tick, next) = (TimeNs(k * 20_000_000), TimeNs((k + 1) * 20_000_000));
        let wheels = [5.0 + (k % 7) as f64, 6.0 - (k % 5) as f64, 0.0, 0.0];
        plant.command(tick, &wheels);
        pose = pose.moved(vehicle.body(&wheels), next.since(tick).seconds());
        assert_eq!(plant.advance(next), pose, "tick {k}");
    }
}

#[test]
fn a_small_left_wheel_turns_the_machine_to_the_left() {
    // v = r (ω_R + ω_L)/2, ω = r (ω_R − ω_L)/W with r 0.1, W 0.5, both at 10 rad/s, the left radius 2 % small:
    // ω = 0.1 · 10 · 0.02/0.5 = 0.04 rad/s, v = 0.1 · 10 · 0.99 = 0.99 m/s.
    let spec = chassis(|chassis| chassis.left_radius_error = -0.02);
    let pose = after(&spec, differential(), [10.0, 10.0, 0.0, 0.0], 5.0);
    assert!((pose.heading_rad - 0.2).abs() < 1e-12, "{pose:?}");
    assert!((pose.x_m - 0.99 / 0.04 * 0.2_f64.sin()).abs() < 1e-12);
    let spec = chassis(|chassis| chassis.right_radius_error = -0.02);
    let pose = after(&spec, differential(), [10.0, 10.0, 0.0, 0.0], 5.0);
    assert!((pose.heading_rad + 0.2).abs() < 1e-12, "{pose:?}");
}

#[test]
fn a_wide_track_turns_the_machine_less() {
    // ±5 rad/s: ω = 0.1 · 10/0.5 = 2 rad/s, with a track 4 % wide 2/1.04; the speed is not touched.
    let spec = chassis(|chassis| chassis.track_error = 0.04);
    let pose = after(&spec, differential(), [-5.0, 5.0, 0.0, 0.0], 1.0);
    assert!((pose.heading_rad - 2.0 / 1.04).abs() < 1e-12, "{pose:?}");
    assert!(pose.x_m.abs() < 1e-15);
    let pose = after(&spec, differential(), [10.0, 10.0, 0.0, 0.0], 1.0);
    assert_eq!((pose.x_m, pose.heading_rad), (1.0, 0.0));
}

#[test]
fn slip_loses_its_share_of_the_way_and_of_the_turn() {
    let spec = chassis(|chassis| chassis.slip = 0.1);
    let pose = after(&spec, unicycle(), [1.0, 0.5, 0.0, 0.0], 2.0);
    assert!((pose.heading_rad - 0.9).abs() < 1e-12);
    assert!((pose.x_m - 2.0 * 0.9_f64.sin()).abs() < 1e-12, "the radius stays 2 m: {pose:?}");
}

#[test]
fn side_drift_slides_to_the_left_whichever_way_it_drives() {
    let spec = chassis(|chassis| chassis.side_drift = 0.05);
    for speed in [1.0, -1.0] {
        let pose = after(&spec, unicycle(), [speed, 0.0, 0.0, 0.0], 2.0);
        assert!((pose.x_m - 2.0 * speed).abs() < 1e-15 && (pose.y_m - 0.1).abs() < 1e-15, "{pose:?}");
    }
    // In a bend the sideways part traces a circle of its own: ∫ (−u sin ωt, u cos ωt) dt.
    let (u, w, t) = (0.05_f64, 0.5_f64, 2.0_f64);
    let pose = after(&spec, unicycle(), [1.0, w, 0.0, 0.0], t);
    let (x, y) = (
        (w * t).sin() / w - u * (1.0 - (w * t).cos()) / w,
        (1.0 - (w * t).cos()) / w + u * (w * t).sin() / w,
    );
    assert!((pose.x_m - x).abs() < 1e-14 && (pose.y_m - y).abs() < 1e-14, "{pose:?}");
}

#[test]
fn a_car_turns_by_its_true_steering_angle() {
    // ω = v tan(δ + offset)/L: 2 m/s, δ 0.2, offset 0.05, L 1.2.
    let spec = chassis(|chassis| chassis.steer_offset_rad = 0.05);
    let pose = after(&spec, car(), [2.0, 0.2, 0.0, 0.0], 1.0);
    assert!((pose.heading_rad - 2.0 * 0.25_f64.tan() / 1.2).abs() < 1e-12, "{pose:?}");
    let mut plant = plant(&spec, car());
    plant.command(at(0.0), &[2.0, 0.2, 0.0, 0.0]);
    assert_eq!(plant.wheels(), [2.0, 0.2, 0.0, 0.0], "the offset is not the drive's to see");
}

#[test]
fn both_front_wheels_stand_out_of_line() {
    // ω = v κ with the mean of the curvatures of the true angles; here equal ones, 0.2 + 0.05 each for κ by hand.
    let spec = chassis(|chassis| chassis.steer_offset_rad = 0.05);
    let slope = 0.25_f64.tan();
    let curvature = 0.5 * (slope / (1.2 + slope * 0.4) + slope / (1.2 - slope * 0.4));
    let pose = after(&spec, front_steered(), [2.0, 0.2, 0.2, 0.0], 1.0);
    assert!((pose.heading_rad - 2.0 * curvature).abs() < 1e-12, "{pose:?}");
}

#[test]
fn a_steered_wheel_pulls_the_chassis_by_its_true_angle_and_radius() {
    // v = v_s cos δ, ω = v_s sin δ/L, with v_s 1·1.02 and δ 30° of which 0.1 rad is the offset (methods: textbook).
    let spec = chassis(|chassis| {
        chassis.steer_offset_rad = 0.1;
        (chassis.left_radius_error, chassis.right_radius_error) = (0.02, 0.02);
    });
    let angle = 30.0_f64.to_radians();
    let mut plant = plant(&spec, steered_wheel());
    plant.command(at(0.0), &[1.0, angle - 0.1, 0.0, 0.0]);
    let body = plant.velocity();
    assert!((body.speed_m_s - 1.02 * angle.cos()).abs() < 1e-14, "{body:?}");
    assert!((body.turn_rate_rad_s - 1.02 * angle.sin() / 1.2).abs() < 1e-14, "{body:?}");
}

#[test]
fn left_is_left_behind_crossed_wires() {
    // Left 5 rad/s at a gear of 20, right 4 rad/s at −30, and the two change places.
    let spec = chassis(|chassis| chassis.left_radius_error = 0.1);
    let mut plant = plant(&spec, crossed());
    plant.command(at(0.0), &[-120.0, 100.0, 0.0, 0.0]);
    let body = plant.velocity();
    assert!((body.speed_m_s - 0.5 * (0.55 + 0.4)).abs() < 1e-14, "{body:?}");
    assert!((body.turn_rate_rad_s - (0.4 - 0.55) / 0.5).abs() < 1e-14, "{body:?}");
    assert_eq!(plant.wheels(), [-120.0, 100.0, 0.0, 0.0], "in the drive's terms");
}

fn lagging(wheel_lag_s: f64, steer_lag_s: f64) -> RobotSpec {
    let mut spec = RobotSpec::default();
    (spec.drive.wheel_lag_s, spec.drive.steer_lag_s) = (wheel_lag_s, steer_lag_s);
    spec
}

#[test]
fn a_lag_answers_a_step_as_the_exponential_says() {
    // First-order lag: w(t) = w∞ (1 − exp(−t/τ)); its integral w∞ (t − τ (1 − exp(−t/τ))).
    let lag = 0.08;
    let mut plant = plant(&lagging(lag, 0.0), differential());
    plant.command(at(0.0), &[-5.0, 5.0, 0.0, 0.0]);
    for t in [0.000_3, 0.01, 0.08, 0.1234, 0.4, 1.5, 2.0] {
        let pose = plant.advance(at(t));
        let share = 1.0 - (-t / lag).exp();
        assert!((plant.wheels()[1] - 5.0 * share).abs() < 1.1e-9 * 5.0, "{t}: {:?}", plant.wheels());
        assert!((pose.heading_rad - math::wrap(2.0 * (t - lag * share))).abs() < 1e-9, "{t}: {pose:?}");
    }
    plant.advance(at(3.0));
    assert_eq!(plant.wheels(), [-5.0, 5.0, 0.0, 0.0], "it has reached them");
}

/// Tiny steps with the exact wheel speeds, midpoint rule.
fn finely(vehicle: &dyn Vehicle, to: Wheels, lags: [f64; 2], seconds: f64) -> Pose {
    let (mut pose, steps) = (Pose::default(), 400_000);
    let h = seconds / f64::from(steps);
    for step in 0..steps {
        let t = (f64::from(step) + 0.5) * h;
        let wheel = |index: usize| {
            let lag = lags[index.min(1)];
            let left = if lag == 0.0 { 0.0 } else { (-t / lag).exp() };
            to[index] * (1.0 - left)
        };
        pose = pose.moved(vehicle.body(&[wheel(0), wheel(1), wheel(2), 0.0]), h);
    }
    pose
}

#[test]
fn motion_under_a_lag_agrees_with_tiny_steps() {
    for (vehicle, wheels, lags) in [
        (differential(), [3.0, 9.0, 0.0, 0.0], [0.1, 0.1]),
        (unicycle(), [1.0, 1.5, 0.0, 0.0], [0.05, 0.05]),
        (car(), [2.0, 0.5, 0.0, 0.0], [0.2, 0.1]),
        (car(), [2.0, -0.5, 0.0, 0.0], [0.0, 0.003]),
        (car(), [2.0, 0.4, 0.0, 0.0], [0.3, 0.0]),
        (front_steered(), [2.0, 0.45, 0.35, 0.0], [0.2, 0.1]),
        (steered_wheel(), [1.5, 1.0, 0.0, 0.0], [0.1, 0.2]),
        (crossed(), [240.0, -90.0, 0.0, 0.0], [0.1, 0.1]),
    ] {
        let steer = if vehicle.layout().is_steered() { lags[1] } else { 0.0 };
        let pose = after(&lagging(lags[0], steer), vehicle.clone(), wheels, 1.0);
        let fine = finely(&*vehicle, wheels, lags, 1.0);
        assert!(pose.distance_to(fine) < 1e-7, "{vehicle:?}: {pose:?} {fine:?}");
        assert!((pose.heading_rad - fine.heading_rad).abs() < 1e-7, "{vehicle:?}: {pose:?} {fine:?}");
    }
}

#[test]
fn a_command_begins_to_act_exactly_after_the_dead_time() {
    let mut spec = RobotSpec::default();
    spec.drive.dead_time_s = 0.05;
    let mut plant = plant(&spec, unicycle());
    plant.command(TimeNs(7), &[1.0, 0.0, 0.0, 0.0]);
    plant.command(TimeNs(20_000_007), &[2.0, 0.0, 0.0, 0.0]);
    assert!(plant.is_moving(), "a command is under way");
    assert_eq!(plant.advance(TimeNs(50_000_007)).x_m, 0.0);
    assert_eq!(plant.wheels()[0], 1.0);
    assert_eq!(plant.advance(TimeNs(50_000_008)).x_m, 1e-9);
    assert_eq!(plant.advance(TimeNs(70_000_007)).x_m, 0.02);
    assert_eq!(plant.advance(TimeNs(80_000_007)).x_m, 0.02 + 0.02);
}

#[test]
fn of_several_commands_at_one_moment_the_last_counts() {
    for dead_time_s in [0.0, 0.05] {
        let mut spec = RobotSpec::default();
        spec.drive.dead_time_s = dead_time_s;
        let mut plant = plant(&spec, unicycle());
        for speed in [1.0, 0.5, 0.25] {
            plant.command(at(1.0), &[speed, 0.0, 0.0, 0.0]);
        }
        let pose = plant.advance(at(2.0 + dead_time_s));
        assert_eq!(pose.x_m, 0.25);
        assert_eq!(plant.travelled_m(), 0.25);
    }
}

#[test]
fn a_moment_before_the_one_reached_counts_as_that_one() {
    let mut plant = plant(&RobotSpec::default(), unicycle());
    plant.advance(at(1.0));
    plant.command(at(0.5), &[1.0, 0.0, 0.0, 0.0]);
    assert_eq!(plant.advance(at(0.9)), Pose::default());
    assert_eq!(plant.advance(at(2.0)).x_m, 1.0);
}

#[test]
fn rest_is_seen_on_wheels_that_still_run_down() {
    let mut plant = plant(&lagging(0.1, 0.0), differential());
    assert!(!plant.is_moving());
    plant.command(at(0.0), &[5.0, 5.0, 0.0, 0.0]);
    assert!(plant.is_moving(), "its wheels are about to turn");
    plant.command(at(1.0), &[0.0; 4]);
    plant.advance(at(1.1));
    assert!(plant.is_moving(), "one time constant later");
    plant.advance(at(2.0));
    assert!(!plant.is_moving(), "5 exp(−10) is below a thousandth");
}

proptest! {
    #[test]
    fn asking_changes_nothing(
        commands in prop::collection::vec((1_u64..80_000_000, -10.0..10.0_f64, -10.0..10.0_f64), 1..12),
        asked in prop::collection::vec(0_u64..600_000_000, 0..40),
        lag in prop_oneof![Just(0.0), 0.001..0.2_f64],
        dead_time_s in prop_oneof![Just(0.0), 0.0..0.1_f64],
        side_drift in -0.1..0.1_f64,
    ) {
        let mut spec = lagging(lag, 0.0);
        spec.drive.dead_time_s = dead_time_s;
        spec.chassis.side_drift = side_drift;
        let run = |asked: &[u64]| {
            let mut plant = plant(&spec, differential());
            let mut moments: Vec<(u64, Option<Wheels>)> = asked.iter().map(|at| (*at, None)).collect();
            let mut at = 0;
            for (wait, left, right) in &commands {
                at += wait;
                moments.push((at, Some([*left, *right, 0.0, 0.0])));
            }
            moments.sort_by_key(|(at, command)| (*at, command.is_some()));
            for (at, command) in moments {
                match command {
                    Some(wheels) => plant.command(TimeNs(at), &wheels),
                    None => {
                        plant.advance(TimeNs(at));
                    }
                }
            }
            let pose = plant.advance(TimeNs(1_500_000_000));
            (pose, plant.wheels(), plant.travelled_m())
        };
        prop_assert_eq!(run(&asked), run(&[]));
    }
}
