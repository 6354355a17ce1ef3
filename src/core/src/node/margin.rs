//! How near a law comes to what dead time allows: its bandwidth times the delay of the loop.
//!
//! Across the path a law is about a second-order loop, s² + e^(−sτ)(2ζa s + a²) with the bandwidth a and the delay τ. With
//! ζ from 0.5 to 1 it is stable only while a τ stays below 0.65 to 0.74 (computed from the characteristic equation); a
//! common working rule is a third of that, a τ ≤ 0.2. The delay is the dead time, half a period, for which a command is
//! held on average, and while the machine runs the age of its pose.

use super::Node;
use super::params::Params;
use crate::law::Law;
use crate::time::SpanNs;
use alloc::format;
use alloc::string::String;
use core::fmt;
use trackhold_proto::journal::{TickRecord, flag};
use trackhold_proto::words::Regime;

/// So finely is the speed looked for from which on the margin is too thin.
const LOOKS: u32 = 200;
const HALVINGS: u32 = 40;

impl Node {
    /// Flags a tick in which the law that steers is too fast for the delay, the age of this tick's pose included.
    pub(super) fn note_margin(&self, record: &mut TickRecord) {
        let (law, limit) = (self.feedback.law(), self.params.max_bandwidth_delay);
        let delay = delay(&self.params, SpanNs(record.pose_age_ns));
        if record.regime == Regime::Moving && thin(law, record.ref_speed_m_s, delay, limit) {
            record.flags |= flag::THIN_MARGIN;
        }
    }
}

/// The delay of the loop with a pose of this age.
fn delay(params: &Params, pose_age: SpanNs) -> SpanNs {
    params.dead_time + SpanNs::from_seconds(0.5 * params.period_s()) + pose_age
}

/// Whether the law's bandwidth at this speed (m/s, of either sign) times the delay exceeds the limit.
fn thin(law: &dyn Law, speed_m_s: f64, delay: SpanNs, limit: f64) -> bool {
    law.bandwidth_rad_s(speed_m_s.abs()) * delay.seconds() > limit
}

/// A law's margin at a machine's top speed, as far as the site file tells it: without the age of any pose.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Margin {
    /// The top speed, m/s.
    pub speed_m_s: f64,
    /// The bandwidth there, rad/s.
    pub bandwidth_rad_s: f64,
    /// Dead time, s.
    pub dead_time_s: f64,
    /// Dead time and half a period, s.
    pub delay_s: f64,
    /// The greatest product of bandwidth and delay within the safe range, `node.max_bandwidth_delay`.
    pub limit: f64,
    /// The speed (m/s) from which on the product exceeds the limit; none if it nowhere does.
    pub thin_from_m_s: Option<f64>,
}

impl Margin {
    /// The margin of a law on a machine of this top speed.
    pub fn new(law: &dyn Law, top_speed_m_s: f64, params: &Params) -> Self {
        let delay = delay(params, SpanNs(0));
        let limit = params.max_bandwidth_delay;
        Self {
            speed_m_s: top_speed_m_s,
            bandwidth_rad_s: law.bandwidth_rad_s(top_speed_m_s),
            dead_time_s: params.dead_time.seconds(),
            delay_s: delay.seconds(),
            limit,
            thin_from_m_s: first_thin(top_speed_m_s, &|speed_m_s| thin(law, speed_m_s, delay, limit)),
        }
    }

    /// Bandwidth times delay at top speed.
    pub fn product(&self) -> f64 {
        self.bandwidth_rad_s * self.delay_s
    }

    /// The greatest bandwidth within the safe range, rad/s.
    pub fn greatest_bandwidth_rad_s(&self) -> f64 {
        self.limit / self.delay_s
    }

    /// What to tell of a law by this name, if its margin is too thin at any speed of the machine.
    pub fn warning(&self, law: &str) -> Option<String> {
        let from_m_s = self.thin_from_m_s?;
        let remedy = if from_m_s > 0.0 {
            format!("plans of up to {} m/s", Short(from_m_s))
        } else {
            String::from("no speed")
        };
        Some(format!(
            "law {law}: its bandwidth of {} rad/s at top speed, {} m/s, times {} s of delay (dead time {} s and half a \
             period) is {}, above node.max_bandwidth_delay = {}: the machine may weave from {} m/s on. Within are a \
             bandwidth of up to {} rad/s, or {remedy}; give slower gains, or measure node.dead_time_s anew",
            Short(self.bandwidth_rad_s),
            Short(self.speed_m_s),
            Short(self.delay_s),
            Short(self.dead_time_s),
            Short(self.product()),
            self.limit,
            Short(from_m_s),
            Short(self.greatest_bandwidth_rad_s()),
        ))
    }
}

/// Three decimals at most.
struct Short(f64);

impl fmt::Display for Short {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let text = format!("{:.3}", self.0);
        f.write_str(text.trim_end_matches('0').trim_end_matches('.'))
    }
}

/// The least speed up to `top` at which the margin is too thin; 0 if it is at any.
fn first_thin(top_m_s: f64, is_thin: &dyn Fn(f64) -> bool) -> Option<f64> {
    let at = |look: u32| top_m_s * f64::from(look) / f64::from(LOOKS);
    let first = (0..=LOOKS).find(|look| is_thin(at(*look)))?;
    let Some(before) = first.checked_sub(1) else { return Some(0.0) };
    let (mut within, mut beyond) = (at(before), at(first));
    for _ in 0..HALVINGS {
        let middle = 0.5 * (within + beyond);
        if is_thin(middle) {
            beyond = middle;
        } else {
            within = middle;
        }
    }
    // The greatest speed known to be within: what is advised must hold.
    Some(within)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::keys::Values;
    use crate::law::{self, Context};
    use crate::node::params::KEYS;
    use crate::vehicle;
    use alloc::boxed::Box;
    use alloc::sync::Arc;

    fn values(pairs: &[(&str, f64)]) -> Values {
        let mut values = Values::default();
        pairs.iter().for_each(|(key, value)| values.set(key, *value));
        values
    }

    fn params(dead_time_s: f64) -> Params {
        let given = values(&[("dead_time_s", dead_time_s), ("rate_hz", 50.0)]);
        Params::new(&given.checked(KEYS).unwrap()).unwrap()
    }

    fn law(name: &str, gains: &[(&str, f64)]) -> Box<dyn Law> {
        let limits = [
            ("max_speed_m_s", 1.5),
            ("max_turn_rate_rad_s", 2.0),
            ("max_accel_m_s2", 1.0),
            ("max_turn_accel_rad_s2", 4.0),
        ];
        let vehicle = vehicle::build("unicycle", &values(&limits)).unwrap().0;
        let context = Context { vehicle: Arc::clone(&vehicle), period_s: 0.02, dead_time_s: 0.0 };
        law::build(name, &values(gains), &context).unwrap().0
    }

    #[test]
    fn a_bandwidth_that_grows_with_the_speed_is_too_great_from_a_speed_on() {
        // Kanayama's natural frequency is v √k_y: 4.5 rad/s at 1.5 m/s; times 0.05 s + 0.01 s that is 0.27.
        let kanayama = law("kanayama", &[("k_y", 9.0), ("k_heading", 6.0)]);
        let margin = Margin::new(&*kanayama, 1.5, &params(0.05));
        assert!((margin.product() - 0.27).abs() < 1e-12);
        // 0.2 / 0.06 s = 10/3 rad/s, which is 10/9 m/s.
        assert!((margin.greatest_bandwidth_rad_s() - 10.0 / 3.0).abs() < 1e-12);
        assert!((margin.thin_from_m_s.unwrap() - 10.0 / 9.0).abs() < 1e-9);
        let said = margin.warning("kanayama").unwrap();
        for part in [
            "bandwidth of 4.5 rad/s at top speed, 1.5 m/s",
            "0.06 s of delay (dead time 0.05 s",
            "is 0.27, above node.max_bandwidth_delay = 0.2",
            "from 1.111 m/s on",
            "up to 3.333 rad/s, or plans of up to 1.111 m/s",
        ] {
            assert!(said.contains(part), "{part} is not in {said}");
        }
        assert_eq!(Margin::new(&*kanayama, 1.1, &params(0.05)).warning("kanayama"), None);
        assert_eq!(Margin::new(&*kanayama, 1.5, &params(0.0)).thin_from_m_s, None);
    }

    #[test]
    fn a_bandwidth_of_its_own_is_too_great_at_any_speed() {
        let margin = Margin::new(&*law("off-axle", &[("k_p", 5.0)]), 1.5, &params(0.05));
        assert_eq!(margin.thin_from_m_s, Some(0.0));
        let said = margin.warning("off-axle").unwrap();
        assert!(said.contains("weave from 0 m/s on") && said.contains("or no speed"), "{said}");
    }

    #[test]
    fn the_age_of_the_pose_counts_while_the_machine_runs() {
        let (kanayama, params) = (law("kanayama", &[]), params(0.05));
        // k_y 4: 2 rad/s at 1 m/s, forward or in reverse.
        let is_thin = |age_ms: u64| {
            let delay = delay(&params, SpanNs(age_ms * 1_000_000));
            [1.0, -1.0].map(|speed_m_s| thin(&*kanayama, speed_m_s, delay, params.max_bandwidth_delay))
        };
        assert_eq!((is_thin(39), is_thin(41)), ([false; 2], [true; 2]));
    }
}
