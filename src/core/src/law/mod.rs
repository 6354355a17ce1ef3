//! How to follow: a law computes a body velocity from reference and pose. One file a law, one trait, one table.

mod kanayama;
mod off_axle;
mod samson;

use crate::geometry::{BodyVelocity, Direction, Pose, TrackingError};
use crate::keys::{Key, Problem, Values};
use crate::plan::Reference;
use crate::plan::check::Following;
use crate::plan::segment::Travel;
use alloc::boxed::Box;
use alloc::format;
use alloc::vec;
use alloc::vec::Vec;
use core::fmt::Debug;

/// What a law sees.
#[derive(Clone, Copy, Debug)]
pub struct Input {
    /// What is wanted.
    pub reference: Reference,
    /// Where the chassis point is.
    pub pose: Pose,
    /// Direction of the pose's heading.
    pub direction: Direction,
    /// Pose minus reference, in the reference's frame.
    pub error: TrackingError,
}

impl Input {
    /// An input from a reference and a pose.
    pub fn new(reference: Reference, pose: Pose) -> Self {
        let error = TrackingError::between(pose, reference.pose, reference.direction);
        Self { reference, pose, direction: Direction::of(pose.heading_rad), error }
    }

    /// Reference minus pose, in the robot's frame, as Kanayama defines the error: (e_x, e_y), m.
    pub fn robot_frame_error_m(&self) -> (f64, f64) {
        let (reference, pose) = (self.reference.pose, self.pose);
        self.direction.into_frame(reference.x_m - pose.x_m, reference.y_m - pose.y_m)
    }
}

/// Where a law may be used.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Domain {
    /// The greatest heading error, rad.
    pub max_heading_error_rad: f64,
    /// False if the law would turn the machine round on the way forward.
    pub forward: bool,
    /// False if the law would turn the machine round in reverse.
    pub reverse: bool,
    /// True if the law corrects the heading also while the reference rests or turns on the spot.
    pub at_rest: bool,
}

impl Domain {
    /// The domain as a plan's check asks for it.
    pub const fn following(&self) -> Following {
        Following { forward: self.forward, reverse: self.reverse, at_rest: self.at_rest }
    }

    /// Whether a plan's ways of driving lie in the domain: the direction that does not, as "reverse?".
    pub const fn unfit_direction(&self, travel: Travel) -> Option<bool> {
        if travel.forward && !self.forward {
            Some(false)
        } else if travel.reverse && !self.reverse {
            Some(true)
        } else {
            None
        }
    }
}

/// A tracking law.
pub trait Law: Debug + Send {
    /// The body velocity wanted. Finite for every input within the domain.
    fn control(&self, input: &Input) -> BodyVelocity;

    /// Where the law may be used.
    fn domain(&self) -> Domain;

    /// Tells what became of the last result, so that a law with memory can take the tick in. `limited`: the limits
    /// changed the result; integrating then would wind up.
    fn settle(&mut self, input: &Input, limited: bool, seconds: f64) {
        let _ = (input, limited, seconds);
    }

    /// Forgets everything, before a start.
    fn reset(&mut self) {}
}

/// A law in the table.
#[derive(Clone, Copy, Debug)]
pub struct Kind {
    /// Its name in the site file.
    pub name: &'static str,
    /// Its gains.
    pub gains: &'static [Key],
    build: Build,
}

/// Builds a law from checked gains.
type Build = fn(&Values) -> Result<Box<dyn Law>, Vec<Problem>>;

/// All laws.
pub const KINDS: &[Kind] = &[kanayama::KIND, samson::KIND, off_axle::KIND];

/// Builds a law, and returns its gains with defaults filled in.
///
/// # Errors
/// If there is no such law, or gains are unknown or outside their bounds.
pub fn build(name: &str, given: &Values) -> Result<(Box<dyn Law>, Values), Vec<Problem>> {
    let Some(kind) = KINDS.iter().find(|kind| kind.name == name) else {
        let known: Vec<&str> = KINDS.iter().map(|kind| kind.name).collect();
        return Err(vec![Problem::new("name", format!("no law {name:?}; known are {}", known.join(", ")))]);
    };
    let in_gains = |problems: Vec<Problem>| {
        problems.into_iter().map(|problem| problem.within("gains")).collect::<Vec<_>>()
    };
    let gains = given.checked(kind.gains).map_err(in_gains)?;
    Ok(((kind.build)(&gains).map_err(in_gains)?, gains))
}

#[cfg(test)]
mod tests {
    use super::*;

    /// The state in which `tests/reference/zoh/check_values.json` (SciPy) gives each law's result: robot-frame error
    /// (0.10 m, −0.05 m, 0.20 rad), reference speed 0.5 m/s, turn rate 0.2 rad/s.
    fn check_input() -> Input {
        let pose = Pose::new(0.0, 0.0, 0.0);
        let reference_pose = Pose::new(0.10, -0.05, 0.20);
        let reference = Reference {
            velocity: BodyVelocity { speed_m_s: 0.5, turn_rate_rad_s: 0.2 },
            ..Reference::at_rest(reference_pose, 0.4)
        };
        Input::new(reference, pose)
    }

    fn law(name: &str, gains: &[(&str, f64)]) -> Box<dyn Law> {
        let mut values = Values::default();
        for (gain, value) in gains {
            values.set(gain, *value);
        }
        build(name, &values).unwrap().0
    }

    fn assert_close(velocity: BodyVelocity, speed_m_s: f64, turn_rate_rad_s: f64) {
        assert!((velocity.speed_m_s - speed_m_s).abs() < 1e-9, "{velocity:?}");
        assert!((velocity.turn_rate_rad_s - turn_rate_rad_s).abs() < 1e-9, "{velocity:?}");
    }

    #[test]
    fn kanayama_check_value() {
        let law = law("kanayama", &[("k_x", 10.0), ("k_y", 64.0), ("k_heading", 16.0)]);
        assert_close(law.control(&check_input()), 1.490_033_288_920_621, 0.189_354_646_360_489_74);
    }

    #[test]
    fn samson_check_value() {
        let input = check_input();
        assert!((input.error.along_m + 0.088_073_191_244).abs() < 1e-11);
        assert!((input.error.cross_m - 0.068_870_261_971_6).abs() < 1e-11);
        let law = law("samson", &[("k_1", 1.0), ("k_2", 1.0), ("k_3", 1.0)]);
        assert_close(law.control(&input), 0.562_223_990_395_392_7, 0.264_278_592_097_077_66);
    }

    #[test]
    fn off_axle_check_value() {
        // Input–output linearisation of a point 0.1 m ahead: heading 0.3, its wanted velocity (0.4, 0.1) in the site
        // frame. A reference at rest with the point 1 m away along that vector and k_p = 1 asks for just that.
        let pose = Pose::new(0.0, 0.0, 0.3);
        let reference = Reference::at_rest(Pose::new(0.4, 0.1, 0.3), 0.0);
        let law = law("off-axle", &[("x_p_m", 0.1), ("y_p_m", 0.0), ("k_p", 1.0)]);
        assert_close(
            law.control(&Input::new(reference, pose)),
            0.411_686_616_316_376_4,
            -0.226_744_337_519_752_3,
        );
    }

    #[test]
    fn every_law_follows_a_perfect_reference_exactly() {
        let mut input = check_input();
        input = Input::new(input.reference, input.reference.pose);
        for kind in KINDS {
            assert_close(law(kind.name, &[]).control(&input), 0.5, 0.2);
        }
    }

    #[test]
    fn kanayama_and_samson_steer_back_to_a_line_in_reverse_too() {
        for name in ["kanayama", "samson"] {
            for speed in [0.5, -0.5] {
                let law = law(name, &[]);
                let mut pose = Pose::new(0.0, 0.3, 0.2);
                for step in 0..1500 {
                    let along = speed * f64::from(step) * 0.02;
                    let reference = Reference {
                        velocity: BodyVelocity { speed_m_s: speed, turn_rate_rad_s: 0.0 },
                        ..Reference::at_rest(Pose::new(along, 0.0, 0.0), 0.0)
                    };
                    pose = pose.moved(law.control(&Input::new(reference, pose)), 0.02);
                }
                assert!(
                    pose.y_m.abs() < 1e-3 && pose.heading_rad.abs() < 1e-3,
                    "{name} at {speed}: {pose:?}"
                );
            }
        }
    }

    #[test]
    fn unknown_laws_and_gains_are_refused_by_name() {
        let mut values = Values::default();
        values.set("k_z", 1.0);
        let problems = build("kanayama", &values).unwrap_err();
        assert_eq!(problems[0].key, "gains.k_z");
        assert!(
            build("no-such", &Values::default()).unwrap_err()[0].what.contains("kanayama, samson, off-axle")
        );
    }
}
