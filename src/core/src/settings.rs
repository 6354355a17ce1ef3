//! Everything that changes the node's behaviour, as named numbers: what a site file says of vehicle, law, node and pose,
//! and what a journal's first entry carries, so that a recording replays without the site file.

use crate::geometry::Mount;
use crate::keys::{Bound, Key, Problem, Values};
use crate::law::{self, Law};
use crate::math::PI;
use crate::node::margin::Margin;
use crate::node::params::{self, Params};
use crate::plan::check::{self, Terms, Thresholds};
use crate::vehicle::{self, Vehicle};
use alloc::boxed::Box;
use alloc::string::{String, ToString};
use alloc::sync::Arc;
use alloc::vec::Vec;
use serde::{Deserialize, Serialize};

/// Keys of the section `pose`.
pub const POSE_KEYS: &[Key] = &[
    Key::with_default(
        "offset_x_m",
        "m",
        0.0,
        Bound::within(-20.0, 20.0),
        "the estimator's point ahead of the chassis point; a wrong one shows as a cross-track error in bends",
    ),
    Key::with_default(
        "offset_y_m",
        "m",
        0.0,
        Bound::within(-20.0, 20.0),
        "the estimator's point to the left of the chassis point",
    ),
    Key::with_default(
        "heading_offset_rad",
        "rad",
        0.0,
        Bound::within(-PI, PI),
        "the estimator's heading minus the chassis' heading; π for a sensor that looks backwards",
    ),
];

/// Which vehicle, with its numbers.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct VehicleSettings {
    /// Name of the kind.
    pub kind: String,
    /// Its keys.
    pub values: Values,
}

/// Which law, with its gains.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct LawSettings {
    /// Name of the law.
    pub name: String,
    /// Its gains.
    pub gains: Values,
}

/// Everything that changes the node's behaviour.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Settings {
    /// The machine.
    pub vehicle: VehicleSettings,
    /// The law.
    pub law: LawSettings,
    /// Keys of the section `node`.
    pub node: Values,
    /// Keys of the section `pose`.
    pub pose: Values,
    /// Keys of the section `check`: they decide which plans are taken. Empty in recordings that are older than it.
    #[serde(default)]
    pub check: Values,
}

/// Settings that hold, and what they build.
#[derive(Debug)]
pub struct Checked {
    /// The settings with every default filled in.
    pub settings: Settings,
    /// The machine.
    pub vehicle: Arc<dyn Vehicle>,
    /// The law.
    pub law: Box<dyn Law>,
    /// The node's numbers.
    pub params: Params,
    /// Where the estimator sits.
    pub mount: Mount,
    /// From where on the check of a plan finds something.
    pub thresholds: Thresholds,
}

/// What laws are built for.
fn law_context(vehicle: &Arc<dyn Vehicle>, params: &Params) -> law::Context {
    law::Context {
        vehicle: Arc::clone(vehicle),
        period_s: params.period_s(),
        dead_time_s: params.dead_time.seconds(),
    }
}

impl Checked {
    /// What a law is built for.
    pub fn context(&self) -> law::Context {
        law_context(&self.vehicle, &self.params)
    }

    /// How near the law comes to what the dead time allows, at top speed.
    pub fn margin(&self) -> Margin {
        Margin::new(&*self.law, self.vehicle.top_speed_m_s(), &self.params)
    }

    /// What a plan has to fit.
    pub fn terms(&self) -> Terms {
        Terms {
            vehicle: Arc::clone(&self.vehicle),
            following: self.law.domain().following(),
            thresholds: self.thresholds,
        }
    }
}

impl Settings {
    /// Checks every value and fills in the defaults.
    ///
    /// # Errors
    /// Every problem found, each with its section and key.
    pub fn checked(&self) -> Result<Checked, Vec<Problem>> {
        let mut problems = Vec::new();
        let mut within = |section: &str, more: Vec<Problem>| {
            problems.extend(more.into_iter().map(|problem| problem.within(section)));
        };
        let vehicle = vehicle::build(&self.vehicle.kind, &self.vehicle.values)
            .map_err(|more| within("vehicle", more))
            .ok();
        let node = self.node.checked(params::KEYS).map_err(|more| within("node", more)).ok();
        let params =
            node.as_ref().and_then(|node| Params::new(node).map_err(|more| within("node", more)).ok());
        let law = match (&vehicle, &params) {
            (Some((vehicle, _)), Some(params)) => {
                let context = law_context(vehicle, params);
                law::build(&self.law.name, &self.law.gains, &context).map_err(|more| within("law", more)).ok()
            }
            // Without a machine none can be built, but what is wrong with its gains can be told already.
            _ => law::check(&self.law.name, &self.law.gains)
                .map_err(|more| within("law", more))
                .err()
                .and(None),
        };
        let pose = self.pose.checked(POSE_KEYS).map_err(|more| within("pose", more)).ok();
        let check = self.check.checked(check::KEYS).map_err(|more| within("check", more)).ok();
        let thresholds = check
            .as_ref()
            .and_then(|check| Thresholds::new(check).map_err(|more| within("check", more)).ok());
        let (
            Some((vehicle, vehicle_values)),
            Some((law, gains)),
            Some(node),
            Some(params),
            Some(pose),
            Some(check),
            Some(thresholds),
        ) = (vehicle, law, node, params, pose, check, thresholds)
        else {
            return Err(problems);
        };
        Ok(Checked {
            mount: Mount {
                offset_x_m: pose.get("offset_x_m"),
                offset_y_m: pose.get("offset_y_m"),
                heading_offset_rad: pose.get("heading_offset_rad"),
            },
            settings: Self {
                vehicle: VehicleSettings { kind: self.vehicle.kind.clone(), values: vehicle_values },
                law: LawSettings { name: self.law.name.clone(), gains },
                node,
                pose,
                check,
            },
            vehicle,
            law,
            params,
            thresholds,
        })
    }

    /// The settings as JSON, for a journal's first entry. Numbers print so that they read back to the same bits.
    pub fn to_json(&self) -> String {
        match serde_json::to_string(self) {
            Ok(json) => json,
            Err(error) => unreachable!("names and finite numbers always print: {error}"),
        }
    }

    /// Reads what [`Settings::to_json`] printed.
    ///
    /// # Errors
    /// What is wrong with it.
    pub fn from_json(json: &str) -> Result<Self, String> {
        serde_json::from_str(json).map_err(|error| error.to_string())
    }
}
