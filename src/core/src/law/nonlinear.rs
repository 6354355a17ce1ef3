//! The nonlinear design: De Luca, Oriolo and Samson, "Feedback control of a nonholonomic car-like robot", in Laumond (ed.),
//! Robot Motion Planning and Control, Springer LNCIS 229, 1998.
//!
//! With the error e = reference − pose in the robot's frame: v = v_d cos e_φ + k_1 e_x,
//! ω = ω_d + b v_d (sin e_φ/e_φ) e_y + k_3 e_φ, k_1 = k_3 = 2ζ√(ω_d² + b v_d²). About zero it is the linear design; far
//! from it V = b (e_x² + e_y²)/2 + e_φ²/2 never grows, as V' = −b k_1 e_x² − k_3 e_φ² in both directions. The error goes to
//! zero unless v_d and ω_d both vanish; at rest there is no feedback.

use super::integral::{self, CrossIntegral};
use super::linear::{B, ZETA, integral_bound, scheduled_gain};
use super::{Context, Domain, Input, Kind, Law, Machines, Wanted};
use crate::geometry::BodyVelocity;
use crate::keys::{Problem, Values};
use crate::math;
use alloc::boxed::Box;
use alloc::vec;
use alloc::vec::Vec;

pub(super) const KIND: Kind = Kind {
    name: "nonlinear",
    gains: &[B, ZETA, integral::KEY],
    design: Some(|design| vec![("b", design.per_metre_1_m * design.per_metre_1_m), ("zeta", design.damping)]),
    machines: Machines::All,
    build: Nonlinear::build,
};

#[derive(Debug)]
struct Nonlinear {
    b_1_m2: f64,
    zeta: f64,
    integral: CrossIntegral,
}

impl Nonlinear {
    fn build(gains: &Values, _context: &Context) -> Result<Box<dyn Law>, Vec<Problem>> {
        let (b_1_m2, zeta) = (gains.get("b"), gains.get("zeta"));
        let integral = CrossIntegral::new(gains.get("k_i"), integral_bound(b_1_m2, zeta))?;
        Ok(Box::new(Self { b_1_m2, zeta, integral }))
    }
}

/// The law's formula, for those that fall back to it.
pub(super) fn follow(input: &Input<'_>, b_1_m2: f64, zeta: f64) -> BodyVelocity {
    let wanted = input.reference.velocity;
    let (e_x, e_y) = input.robot_frame_error_m();
    let gain = scheduled_gain(wanted, b_1_m2, zeta);
    let e_heading = -input.error.heading_rad;
    let cos = input.reference.direction.relative_to(input.direction).cos;
    BodyVelocity {
        speed_m_s: wanted.speed_m_s * cos + gain * e_x,
        turn_rate_rad_s: wanted.turn_rate_rad_s
            + b_1_m2 * wanted.speed_m_s * math::sinc(e_heading) * e_y
            + gain * e_heading,
    }
}

impl Law for Nonlinear {
    fn control(&mut self, input: &Input<'_>) -> Wanted {
        let mut velocity = follow(input, self.b_1_m2, self.zeta);
        velocity.turn_rate_rad_s = self.integral.added_to(velocity.turn_rate_rad_s, input);
        velocity.into()
    }

    fn bandwidth_rad_s(&self, speed_m_s: f64) -> f64 {
        // Above ζ = 1 the heading's pole is the faster one.
        speed_m_s.abs() * math::sqrt(self.b_1_m2) * self.zeta.max(1.0)
    }

    fn domain(&self) -> Domain {
        Domain { at_rest: false, ..Domain::EVERYWHERE }
    }

    fn settle(&mut self, input: &Input<'_>, limited: bool, seconds: f64) {
        self.integral.settle(input, limited, seconds);
    }

    fn reset(&mut self, _motion: BodyVelocity) {
        self.integral.reset();
    }
}
