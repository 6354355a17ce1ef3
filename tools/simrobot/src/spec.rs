//! What is wrong with a robot: everything in which it differs from an ideal one, as named numbers, and its file.
//!
//! ```toml
//! seed = 7
//!
//! [drive]
//! wheel_lag_s = 0.08
//!
//! [chassis]
//! left_radius_error = -0.02
//!
//! [sensor]
//! rate_hz = 20
//! position_sd_m = 0.01
//! ```
//!
//! Whatever is left out is ideal. The tables [`DriveSpec::KEYS`], [`ChassisSpec::KEYS`], [`SensorSpec::KEYS`] and
//! [`MOUNT_KEYS`] hold units, bounds and meanings.

use crate::file::{File, FileError, Section, no_words};
use crate::section::section;
use std::path::Path;
use trackhold_core::geometry::Mount;
use trackhold_core::keys::{Absent, Bound, Key, Problem, Values};
use trackhold_core::settings::POSE_KEYS;
use trackhold_core::vehicle::Vehicle;
use trackhold_proto::message::WheelLayout;

/// A lag shorter than this would need shorter substeps than the plant makes, s.
pub const LEAST_LAG_S: f64 = 0.001;

section! {
    /// Between a command and the wheels.
    pub struct DriveSpec {
        wheel_lag_s: "s", 0.0, Bound::within(0.0, 10.0),
            "time constant of the first-order lag of the wheel speeds; 0 or at least 0.001 s";
        steer_lag_s: "s", 0.0, Bound::within(0.0, 10.0),
            "time constant of the first-order lag of the steering; 0 or at least 0.001 s; steered machines only";
        dead_time_s: "s", 0.0, Bound::within(0.0, 5.0),
            "how long after its arrival a command begins to act";
    }
}

section! {
    /// Between the wheels and the chassis.
    pub struct ChassisSpec {
        left_radius_error: "", 0.0, Bound::within(-0.5, 0.5),
            "the left wheel's true radius over the stated one, minus 1";
        right_radius_error: "", 0.0, Bound::within(-0.5, 0.5),
            "the right wheel's true radius over the stated one, minus 1";
        track_error: "", 0.0, Bound::within(-0.5, 0.5),
            "the true effective track width over the stated one, minus 1; not for machines that steer";
        slip: "", 0.0, Bound::within(-0.5, 0.9),
            "share of the wheels' travel that is lost";
        side_drift: "", 0.0, Bound::within(-0.5, 0.5),
            "way to the left for each metre travelled either way, as on a cross slope; negative: to the right";
        steer_offset_rad: "rad", 0.0, Bound::within(-0.5, 0.5),
            "true steering angle minus the drive's; steered machines only";
    }
}

section! {
    /// The pose estimator.
    pub struct SensorSpec {
        rate_hz: "Hz", 50.0, Bound::within(0.1, 1000.0),
            "poses a second";
        position_sd_m: "m", 0.0, Bound::within(0.0, 10.0),
            "standard deviation of the white noise on x and on y; also what a pose states";
        heading_sd_rad: "rad", 0.0, Bound::within(0.0, 1.0),
            "standard deviation of the white noise on the heading; also what a pose states";
        latency_s: "s", 0.0, Bound::within(0.0, 5.0),
            "from the measured moment to the moment the pose is sent";
        jitter_s: "s", 0.0, Bound::within(0.0, 5.0),
            "what comes on top of the latency at most, evenly distributed; poses keep their order";
        dropout_probability: "", 0.0, Bound::within(0.0, 1.0),
            "chance that a single pose is missing";
        burst_probability: "", 0.0, Bound::within(0.0, 1.0),
            "chance that a run of missing poses begins with this one";
        burst_length_s: "s", 0.0, Bound::within(0.0, 60.0),
            "how long such a run lasts";
        outage_start_s: "s", 0.0, Bound::within(0.0, 1e6),
            "when the one certain outage begins, counted from the beginning";
        outage_length_s: "s", 0.0, Bound::within(0.0, 1e6),
            "how long the one certain outage lasts; 0 for none";
        jump_probability: "", 0.0, Bound::within(0.0, 1.0),
            "chance that the estimate jumps with this pose";
        jump_m: "m", 0.0, Bound::within(0.0, 1e4),
            "how far it jumps, in a random direction";
        jump_heading_rad: "rad", 0.0, Bound::within(0.0, 3.2),
            "how far its heading jumps, either way";
        jump_length_s: "s", 0.0, Bound::within(0.0, 60.0),
            "how long it stays there; 0 for a single pose";
        clock_offset_s: "s", 0.0, Bound::within(0.0, 1e8),
            "how far the estimator's clock is ahead at the beginning";
        clock_drift_ppm: "ppm", 0.0, Bound::within(-1e4, 1e4),
            "by how many millionths the estimator's clock is fast";
    }
}

/// Keys of the section `pose`: as in the site file, but where the estimator *really* sits. What is left out is as the
/// site file says.
pub const MOUNT_KEYS: &[Key] = &[optional(&POSE_KEYS[0]), optional(&POSE_KEYS[1]), optional(&POSE_KEYS[2])];

const fn optional(key: &Key) -> Key {
    Key { absent: Absent::Optional, name: key.name, unit: key.unit, bound: key.bound, meaning: key.meaning }
}

/// The greatest seed a file can state: up to here a TOML number is exact, whatever reads it.
const MAX_SEED: f64 = 9_007_199_254_740_992.0;
const SEED: &[Key] = &[Key::with_default(
    "seed",
    "",
    0.0,
    Bound::within(0.0, MAX_SEED),
    "seed of everything random; a whole number",
)];

/// A robot that may fall short of an ideal one. The default is ideal.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct RobotSpec {
    /// Between a command and the wheels; section `drive`.
    pub drive: DriveSpec,
    /// Between the wheels and the chassis; section `chassis`.
    pub chassis: ChassisSpec,
    /// The pose estimator; section `sensor`.
    pub sensor: SensorSpec,
    /// Where the estimator really sits; section `pose`, see [`MOUNT_KEYS`].
    pub mount: Values,
    /// Seed of everything random.
    pub seed: u64,
}

impl RobotSpec {
    /// Reads a robot file.
    ///
    /// # Errors
    /// If it cannot be read, or everything in it that does not hold, with file, line, key, value, bound and unit.
    pub fn load(path: &Path) -> Result<Self, FileError> {
        let name = path.display().to_string();
        let text = std::fs::read_to_string(path).map_err(|error| FileError::unreadable(&name, &error))?;
        Self::parse(&text, &name)
    }

    /// Reads the text of a robot file; `name` is for error texts.
    ///
    /// # Errors
    /// Everything that does not hold, with file, line, key, value, bound and unit.
    pub fn parse(text: &str, name: &str) -> Result<Self, FileError> {
        let mut file = File::parse(text, name)?;
        let mut problems = Vec::new();
        let drive = file.section("drive").read("drive", DriveSpec::read, &mut problems);
        let chassis = file.section("chassis").read("chassis", ChassisSpec::read, &mut problems);
        let sensor = file.section("sensor").read("sensor", SensorSpec::read, &mut problems);
        let mount = file.section("pose").read("pose", |values| values.checked(MOUNT_KEYS), &mut problems);
        let seed = file.section("").read("", read_seed, &mut problems);
        problems.extend(file.left_over("seed, drive, chassis, sensor, pose"));
        let spec = Self {
            drive: drive.unwrap_or_default(),
            chassis: chassis.unwrap_or_default(),
            sensor: sensor.unwrap_or_default(),
            mount: mount.unwrap_or_default(),
            seed: seed.unwrap_or_default(),
        };
        if problems.is_empty() {
            problems = spec.check().err().unwrap_or_default();
        }
        if problems.is_empty() { Ok(spec) } else { Err(file.error(&problems)) }
    }

    /// Checks every number, also of a specification that did not come from a file.
    ///
    /// # Errors
    /// Every problem, with section and key.
    pub fn check(&self) -> Result<(), Vec<Problem>> {
        let mut problems = Vec::new();
        let mut note = |section: &str, result: Result<(), Vec<Problem>>| {
            problems.extend(result.err().into_iter().flatten().map(|problem| problem.within(section)));
        };
        note("drive", self.drive.check());
        note("chassis", self.chassis.check());
        note("sensor", self.sensor.check());
        note("pose", self.mount.checked(MOUNT_KEYS).map(|_| ()));
        for (key, lag_s) in [("wheel_lag_s", self.drive.wheel_lag_s), ("steer_lag_s", self.drive.steer_lag_s)]
        {
            if lag_s > 0.0 && lag_s < LEAST_LAG_S {
                let what = format!("{lag_s} s is neither 0 nor at least {LEAST_LAG_S} s");
                problems.push(Problem::new(key, what).within("drive"));
            }
        }
        if problems.is_empty() { Ok(()) } else { Err(problems) }
    }

    /// Checks that a machine of this kind can be wrong in these ways.
    ///
    /// # Errors
    /// Every number out of its bound or without a meaning for the machine, with section and key.
    pub fn check_for(&self, vehicle: &dyn Vehicle) -> Result<(), Vec<Problem>> {
        self.check()?;
        let layout = vehicle.layout();
        let mut problems = Vec::new();
        let mut demand = |holds: bool, key: &str, what: &str| {
            if !holds {
                problems.push(Problem::new(key, what));
            }
        };
        let (drive, chassis) = (&self.drive, &self.chassis);
        if !layout.is_steered() {
            demand(
                drive.steer_lag_s == 0.0,
                "drive.steer_lag_s",
                "this machine does not steer; leave it out",
            );
            demand(
                chassis.steer_offset_rad == 0.0,
                "chassis.steer_offset_rad",
                "this machine does not steer; leave it out",
            );
        } else {
            let what = "the turn rate of a machine that steers does not depend on its track; leave it out";
            demand(chassis.track_error == 0.0, "chassis.track_error", what);
        }
        if layout == WheelLayout::Body {
            let what = "a unicycle states no track, so wheels of different size turn it by an unknown rate; give left \
                        and right the same error";
            demand(
                chassis.left_radius_error == chassis.right_radius_error,
                "chassis.left_radius_error",
                what,
            );
        }
        if layout == WheelLayout::SteeredWheel {
            let what = "only one wheel drives; give left and right the same error";
            demand(
                chassis.left_radius_error == chassis.right_radius_error,
                "chassis.left_radius_error",
                what,
            );
        }
        if problems.is_empty() { Ok(()) } else { Err(problems) }
    }

    /// Where the estimator really sits, given where the site file says it does.
    pub fn mount_or(&self, site: Mount) -> Mount {
        Mount {
            offset_x_m: self.mount.find("offset_x_m").unwrap_or(site.offset_x_m),
            offset_y_m: self.mount.find("offset_y_m").unwrap_or(site.offset_y_m),
            heading_offset_rad: self.mount.find("heading_offset_rad").unwrap_or(site.heading_offset_rad),
        }
    }
}

fn read_seed(values: &Values) -> Result<u64, Vec<Problem>> {
    let seed = values.checked(SEED)?.get("seed");
    if seed.fract() == 0.0 {
        Ok(seed as u64)
    } else {
        Err(vec![Problem::new("seed", format!("{seed} is not a whole number"))])
    }
}

impl Section {
    /// Reads a section of numbers; its problems go to `problems`.
    fn read<T>(
        &self,
        name: &str,
        read: impl FnOnce(&Values) -> Result<T, Vec<Problem>>,
        problems: &mut Vec<Problem>,
    ) -> Option<T> {
        let place = |problem: Problem| if name.is_empty() { problem } else { problem.within(name) };
        problems.extend(no_words(self).into_iter().map(place));
        match read(&self.values) {
            Ok(value) => Some(value),
            Err(more) => {
                problems.extend(more.into_iter().map(place));
                None
            }
        }
    }
}

#[cfg(test)]
#[path = "spec_tests.rs"]
mod tests;
