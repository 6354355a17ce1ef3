//! The machine as the horizon sees it: two inputs in shares of their greatest value, and how far a step may take them.

use crate::geometry::BodyVelocity;
use crate::plan::Reference;
use crate::vehicle::{Inputs, Vehicle, Wheels};
use alloc::sync::Arc;

/// Inputs in shares of their greatest value.
pub(super) type Shares = [f64; 2];

/// A machine.
#[derive(Clone, Debug)]
pub(super) struct Machine {
    vehicle: Arc<dyn Vehicle>,
    inputs: Inputs,
}

impl Machine {
    pub(super) fn new(vehicle: Arc<dyn Vehicle>) -> Self {
        let inputs = vehicle.inputs();
        Self { vehicle, inputs }
    }

    /// The shares of a command as it went out.
    fn of_wheels(&self, wheels: &Wheels) -> Shares {
        let inputs = self.inputs.of(&self.vehicle.to_machine(wheels));
        core::array::from_fn(|at| inputs[at] / self.inputs.ranges[at].top)
    }

    /// The shares of the last command. A machine that does not steer is where its motion says.
    pub(super) fn of_last(&self, wheels: &Wheels, motion: BodyVelocity) -> Shares {
        if self.vehicle.layout().is_steered() {
            return self.of_wheels(wheels);
        }
        self.of_wheels(&self.vehicle.wheels(motion, 0.0, wheels))
    }

    /// The shares that a reference asks for, and the command; `last` is the one before.
    pub(super) fn of_reference(&self, reference: &Reference, last: &Wheels) -> (Shares, Wheels) {
        let wheels = self.vehicle.wheels(reference.velocity, reference.curvature_1_m, last);
        (self.of_wheels(&wheels), wheels)
    }

    /// The shares for a body velocity, on the way from others.
    pub(super) fn of_velocity(
        &self,
        velocity: BodyVelocity,
        rest_curvature_1_m: f64,
        from: Shares,
    ) -> Shares {
        let wanted = velocity.scaled(self.vehicle.speed_factor(velocity));
        let last = self.vehicle.wheels(self.body(from), rest_curvature_1_m, &[0.0; 4]);
        self.of_wheels(&self.vehicle.wheels(wanted, rest_curvature_1_m, &last))
    }

    /// The body velocity of shares.
    pub(super) fn body(&self, shares: Shares) -> BodyVelocity {
        self.inputs.body(self.in_units(shares))
    }

    /// How the body velocity changes with each share: rows speed and turn rate.
    pub(super) fn slope(&self, shares: Shares) -> [[f64; 2]; 2] {
        let ranges = &self.inputs.ranges;
        self.inputs
            .slope(self.in_units(shares))
            .map(|[first, second]| [first * ranges[0].top, second * ranges[1].top])
    }

    fn in_units(&self, shares: Shares) -> Shares {
        core::array::from_fn(|at| shares[at] * self.inputs.ranges[at].top)
    }

    /// The shares nearest to `target` that `seconds` allow on the way from others, each for itself.
    pub(super) fn toward(&self, from: Shares, target: Shares, seconds: f64) -> Shares {
        core::array::from_fn(|at| {
            let range = &self.inputs.ranges[at];
            let target = target[at].clamp(-1.0, 1.0);
            let step = range.largest_step(from[at] * range.top, target * range.top, seconds) / range.top;
            if (target - from[at]).abs() <= step {
                target
            } else {
                from[at] + step.copysign(target - from[at])
            }
        })
    }

    /// The least and the greatest shares at the end of a step that begins at others, which are taken as they are: an input
    /// on one side of zero falls towards it and grows away from it.
    pub(super) fn reach(&self, from: Shares, seconds: f64) -> (Shares, Shares) {
        let change = |at: usize| {
            let range = &self.inputs.ranges[at];
            let (rise, fall) = (range.rise * seconds / range.top, range.fall * seconds / range.top);
            if from[at] > 0.0 {
                (-fall, rise)
            } else if from[at] < 0.0 {
                (-rise, fall)
            } else {
                (-rise, rise)
            }
        };
        let changes = [change(0), change(1)];
        (changes.map(|(down, _)| down), changes.map(|(_, up)| up))
    }

    /// The rates that lead from shares to others, as far as the limits allow, 1/s.
    pub(super) fn rates(&self, from: Shares, to: Shares, seconds: f64) -> Shares {
        let reached = self.toward(from, to, seconds);
        core::array::from_fn(|at| (reached[at] - from[at]) / seconds)
    }

    /// What a unit weight of each share weighs in terms of speed (per m²/s²) and turn rate (per rad²/s²). With a steered
    /// wheel, where the turn rate hangs on the speed, of the greatest of both.
    pub(super) fn effort(&self) -> [f64; 2] {
        if self.vehicle.layout().is_steered() {
            let tops = [self.vehicle.top_speed_m_s(), self.vehicle.top_turn_rate_rad_s()];
            return tops.map(|top| 1.0 / (top * top));
        }
        // The columns of the inverse of the slope: what shares a speed, and a turn rate, takes.
        let [[a, b], [c, d]] = self.slope([0.0; 2]);
        let determinant = a * d - b * c;
        [d * d + c * c, b * b + a * a].map(|squares| squares / (determinant * determinant))
    }

    /// The greatest turn rate on the spot, rad/s; none for a machine that cannot.
    pub(super) fn spot_turn_rate_rad_s(&self) -> Option<f64> {
        self.vehicle.spot_demands().map(|_| self.vehicle.top_turn_rate_rad_s())
    }
}
