//! Pure pursuit: Coulter, "Implementation of the pure pursuit path tracking algorithm", CMU-RI-TR-92-01, 1992.
//!
//! The machine drives the arc that leads from the chassis point, along its heading, to a goal: the point ahead on the
//! path at the distance L_d. With y_L the goal's place to the left, κ = 2 y_L/L_d². In reverse the goal lies behind and
//! the arc is the same one, so the formula is too. Linearised on a line the lateral motion has the natural frequency
//! √2 |v|/L_d and the damping 1/√2; with dead time τ it is stable while L_d/(|v| τ) > 1.9213.
//!
//! L_d is a time times the machine's own speed, and never less than a least distance. The plan's timing is kept by the
//! speed: v = v_d − k_along x_e. Where the curvature changes, the arc to the goal cuts the corner; a short distance cuts
//! less and weaves more.

use super::way::{Pace, Way};
use super::{Domain, Input, Kind, Law, Machines, Wanted};
use crate::geometry::BodyVelocity;
use crate::keys::{Bound, Key};
use crate::math::{self, FRAC_PI_2};
use alloc::boxed::Box;
use alloc::vec;
use core::f64::consts::SQRT_2;

pub(super) const KIND: Kind = Kind {
    name: "pure-pursuit",
    gains: &[
        Key::with_default(
            "least_lookahead_m",
            "m",
            0.7,
            Bound::within(0.02, 100.0),
            "the goal is at least this far ahead; too near, noise and dead time swing the machine; too far, it cuts corners",
        ),
        Key::with_default(
            "lookahead_time_s",
            "s",
            0.8,
            Bound::within(0.0, 30.0),
            "the goal is as far ahead as the machine goes in this time; must be well above 1.92 times the dead time",
        ),
        Key::with_default(
            "k_along",
            "1/s",
            1.0,
            Bound::positive(100.0),
            "feedback of the along-track error; too much of it with dead time makes the speed swing",
        ),
    ],
    // The natural frequency √2 |v|/L_d is the one asked for at the design speed; the damping is 1/√2 whatever is asked.
    design: Some(|design| {
        vec![
            ("least_lookahead_m", SQRT_2 / design.per_metre_1_m),
            ("lookahead_time_s", SQRT_2 / design.bandwidth_rad_s),
            ("k_along", design.bandwidth_rad_s),
        ]
    }),
    machines: Machines::All,
    build: |gains, _| {
        Ok(Box::new(PurePursuit {
            least_m: gains.get("least_lookahead_m"),
            time_s: gains.get("lookahead_time_s"),
            k_along: gains.get("k_along"),
        }))
    },
};

#[derive(Debug)]
struct PurePursuit {
    least_m: f64,
    time_s: f64,
    k_along: f64,
}

impl PurePursuit {
    fn lookahead_m(&self, speed_m_s: f64) -> f64 {
        self.least_m.max(self.time_s * speed_m_s.abs())
    }
}

/// The curvature of the arc to a goal, 1/m. A goal nearer than half the distance sought, which is none, bends it no more
/// than one there would.
fn curvature_to((x, y): (f64, f64), lookahead_m: f64) -> f64 {
    let distance = math::length(x, y).max(0.5 * lookahead_m);
    2.0 * (y / distance) / distance
}

impl Law for PurePursuit {
    fn control(&mut self, input: &Input<'_>) -> Wanted {
        let pace = Pace::keep(input, self.k_along);
        let lookahead_m = self.lookahead_m(input.motion.speed_m_s);
        let goal = Way::new(input, pace.way, lookahead_m).goal();
        let reference = input.reference.velocity;
        // On the spot there is no path to pursue: the reference's own turn.
        let turning = if reference.speed_m_s == 0.0 { reference.turn_rate_rad_s } else { 0.0 };
        BodyVelocity {
            speed_m_s: pace.speed_m_s,
            turn_rate_rad_s: pace.speed_m_s * curvature_to(goal, lookahead_m) + turning,
        }
        .into()
    }

    fn bandwidth_rad_s(&self, speed_m_s: f64) -> f64 {
        SQRT_2 * speed_m_s.abs() / self.lookahead_m(speed_m_s)
    }

    fn domain(&self) -> Domain {
        Domain { max_heading_error_rad: FRAC_PI_2, pivots: false, at_rest: false, ..Domain::EVERYWHERE }
    }
}
