//! Samson's nonlinear law in the chained form's coordinates: Morin and Samson, "Motion control of wheeled mobile robots",
//! Springer Handbook of Robotics, chapter 34, 2008.
//!
//! With the error (x_e, y_e, φ_e) = pose − reference in the reference's frame:
//! v = (v_d − k_1 |v_d| (x_e + y_e tan φ_e)) / cos φ_e, ω = ω_d − (k_2 v_d y_e + k_3 |v_d| tan φ_e) cos² φ_e.
//! Forward and reverse, straight and curved; |φ_e| < π/2; without feedback at v_d = 0.

use super::integral::{self, CrossIntegral};
use super::{Context, Domain, Input, Kind, Law, Machines, Wanted};
use crate::geometry::{BodyVelocity, Direction};
use crate::keys::{Bound, Key, Problem, Values};
use crate::math;
use alloc::boxed::Box;
use alloc::vec;
use alloc::vec::Vec;

/// At a right angle 1/cos φ_e is infinite; short of it by this much it is 11, and the limits still see a usable ratio of
/// v to ω, rad.
const MAX_HEADING_ERROR_RAD: f64 = 1.48;

pub(super) const KIND: Kind = Kind {
    name: "samson",
    gains: &[
        Key::with_default(
            "k_1",
            "1/m",
            1.0,
            Bound::positive(100.0),
            "feedback of the along-track error per metre travelled",
        ),
        Key::with_default(
            "k_2",
            "1/m²",
            4.0,
            Bound::positive(1000.0),
            "feedback of the cross-track error; 1/√k_2 is the distance in which it decays",
        ),
        Key::with_default(
            "k_3",
            "1/m",
            4.0,
            Bound::positive(200.0),
            "feedback of the heading error; critically damped at 2 √k_2, below it the machine weaves",
        ),
        integral::KEY,
    ],
    design: Some(|design| {
        vec![
            ("k_1", design.per_metre_1_m),
            ("k_2", design.per_metre_1_m * design.per_metre_1_m),
            ("k_3", 2.0 * design.damping * design.per_metre_1_m),
        ]
    }),
    machines: Machines::All,
    build: Samson::build,
};

#[derive(Debug)]
struct Samson {
    k_1: f64,
    k_2: f64,
    k_3: f64,
    integral: CrossIntegral,
}

impl Samson {
    fn build(gains: &Values, _context: &Context) -> Result<Box<dyn Law>, Vec<Problem>> {
        let (k_2, k_3) = (gains.get("k_2"), gains.get("k_3"));
        let integral = CrossIntegral::new(gains.get("k_i"), k_2 * k_3)?;
        Ok(Box::new(Self { k_1: gains.get("k_1"), k_2, k_3, integral }))
    }
}

/// The direction of a heading error; past the domain's edge that of the edge, so that the law stays finite and turns back.
fn within_domain(error: Direction) -> Direction {
    let edge = Direction::of(MAX_HEADING_ERROR_RAD);
    if error.cos >= edge.cos {
        error
    } else {
        Direction { sin: if error.sin < 0.0 { -edge.sin } else { edge.sin }, ..edge }
    }
}

impl Law for Samson {
    fn control(&mut self, input: &Input<'_>) -> Wanted {
        let wanted = input.reference.velocity;
        let (x_e, y_e) = (input.error.along_m, input.error.cross_m);
        let error = within_domain(input.direction.relative_to(input.reference.direction));
        let tan = error.sin / error.cos;
        let speed = wanted.speed_m_s;
        let turn_rate = wanted.turn_rate_rad_s
            - (self.k_2 * speed * y_e + self.k_3 * speed.abs() * tan) * error.cos * error.cos;
        BodyVelocity {
            speed_m_s: (speed - self.k_1 * speed.abs() * (x_e + y_e * tan)) / error.cos,
            turn_rate_rad_s: self.integral.added_to(turn_rate, input),
        }
        .into()
    }

    fn bandwidth_rad_s(&self, speed_m_s: f64) -> f64 {
        // Overdamped, the heading's pole is the faster one.
        speed_m_s.abs() * math::sqrt(self.k_2).max(0.5 * self.k_3)
    }

    fn domain(&self) -> Domain {
        Domain {
            max_heading_error_rad: MAX_HEADING_ERROR_RAD,
            pivots: false,
            at_rest: false,
            ..Domain::EVERYWHERE
        }
    }

    fn settle(&mut self, input: &Input<'_>, limited: bool, seconds: f64) {
        self.integral.settle(input, limited, seconds);
    }

    fn reset(&mut self, _motion: BodyVelocity) {
        self.integral.reset();
    }
}
