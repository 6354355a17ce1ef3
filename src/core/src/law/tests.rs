//! What every law must keep; values from outside, designs and properties are in modules of their own.

use super::testing::{Machine, ask, context, law_on, moving};
use super::*;
use crate::geometry::Pose;
use crate::plan::Reference;

mod bounded;
mod designs;
mod integrals;
mod lyapunov;
mod poles;
mod singular;
mod values;

fn assert_close(wanted: Wanted, speed_m_s: f64, turn_rate_rad_s: f64) {
    let velocity = wanted.velocity;
    assert!((velocity.speed_m_s - speed_m_s).abs() < 1e-9, "{velocity:?}");
    assert!((velocity.turn_rate_rad_s - turn_rate_rad_s).abs() < 1e-9, "{velocity:?}");
}

/// A machine that a kind is made for, by its vehicle kind's name.
fn machine_for(kind: &Kind) -> &'static str {
    if kind.machines == Machines::Steered { "car" } else { "differential" }
}

#[test]
fn every_law_follows_a_perfect_reference_exactly() {
    let reference = moving(Pose::new(0.10, -0.05, 0.20), 0.5, 0.2);
    for kind in KINDS {
        let mut law = law_on(machine_for(kind), kind.name, &[]);
        law.reset(reference.velocity);
        assert_close(ask(&mut *law, reference, reference.pose), 0.5, 0.2);
    }
}

/// From rest beside a line that is driven at once, within the machine's limits.
#[test]
fn every_law_steers_a_machine_onto_a_line_from_rest_in_each_of_its_directions() {
    for kind in KINDS {
        for speed in [0.5, -0.5] {
            let context = context(machine_for(kind));
            let (mut law, _) = build(kind.name, &Values::default(), &context).unwrap();
            if law.domain().unfit_direction(Travel { forward: speed > 0.0, reverse: speed < 0.0 }).is_some() {
                continue;
            }
            law.reset(BodyVelocity::ZERO);
            let mut machine = Machine::new(context, Pose::new(-0.1, 0.3, 0.2));
            for step in 0..2000 {
                let along = speed * f64::from(step) * 0.02;
                machine.step(&mut *law, moving(Pose::new(along, 0.0, 0.0), speed, 0.0));
            }
            let pose = machine.pose;
            assert!(
                pose.y_m.abs() < 1e-3 && pose.heading_rad.abs() < 1e-3,
                "{} at {speed}: {pose:?}",
                kind.name
            );
        }
    }
}

#[test]
fn unknown_laws_and_gains_are_refused_by_name() {
    let mut values = Values::default();
    values.set("k_z", 1.0);
    let problems = build("kanayama", &values, &context("unicycle")).unwrap_err();
    assert_eq!(problems[0].key, "gains.k_z");
    let problems = build("no-such", &Values::default(), &context("unicycle")).unwrap_err();
    assert!(problems[0].what.contains("kanayama, samson, off-axle"));
}
