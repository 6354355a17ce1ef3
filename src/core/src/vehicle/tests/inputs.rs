//! The inputs against the wheel conversion and the rule for limits, for every machine.

use super::{Vehicle, Wheels, machines};
use crate::geometry::BodyVelocity;

/// Body velocities that every machine of `machines` can have.
const MOTIONS: [(f64, f64); 5] = [(0.4, 0.1), (0.6, -0.2), (-0.5, 0.15), (-0.3, -0.05), (0.5, 0.0)];

/// A last command that moves straight on: a steered wheel at rest would steer first.
fn moving(vehicle: &dyn Vehicle, speed_m_s: f64) -> Wheels {
    vehicle.to_drive(&[speed_m_s, 0.0, 0.0, 0.0])
}

#[test]
fn inputs_make_the_motion_that_the_command_makes() {
    for vehicle in machines() {
        let inputs = vehicle.inputs();
        for (speed_m_s, turn_rate_rad_s) in MOTIONS {
            let wanted = BodyVelocity { speed_m_s, turn_rate_rad_s };
            let wheels = vehicle.wheels(wanted, 0.0, &moving(&*vehicle, speed_m_s));
            let body = inputs.body(inputs.of(&vehicle.to_machine(&wheels)));
            assert!((body.speed_m_s - speed_m_s).abs() < 1e-12, "{vehicle:?}: {body:?}");
            assert!((body.turn_rate_rad_s - turn_rate_rad_s).abs() < 1e-12, "{vehicle:?}: {body:?}");
        }
    }
}

#[test]
fn slopes_are_those_of_the_map() {
    for vehicle in machines() {
        let inputs = vehicle.inputs();
        for at in [[0.5, 0.3], [-0.4, -0.2], [0.0, 0.1]] {
            let slope = inputs.slope(at);
            for column in 0..2 {
                let shifted = |by: f64| {
                    let mut to = at;
                    to[column] += by;
                    inputs.body(to)
                };
                let (above, below) = (shifted(1e-6), shifted(-1e-6));
                let found = [
                    (above.speed_m_s - below.speed_m_s) / 2e-6,
                    (above.turn_rate_rad_s - below.turn_rate_rad_s) / 2e-6,
                ];
                for row in 0..2 {
                    assert!((found[row] - slope[row][column]).abs() < 1e-8, "{vehicle:?} at {at:?}");
                }
            }
        }
    }
}

/// Whatever the inputs do within their ranges, the command keeps the machine's own limits: no step is cut.
#[test]
fn ranges_are_inside_the_rule_for_limits() {
    let seconds = 0.02;
    for vehicle in machines() {
        let inputs = vehicle.inputs();
        for speed in [-0.9, -0.4, 0.4, 0.9] {
            for angle in [-0.98, -0.5, -0.1, 0.2, 0.6, 0.95] {
                for (more, way) in [(1.0, 1.0), (-1.0, 1.0), (1.0, -1.0), (-1.0, -1.0)] {
                    let from = [speed, angle].map(|share| 0.6 * share);
                    let from: [f64; 2] = core::array::from_fn(|at| from[at] * inputs.ranges[at].top);
                    let to: [f64; 2] = core::array::from_fn(|at| {
                        let range = inputs.ranges[at];
                        let toward = if at == 0 { more } else { way } * range.top;
                        from[at] + range.largest_step(from[at], toward, seconds).copysign(toward - from[at])
                    });
                    let bodies = [inputs.body(from), inputs.body(to)];
                    let last = vehicle.wheels(bodies[0], 0.0, &moving(&*vehicle, from[0]));
                    let target = vehicle.wheels(bodies[1], 0.0, &last);
                    let share = vehicle.step(&last, &target, seconds).share;
                    assert!(share > 1.0 - 1e-9, "{vehicle:?} from {from:?} to {to:?}: {share}");
                }
            }
        }
    }
}
