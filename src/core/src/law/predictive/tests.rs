//! The law in closed loop on every kind of machine, and the parts that its program is made of.

mod parts;

use super::{FALLBACK, Predictive, STEPS};
use crate::geometry::{BodyVelocity, Direction, Pose, TrackingError};
use crate::keys::Values;
use crate::law::testing::context;
use crate::law::{Ahead, Context, Input, Law, Wanted};
use crate::math;
use crate::plan::Reference;
use crate::vehicle::{self, Wheels, limit};

/// A reference that moves for some time and then rests.
#[derive(Clone, Copy)]
struct Way {
    begin: Pose,
    motion: BodyVelocity,
    moving_s: f64,
    at_s: f64,
}

impl Way {
    fn endless(speed_m_s: f64, turn_rate_rad_s: f64) -> Self {
        let motion = BodyVelocity { speed_m_s, turn_rate_rad_s };
        Self { begin: Pose::new(1.0, -2.0, 2.0), motion, moving_s: f64::INFINITY, at_s: 0.0 }
    }
}

impl Ahead for Way {
    fn reference(&self, seconds: f64) -> Reference {
        let at_s = self.at_s + seconds;
        let rests = at_s >= self.moving_s;
        let motion = if rests { BodyVelocity::ZERO } else { self.motion };
        let curvature = if self.motion.speed_m_s == 0.0 {
            0.0
        } else {
            self.motion.turn_rate_rad_s / self.motion.speed_m_s
        };
        let pose = self.begin.moved(self.motion, at_s.min(self.moving_s));
        Reference { velocity: motion, ..Reference::at_rest(pose, curvature) }
    }
}

/// A closed loop on an ideal machine.
struct Loop {
    context: Context,
    law: Predictive<STEPS>,
    way: Way,
    pose: Pose,
    wheels: Wheels,
}

/// What one tick did.
struct Tick {
    wanted: Wanted,
    error: TrackingError,
    /// What the limits made of it.
    body: BodyVelocity,
}

fn gains(list: &[(&str, f64)]) -> Values {
    let mut values = Values::default();
    list.iter().for_each(|(gain, value)| values.set(gain, *value));
    crate::law::gains("predictive", &values, &context("differential")).unwrap()
}

impl Loop {
    /// Begins at rest, off the way by an error (m, m, rad) in its frame.
    fn new(
        context: Context,
        list: &[(&str, f64)],
        way: Way,
        (along, cross, heading): (f64, f64, f64),
    ) -> Self {
        let reference = way.reference(0.0);
        let (x, y) = reference.direction.out_of_frame(along, cross);
        let from = reference.pose;
        let pose = Pose::new(from.x_m + x, from.y_m + y, math::wrap(from.heading_rad + heading));
        let mut law = Predictive::new(&gains(list), &context).unwrap();
        law.reset(BodyVelocity::ZERO);
        Self { context, law, way, pose, wheels: [0.0; 4] }
    }

    fn tick(&mut self) -> Tick {
        let vehicle = &*self.context.vehicle;
        let reference = self.way.reference(0.0);
        let last = (self.wheels, vehicle.body(&self.wheels));
        let input = Input::new(reference, &self.way, self.pose, last, self.context.period_s);
        let wanted = self.law.control(&input);
        let error = input.error;
        let limited =
            limit(vehicle, wanted.velocity, reference.curvature_1_m, &self.wheels, self.context.period_s);
        self.wheels = limited.wheels;
        self.pose = self.pose.moved(limited.body, self.context.period_s);
        self.way.at_s += self.context.period_s;
        Tick { wanted, error, body: limited.body }
    }

    /// Runs for a time, and returns the last tick's error.
    fn run(&mut self, seconds: f64) -> TrackingError {
        let ticks = (seconds / self.context.period_s) as u32;
        (0..ticks).fold(TrackingError::default(), |_, _| self.tick().error)
    }
}

fn steered_wheel() -> Context {
    let mut values = Values::default();
    for (key, value) in [
        ("wheelbase_m", 1.2),
        ("max_speed_m_s", 1.5),
        ("max_accel_m_s2", 0.8),
        ("max_steer_rad", 1.6),
        ("max_steer_rate_rad_s", 1.2),
    ] {
        values.set(key, value);
    }
    let (vehicle, _) = vehicle::build("steered-wheel", &values).unwrap();
    Context { vehicle, period_s: 0.02, dead_time_s: 0.0 }
}

fn machines() -> [Context; 4] {
    [context("differential"), context("unicycle"), context("car"), steered_wheel()]
}

fn assert_small(error: TrackingError, what: &str) {
    let TrackingError { along_m, cross_m, heading_rad } = error;
    assert!(along_m.abs() < 2e-3 && cross_m.abs() < 2e-3 && heading_rad.abs() < 5e-3, "{what}: {error:?}");
}

#[test]
fn every_machine_comes_back_to_lines_and_bends_both_ways() {
    for context in machines() {
        for (speed, turn_rate) in [(0.6, 0.0), (0.6, 0.2), (-0.5, 0.0), (-0.5, 0.15)] {
            for offset in [(-0.2, 0.3, 0.4), (0.1, -0.5, -0.8)] {
                let mut run = Loop::new(context.clone(), &[], Way::endless(speed, turn_rate), offset);
                let error = run.run(14.0);
                assert_small(
                    error,
                    &alloc::format!("{:?} at {speed}, {turn_rate} from {offset:?}", context.vehicle),
                );
            }
        }
    }
}

#[test]
fn the_machine_is_asked_for_what_it_can_do() {
    for context in machines() {
        let mut run = Loop::new(context, &[], Way::endless(0.6, 0.2), (-0.3, 0.5, 0.7));
        for _ in 0..400 {
            let Tick { wanted, body, .. } = run.tick();
            assert!(!wanted.fallback);
            // A steering angle says nothing near rest, and is held there.
            if wanted.velocity.speed_m_s.abs() > 0.05 {
                let off = (body.speed_m_s - wanted.velocity.speed_m_s).abs()
                    + (body.turn_rate_rad_s - wanted.velocity.turn_rate_rad_s).abs();
                assert!(off < 1e-7, "{:?}: {wanted:?} became {body:?}", run.context.vehicle);
            }
        }
    }
}

#[test]
fn a_machine_turned_round_turns_back_and_does_not_waver() {
    for heading in [2.8, -2.8, math::PI, 3.1] {
        let mut run = Loop::new(context("differential"), &[], Way::endless(0.6, 0.0), (0.0, 0.3, heading));
        let first = run.tick();
        let mut last = first.error.heading_rad;
        for _ in 0..60 {
            let error = run.tick().error.heading_rad;
            assert!(
                (math::wrap(error - last)) * first.error.heading_rad <= 1e-3,
                "{heading}: {last} to {error}"
            );
            last = error;
        }
        assert_small(run.run(8.0), &alloc::format!("from {heading}"));
    }
}

#[test]
fn along_and_heading_are_corrected_at_rest_and_on_the_spot() {
    let resting = Way { moving_s: 0.0, ..Way::endless(0.5, 0.0) };
    let error = Loop::new(context("differential"), &[], resting, (0.2, 0.0, 0.5)).run(8.0);
    assert!(error.along_m.abs() < 1e-3 && error.heading_rad.abs() < 1e-3, "at rest: {error:?}");
    let pivot = Way { moving_s: 3.0, ..Way::endless(0.0, 0.6) };
    let error = Loop::new(context("differential"), &[], pivot, (0.05, 0.0, -0.4)).run(8.0);
    assert!(error.heading_rad.abs() < 5e-3, "{error:?}");
    let stopping = Way { moving_s: 6.0, ..Way::endless(0.5, 0.0) };
    let error = Loop::new(context("differential"), &[], stopping, (0.1, 0.4, -0.6)).run(9.0);
    assert_small(error, "after a stop");
}

#[test]
fn without_a_solution_the_tick_is_left_to_the_other_law() {
    let context = context("differential");
    let way = Way::endless(0.6, 0.0);
    let mut run = Loop::new(context.clone(), &[("iterations", 1.0)], way, (0.0, 0.6, 0.9));
    let (mut other, _) = crate::law::build(FALLBACK, &Values::default(), &context).unwrap();
    let (mut left, mut kept) = (0, 0);
    for _ in 0..600 {
        let last = (run.wheels, context.vehicle.body(&run.wheels));
        let (way, pose) = (run.way, run.pose);
        let wanted = run.tick().wanted;
        if wanted.fallback {
            let input = Input::new(way.reference(0.0), &way, pose, last, context.period_s);
            assert_eq!(wanted.velocity, other.control(&input).velocity);
            left += 1;
        } else {
            kept += 1;
        }
    }
    assert!(left > 10 && kept > 10, "{left} left, {kept} kept");
}

#[test]
fn an_early_tick_steps_only_as_far_as_its_time_allows() {
    let context = context("differential");
    let way = Way::endless(0.8, 0.0);
    let mut law = Predictive::<STEPS>::new(&gains(&[]), &context).unwrap();
    let input = Input::new(
        way.reference(0.0),
        &way,
        way.begin,
        ([0.0; 4], BodyVelocity::ZERO),
        0.25 * context.period_s,
    );
    // 15 rad/s² over 5 ms on wheels of 0.1 m.
    let speed = law.control(&input).velocity.speed_m_s;
    assert!((speed - 0.0075).abs() < 1e-9, "{speed}");
}

#[test]
fn the_same_run_has_the_same_bits_and_a_reset_forgets() {
    let bits = |run: &mut Loop| -> alloc::vec::Vec<u64> {
        (0..200).map(|_| run.tick().wanted.velocity.turn_rate_rad_s.to_bits()).collect()
    };
    let make = || Loop::new(context("differential"), &[], Way::endless(0.7, 0.3), (0.1, 0.4, -0.9));
    let (mut first, mut second) = (make(), make());
    let once = bits(&mut first);
    assert_eq!(once, bits(&mut second));
    let fresh = make();
    (second.way, second.pose, second.wheels) = (fresh.way, fresh.pose, fresh.wheels);
    second.law.reset(BodyVelocity::ZERO);
    assert_eq!(once, bits(&mut second));
}

/// Where the error is small and no limit binds, the poles say how fast the law is.
#[test]
fn the_bandwidth_is_that_of_the_loop() {
    let mut run = Loop::new(context("differential"), &[], Way::endless(0.6, 0.0), (0.0, 0.0, 0.0));
    run.run(4.0);
    let Direction { cos, sin } = run.way.reference(0.0).direction;
    (run.pose.x_m, run.pose.y_m) = (run.pose.x_m - 1e-3 * sin, run.pose.y_m + 1e-3 * cos);
    let natural = run.law.bandwidth_rad_s(0.6);
    // A pair of poles at the natural frequency a, damped by 1/√2 to 1.4, halves an error within 0.8/a to 3/a (textbook).
    let mut ticks = 0;
    while run.tick().error.cross_m > 0.5e-3 {
        ticks += 1;
    }
    let half_s = f64::from(ticks) * run.context.period_s;
    assert!(half_s * natural > 0.8 && half_s * natural < 3.0, "{half_s} s at {natural} rad/s");
}
