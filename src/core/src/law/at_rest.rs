//! Feedback where a tracking law has little to say: the reference turns on the spot, rests, or the heading is too far off.
//!
//! No smooth static feedback brings a unicycle to rest at a pose (Brockett 1983), so settling has phases. From afar it
//! drives to the place with the polar feedback of Aicardi, Casalino, Bicchi and Balestrino (IEEE Robotics and Automation
//! Magazine 2(1), 1995). Near by, where that would turn a heavy machine by a right angle for the sake of a centimetre, it
//! shifts sideways as a driver does: turn a little, drive until the way across is made good, turn back, drive along. Then
//! it corrects the heading alone, and rests within a dead band.
//!
//! With ρ the distance to the place, α its bearing in the robot's frame and θ its bearing in the reference's:
//! v = γ ρ cos α, ω = k α + γ cos α (sin α/α)(α + h θ); V = (α² + h θ²)/2 + λ ρ²/2 never grows. Where the place lies
//! behind, the same holds for the machine driving backwards, with both headings turned by π.

use super::{Input, Rested};
use crate::geometry::BodyVelocity;
use crate::math;
use crate::vehicle::Vehicle;

/// Weight h of the reference's bearing against the robot's.
const BEARING_WEIGHT: f64 = 1.0;
/// k over γ: turns towards the place twice as fast as it comes nearer.
const TURN_WEIGHT: f64 = 2.0;
/// The share of the deceleration that an approach to rest reckons with; the rest is left for what it did not reckon with.
const BRAKING_SHARE: f64 = 0.7;
/// From farther away than this many dead bands the machine drives to the place, nearer it shifts.
const NEAR_BANDS: f64 = 6.0;
/// How far it turns for a shift, rad: it then drives three times the way across.
const SHIFT_RAD: f64 = 0.35;
/// A turn of a shift is over within this, rad.
const SHIFT_SLACK_RAD: f64 = 0.03;
/// What a phase has to reach, in dead bands: the phases after it stay within the band then.
const REACHED: f64 = 0.3;
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
    /// Driving to a place far away, backwards or not.
    Approach { backwards: bool },
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
        let towards = |turned_rad: f64| {
            turn_towards(math::wrap(turned_rad - input.error.heading_rad), vehicle, rate_1_s)
        };
        let still = |turn_rate_rad_s: f64| BodyVelocity { speed_m_s: 0.0, turn_rate_rad_s };
        let driving = |way_m: f64, turn_rate_rad_s: f64| BodyVelocity {
            speed_m_s: drive_towards(way_m, vehicle, rate_1_s),
            turn_rate_rad_s,
        };
        match self.phase {
            Phase::Approach { backwards } => approach(input, backwards, vehicle, rate_1_s),
            Phase::Aim { turned_rad, .. } => still(towards(turned_rad)),
            Phase::Shift { turned_rad, direction } => {
                // Beyond what is left by what ends the phase, or it would only ever come near to it.
                let left_m = (input.error.cross_m.abs() + gains.distance_m) / math::cos_sin(SHIFT_RAD).1;
                driving(direction * left_m, towards(turned_rad))
            }
            Phase::Straighten | Phase::Turn => still(towards(0.0)),
            Phase::Along => driving(-input.error.along_m, towards(0.0)),
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
        let distance_m = input.pose.distance_to(input.reference.pose);
        let off_by = |turned_rad: f64| math::wrap(turned_rad - error.heading_rad).abs();
        match self.phase {
            Phase::Approach { .. } if distance_m > REACHED * band_m => self.phase,
            Phase::Aim { turned_rad, direction } if off_by(turned_rad) < SHIFT_SLACK_RAD => {
                Phase::Shift { turned_rad, direction }
            }
            Phase::Aim { .. } => self.phase,
            // As the machine drives, the error across goes to zero from the side that the turn was chosen for.
            Phase::Shift { turned_rad, direction } if error.cross_m * turned_rad * direction < 0.0 => {
                Phase::Shift { turned_rad, direction }
            }
            Phase::Shift { .. } => Phase::Straighten,
            Phase::Straighten if off_by(0.0) < SHIFT_SLACK_RAD => Phase::Along,
            Phase::Straighten => self.phase,
            Phase::Along if error.along_m.abs() > REACHED * band_m => self.phase,
            Phase::Turn
                if distance_m <= WAKE_FACTOR * band_m && off_by(0.0) > REACHED * gains.heading_rad =>
            {
                self.phase
            }
            Phase::Settled
                if distance_m <= WAKE_FACTOR * band_m && off_by(0.0) <= WAKE_FACTOR * gains.heading_rad =>
            {
                self.phase
            }
            _ => choose(input, distance_m, gains),
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
fn choose(input: &Input<'_>, distance_m: f64, gains: &RestGains) -> Phase {
    let error = &input.error;
    if distance_m <= gains.distance_m {
        let aligned = error.heading_rad.abs() <= gains.heading_rad;
        return if aligned { Phase::Settled } else { Phase::Turn };
    }
    if distance_m > NEAR_BANDS * gains.distance_m {
        return Phase::Approach { backwards: input.robot_frame_error_m().0 < 0.0 };
    }
    if error.cross_m.abs() <= REACHED * gains.distance_m {
        return Phase::Straighten;
    }
    // Drive to that side of the place on which the machine is: it has come from there.
    let direction = if error.along_m > 0.0 { 1.0 } else { -1.0 };
    Phase::Aim { turned_rad: -direction * SHIFT_RAD * error.cross_m.signum(), direction }
}

/// The polar feedback.
fn approach(input: &Input<'_>, backwards: bool, vehicle: &dyn Vehicle, rate_1_s: f64) -> BodyVelocity {
    let (e_x, e_y) = input.robot_frame_error_m();
    let distance_m = math::length(e_x, e_y);
    let (sign, turned) = if backwards { (-1.0, math::PI) } else { (1.0, 0.0) };
    let alpha = math::wrap(math::atan2(e_y, e_x) - turned);
    let theta = math::wrap(alpha + input.error.heading_rad);
    let (cos, _) = math::cos_sin(alpha);
    let speed_m_s = drive_towards(distance_m, vehicle, rate_1_s);
    // γ of the law, lowered where braking asks for it.
    let slowed_1_s = speed_m_s / distance_m;
    let curving = slowed_1_s * cos * math::sinc(alpha) * (alpha + BEARING_WEIGHT * theta);
    BodyVelocity {
        speed_m_s: sign * speed_m_s * cos,
        turn_rate_rad_s: turn_towards(alpha, vehicle, TURN_WEIGHT * rate_1_s) + curving,
    }
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
