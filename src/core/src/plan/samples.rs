//! Samples: stamped way-poses in the site frame, joined by cubics with their tangents along the headings.
//!
//! Between two points the position is the cubic Hermite curve through both positions with the velocities
//! (speed × heading direction) at both ends, in time; heading, speed and turn rate follow from it. A point without a
//! speed gets the derivative of the parabola through its neighbours, projected on its heading; so the sign of the speed
//! says which way the machine drives. Where two points share a position the machine turns on the spot (or rests).

mod rests;

use super::Reference;
use super::file::{RawPoint, RawSegment};
use super::lookup::Lookup;
use super::path::check_join;
use super::points::{self, Form};
use super::segment::{Joint, Kind, Progress, Stretch, Travel};
use crate::geometry::{BodyVelocity, Direction, Pose};
use crate::keys::{Problem, Values};
use crate::math;
use crate::vehicle::{Motion, Vehicle};
use alloc::boxed::Box;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;
use rests::Rests;

/// Two points closer than this are one place, m.
const SAME_PLACE_M: f64 = 1e-6;
/// Below this speed the curve's own direction is rounding noise; the points' headings are used, m/s.
const SLOW_M_S: f64 = 1e-6;
/// The middle of a piece, as a share of its time.
const MIDDLE: f64 = 0.5;
/// A sweep looks no more often than this between two points.
const MOST_LOOKS: usize = 64;
/// Below this speed a curvature says nothing about a machine's limits, m/s.
const CRAWL_M_S: f64 = 0.02;

pub(super) const SAMPLES: Kind = Kind { has_points: true, ..Kind::plain("samples", build) };

const FORM: Form = Form { needs: &["t_s", "heading_rad"], may: &["speed_m_s", "turn_rate_rad_s"] };

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
    lookup: Lookup,
    path_length_m: f64,
    rests: Rests,
}

fn build(raw: &RawSegment, _values: &Values, joint: Joint) -> Result<Box<dyn Stretch>, Vec<Problem>> {
    let given = raw.points.as_deref().unwrap_or_default();
    check(given, joint)?;
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
    let lookup =
        Lookup::new(points.iter().map(|point| point.t_s), points.len(), points[points.len() - 1].t_s);
    let mut samples = Samples { points, lookup, path_length_m, rests: Rests::default() };
    samples.rests = Rests::of(&samples);
    Ok(Box::new(samples))
}

fn check(given: &[RawPoint], joint: Joint) -> Result<(), Vec<Problem>> {
    points::check(given, 2, &FORM)?;
    let mut problems = Vec::new();
    for (index, pair) in given.windows(2).enumerate() {
        // A step below a microsecond is a slip of the planner, and its speeds would be nonsense.
        if pair[1].t_s - pair[0].t_s < 1e-6 {
            let what = format!(
                "{} s does not lie at least 1 µs after the point before, {} s",
                pair[1].t_s, pair[0].t_s
            );
            problems.push(Problem::new(&format!("points[{}].t_s", index + 1), what));
            if problems.len() >= super::compile::MAX_FINDINGS {
                break;
            }
        }
    }
    problems.extend(check_join(Pose::new(given[0].x_m, given[0].y_m, given[0].heading_rad), joint).err());
    if problems.is_empty() { Ok(()) } else { Err(problems) }
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
    /// One over that; multiplications cost a tick less than divisions.
    rate_1_s: f64,
    on_the_spot: bool,
    /// 1 forward, −1 in reverse.
    sign: f64,
}

impl<'a> Piece<'a> {
    fn between(from: &'a Point, to: &'a Point) -> Self {
        let on_the_spot = from.speed_m_s.abs() < SAME_PLACE_M
            && to.speed_m_s.abs() < SAME_PLACE_M
            && from.pose.distance_to(to.pose) < SAME_PLACE_M;
        let mut ahead = from.speed_m_s + to.speed_m_s;
        if ahead.abs() < SLOW_M_S {
            ahead = from.direction.into_frame(to.pose.x_m - from.pose.x_m, to.pose.y_m - from.pose.y_m).0;
        }
        let sign = if ahead < 0.0 { -1.0 } else { 1.0 };
        let seconds = to.t_s - from.t_s;
        Self { from, to, seconds, rate_1_s: 1.0 / seconds, on_the_spot, sign }
    }

    /// Position, velocity, acceleration and its rate at the share `u` of the piece's time.
    fn motion(&self, u: f64) -> [(f64, f64); 4] {
        let rate = self.rate_1_s;
        let along = |p0: f64, p1: f64, v0: f64, v1: f64| {
            let (m0, m1) = (v0 * self.seconds, v1 * self.seconds);
            // Coefficients of the cubic p0 + m0 u + b u² + a u³.
            let b = 3.0 * (p1 - p0) - 2.0 * m0 - m1;
            let a = 2.0 * (p0 - p1) + m0 + m1;
            [
                p0 + u * (m0 + u * (b + u * a)),
                (m0 + u * (2.0 * b + u * 3.0 * a)) * rate,
                (2.0 * b + 6.0 * a * u) * (rate * rate),
                6.0 * a * (rate * rate * rate),
            ]
        };
        let (v0, v1) = (self.from.speed_m_s, self.to.speed_m_s);
        let (d0, d1) = (self.from.direction, self.to.direction);
        let x = along(self.from.pose.x_m, self.to.pose.x_m, v0 * d0.cos, v1 * d1.cos);
        let y = along(self.from.pose.y_m, self.to.pose.y_m, v0 * d0.sin, v1 * d1.sin);
        [(x[0], y[0]), (x[1], y[1]), (x[2], y[2]), (x[3], y[3])]
    }

    /// Change of heading from the first point to the second, the short way round.
    fn turn(&self) -> f64 {
        math::wrap(self.to.pose.heading_rad - self.from.pose.heading_rad)
    }

    fn reference(&self, u: f64) -> Reference {
        if self.on_the_spot {
            return self.spot_reference(u);
        }
        let [(x_m, y_m), (vx, vy), (ax, ay), (jx, jy)] = self.motion(u);
        let square = vx * vx + vy * vy;
        let speed = math::sqrt(square);
        if speed < SLOW_M_S {
            let heading = math::wrap(self.from.pose.heading_rad + u * self.turn());
            // At rest a cubic has no curvature; its middle tells where the wheels will have to point.
            let curvature_1_m = if u == MIDDLE { 0.0 } else { self.reference(MIDDLE).curvature_1_m };
            return Reference::at_rest(Pose::new(x_m, y_m, heading), curvature_1_m);
        }
        let (per_speed, per_square) = (self.sign / speed, 1.0 / square);
        let direction = Direction { cos: vx * per_speed, sin: vy * per_speed };
        let curve_turn_rate = (vx * ay - vy * ax) * per_square;
        let gaining = (vx * ax + vy * ay) * per_square;
        let gain = (vx * jy - vy * jx) * per_square;
        let (turn_rate, turn_accel) =
            self.stated_turn_rate(u).unwrap_or((curve_turn_rate, gain - 2.0 * curve_turn_rate * gaining));
        Reference {
            pose: Pose::new(x_m, y_m, math::wrap(math::atan2(self.sign * vy, self.sign * vx))),
            direction,
            velocity: BodyVelocity { speed_m_s: self.sign * speed, turn_rate_rad_s: turn_rate },
            curvature_1_m: curve_turn_rate * per_speed,
            rest_curvature_1_m: curve_turn_rate * per_speed,
            curvature_rate_1_m2: self.sign * (gain - 3.0 * curve_turn_rate * gaining) * per_square,
            accel_m_s2: (vx * ax + vy * ay) * per_speed,
            turn_accel_rad_s2: turn_accel,
        }
    }

    /// The planner's own word on the turn rate, where it gave one at both ends, and the turn acceleration that follows.
    fn stated_turn_rate(&self, u: f64) -> Option<(f64, f64)> {
        let (from, to) = (self.from.turn_rate_rad_s?, self.to.turn_rate_rad_s?);
        Some((from + u * (to - from), (to - from) / self.seconds))
    }

    /// On the spot the heading is a cubic with the stated turn rates at its ends, or turns steadily.
    fn spot_reference(&self, u: f64) -> Reference {
        let turn = self.turn();
        let steady = turn / self.seconds;
        let m0 = self.from.turn_rate_rad_s.unwrap_or(steady) * self.seconds;
        let m1 = self.to.turn_rate_rad_s.unwrap_or(steady) * self.seconds;
        let (b, a) = (3.0 * turn - 2.0 * m0 - m1, m0 + m1 - 2.0 * turn);
        let rest_curvature_1_m = if turn == 0.0 { 0.0 } else { turn.signum() * f64::INFINITY };
        let heading = math::wrap(self.from.pose.heading_rad + u * (m0 + u * (b + u * a)));
        Reference {
            velocity: BodyVelocity {
                speed_m_s: 0.0,
                turn_rate_rad_s: (m0 + u * (2.0 * b + u * 3.0 * a)) / self.seconds,
            },
            turn_accel_rad_s2: (2.0 * b + 6.0 * a * u) / (self.seconds * self.seconds),
            rest_curvature_1_m,
            ..Reference::at_rest(Pose { heading_rad: heading, ..self.from.pose }, 0.0)
        }
    }

    fn rate(&self, u: f64) -> f64 {
        if self.on_the_spot {
            return self.spot_reference(u).velocity.turn_rate_rad_s.abs();
        }
        let [_, (vx, vy), ..] = self.motion(u);
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

    /// The piece in force at `t_s` with its index, and the share of its time; at a point the later one.
    fn piece_at(&self, t_s: f64) -> (usize, Piece<'_>, f64) {
        let (low, high) = self.lookup.range(t_s);
        let begun = low + self.points[low..high].partition_point(|point| point.t_s <= t_s);
        let index = begun.saturating_sub(1).min(self.points.len() - 2);
        let piece = self.piece(index);
        let u = ((t_s - piece.from.t_s) * piece.rate_1_s).clamp(0.0, 1.0);
        (index, piece, u)
    }

    /// The reference at the share `u` of a piece's time.
    fn reference(&self, index: usize, piece: &Piece<'_>, u: f64) -> Reference {
        let reference = piece.reference(u);
        if piece.on_the_spot { self.rests.steered(index, reference) } else { reference }
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
        let (_, piece, u) = self.piece_at(t_s);
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
            return literal.resting();
        }
        let factor = progress.rate / rate;
        Reference {
            velocity: literal.velocity.scaled(factor),
            accel_m_s2: if piece.on_the_spot { 0.0 } else { piece.sign * progress.accel },
            turn_accel_rad_s2: progress.accel * literal.velocity.turn_rate_rad_s / rate
                + piece.sign * literal.curvature_rate_1_m2 * progress.rate * progress.rate,
            ..literal
        }
    }

    fn at(&self, t_s: f64) -> Reference {
        let (index, piece, u) = self.piece_at(t_s);
        self.reference(index, &piece, u)
    }

    fn sweep(&self, steps: usize, visit: &mut dyn FnMut(f64, &Reference)) {
        let pieces = self.points.len() - 1;
        let looks = (steps / pieces).clamp(2, MOST_LOOKS);
        for index in 0..pieces {
            let piece = self.piece(index);
            for look in 0..=looks {
                let u = look as f64 / looks as f64;
                visit(piece.from.t_s + u * piece.seconds, &self.reference(index, &piece, u));
            }
        }
    }

    fn way_poses(&self, visit: &mut dyn FnMut(f64, Pose)) {
        self.points.iter().for_each(|point| visit(point.t_s, point.pose));
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

    fn brake_decel(&self, vehicle: &dyn Vehicle, _exit: f64) -> f64 {
        let last = self.points.len() - 2;
        if self.piece(last).on_the_spot {
            return vehicle.pivot_decel_rad_s2().unwrap_or(super::pivot::AT_ONCE_RAD_S2);
        }
        // What a changing curvature adds is not taken into account: between way-poses its rate is mostly noise.
        // Only the bends that a stop from the end's speed could reach count; twice that distance is safely all of them.
        let exit = self.points[last + 1].speed_m_s;
        let reach = exit * exit / vehicle.path_decel_m_s2(0.0);
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
        vehicle.path_decel_m_s2(sharpest)
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
