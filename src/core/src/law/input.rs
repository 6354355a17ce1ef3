//! What a law is built for, and what it sees.

use crate::geometry::{BodyVelocity, Direction, Pose, TrackingError};
use crate::plan::{Plan, Reference};
use crate::vehicle::{Vehicle, Wheels};
use alloc::sync::Arc;

/// What a law is built for.
#[derive(Clone, Debug)]
pub struct Context {
    /// The machine.
    pub vehicle: Arc<dyn Vehicle>,
    /// The tick's period, s.
    pub period_s: f64,
    /// From a tick to the moment at which its command moves the machine, s.
    pub dead_time_s: f64,
}

/// What lies ahead on the plan.
pub trait Ahead {
    /// The reference `seconds` (at least 0) after the one of this tick, the plan's time running as fast as it does now.
    fn reference(&self, seconds: f64) -> Reference;
}

/// What a law sees. Pose and reference are those of the moment at which this tick's command moves the machine.
#[derive(Clone, Copy)]
pub struct Input<'a> {
    /// What is wanted.
    pub reference: Reference,
    /// Where the chassis point is.
    pub pose: Pose,
    /// Direction of the pose's heading.
    pub direction: Direction,
    /// Pose minus reference, in the reference's frame.
    pub error: TrackingError,
    /// What lies ahead.
    pub ahead: &'a dyn Ahead,
    /// The last command.
    pub wheels: Wheels,
    /// The body velocity that the last command amounts to.
    pub motion: BodyVelocity,
    /// The time over which the limits count in this tick, s.
    pub seconds: f64,
}

impl<'a> Input<'a> {
    /// An input from a reference with what lies ahead of it, a pose, and the last command with its motion.
    pub fn new(
        reference: Reference,
        ahead: &'a dyn Ahead,
        pose: Pose,
        (wheels, motion): (Wheels, BodyVelocity),
        seconds: f64,
    ) -> Self {
        let error = TrackingError::between(pose, reference.pose, reference.direction);
        let direction = Direction::of(pose.heading_rad);
        Self { reference, pose, direction, error, ahead, wheels, motion, seconds }
    }

    /// Reference minus pose, in the robot's frame, as Kanayama defines the error: (e_x, e_y), m.
    pub fn robot_frame_error_m(&self) -> (f64, f64) {
        let (reference, pose) = (self.reference.pose, self.pose);
        self.direction.into_frame(reference.x_m - pose.x_m, reference.y_m - pose.y_m)
    }
}

impl core::fmt::Debug for Input<'_> {
    fn fmt(&self, f: &mut core::fmt::Formatter<'_>) -> core::fmt::Result {
        f.debug_struct("Input")
            .field("reference", &self.reference)
            .field("pose", &self.pose)
            .field("motion", &self.motion)
            .finish_non_exhaustive()
    }
}

/// The way ahead on one plan, from a place on its clock.
#[derive(Clone, Copy, Debug)]
pub struct OnPlan<'a> {
    /// The plan.
    pub plan: &'a Plan,
    /// The place, s.
    pub t_s: f64,
    /// How fast the plan's time runs.
    pub rate: f64,
}

impl Ahead for OnPlan<'_> {
    fn reference(&self, seconds: f64) -> Reference {
        let reference = self.plan.at(self.t_s + self.rate * seconds, &mut 0);
        if self.rate == 1.0 { reference } else { reference.slowed(self.rate, 0.0) }
    }
}

/// A way ahead that goes on with the reference's motion: for what looks at a law without a plan.
#[derive(Clone, Copy, Debug)]
pub struct Steady(pub Reference);

impl Ahead for Steady {
    fn reference(&self, seconds: f64) -> Reference {
        let pose = self.0.pose.moved(self.0.velocity, seconds);
        Reference { pose, direction: Direction::of(pose.heading_rad), ..self.0 }
    }
}
