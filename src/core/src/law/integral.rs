//! An integral over the cross-track error, against what no proportional law can take out: a steering or wheel radius
//! bias, which bends the path by the same curvature at every speed and in both directions.
//!
//! ω gets k_i v_d z, with z' = |v_d| e_y: per metre travelled, like the bias. The motion across the path of a law with
//! the feedback k_y e_y and k_φ e_φ per metre then has the polynomial λ³ + k_φ λ² + k_y λ + k_i in both directions, which
//! is stable for k_i < k_y k_φ (Routh). While the limits change the law's result nothing is integrated.

use super::Input;
use crate::keys::{Bound, Key, Problem};
use alloc::format;
use alloc::vec;
use alloc::vec::Vec;

/// The gain's key. Absent it is 0: no integral.
pub(super) const KEY: Key = Key::with_default(
    "k_i",
    "1/m³",
    0.0,
    Bound::within(0.0, 1e5),
    "feedback of the cross-track error's integral over the way, against a steady offset; too much of it swings",
);

/// The integral, and its gain.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct CrossIntegral {
    gain_1_m3: f64,
    integral_m2: f64,
}

impl CrossIntegral {
    /// For a gain that is less than `bound_1_m3`, from which on the motion across the path is unstable.
    pub(super) fn new(gain_1_m3: f64, bound_1_m3: f64) -> Result<Self, Vec<Problem>> {
        if gain_1_m3 > 0.0 && gain_1_m3 >= bound_1_m3 {
            let what = format!(
                "{gain_1_m3} 1/m³ swings up with these gains; give less than {bound_1_m3} 1/m³, better a fifth of it"
            );
            return Err(vec![Problem::new(KEY.name, what)]);
        }
        Ok(Self { gain_1_m3, integral_m2: 0.0 })
    }

    /// A turn rate (rad/s), with the integral's part.
    pub(super) fn added_to(&self, turn_rate_rad_s: f64, input: &Input<'_>) -> f64 {
        // Without a gain nothing is added, not even 0: −0 stays what it is.
        if self.gain_1_m3 == 0.0 {
            return turn_rate_rad_s;
        }
        turn_rate_rad_s + self.gain_1_m3 * input.reference.velocity.speed_m_s * self.integral_m2
    }

    /// Takes a tick in, unless the limits changed its result.
    pub(super) fn settle(&mut self, input: &Input<'_>, limited: bool, seconds: f64) {
        if self.gain_1_m3 > 0.0 && !limited {
            self.integral_m2 -= input.error.cross_m * input.reference.velocity.speed_m_s.abs() * seconds;
        }
    }

    /// Begins anew.
    pub(super) fn reset(&mut self) {
        self.integral_m2 = 0.0;
    }
}
