//! What laws that follow a path share: the speed by which the plan's timing is kept, and the path ahead without its
//! timing, searched for the point at a distance.
//!
//! The path is what the references ahead pass through, up to where the reference rests, turns round or turns on the
//! spot. From there it goes on as it ended: along its last curvature for at most a radian of turn, then straight, so that
//! the point does not come nearer as the end does.

use super::Input;
use crate::geometry::{Direction, Pose};
use crate::plan::Reference;

/// Places looked at up to a distance, where the path is straight: a bend shows between them.
const STEPS_TO_DISTANCE: f64 = 8.0;
/// The longest step along the references at first, s: one that is about to move away from rest still shows it. It doubles
/// while a step gets less than half as far as it should.
const LONGEST_STEP_S: f64 = 0.25;
/// How many references are looked at before the path is taken to go on as there.
const MOST_REFERENCES: usize = 48;
/// How many places are looked at in all. A straight end leaves the circle within 16 steps, a bent one within 24.
const MOST_PLACES: usize = 80;
/// How many times the place of the crossing is narrowed down; about seven suffice.
const MOST_NARROWINGS: usize = 40;
/// A crossing is found when the square of its distance is off by less than this share.
const CROSSING_SHARE: f64 = 1e-12;
/// How far the path's end goes on turning, rad: beyond, a last curvature would lead round in a circle.
const END_TURN_RAD: f64 = 1.0;

/// The speed by which a law that follows a path keeps the plan's time.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Pace {
    /// Wanted speed, m/s.
    pub(super) speed_m_s: f64,
    /// Which way the machine is to go: 1 forward, −1 in reverse.
    pub(super) way: f64,
}

impl Pace {
    /// The reference's speed with feedback of the along-track error (1/s). A machine that is too far ahead waits; it does
    /// not drive against the reference's direction. Where the reference rests it goes either way.
    pub(super) fn keep(input: &Input<'_>, k_along_1_s: f64) -> Self {
        let ahead = input.reference.velocity.speed_m_s;
        let wanted = ahead - k_along_1_s * input.error.along_m;
        if ahead > 0.0 {
            Self { speed_m_s: wanted.max(0.0), way: 1.0 }
        } else if ahead < 0.0 {
            Self { speed_m_s: wanted.min(0.0), way: -1.0 }
        } else {
            Self { speed_m_s: wanted, way: if wanted < 0.0 { -1.0 } else { 1.0 } }
        }
    }
}

/// Whether a reference moves along its path this way.
pub(super) fn moves(reference: &Reference, way: f64) -> bool {
    way * reference.velocity.speed_m_s > 0.0
}

/// The path beyond a reference, `length_m` on.
fn beyond(end: &Reference, way: f64, length_m: f64) -> Pose {
    let bent_m = if end.curvature_1_m.abs() * length_m > END_TURN_RAD {
        END_TURN_RAD / end.curvature_1_m.abs()
    } else {
        length_m
    };
    let bent = end.pose.along_arc(way * bent_m, way * bent_m * end.curvature_1_m);
    bent.along_arc(way * (length_m - bent_m), 0.0)
}

/// The path ahead.
pub(super) struct Way<'a> {
    input: &'a Input<'a>,
    /// 1 forward, −1 in reverse.
    way: f64,
    /// The distance that is sought, m; beyond the path's end also the unit of the place.
    distance_m: f64,
    /// Where the references end, s ahead.
    end_s: f64,
    end: Reference,
    longest_step_s: f64,
}

/// A place on the path, seen from the chassis point.
#[derive(Clone, Copy)]
struct Place {
    /// Seconds ahead, up to the end of the references; then one for each `distance_m`.
    at: f64,
    /// The point in the chassis frame, m.
    point: (f64, f64),
    /// Its distance's square less the square sought, m².
    gap_m2: f64,
    /// True if the path leads away from the chassis point here.
    receding: bool,
}

impl<'a> Way<'a> {
    /// The path from the reference on, for points at `distance_m` (greater than 0).
    pub(super) fn new(input: &'a Input<'a>, way: f64, distance_m: f64) -> Self {
        let end_s = if moves(&input.reference, way) { f64::INFINITY } else { 0.0 };
        Self { input, way, distance_m, end_s, end: input.reference, longest_step_s: LONGEST_STEP_S }
    }

    /// The first point ahead that the path passes at the distance sought, in the chassis frame, m. Where it does not come
    /// as near, the nearest one; where it turns back before it is as far, the farthest one.
    pub(super) fn goal(mut self) -> (f64, f64) {
        let mut last = self.place(0.0);
        let mut reference = self.input.reference;
        for steps in 0..MOST_PLACES {
            if last.gap_m2 >= 0.0 && last.receding {
                return last.point;
            }
            let next = self.next(&last, &mut reference, steps);
            if last.gap_m2 < 0.0 && next.gap_m2 >= 0.0 {
                return self.crossing(&last, &next);
            }
            // Halfway to the distance a bend shows; nearer, the chassis point stands beside the path.
            let far = last.gap_m2 > -0.75 * self.distance_m * self.distance_m;
            if far && last.receding && !next.receding {
                return last.point;
            }
            last = next;
        }
        last.point
    }

    /// The place one step on.
    fn next(&mut self, last: &Place, reference: &mut Reference, steps: usize) -> Place {
        if last.at < self.end_s {
            let step_m = self.distance_m / STEPS_TO_DISTANCE;
            let at = last.at + (step_m / reference.velocity.speed_m_s.abs()).min(self.longest_step_s);
            let next = self.input.ahead.reference(at);
            if moves(&next, self.way) && steps < MOST_REFERENCES {
                if reference.pose.distance_to(next.pose) < 0.5 * step_m {
                    self.longest_step_s *= 2.0;
                }
                *reference = next;
                return self.place_at(at, next.pose, next.direction);
            }
            (self.end_s, self.end) = (last.at, *reference);
        }
        self.place(last.at + 1.0 / STEPS_TO_DISTANCE)
    }

    fn place(&self, at: f64) -> Place {
        if at <= self.end_s {
            let reference = self.input.ahead.reference(at);
            return self.place_at(at, reference.pose, reference.direction);
        }
        let pose = beyond(&self.end, self.way, (at - self.end_s) * self.distance_m);
        self.place_at(at, pose, Direction::of(pose.heading_rad))
    }

    fn place_at(&self, at: f64, pose: Pose, direction: Direction) -> Place {
        let own = self.input.pose;
        let (x, y) = (pose.x_m - own.x_m, pose.y_m - own.y_m);
        Place {
            at,
            point: self.input.direction.into_frame(x, y),
            gap_m2: x * x + y * y - self.distance_m * self.distance_m,
            receding: self.way * (direction.cos * x + direction.sin * y) >= 0.0,
        }
    }

    /// The point between two places at which the path passes the distance: regula falsi, the end that stays put counting
    /// half (the Illinois rule; Dahlquist and Björck, Numerical Methods, 1974).
    fn crossing(&self, near: &Place, far: &Place) -> (f64, f64) {
        let mut point = far.point;
        let (mut near, mut far) = ((near.at, near.gap_m2), (far.at, far.gap_m2));
        let mut stayed = 0.0;
        for _ in 0..MOST_NARROWINGS {
            let at = between(near, far);
            let place = self.place(at);
            point = place.point;
            if place.gap_m2.abs() <= CROSSING_SHARE * self.distance_m * self.distance_m {
                break;
            }
            if place.gap_m2 < 0.0 {
                near = (at, place.gap_m2);
                far.1 *= if stayed > 0.0 { 0.5 } else { 1.0 };
                stayed = 1.0;
            } else {
                far = (at, place.gap_m2);
                near.1 *= if stayed < 0.0 { 0.5 } else { 1.0 };
                stayed = -1.0;
            }
        }
        point
    }
}

/// Where the straight line through two values is zero; the middle where rounding leaves none between.
fn between(near: (f64, f64), far: (f64, f64)) -> f64 {
    let at = near.0 + (far.0 - near.0) * (near.1 / (near.1 - far.1));
    if at > near.0 && at < far.0 { at } else { 0.5 * (near.0 + far.0) }
}
