//! An eight at 1 m/s: true cross-track errors under 50 ms of dead time, 10 mm and 0.5° of noise.

use fieldbook::sim::{self, Observer, Options, Row};
use fieldbook::stats::Spread;
use simrobot::RobotSpec;
use std::f64::consts::TAU;
use trackhold_core::geometry::Pose;
use trackhold_core::keys::Values;
use trackhold_core::settings::{LawSettings, Settings, VehicleSettings};
use trackhold_proto::journal::flag;
use trackhold_proto::words::{Cause, Mode};

/// Control points a lap.
const POINTS: usize = 32;
const LAPS: usize = 2;
/// Half the length and half the width of the polygon of control points, m: bends of down to about 1.1 m.
const HALF_M: (f64, f64) = (3.0, 1.0);
/// From here on the errors count: the machine set out from rest, s.
const CONVERGED_S: f64 = 4.0;

/// A cubic B-spline along x = a sin θ, y = b sin 2θ: its curvature is continuous. It sets out from rest and ends at rest.
fn plan() -> Vec<u8> {
    let count = POINTS * LAPS + 1;
    let at = |index: usize| {
        let theta = TAU * index as f64 / POINTS as f64;
        (HALF_M.0 * theta.sin(), HALF_M.1 * (2.0 * theta).sin())
    };
    let points: Vec<String> =
        (0..count).map(at).map(|(x_m, y_m)| format!(r#"{{"x_m":{x_m},"y_m":{y_m}}}"#)).collect();
    let spans = count - 3;
    let knot = |index: usize| (index.saturating_sub(3).min(spans) as f64 / spans as f64).to_string();
    let knots: Vec<String> = (0..count + 4).map(knot).collect();
    let (x_m, y_m) = at(1);
    format!(
        r#"{{"format":"trackhold-plan/1","id":"eight","revision":1,
        "start":{{"x_m":0,"y_m":0,"heading_rad":{}}},
        "segments":[{{"kind":"nurbs","degree":3,"knots":[{}],"points":[{}],
        "profile":"trapezoid","speed_m_s":1.0,"accel_m_s2":0.5}}]}}"#,
        y_m.atan2(x_m),
        knots.join(","),
        points.join(",")
    )
    .into_bytes()
}

fn values(pairs: &[(&str, f64)]) -> Values {
    let mut values = Values::default();
    pairs.iter().for_each(|(key, value)| values.set(key, *value));
    values
}

fn settings(law: &str, gains: &[(&str, f64)], node: &[(&str, f64)]) -> Settings {
    let mut numbers = vec![("rate_hz", 100.0)];
    numbers.extend_from_slice(node);
    let machine = [
        ("wheel_radius_m", 0.1),
        ("track_width_m", 0.5),
        ("max_wheel_speed_rad_s", 20.0),
        ("max_wheel_accel_rad_s2", 30.0),
    ];
    Settings {
        vehicle: VehicleSettings { kind: "differential".to_owned(), values: values(&machine) },
        law: LawSettings { name: law.to_owned(), gains: values(gains) },
        node: values(&numbers),
        pose: Values::default(),
        check: Values::default(),
    }
}

/// True cross-track errors of a run, once converged and up to the plan's end.
#[derive(Default)]
struct Cross(Spread);

impl Observer for Cross {
    fn row(&mut self, row: &Row<'_>) {
        let under_way = row.t.seconds() >= CONVERGED_S && !row.record.has(flag::SETTLING);
        if let Some(error) = row.error.filter(|_| under_way) {
            self.0.add(error.cross_m);
        }
    }
}

/// Laws with gains whose bandwidth at 1 m/s times 55 ms of delay is at most the 0.2 of the common working rule.
const LAWS: [(&str, &[(&str, f64)]); 4] = [
    ("kanayama", &[("k_x", 2.0), ("k_y", 9.0), ("k_heading", 6.0)]),
    ("linear", &[("b", 9.0), ("zeta", 0.9)]),
    ("lqr", &[]),
    ("predictive", &[]),
];

/// Rms and greatest true cross-track error, m.
fn drive(settings: &Settings, robot: Option<&RobotSpec>, start: Option<Pose>) -> (f64, f64) {
    let (plan, options, mut cross) = (plan(), Options { start, seconds: None }, Cross::default());
    let outcome = match robot {
        Some(robot) => sim::robot::simulate(settings, &plan, &options, robot, &mut cross),
        None => sim::simulate(settings, &plan, &options, &mut cross),
    };
    let outcome = outcome.unwrap_or_else(|error| panic!("{}: {error}", settings.law.name));
    assert_eq!((outcome.mode, outcome.cause), (Mode::Standby, Cause::PlanEnded), "{}", settings.law.name);
    assert!(cross.0.count() > 1000);
    (cross.0.rms(), cross.0.greatest())
}

#[test]
fn dead_time_and_noise_cost_millimetres_where_poses_are_carried_forward_and_more_where_not() {
    let robot = |seed: u64, rate_hz: u32| {
        let text = format!(
            "seed = {seed}\n[drive]\ndead_time_s = 0.05\n\
             [sensor]\nrate_hz = {rate_hz}\nposition_sd_m = 0.01\nheading_sd_rad = 0.0087266"
        );
        RobotSpec::parse(&text, "robot.toml").unwrap_or_else(|error| panic!("{error}"))
    };
    for (law, gains) in LAWS {
        for (seed, rate_hz) in [(1, 100), (2, 100), (3, 50)] {
            let robot = robot(seed, rate_hz);
            let with = drive(&settings(law, gains, &[("dead_time_s", 0.05)]), Some(&robot), None);
            let taken_as_they_are = [("dead_time_s", 0.05), ("carry_forward", 0.0)];
            let without = drive(&settings(law, gains, &taken_as_they_are), Some(&robot), None);
            println!(
                "{law:<11} seed {seed}, poses at {rate_hz} Hz: rms {:.1} mm, greatest {:.1} mm; \
                 as they are: rms {:.1} mm, greatest {:.1} mm",
                1e3 * with.0,
                1e3 * with.1,
                1e3 * without.0,
                1e3 * without.1
            );
            assert!(with.0 < 0.015, "{law}: {} m", with.0);
            assert!(without.0 > 1.5 * with.0, "{law}: {} m against {} m", without.0, with.0);
        }
    }
}

#[test]
fn an_ideal_robot_stays_within_a_millimetre_once_converged() {
    for (law, gains) in LAWS {
        let (rms_m, greatest_m) = drive(&settings(law, gains, &[]), None, Some(Pose::new(0.02, -0.05, 0.7)));
        println!("{law:<11} rms {:.3} mm, greatest {:.3} mm", 1e3 * rms_m, 1e3 * greatest_m);
        assert!(rms_m < 0.001, "{law}: {rms_m} m");
    }
}
