//! The pose estimator: what it says of a true pose, when, and by which clock.
//!
//! Every measurement draws the same random numbers in the same order, whatever comes of it, so that changing one number
//! of the specification leaves all other chances as they were.

use crate::random::Dice;
use crate::spec::SensorSpec;
use trackhold_core::geometry::{Mount, Pose};
use trackhold_core::math;
use trackhold_core::time::{SpanNs, TimeNs, tick_offset};

/// Keeps the sensor's stream apart from others of the same seed.
const PURPOSE: u64 = 1;

/// A pose as the estimator sends it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Seen {
    /// Number of the measurement, from 0; missing ones count too.
    pub number: u64,
    /// When it was measured, in the daemon's clock.
    pub measured: TimeNs,
    /// The same moment in the estimator's clock, ns: what the message states.
    pub measured_ns: u64,
    /// When it is sent, and arrives where nothing delays it, in the daemon's clock.
    pub arrives: TimeNs,
    /// Pose of the estimator's point.
    pub pose: Pose,
}

/// The estimator.
#[derive(Clone, Debug)]
pub struct PoseSensor {
    spec: SensorSpec,
    mount: Mount,
    dice: Dice,
    begin: TimeNs,
    number: u64,
    burst_until: TimeNs,
    jump: Jump,
    last_arrival: TimeNs,
}

#[derive(Clone, Copy, Debug, Default)]
struct Jump {
    until: TimeNs,
    x_m: f64,
    y_m: f64,
    heading_rad: f64,
}

/// The chances of one measurement.
struct Draws {
    dropped: bool,
    burst: bool,
    jump: bool,
    jump_direction_rad: f64,
    jump_sign: f64,
    jitter: f64,
    x: f64,
    y: f64,
    heading: f64,
}

impl PoseSensor {
    /// An estimator that measures for the first time at `begin`. The specification must hold, see
    /// [`crate::RobotSpec::check`].
    pub fn new(spec: SensorSpec, seed: u64, mount: Mount, begin: TimeNs) -> Self {
        Self {
            spec,
            mount,
            dice: Dice::new(seed, PURPOSE),
            begin,
            number: 0,
            burst_until: TimeNs(0),
            jump: Jump::default(),
            last_arrival: begin,
        }
    }

    /// When it measures next. Measurement k falls due k/rate after the beginning, to the nearest nanosecond.
    pub fn due(&self) -> TimeNs {
        self.begin + tick_offset(self.number, self.spec.rate_hz)
    }

    /// Measures the true pose of the chassis point at the moment [`PoseSensor::due`]. None if this pose is missing.
    pub fn measure(&mut self, truth: Pose) -> Option<Seen> {
        let (measured, number) = (self.due(), self.number);
        self.number += 1;
        let draws = self.draw();
        self.begin_jump(measured, &draws);
        if self.is_missing(measured, &draws) {
            return None;
        }
        let measured_ns = self.clock_ns(measured);
        let delay = SpanNs::from_seconds(self.spec.latency_s + self.spec.jitter_s * draws.jitter);
        self.last_arrival = self.last_arrival.max(measured + delay);
        Some(Seen {
            number,
            measured,
            measured_ns,
            arrives: self.last_arrival,
            pose: self.estimate(truth, measured, &draws),
        })
    }

    /// What the estimator's clock shows at a moment of the daemon's, ns.
    pub fn clock_ns(&self, at: TimeNs) -> u64 {
        let offset = math::round(self.spec.clock_offset_s * 1e9) as i64;
        let drift = math::round(at.since(self.begin).0 as f64 * self.spec.clock_drift_ppm * 1e-6) as i64;
        at.0.saturating_add_signed(offset).saturating_add_signed(drift)
    }

    fn draw(&mut self) -> Draws {
        let (spec, dice) = (&self.spec, &mut self.dice);
        let dropped = dice.happens(spec.dropout_probability);
        let burst = dice.happens(spec.burst_probability);
        let jump = dice.happens(spec.jump_probability);
        let jump_direction_rad = math::TAU * dice.uniform();
        let jump_sign = if dice.happens(0.5) { 1.0 } else { -1.0 };
        let jitter = dice.uniform();
        let (x, y) = dice.normal_pair();
        let (heading, _) = dice.normal_pair();
        Draws { dropped, burst, jump, jump_direction_rad, jump_sign, jitter, x, y, heading }
    }

    fn is_missing(&mut self, at: TimeNs, draws: &Draws) -> bool {
        if draws.burst {
            self.burst_until = self.burst_until.max(at + SpanNs::from_seconds(self.spec.burst_length_s));
        }
        let outage_start = self.begin + SpanNs::from_seconds(self.spec.outage_start_s);
        let outage_end = outage_start + SpanNs::from_seconds(self.spec.outage_length_s);
        draws.dropped || at < self.burst_until || (at >= outage_start && at < outage_end)
    }

    /// Where a jump is drawn while another lasts, the new one takes its place.
    fn begin_jump(&mut self, at: TimeNs, draws: &Draws) {
        if draws.jump {
            let (cos, sin) = math::cos_sin(draws.jump_direction_rad);
            self.jump = Jump {
                // One nanosecond more, so that a length of 0 is this pose alone.
                until: at + SpanNs::from_seconds(self.spec.jump_length_s) + SpanNs(1),
                x_m: self.spec.jump_m * cos,
                y_m: self.spec.jump_m * sin,
                heading_rad: self.spec.jump_heading_rad * draws.jump_sign,
            };
        }
    }

    fn estimate(&self, truth: Pose, at: TimeNs, draws: &Draws) -> Pose {
        let point = self.mount.estimator(truth);
        let jump = if at < self.jump.until { self.jump } else { Jump::default() };
        Pose {
            x_m: point.x_m + self.spec.position_sd_m * draws.x + jump.x_m,
            y_m: point.y_m + self.spec.position_sd_m * draws.y + jump.y_m,
            heading_rad: math::wrap(
                point.heading_rad + self.spec.heading_sd_rad * draws.heading + jump.heading_rad,
            ),
        }
    }
}

#[cfg(test)]
#[path = "sensor_tests.rs"]
mod tests;
