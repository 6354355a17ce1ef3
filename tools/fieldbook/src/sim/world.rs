//! What a simulated node moves in: the ideal robot, and what every other one has to give.

use super::{POSE_SESSION, is_plain};
use trackhold_core::geometry::{BodyVelocity, Mount, Pose};
use trackhold_core::node::Event;
use trackhold_core::time::TimeNs;
use trackhold_proto::journal::{ExchangeEvent, PoseEvent};
use trackhold_proto::message::{self, Command};

/// Something that reaches the node between ticks.
#[derive(Clone, Copy, Debug)]
pub struct Arrival {
    /// When it arrives, ns in the daemon's clock.
    pub received_ns: u64,
    /// What arrives.
    pub what: Arriving,
}

/// What can arrive between ticks.
#[derive(Clone, Copy, Debug)]
pub enum Arriving {
    /// A pose.
    Pose(PoseEvent),
    /// A completed exchange of stamps with the estimator.
    Exchange(ExchangeEvent),
}

impl Arrival {
    /// A pose of the simulated estimator.
    pub fn pose(received_ns: u64, sequence: u64, pose: message::Pose) -> Self {
        let event = PoseEvent { session: POSE_SESSION, sequence, received_ns, pose };
        Self { received_ns, what: Arriving::Pose(event) }
    }

    /// The event for the node.
    pub fn into_event(self) -> Event {
        match self.what {
            Arriving::Pose(event) => Event::Pose(event),
            Arriving::Exchange(event) => Event::Exchange(event),
        }
    }
}

/// A machine with its estimator.
pub trait World {
    /// True if the node sees the true pose, without delay.
    const EXACT: bool;

    /// The moment of tick 0 in the daemon's clock.
    fn origin(&self) -> TimeNs;

    /// Moves on to a moment, and delivers what arrives until then, in order.
    fn advance(&mut self, to: TimeNs, deliver: &mut impl FnMut(Arrival));

    /// Takes in a command.
    fn command(&mut self, at: TimeNs, command: &Command);

    /// Moves on to a moment without delivering anything, and tells where the chassis point truly is then.
    fn truth_at(&mut self, at: TimeNs) -> Pose;
}

/// The ideal robot: it does at once and exactly what it is told, and its estimator knows the pose at every tick.
#[derive(Clone, Copy, Debug)]
pub struct Ideal {
    pose: Pose,
    velocity: BodyVelocity,
    at: TimeNs,
    mount: Mount,
    plain: bool,
    sequence: u64,
}

impl Ideal {
    /// At rest at a pose.
    pub fn new(pose: Pose, mount: Mount) -> Self {
        Self { pose, velocity: BodyVelocity::ZERO, at: TimeNs(0), mount, plain: is_plain(mount), sequence: 0 }
    }
}

impl World for Ideal {
    const EXACT: bool = true;

    fn origin(&self) -> TimeNs {
        TimeNs(0)
    }

    fn advance(&mut self, to: TimeNs, deliver: &mut impl FnMut(Arrival)) {
        self.truth_at(to);
        self.sequence += 1;
        let seen = if self.plain { self.pose } else { self.mount.estimator(self.pose) };
        let pose = message::Pose {
            measured_ns: to.0,
            x_m: seen.x_m,
            y_m: seen.y_m,
            heading_rad: seen.heading_rad,
            position_sd_m: 0.0,
            heading_sd_rad: 0.0,
        };
        deliver(Arrival::pose(to.0, self.sequence, pose));
    }

    fn command(&mut self, _at: TimeNs, command: &Command) {
        self.velocity =
            BodyVelocity { speed_m_s: command.speed_m_s, turn_rate_rad_s: command.turn_rate_rad_s };
    }

    fn truth_at(&mut self, at: TimeNs) -> Pose {
        if at > self.at {
            self.pose = self.pose.moved(self.velocity, at.since(self.at).seconds());
            self.at = at;
        }
        self.pose
    }
}
