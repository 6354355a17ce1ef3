//! The pose carried forward: from the moment at which it was true to the moment at which this tick's command acts, along
//! the exact arcs of the commands that were and will be in force until then. A command is in force from its tick, the
//! dead time later, until the next one's. Between two poses the same arcs tell where the second should be: one that is
//! far from there is a jump of the estimator (a relocalisation), which is slewed in or stops the machine.

use super::average::Average;
use super::intake::Estimate;
use super::params::Params;
use crate::geometry::{BodyVelocity, Pose};
use crate::law::Rested;
use crate::math;
use crate::time::{SpanNs, TimeNs};
use alloc::vec::Vec;

/// Commands outside ticks (stops) that the memory has room for beside those of ticks.
const SPARE: usize = 16;

/// A motion that began to be commanded at a moment.
#[derive(Clone, Copy, Debug)]
struct Commanded {
    at: TimeNs,
    motion: BodyVelocity,
}

/// The motions commanded lately, oldest first from `next` on.
#[derive(Debug)]
struct Memory {
    ring: Vec<Commanded>,
    next: usize,
}

impl Memory {
    fn new(length: SpanNs, rate_hz: f64) -> Self {
        let rest = Commanded { at: TimeNs(0), motion: BodyVelocity::ZERO };
        let ticks = math::ceil(length.seconds() * rate_hz) as usize;
        Self { ring: alloc::vec![rest; ticks + SPARE], next: 0 }
    }

    fn push(&mut self, commanded: Commanded) {
        self.ring[self.next] = commanded;
        self.next = (self.next + 1) % self.ring.len();
    }

    /// The motion commanded `back` commands ago; 1 is the newest.
    fn ago(&self, back: usize) -> Commanded {
        self.ring[(self.next + self.ring.len() - back) % self.ring.len()]
    }

    /// `pose` moved along what was commanded from one moment to another, later one. What is older than the memory counts
    /// as its oldest command.
    fn moved(&self, pose: Pose, from: TimeNs, to: TimeNs) -> Pose {
        let oldest = self.ring.len();
        let mut back = (1..oldest).find(|back| self.ago(*back).at <= from).unwrap_or(oldest);
        let (mut pose, mut reached) = (pose, from);
        while reached < to {
            let until = if back > 1 { self.ago(back - 1).at.clamp(reached, to) } else { to };
            pose = moved(pose, self.ago(back).motion, until.since(reached));
            reached = until;
            if back == 1 {
                break;
            }
            back -= 1;
        }
        pose
    }
}

fn moved(pose: Pose, motion: BodyVelocity, time: SpanNs) -> Pose {
    if motion.is_zero() || time == SpanNs(0) { pose } else { pose.moved(motion, time.seconds()) }
}

/// A pose that jumped: how far the pose used is from it, with what is left of earlier jumps.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Jump {
    pub(super) distance_m: f64,
    pub(super) heading_rad: f64,
}

/// Carries poses forward.
#[derive(Debug)]
pub(super) struct Carrier {
    memory: Memory,
    dead_time: SpanNs,
    /// The newest pose, and the moment whose command was in force when it was true.
    base: Option<(Pose, TimeNs)>,
    /// That pose carried forward, and up to which moment's command.
    carried: (Pose, TimeNs),
    /// What of a jump is not slewed in yet: pose used minus pose carried. x and y in m, heading in rad.
    offset: Pose,
    /// The last jump since the last question.
    jump: Option<Jump>,
    average: Average,
}

/// What the machine was about when a pose came.
#[derive(Clone, Copy, Debug)]
pub(super) struct Circumstances {
    /// The machine is driven, so that a jump has to be slewed in.
    pub(super) moving: bool,
    /// The pose comes from the same source as the one before.
    pub(super) same: bool,
    /// The reference rests, so that poses are averaged.
    pub(super) resting: bool,
}

impl Carrier {
    pub(super) fn new(params: &Params) -> Self {
        Self {
            memory: Memory::new(params.pose_timeout + params.dead_time, params.rate_hz),
            dead_time: params.dead_time,
            base: None,
            carried: (Pose::default(), TimeNs(0)),
            offset: Pose::default(),
            jump: None,
            average: Average::default(),
        }
    }

    /// Takes in the motion that is commanded from now on.
    pub(super) fn commanded(&mut self, at: TimeNs, motion: BodyVelocity) {
        self.memory.push(Commanded { at, motion });
    }

    /// Takes in a new pose.
    pub(super) fn seen(&mut self, estimate: &Estimate, at: TimeNs, about: Circumstances, params: &Params) {
        let from = TimeNs(estimate.stamp.0.saturating_sub(self.dead_time.0));
        let apart = self.base.map_or(SpanNs(0), |(_, since)| from.since(since));
        // Under way another source's pose is held against the last one's as well: the machine cannot be in two places.
        let expected = self.base.filter(|_| about.moving);
        let expected = expected.map(|(pose, since)| self.memory.moved(pose, since, from));
        let jumped = expected.is_some_and(|expected| self.take_jump(expected, estimate.pose, params));
        let averages = about.resting && about.same && params.carry_forward && !jumped;
        let pose = match expected.filter(|_| averages) {
            Some(expected) => self.average.with(expected, estimate, apart, params),
            None => {
                self.average.begin(estimate, apart, params);
                estimate.pose
            }
        };
        if !about.moving {
            self.offset = Pose::default();
        }
        self.base = Some((pose, from));
        self.carried = (self.memory.moved(pose, from, at), at.max(from));
    }

    /// How well the machine knows where it rests.
    pub(super) fn rested(&self) -> Rested {
        self.average.rested()
    }

    /// Whether the pose seen is a jump; then it is slewed in from now on. A jump adds to what is not slewed in yet: a machine
    /// that stands still while it is commanded to move jumps back with every pose, and must not be taken for one that moves.
    fn take_jump(&mut self, expected: Pose, seen: Pose, params: &Params) -> bool {
        let (x_m, y_m) = (expected.x_m - seen.x_m, expected.y_m - seen.y_m);
        let turn_rad = math::wrap(expected.heading_rad - seen.heading_rad);
        if math::length(x_m, y_m) <= params.jump_distance_m && turn_rad.abs() <= params.jump_heading_rad {
            return false;
        }
        let Pose { x_m: left_x_m, y_m: left_y_m, heading_rad: left_rad } = self.offset;
        self.offset = Pose::new(left_x_m + x_m, left_y_m + y_m, math::wrap(left_rad + turn_rad));
        let left = self.offset;
        self.jump =
            Some(Jump { distance_m: math::length(left.x_m, left.y_m), heading_rad: left.heading_rad.abs() });
        true
    }

    /// The pose at the moment at which a command of `at` acts, a jump slewed in as far as `seconds` allow; the pose as it
    /// was seen, `raw`, if poses are not to be carried forward.
    pub(super) fn at(&mut self, at: TimeNs, raw: Pose, seconds: f64, params: &Params) -> Pose {
        let (carried, reached) = self.carried;
        self.carried = (self.memory.moved(carried, reached, at), at.max(reached));
        let pose = if params.carry_forward { self.carried.0 } else { raw };
        self.slew(seconds, params);
        if !self.is_slewing() {
            return pose;
        }
        let Pose { x_m, y_m, heading_rad } = self.offset;
        Pose::new(pose.x_m + x_m, pose.y_m + y_m, math::wrap(pose.heading_rad + heading_rad))
    }

    /// True while a jump is being slewed in.
    pub(super) fn is_slewing(&self) -> bool {
        self.offset != Pose::default()
    }

    /// The last jump since the last question, if it is too great to be slewed in.
    pub(super) fn take_too_great(&mut self, params: &Params) -> Option<Jump> {
        self.jump.take().filter(|jump| {
            jump.distance_m > params.jump_stop_distance_m || jump.heading_rad > params.jump_stop_heading_rad
        })
    }

    fn slew(&mut self, seconds: f64, params: &Params) {
        if !self.is_slewing() {
            return;
        }
        let Pose { x_m, y_m, heading_rad } = self.offset;
        let (length, step) = (math::length(x_m, y_m), params.jump_slew_m_s * seconds);
        let left = if length > step { 1.0 - step / length } else { 0.0 };
        let turn = params.jump_slew_rad_s * seconds;
        let heading_rad = heading_rad - heading_rad.clamp(-turn, turn);
        self.offset = Pose::new(left * x_m, left * y_m, heading_rad);
    }
}
