//! Dynamic feedback linearisation: Oriolo, De Luca and Vendittelli, "WMR control via dynamic feedback linearization", IEEE
//! Transactions on Control Systems Technology 10(6), 2002.
//!
//! The speed ξ becomes a state: v = ξ, ξ' = u_1 cos φ + u_2 sin φ, ω = (u_2 cos φ − u_1 sin φ)/ξ; then the position obeys
//! p̈ = u, and u = p̈_d + k_d (ṗ_d − ṗ) + k_p (p_d − p) gives each axis the polynomial s² + k_d s + k_p, whatever the heading.
//!
//! ξ is the speed that the last command amounts to: what the limits took away is never kept in mind, and the law takes over
//! from a moving machine without a bump. At ξ = 0 the law is singular, which no gain mends: a machine that is not moving
//! cannot move aside. Below `least_speed_m_s`, of the reference or of the machine, or where they move opposite ways, the
//! nonlinear design steers instead, and the result says so.

use super::{Context, Domain, Input, Kind, Law, Machines, Wanted, nonlinear};
use crate::geometry::BodyVelocity;
use crate::keys::{Bound, Key, Problem, Values};
use crate::math;
use alloc::boxed::Box;
use alloc::vec;
use alloc::vec::Vec;

/// The law takes over where both speeds exceed the least one by this factor, and gives up below it: without, noise of
/// the speed would toss the machine between two laws.
const TAKE_OVER: f64 = 1.25;

pub(super) const KIND: Kind = Kind {
    name: "dynamic",
    gains: &[
        Key::with_default(
            "k_p",
            "1/s²",
            1.0,
            Bound::positive(1e4),
            "feedback of the position error; √k_p is the natural frequency",
        ),
        Key::with_default(
            "k_d",
            "1/s",
            2.0,
            Bound::positive(1e3),
            "feedback of the velocity error; critically damped at 2 √k_p, below it the machine weaves",
        ),
        Key::with_default(
            "b",
            "1/m²",
            4.0,
            Bound::positive(1000.0),
            "the nonlinear law's feedback of the cross-track error, while that steers instead",
        ),
        Key::with_default(
            "least_speed_m_s",
            "m/s",
            0.1,
            Bound::within(0.001, 10.0),
            "below this speed of reference or machine the nonlinear law steers; too low, noise becomes turn rate",
        ),
    ],
    design: Some(|design| {
        let natural = design.bandwidth_rad_s;
        vec![
            ("k_p", natural * natural),
            ("k_d", 2.0 * design.damping * natural),
            ("b", design.per_metre_1_m * design.per_metre_1_m),
        ]
    }),
    machines: Machines::All,
    build: Dynamic::build,
};

#[derive(Debug)]
struct Dynamic {
    k_p_1_s2: f64,
    k_d_1_s: f64,
    b_1_m2: f64,
    least_speed_m_s: f64,
    /// The linearisation is in force.
    linearising: bool,
}

impl Dynamic {
    fn build(gains: &Values, _context: &Context) -> Result<Box<dyn Law>, Vec<Problem>> {
        Ok(Box::new(Self {
            k_p_1_s2: gains.get("k_p"),
            k_d_1_s: gains.get("k_d"),
            b_1_m2: gains.get("b"),
            least_speed_m_s: gains.get("least_speed_m_s"),
            linearising: false,
        }))
    }

    fn zeta(&self) -> f64 {
        self.k_d_1_s / (2.0 * math::sqrt(self.k_p_1_s2))
    }

    /// Whether reference and machine move fast enough, and the same way.
    fn decide(&mut self, wanted_m_s: f64, moving_m_s: f64) -> bool {
        let least = if self.linearising { self.least_speed_m_s } else { TAKE_OVER * self.least_speed_m_s };
        let slower = wanted_m_s.abs().min(moving_m_s.abs());
        self.linearising = slower >= least && wanted_m_s * moving_m_s > 0.0;
        self.linearising
    }

    /// u in the site frame, m/s².
    fn acceleration_m_s2(&self, input: &Input<'_>) -> (f64, f64) {
        let reference = &input.reference;
        let BodyVelocity { speed_m_s: speed, turn_rate_rad_s: turn_rate } = reference.velocity;
        let ahead = reference.direction.out_of_frame(reference.accel_m_s2, speed * turn_rate);
        let wanted = reference.direction.out_of_frame(speed, 0.0);
        let actual = input.direction.out_of_frame(input.motion.speed_m_s, 0.0);
        let axis = |ahead: f64, rate: f64, way: f64| ahead + self.k_d_1_s * rate + self.k_p_1_s2 * way;
        (
            axis(ahead.0, wanted.0 - actual.0, reference.pose.x_m - input.pose.x_m),
            axis(ahead.1, wanted.1 - actual.1, reference.pose.y_m - input.pose.y_m),
        )
    }
}

impl Law for Dynamic {
    fn control(&mut self, input: &Input<'_>) -> Wanted {
        let speed = input.motion.speed_m_s;
        if !self.decide(input.reference.velocity.speed_m_s, speed) {
            return Wanted { velocity: nonlinear::follow(input, self.b_1_m2, self.zeta()), fallback: true };
        }
        let (u_1, u_2) = self.acceleration_m_s2(input);
        let (along, across) = input.direction.into_frame(u_1, u_2);
        BodyVelocity { speed_m_s: speed + along * input.seconds, turn_rate_rad_s: across / speed }.into()
    }

    fn bandwidth_rad_s(&self, _speed_m_s: f64) -> f64 {
        // Above ζ = 1 the velocity's pole is the faster one.
        math::sqrt(self.k_p_1_s2) * self.zeta().max(1.0)
    }

    fn domain(&self) -> Domain {
        Domain { least_speed_m_s: self.least_speed_m_s, at_rest: false, ..Domain::EVERYWHERE }
    }

    fn reset(&mut self, _motion: BodyVelocity) {
        self.linearising = false;
    }
}
