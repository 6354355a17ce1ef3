//! The machines, numbers and plans that are searched, chosen so that the search closes: ten ticks a second, and
//! limits with which every pace and speed is one of a few. What a tick does is the node's own business all the same.

use crate::moves::PlanKind;
use crate::table::ModeTable;
use std::sync::Arc;
use trackhold_core::digest;
use trackhold_core::keys::Values;
use trackhold_core::plan::check::{Terms, admit};
use trackhold_core::plan::{Plan, compile};
use trackhold_core::settings::{LawSettings, Settings, VehicleSettings};
use trackhold_core::time::SpanNs;
use trackhold_proto::blob::Digest;

/// The ticks' period.
pub(crate) const PERIOD: SpanNs = SpanNs(100_000_000);
/// Of a pose one tick old and one two ticks old only the first is fresh.
pub(crate) const POSE_TIMEOUT: SpanNs = SpanNs(150_000_000);
/// As long as the machine may settle after a plan's end.
pub(crate) const SETTLE_TIME: SpanNs = SpanNs(200_000_000);
/// A jump beyond this stops the machine, m.
pub(crate) const JUMP_STOP_M: f64 = 1.0;
/// A heading's jump beyond this stops a machine that turns on the spot, rad.
pub(crate) const JUMP_STOP_RAD: f64 = 0.8;

/// The greatest value of a command's number, and its greatest change in a second.
#[derive(Clone, Copy, Debug)]
pub(crate) struct Bounds {
    /// In the number's own unit, m/s, rad/s or rad.
    pub(crate) greatest: f64,
    /// That unit in a second.
    pub(crate) change_1_s: f64,
}

/// What is searched.
#[derive(Clone, Debug)]
pub(crate) struct Setup {
    /// Its name, for people.
    pub(crate) name: &'static str,
    /// The node's settings.
    pub(crate) settings: Settings,
    /// The bounds of the command's two numbers.
    pub(crate) bounds: [Bounds; 2],
    /// True if the second of them is a steering angle.
    pub(crate) steers: bool,
    /// How long a protective stop ramps.
    pub(crate) ramp: SpanNs,
    /// The mode table, as it is documented.
    pub(crate) table: Arc<ModeTable>,
    /// The plans that are always the same, with their digests.
    plans: Arc<[Fixed]>,
}

const NODE: &[(&str, f64)] = &[
    ("rate_hz", 10.0),
    ("pose_timeout_s", 0.15),
    ("pose_lease_s", 0.2),
    // Whoever sent the first plan stays the planner.
    ("planner_lease_s", 600.0),
    ("clock_window_s", 3600.0),
    // The pace falls by a half in a tick: 0.5 · 10 m/s² / 1 m/s · 0.1 s.
    ("controlled_stop_share", 0.5),
    ("settle_time_s", 0.2),
    ("blend_s", 0.0),
    // A pose anywhere on these plans is no jump from one anywhere else on them.
    ("jump_distance_m", 0.5),
    ("jump_stop_distance_m", JUMP_STOP_M),
    // A jump is slewed in within a tick.
    ("jump_slew_m_s", 40.0),
    ("jump_slew_rad_s", 100.0),
    ("slow_lag_m", 100.0),
    ("slow_lag_rad", 3.0),
];

/// Next to no feedback along the track: the machine has the plan's own speeds, which are few.
const GAINS: &[(&str, f64)] = &[("k_x", 1e-6)];

fn values(pairs: &[(&str, f64)]) -> Values {
    let mut values = Values::default();
    pairs.iter().for_each(|(key, value)| values.set(key, *value));
    values
}

fn settings(kind: &str, vehicle: &[(&str, f64)], node: &[(&str, f64)]) -> Settings {
    Settings {
        vehicle: VehicleSettings { kind: kind.to_string(), values: values(vehicle) },
        law: LawSettings { name: "kanayama".to_string(), gains: values(GAINS) },
        node: values(&[NODE, node].concat()),
        ..Settings::default()
    }
}

impl Setup {
    /// A machine that turns on the spot, and whose protective stop is zero at once.
    pub(crate) fn cart() -> Self {
        let vehicle = [
            ("max_speed_m_s", 1.2),
            ("max_turn_rate_rad_s", 2.0),
            ("max_accel_m_s2", 10.0),
            ("max_turn_accel_rad_s2", 20.0),
        ];
        let settings = settings("unicycle", &vehicle, &[("jump_stop_heading_rad", JUMP_STOP_RAD)]);
        Self {
            name: "cart",
            bounds: [Bounds { greatest: 1.2, change_1_s: 10.0 }, Bounds { greatest: 2.0, change_1_s: 20.0 }],
            steers: false,
            ramp: SpanNs(0),
            table: Arc::new(ModeTable::read()),
            plans: plans(&settings),
            settings,
        }
    }

    /// A machine that steers: its protective stop ramps, and no jump of the heading stops it, so that the law's domain does.
    pub(crate) fn car() -> Self {
        let vehicle = [
            ("wheelbase_m", 1.0),
            ("max_speed_m_s", 1.2),
            ("max_accel_m_s2", 10.0),
            ("max_steer_rad", 0.5),
            ("max_steer_rate_rad_s", 5.0),
        ];
        let node = [("jump_stop_heading_rad", std::f64::consts::PI), ("protective_ramp_s", 0.2)];
        let settings = settings("car", &vehicle, &node);
        Self {
            name: "car with a ramp",
            bounds: [Bounds { greatest: 1.2, change_1_s: 10.0 }, Bounds { greatest: 0.5, change_1_s: 5.0 }],
            steers: true,
            ramp: SpanNs(200_000_000),
            table: Arc::new(ModeTable::read()),
            plans: plans(&settings),
            settings,
        }
    }
}

/// A plan that is always the same.
#[derive(Debug)]
struct Fixed {
    kind: PlanKind,
    raw: Vec<u8>,
    digest: Digest,
    /// What makes it unfit.
    findings: Option<Vec<String>>,
}

/// All plans lie on the x axis and lead forward.
fn plans(settings: &Settings) -> Arc<[Fixed]> {
    let terms = settings.checked().expect("the search's own settings hold").terms();
    let line = |length_m: f64, speed_m_s: f64| {
        format!(r#"{{"kind":"line","length_m":{length_m},"speed_m_s":{speed_m_s}}}"#)
    };
    let dwell = r#"{"kind":"dwell","duration_s":0.1}"#;
    let plans = [
        (PlanKind::Closed, false, line(0.25, 1.0)),
        (PlanKind::Resting, false, format!("{dwell},{}", line(0.15, 1.0))),
        (PlanKind::Open, true, line(0.2, 1.0)),
        (PlanKind::Unfit, false, line(0.25, 9.0)),
    ];
    let fixed = |(kind, open, segments): (PlanKind, bool, String)| {
        let raw = text(1, open, "", 0.0, &segments);
        let findings = admit(&raw, &terms).err();
        assert_eq!(findings.is_some(), kind == PlanKind::Unfit, "{kind:?}: {findings:?}");
        Fixed { kind, digest: digest::of_bytes(&raw), raw, findings }
    };
    plans.into_iter().map(fixed).collect()
}

impl Setup {
    /// A plan's bytes and their digest; none for one that is made where it is sent.
    pub(crate) fn plan(&self, kind: PlanKind) -> Option<(&[u8], Digest)> {
        let kind = if kind == PlanKind::OtherPlanner { PlanKind::Resting } else { kind };
        self.plans.iter().find(|plan| plan.kind == kind).map(|plan| (plan.raw.as_slice(), plan.digest))
    }

    /// What the shell makes of a plan's bytes. Those that are known to be fit are compiled without being checked again.
    pub(crate) fn compile(&self, raw: &[u8], digest: Digest, terms: &Terms) -> Result<Plan, Vec<String>> {
        match self.plans.iter().find(|plan| plan.digest == digest) {
            Some(Fixed { findings: Some(findings), .. }) => Err(findings.clone()),
            Some(_) => compile(raw, &*terms.vehicle),
            None => admit(raw, terms),
        }
    }

    /// Which of the plans a digest is; one that is none of them continued another.
    pub(crate) fn kind_of(&self, digest: Digest) -> PlanKind {
        let found = self.plans.iter().find(|plan| plan.digest == digest);
        found.map_or(PlanKind::Continuing, |plan| plan.kind)
    }
}

/// A plan that goes on at a plan time, at a place.
pub(crate) fn continuing(revision: u32, at_s: f64, x_m: f64) -> Vec<u8> {
    let continues = format!(r#""continues":{{"at_s":{at_s}}},"#);
    text(revision, false, &continues, x_m, r#"{"kind":"line","length_m":0.25,"speed_m_s":1}"#)
}

fn text(revision: u32, open: bool, continues: &str, x_m: f64, segments: &str) -> Vec<u8> {
    let start = format!(r#"{{"x_m":{x_m},"y_m":0,"heading_rad":0}}"#);
    format!(
        r#"{{"format":"trackhold-plan/1","id":"search","revision":{revision},"open":{open},{continues}"start":{start},"segments":[{segments}]}}"#
    )
    .into_bytes()
}
