//! Kanayama, Kimura, Miyazaki and Noguchi, "A stable tracking control method for an autonomous mobile robot", ICRA 1990.
//!
//! With the error e = reference − pose in the robot's frame:
//! v = v_d cos e_φ + k_x e_x, ω = ω_d + v_d k_y e_y + |v_d| k_φ sin e_φ.
//! The paper has v_d on the last term; |v_d| makes it hold in reverse too. Linearised, the lateral motion has the natural
//! frequency |v_d| √k_y and the damping k_φ/(2√k_y): its shape is fixed per metre travelled. At v_d = 0 there is no
//! heading feedback.

use super::integral::{self, CrossIntegral};
use super::{Context, Domain, Input, Kind, Law, Machines, Wanted};
use crate::geometry::BodyVelocity;
use crate::keys::{Bound, Key, Problem, Values};
use crate::math;
use alloc::boxed::Box;
use alloc::vec;
use alloc::vec::Vec;

pub(super) const KIND: Kind = Kind {
    name: "kanayama",
    gains: &[
        Key::with_default(
            "k_x",
            "1/s",
            1.0,
            Bound::positive(100.0),
            "feedback of the along-track error; too much of it with dead time makes the speed swing",
        ),
        Key::with_default(
            "k_y",
            "1/m²",
            4.0,
            Bound::positive(1000.0),
            "feedback of the cross-track error; 1/√k_y is the distance in which it decays",
        ),
        Key::with_default(
            "k_heading",
            "1/m",
            4.0,
            Bound::positive(200.0),
            "feedback of the heading error; critically damped at 2 √k_y, below it the machine weaves",
        ),
        integral::KEY,
    ],
    design: Some(|design| {
        vec![
            ("k_x", design.bandwidth_rad_s),
            ("k_y", design.per_metre_1_m * design.per_metre_1_m),
            ("k_heading", 2.0 * design.damping * design.per_metre_1_m),
        ]
    }),
    machines: Machines::All,
    build: Kanayama::build,
};

#[derive(Debug)]
struct Kanayama {
    k_x: f64,
    k_y: f64,
    k_heading: f64,
    integral: CrossIntegral,
}

impl Kanayama {
    fn build(gains: &Values, _context: &Context) -> Result<Box<dyn Law>, Vec<Problem>> {
        let (k_y, k_heading) = (gains.get("k_y"), gains.get("k_heading"));
        let integral = CrossIntegral::new(gains.get("k_i"), k_y * k_heading)?;
        Ok(Box::new(Self { k_x: gains.get("k_x"), k_y, k_heading, integral }))
    }
}

impl Law for Kanayama {
    fn control(&mut self, input: &Input<'_>) -> Wanted {
        let wanted = input.reference.velocity;
        let (e_x, e_y) = input.robot_frame_error_m();
        // cos e_φ and sin e_φ by the addition theorem: both directions are known.
        let error = input.reference.direction.relative_to(input.direction);
        let speed = wanted.speed_m_s;
        let turn_rate =
            wanted.turn_rate_rad_s + speed * self.k_y * e_y + speed.abs() * self.k_heading * error.sin;
        BodyVelocity {
            speed_m_s: speed * error.cos + self.k_x * e_x,
            turn_rate_rad_s: self.integral.added_to(turn_rate, input),
        }
        .into()
    }

    fn bandwidth_rad_s(&self, speed_m_s: f64) -> f64 {
        // Overdamped, the heading's pole is the faster one.
        speed_m_s.abs() * math::sqrt(self.k_y).max(0.5 * self.k_heading)
    }

    fn domain(&self) -> Domain {
        Domain { pivots: false, at_rest: false, ..Domain::EVERYWHERE }
    }

    fn settle(&mut self, input: &Input<'_>, limited: bool, seconds: f64) {
        self.integral.settle(input, limited, seconds);
    }

    fn reset(&mut self, _motion: BodyVelocity) {
        self.integral.reset();
    }
}
