//! Plant and estimator together, in simulated time.

use crate::plant::Plant;
use crate::sensor::{PoseSensor, Seen};
use crate::spec::RobotSpec;
use std::collections::VecDeque;
use std::sync::Arc;
use trackhold_core::geometry::{Mount, Pose};
use trackhold_core::keys::Problem;
use trackhold_core::time::TimeNs;
use trackhold_core::vehicle::{Vehicle, Wheels};

/// A robot that is given wheel commands and gives poses.
///
/// Where a measurement and a command fall on one moment, the measurement comes first; it sees the same pose either way.
#[derive(Clone, Debug)]
pub struct Robot {
    plant: Plant,
    sensor: PoseSensor,
    /// Measured, not yet arrived; in order of arrival.
    under_way: VecDeque<Seen>,
    missing: u64,
}

impl Robot {
    /// A robot at rest at `start`, which measures for the first time at `at`. `site_mount` says where the estimator sits
    /// if the specification does not.
    ///
    /// # Errors
    /// If the specification does not hold for this machine.
    pub fn new(
        spec: &RobotSpec,
        vehicle: Arc<dyn Vehicle>,
        site_mount: Mount,
        start: Pose,
        at: TimeNs,
    ) -> Result<Self, Vec<Problem>> {
        let plant = Plant::new(spec, vehicle, start, at)?;
        let sensor = PoseSensor::new(spec.sensor, spec.seed, spec.mount_or(site_mount), at);
        Ok(Self { plant, sensor, under_way: VecDeque::new(), missing: 0 })
    }

    /// Gives a command; see [`Plant::command`].
    pub fn command(&mut self, at: TimeNs, wheels: &Wheels) {
        self.advance(at);
        self.plant.command(at, wheels);
    }

    /// Moves on to a moment and takes all measurements due until then, that moment included. Returns the true pose.
    pub fn advance(&mut self, to: TimeNs) -> Pose {
        while self.sensor.due() <= to {
            let truth = self.plant.advance(self.sensor.due());
            match self.sensor.measure(truth) {
                Some(seen) => self.under_way.push_back(seen),
                None => self.missing += 1,
            }
        }
        self.plant.advance(to)
    }

    /// Moves on to `until` and returns the next pose that arrives by then, that moment included; in order of arrival.
    pub fn next_pose(&mut self, until: TimeNs) -> Option<Seen> {
        self.advance(until);
        if self.under_way.front()?.arrives <= until { self.under_way.pop_front() } else { None }
    }

    /// When something happens next by itself: a measurement or an arrival.
    pub fn due(&self) -> TimeNs {
        self.under_way.front().map_or(self.sensor.due(), |seen| seen.arrives.min(self.sensor.due()))
    }

    /// How many poses dropouts have swallowed so far.
    pub fn missing(&self) -> u64 {
        self.missing
    }

    /// The chassis.
    pub fn plant(&self) -> &Plant {
        &self.plant
    }

    /// The estimator.
    pub fn sensor(&self) -> &PoseSensor {
        &self.sensor
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::testing::differential;

    fn robot(text: &str) -> Robot {
        let spec = RobotSpec::parse(text, "robot.toml").unwrap();
        Robot::new(&spec, differential(), Mount::default(), Pose::default(), TimeNs(0)).unwrap()
    }

    #[test]
    fn an_ideal_robot_has_a_pose_at_every_tick_of_its_rate_before_the_command() {
        let mut robot = robot("[sensor]\nrate_hz = 50");
        let mut truth = Pose::default();
        for k in 0..200_u64 {
            let tick = TimeNs(k * 20_000_000);
            let seen = robot.next_pose(tick).unwrap();
            assert_eq!((seen.number, seen.measured, seen.arrives, seen.pose), (k, tick, tick, truth));
            assert_eq!(robot.next_pose(tick), None);
            let wheels = [4.0 + (k % 3) as f64, 5.0, 0.0, 0.0];
            robot.command(tick, &wheels);
            truth = truth.moved(differential().body(&wheels), 0.02);
        }
    }

    #[test]
    fn a_late_pose_shows_where_the_robot_was() {
        let mut robot = robot("[sensor]\nrate_hz = 10\nlatency_s = 0.25");
        robot.command(TimeNs(0), &[10.0, 10.0, 0.0, 0.0]);
        let mut seen = Vec::new();
        while let Some(next) = robot.next_pose(TimeNs(500_000_000)) {
            seen.push(next);
        }
        let expected = [(0, 0.0), (100_000_000, 0.1), (200_000_000, 0.2)];
        assert_eq!(seen.len(), 3);
        for (seen, (measured_ns, x_m)) in seen.iter().zip(expected) {
            assert_eq!((seen.measured_ns, seen.arrives.0), (measured_ns, measured_ns + 250_000_000));
            assert!((seen.pose.x_m - x_m).abs() < 1e-15);
        }
        assert_eq!(robot.due(), TimeNs(550_000_000));
    }

    #[test]
    fn what_dropouts_swallow_is_counted() {
        let mut robot = robot("[sensor]\nrate_hz = 10\noutage_start_s = 0.3\noutage_length_s = 0.4");
        robot.advance(TimeNs(2_000_000_000));
        assert_eq!(robot.missing(), 4);
    }
}
