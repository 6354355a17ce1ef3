//! The drive map: how the numbers of a command go out to a machine that is wired or geared another way.
//!
//! It is part of the wheel conversion, both ways, and nothing else knows of it: from the vehicle on, everything is in
//! the drive's terms. The command on the wire, the tick records and the journal hold one and the same number, and a
//! limit is kept in the machine's terms and counted in the drive's.
//!
//! Each number is multiplied by its ratio; then left and right change places if the site file says so. A ratio belongs
//! to the machine's side, whichever place its number takes in the command. Zero stays zero.

use super::limits::Step;
use super::load::Demands;
use super::{Built, Inputs, Vehicle, Wheels};
use crate::geometry::BodyVelocity;
use crate::keys::{Bound, Key, Problem, Values};
use alloc::format;
use alloc::sync::Arc;
use alloc::vec::Vec;
use trackhold_proto::message::WheelLayout;

const RATIO: Bound = Bound::within(-1000.0, 1000.0);

pub(super) const SWAP: Key = Key::optional(
    "swap_left_right",
    "",
    Bound::within(0.0, 1.0),
    "1: the drive's left is the machine's right; the left and the right number of a command change places",
);
pub(super) const LEFT_RATIO: Key = Key::optional(
    "left_gear_ratio",
    "",
    RATIO,
    "what is sent for 1 rad/s of the left wheel: turns of the motor for one of the wheel, below 0 if it is wired the \
     other way; 1 if not given",
);
pub(super) const RIGHT_RATIO: Key = Key::optional(
    "right_gear_ratio",
    "",
    RATIO,
    "what is sent for 1 rad/s of the right wheel; 1 if not given",
);
pub(super) const SPEED_RATIO: Key = Key::optional(
    "speed_ratio",
    "",
    RATIO,
    "what is sent for a speed of 1 m/s, below 0 if the drive counts the other way; 1 over the wheel's radius makes it \
     rad/s; 1 if not given",
);
pub(super) const TURN_RATIO: Key = Key::optional(
    "turn_ratio",
    "",
    RATIO,
    "what is sent for a turn rate of 1 rad/s; -1 if the drive counts clockwise; 1 if not given",
);
pub(super) const STEER_RATIO: Key = Key::optional(
    "steer_ratio",
    "",
    RATIO,
    "what is sent for a steering angle of 1 rad; -1 if the drive counts to the right; 1 if not given",
);

/// A machine behind a drive map.
#[derive(Debug)]
struct Wired {
    machine: Arc<dyn Vehicle>,
    /// What each number of the machine's command is multiplied by.
    ratios: [f64; 4],
    /// Where each number goes.
    places: [usize; 4],
}

/// Puts a machine behind the drive map that the values of its section state, if they state one.
pub(super) fn wire(machine: Arc<dyn Vehicle>, values: &Values) -> Built {
    let (keys, sides): ([Option<&Key>; 3], Option<(usize, usize)>) = match machine.layout() {
        WheelLayout::LeftRight => ([Some(&LEFT_RATIO), Some(&RIGHT_RATIO), None], Some((0, 1))),
        WheelLayout::Body => ([Some(&SPEED_RATIO), Some(&TURN_RATIO), None], None),
        WheelLayout::SpeedSteer | WheelLayout::SteeredWheel => {
            ([Some(&SPEED_RATIO), Some(&STEER_RATIO), None], None)
        }
        WheelLayout::Ackermann => {
            ([Some(&SPEED_RATIO), Some(&STEER_RATIO), Some(&STEER_RATIO)], Some((1, 2)))
        }
    };
    let mut problems = Vec::new();
    let mut ratios = [1.0; 4];
    for (ratio, key) in ratios.iter_mut().zip(keys) {
        *ratio = key.and_then(|key| values.find(key.name)).unwrap_or(1.0);
        if let Some(key) = key.filter(|_| *ratio == 0.0) {
            problems.push(Problem::new(key.name, "0 would send zero for every command; give another ratio"));
        }
    }
    problems.dedup();
    let mut places = [0, 1, 2, 3];
    match (values.find(SWAP.name).unwrap_or(0.0), sides) {
        (0.0, _) => {}
        (1.0, Some((left, right))) => places.swap(left, right),
        (1.0, None) => problems.push(Problem::new(
            SWAP.name,
            "1, but this command has one angle for both front wheels; leave it out, or give front_track_m",
        )),
        (other, _) => problems.push(Problem::new(SWAP.name, format!("{other} is neither 0 nor 1"))),
    }
    if !problems.is_empty() {
        return Err(problems);
    }
    let as_it_is = ratios == [1.0; 4] && places == [0, 1, 2, 3];
    Ok(if as_it_is { machine } else { Arc::new(Wired { machine, ratios, places }) })
}

impl Wired {
    fn greatest_of(&self, wheels: &Wheels) -> Wheels {
        let mut sizes = [0.0; 4];
        for (index, place) in self.places.into_iter().enumerate() {
            sizes[place] = self.ratios[index].abs() * wheels[index];
        }
        sizes
    }
}

impl Vehicle for Wired {
    fn layout(&self) -> WheelLayout {
        self.machine.layout()
    }

    fn to_drive(&self, machine: &Wheels) -> Wheels {
        let mut wheels = [0.0; 4];
        for (index, place) in self.places.into_iter().enumerate() {
            // Adding zero makes a negative zero a plain one.
            wheels[place] = self.ratios[index] * machine[index] + 0.0;
        }
        wheels
    }

    fn to_machine(&self, wheels: &Wheels) -> Wheels {
        let mut machine = [0.0; 4];
        for (index, place) in self.places.into_iter().enumerate() {
            machine[index] = wheels[place] / self.ratios[index] + 0.0;
        }
        machine
    }

    fn wheels(&self, velocity: BodyVelocity, rest_curvature_1_m: f64, last: &Wheels) -> Wheels {
        self.to_drive(&self.machine.wheels(velocity, rest_curvature_1_m, &self.to_machine(last)))
    }

    fn body(&self, wheels: &Wheels) -> BodyVelocity {
        self.machine.body(&self.to_machine(wheels))
    }

    fn speed_factor(&self, velocity: BodyVelocity) -> f64 {
        self.machine.speed_factor(velocity)
    }

    fn largest_steps(&self, last: &Wheels, target: &Wheels, seconds: f64) -> Wheels {
        let (last, target) = (self.to_machine(last), self.to_machine(target));
        self.greatest_of(&self.machine.largest_steps(&last, &target, seconds))
    }

    fn step(&self, last: &Wheels, target: &Wheels, seconds: f64) -> Step {
        let step = self.machine.step(&self.to_machine(last), &self.to_machine(target), seconds);
        let wheels = if step.share < 1.0 { self.to_drive(&step.wheels) } else { *target };
        Step { wheels, ..step }
    }

    fn greatest(&self) -> Wheels {
        self.greatest_of(&self.machine.greatest())
    }

    fn inputs(&self) -> Inputs {
        self.machine.inputs()
    }

    fn demands(&self, curvature_1_m: f64, curvature_rate_1_m2: f64) -> Demands {
        self.machine.demands(curvature_1_m, curvature_rate_1_m2)
    }

    fn spot_demands(&self) -> Option<Demands> {
        self.machine.spot_demands()
    }

    fn max_jerk_m_s3(&self) -> Option<f64> {
        self.machine.max_jerk_m_s3()
    }

    fn top_speed_m_s(&self) -> f64 {
        self.machine.top_speed_m_s()
    }

    fn top_turn_rate_rad_s(&self) -> f64 {
        self.machine.top_turn_rate_rad_s()
    }
}
