//! Lines and arcs: constant curvature.

use super::file::RawSegment;
use super::path::{self, Bend, Geometry, MAX_LENGTH_M};
use super::profile::{ACCEL, DECEL, END_SPEED, JERK, SPEED, START_SPEED};
use super::segment::{Joint, Kind, Stretch};
use crate::geometry::{Direction, Pose};
use crate::keys::{Bound, Key, Problem, Values};
use crate::math;
use alloc::boxed::Box;
use alloc::format;
use alloc::vec;
use alloc::vec::Vec;

/// Above this radius the chord form is used: the circle form subtracts numbers of the radius' size, m.
const LARGE_RADIUS_M: f64 = 1e3;

const LENGTH: Key = Key::required("length_m", "m", Bound::positive(MAX_LENGTH_M), "length");
const RADIUS: Key = Key::required("radius_m", "m", Bound::positive(MAX_LENGTH_M), "radius");
const TURN: Key = Key::required(
    "turn_rad",
    "rad",
    Bound::within(-1000.0, 1000.0),
    "change of heading, positive to the left, in reverse too",
);

pub(super) const LINE: Kind = Kind {
    keys: &[LENGTH, SPEED, END_SPEED, START_SPEED, ACCEL, DECEL, JERK],
    ..Kind::path("line", |raw, values, joint| build(raw, values, joint, values.get("length_m"), 0.0))
};

pub(super) const ARC: Kind = Kind {
    keys: &[RADIUS, TURN, SPEED, END_SPEED, START_SPEED, ACCEL, DECEL, JERK],
    ..Kind::path("arc", build_arc)
};

fn build_arc(raw: &RawSegment, values: &Values, joint: Joint) -> Result<Box<dyn Stretch>, Vec<Problem>> {
    let turn = values.get("turn_rad");
    let length = values.get("radius_m") * turn.abs();
    if !(length > 0.0 && length <= MAX_LENGTH_M) {
        let what = format!(
            "with radius_m an arc of {length} m; give one of more than 0 and at most {MAX_LENGTH_M} m"
        );
        return Err(vec![Problem::new("turn_rad", what)]);
    }
    build(raw, values, joint, length, turn)
}

fn build(
    raw: &RawSegment,
    values: &Values,
    joint: Joint,
    length: f64,
    turn: f64,
) -> Result<Box<dyn Stretch>, Vec<Problem>> {
    let curve = Curve {
        start: joint.pose,
        direction: Direction::of(joint.pose.heading_rad),
        sign: path::sign(raw),
        length,
        turn_1_m: turn / length,
    };
    path::build(raw, values, curve)
}

#[derive(Debug)]
struct Curve {
    start: Pose,
    direction: Direction,
    /// 1 forward, −1 in reverse.
    sign: f64,
    length: f64,
    /// Change of heading per metre of progress.
    turn_1_m: f64,
}

impl Curve {
    #[inline]
    fn pose(&self, at: f64) -> (Pose, Direction) {
        if self.turn_1_m == 0.0 {
            let way = self.sign * at;
            let (x_m, y_m) =
                (self.start.x_m + way * self.direction.cos, self.start.y_m + way * self.direction.sin);
            return (Pose::new(x_m, y_m, self.start.heading_rad), self.direction);
        }
        let turn = self.turn_1_m * at;
        if self.turn_1_m.abs() * LARGE_RADIUS_M < 1.0 {
            let pose = self.start.along_arc(self.sign * at, turn);
            return (pose, Direction::of(pose.heading_rad));
        }
        let heading = self.start.heading_rad + turn;
        let direction = Direction::of(heading);
        let radius = self.sign / self.turn_1_m;
        let x_m = self.start.x_m + radius * (direction.sin - self.direction.sin);
        let y_m = self.start.y_m + radius * (self.direction.cos - direction.cos);
        (Pose::new(x_m, y_m, math::wrap(heading)), direction)
    }
}

impl Geometry for Curve {
    fn length_m(&self) -> f64 {
        self.length
    }

    #[inline]
    fn place(&self, at: f64) -> (Pose, Direction, Bend) {
        let (pose, direction) = self.pose(at);
        (pose, direction, self.bend(at))
    }

    fn bend(&self, _at: f64) -> Bend {
        Bend { turn_1_m: self.turn_1_m, turn_rate_1_m2: 0.0 }
    }

    fn looks(&self) -> u32 {
        1
    }
}
