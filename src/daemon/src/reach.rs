//! How far the machine moves, at worst, before it rests; and the complete site file as `check-config` prints it.

use crate::site::Site;
use crate::site::net::{self, LISTEN_MEANING, LOCK_MEMORY_MEANING};
use std::fmt::{self, Write};
use trackhold_core::keys::{Key, Values, names};
use trackhold_core::node::params::{self, Params};
use trackhold_core::plan::check;
use trackhold_core::settings::{Checked, POSE_KEYS};
use trackhold_core::vehicle::Vehicle;
use trackhold_core::{law, vehicle};

/// From here on the system's scheduling shows in the tracking, Hz.
const DEMANDING_RATE_HZ: f64 = 200.0;

/// The worst-case way to rest at top speed, if everything fails one after the other: the estimator falls silent, the
/// daemon notices only at its next tick, that tick's command is lost and the last one runs out, and only then the drive
/// brakes. Where the site file asks for a ramp, that is counted on top, at its mean speed. Each part in metres.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Reach {
    /// Top speed, m/s.
    pub top_speed_m_s: f64,
    /// Deceleration on a straight line, m/s².
    pub deceleration_m_s2: f64,
    /// While the pose timeout runs, m.
    pub pose_timeout_m: f64,
    /// Until the next tick, m.
    pub period_m: f64,
    /// While the last command holds, m.
    pub validity_m: f64,
    /// On a protective stop's ramp, m; 0 without one.
    pub ramp_m: f64,
    /// Braking, v²/(2a), m.
    pub braking_m: f64,
}

impl Reach {
    /// The worst case of a machine.
    pub fn new(vehicle: &dyn Vehicle, params: &Params) -> Self {
        let (speed, deceleration) = (vehicle.top_speed_m_s(), vehicle.path_decel_m_s2(0.0));
        Self {
            top_speed_m_s: speed,
            deceleration_m_s2: deceleration,
            pose_timeout_m: speed * params.pose_timeout.seconds(),
            period_m: speed * params.period_s(),
            validity_m: speed * params.command_validity.seconds(),
            ramp_m: 0.5 * speed * params.protective_ramp.seconds(),
            braking_m: speed * speed / (2.0 * deceleration),
        }
    }

    /// All of it, m.
    pub fn total_m(&self) -> f64 {
        self.pose_timeout_m + self.period_m + self.validity_m + self.ramp_m + self.braking_m
    }
}

/// The complete settings with units and meanings, what looks unwise, and the worst-case way to rest.
///
/// # Errors
/// Every setting that does not hold.
pub fn describe(site: &Site) -> anyhow::Result<String> {
    let checked = site.checked()?;
    let mut text = String::new();
    if write_all(&mut text, site, &checked).is_err() {
        unreachable!("writing to a string cannot fail");
    }
    Ok(text)
}

fn write_all(text: &mut String, site: &Site, checked: &Checked) -> fmt::Result {
    let settings = &checked.settings;
    let kind = vehicle::KINDS.iter().find(|kind| kind.name == settings.vehicle.kind);
    let law = law::KINDS.iter().find(|kind| kind.name == settings.law.name);
    writeln!(text, "[vehicle]\nkind = {:?}", settings.vehicle.kind)?;
    write_keys(text, kind.map_or(&[], |kind| kind.keys), &settings.vehicle.values)?;
    writeln!(text, "\n[law]\nname = {:?}\n\n[law.gains]", settings.law.name)?;
    if let Some(law) = law {
        write_gains(text, law, &settings.law.gains)?;
    }
    writeln!(text, "\n[node]")?;
    write_keys(text, params::KEYS, &settings.node)?;
    writeln!(text, "\n[pose]")?;
    write_keys(text, POSE_KEYS, &settings.pose)?;
    writeln!(text, "\n[check]")?;
    write_keys(text, check::KEYS, &settings.check)?;
    write_net(text, site)?;
    for warning in warnings(site, checked) {
        writeln!(text, "\nwarning: {warning}")?;
    }
    write_reach(text, &Reach::new(&*checked.vehicle, &checked.params), &checked.params)
}

fn write_keys(text: &mut String, keys: &[Key], values: &Values) -> fmt::Result {
    for key in keys {
        let unit = if key.unit.is_empty() { String::new() } else { format!("{}: ", key.unit) };
        match values.find(key.name) {
            Some(value) => {
                write_line(text, &format!("{} = {value}", key.name), &format!("{unit}{}", key.meaning))?
            }
            None => {
                write_line(text, &format!("# {} is not given", key.name), &format!("{unit}{}", key.meaning))?
            }
        }
    }
    Ok(())
}

/// The raw gains in force, and what may be given in their place.
fn write_gains(text: &mut String, law: &law::Kind, gains: &Values) -> fmt::Result {
    write_keys(text, law.gains, gains)?;
    let designed = law.designed();
    if designed.is_empty() {
        return Ok(());
    }
    writeln!(text, "# In place of {}: {}", designed.join(", "), names(law::design::KEYS))
}

fn write_net(text: &mut String, site: &Site) -> fmt::Result {
    let mut numbers = Values::default();
    numbers.set("ring_bytes", site.net.ring_bytes as f64);
    numbers.set("max_plan_bytes", site.net.max_plan_bytes as f64);
    site.net
        .realtime_priority
        .into_iter()
        .for_each(|value| numbers.set("realtime_priority", f64::from(value)));
    site.net.cpu.into_iter().for_each(|value| numbers.set("cpu", value as f64));
    writeln!(text, "\n[net]")?;
    write_line(text, &format!("listen = \"{}\"", site.net.listen), LISTEN_MEANING)?;
    write_keys(text, net::KEYS, &numbers)?;
    write_line(text, &format!("lock_memory = {}", site.net.lock_memory), LOCK_MEMORY_MEANING)
}

fn write_line(text: &mut String, setting: &str, meaning: &str) -> fmt::Result {
    writeln!(text, "{setting:<34} # {meaning}")
}

/// What holds, but is worth a second look.
fn warnings(site: &Site, checked: &Checked) -> Vec<String> {
    let params = &checked.params;
    let mut warnings = Vec::new();
    let demanding = params.rate_hz >= DEMANDING_RATE_HZ;
    if demanding && site.net.realtime_priority.is_none() {
        warnings.push(format!(
            "node.rate_hz = {} without net.realtime_priority: ticks come late whenever the system is busy",
            params.rate_hz
        ));
    }
    let stall_s = params.stall_periods * params.period_s();
    if stall_s < params.command_validity.seconds() && params.stall_periods < 3.0 {
        warnings.push(format!(
            "node.stall_periods = {}: a single late tick of a busy system may stop the machine",
            params.stall_periods
        ));
    }
    if params.settle_time.0 == 0 {
        warnings.push(
            "node.settle_time_s = 0: the run ends at the plan's end, wherever the machine then is".into(),
        );
    }
    warnings.extend(checked.margin().warning(&checked.settings.law.name));
    warnings
}

fn write_reach(text: &mut String, reach: &Reach, params: &Params) -> fmt::Result {
    let speed = reach.top_speed_m_s;
    writeln!(text, "\nWorst-case way to rest at top speed, {speed:.3} m/s, on a straight line:")?;
    let rows = [
        (reach.pose_timeout_m, format!("pose timeout {} s", params.pose_timeout.seconds())),
        (reach.period_m, format!("one period {:.4} s until a tick notices", params.period_s())),
        (
            reach.validity_m,
            format!(
                "command validity {} s, if that tick's command is lost",
                params.command_validity.seconds()
            ),
        ),
        (reach.ramp_m, format!("protective ramp {} s, at its mean speed", params.protective_ramp.seconds())),
        (reach.braking_m, format!("braking, v²/(2a) with a = {:.3} m/s²", reach.deceleration_m_s2)),
    ];
    for (metres, what) in rows.into_iter().filter(|(metres, _)| *metres > 0.0) {
        writeln!(text, "  {metres:8.3} m  {what}")?;
    }
    writeln!(text, "  {:8.3} m  together", reach.total_m())?;
    writeln!(text, "Slip, slope, load, and the drive's own delays come on top: measure it on the machine.")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_way_to_rest_is_the_sum_of_its_parts() {
        let text = "[vehicle]\nkind = \"unicycle\"\nmax_speed_m_s = 2\nmax_turn_rate_rad_s = 1\nmax_accel_m_s2 = 0.5\n\
                    max_turn_accel_rad_s2 = 1\n[law]\nname = \"samson\"\n[node]\nrate_hz = 10\npose_timeout_s = 0.3\n\
                    command_validity_s = 0.25\nprotective_ramp_s = 0.5\n";
        let site = Site::parse(text, "site.toml").unwrap();
        let checked = site.checked().unwrap();
        let reach = Reach::new(&*checked.vehicle, &checked.params);
        // Textbook: 2 m/s for 0.3 s, 0.1 s and 0.25 s, then 2²/(2·0.5) = 4 m.
        assert_eq!(
            [reach.pose_timeout_m, reach.period_m, reach.validity_m, reach.braking_m],
            [0.6, 0.2, 0.5, 4.0]
        );
        assert_eq!(reach.ramp_m, 0.5, "half of 2 m/s for 0.5 s");
        let said = describe(&site).unwrap();
        assert!(said.contains("     5.800 m  together"), "{said}");
        assert!(
            said.contains(
                "max_accel_m_s2 = 0.5               # m/s²: greatest acceleration, and deceleration unless that"
            ),
            "{said}"
        );
    }

    #[test]
    fn a_deceleration_of_its_own_is_the_one_that_brakes() {
        let text = "[vehicle]\nkind = \"skid-steer\"\nwheel_radius_m = 0.2\ntrack_width_m = 0.5\n\
                    max_wheel_speed_rad_s = 10\nmax_wheel_accel_rad_s2 = 5\nmax_wheel_decel_rad_s2 = 20\n\
                    [law]\nname = \"kanayama\"\n";
        let checked = Site::parse(text, "site.toml").unwrap().checked().unwrap();
        let reach = Reach::new(&*checked.vehicle, &checked.params);
        // Textbook: 2 m/s and 4 m/s², v²/(2a).
        assert_eq!((reach.top_speed_m_s, reach.braking_m), (2.0, 0.5));
    }

    #[test]
    fn design_keys_are_printed_as_the_raw_gains_that_they_ask_for() {
        let text = "[vehicle]\nkind = \"unicycle\"\nmax_speed_m_s = 2\nmax_turn_rate_rad_s = 1\nmax_accel_m_s2 = 0.5\n\
                    max_turn_accel_rad_s2 = 1\n[law]\nname = \"samson\"\n[law.gains]\nsettling_distance_m = 4\ndamping = 0.5\n";
        let said = describe(&Site::parse(text, "site.toml").unwrap()).unwrap();
        // Textbook: a = 4/(ζ d) = 2 1/m; k_2 = a², k_3 = 2ζa.
        for line in [
            "k_1 = 2 ",
            "k_2 = 4 ",
            "k_3 = 2 ",
            "# In place of k_1, k_2, k_3: damping, settling_distance_m, ",
        ] {
            assert!(said.contains(line), "{said}");
        }
    }

    #[test]
    fn a_law_too_fast_for_the_dead_time_is_warned_of() {
        let text = |dead_time_s: f64| {
            let site = format!(
                "[vehicle]\nkind = \"unicycle\"\nmax_speed_m_s = 2\nmax_turn_rate_rad_s = 1\nmax_accel_m_s2 = 0.5\n\
                 max_turn_accel_rad_s2 = 1\n[law]\nname = \"kanayama\"\n[node]\nrate_hz = 50\ndead_time_s = {dead_time_s}\n"
            );
            describe(&Site::parse(&site, "site.toml").unwrap()).unwrap()
        };
        // k_y = 4: 4 rad/s at 2 m/s, times dead time and 10 ms; 0.2 is the working rule.
        assert!(!text(0.03).contains("max_bandwidth_delay = 0.2:"));
        let said = text(0.05);
        assert!(
            said.contains(
                "warning: law kanayama: its bandwidth of 4 rad/s at top speed, 2 m/s, times 0.06 s"
            ) && said.contains("or plans of up to 1.667 m/s"),
            "{said}"
        );
    }

    #[test]
    fn what_is_printed_reads_back_to_the_same_site() {
        let text = "[vehicle]\nkind = \"car\"\nwheelbase_m = 1.1\nmax_speed_m_s = 2\nmax_accel_m_s2 = 0.7\n\
                    max_steer_rad = 0.5\nmax_steer_rate_rad_s = 0.9\n[law]\nname = \"kanayama\"\n[net]\ncpu = 1\n";
        let site = Site::parse(text, "site.toml").unwrap();
        let said = describe(&site).unwrap();
        let settings = said.split("\nWorst-case").next().unwrap();
        let again = Site::parse(settings, "printed.toml").unwrap();
        assert_eq!((again.settings, again.net), (site.settings, site.net));
    }
}
