//! Pivots and dwells: segments that stay where they are.

use super::Reference;
use super::profile::{self, PIVOT_KEYS};
use super::segment::{Kind, Progress, Stretch, Travel};
use super::timing::Timing;
use crate::geometry::{BodyVelocity, Direction, Pose};
use crate::keys::{Bound, Key, Problem};
use crate::math;
use crate::vehicle::{Motion, Vehicle};
use alloc::boxed::Box;
use alloc::string::String;
use alloc::vec;

/// Stands for the turn acceleration of a machine that cannot pivot, until its plan is refused.
pub(super) const AT_ONCE_RAD_S2: f64 = 1e9;

pub(super) const PIVOT: Kind = Kind {
    keys: &[
        Key::required(
            "turn_rad",
            "rad",
            Bound::within(-1000.0, 1000.0),
            "change of heading, positive to the left",
        ),
        PIVOT_KEYS[0],
        PIVOT_KEYS[1],
        PIVOT_KEYS[2],
        PIVOT_KEYS[3],
        PIVOT_KEYS[4],
        PIVOT_KEYS[5],
    ],
    timed: true,
    ..Kind::plain("pivot", |raw, values, joint| {
        let turn = values.get("turn_rad");
        if turn == 0.0 {
            return Err(vec![Problem::new(
                "turn_rad",
                "0 rad is no turn; leave the segment out, or use a dwell",
            )]);
        }
        let timing = profile::build(raw, values, turn.abs(), &profile::TURNING)?;
        Ok(Box::new(Pivot { start: joint.pose, sign: turn.signum(), timing }))
    })
};

pub(super) const DWELL: Kind = Kind {
    keys: &[Key::required("duration_s", "s", Bound::positive(86_400.0), "how long to rest")],
    ..Kind::plain("dwell", |_, values, joint| {
        Ok(Box::new(Dwell {
            rest: Reference {
                rest_curvature_1_m: joint.rest_curvature_1_m,
                ..Reference::at_rest(joint.pose, joint.curvature_1_m)
            },
            duration_s: values.get("duration_s"),
        }))
    })
};

#[derive(Debug)]
struct Pivot {
    start: Pose,
    sign: f64,
    timing: Timing,
}

impl Stretch for Pivot {
    fn duration_s(&self) -> f64 {
        self.timing.duration_s()
    }

    fn extent(&self) -> f64 {
        self.timing.extent()
    }

    fn path_length_m(&self) -> f64 {
        0.0
    }

    fn timing(&self, t_s: f64) -> Progress {
        self.timing.at(t_s)
    }

    fn at_progress(&self, progress: Progress) -> Reference {
        let heading_rad = math::wrap(self.start.heading_rad + self.sign * progress.at);
        Reference {
            pose: Pose { heading_rad, ..self.start },
            direction: Direction::of(heading_rad),
            velocity: BodyVelocity { speed_m_s: 0.0, turn_rate_rad_s: self.sign * progress.rate },
            curvature_1_m: 0.0,
            rest_curvature_1_m: self.sign * f64::INFINITY,
            curvature_rate_1_m2: 0.0,
            accel_m_s2: 0.0,
            turn_accel_rad_s2: self.sign * progress.accel,
        }
    }

    fn travel(&self) -> Travel {
        Travel::default()
    }

    fn brake_decel(&self, vehicle: &dyn Vehicle, _exit: f64) -> f64 {
        // A machine that cannot pivot has no plan with one: `first_excess`, or the check, refuses it.
        vehicle.pivot_decel_rad_s2().unwrap_or(AT_ONCE_RAD_S2)
    }

    fn brake_from_s(&self, exit: f64, decel: f64) -> Option<f64> {
        self.timing.brake_from_s(exit, decel)
    }

    fn first_excess(&self, vehicle: &dyn Vehicle) -> Option<(f64, String)> {
        let (at_s, turn_rate_rad_s) = self.timing.fastest();
        vehicle.excess(Motion::Pivot { turn_rate_rad_s }).map(|excess| (at_s, excess))
    }
}

#[derive(Debug)]
struct Dwell {
    rest: Reference,
    duration_s: f64,
}

impl Stretch for Dwell {
    fn duration_s(&self) -> f64 {
        self.duration_s
    }

    fn extent(&self) -> f64 {
        0.0
    }

    fn path_length_m(&self) -> f64 {
        0.0
    }

    fn timing(&self, _t_s: f64) -> Progress {
        Progress::resting(0.0)
    }

    fn at_progress(&self, _progress: Progress) -> Reference {
        self.rest
    }

    fn travel(&self) -> Travel {
        Travel::default()
    }

    fn prepare_for(&mut self, next: &Reference) {
        self.rest.curvature_1_m = next.curvature_1_m;
        self.rest.rest_curvature_1_m = next.rest_curvature_1_m;
    }

    fn brake_decel(&self, _vehicle: &dyn Vehicle, _exit: f64) -> f64 {
        f64::INFINITY
    }

    fn brake_from_s(&self, _exit: f64, _decel: f64) -> Option<f64> {
        Some(self.duration_s)
    }

    fn first_excess(&self, _vehicle: &dyn Vehicle) -> Option<(f64, String)> {
        None
    }
}
