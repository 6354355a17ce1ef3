//! Pivots and dwells: segments that stay where they are.

use super::Reference;
use super::segment::{Kind, Progress, Stretch, Travel, Uniform};
use crate::geometry::{BodyVelocity, Direction, Pose};
use crate::keys::{Bound, Key, Problem};
use crate::math;
use crate::vehicle::{Motion, Vehicle};
use alloc::boxed::Box;
use alloc::string::String;
use alloc::vec;

pub(super) const PIVOT: Kind = Kind {
    name: "pivot",
    keys: &[
        Key::required(
            "turn_rad",
            "rad",
            Bound::within(-1000.0, 1000.0),
            "change of heading, positive to the left",
        ),
        Key::required(
            "rate_rad_s",
            "rad/s",
            Bound::within(0.0, 30.0),
            "turn rate from the first instant, positive",
        ),
        Key::optional(
            "end_rate_rad_s",
            "rad/s",
            Bound::within(0.0, 30.0),
            "turn rate at the end, reached at constant acceleration; without it the rate stays",
        ),
    ],
    reversible: false,
    has_points: false,
    build: |_, values, joint| {
        let (turn, begin) = (values.get("turn_rad"), values.get("rate_rad_s"));
        let end = values.find("end_rate_rad_s").unwrap_or(begin);
        if turn == 0.0 {
            return Err(vec![Problem::new(
                "turn_rad",
                "0 rad is no turn; leave the segment out, or use a dwell",
            )]);
        }
        if begin + end == 0.0 {
            return Err(vec![Problem::new(
                "rate_rad_s",
                "0 rad/s at both ends never gets anywhere; give a rate",
            )]);
        }
        let timing = Uniform::new(turn.abs(), begin, end);
        Ok(Box::new(Pivot { start: joint.pose, sign: turn.signum(), timing }))
    },
};

pub(super) const DWELL: Kind = Kind {
    name: "dwell",
    keys: &[Key::required("duration_s", "s", Bound::positive(86_400.0), "how long to rest")],
    reversible: false,
    has_points: false,
    build: |_, values, joint| {
        Ok(Box::new(Dwell {
            rest: Reference::at_rest(joint.pose, joint.curvature_1_m),
            duration_s: values.get("duration_s"),
        }))
    },
};

#[derive(Debug)]
struct Pivot {
    start: Pose,
    sign: f64,
    timing: Uniform,
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
            accel_m_s2: 0.0,
            turn_accel_rad_s2: self.sign * progress.accel,
        }
    }

    fn travel(&self) -> Travel {
        Travel::default()
    }

    fn brake_decel(&self, vehicle: &dyn Vehicle) -> f64 {
        // A machine that cannot pivot has no plan with one: `first_excess` refused it.
        vehicle.pivot_accel_rad_s2().unwrap_or(f64::INFINITY)
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

    fn brake_decel(&self, _vehicle: &dyn Vehicle) -> f64 {
        f64::INFINITY
    }

    fn brake_from_s(&self, _exit: f64, _decel: f64) -> Option<f64> {
        Some(self.duration_s)
    }

    fn first_excess(&self, _vehicle: &dyn Vehicle) -> Option<(f64, String)> {
        None
    }
}
