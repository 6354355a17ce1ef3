//! What bounds a plan where: for which part of its time each limit, less the reserve, is used up.

use std::fmt::{self, Write};
use trackhold_core::plan::check::loads_at;
use trackhold_core::plan::{Placed, Plan};
use trackhold_core::vehicle::{LimitName, Vehicle};

/// From this part of what the reserve leaves on, a limit counts as used up.
const USED_UP: f64 = 0.98;
/// The same of the jerk: what keeps it leaves some of it.
const JERK_USED_UP: f64 = 0.85;
/// Looks a second, and most looks at a plan.
const LOOKS_PER_S: f64 = 200.0;
const MOST_LOOKS: f64 = 1_000_000.0;

/// Part of the time at each limit.
#[derive(Debug)]
pub(super) struct Bounds {
    /// Limits, with how many looks found each used up more than any other.
    counts: Vec<(LimitName, u64)>,
    rests: u64,
    jerk: u64,
    looks: u64,
    /// Greatest share of any limit, and which.
    peak: Option<(LimitName, f64)>,
}

impl Bounds {
    /// Looks at a plan at even times.
    pub(super) fn of(plan: &Plan, vehicle: &dyn Vehicle, reserve: f64) -> Self {
        let count = (plan.duration_s() * LOOKS_PER_S).clamp(1000.0, MOST_LOOKS);
        let step_s = plan.duration_s() / count.ceil();
        let mut bounds = Self { counts: Vec::new(), rests: 0, jerk: 0, looks: 0, peak: None };
        for placed in plan.stretches() {
            let looks = (placed.duration_s / step_s).ceil().max(1.0);
            for index in 0..looks as u64 {
                let t_s = placed.duration_s * (index as f64 + 0.5) / looks;
                bounds.look(&placed, t_s, vehicle, 1.0 - reserve);
            }
        }
        bounds
    }

    fn look(&mut self, placed: &Placed<'_>, t_s: f64, vehicle: &dyn Vehicle, share: f64) {
        self.looks += 1;
        let reference = placed.stretch.at(t_s);
        if reference.velocity.is_zero() {
            self.rests += 1;
            return;
        }
        let Some(loads) = loads_at(vehicle, &reference, placed.kind == "samples") else { return };
        // Where the angle is near its limit the path is what it is: it bounds no speed.
        let speeds = loads.iter().filter(|load| load.limit != LimitName::SteeringAngle);
        let Some(greatest) = speeds.max_by(|one, other| one.share().total_cmp(&other.share())) else {
            return;
        };
        if self.peak.is_none_or(|(_, peak)| greatest.share() > peak) {
            self.peak = Some((greatest.limit, greatest.share()));
        }
        if greatest.share() >= USED_UP * share {
            match self.counts.iter_mut().find(|(limit, _)| *limit == greatest.limit) {
                Some((_, count)) => *count += 1,
                None => self.counts.push((greatest.limit, 1)),
            }
        } else if vehicle.max_jerk_m_s3().is_some_and(|limit| jerk(placed, t_s) >= JERK_USED_UP * limit) {
            self.jerk += 1;
        }
    }

    /// Adds it in words.
    pub(super) fn tell(&self, out: &mut String) -> fmt::Result {
        let part = |count: u64| 100.0 * count as f64 / self.looks as f64;
        let mut lines: Vec<(String, u64)> = self
            .counts
            .iter()
            .map(|(limit, count)| (limit.words().to_owned(), *count))
            .chain([("jerk".to_owned(), self.jerk), ("rests".to_owned(), self.rests)])
            .filter(|(_, count)| *count > 0)
            .collect();
        lines.sort_by_key(|line| std::cmp::Reverse(line.1));
        let named: u64 = lines.iter().map(|(_, count)| count).sum();
        if self.looks > named {
            lines.push(("nothing up to its limit".to_owned(), self.looks - named));
        }
        for (index, (name, count)) in lines.iter().enumerate() {
            let head = if index == 0 { "bounded by" } else { "" };
            writeln!(out, "{head:<10} {name} for {:.1} % of the time", part(*count))?;
        }
        if let Some((limit, share)) = self.peak {
            writeln!(out, "peak       {:.1} % of {}", 100.0 * share, limit.words())?;
        }
        Ok(())
    }
}

/// Magnitude of the progress' jerk, m/s³.
fn jerk(placed: &Placed<'_>, t_s: f64) -> f64 {
    let h = 1e-4;
    let accel = |t_s: f64| placed.stretch.timing(t_s.clamp(0.0, placed.duration_s)).accel;
    (accel(t_s + h) - accel(t_s - h)).abs() / (2.0 * h)
}
