//! Motions to begin from: what simple laws would do.

use super::horizon::Horizon;
use super::machine::Machine;
use super::prediction::Prediction;
use crate::geometry::BodyVelocity;
use crate::law::{Input, Law};

/// A heading error from which on a machine that can may turn on the spot first, rad.
const TURNED_RAD: f64 = 1.0;

/// A simple motion to begin from.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Simple {
    /// As the law to fall back to moves.
    Fallback,
    /// The same, but turning on the spot first while the heading is far off.
    TurnFirst,
}

impl Simple {
    pub(super) const ALL: [Self; 2] = [Self::Fallback, Self::TurnFirst];

    /// Predicts this motion.
    pub(super) fn predict<const N: usize>(
        self,
        input: &Input<'_>,
        horizon: &Horizon<N>,
        machine: &Machine,
        fallback: &mut dyn Law,
        prediction: &mut Prediction<N>,
    ) {
        let spot_turn_rate_rad_s = machine.spot_turn_rate_rad_s().filter(|_| self == Self::TurnFirst);
        let (mut at_s, mut reference, mut heading_rad) = (0.0, input.reference, horizon.heading_rad);
        prediction.follow(horizon, machine, |index, pose, shares| {
            let off_rad = pose.heading_rad - heading_rad;
            let wanted = match spot_turn_rate_rad_s.filter(|_| off_rad.abs() > TURNED_RAD) {
                Some(rate) => BodyVelocity { speed_m_s: 0.0, turn_rate_rad_s: -rate.copysign(off_rad) },
                None => {
                    let last = (input.wheels, machine.body(shares));
                    let input = Input::new(reference, input.ahead, pose, last, input.seconds);
                    fallback.control(&input).velocity
                }
            };
            let wanted = machine.of_velocity(wanted, reference.curvature_1_m, shares);
            let knot = &horizon.knots[index];
            at_s += knot.length_s;
            (reference, heading_rad) = (input.ahead.reference(at_s), knot.pose.heading_rad);
            wanted
        });
    }
}
