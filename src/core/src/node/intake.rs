//! Poses as they come in: one source by lease, stamps that rise, a freshness that needs both stamp and arrival.

use super::clock::OffsetEstimate;
use super::params::Params;
use crate::geometry::{Mount, Pose};
use crate::math;
use crate::time::{SpanNs, TimeNs};
use trackhold_proto::journal::{ExchangeEvent, PoseEvent, flag};
use trackhold_proto::words::Refusal;

/// No pose lies farther from the origin, m; beyond, a double's last bit is no longer a nanometre.
const MAX_COORDINATE_M: f64 = 1e7;
/// No heading has more turns: beyond, a double's last bit is more than a microradian's tenth, rad.
const MAX_HEADING_RAD: f64 = 1e6;

/// The pose the node goes by.
#[derive(Clone, Copy, Debug)]
pub(super) struct Estimate {
    /// Pose of the chassis point.
    pub(super) pose: Pose,
    /// When it was true, in the daemon's clock.
    pub(super) stamp: TimeNs,
    /// When it arrived.
    pub(super) received: TimeNs,
    /// The offset that made the stamp, ns.
    pub(super) clock_offset_ns: i64,
    /// Standard deviation of the chassis point's position, m; 0 if the estimator states none.
    pub(super) position_sd_m: f64,
    /// Standard deviation of the heading, rad; 0 if the estimator states none.
    pub(super) heading_sd_rad: f64,
}

#[derive(Clone, Debug)]
struct Source {
    session: u64,
    last_measured_ns: u64,
    last_received: TimeNs,
    offset: OffsetEstimate,
}

#[derive(Clone, Debug, Default)]
pub(super) struct PoseIntake {
    source: Option<Source>,
    estimate: Option<Estimate>,
    /// Warnings since the last tick, see [`flag`].
    warnings: u32,
}

/// Who may send, until when.
#[derive(Clone, Copy, Debug)]
pub(super) struct Lease {
    pub(super) holder: u64,
    pub(super) renewed: TimeNs,
}

impl Lease {
    /// Whether `session` may send at `at`.
    pub(super) fn admits(self, session: u64, at: TimeNs, length: SpanNs) -> Result<(), Refusal> {
        let held = at.since(self.renewed);
        if self.holder == session || held >= length {
            return Ok(());
        }
        Err(Refusal::Lease { holder: self.holder, left_ns: (length - held).0 })
    }
}

impl PoseIntake {
    /// Takes in a pose.
    ///
    /// # Errors
    /// Why it was refused; then nothing else changed.
    pub(super) fn take(
        &mut self,
        event: &PoseEvent,
        mount: Mount,
        top_speed_m_s: f64,
        params: &Params,
    ) -> Result<(), Refusal> {
        let received = TimeNs(event.received_ns);
        self.admit(event, received, params)?;
        check_range(event)?;
        let (mut offset, renewed) = match self.source.take() {
            Some(source) if source.session == event.session => (source.offset, true),
            _ => (OffsetEstimate::default(), false),
        };
        let clock_offset_ns = offset.observe(event.pose.measured_ns, received, params.clock_window);
        let lever_m = math::length(mount.offset_x_m, mount.offset_y_m);
        let estimate = Estimate {
            pose: mount.chassis(Pose::new(event.pose.x_m, event.pose.y_m, event.pose.heading_rad)),
            stamp: TimeNs(event.pose.measured_ns.wrapping_add_signed(clock_offset_ns)),
            received,
            clock_offset_ns,
            position_sd_m: math::length(event.pose.position_sd_m, lever_m * event.pose.heading_sd_rad),
            heading_sd_rad: event.pose.heading_sd_rad,
        };
        if let Some(before) = self.estimate.filter(|_| renewed) {
            self.warnings |= warnings(&before, &estimate, top_speed_m_s, params);
        }
        self.estimate = Some(estimate);
        self.source = Some(Source {
            session: event.session,
            last_measured_ns: event.pose.measured_ns,
            last_received: received,
            offset,
        });
        Ok(())
    }

    /// Takes in an exchange of stamps with the source; one with anybody else changes nothing.
    pub(super) fn exchanged(&mut self, event: &ExchangeEvent, params: &Params) {
        if let Some(source) = self.source.as_mut().filter(|source| source.session == event.session) {
            source.offset.exchanged(event, params.clock_window);
        }
    }

    /// The session whose poses are taken, if there was any.
    pub(super) fn source(&self) -> Option<u64> {
        self.source.as_ref().map(|source| source.session)
    }

    /// The newest pose, however old.
    pub(super) fn estimate(&self) -> Option<&Estimate> {
        self.estimate.as_ref()
    }

    /// The warnings since the last call.
    pub(super) fn take_warnings(&mut self) -> u32 {
        core::mem::take(&mut self.warnings)
    }

    fn admit(&self, event: &PoseEvent, received: TimeNs, params: &Params) -> Result<(), Refusal> {
        let Some(source) = &self.source else { return Ok(()) };
        let lease = Lease { holder: source.session, renewed: source.last_received };
        lease.admits(event.session, received, params.pose_lease)?;
        if source.session == event.session && event.pose.measured_ns <= source.last_measured_ns {
            let (stamp_ns, last_ns) = (event.pose.measured_ns, source.last_measured_ns);
            return Err(Refusal::StampNotRising { stamp_ns, last_ns });
        }
        Ok(())
    }
}

impl Estimate {
    /// Age by the stamp.
    pub(super) fn age(&self, at: TimeNs) -> SpanNs {
        at.since(self.stamp)
    }

    /// The greater of the age by the stamp and the time since the arrival: fresh needs both.
    pub(super) fn staleness(&self, at: TimeNs) -> SpanNs {
        self.age(at).max(at.since(self.received))
    }
}

fn check_range(event: &PoseEvent) -> Result<(), Refusal> {
    let pose = &event.pose;
    for (value, bound) in
        [(pose.x_m, MAX_COORDINATE_M), (pose.y_m, MAX_COORDINATE_M), (pose.heading_rad, MAX_HEADING_RAD)]
    {
        if value.is_nan() || value.abs() > bound {
            // A record holds no NaN; the decoder refused it before, this is the second line.
            return Err(Refusal::OutOfRange {
                value: if value.is_finite() { value } else { f64::MAX },
                bound,
            });
        }
    }
    Ok(())
}

fn warnings(before: &Estimate, now: &Estimate, top_speed_m_s: f64, params: &Params) -> u32 {
    let elapsed = now.stamp.since(before.stamp);
    let mut warnings = 0;
    if elapsed > params.pose_timeout {
        warnings |= flag::POSE_GAP;
    }
    if now.pose.distance_to(before.pose) > top_speed_m_s * elapsed.seconds() + params.pose_slack_m {
        warnings |= flag::POSE_IMPLAUSIBLE;
    }
    warnings
}
