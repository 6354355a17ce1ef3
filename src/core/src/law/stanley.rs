//! Stanley's law: Hoffmann, Tomlin, Montemerlo and Thrun, "Autonomous automobile trajectory tracking for off-road driving:
//! controller design, experimental validation and racing", American Control Conference 2007.
//!
//! Forward the front axle leads. With e its distance to the left of its own path, ψ the heading of that path minus the
//! machine's, and v_f its speed, the steering angle is δ = ψ − atan(k e/(k_soft + v_f)). With k_soft = 0 the wheel then
//! comes in by e' = −v_f sin(atan(k e/v_f)), whatever the path. The path of the front axle follows from the chassis
//! point's: it runs at δ_d = atan(L κ_d) to the reference's heading, so the law needs no other feed-forward.
//!
//! In reverse the paper says nothing, and the steered wheel trails. The rear axle leads then, and with e its distance to
//! the left and p the machine's heading minus its path's: δ = δ_d + p − atan(g e). Linearised
//! e'' + (|v|/L) e' + (v² g/L) e = 0, so g = 1/(4 ζ² L) gives the damping ζ, whatever the speed (by algebra).
//!
//! The nearest place of the path is sought along the references ahead; what lies behind the reference is taken to be the
//! circle on which it moves. The plan's timing is kept by the speed: v = v_d − k_along x_e.

use super::way::{Pace, moves};
use super::{Context, Domain, Input, Kind, Law, Machines, Wanted};
use crate::geometry::{BodyVelocity, Direction};
use crate::keys::{Bound, Key, Problem, Values};
use crate::math::{self, FRAC_PI_2};
use crate::plan::Reference;
use alloc::boxed::Box;
use alloc::vec;
use alloc::vec::Vec;

/// How many references are looked at for the nearest place: each one leaves the error's square times the curvature.
const MOST_REFERENCES: usize = 8;
/// Nearer than this along the path, the circle through the place tells the rest exactly enough, m.
const NEAR_M: f64 = 1e-9;
/// The longest step along the references, s: a reference that hardly moves would send the search far ahead.
const LONGEST_STEP_S: f64 = 1.0;
/// The steering angle wanted at most, rad: short of a right angle, where its tangent has no end, and beyond what a car
/// can steer. The machine's own limit acts on what is wanted.
const MAX_STEER_RAD: f64 = 1.4;

pub(super) const KIND: Kind = Kind {
    name: "stanley",
    gains: &[
        Key::with_default(
            "k",
            "1/s",
            2.5,
            Bound::positive(100.0),
            "feedback of the front axle's cross-track error: at speed its inverse is the time in which it decays; too much \
             of it with dead time or a slow steering makes the machine weave",
        ),
        Key::with_default(
            "k_soft",
            "m/s",
            1.0,
            Bound::within(0.0, 100.0),
            "softens the feedback at speeds around this and below; at 0 noise swings the wheels of a slow machine",
        ),
        Key::with_default(
            "reverse_damping",
            "",
            0.8,
            Bound::within(0.3, 10.0),
            "damping in reverse: 1 is critical, below it the machine weaves, above it comes back slowly",
        ),
        Key::with_default(
            "k_along",
            "1/s",
            1.0,
            Bound::positive(100.0),
            "feedback of the along-track error; too much of it with dead time makes the speed swing",
        ),
    ],
    // Linearised e' = −k v/(k_soft + v) e; k_soft is half the design speed.
    design: Some(|design| {
        vec![
            ("k", 1.5 * design.bandwidth_rad_s),
            ("k_soft", 0.5 * design.speed_m_s()),
            ("reverse_damping", design.damping),
            ("k_along", design.bandwidth_rad_s),
        ]
    }),
    machines: Machines::Steered,
    build: Stanley::build,
};

#[derive(Debug)]
struct Stanley {
    wheelbase_m: f64,
    k: f64,
    k_soft_m_s: f64,
    reverse_damping: f64,
    k_along: f64,
}

/// The leading axle against its path at the nearest place.
#[derive(Clone, Copy, Debug)]
struct Nearest {
    /// The axle's distance to the left of the path, m.
    offset_m: f64,
    /// Heading of the path minus the machine's, rad.
    path_heading_rad: f64,
    /// The steering angle at which the reference moves there, rad.
    steer_rad: f64,
}

impl Stanley {
    fn build(gains: &Values, context: &Context) -> Result<Box<dyn Law>, Vec<Problem>> {
        let Some(wheelbase_m) = context.vehicle.wheelbase_m() else {
            return Err(vec![Problem::new("k", "there is no steered axle to lead; give another law")]);
        };
        Ok(Box::new(Self {
            wheelbase_m,
            k: gains.get("k"),
            k_soft_m_s: gains.get("k_soft"),
            reverse_damping: gains.get("reverse_damping"),
            k_along: gains.get("k_along"),
        }))
    }

    fn steer_rad(&self, curvature_1_m: f64) -> f64 {
        math::atan(self.wheelbase_m * curvature_1_m)
    }

    /// The feedback of the cross-track error in reverse, 1/m.
    fn reverse_gain_1_m(&self) -> f64 {
        1.0 / (4.0 * self.reverse_damping * self.reverse_damping * self.wheelbase_m)
    }

    /// The speed of the front axle as the machine moves, m/s.
    fn front_speed_m_s(&self, motion: BodyVelocity) -> f64 {
        math::length(motion.speed_m_s, motion.turn_rate_rad_s * self.wheelbase_m)
    }

    fn nearest(&self, input: &Input<'_>, way: f64) -> Nearest {
        let lead_m = if way > 0.0 { self.wheelbase_m } else { 0.0 };
        let mut place = Place::of(input, input.reference, lead_m);
        let mut at = 0.0;
        for _ in 0..MOST_REFERENCES {
            if !moves(&place.reference, way) || place.along_m.abs() <= NEAR_M {
                break;
            }
            let step_s = (place.along_m / place.speed_m_s).min(LONGEST_STEP_S);
            let next_at = (at + step_s).max(0.0);
            if next_at == at {
                break;
            }
            let next = input.ahead.reference(next_at);
            if !moves(&next, way) {
                break;
            }
            (place, at) = (Place::of(input, next, lead_m), next_at);
        }
        place.nearest(self.steer_rad(place.reference.curvature_1_m))
    }

    fn steering_rad(&self, input: &Input<'_>, way: f64) -> f64 {
        let Nearest { offset_m, path_heading_rad, steer_rad } = self.nearest(input, way);
        let wanted = if way > 0.0 {
            let speed = self.k_soft_m_s + self.front_speed_m_s(input.motion);
            math::wrap(path_heading_rad) - math::atan2(self.k * offset_m, speed)
        } else {
            steer_rad - math::wrap(path_heading_rad) - math::atan(self.reverse_gain_1_m() * offset_m)
        };
        wanted.clamp(-MAX_STEER_RAD, MAX_STEER_RAD)
    }
}

/// The leading axle seen from a place that the leading axle of the reference passes.
#[derive(Clone, Copy, Debug)]
struct Place {
    reference: Reference,
    /// The axle's place in the frame of the path's tangent, m.
    along_m: f64,
    cross_m: f64,
    /// Heading of the tangent minus the machine's, rad.
    heading_rad: f64,
    /// Speed of the reference's axle, signed like the reference's, m/s.
    speed_m_s: f64,
    /// Curvature of the axle's path, 1/m.
    curvature_1_m: f64,
}

impl Place {
    /// The axle leads by `lead_m` ahead of the chassis point.
    fn of(input: &Input<'_>, reference: Reference, lead_m: f64) -> Self {
        // The tangent of the angle between the reference's heading and its axle's path.
        let slope = lead_m * reference.curvature_1_m;
        let stretch = math::length(1.0, slope);
        let tangent = Direction { cos: 1.0 / stretch, sin: slope / stretch };
        let (direction, wanted) = (input.direction, reference.direction);
        let (x, y) = wanted.into_frame(
            input.pose.x_m - reference.pose.x_m + lead_m * (direction.cos - wanted.cos),
            input.pose.y_m - reference.pose.y_m + lead_m * (direction.sin - wanted.sin),
        );
        let (along_m, cross_m) = tangent.into_frame(x, y);
        Self {
            reference,
            along_m,
            cross_m,
            heading_rad: reference.pose.heading_rad - input.pose.heading_rad + math::atan(slope),
            speed_m_s: reference.velocity.speed_m_s * stretch,
            curvature_1_m: reference.curvature_1_m / stretch,
        }
    }

    /// The nearest place on the circle on which the reference's axle moves, where it moves steered by an angle.
    fn nearest(&self, steer_rad: f64) -> Nearest {
        let Self { along_m, cross_m, curvature_1_m: bend, .. } = *self;
        let (aside, towards) = (bend * along_m, 1.0 - bend * cross_m);
        // 1/κ − √(along² + (1/κ − cross)²), written so that it holds for a line too.
        let offset_m = (2.0 * cross_m - bend * (along_m * along_m + cross_m * cross_m))
            / (1.0 + math::length(aside, towards));
        Nearest { offset_m, path_heading_rad: self.heading_rad + math::atan2(aside, towards), steer_rad }
    }
}

impl Law for Stanley {
    fn control(&mut self, input: &Input<'_>) -> Wanted {
        let pace = Pace::keep(input, self.k_along);
        let steering = self.steering_rad(input, pace.way);
        let reference = input.reference.velocity;
        // On the spot there is no path to follow: the reference's own turn.
        let turning = if reference.speed_m_s == 0.0 { reference.turn_rate_rad_s } else { 0.0 };
        BodyVelocity {
            speed_m_s: pace.speed_m_s,
            turn_rate_rad_s: pace.speed_m_s * math::tan(steering) / self.wheelbase_m + turning,
        }
        .into()
    }

    fn bandwidth_rad_s(&self, speed_m_s: f64) -> f64 {
        if speed_m_s < 0.0 {
            return -speed_m_s / (2.0 * self.reverse_damping * self.wheelbase_m);
        }
        self.k * speed_m_s / (self.k_soft_m_s + speed_m_s)
    }

    fn domain(&self) -> Domain {
        Domain { max_heading_error_rad: FRAC_PI_2, pivots: false, at_rest: false, ..Domain::EVERYWHERE }
    }
}
