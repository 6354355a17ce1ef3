//! What a site file says of the machine: its vehicle and where the estimator sits. The rest of the file is the daemon's.

use crate::file::{File, FileError, no_words};
use std::path::Path;
use std::sync::Arc;
use trackhold_core::geometry::Mount;
use trackhold_core::keys::Problem;
use trackhold_core::settings::{POSE_KEYS, VehicleSettings};
use trackhold_core::vehicle::{self, Vehicle};

/// The machine of a site.
#[derive(Clone, Debug)]
pub struct SiteMachine {
    /// Geometry and limits.
    pub vehicle: Arc<dyn Vehicle>,
    /// The same as kind and numbers, complete.
    pub settings: VehicleSettings,
    /// Where the estimator sits.
    pub mount: Mount,
}

impl SiteMachine {
    /// Reads `[vehicle]` and `[pose]` of a site file.
    ///
    /// # Errors
    /// If it cannot be read, or everything in these sections that does not hold, with file, line, key, value, bound and
    /// unit.
    pub fn load(path: &Path) -> Result<Self, FileError> {
        let name = path.display().to_string();
        let text = std::fs::read_to_string(path).map_err(|error| FileError::unreadable(&name, &error))?;
        Self::parse(&text, &name)
    }

    /// Reads `[vehicle]` and `[pose]` from the text of a site file; `name` is for error texts.
    ///
    /// # Errors
    /// Everything in these sections that does not hold, with file, line, key, value, bound and unit.
    pub fn parse(text: &str, name: &str) -> Result<Self, FileError> {
        let mut file = File::parse(text, name)?;
        let mut problems = file.strange_in("vehicle");
        problems.extend(file.strange_in("pose"));
        let mut note = |section: &str, more: Vec<Problem>| {
            problems.extend(more.into_iter().map(|problem| problem.within(section)));
        };
        let mut section = file.section("vehicle");
        let kind = section.words.remove("kind");
        note("vehicle", no_words(&section));
        let built = match &kind {
            Some(kind) => vehicle::build(kind, &section.values),
            None => {
                Err(vec![Problem::new("kind", "missing; give the vehicle's kind, such as \"differential\"")])
            }
        };
        let built = built.map_err(|more| note("vehicle", more)).ok();
        let section = file.section("pose");
        note("pose", no_words(&section));
        let mount = section.values.checked(POSE_KEYS).map_err(|more| note("pose", more)).ok();
        match (built, mount, kind) {
            (Some((vehicle, values)), Some(mount), Some(kind)) if problems.is_empty() => Ok(Self {
                vehicle,
                settings: VehicleSettings { kind, values },
                mount: Mount {
                    offset_x_m: mount.get("offset_x_m"),
                    offset_y_m: mount.get("offset_y_m"),
                    heading_offset_rad: mount.get("heading_offset_rad"),
                },
            }),
            _ => Err(file.error(&problems)),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const SITE: &str = "[vehicle]\nkind = \"differential\"\nwheel_radius_m = 0.1\ntrack_width_m = 0.5\n\
                        max_wheel_speed_rad_s = 10\nmax_wheel_accel_rad_s2 = 20\n\n[law]\nname = \"kanayama\"\n\
                        [net]\nlisten = \"127.0.0.1:4710\"\ncpus = [1, 2]\n";

    #[test]
    fn the_machine_is_read_and_the_rest_left_alone() {
        let site = SiteMachine::parse(&format!("{SITE}[pose]\noffset_x_m = 0.4\n"), "site.toml").unwrap();
        assert_eq!(site.settings.kind, "differential");
        assert_eq!(site.vehicle.top_speed_m_s(), 1.0);
        assert_eq!(site.mount, Mount { offset_x_m: 0.4, ..Mount::default() });
        assert_eq!(SiteMachine::parse(SITE, "site.toml").unwrap().mount, Mount::default());
    }

    #[test]
    fn problems_name_file_line_key_value_bound_and_unit() {
        let text =
            SITE.replace("wheel_radius_m = 0.1", "wheel_radius_m = -1").replace("track_width_m = 0.5\n", "");
        assert_eq!(
            SiteMachine::parse(&text, "site.toml").unwrap_err().to_string(),
            "site.toml:1: vehicle.track_width_m: missing; give a value greater than 0 and at most 5 m\n\
             site.toml:3: vehicle.wheel_radius_m: -1 m is not greater than 0 and at most 2 m"
        );
        let text = SITE.replace("kind = \"differential\"\n", "");
        let error = SiteMachine::parse(&text, "site.toml").unwrap_err().to_string();
        assert!(error.starts_with("site.toml:1: vehicle.kind: missing"), "{error}");
        let error = SiteMachine::parse("[vehicle", "site.toml").unwrap_err().to_string();
        assert!(error.starts_with("site.toml:1: "), "{error}");
    }
}
