//! A simulated node with a stand-in robot: lag, dead time, slip, and an estimator with noise, latency and dropouts.
//!
//! t = 0 is the moment at which the first pose arrives; until then the machine rests. The estimator's clock is compared
//! with the node's once a second, as by an estimator that answers time requests without delay.

use super::world::{Arrival, Arriving, World};
use super::{Observer, Options, Outcome, POSE_SESSION, SimError, simulate_in};
use simrobot::{Robot, RobotSpec, Seen};
use std::sync::Arc;
use trackhold_core::geometry::{Mount, Pose};
use trackhold_core::settings::Settings;
use trackhold_core::time::{SpanNs, TimeNs};
use trackhold_core::vehicle::Vehicle;
use trackhold_proto::journal::ExchangeEvent;
use trackhold_proto::message::{self, Command};

/// If no pose arrives within this time the run begins without, and the start is refused.
const PATIENCE: SpanNs = SpanNs(60_000_000_000);
/// The clocks are compared this often.
const EXCHANGES_APART: SpanNs = SpanNs(1_000_000_000);

/// Runs a plan on a stand-in robot.
///
/// # Errors
/// Why the run could not begin.
pub fn simulate(
    settings: &Settings,
    plan: &[u8],
    options: &Options,
    spec: &RobotSpec,
    observer: &mut impl Observer,
) -> Result<Outcome, SimError> {
    let checked = settings.checked().map_err(SimError::Settings)?;
    let (vehicle, mount) = (checked.vehicle, checked.mount);
    let world = |start| StandIn::new(spec, vehicle, mount, start);
    simulate_in(settings, plan, options, world, observer)
}

/// The stand-in robot as a world.
#[derive(Clone, Debug)]
pub struct StandIn {
    robot: Robot,
    spec: RobotSpec,
    origin: TimeNs,
    /// The pose that was waited for.
    first: Option<Seen>,
    next_exchange: TimeNs,
}

impl StandIn {
    /// A robot that rests at `start` until its first pose has arrived.
    ///
    /// # Errors
    /// If the specification does not hold for this machine.
    pub fn new(
        spec: &RobotSpec,
        vehicle: Arc<dyn Vehicle>,
        mount: Mount,
        start: Pose,
    ) -> Result<Self, SimError> {
        let mut robot = Robot::new(spec, vehicle, mount, start, TimeNs(0)).map_err(SimError::Robot)?;
        let mut origin = TimeNs(0);
        let first = loop {
            let due = robot.due();
            if due > TimeNs(0) + PATIENCE {
                break None;
            }
            origin = due;
            if let Some(seen) = robot.next_pose(due) {
                break Some(seen);
            }
        };
        Ok(Self { robot, spec: spec.clone(), origin, first, next_exchange: origin })
    }

    fn deliver(&mut self, seen: &Seen, deliver: &mut impl FnMut(Arrival)) {
        let pose = message::Pose {
            measured_ns: seen.measured_ns,
            x_m: seen.pose.x_m,
            y_m: seen.pose.y_m,
            heading_rad: seen.pose.heading_rad,
            position_sd_m: self.spec.sensor.position_sd_m,
            heading_sd_rad: self.spec.sensor.heading_sd_rad,
        };
        deliver(Arrival::pose(seen.arrives.0, seen.number + 1, pose));
        if seen.arrives >= self.next_exchange {
            self.next_exchange = seen.arrives + EXCHANGES_APART;
            let its_ns = self.robot.sensor().clock_ns(seen.arrives);
            let exchange = ExchangeEvent {
                session: POSE_SESSION,
                request_sent_ns: seen.arrives.0,
                request_received_ns: its_ns,
                reply_sent_ns: its_ns,
                reply_received_ns: seen.arrives.0,
            };
            deliver(Arrival { received_ns: seen.arrives.0, what: Arriving::Exchange(exchange) });
        }
    }
}

impl World for StandIn {
    const EXACT: bool = false;

    fn origin(&self) -> TimeNs {
        self.origin
    }

    fn advance(&mut self, to: TimeNs, deliver: &mut impl FnMut(Arrival)) {
        while let Some(seen) = self.first.take().or_else(|| self.robot.next_pose(to)) {
            self.deliver(&seen, deliver);
        }
    }

    fn command(&mut self, at: TimeNs, command: &Command) {
        self.robot.command(at, &command.wheels);
    }

    fn truth_at(&mut self, at: TimeNs) -> Pose {
        self.robot.advance(at)
    }
}
