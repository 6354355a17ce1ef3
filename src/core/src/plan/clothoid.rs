//! Clothoids: the curvature changes steadily along the way, so that a steered machine turns its wheel steadily.

use super::file::RawSegment;
use super::path::{self, Bend, Geometry, MAX_CURVATURE_1_M, MAX_LENGTH_M};
use super::profile::{ACCEL, DECEL, END_SPEED, JERK, SPEED, START_SPEED};
use super::segment::{Joint, Kind, Stretch};
use crate::geometry::{Direction, Pose};
use crate::keys::{Bound, Key, Problem, Values};
use crate::math;
use crate::math::fresnel::{TURNING_A, TURNING_B, turning};
use alloc::boxed::Box;
use alloc::format;
use alloc::vec;
use alloc::vec::Vec;

/// Most turning one way and the other together, rad.
const MAX_TURN_RAD: f64 = 1000.0;

const CURVATURE: Bound = Bound::within(-MAX_CURVATURE_1_M, MAX_CURVATURE_1_M);

pub(super) const CLOTHOID: Kind = Kind {
    keys: &[
        Key::required(
            "curvature_start_1_m",
            "1/m",
            CURVATURE,
            "curvature at the beginning, positive where the machine steers to the left, in reverse too",
        ),
        Key::required("curvature_end_1_m", "1/m", CURVATURE, "curvature at the end, likewise"),
        Key::required("length_m", "m", Bound::positive(MAX_LENGTH_M), "length"),
        SPEED,
        END_SPEED,
        START_SPEED,
        ACCEL,
        DECEL,
        JERK,
    ],
    ..Kind::path("clothoid", build)
};

fn build(raw: &RawSegment, values: &Values, joint: Joint) -> Result<Box<dyn Stretch>, Vec<Problem>> {
    let (begin, end) = (values.get("curvature_start_1_m"), values.get("curvature_end_1_m"));
    let length = values.get("length_m");
    let turning = 0.5 * length * (begin.abs() + end.abs());
    if turning > MAX_TURN_RAD {
        let what =
            format!("turns by {turning} rad with these curvatures; at most {MAX_TURN_RAD} rad are allowed");
        return Err(vec![Problem::new("length_m", what)]);
    }
    path::build(raw, values, Clothoid::new(joint.pose, path::sign(raw), begin, end, length))
}

/// Where a piece begins.
#[derive(Clone, Copy, Debug)]
struct Node {
    x_m: f64,
    y_m: f64,
    direction: Direction,
    turn_1_m: f64,
}

/// Pieces of one length, each short enough for [`turning`]; no tick sums more than one of them.
#[derive(Debug)]
struct Clothoid {
    start_heading_rad: f64,
    /// 1 forward, −1 in reverse.
    sign: f64,
    length: f64,
    bend: Bend,
    piece_m: f64,
    nodes: Box<[Node]>,
}

impl Clothoid {
    fn new(start: Pose, sign: f64, curvature_start: f64, curvature_end: f64, length: f64) -> Self {
        // In reverse the heading turns the other way for the same curvature.
        let bend = Bend {
            turn_1_m: sign * curvature_start,
            turn_rate_1_m2: sign * (curvature_end - curvature_start) / length,
        };
        let sharpest = curvature_start.abs().max(curvature_end.abs());
        let pieces = (sharpest * length / TURNING_A)
            .max(math::sqrt(bend.turn_rate_1_m2.abs() * length * length / TURNING_B));
        // Rounded up, and one more in case the quotient was rounded down; at most 1000 rad make some 8000.
        let pieces = pieces as usize + 1;
        let mut clothoid = Self {
            start_heading_rad: start.heading_rad,
            sign,
            length,
            bend,
            piece_m: length / pieces as f64,
            nodes: Box::default(),
        };
        let (mut x_m, mut y_m) = (start.x_m, start.y_m);
        let nodes = (0..pieces).map(|index| {
            let at = clothoid.piece_m * index as f64;
            let node = Node {
                x_m,
                y_m,
                direction: Direction::of(clothoid.heading(at)),
                turn_1_m: clothoid.turn_1_m(at),
            };
            (x_m, y_m) = clothoid.from(&node, clothoid.piece_m);
            node
        });
        let nodes: Vec<Node> = nodes.collect();
        clothoid.nodes = nodes.into();
        clothoid
    }

    /// The heading `at` metres from the beginning, not wrapped.
    fn heading(&self, at: f64) -> f64 {
        self.start_heading_rad + at * (self.bend.turn_1_m + 0.5 * at * self.bend.turn_rate_1_m2)
    }

    fn turn_1_m(&self, at: f64) -> f64 {
        self.bend.turn_1_m + at * self.bend.turn_rate_1_m2
    }

    /// The position `way` metres behind the beginning of a piece.
    fn from(&self, node: &Node, way: f64) -> (f64, f64) {
        let (along, across) = turning(node.turn_1_m * way, self.bend.turn_rate_1_m2 * way * way);
        let way = self.sign * way;
        let (x, y) = node.direction.out_of_frame(way * along, way * across);
        (node.x_m + x, node.y_m + y)
    }
}

impl Geometry for Clothoid {
    fn length_m(&self) -> f64 {
        self.length
    }

    fn place(&self, at: f64) -> (Pose, Direction, Bend) {
        let index = ((at / self.piece_m) as usize).min(self.nodes.len() - 1);
        let (x_m, y_m) = self.from(&self.nodes[index], at - self.piece_m * index as f64);
        let heading = self.heading(at);
        (Pose::new(x_m, y_m, math::wrap(heading)), Direction::of(heading), self.bend(at))
    }

    fn bend(&self, at: f64) -> Bend {
        Bend { turn_1_m: self.turn_1_m(at), ..self.bend }
    }

    fn looks(&self) -> u32 {
        // The curvature is linear: both ends tell the sharpest, and a share between tells where a speed is too great.
        33
    }
}
