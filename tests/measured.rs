//! A measured run: 4,091 poses of a mower, 10 Hz, up to 4.8 m/s, fetched by `tools/measured-log/fetch_plaza2.py` from the
//! general factor-graph package `gtsam` 4.3.0 (`Data/Plaza2_.mat`) and never committed.

use crate::smoothing::Spline;
use std::fmt::Write;
use std::path::PathBuf;
use trackhold_core::keys::Values;
use trackhold_core::math;
use trackhold_core::settings::{LawSettings, Settings, VehicleSettings};

/// Where the data are, if they were fetched.
pub const DATA_VARIABLE: &str = "TRACKHOLD_MEASURED_LOG";

/// First row of the stretch that is driven: before it the machine stands.
pub const FIRST_ROW: usize = 228;
/// Row after its last: behind it the machine stands and the positioning's corrections wander.
pub const END_ROW: usize = 4000;

/// A measured pose of the estimator's point.
#[derive(Clone, Copy, Debug)]
pub struct Row {
    /// Its own stamp, s.
    pub t_s: f64,
    /// Position, m.
    pub x_m: f64,
    /// Position, m.
    pub y_m: f64,
    /// The sensor's heading, which looks against the course, rad.
    pub heading_rad: f64,
}

impl Row {
    /// The stamp in ns, not 0.
    pub fn stamp_ns(&self) -> u64 {
        1 + (self.t_s * 1e9).round() as u64
    }
}

/// The rows, or `None` with a line on stderr that says that the test was not run.
pub fn rows() -> Option<Vec<Row>> {
    let Some(path) = std::env::var_os(DATA_VARIABLE).map(PathBuf::from) else {
        eprintln!("NOT RUN: {DATA_VARIABLE} is not set; tools/measured-log/fetch_plaza2.py fetches the data");
        return None;
    };
    let text = std::fs::read_to_string(&path).unwrap_or_else(|error| panic!("{}: {error}", path.display()));
    let rows: Vec<Row> = text
        .lines()
        .skip(1)
        .map(|line| {
            let cells: Vec<f64> = line.split(',').map(|cell| cell.parse().unwrap()).collect();
            Row { t_s: cells[0], x_m: cells[1], y_m: cells[2], heading_rad: cells[3] }
        })
        .collect();
    assert_eq!(rows.len(), 4091);
    Some(rows)
}

/// The smoothed track of the driven stretch.
#[derive(Debug)]
pub struct Track {
    /// x over time, m.
    pub x: Spline,
    /// y over time, m.
    pub y: Spline,
    begin_s: f64,
    end_s: f64,
}

impl Track {
    /// Smooths rows [`FIRST_ROW`] to [`END_ROW`].
    pub fn through(rows: &[Row]) -> Self {
        let driven = &rows[FIRST_ROW..END_ROW];
        let times: Vec<f64> = driven.iter().map(|row| row.t_s).collect();
        let of = |value: fn(&Row) -> f64| Spline::fit(&times, &driven.iter().map(value).collect::<Vec<_>>());
        let (begin_s, end_s) = (times[0], times[times.len() - 1]);
        Self { x: of(|row| row.x_m), y: of(|row| row.y_m), begin_s, end_s }
    }

    /// A plan along the track at the machine's own times: samples every 0.1 s with heading and speed.
    pub fn plan(&self) -> String {
        let count = ((self.end_s - self.begin_s) / 0.1).floor() as usize;
        let mut points = String::new();
        let mut start = String::new();
        for index in 0..=count {
            let t = 0.1 * index as f64;
            let ([x, vx, _], [y, vy, _]) = (self.x.at(self.begin_s + t), self.y.at(self.begin_s + t));
            let heading = math::atan2(vy, vx);
            if index == 0 {
                start = format!(r#"{{"x_m":{x},"y_m":{y},"heading_rad":{heading}}}"#);
            }
            let comma = if index == 0 { "" } else { "," };
            let speed = math::length(vx, vy);
            write!(
                points,
                r#"{comma}{{"t_s":{t},"x_m":{x},"y_m":{y},"heading_rad":{heading},"speed_m_s":{speed}}}"#
            )
            .expect("a string takes everything");
        }
        format!(
            r#"{{"format":"trackhold-plan/1","id":"measured","revision":1,"open":false,"start":{start},"segments":[{{"kind":"samples","points":[{points}]}}]}}"#
        )
    }
}

/// A machine that could have driven this, with the sensor's heading turned by half a turn.
pub fn settings(pose_timeout_s: f64) -> Settings {
    let values = |pairs: &[(&str, f64)]| {
        let mut values = Values::default();
        for (key, value) in pairs {
            values.set(key, *value);
        }
        values
    };
    Settings {
        vehicle: VehicleSettings {
            kind: "differential".into(),
            values: values(&[
                ("wheel_radius_m", 0.25),
                ("track_width_m", 1.0),
                ("max_wheel_speed_rad_s", 24.0),
                ("max_wheel_accel_rad_s2", 20.0),
            ]),
        },
        law: LawSettings { name: "kanayama".into(), gains: Values::default() },
        // The machine on record does not answer to these commands. So its poses are not carried forward along them, none
        // is taken for a jump because it is not where they would have brought it, and it is not asked to settle.
        node: values(&[
            ("rate_hz", 50.0),
            ("pose_timeout_s", pose_timeout_s),
            ("carry_forward", 0.0),
            ("jump_distance_m", 100.0),
            ("jump_heading_rad", 3.1),
            ("settle_time_s", 0.0),
        ]),
        pose: values(&[("heading_offset_rad", math::PI)]),
        check: Values::default(),
    }
}
