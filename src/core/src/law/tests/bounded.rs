//! Outside its domain, with any gains, on any reference: a law's result is finite, and what the limits leave of it is
//! within the machine's.

use super::*;
use crate::geometry::Direction;
use crate::law::testing::Random;
use crate::vehicle::{Vehicle, limit};

/// States in all, shared among the laws.
const STATES: u64 = 10_000_000;
/// Laws that look ahead cost a hundred times what the others do; they get so many each.
const COSTLY: [&str; 2] = ["lqr", "predictive"];
const COSTLY_STATES: u64 = 20_000;

fn states_of(kind: &Kind) -> u64 {
    if COSTLY.contains(&kind.name) {
        return COSTLY_STATES;
    }
    let costly = KINDS.iter().filter(|kind| COSTLY.contains(&kind.name)).count() as u64;
    let rest = STATES - costly * COSTLY_STATES;
    rest.div_ceil(KINDS.len() as u64 - costly)
}

/// Gains anywhere within their bounds; none if they do not go together.
fn any_gains(kind: &Kind, random: &mut Random) -> Values {
    let mut values = Values::default();
    for key in kind.gains {
        let (low, high) = key.bound.ends();
        let drawn = match random.bits() % 4 {
            0 => continue,
            1 => random.pick(&[low, high]),
            _ if low < 0.0 => random.within(low, high),
            _ => random.magnitude((1e-6 * high).max(low), high).min(high),
        };
        if key.bound.holds(drawn) {
            values.set(key.name, drawn);
        }
    }
    values
}

fn any_angle(random: &mut Random) -> f64 {
    let right = math::FRAC_PI_2;
    match random.bits() % 3 {
        0 => random.pick(&[0.0, right, -right, math::PI, 1e-300, 0.5 * right, -0.5 * right, 1.5 * right]),
        _ => math::wrap(random.within(-4.0, 4.0)),
    }
}

fn any_number(random: &mut Random, high: f64) -> f64 {
    let sign = random.pick(&[1.0, -1.0]);
    match random.bits() % 4 {
        0 => sign * 0.0,
        1 => sign * random.magnitude(1e-300, high),
        _ => random.within(-high, high),
    }
}

fn any_reference(random: &mut Random) -> Reference {
    let pose = Pose::new(any_number(random, 1e4), any_number(random, 1e4), any_angle(random));
    Reference {
        pose,
        direction: Direction::of(pose.heading_rad),
        velocity: BodyVelocity {
            speed_m_s: any_number(random, 30.0),
            turn_rate_rad_s: any_number(random, 30.0),
        },
        curvature_1_m: any_number(random, 100.0),
        rest_curvature_1_m: match random.bits() % 4 {
            0 => random.pick(&[f64::INFINITY, f64::NEG_INFINITY]),
            _ => any_number(random, 100.0),
        },
        curvature_rate_1_m2: any_number(random, 100.0),
        accel_m_s2: any_number(random, 100.0),
        turn_accel_rad_s2: any_number(random, 100.0),
    }
}

/// A way ahead without rhyme or reason.
struct Wild(u64);

impl Ahead for Wild {
    fn reference(&self, seconds: f64) -> Reference {
        any_reference(&mut Random(self.0 ^ seconds.to_bits()))
    }
}

/// A law with some gains in some state; panics if its result is not finite, or not within the limits afterwards.
fn ask_anything(law: &mut dyn Law, vehicle: &dyn Vehicle, name: &str, random: &mut Random) {
    let reference = any_reference(random);
    let pose = match random.bits() % 4 {
        0 => reference.pose,
        _ => Pose::new(
            reference.pose.x_m + any_number(random, 1e3),
            reference.pose.y_m + any_number(random, 1e3),
            any_angle(random),
        ),
    };
    let greatest = vehicle.greatest();
    let wheels = greatest.map(|most| if most > 0.0 { any_number(random, most) } else { 0.0 });
    let (steady, wild) = (Steady(reference), Wild(random.bits()));
    let ahead: &dyn Ahead = if random.bits().is_multiple_of(2) { &steady } else { &wild };
    let seconds = random.pick(&[0.02, 0.001, 1e-9]);
    let input = Input::new(reference, ahead, pose, (wheels, vehicle.body(&wheels)), seconds);
    let wanted = law.control(&input).velocity;
    assert!(wanted.is_finite(), "{name}: {law:?} wants {wanted:?} of {input:?}");
    let limited = limit(vehicle, wanted, reference.rest_curvature_1_m, &wheels, seconds);
    for (wheel, most) in limited.wheels.iter().zip(greatest) {
        assert!(wheel.abs() <= most * (1.0 + 1e-12), "{name}: {wheel} of {most} for {wanted:?}");
    }
    law.settle(&input, random.bits().is_multiple_of(2), seconds);
}

#[test]
fn no_law_wants_what_is_not_finite_whatever_the_state_the_reference_and_the_gains() {
    let machines = ["unicycle", "differential", "car"].map(context);
    let mut asked = 0;
    for (index, kind) in KINDS.iter().enumerate() {
        let mut random = Random(0x5eed ^ index as u64);
        let fit: Vec<&Context> =
            machines.iter().filter(|context| kind.machines.unfit(context).is_none()).collect();
        let (states, mut done, mut refused) = (states_of(kind), 0, 0);
        while done < states {
            let context = random.pick(&fit);
            let Ok((mut law, _)) = build(kind.name, &any_gains(kind, &mut random), context) else {
                refused += 1;
                assert!(refused < states, "{}: hardly any gains go together", kind.name);
                continue;
            };
            law.reset(BodyVelocity::ZERO);
            for _ in 0..(states - done).min(50) {
                ask_anything(&mut *law, &*context.vehicle, kind.name, &mut random);
                done += 1;
            }
        }
        asked += done;
    }
    assert!(asked >= STATES, "{asked}");
}
