//! Off-axle point: a point P fixed to the chassis away from the axle can be moved in any direction at once, so it is made
//! to follow the reference's own point P_d (static input–output linearisation, textbook material; e.g. Oriolo, De Luca
//! and Vendittelli, IEEE Transactions on Control Systems Technology 10(6), 2002).
//!
//! P = p + R(φ)(x_P, y_P), u = f Ṗ_d + k_p (P_d − P) + k_i ∫(P_d − P) dt in the site frame; in the chassis frame
//! ω = u_y/x_P, v = u_x + (y_P/x_P) u_y. The heading is not controlled: it falls into line behind P for x_P > 0 on the
//! way forward and x_P < 0 in reverse; else the robot turns round, which the domain says.

use super::{Context, Domain, Input, Kind, Law, Machines, Wanted};
use crate::geometry::{BodyVelocity, Direction, Pose};
use crate::keys::{Bound, Key, Problem, Values};
use alloc::boxed::Box;
use alloc::format;
use alloc::vec;
use alloc::vec::Vec;

/// Nearer to the axle than this, ω = u_y/x_P amplifies noise beyond use, m.
const MIN_X_P_M: f64 = 0.01;

pub(super) const KIND: Kind = Kind {
    name: "off-axle",
    gains: &[
        Key::with_default(
            "x_p_m",
            "m",
            0.3,
            Bound::within(-5.0, 5.0),
            "the point's place ahead of the axle (negative: behind, for reverse); a short one turns noise into turn rate",
        ),
        Key::with_default("y_p_m", "m", 0.0, Bound::within(-5.0, 5.0), "the point's place to the left"),
        Key::with_default(
            "k_p",
            "1/s",
            1.5,
            Bound::positive(100.0),
            "feedback of the point's error; its inverse is the time in which it decays",
        ),
        Key::with_default(
            "k_i",
            "1/s²",
            0.0,
            Bound::within(0.0, 100.0),
            "feedback of its integral, against a steady offset",
        ),
        Key::with_default(
            "feed_forward",
            "",
            1.0,
            Bound::within(0.0, 2.0),
            "factor on the velocity of the reference's own point; 1 follows without lag",
        ),
    ],
    design: Some(|design| vec![("k_p", design.bandwidth_rad_s)]),
    machines: Machines::All,
    build: OffAxle::build,
};

#[derive(Debug)]
struct OffAxle {
    x_p_m: f64,
    y_p_m: f64,
    k_p: f64,
    k_i: f64,
    feed_forward: f64,
    integral_m_s: (f64, f64),
}

impl OffAxle {
    fn build(gains: &Values, _context: &Context) -> Result<Box<dyn Law>, Vec<Problem>> {
        let x_p_m = gains.get("x_p_m");
        if x_p_m.abs() < MIN_X_P_M {
            let what = format!(
                "{x_p_m} m is too near to the axle; give at least {MIN_X_P_M} m, or at most −{MIN_X_P_M} m"
            );
            return Err(vec![Problem::new("x_p_m", what)]);
        }
        Ok(Box::new(Self {
            x_p_m,
            y_p_m: gains.get("y_p_m"),
            k_p: gains.get("k_p"),
            k_i: gains.get("k_i"),
            feed_forward: gains.get("feed_forward"),
            integral_m_s: (0.0, 0.0),
        }))
    }

    /// The chassis' point in the site frame, and the vector to it from the chassis point.
    fn point(&self, pose: Pose, direction: Direction) -> ((f64, f64), (f64, f64)) {
        let arm = direction.out_of_frame(self.x_p_m, self.y_p_m);
        ((pose.x_m + arm.0, pose.y_m + arm.1), arm)
    }

    fn point_error(&self, input: &Input<'_>) -> (f64, f64) {
        let (wanted, _) = self.point(input.reference.pose, input.reference.direction);
        let (actual, _) = self.point(input.pose, input.direction);
        (wanted.0 - actual.0, wanted.1 - actual.1)
    }
}

impl Law for OffAxle {
    fn control(&mut self, input: &Input<'_>) -> Wanted {
        let reference = &input.reference;
        let (_, arm) = self.point(reference.pose, reference.direction);
        let (speed, turn_rate) = (reference.velocity.speed_m_s, reference.velocity.turn_rate_rad_s);
        let ahead = (
            speed * reference.direction.cos - turn_rate * arm.1,
            speed * reference.direction.sin + turn_rate * arm.0,
        );
        let error = self.point_error(input);
        let u = |ahead: f64, error: f64, integral: f64| {
            self.feed_forward * ahead + self.k_p * error + self.k_i * integral
        };
        let (u_x, u_y) = input
            .direction
            .into_frame(u(ahead.0, error.0, self.integral_m_s.0), u(ahead.1, error.1, self.integral_m_s.1));
        BodyVelocity { speed_m_s: u_x + self.y_p_m / self.x_p_m * u_y, turn_rate_rad_s: u_y / self.x_p_m }
            .into()
    }

    fn bandwidth_rad_s(&self, _speed_m_s: f64) -> f64 {
        self.k_p
    }

    fn domain(&self) -> Domain {
        Domain { forward: self.x_p_m > 0.0, reverse: self.x_p_m < 0.0, ..Domain::EVERYWHERE }
    }

    fn settle(&mut self, input: &Input<'_>, limited: bool, seconds: f64) {
        if self.k_i > 0.0 && !limited {
            let error = self.point_error(input);
            self.integral_m_s.0 += error.0 * seconds;
            self.integral_m_s.1 += error.1 * seconds;
        }
    }

    fn reset(&mut self, _motion: BodyVelocity) {
        self.integral_m_s = (0.0, 0.0);
    }
}
