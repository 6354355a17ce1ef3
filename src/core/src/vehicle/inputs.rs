//! A machine as two bounded inputs: what a law that looks ahead has to know of it.
//!
//! The inputs are the command's first two numbers in the machine's own terms, before any drive map; a car with an angle
//! for each front wheel has the angle of the equivalent single one. Each keeps its own range, whatever the other does.

use super::{Range, Wheels};
use crate::geometry::BodyVelocity;
use crate::math;

/// What two inputs make a machine do, and how far and how fast each may go.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Inputs {
    /// What they make it do.
    pub map: InputMap,
    /// How far and how fast each may go.
    pub ranges: [Range; 2],
}

/// From two inputs to a body velocity.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum InputMap {
    /// Speed and turn rate are sums of both inputs times these factors: wheel speeds, or the body velocity itself.
    Linear {
        /// m/s for each input's unit.
        speed: [f64; 2],
        /// rad/s for each input's unit.
        turn_rate: [f64; 2],
    },
    /// Speed of the rear axle (m/s) and steering angle of the equivalent front wheel (rad): ω = v tan δ / L.
    Car {
        /// L, m.
        wheelbase_m: f64,
        /// Half the distance of the front wheels' steering axes, 0 if the command has one angle, m.
        half_track_m: f64,
    },
    /// Rim speed (m/s) and angle (rad) of a steered wheel: v = v_s cos δ, ω = v_s sin δ / L.
    SteeredWheel {
        /// L, m.
        wheelbase_m: f64,
    },
}

impl Inputs {
    /// The inputs of a command in the machine's own terms.
    pub fn of(&self, wheels: &Wheels) -> [f64; 2] {
        match self.map {
            InputMap::Car { wheelbase_m, half_track_m } if half_track_m > 0.0 => {
                let curvature = |side: f64, angle_rad: f64| {
                    let slope = math::tan(angle_rad);
                    slope / (wheelbase_m + side * slope * half_track_m)
                };
                let mean = 0.5 * (curvature(1.0, wheels[1]) + curvature(-1.0, wheels[2]));
                [wheels[0], math::atan(wheelbase_m * mean)]
            }
            _ => [wheels[0], wheels[1]],
        }
    }

    /// The body velocity of inputs.
    pub fn body(&self, [first, second]: [f64; 2]) -> BodyVelocity {
        let (speed_m_s, turn_rate_rad_s) = match self.map {
            InputMap::Linear { speed, turn_rate } => {
                (speed[0] * first + speed[1] * second, turn_rate[0] * first + turn_rate[1] * second)
            }
            InputMap::Car { wheelbase_m, .. } => (first, first * math::tan(second) / wheelbase_m),
            InputMap::SteeredWheel { wheelbase_m } => {
                let (cos, sin) = math::cos_sin(second);
                (first * cos, first * sin / wheelbase_m)
            }
        };
        BodyVelocity { speed_m_s, turn_rate_rad_s }
    }

    /// How the body velocity changes with each input: rows speed and turn rate, columns the inputs.
    pub fn slope(&self, [first, second]: [f64; 2]) -> [[f64; 2]; 2] {
        match self.map {
            InputMap::Linear { speed, turn_rate } => [speed, turn_rate],
            InputMap::Car { wheelbase_m, .. } => {
                let tan = math::tan(second);
                [[1.0, 0.0], [tan / wheelbase_m, first * (1.0 + tan * tan) / wheelbase_m]]
            }
            InputMap::SteeredWheel { wheelbase_m } => {
                let (cos, sin) = math::cos_sin(second);
                [[cos, -first * sin], [sin / wheelbase_m, first * cos / wheelbase_m]]
            }
        }
    }
}
