//! What tests of laws share: machines, and one question to a law.

use super::{Context, Input, Law, Steady, Wanted, build};
use crate::geometry::{BodyVelocity, Pose};
use crate::keys::Values;
use crate::math;
use crate::plan::Reference;
use crate::vehicle::{self, Wheels, limit};
use alloc::boxed::Box;

/// A machine of each kind that a law may have to drive, by its kind's name, with a tick of 20 ms and no dead time.
pub(crate) fn context(kind: &str) -> Context {
    let numbers: &[(&str, f64)] = match kind {
        "unicycle" => &[
            ("max_speed_m_s", 1.5),
            ("max_turn_rate_rad_s", 2.0),
            ("max_accel_m_s2", 1.0),
            ("max_turn_accel_rad_s2", 3.0),
        ],
        "differential" => &[
            ("wheel_radius_m", 0.1),
            ("track_width_m", 0.5),
            ("max_wheel_speed_rad_s", 12.0),
            ("max_wheel_accel_rad_s2", 15.0),
        ],
        "car" => &[
            ("wheelbase_m", 1.2),
            ("max_steer_rad", 0.6),
            ("max_steer_rate_rad_s", 0.8),
            ("max_speed_m_s", 1.5),
            ("max_accel_m_s2", 1.0),
        ],
        other => unreachable!("no test machine of kind {other}"),
    };
    let mut values = Values::default();
    numbers.iter().for_each(|(key, value)| values.set(key, *value));
    let (vehicle, _) = vehicle::build(kind, &values).expect("a good machine");
    Context { vehicle, period_s: 0.02, dead_time_s: 0.0 }
}

/// A law on a machine of a kind, its other gains as by default.
pub(crate) fn law_on(kind: &str, name: &str, gains: &[(&str, f64)]) -> Box<dyn Law> {
    let mut values = Values::default();
    gains.iter().for_each(|(gain, value)| values.set(gain, *value));
    build(name, &values, &context(kind)).expect("a law for this machine").0
}

/// A reference that moves on as it does now.
pub(crate) fn moving(pose: Pose, speed_m_s: f64, turn_rate_rad_s: f64) -> Reference {
    let curvature = if speed_m_s == 0.0 { 0.0 } else { turn_rate_rad_s / speed_m_s };
    Reference { velocity: BodyVelocity { speed_m_s, turn_rate_rad_s }, ..Reference::at_rest(pose, curvature) }
}

/// What a law wants on a machine that was moving as its reference does.
pub(crate) fn ask(law: &mut dyn Law, reference: Reference, pose: Pose) -> Wanted {
    let ahead = Steady(reference);
    law.control(&Input::new(reference, &ahead, pose, ([0.0; 4], reference.velocity), 0.02))
}

/// An ideal machine: what the limits leave of a law's result moves it at once.
pub(crate) struct Machine {
    context: Context,
    /// Where it is.
    pub(crate) pose: Pose,
    wheels: Wheels,
}

impl Machine {
    /// At rest somewhere.
    pub(crate) fn new(context: Context, pose: Pose) -> Self {
        Self { context, pose, wheels: [0.0; 4] }
    }

    /// A tick of a law on a reference that goes on as it does now.
    pub(crate) fn step(&mut self, law: &mut dyn Law, reference: Reference) -> Wanted {
        let (vehicle, seconds) = (&*self.context.vehicle, self.context.period_s);
        let ahead = Steady(reference);
        let input =
            Input::new(reference, &ahead, self.pose, (self.wheels, vehicle.body(&self.wheels)), seconds);
        let wanted = law.control(&input);
        let limited = limit(vehicle, wanted.velocity, reference.rest_curvature_1_m, &self.wheels, seconds);
        law.settle(&input, limited.speed_limited || limited.step_limited, seconds);
        self.wheels = limited.wheels;
        self.pose = self.pose.moved(limited.body, seconds);
        wanted
    }
}

/// SplitMix64 (Steele, Lea and Flood, OOPSLA 2014).
#[derive(Clone, Copy, Debug)]
pub(crate) struct Random(pub(crate) u64);

impl Random {
    pub(crate) fn bits(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mixed = (self.0 ^ (self.0 >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        let mixed = (mixed ^ (mixed >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        mixed ^ (mixed >> 31)
    }

    /// Evenly between two ends.
    pub(crate) fn within(&mut self, low: f64, high: f64) -> f64 {
        low + (high - low) * (self.bits() >> 11) as f64 / (1_u64 << 53) as f64
    }

    /// Positive, its logarithm evenly between those of two ends.
    pub(crate) fn magnitude(&mut self, low: f64, high: f64) -> f64 {
        math::exp(self.within(math::ln(low), math::ln(high)))
    }

    /// One of a list.
    pub(crate) fn pick<T: Copy>(&mut self, from: &[T]) -> T {
        from[(self.bits() % from.len() as u64) as usize]
    }
}
