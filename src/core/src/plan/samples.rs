//! Samples: stamped way-poses in the site frame, joined by cubics with their tangents along the headings.
//!
//! Between two points the position is the cubic Hermite curve through both positions with the velocities
//! (speed × heading direction) at both ends, in time; heading, speed and turn rate follow from it. A point without a
//! speed gets the derivative of the parabola through its neighbours, projected on its heading; so the sign of the speed
//! says which way the machine drives. Where two points share a position the machine turns on the spot (or rests).

use super::Reference;
use super::file::{RawPoint, RawSegment};
use super::segment::{Joint, Kind, Progress, Stretch, Travel};
use crate::geometry::{BodyVelocity, Direction, Pose};
use crate::keys::{Problem, Values};
use crate::math;
use crate::vehicle::{Motion, Vehicle};
use alloc::boxed::Box;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

/// The first point must meet the previous segment's end within this distance, m.
pub(super) const JOIN_DISTANCE_M: f64 = 0.02;
/// The first point must meet the previous segment's end within this angle, rad.
pub(super) const JOIN_HEADING_RAD: f64 = 0.02;

/// Two points closer than this are one place, m.
const SAME_PLACE_M: f64 = 1e-6;
/// Below this speed the curve's own direction is rounding noise; the points' headings are used, m/s.
const SLOW_M_S: f64 = 1e-6;
/// Below this speed a curvature says nothing about a machine's limits, m/s.
const CRAWL_M_S: f64 = 0.02;

pub(super) const SAMPLES: Kind =
    Kind { name: "samples", keys: &[], reversible: false, has_points: true, build };

/// A way-pose with everything known about it.
#[derive(Clone, Copy, Debug)]
struct Point {
    t_s: f64,
    pose: Pose,
    direction: Direction,
    speed_m_s: f64,
    turn_rate_rad_s: Option<f64>,
    /// Arc length (angle on the spot) from the first point.
    progress: f64,
}

#[derive(Debug)]
struct Samples {
    points: Vec<Point>,
    path_length_m: f64,
}

fn build(raw: &RawSegment, _values: &Values, joint: Joint) -> Result<Box<dyn Stretch>, Vec<Problem>> {
    let given = raw.points.as_deref().unwrap_or_default();
    let problems = check(given, joint);
    if !problems.is_empty() {
        return Err(problems);
    }
    let begin_s = given[0].t_s;
    let mut points: Vec<Point> = given
        .iter()
        .map(|point| Point {
            t_s: point.t_s - begin_s,
            pose: Pose::new(point.x_m, point.y_m, math::wrap(point.heading_rad)),
            direction: Direction::of(point.heading_rad),
            speed_m_s: 0.0,
            turn_rate_rad_s: point.turn_rate_rad_s,
            progress: 0.0,
        })
        .collect();
    for index in 0..points.len() {
        points[index].speed_m_s = given[index].speed_m_s.unwrap_or_else(|| estimated_speed(&points, index));
    }
    let mut path_length_m = 0.0;
    for index in 1..points.len() {
        let piece = Piece::between(&points[index - 1], &points[index]);
        let extent = piece.extent_to(1.0);
        if !piece.on_the_spot {
            path_length_m += extent;
        }
        points[index].progress = points[index - 1].progress + extent;
    }
    Ok(Box::new(Samples { points, path_length_m }))
}

fn check(given: &[RawPoint], joint: Joint) -> Vec<Problem> {
    let mut problems = Vec::new();
    if given.len() < 2 {
        problems.push(Problem::new("points", format!("{} of them, give at least two", given.len())));
        return problems;
    }
    for (index, point) in given.iter().enumerate() {
        for (name, value, bound) in [
            ("t_s", point.t_s, 1e9),
            ("x_m", point.x_m, 1e7),
            ("y_m", point.y_m, 1e7),
            ("heading_rad", point.heading_rad, 1e6),
            ("speed_m_s", point.speed_m_s.unwrap_or(0.0), 30.0),
            ("turn_rate_rad_s", point.turn_rate_rad_s.unwrap_or(0.0), 30.0),
        ] {
            if !value.is_finite() || value.abs() > bound {
                problems.push(Problem::new(
                    &format!("points[{index}].{name}"),
                    format!("{value} lies outside ±{bound}"),
                ));
            }
        }
    }
    for (index, pair) in given.windows(2).enumerate() {
        // A step below a microsecond is a slip of the planner, and its speeds would be nonsense.
        if pair[1].t_s - pair[0].t_s < 1e-6 {
            let what = format!(
                "{} s does not lie at least 1 µs after the point before, {} s",
                pair[1].t_s, pair[0].t_s
            );
            problems.push(Problem::new(&format!("points[{}].t_s", index + 1), what));
        }
    }
    let first = Pose::new(given[0].x_m, given[0].y_m, given[0].heading_rad);
    let (distance, turn) =
        (first.distance_to(joint.pose), math::wrap(first.heading_rad - joint.pose.heading_rad).abs());
    if distance > JOIN_DISTANCE_M || turn > JOIN_HEADING_RAD {
        let what = format!(
            "{distance:.4} m and {turn:.4} rad from the end of the segment before (or the plan's start), at most {JOIN_DISTANCE_M} m and {JOIN_HEADING_RAD} rad are allowed"
        );
        problems.push(Problem::new("points[0]", what));
    }
    problems
}

/// Derivative of the parabola through three neighbouring positions, projected on the point's heading, m/s.
fn estimated_speed(points: &[Point], index: usize) -> f64 {
    let slope = |a: usize, b: usize| {
        let seconds = points[b].t_s - points[a].t_s;
        (
            (points[b].pose.x_m - points[a].pose.x_m) / seconds,
            (points[b].pose.y_m - points[a].pose.y_m) / seconds,
        )
    };
    let last = points.len() - 1;
    let (x, y) = if last == 1 {
        slope(0, 1)
    } else {
        let middle = index.clamp(1, last - 1);
        let (before, after) = (slope(middle - 1, middle), slope(middle, middle + 1));
        let (h0, h1) =
            (points[middle].t_s - points[middle - 1].t_s, points[middle + 1].t_s - points[middle].t_s);
        // Newton's divided differences: slope of the parabola at the wanted point.
        let at = points[index].t_s - points[middle].t_s;
        let bend = |before: f64, after: f64| (after - before) / (h0 + h1);
        (
            before.0 + bend(before.0, after.0) * (2.0 * at + h0),
            before.1 + bend(before.1, after.1) * (2.0 * at + h0),
        )
    };
    points[index].direction.into_frame(x, y).0
}

/// The motion between two points.
struct Piece<'a> {
    from: &'a Point,
    to: &'a Point,
    seconds: f64,
    on_the_spot: bool,
    /// 1 forward, −1 in reverse.
    sign: f64,
}

impl<'a> Piece<'a> {
    fn between(from: &'a Point, to: &'a Point) -> Self {
        let chord = from.pose.distance_to(to.pose);
        let on_the_spot =
            chord < SAME_PLACE_M && from.speed_m_s.abs() < SAME_PLACE_M && to.speed_m_s.abs() < SAME_PLACE_M;
        let mut ahead = from.speed_m_s + to.speed_m_s;
        if ahead.abs() < SLOW_M_S {
            ahead = from.direction.into_frame(to.pose.x_m - from.pose.x_m, to.pose.y_m - from.pose.y_m).0;
        }
        let sign = if ahead < 0.0 { -1.0 } else { 1.0 };
        Self { from, to, seconds: to.t_s - from.t_s, on_the_spot, sign }
    }

    /// Position, velocity and acceleration at the share `u` of the piece's time.
    fn motion(&self, u: f64) -> [(f64, f64); 3] {
        let along = |p0: f64, p1: f64, v0: f64, v1: f64| {
            let (m0, m1) = (v0 * self.seconds, v1 * self.seconds);
            // Coefficients of the cubic p0 + m0 u + b u² + a u³.
            let b = 3.0 * (p1 - p0) - 2.0 * m0 - m1;
            let a = 2.0 * (p0 - p1) + m0 + m1;
            [
                p0 + u * (m0 + u * (b + u * a)),
                (m0 + u * (2.0 * b + u * 3.0 * a)) / self.seconds,
                (2.0 * b + 6.0 * a * u) / (self.seconds * self.seconds),
            ]
        };
        let (v0, v1) = (self.from.speed_m_s, self.to.speed_m_s);
        let (d0, d1) = (self.from.direction, self.to.direction);
        let x = along(self.from.pose.x_m, self.to.pose.x_m, v0 * d0.cos, v1 * d1.cos);
        let y = along(self.from.pose.y_m, self.to.pose.y_m, v0 * d0.sin, v1 * d1.sin);
        [(x[0], y[0]), (x[1], y[1]), (x[2], y[2])]
    }

    /// Change of heading from the first point to the second, the short way round.
    fn turn(&self) -> f64 {
        math::wrap(self.to.pose.heading_rad - self.from.pose.heading_rad)
    }

    fn reference(&self, u: f64) -> Reference {
        if self.on_the_spot {
            return self.spot_reference(u);
        }
        let [(x_m, y_m), (vx, vy), (ax, ay)] = self.motion(u);
        let square = vx * vx + vy * vy;
        let speed = math::sqrt(square);
        if speed < SLOW_M_S {
            let heading = math::wrap(self.from.pose.heading_rad + u * self.turn());
            return Reference::at_rest(Pose::new(x_m, y_m, heading), 0.0);
        }
        let direction = Direction { cos: self.sign * vx / speed, sin: self.sign * vy / speed };
        let curve_turn_rate = (vx * ay - vy * ax) / square;
        let turn_rate = self.stated_turn_rate(u).unwrap_or(curve_turn_rate);
        Reference {
            pose: Pose::new(x_m, y_m, math::wrap(math::atan2(direction.sin, direction.cos))),
            direction,
            velocity: BodyVelocity { speed_m_s: self.sign * speed, turn_rate_rad_s: turn_rate },
            curvature_1_m: self.sign * curve_turn_rate / speed,
            accel_m_s2: self.sign * (vx * ax + vy * ay) / speed,
            turn_accel_rad_s2: 0.0,
        }
    }

    /// The planner's own word on the turn rate, where it gave one at both ends.
    fn stated_turn_rate(&self, u: f64) -> Option<f64> {
        let (from, to) = (self.from.turn_rate_rad_s?, self.to.turn_rate_rad_s?);
        Some(from + u * (to - from))
    }

    /// On the spot the heading is a cubic with the stated turn rates at its ends, or turns steadily.
    fn spot_reference(&self, u: f64) -> Reference {
        let turn = self.turn();
        let steady = turn / self.seconds;
        let m0 = self.from.turn_rate_rad_s.unwrap_or(steady) * self.seconds;
        let m1 = self.to.turn_rate_rad_s.unwrap_or(steady) * self.seconds;
        let (b, a) = (3.0 * turn - 2.0 * m0 - m1, m0 + m1 - 2.0 * turn);
        let heading = math::wrap(self.from.pose.heading_rad + u * (m0 + u * (b + u * a)));
        Reference {
            velocity: BodyVelocity {
                speed_m_s: 0.0,
                turn_rate_rad_s: (m0 + u * (2.0 * b + u * 3.0 * a)) / self.seconds,
            },
            turn_accel_rad_s2: (2.0 * b + 6.0 * a * u) / (self.seconds * self.seconds),
            ..Reference::at_rest(Pose { heading_rad: heading, ..self.from.pose }, 0.0)
        }
    }

    fn rate(&self, u: f64) -> f64 {
        if self.on_the_spot {
            return self.spot_reference(u).velocity.turn_rate_rad_s.abs();
        }
        let [_, (vx, vy), _] = self.motion(u);
        math::length(vx, vy)
    }

    /// Arc length (angle on the spot) up to the share `u`, by Gauss and Legendre's rule with five points (Abramowitz &
    /// Stegun 25.4.30).
    fn extent_to(&self, u: f64) -> f64 {
        const NODES: [(f64, f64); 5] = [
            (0.0, 0.568_888_888_888_888_9),
            (0.538_469_310_105_683_1, 0.478_628_670_499_366_5),
            (-0.538_469_310_105_683_1, 0.478_628_670_499_366_5),
            (0.906_179_845_938_664, 0.236_926_885_056_189_1),
            (-0.906_179_845_938_664, 0.236_926_885_056_189_1),
        ];
        let half = 0.5 * u;
        let sum: f64 = NODES.iter().map(|(node, weight)| weight * self.rate(half * (1.0 + node))).sum();
        sum * half * self.seconds
    }

    /// The share of the piece's time at which its extent is `extent`: Newton's method, kept inside by bisection.
    fn share_at(&self, extent: f64) -> f64 {
        let (mut low, mut high) = (0.0, 1.0);
        let mut u = 0.5;
        for _ in 0..60 {
            let beyond = self.extent_to(u) - extent;
            if beyond.abs() < 1e-13 {
                return u;
            }
            if beyond > 0.0 {
                high = u;
            } else {
                low = u;
            }
            let newton = u - beyond / (self.rate(u) * self.seconds);
            u = if newton > low && newton < high { newton } else { 0.5 * (low + high) };
        }
        u
    }
}

impl Samples {
    fn piece(&self, index: usize) -> Piece<'_> {
        Piece::between(&self.points[index], &self.points[index + 1])
    }

    /// The piece in force at `t_s`; at a point the later one.
    fn piece_at(&self, t_s: f64) -> (usize, f64) {
        let index = self
            .points
            .partition_point(|point| point.t_s <= t_s)
            .saturating_sub(1)
            .min(self.points.len() - 2);
        let from = self.points[index].t_s;
        (index, ((t_s - from) / (self.points[index + 1].t_s - from)).clamp(0.0, 1.0))
    }
}

impl Stretch for Samples {
    fn duration_s(&self) -> f64 {
        self.points[self.points.len() - 1].t_s
    }

    fn extent(&self) -> f64 {
        self.points[self.points.len() - 1].progress
    }

    fn path_length_m(&self) -> f64 {
        self.path_length_m
    }

    fn timing(&self, t_s: f64) -> Progress {
        let (index, u) = self.piece_at(t_s);
        let piece = self.piece(index);
        let reference = piece.reference(u);
        let accel =
            if piece.on_the_spot { reference.turn_accel_rad_s2 } else { piece.sign * reference.accel_m_s2 };
        Progress { at: piece.from.progress + piece.extent_to(u), rate: piece.rate(u), accel }
    }

    fn at_progress(&self, progress: Progress) -> Reference {
        let reached = self.points.partition_point(|point| point.progress <= progress.at);
        let piece = self.piece(reached.saturating_sub(1).min(self.points.len() - 2));
        let extent = (progress.at - piece.from.progress).clamp(0.0, piece.to.progress - piece.from.progress);
        let u = piece.share_at(extent);
        let literal = piece.reference(u);
        let rate = piece.rate(u);
        if rate < SLOW_M_S || progress.rate == 0.0 {
            return Reference::at_rest(literal.pose, literal.curvature_1_m);
        }
        let factor = progress.rate / rate;
        Reference {
            velocity: literal.velocity.scaled(factor),
            accel_m_s2: if piece.on_the_spot { 0.0 } else { piece.sign * progress.accel },
            turn_accel_rad_s2: progress.accel * literal.velocity.turn_rate_rad_s / rate,
            ..literal
        }
    }

    fn at(&self, t_s: f64) -> Reference {
        let (index, u) = self.piece_at(t_s);
        self.piece(index).reference(u)
    }

    fn travel(&self) -> Travel {
        let mut travel = Travel::default();
        for index in 0..self.points.len() - 1 {
            let piece = self.piece(index);
            travel.forward |= !piece.on_the_spot && piece.sign > 0.0;
            travel.reverse |= !piece.on_the_spot && piece.sign < 0.0;
        }
        travel
    }

    fn brake_decel(&self, vehicle: &dyn Vehicle) -> f64 {
        let last = self.points.len() - 2;
        if self.piece(last).on_the_spot {
            return vehicle.pivot_accel_rad_s2().unwrap_or(f64::INFINITY);
        }
        // Only the bends that a stop from the end's speed could reach count; twice that distance is safely all of them.
        let exit = self.points[last + 1].speed_m_s;
        let reach = exit * exit / vehicle.path_accel_m_s2(0.0);
        let mut sharpest = 0.0_f64;
        for index in (0..=last)
            .rev()
            .take_while(|index| self.extent() - self.points[index + 1].progress <= 2.0 * reach)
        {
            let piece = self.piece(index);
            for step in 0..=4 {
                sharpest = sharpest.max(piece.reference(0.25 * f64::from(step)).curvature_1_m.abs());
            }
        }
        vehicle.path_accel_m_s2(sharpest)
    }

    fn brake_from_s(&self, exit: f64, decel: f64) -> Option<f64> {
        let slower = |t_s: f64| {
            let progress = self.timing(t_s);
            progress.rate * progress.rate <= exit * exit + 2.0 * decel * (self.extent() - progress.at)
        };
        let mut high = self.duration_s();
        for point in self.points.iter().rev().skip(1) {
            if slower(point.t_s) {
                let mut low = point.t_s;
                for _ in 0..80 {
                    let middle = 0.5 * (low + high);
                    if slower(middle) { low = middle } else { high = middle }
                }
                return Some(low);
            }
            high = point.t_s;
        }
        None
    }

    fn first_excess(&self, vehicle: &dyn Vehicle) -> Option<(f64, String)> {
        for index in 0..self.points.len() - 1 {
            let piece = self.piece(index);
            for step in 0..4 {
                let u = 0.25 * f64::from(step);
                let reference = piece.reference(u);
                let motion = if reference.velocity.speed_m_s.abs() > CRAWL_M_S {
                    Motion::Along {
                        speed_m_s: reference.velocity.speed_m_s,
                        curvature_1_m: reference.curvature_1_m,
                    }
                } else if piece.on_the_spot && reference.velocity.turn_rate_rad_s != 0.0 {
                    Motion::Pivot { turn_rate_rad_s: reference.velocity.turn_rate_rad_s }
                } else {
                    continue;
                };
                if let Some(excess) = vehicle.excess(motion) {
                    return Some((piece.from.t_s + u * piece.seconds, excess));
                }
            }
        }
        None
    }
}
