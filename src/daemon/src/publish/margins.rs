//! Too thin a margin against dead time, told in the log: once a run, and when a law is put in force.

use trackhold_core::node::margin::Margin;
use trackhold_proto::journal::{Body, LawChanged, TickRecord, flag};
use trackhold_proto::words::Mode;

/// Looks out for it.
#[derive(Debug)]
pub struct Margins {
    site: Margin,
    /// This run's warning is out.
    told: bool,
}

impl Margins {
    /// With the margin that the site file has.
    pub fn new(site: Margin) -> Self {
        Self { site, told: false }
    }

    /// What to warn of after this entry.
    pub fn warning(&mut self, body: &Body) -> Option<String> {
        match body {
            Body::Tick(record)
                if record.has(flag::THIN_MARGIN) && !std::mem::replace(&mut self.told, true) =>
            {
                Some(self.of_run(record))
            }
            Body::ModeChange(change) if change.to == Mode::Tracking => {
                self.told = false;
                None
            }
            Body::LawChanged(law) => self.of_law(law),
            _ => None,
        }
    }

    fn of_run(&self, record: &TickRecord) -> String {
        format!(
            "thin margin: at {:.3} m/s and with a pose {:.1} ms old the law's bandwidth times the delay is above \
             node.max_bandwidth_delay = {}: the machine may weave; give slower gains, a cap, or a fresher pose (told once a run; \
             the status counts the ticks)",
            record.ref_speed_m_s,
            record.pose_age_ns as f64 * 1e-6,
            self.site.limit
        )
    }

    fn of_law(&self, law: &LawChanged) -> Option<String> {
        let product = law.bandwidth_rad_s * self.site.delay_s;
        (product > self.site.limit).then(|| {
            format!(
                "law {}: its bandwidth of {:.3} rad/s at {:.3} m/s times {:.3} s of delay is {product:.3}, above \
                 node.max_bandwidth_delay = {}: within is one of up to {:.3} rad/s",
                law.name.as_str(),
                law.bandwidth_rad_s,
                law.speed_m_s,
                self.site.delay_s,
                self.site.limit,
                self.site.greatest_bandwidth_rad_s()
            )
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use trackhold_proto::blob::Text;
    use trackhold_proto::journal::ModeChange;
    use trackhold_proto::message::WheelLayout;
    use trackhold_proto::words::Cause;

    fn margins() -> Margins {
        Margins::new(Margin {
            speed_m_s: 1.0,
            bandwidth_rad_s: 2.0,
            dead_time_s: 0.05,
            delay_s: 0.06,
            limit: 0.2,
            thin_from_m_s: None,
        })
    }

    #[test]
    fn a_run_is_warned_of_once() {
        let mut margins = margins();
        let mut record = TickRecord::blank(WheelLayout::Body);
        assert_eq!(margins.warning(&Body::Tick(record)), None);
        (record.flags, record.ref_speed_m_s, record.pose_age_ns) = (flag::THIN_MARGIN, 0.8, 70_000_000);
        let said = margins.warning(&Body::Tick(record)).unwrap();
        assert!(said.contains("0.800 m/s") && said.contains("70.0 ms"), "{said}");
        assert_eq!(margins.warning(&Body::Tick(record)), None);
        let start =
            ModeChange { from: Mode::Standby, to: Mode::Tracking, cause: Cause::Operator, start_number: 1 };
        assert_eq!(margins.warning(&Body::ModeChange(start)), None);
        assert!(margins.warning(&Body::Tick(record)).is_some(), "another run");
    }

    #[test]
    fn a_law_is_warned_of_by_its_bandwidth() {
        let law = |bandwidth_rad_s| {
            Body::LawChanged(LawChanged {
                name: Text::cut("linear"),
                gains: "{}".into(),
                bandwidth_rad_s,
                speed_m_s: 1.0,
            })
        };
        assert_eq!(margins().warning(&law(3.3)), None);
        let said = margins().warning(&law(4.0)).unwrap();
        assert!(said.contains("law linear") && said.contains("0.240") && said.contains("3.333"), "{said}");
    }
}
