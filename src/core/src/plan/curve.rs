//! Lines and arcs: constant curvature, constant acceleration.

use super::Reference;
use super::file::RawSegment;
use super::segment::{Joint, Kind, Progress, Stretch, Travel, Uniform};
use crate::geometry::{BodyVelocity, Direction, Pose};
use crate::keys::{Bound, Key, Problem, Values};
use crate::math;
use crate::vehicle::{Motion, Vehicle};
use alloc::boxed::Box;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;

/// Longest segment, m.
const MAX_LENGTH_M: f64 = 1e5;

/// Above this radius the chord form is used: the circle form subtracts numbers of the radius' size, m.
const LARGE_RADIUS_M: f64 = 1e3;

const SPEED: Key = Key::required(
    "speed_m_s",
    "m/s",
    Bound::within(0.0, 30.0),
    "speed from the segment's first instant; in reverse too a positive number",
);

const END_SPEED: Key = Key::optional(
    "end_speed_m_s",
    "m/s",
    Bound::within(0.0, 30.0),
    "speed at the end, reached at constant acceleration; without it the speed stays",
);

pub(super) const LINE: Kind = Kind {
    name: "line",
    keys: &[Key::required("length_m", "m", Bound::positive(MAX_LENGTH_M), "length"), SPEED, END_SPEED],
    reversible: true,
    has_points: false,
    build: |raw, values, joint| build(raw, values, joint, values.get("length_m"), 0.0),
};

pub(super) const ARC: Kind = Kind {
    name: "arc",
    keys: &[
        Key::required("radius_m", "m", Bound::positive(MAX_LENGTH_M), "radius"),
        Key::required(
            "turn_rad",
            "rad",
            Bound::within(-1000.0, 1000.0),
            "change of heading, positive to the left, in reverse too",
        ),
        SPEED,
        END_SPEED,
    ],
    reversible: true,
    has_points: false,
    build: build_arc,
};

fn build_arc(raw: &RawSegment, values: &Values, joint: Joint) -> Result<Box<dyn Stretch>, Vec<Problem>> {
    let turn = values.get("turn_rad");
    let length = values.get("radius_m") * turn.abs();
    if !(length > 0.0 && length <= MAX_LENGTH_M) {
        let what = alloc::format!(
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
    let begin = values.get("speed_m_s");
    let end = values.find("end_speed_m_s").unwrap_or(begin);
    if begin + end == 0.0 {
        return Err(vec![Problem::new("speed_m_s", "0 m/s at both ends never gets anywhere; give a speed")]);
    }
    Ok(Box::new(Curve {
        start: joint.pose,
        direction: Direction::of(joint.pose.heading_rad),
        sign: if raw.reverse { -1.0 } else { 1.0 },
        turn_1_m: turn / length,
        timing: Uniform::new(length, begin, end),
    }))
}

#[derive(Debug)]
struct Curve {
    start: Pose,
    direction: Direction,
    /// 1 forward, −1 in reverse.
    sign: f64,
    /// Change of heading per metre of progress.
    turn_1_m: f64,
    timing: Uniform,
}

impl Curve {
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

    fn curvature_1_m(&self) -> f64 {
        self.sign * self.turn_1_m
    }
}

impl Stretch for Curve {
    fn duration_s(&self) -> f64 {
        self.timing.duration_s()
    }

    fn extent(&self) -> f64 {
        self.timing.extent()
    }

    fn path_length_m(&self) -> f64 {
        self.timing.extent()
    }

    fn timing(&self, t_s: f64) -> Progress {
        self.timing.at(t_s)
    }

    fn at_progress(&self, progress: Progress) -> Reference {
        let (pose, direction) = self.pose(progress.at);
        Reference {
            pose,
            direction,
            velocity: BodyVelocity {
                speed_m_s: self.sign * progress.rate,
                turn_rate_rad_s: self.turn_1_m * progress.rate,
            },
            curvature_1_m: self.curvature_1_m(),
            accel_m_s2: self.sign * progress.accel,
            turn_accel_rad_s2: self.turn_1_m * progress.accel,
        }
    }

    fn travel(&self) -> Travel {
        Travel { forward: self.sign > 0.0, reverse: self.sign < 0.0 }
    }

    fn brake_decel(&self, vehicle: &dyn Vehicle) -> f64 {
        vehicle.path_accel_m_s2(self.turn_1_m)
    }

    fn brake_from_s(&self, exit: f64, decel: f64) -> Option<f64> {
        self.timing.brake_from_s(exit, decel)
    }

    fn first_excess(&self, vehicle: &dyn Vehicle) -> Option<(f64, String)> {
        let (at_s, speed_m_s) = self.timing.fastest();
        let motion = Motion::Along { speed_m_s, curvature_1_m: self.curvature_1_m() };
        vehicle.excess(motion).map(|excess| (at_s, excess))
    }
}
