//! The plan and the machines of the sweep.

use trackhold_core::keys::Values;
use trackhold_core::settings::{LawSettings, Settings, VehicleSettings};

/// What the plan speeds up and brakes with, m/s².
const ACCEL_M_S2: f64 = 0.8;
/// Ticks a second.
pub(crate) const RATE_HZ: f64 = 50.0;

/// A machine of the sweep.
#[derive(Clone, Copy, Debug)]
pub(crate) struct Machine {
    /// Its kind.
    pub(crate) kind: &'static str,
    numbers: &'static [(&'static str, f64)],
}

/// One that turns on the spot, one that steers.
pub(crate) const MACHINES: [Machine; 2] = [
    Machine {
        kind: "differential",
        numbers: &[
            ("wheel_radius_m", 0.1),
            ("track_width_m", 0.5),
            ("max_wheel_speed_rad_s", 20.0),
            ("max_wheel_accel_rad_s2", 20.0),
        ],
    },
    Machine {
        kind: "car",
        numbers: &[
            ("wheelbase_m", 1.2),
            ("max_steer_rad", 0.6),
            ("max_steer_rate_rad_s", 1.2),
            ("max_speed_m_s", 2.0),
            ("max_accel_m_s2", 1.5),
        ],
    },
];

/// An S-bend of clothoids at one speed, from rest to rest.
pub(crate) fn plan(speed_m_s: f64) -> Vec<u8> {
    let end_m = 0.5 * speed_m_s * speed_m_s / ACCEL_M_S2 + 0.3;
    let end = |speed: &str| {
        format!(
            r#"{{"kind":"line","length_m":{end_m},"profile":"trapezoid","speed_m_s":{speed_m_s},"accel_m_s2":{ACCEL_M_S2},"{speed}":{speed_m_s}}}"#
        )
    };
    let bend = |from: f64, to: f64, length_m: f64| {
        format!(
            r#"{{"kind":"clothoid","curvature_start_1_m":{from},"curvature_end_1_m":{to},"length_m":{length_m},"speed_m_s":{speed_m_s}}}"#
        )
    };
    let segments = [
        end("end_speed_m_s"),
        bend(0.0, 0.5, 1.2),
        bend(0.5, -0.5, 2.4),
        bend(-0.5, 0.0, 1.2),
        end("start_speed_m_s"),
    ];
    format!(
        r#"{{"format":"trackhold-plan/1","id":"bend","revision":1,"start":{{"x_m":0,"y_m":0,"heading_rad":0}},"segments":[{}]}}"#,
        segments.join(",")
    )
    .into_bytes()
}

fn values(pairs: &[(&str, f64)]) -> Values {
    let mut values = Values::default();
    pairs.iter().for_each(|(key, value)| values.set(key, *value));
    values
}

impl Machine {
    /// A site with a law, its gains by default, that knows its dead time.
    pub(crate) fn settings(&self, law: &str, dead_time_s: f64) -> Settings {
        Settings {
            vehicle: VehicleSettings { kind: self.kind.to_owned(), values: values(self.numbers) },
            law: LawSettings { name: law.to_owned(), gains: Values::default() },
            node: values(&[("rate_hz", RATE_HZ), ("dead_time_s", dead_time_s), ("pose_timeout_s", 0.4)]),
            pose: Values::default(),
            check: Values::default(),
        }
    }
}
