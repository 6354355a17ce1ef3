//! A stretch of path: a geometry by arc length, driven forward or in reverse, with its timing. Lines, arcs, clothoids,
//! splines and NURBS differ in their geometry alone.

use super::Reference;
use super::file::RawSegment;
use super::profile;
use super::segment::{Joint, Progress, Stretch, Travel};
use super::timing::Timing;
use crate::geometry::{BodyVelocity, Direction, Pose};
use crate::keys::{Problem, Values};
use crate::math;
use crate::vehicle::{Motion, Vehicle};
use alloc::boxed::Box;
use alloc::format;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;
use core::fmt::Debug;

/// Longest segment, m.
pub(super) const MAX_LENGTH_M: f64 = 1e5;
/// No point lies farther from the origin, m. Beyond, a double's last bit is a nanometre no more.
pub(super) const MAX_COORDINATE_M: f64 = 1e7;
/// Sharpest curvature that a plan may state, 1/m.
pub(super) const MAX_CURVATURE_1_M: f64 = 100.0;
/// The first point must meet the previous segment's end within this distance, m.
pub(super) const JOIN_DISTANCE_M: f64 = 0.02;
/// The first point must meet the previous segment's end within this angle, rad.
pub(super) const JOIN_HEADING_RAD: f64 = 0.02;

/// A braking curve is looked at in so many places.
const BRAKE_LOOKS: u32 = 64;
/// Decelerations that are tried, from the greatest down.
const BRAKE_STEPS: u32 = 64;
/// Room for rounding, as a share of the deceleration.
const BRAKE_ROUNDING: f64 = 1e-9;

/// How the heading turns at a place, per metre of progress.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Bend {
    /// Change of heading, rad/m: the curvature, with the other sign in reverse.
    pub(super) turn_1_m: f64,
    /// Its change, rad/m².
    pub(super) turn_rate_1_m2: f64,
}

/// A curve by arc length, with the machine's heading along it.
pub(super) trait Geometry: Debug + Send + Sync {
    /// Its length, m; greater than 0.
    fn length_m(&self) -> f64;

    /// The machine's pose `at` metres from the beginning, its direction, and the bend there. No allocation.
    fn place(&self, at: f64) -> (Pose, Direction, Bend);

    /// The bend alone, where that is cheaper.
    fn bend(&self, at: f64) -> Bend {
        self.place(at).2
    }

    /// How many places tell how it bends; 1 if it bends the same everywhere.
    fn looks(&self) -> u32;

    /// Where, strictly inside, its bend or the bend's change may step, m from the beginning.
    fn seams(&self) -> Vec<f64> {
        Vec::new()
    }
}

#[derive(Debug)]
struct Path<G> {
    geometry: G,
    /// 1 forward, −1 in reverse.
    sign: f64,
    timing: Timing,
}

/// 1 forward, −1 in reverse.
pub(super) fn sign(raw: &RawSegment) -> f64 {
    if raw.reverse { -1.0 } else { 1.0 }
}

/// A geometry with the timing that its segment states.
pub(super) fn build<G: Geometry + 'static>(
    raw: &RawSegment,
    values: &Values,
    geometry: G,
) -> Result<Box<dyn Stretch>, Vec<Problem>> {
    let timing = profile::build(raw, values, geometry.length_m(), &profile::ALONG)?;
    Ok(Box::new(Path { geometry, sign: sign(raw), timing }))
}

/// The problem of a first pose, in the site frame, that does not meet what it joins on to.
pub(super) fn check_join(first: Pose, joint: Joint) -> Result<(), Problem> {
    let (distance, turn) =
        (first.distance_to(joint.pose), math::wrap(first.heading_rad - joint.pose.heading_rad).abs());
    if !joint.strict || distance <= JOIN_DISTANCE_M && turn <= JOIN_HEADING_RAD {
        return Ok(());
    }
    let what = format!(
        "{distance:.4} m and {turn:.4} rad from the end of the segment before (or the plan's start), at most {JOIN_DISTANCE_M} m and {JOIN_HEADING_RAD} rad are allowed"
    );
    Err(Problem::new("points[0]", what))
}

/// The problem of a length that is not within bounds; `key` is what to change.
pub(super) fn check_length(length_m: f64, key: &str) -> Result<(), Vec<Problem>> {
    if length_m > 0.0 && length_m <= MAX_LENGTH_M {
        return Ok(());
    }
    let what = format!("the path is {length_m} m long; give one of more than 0 and at most {MAX_LENGTH_M} m");
    Err(vec![Problem::new(key, what)])
}

impl<G: Geometry> Path<G> {
    /// The sharpest bend between two places, rad/m.
    fn sharpest(&self, from: f64, to: f64) -> f64 {
        let looks = self.geometry.looks();
        (0..looks)
            .map(|look| from + (to - from) * f64::from(look) / f64::from((looks - 1).max(1)))
            .map(|at| self.geometry.bend(at).turn_1_m.abs())
            .fold(0.0, f64::max)
    }

    /// True if no wheel has to do more than it can on a braking curve that ends at the rate `exit`, as far back as the
    /// literal timing could be faster.
    fn can_brake(&self, vehicle: &dyn Vehicle, exit: f64, decel: f64) -> bool {
        let (extent, fastest) = (self.extent(), self.timing.fastest().1);
        let reach = ((fastest * fastest - exit * exit).max(0.0) / (2.0 * decel)).min(extent);
        (0..=BRAKE_LOOKS).all(|look| {
            let back = reach * f64::from(look) / f64::from(BRAKE_LOOKS);
            let speed = math::sqrt(exit * exit + 2.0 * decel * back);
            let bend = self.geometry.bend(extent - back);
            let (turn, rate) = (self.sign * bend.turn_1_m, self.sign * bend.turn_rate_1_m2);
            let (least, _) = vehicle.accel_bounds_m_s2(speed, turn, rate, 1.0);
            -decel >= least - BRAKE_ROUNDING * decel
        })
    }

    fn excess_at(&self, t_s: f64, vehicle: &dyn Vehicle) -> Option<(f64, String)> {
        let progress = self.timing.at(t_s);
        let curvature_1_m = self.sign * self.geometry.bend(progress.at).turn_1_m;
        let motion = Motion::Along { speed_m_s: progress.rate, curvature_1_m };
        vehicle.excess(motion).map(|excess| (t_s, excess))
    }
}

impl<G: Geometry> Stretch for Path<G> {
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
        let (pose, direction, bend) = self.geometry.place(progress.at.clamp(0.0, self.extent()));
        Reference {
            pose,
            direction,
            velocity: BodyVelocity {
                speed_m_s: self.sign * progress.rate,
                turn_rate_rad_s: bend.turn_1_m * progress.rate,
            },
            curvature_1_m: self.sign * bend.turn_1_m,
            rest_curvature_1_m: self.sign * bend.turn_1_m,
            curvature_rate_1_m2: self.sign * bend.turn_rate_1_m2,
            accel_m_s2: self.sign * progress.accel,
            turn_accel_rad_s2: bend.turn_1_m * progress.accel
                + bend.turn_rate_1_m2 * progress.rate * progress.rate,
        }
    }

    fn travel(&self) -> Travel {
        Travel { forward: self.sign > 0.0, reverse: self.sign < 0.0 }
    }

    fn seams(&self) -> Vec<f64> {
        self.geometry.seams()
    }

    fn brake_decel(&self, vehicle: &dyn Vehicle, exit: f64) -> f64 {
        // Only the bends that a stop from the end's speed could reach count; twice that distance is safely all of them.
        let (literal, extent) = (self.timing.exit_rate(), self.extent());
        let reach = literal * literal / vehicle.path_decel_m_s2(0.0);
        let steady = vehicle.path_decel_m_s2(self.sharpest((extent - reach).max(0.0), extent));
        if self.geometry.looks() == 1 {
            return steady;
        }
        // A wheel whose share of the speed changes with the curvature has less left for braking: then gentler, and sooner.
        let gentler = (0..BRAKE_STEPS).map(|step| 1.0 - f64::from(step) / f64::from(BRAKE_STEPS));
        let mut decels = gentler.map(|share| share * steady);
        decels.find(|decel| self.can_brake(vehicle, exit, *decel)).unwrap_or(steady)
    }

    fn brake_from_s(&self, exit: f64, decel: f64) -> Option<f64> {
        self.timing.brake_from_s(exit, decel)
    }

    fn first_excess(&self, vehicle: &dyn Vehicle) -> Option<(f64, String)> {
        let looks = self.geometry.looks();
        if looks == 1 {
            return self.excess_at(self.timing.fastest().0, vehicle);
        }
        let spread = (0..=looks).map(|look| self.duration_s() * f64::from(look) / f64::from(looks));
        spread
            .chain(self.timing.turning_points())
            .filter_map(|t_s| self.excess_at(t_s, vehicle))
            .min_by(|one, other| one.0.total_cmp(&other.0))
    }
}
