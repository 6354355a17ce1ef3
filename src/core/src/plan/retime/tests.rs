use super::average::cubic;
use super::*;
use crate::keys::Values;
use crate::math;
use crate::vehicle::{self, Vehicle};
use alloc::string::String;
use alloc::sync::Arc;
use alloc::vec;
use proptest::prelude::*;

/// A piece whose curvature is a line in the way travelled.
#[derive(Clone, Copy, Debug)]
struct Ramp {
    from_1_m: f64,
    to_1_m: f64,
    length_m: f64,
}

impl Path for Ramp {
    fn length_m(&self) -> f64 {
        self.length_m
    }

    fn bend(&self, s_m: f64) -> Bend {
        let rate = (self.to_1_m - self.from_1_m) / self.length_m;
        Bend { curvature_1_m: self.from_1_m + rate * s_m, curvature_rate_1_m2: rate }
    }

    fn is_uniform(&self) -> bool {
        self.from_1_m == self.to_1_m
    }
}

fn straight(length_m: f64) -> Ramp {
    Ramp { from_1_m: 0.0, to_1_m: 0.0, length_m }
}

/// A vehicle's limits; steps of the curvature are refused, so that a test says when it makes one.
struct Machine(Arc<dyn Vehicle>);

impl Limits for Machine {
    fn speed_bound_m_s(&self, bend: Bend, share: f64) -> f64 {
        self.0.speed_bound_m_s(bend.curvature_1_m, bend.curvature_rate_1_m2, share)
    }

    fn accel_bounds_m_s2(&self, speed_m_s: f64, bend: Bend, share: f64) -> (f64, f64) {
        self.0.accel_bounds_m_s2(speed_m_s, bend.curvature_1_m, bend.curvature_rate_1_m2, share)
    }

    fn step_speed_m_s(&self, before_1_m: f64, after_1_m: f64, _share: f64) -> f64 {
        if (before_1_m - after_1_m).abs() < 1e-9 { f64::INFINITY } else { 0.1 }
    }

    fn jerk_m_s3(&self) -> Option<f64> {
        self.0.max_jerk_m_s3()
    }
}

fn machine(kind: &str, pairs: &[(&str, f64)]) -> Machine {
    let mut values = Values::default();
    pairs.iter().for_each(|(key, value)| values.set(key, *value));
    Machine(vehicle::build(kind, &values).unwrap().0)
}

fn unicycle(more: &[(&str, f64)]) -> Machine {
    let base = [("max_speed_m_s", 1.0), ("max_turn_rate_rad_s", 2.0), ("max_accel_m_s2", 0.5)];
    machine("unicycle", &[&base[..], &[("max_turn_accel_rad_s2", 1.0)], more].concat())
}

fn differential(more: &[(&str, f64)]) -> Machine {
    let base = [("wheel_radius_m", 0.1), ("track_width_m", 0.5), ("max_wheel_speed_rad_s", 12.0)];
    machine("differential", &[&base[..], &[("max_wheel_accel_rad_s2", 15.0)], more].concat())
}

fn car(more: &[(&str, f64)]) -> Machine {
    let base =
        [("wheelbase_m", 1.2), ("max_speed_m_s", 2.5), ("max_accel_m_s2", 1.2), ("max_decel_m_s2", 2.0)];
    machine("car", &[&base[..], &[("max_steer_rad", 0.57), ("max_steer_rate_rad_s", 0.5)], more].concat())
}

fn retimed(
    pieces: &[Ramp],
    machine: &Machine,
    ends: (f64, f64),
    share: f64,
) -> Result<Vec<Vec<TimingPoint>>, Unsolvable> {
    let pieces: Vec<&dyn Path> = pieces.iter().map(|piece| piece as &dyn Path).collect();
    fastest(&Run { pieces: &pieces, start_speed_m_s: ends.0, end_speed_m_s: ends.1, share }, machine)
}

fn duration(timing: &[Vec<TimingPoint>]) -> f64 {
    timing.iter().map(|points| points[points.len() - 1].t_s).sum()
}

/// Looks at every cubic a hundred times: within every limit, continuous, from end to end. Returns the greatest jerk and
/// the greatest step of the acceleration.
fn assert_within(
    pieces: &[Ramp],
    machine: &Machine,
    ends: (f64, f64),
    share: f64,
    timing: &[Vec<TimingPoint>],
) -> (f64, f64) {
    assert_eq!(timing.len(), pieces.len());
    let (mut jerk, mut step): (f64, f64) = (0.0, 0.0);
    let mut last: Option<(f64, f64)> = None;
    for (piece, points) in pieces.iter().zip(timing) {
        assert_eq!((points[0].t_s, points[0].s_m, points[points.len() - 1].s_m), (0.0, 0.0, piece.length_m));
        if let Some((speed, _)) = last {
            assert_eq!(points[0].speed_m_s, speed, "the speed is continuous at joints");
        }
        for pair in points.windows(2) {
            let dt = pair[1].t_s - pair[0].t_s;
            assert!(dt >= 1e-6 && pair[1].s_m > pair[0].s_m, "{pair:?}");
            let (begin, end) = (cubic(pair[0], pair[1], 0.0).2, cubic(pair[0], pair[1], dt).2);
            jerk = jerk.max((end - begin).abs() / dt);
            step = step.max(last.map_or(begin.abs(), |(_, accel)| (begin - accel).abs()));
            last = Some((pair[1].speed_m_s, end));
            for look in 0..=100 {
                let (s, speed, accel) = cubic(pair[0], pair[1], dt * f64::from(look) / 100.0);
                let bend = piece.bend(s.clamp(0.0, piece.length_m));
                let bound = machine.speed_bound_m_s(bend, share);
                let (least, greatest) = machine.accel_bounds_m_s2(speed.max(0.0), bend, share);
                let what = alloc::format!(
                    "{piece:?} at {s}: speed {speed} of {bound}, accel {accel} of {least} to {greatest}"
                );
                assert!(speed >= -1e-9 && speed <= bound * (1.0 + 1e-6), "{what}");
                assert!(accel >= least - 1e-6 && accel <= greatest + 1e-6, "{what}");
            }
        }
    }
    let (first, end) = (timing[0][0].speed_m_s, last.map_or(0.0, |(speed, _)| speed));
    assert!((first - ends.0).abs() < 1e-12 && (end - ends.1).abs() < 1e-12);
    (jerk, step)
}

#[test]
fn lines_have_the_trapezoids_of_the_textbook() {
    // Trapezoid D 10, v 1, a 0.5: T 12 s; D 1: triangular, peak 0.707107, T 2.828427 s (computed with SciPy 1.17).
    let machine = unicycle(&[]);
    let long = retimed(&[straight(10.0)], &machine, (0.0, 0.0), 1.0).unwrap();
    assert!((duration(&long) - 12.0).abs() < 1e-12, "{long:?}");
    assert_eq!(long[0].len(), 4);
    let short = retimed(&[straight(1.0)], &machine, (0.0, 0.0), 1.0).unwrap();
    assert!((duration(&short) - 8.0_f64.sqrt()).abs() < 1e-12);
    assert!((short[0][1].speed_m_s - 0.5_f64.sqrt()).abs() < 1e-12 && short[0].len() == 3, "{short:?}");
}

#[test]
fn a_line_in_many_pieces_takes_no_longer() {
    let machine = unicycle(&[]);
    let pieces = vec![straight(0.1); 100];
    let timing = retimed(&pieces, &machine, (0.0, 0.0), 1.0).unwrap();
    assert!((duration(&timing) - 12.0).abs() < 1e-9);
    assert_within(&pieces, &machine, (0.0, 0.0), 1.0, &timing);
}

#[test]
fn a_jerk_limited_line_is_the_seven_phase_optimum() {
    // v/a and a/J reached: T = D/v + v/a + a/J (by algebra). 1 % for the grid and the averaging.
    let machine = unicycle(&[("max_jerk_m_s3", 1.0)]);
    let timing = retimed(&[straight(10.0)], &machine, (0.0, 0.0), 1.0).unwrap();
    let optimum = 10.0 + 2.0 + 0.5;
    assert!(
        duration(&timing) >= optimum - 1e-6 && duration(&timing) < 1.01 * optimum,
        "{}",
        duration(&timing)
    );
    let (jerk, step) = assert_within(&[straight(10.0)], &machine, (0.0, 0.0), 1.0, &timing);
    assert!(jerk <= 1.0 + 1e-6 && step < 0.01, "{jerk} {step}");
    // Nothing but the jerk decides on a centimetre: T = (32 D/J)^(1/3).
    let tiny = retimed(&[straight(0.01)], &machine, (0.0, 0.0), 1.0).unwrap();
    let optimum = math::cbrt(0.32);
    assert!(duration(&tiny) > optimum && duration(&tiny) < 1.06 * optimum, "{} {optimum}", duration(&tiny));
}

#[test]
fn it_slows_before_a_bend_not_in_it() {
    let machine = unicycle(&[("max_lateral_accel_m_s2", 0.1)]);
    let pieces = [
        straight(5.0),
        Ramp { from_1_m: 0.0, to_1_m: 1.0, length_m: 0.5 },
        Ramp { from_1_m: 1.0, to_1_m: 1.0, length_m: 2.0 },
    ];
    let timing = retimed(&pieces, &machine, (0.0, 0.0), 1.0).unwrap();
    assert_within(&pieces, &machine, (0.0, 0.0), 1.0, &timing);
    let entry = timing[2][0].speed_m_s;
    assert!(entry <= 0.1_f64.sqrt() && entry > 0.31, "{entry}");
    let line_end = timing[0][timing[0].len() - 1].speed_m_s;
    assert!(line_end < 0.9, "braking begins on the line: {line_end}");
}

#[test]
fn curvature_steps_are_passed_at_their_speed_and_decelerations_may_differ() {
    let machine = car(&[]);
    let pieces = [straight(4.0), Ramp { from_1_m: 0.2, to_1_m: 0.2, length_m: 3.0 }];
    let timing = retimed(&pieces, &machine, (0.0, 0.0), 0.8).unwrap();
    assert_within(&pieces, &machine, (0.0, 0.0), 0.8, &timing);
    assert!((timing[1][0].speed_m_s - 0.1).abs() < 1e-12);
    // From the greatest speed 2 m/s at 1.6 m/s²; reached at 0.96 m/s²: 2·(v² − 0)/(2a) would be longer than the line.
    let peak = timing[0].iter().map(|point| point.speed_m_s).fold(0.0, f64::max);
    let (up, down) = (0.96, 1.6);
    let expected = math::sqrt((2.0 * up * down * 4.0 + up * 0.01) / (up + down));
    assert!((peak - expected.min(2.0)).abs() < 1e-9, "{peak} {expected}");
}

#[test]
fn other_speeds_at_the_ends_are_kept_or_refused_with_the_greatest() {
    for more in [&[][..], &[("max_jerk_m_s3", 2.0)]] {
        let machine = unicycle(more);
        let pieces = [straight(3.0), Ramp { from_1_m: 0.0, to_1_m: 0.4, length_m: 1.0 }];
        let timing = retimed(&pieces, &machine, (0.3, 0.5), 0.9).unwrap();
        assert_within(&pieces, &machine, (0.3, 0.5), 0.9, &timing);
        let Err(Unsolvable::StartSpeed { greatest_m_s }) = retimed(&pieces, &machine, (0.95, 0.0), 0.9)
        else {
            panic!("0.95 m/s is beyond 0.9 m/s")
        };
        assert!((greatest_m_s - 0.9).abs() < 1e-9);
        assert!(matches!(
            retimed(&[straight(0.1)], &machine, (0.0, 0.8), 0.9),
            Err(Unsolvable::EndSpeed { .. })
        ));
        assert!(matches!(
            retimed(&[straight(0.1)], &machine, (0.8, 0.0), 0.9),
            Err(Unsolvable::StartSpeed { .. })
        ));
    }
}

#[test]
fn a_curvature_that_no_steering_reaches_is_named_with_its_place() {
    let pieces = [straight(1.0), Ramp { from_1_m: 0.0, to_1_m: 2.0, length_m: 2.0 }, straight(1.0)];
    let Err(Unsolvable::NoSpeed { piece, at_m, curvature_1_m }) =
        retimed(&pieces, &car(&[]), (0.0, 0.0), 0.8)
    else {
        panic!("a car cannot bend by 2 1/m")
    };
    assert!(piece == 1 && at_m > 0.4 && at_m < 0.6 && curvature_1_m > 0.5, "{at_m} {curvature_1_m}");
}

#[test]
fn an_inner_wheel_that_turns_backwards_keeps_its_limits_too() {
    // 1/κ passes half the track width twice, where the inner wheel's factor is 0.
    let machine = differential(&[]);
    let ramp = |from_1_m, to_1_m, length_m| Ramp { from_1_m, to_1_m, length_m };
    let pieces =
        [straight(0.8), ramp(0.0, 5.5, 0.6), ramp(5.5, -3.0, 0.9), ramp(-3.0, 0.0, 0.5), straight(1.5)];
    let timing = retimed(&pieces, &machine, (0.0, 0.0), 0.8).unwrap();
    assert_within(&pieces, &machine, (0.0, 0.0), 0.8, &timing);
    let points: usize = timing.iter().map(Vec::len).sum();
    assert!(points < 200, "few points: {points}");
}

/// Paths of continuous curvature: the curvatures at their joints, and the lengths between.
fn paths(steepest_1_m: f64) -> impl Strategy<Value = Vec<Ramp>> {
    let joint = prop_oneof![Just(None), (-steepest_1_m..steepest_1_m).prop_map(Some)];
    prop::collection::vec((joint, 0.05..4.0_f64), 1..6).prop_map(|joints| {
        let mut from_1_m = 0.0;
        joints
            .into_iter()
            .map(|(to, length_m)| {
                let to_1_m = to.unwrap_or(from_1_m);
                let ramp = Ramp { from_1_m, to_1_m, length_m };
                from_1_m = to_1_m;
                ramp
            })
            .collect()
    })
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(60))]

    #[test]
    fn no_limit_is_ever_exceeded(path in paths(3.0), lateral in 0.05..2.0_f64, share in 0.2..1.0_f64) {
        for machine in [differential(&[("max_lateral_accel_m_s2", lateral)]), unicycle(&[])] {
            let timing = retimed(&path, &machine, (0.0, 0.0), share).map_err(|why| TestCaseError::fail(alloc::format!("{why}")))?;
            assert_within(&path, &machine, (0.0, 0.0), share, &timing);
        }
    }

    #[test]
    fn nor_on_a_car(path in paths(0.5), share in 0.2..1.0_f64) {
        let machine = car(&[("max_lateral_accel_m_s2", 0.8)]);
        let timing = retimed(&path, &machine, (0.0, 0.0), share).map_err(|why| TestCaseError::fail(alloc::format!("{why}")))?;
        assert_within(&path, &machine, (0.0, 0.0), share, &timing);
    }
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(8))]

    #[test]
    fn nor_the_jerk(path in paths(2.0), jerk in 0.3..8.0_f64) {
        let machine = differential(&[("max_jerk_m_s3", jerk), ("max_lateral_accel_m_s2", 0.5)]);
        let timing = retimed(&path, &machine, (0.0, 0.0), 0.8).map_err(|why| TestCaseError::fail(alloc::format!("{why}")))?;
        let (found, step) = assert_within(&path, &machine, (0.0, 0.0), 0.8, &timing);
        prop_assert!(found <= jerk * (1.0 + 1e-6) && step < 0.01 * jerk, "{} {}", found, step);
    }
}

#[test]
fn a_long_run_is_solved_in_blocks_that_join_at_speed() {
    // 160 m, 12 bends: more than two blocks of 45 s.
    let (rough, smooth) = (
        unicycle(&[("max_lateral_accel_m_s2", 0.2)]),
        unicycle(&[("max_lateral_accel_m_s2", 0.2), ("max_jerk_m_s3", 0.5)]),
    );
    let bend = |sign: f64| {
        [
            straight(11.0),
            Ramp { from_1_m: 0.0, to_1_m: sign, length_m: 1.2 },
            Ramp { from_1_m: sign, to_1_m: 0.0, length_m: 1.2 },
        ]
    };
    let path: Vec<Ramp> = (0..12).flat_map(|index| bend(if index % 2 == 0 { 1.0 } else { -1.0 })).collect();
    let fast = duration(&retimed(&path, &rough, (0.0, 0.0), 0.8).unwrap());
    let timing = retimed(&path, &smooth, (0.0, 0.0), 0.8).unwrap();
    let (jerk, step) = assert_within(&path, &smooth, (0.0, 0.0), 0.8, &timing);
    assert!(jerk <= 0.5 * (1.0 + 1e-6) && step < 0.005, "{jerk} {step}");
    assert!(fast > 180.0 && duration(&timing) < 1.1 * fast, "{} against {fast}", duration(&timing));
}

#[test]
fn errors_say_what_to_do() {
    let text: String = alloc::format!("{}", Unsolvable::StartSpeed { greatest_m_s: 0.5 });
    assert!(text.contains("0.5000 m/s") && text.contains("lower --start-speed"), "{text}");
}
