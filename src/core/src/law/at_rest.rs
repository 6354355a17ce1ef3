//! Feedback where a tracking law has little to say: the reference turns on the spot, rests, or the heading is too far off.
//!
//! No smooth static feedback brings a unicycle to rest at a pose (Brockett 1983), so settling has phases, each with one
//! thing to do and an end that noise does not keep it from. From afar the machine faces the place, with its bow or its
//! stern, and drives there straight. Near by, where that would turn a heavy machine by a right angle for the sake of a
//! centimetre, it shifts sideways as a driver does: turn a little, drive until the way across is made good, turn back,
//! drive along. Then it corrects the heading alone, and rests within a dead band.
//!
//! The polar feedback of Aicardi, Casalino, Bicchi and Balestrino (IEEE Robotics and Automation Magazine 2(1), 1995) does
//! all of that in one curve, but on a machine whose turn accelerates slowly it overshoots and winds round the place, and
//! at the place noise and a late command turn it as they like. With it in the place of facing and driving, 240 of the
//! thousand errors in `node/tests/settling.rs` were not settled within 10 s; now the slowest takes 7.

use super::{Input, Rested};
use crate::geometry::{BodyVelocity, TrackingError};
use crate::math;
use crate::vehicle::Vehicle;

/// The share of the deceleration that an approach to rest reckons with; the rest is left for what it did not reckon with.
const BRAKING_SHARE: f64 = 0.7;
/// From farther away than this many dead bands the machine drives to the place, nearer it shifts.
const NEAR_BANDS: f64 = 6.0;
/// It faces the place within this, rad, before it drives; what is left it corrects on the way.
const FACED_RAD: f64 = 0.15;
/// Driving with the place this far off the bow, it has to face it anew, rad.
const LOST_RAD: f64 = 0.8;
/// Nearer than this many dead bands it keeps its heading: the bearing says little there.
const STRAIGHT_BANDS: f64 = 3.0;
/// How far it turns for a shift, rad: it then drives three times the way across.
const SHIFT_RAD: f64 = 0.35;
/// A turn of a shift is over within this, rad.
const SHIFT_SLACK_RAD: f64 = 0.03;
/// What a phase has to reach, in dead bands: the phases after it stay within the band then.
const REACHED: f64 = 0.3;
/// What may be left across before driving along, in dead bands: with what is left along, it lies within the band.
const ACROSS: f64 = 0.6;
/// A settled machine moves again only if an error exceeds its dead band by this factor: noise must not make it hunt.
const WAKE_FACTOR: f64 = 2.0;

/// How the machine settles.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct RestGains {
    /// γ: the rate at which errors decay, 1/s.
    pub rate_1_s: f64,
    /// Dead band of the position, m.
    pub distance_m: f64,
    /// Dead band of the heading, rad.
    pub heading_rad: f64,
}

impl RestGains {
    /// With dead bands that are at least as wide as noise asks for.
    pub(super) fn at_least(&self, rested: &Rested) -> Self {
        Self {
            distance_m: self.distance_m.max(rested.least_distance_m),
            heading_rad: self.heading_rad.max(rested.least_heading_rad),
            ..*self
        }
    }
}

/// Where settling stands.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
enum Phase {
    /// Nothing was decided yet.
    #[default]
    Begin,
    /// Turning bow or stern to a place far away.
    Face { backwards: bool },
    /// Driving there.
    Drive { backwards: bool },
    /// Turning for a shift: to this heading against the reference's, to be driven in this direction (1 or −1).
    Aim { turned_rad: f64, direction: f64 },
    /// Driving until nothing is left across.
    Shift { turned_rad: f64, direction: f64 },
    /// Turning back for the way along.
    Straighten,
    /// Driving along.
    Along,
    /// Turning to the heading.
    Turn,
    /// Within the dead band.
    Settled,
}

/// Brings the machine to rest at the reference's pose.
#[derive(Clone, Copy, Debug, Default)]
pub struct Settling {
    phase: Phase,
}

impl Settling {
    /// True once the machine is within the dead band.
    pub fn is_settled(&self) -> bool {
        self.phase == Phase::Settled
    }

    /// The body velocity wanted.
    pub fn control(&mut self, input: &Input<'_>, vehicle: &dyn Vehicle, gains: &RestGains) -> BodyVelocity {
        if vehicle.pivot_decel_rad_s2().is_none() {
            return self.along_only(input, vehicle, gains);
        }
        self.phase = self.next_phase(input, gains);
        let rate_1_s = gains.rate_1_s;
        let still = |turn_rate_rad_s: f64| BodyVelocity { speed_m_s: 0.0, turn_rate_rad_s };
        let turning = |turn_rad: f64| turn_towards(turn_rad, vehicle, rate_1_s);
        let off_rad = |turned_rad: f64| math::wrap(turned_rad - input.error.heading_rad);
        let driving = |way_m: f64, turn_rate_rad_s: f64| BodyVelocity {
            speed_m_s: drive_towards(way_m, vehicle, rate_1_s),
            turn_rate_rad_s,
        };
        match self.phase {
            Phase::Face { backwards } => still(turning(beyond(bearing(input, backwards), FACED_RAD))),
            Phase::Drive { backwards } => {
                let (alpha, distance_m) = (bearing(input, backwards), distance_m(input));
                let steers = distance_m > STRAIGHT_BANDS * gains.distance_m;
                let left_m = beyond(distance_m * math::cos_sin(alpha).0, REACHED * gains.distance_m);
                driving(if backwards { -left_m } else { left_m }, if steers { turning(alpha) } else { 0.0 })
            }
            Phase::Aim { turned_rad, .. } => still(turning(beyond(off_rad(turned_rad), SHIFT_SLACK_RAD))),
            Phase::Shift { turned_rad, direction } => {
                let left_m = (input.error.cross_m.abs() + gains.distance_m) / math::cos_sin(SHIFT_RAD).1;
                driving(direction * left_m, turning(off_rad(turned_rad)))
            }
            Phase::Straighten => still(turning(beyond(off_rad(0.0), SHIFT_SLACK_RAD))),
            Phase::Turn => still(turning(beyond(off_rad(0.0), REACHED * gains.heading_rad))),
            Phase::Along => {
                driving(beyond(-input.error.along_m, REACHED * gains.distance_m), turning(off_rad(0.0)))
            }
            Phase::Begin | Phase::Settled => BodyVelocity::ZERO,
        }
    }

    /// The body velocity wanted where the reference rests for a while: the heading is corrected, and the distance along it.
    pub fn hold(&mut self, input: &Input<'_>, vehicle: &dyn Vehicle, gains: &RestGains) -> BodyVelocity {
        if vehicle.pivot_decel_rad_s2().is_none() {
            return self.along_only(input, vehicle, gains);
        }
        let (e_x, _) = input.robot_frame_error_m();
        let turn_rad = input.error.heading_rad;
        let slack = if self.is_settled() { WAKE_FACTOR } else { REACHED };
        let near = e_x.abs() <= slack * gains.distance_m && turn_rad.abs() <= slack * gains.heading_rad;
        self.phase = if near { Phase::Settled } else { Phase::Begin };
        if near { BodyVelocity::ZERO } else { pivot(input, gains.rate_1_s) }
    }

    /// The phase in force now: the last one until it has reached what it is for.
    fn next_phase(&self, input: &Input<'_>, gains: &RestGains) -> Phase {
        let error = &input.error;
        let band_m = gains.distance_m;
        let distance_m = distance_m(input);
        let off_by = |turned_rad: f64| math::wrap(turned_rad - error.heading_rad).abs();
        let stays = match self.phase {
            Phase::Begin => false,
            Phase::Face { backwards } => bearing(input, backwards).abs() > FACED_RAD,
            Phase::Drive { backwards } => {
                let alpha = bearing(input, backwards);
                let lost = distance_m > STRAIGHT_BANDS * band_m && alpha.abs() > LOST_RAD;
                distance_m * math::cos_sin(alpha).0 > REACHED * band_m && !lost
            }
            Phase::Aim { turned_rad, .. } => off_by(turned_rad) > SHIFT_SLACK_RAD,
            Phase::Shift { turned_rad, direction } => is_beside(error, turned_rad, direction),
            Phase::Straighten => off_by(0.0) > SHIFT_SLACK_RAD,
            Phase::Along => error.along_m.abs() > REACHED * band_m,
            Phase::Turn => distance_m <= WAKE_FACTOR * band_m && off_by(0.0) > REACHED * gains.heading_rad,
            Phase::Settled => {
                distance_m <= WAKE_FACTOR * band_m && off_by(0.0) <= WAKE_FACTOR * gains.heading_rad
            }
        };
        match self.phase {
            phase if stays => phase,
            Phase::Face { backwards } => Phase::Drive { backwards },
            Phase::Aim { turned_rad, direction } if is_beside(error, turned_rad, direction) => {
                Phase::Shift { turned_rad, direction }
            }
            Phase::Shift { .. } => Phase::Straighten,
            Phase::Straighten if error.cross_m.abs() <= band_m => Phase::Along,
            _ => choose(input, gains),
        }
    }

    /// A machine that steers cannot correct what lies beside it at rest: it corrects the distance along its path.
    fn along_only(&mut self, input: &Input<'_>, vehicle: &dyn Vehicle, gains: &RestGains) -> BodyVelocity {
        let (e_x, _) = input.robot_frame_error_m();
        let slack = if self.is_settled() { WAKE_FACTOR } else { REACHED };
        if e_x.abs() <= slack * gains.distance_m {
            self.phase = Phase::Settled;
            return BodyVelocity::ZERO;
        }
        self.phase = Phase::Along;
        let curvature_1_m = input.reference.curvature_1_m;
        let speed_m_s = drive_towards(e_x, vehicle, gains.rate_1_s);
        BodyVelocity { speed_m_s, turn_rate_rad_s: speed_m_s * curvature_1_m }
    }
}

/// What a machine that has reached nothing yet does first.
fn choose(input: &Input<'_>, gains: &RestGains) -> Phase {
    let (error, band_m) = (&input.error, gains.distance_m);
    let distance_m = distance_m(input);
    if distance_m <= band_m {
        let aligned = error.heading_rad.abs() <= gains.heading_rad;
        return if aligned { Phase::Settled } else { Phase::Turn };
    }
    if distance_m > NEAR_BANDS * band_m {
        let backwards = turns_rad(input, true) < turns_rad(input, false);
        let faced = bearing(input, backwards).abs() <= FACED_RAD;
        return if faced { Phase::Drive { backwards } } else { Phase::Face { backwards } };
    }
    if error.cross_m.abs() <= ACROSS * band_m {
        return Phase::Straighten;
    }
    if input.motion.speed_m_s.abs() > gains.rate_1_s * REACHED * band_m {
        // On which side of the place the machine comes to rest is not known yet.
        return Phase::Begin;
    }
    // Drive to that side of the place on which the machine is: it has come from there.
    let direction = if error.along_m > 0.0 { 1.0 } else { -1.0 };
    Phase::Aim { turned_rad: -direction * SHIFT_RAD * error.cross_m.signum(), direction }
}

/// Whether a shift still has a way across to make good: as the machine drives, it goes to zero from the side that the
/// turn was chosen for.
fn is_beside(error: &TrackingError, turned_rad: f64, direction: f64) -> bool {
    error.cross_m * turned_rad * direction < 0.0
}

/// How far the place is, m.
fn distance_m(input: &Input<'_>) -> f64 {
    input.pose.distance_to(input.reference.pose)
}

/// Where the place lies, seen from the bow of the machine, or from its stern if it drives backwards, rad.
fn bearing(input: &Input<'_>, backwards: bool) -> f64 {
    let (e_x, e_y) = input.robot_frame_error_m();
    if backwards { math::atan2(-e_y, -e_x) } else { math::atan2(e_y, e_x) }
}

/// How far the machine has to turn in all to face the place, and to the reference's heading there, rad.
fn turns_rad(input: &Input<'_>, backwards: bool) -> f64 {
    let alpha = bearing(input, backwards);
    alpha.abs() + math::wrap(input.error.heading_rad + alpha).abs()
}

/// What is left, and beyond by what ends a phase: or it would only ever come near to its end.
fn beyond(left: f64, end: f64) -> f64 {
    left + end * left.signum()
}

/// Follows a reference that turns on the spot: the heading by its error; the place by driving, as the machine turns,
/// whatever part of the way to it lies straight ahead or behind, which never takes it farther away.
pub fn pivot(input: &Input<'_>, rate_1_s: f64) -> BodyVelocity {
    BodyVelocity {
        speed_m_s: rate_1_s * input.robot_frame_error_m().0,
        turn_rate_rad_s: input.reference.velocity.turn_rate_rad_s - rate_1_s * input.error.heading_rad,
    }
}

/// Turns on the spot by `turn_rad`, as fast as the machine can brake again; zero on one that cannot turn on the spot.
pub fn turn_towards(turn_rad: f64, vehicle: &dyn Vehicle, rate_1_s: f64) -> f64 {
    let fastest = vehicle.pivot_decel_rad_s2().map_or(0.0, |decel| braking(decel, turn_rad.abs()));
    (rate_1_s * turn_rad).clamp(-fastest, fastest)
}

/// Drives straight by `way_m`, as fast as the machine can brake again.
fn drive_towards(way_m: f64, vehicle: &dyn Vehicle, rate_1_s: f64) -> f64 {
    let fastest = braking(vehicle.path_decel_m_s2(0.0), way_m.abs());
    (rate_1_s * way_m).clamp(-fastest, fastest)
}

/// The speed from which a deceleration, less a reserve, comes to rest within `way`.
fn braking(decel: f64, way: f64) -> f64 {
    math::sqrt(2.0 * BRAKING_SHARE * decel * way)
}
