//! The demo's scenario: an invented site, its machine, the machine's faults, and the plan.

use anyhow::{Context, Result};
use serde_json::Value;
use simrobot::{LinkSpec, RobotSpec};
use std::path::Path;
use std::sync::Arc;
use trackhold::site::Site;
use trackhold_core::geometry::{Mount, Pose};
use trackhold_core::plan::{self, Plan};
use trackhold_core::vehicle::Vehicle;

const SITE: &str = include_str!("site.toml");
const ROBOT: &str = include_str!("robot.toml");
const PLAN: &str = include_str!("plan.json");
const SHORT_PLAN: &str = include_str!("plan-short.json");

/// Where the machine really stands at the beginning: some decimetres off the plan's start, as a driver leaves it.
const START: Pose = Pose::new(1.9, 1.62, 0.06);

/// The link between the robot's computers.
const ON_BOARD: LinkSpec = LinkSpec {
    loss: 0.01,
    delay_s: 0.001,
    jitter_s: 0.002,
    duplicate: 0.005,
    reorder: 0.005,
    reorder_delay_s: 0.008,
    corrupt: 0.0,
};

/// The link to the recorder on the laptop.
const RADIO: LinkSpec = LinkSpec {
    loss: 0.05,
    delay_s: 0.004,
    jitter_s: 0.01,
    duplicate: 0.01,
    reorder: 0.02,
    reorder_delay_s: 0.02,
    corrupt: 0.0,
};

/// The kinds of stretches that the story tells apart.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub(super) enum Stretch {
    /// Straight ahead.
    Straight,
    /// A bend, forward.
    Bend,
    /// Anything in reverse.
    Reverse,
    /// Turning on the spot.
    Pivot,
    /// The reference stands.
    Standing,
}

impl Stretch {
    /// All kinds, in the order in which they are told.
    pub(super) const ALL: [Self; 5] =
        [Self::Straight, Self::Bend, Self::Reverse, Self::Pivot, Self::Standing];

    /// The kind's name.
    pub(super) const fn name(self) -> &'static str {
        match self {
            Self::Straight => "straight",
            Self::Bend => "bends",
            Self::Reverse => "reverse",
            Self::Pivot => "pivot",
            Self::Standing => "standing",
        }
    }

    fn of(segment: &Value) -> Self {
        match segment["kind"].as_str() {
            Some("pivot") => Self::Pivot,
            Some("dwell") => Self::Standing,
            _ if segment["reverse"] == true => Self::Reverse,
            Some("arc") => Self::Bend,
            _ => Self::Straight,
        }
    }
}

/// The scenario.
#[derive(Debug)]
pub(super) struct Scenario {
    /// The site file, as the daemon gets it.
    pub(super) site: Site,
    /// The machine as the site file has it.
    pub(super) vehicle: Arc<dyn Vehicle>,
    /// Where the estimator sits.
    pub(super) mount: Mount,
    /// What is wrong with the machine.
    pub(super) robot: RobotSpec,
    /// The plan's bytes.
    pub(super) raw_plan: &'static [u8],
    /// The plan, compiled.
    pub(super) plan: Plan,
    stretches: Vec<(f64, Stretch)>,
}

impl Scenario {
    /// Reads the files that are built in.
    ///
    /// # Errors
    /// If they do not hold, which a test rules out.
    pub(super) fn new(short: bool) -> Result<Self> {
        let site = Site::parse(SITE, "demo/site.toml")?;
        let checked = site.checked()?;
        let robot = RobotSpec::parse(ROBOT, "demo/robot.toml")?;
        let raw = if short { SHORT_PLAN } else { PLAN };
        let plan = plan::check::admit(raw.as_bytes(), &checked.terms())
            .map_err(|findings| anyhow::anyhow!("the demo's plan: {}", findings.join("; ")))?;
        let file: Value = serde_json::from_str(raw)?;
        let kinds = file["segments"].as_array().into_iter().flatten().map(Stretch::of);
        let stretches = plan.segment_begins().zip(kinds).collect();
        let (vehicle, mount, raw_plan) = (checked.vehicle, checked.mount, raw.as_bytes());
        Ok(Self { site, vehicle, mount, robot, raw_plan, plan, stretches })
    }

    /// The true pose at the beginning.
    pub(super) fn start(&self) -> Pose {
        START
    }

    /// The link between the robot's computers.
    pub(super) fn on_board_link(&self) -> LinkSpec {
        ON_BOARD
    }

    /// The link to the recorder.
    pub(super) fn radio_link(&self) -> LinkSpec {
        RADIO
    }

    /// The kind of stretch at a plan time.
    pub(super) fn stretch_at(&self, plan_time_s: f64) -> Stretch {
        let after = self.stretches.partition_point(|(begin_s, _)| *begin_s <= plan_time_s);
        match after.checked_sub(1).and_then(|index| self.stretches.get(index)) {
            Some((_, stretch)) if plan_time_s < self.plan.duration_s() => *stretch,
            _ => Stretch::Standing,
        }
    }

    /// Puts the files beside the log, to be tried with `simulate`.
    ///
    /// # Errors
    /// If they cannot be written.
    pub(super) fn write_files(&self, directory: &Path) -> Result<()> {
        for (name, bytes) in
            [("site.toml", SITE.as_bytes()), ("robot.toml", ROBOT.as_bytes()), ("plan.json", self.raw_plan)]
        {
            let path = directory.join(name);
            std::fs::write(&path, bytes).with_context(|| format!("cannot write {}", path.display()))?;
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn both_plans_hold_for_the_machine_and_have_every_kind_of_stretch() {
        for short in [false, true] {
            let scenario = Scenario::new(short).unwrap();
            scenario.robot.check_for(&*scenario.vehicle).unwrap();
            for stretch in [Stretch::Bend, Stretch::Reverse, Stretch::Pivot] {
                assert!(scenario.stretches.iter().any(|(_, kind)| *kind == stretch), "{}", stretch.name());
            }
            assert!(scenario.plan.duration_s() < if short { 8.0 } else { 42.0 });
            assert_eq!(scenario.stretch_at(0.0), Stretch::Straight);
            assert_eq!(scenario.stretch_at(1e3), Stretch::Standing);
        }
    }
}
