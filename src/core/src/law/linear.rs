//! The linear design with velocity scheduling: De Luca, Oriolo and Samson, "Feedback control of a nonholonomic car-like
//! robot", in Laumond (ed.), Robot Motion Planning and Control, Springer LNCIS 229, 1998.
//!
//! With the error e = reference − pose in the robot's frame: v = v_d cos e_φ + k_1 e_x, ω = ω_d + k_2 e_y + k_3 e_φ, with
//! k_1 = k_3 = 2ζa, k_2 = b v_d (which has the direction's sign) and a² = ω_d² + b v_d². Linearised, the error has the polynomial
//! (s + 2ζa)(s² + 2ζa s + a²) on lines and arcs, forward, in reverse and on the spot. As a vanishes with the motion of the
//! reference there is no singularity, and at rest no feedback.

use super::integral::{self, CrossIntegral};
use super::{Context, Domain, Input, Kind, Law, Machines, Wanted};
use crate::geometry::BodyVelocity;
use crate::keys::{Bound, Key, Problem, Values};
use crate::math;
use alloc::boxed::Box;
use alloc::vec;
use alloc::vec::Vec;

/// The gains that the linear and the nonlinear design share.
pub(super) const B: Key = Key::with_default(
    "b",
    "1/m²",
    4.0,
    Bound::positive(1000.0),
    "feedback of the cross-track error; 1/√b is the distance in which it decays",
);
/// See [`B`].
pub(super) const ZETA: Key = Key::with_default(
    "zeta",
    "",
    1.0,
    Bound::within(0.1, 10.0),
    "damping ratio ζ of the motion across the path; below 0.5 the machine weaves",
);

pub(super) const KIND: Kind = Kind {
    name: "linear",
    gains: &[B, ZETA, integral::KEY],
    design: Some(|design| vec![("b", design.per_metre_1_m * design.per_metre_1_m), ("zeta", design.damping)]),
    machines: Machines::All,
    build: Linear::build,
};

#[derive(Debug)]
struct Linear {
    b_1_m2: f64,
    zeta: f64,
    integral: CrossIntegral,
}

impl Linear {
    fn build(gains: &Values, _context: &Context) -> Result<Box<dyn Law>, Vec<Problem>> {
        let (b_1_m2, zeta) = (gains.get("b"), gains.get("zeta"));
        let integral = CrossIntegral::new(gains.get("k_i"), integral_bound(b_1_m2, zeta))?;
        Ok(Box::new(Self { b_1_m2, zeta, integral }))
    }
}

/// The integral's greatest gain on a line: k_y k_φ = b · 2ζ√b.
pub(super) fn integral_bound(b_1_m2: f64, zeta: f64) -> f64 {
    2.0 * zeta * b_1_m2 * math::sqrt(b_1_m2)
}

/// 2ζa with a² = ω_d² + b v_d²: the gain of the along-track and the heading error in both designs, 1/s.
pub(super) fn scheduled_gain(velocity: BodyVelocity, b_1_m2: f64, zeta: f64) -> f64 {
    let BodyVelocity { speed_m_s, turn_rate_rad_s } = velocity;
    2.0 * zeta * math::sqrt(turn_rate_rad_s * turn_rate_rad_s + b_1_m2 * speed_m_s * speed_m_s)
}

impl Law for Linear {
    fn control(&mut self, input: &Input<'_>) -> Wanted {
        let wanted = input.reference.velocity;
        let (e_x, e_y) = input.robot_frame_error_m();
        let gain = scheduled_gain(wanted, self.b_1_m2, self.zeta);
        let e_heading = -input.error.heading_rad;
        let turn_rate = wanted.turn_rate_rad_s + self.b_1_m2 * wanted.speed_m_s * e_y + gain * e_heading;
        let cos = input.reference.direction.relative_to(input.direction).cos;
        BodyVelocity {
            speed_m_s: wanted.speed_m_s * cos + gain * e_x,
            turn_rate_rad_s: self.integral.added_to(turn_rate, input),
        }
        .into()
    }

    fn bandwidth_rad_s(&self, speed_m_s: f64) -> f64 {
        // Above ζ = 1 the heading's pole is the faster one.
        speed_m_s.abs() * math::sqrt(self.b_1_m2) * self.zeta.max(1.0)
    }

    fn domain(&self) -> Domain {
        // Designed about zero: past a right angle the feed-forward v_d cos e_φ drives backwards.
        Domain { max_heading_error_rad: math::FRAC_PI_2, pivots: true, at_rest: false, ..Domain::EVERYWHERE }
    }

    fn settle(&mut self, input: &Input<'_>, limited: bool, seconds: f64) {
        self.integral.settle(input, limited, seconds);
    }

    fn reset(&mut self, _motion: BodyVelocity) {
        self.integral.reset();
    }
}
