//! What to follow: segments, timing, the reference at plan time t.
//!
//! A plan arrives as bytes and is compiled once, away from the loop, by a pure function; what comes out answers "where
//! should the chassis point be at plan time t?" without allocating. A new segment kind is one new file and one line in
//! [`segment::KINDS`].

mod brake;
pub mod check;
mod clothoid;
mod compact;
mod compile;
mod curve;
mod file;
mod lookup;
mod nearest;
mod nurbs;
mod path;
mod pivot;
mod points;
mod profile;
pub mod retime;
mod samples;
pub mod segment;
mod spans;
mod spline;
mod stated;
mod timing;

pub use compact::pack;
pub use compile::compile;
pub use file::FORMAT;

use crate::geometry::{BodyVelocity, Direction, Pose};
use crate::time::SpanNs;
use alloc::boxed::Box;
use alloc::string::String;
use alloc::vec::Vec;
use brake::Brake;
use segment::{Progress, Stretch};
use trackhold_proto::blob::Digest;

/// What is wanted at one instant of the plan.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Reference {
    /// Pose of the chassis point; the heading is wrapped.
    pub pose: Pose,
    /// Direction of the pose's heading.
    pub direction: Direction,
    /// Body velocity.
    pub velocity: BodyVelocity,
    /// Curvature of the path, positive where the heading turns left as the machine moves ahead, 1/m. On a dwell that of
    /// what comes next; 0 on a pivot.
    pub curvature_1_m: f64,
    /// What a steered machine steers for while it stands, 1/m: the curvature, or ±∞ for a turn on the spot to the left
    /// (right). A dwell has that of what comes next, so that the wheels turn while the machine rests; the rest at a plan's
    /// end holds what was last.
    pub rest_curvature_1_m: f64,
    /// Change of the curvature per metre of progress, which counts up in reverse too, 1/m². 0 on lines, arcs and pivots,
    /// and where a plan rests before its beginning or after its end.
    pub curvature_rate_1_m2: f64,
    /// Rate of the speed, m/s².
    pub accel_m_s2: f64,
    /// Rate of the turn rate, rad/s².
    pub turn_accel_rad_s2: f64,
}

impl Reference {
    /// A reference that rests at a pose.
    pub fn at_rest(pose: Pose, curvature_1_m: f64) -> Self {
        Self {
            pose,
            direction: Direction::of(pose.heading_rad),
            velocity: BodyVelocity::ZERO,
            curvature_1_m,
            rest_curvature_1_m: curvature_1_m,
            curvature_rate_1_m2: 0.0,
            accel_m_s2: 0.0,
            turn_accel_rad_s2: 0.0,
        }
    }

    /// At rest in the same place, steered for the same.
    pub fn resting(self) -> Self {
        Self { rest_curvature_1_m: self.rest_curvature_1_m, ..Self::at_rest(self.pose, self.curvature_1_m) }
    }

    /// The same place, passed at `rate` times the speed while the rate itself changes by `rate_change_1_s`.
    pub fn slowed(self, rate: f64, rate_change_1_s: f64) -> Self {
        Self {
            velocity: self.velocity.scaled(rate),
            accel_m_s2: self.accel_m_s2 * rate * rate + self.velocity.speed_m_s * rate_change_1_s,
            turn_accel_rad_s2: self.turn_accel_rad_s2 * rate * rate
                + self.velocity.turn_rate_rad_s * rate_change_1_s,
            ..self
        }
    }
}

/// A compiled plan. Immutable.
#[derive(Debug)]
pub struct Plan {
    id: String,
    revision: u32,
    open: bool,
    /// The start that the plan file states; the first segment begins there within the tolerance.
    start: Pose,
    begin: Option<SpanNs>,
    digest: Digest,
    travel: segment::Travel,
    slots: Vec<Slot>,
    duration_s: f64,
    length_m: f64,
    end: Reference,
    milestones: Vec<nearest::Milestone>,
}

/// A segment in its place on the plan's clock.
#[derive(Debug)]
struct Slot {
    kind: &'static str,
    begin_s: f64,
    stretch: Box<dyn Stretch>,
    brake: Option<Brake>,
}

/// A segment of a compiled plan, as checks, retiming and pictures look at it.
#[derive(Clone, Copy, Debug)]
pub struct Placed<'a> {
    /// Its index in the plan's list of segments.
    pub index: usize,
    /// Its kind's name in the plan file.
    pub kind: &'static str,
    /// Begin on the plan's clock, s.
    pub begin_s: f64,
    /// Duration, the braking at a closed plan's end included, s.
    pub duration_s: f64,
    /// Its geometry, and its timing as the plan file states it (without the braking at a closed plan's end).
    pub stretch: &'a dyn Stretch,
}

impl Slot {
    /// The reference `t_s` after the segment's beginning.
    fn at(&self, t_s: f64) -> Reference {
        match &self.brake {
            Some(brake) if t_s >= brake.from_s => self.stretch.at_progress(brake.progress(t_s)),
            _ => self.stretch.at(t_s),
        }
    }

    fn duration_s(&self) -> f64 {
        self.brake.as_ref().map_or_else(|| self.stretch.duration_s(), |brake| brake.end_s)
    }
}

impl Plan {
    /// The plan's id.
    pub fn id(&self) -> &str {
        &self.id
    }

    /// The plan's revision.
    pub fn revision(&self) -> u32 {
        self.revision
    }

    /// True if more segments are expected: it does not brake at its end, and running dry is a guard's matter.
    pub fn is_open(&self) -> bool {
        self.open
    }

    /// The plan time at which it goes on with the clock of the plan it continues; none for a plan of its own. The
    /// times that the methods here take and give count from the beginning of this plan all the same.
    pub fn continues_at(&self) -> Option<SpanNs> {
        self.begin
    }

    /// What the clock of its run shows where it begins.
    pub fn begin(&self) -> SpanNs {
        self.begin.unwrap_or_default()
    }

    /// What the clock of its run shows where it ends.
    pub fn end(&self) -> SpanNs {
        self.begin() + self.duration()
    }

    /// SHA-256 of the bytes it was compiled from.
    pub fn digest(&self) -> Digest {
        self.digest
    }

    /// Duration, braking at the end included, s.
    pub fn duration_s(&self) -> f64 {
        self.duration_s
    }

    /// Duration to the next whole nanosecond.
    pub fn duration(&self) -> SpanNs {
        SpanNs::from_seconds(self.duration_s)
    }

    /// Length of the path, pivots not counted, m.
    pub fn length_m(&self) -> f64 {
        self.length_m
    }

    /// Begin of each segment on the plan's clock, s.
    pub fn segment_begins(&self) -> impl Iterator<Item = f64> {
        self.slots.iter().map(|slot| slot.begin_s)
    }

    /// The segments in their order.
    pub fn stretches(&self) -> impl Iterator<Item = Placed<'_>> {
        self.slots.iter().enumerate().map(|(index, slot)| Placed {
            index,
            kind: slot.kind,
            begin_s: slot.begin_s,
            duration_s: slot.duration_s(),
            stretch: &*slot.stretch,
        })
    }

    /// Which ways the plan drives.
    pub fn travel(&self) -> segment::Travel {
        self.travel
    }

    /// The reference at plan time `t_s`. Before the beginning it rests at the first pose; after the end of a closed plan
    /// at the last one; an open plan goes on along its last curvature. At a joint the later segment counts.
    ///
    /// `cursor` remembers the segment: a lookup near the last one costs the same however long the plan is, any other
    /// O(log n). Any value is valid.
    pub fn at(&self, t_s: f64, cursor: &mut usize) -> Reference {
        if t_s < 0.0 {
            return self.slots[0].at(0.0).resting();
        }
        if t_s >= self.duration_s {
            return self.after_end(t_s - self.duration_s);
        }
        let index = self.slot_at(t_s, *cursor);
        *cursor = index;
        let slot = &self.slots[index];
        slot.at(t_s - slot.begin_s)
    }

    fn after_end(&self, late_s: f64) -> Reference {
        if !self.open {
            return self.end.resting();
        }
        let pose = self.end.pose.moved(self.end.velocity, late_s);
        Reference {
            pose,
            direction: Direction::of(pose.heading_rad),
            curvature_rate_1_m2: 0.0,
            accel_m_s2: 0.0,
            turn_accel_rad_s2: 0.0,
            ..self.end
        }
    }

    fn slot_at(&self, t_s: f64, cursor: usize) -> usize {
        for index in [cursor, cursor.saturating_add(1)] {
            let begun = self.slots.get(index).is_some_and(|slot| slot.begin_s <= t_s);
            if begun && self.slots.get(index + 1).is_none_or(|next| t_s < next.begin_s) {
                return index;
            }
        }
        self.slots.partition_point(|slot| slot.begin_s <= t_s).saturating_sub(1)
    }

    /// The plan time at which the plan passes nearest to `pose`, heading included; of several passages the one nearest to
    /// the plan time `reached_s`. Bounded work, no allocation.
    pub fn nearest_time_s(&self, pose: Pose, reached_s: f64) -> f64 {
        nearest::time_s(self, &self.milestones, pose, reached_s)
    }
}

/// How far along a stretch something is, and how it moves there: metres, or radians on a pivot.
impl Progress {
    /// At rest somewhere on the stretch.
    pub const fn resting(at: f64) -> Self {
        Self { at, rate: 0.0, accel: 0.0 }
    }
}

#[cfg(test)]
mod tests;
