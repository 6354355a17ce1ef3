//! Poses, body velocities, exact motion along an arc, errors between poses.
//!
//! Site frame: right-handed, x and y in metres, heading counter-clockwise from +x. Chassis frame: ISO 8855, x forward,
//! y to the left.

use crate::math;

/// Where something is in the site frame.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Pose {
    /// Position, m.
    pub x_m: f64,
    /// Position, m.
    pub y_m: f64,
    /// Heading, rad.
    pub heading_rad: f64,
}

/// Speed along the chassis' x axis and turn rate.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct BodyVelocity {
    /// Speed, negative in reverse, m/s.
    pub speed_m_s: f64,
    /// Turn rate, positive to the left, rad/s.
    pub turn_rate_rad_s: f64,
}

/// A unit vector: cosine and sine of a heading, computed once and passed along.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Direction {
    /// Cosine of the heading.
    pub cos: f64,
    /// Sine of the heading.
    pub sin: f64,
}

impl Default for Direction {
    fn default() -> Self {
        Self { cos: 1.0, sin: 0.0 }
    }
}

impl Direction {
    /// The direction of a heading.
    pub fn of(heading_rad: f64) -> Self {
        let (cos, sin) = math::cos_sin(heading_rad);
        Self { cos, sin }
    }

    /// A vector of the site frame, seen from a frame that points this way.
    pub fn into_frame(self, x: f64, y: f64) -> (f64, f64) {
        (self.cos * x + self.sin * y, self.cos * y - self.sin * x)
    }

    /// A vector of a frame that points this way, in the site frame.
    pub fn out_of_frame(self, x: f64, y: f64) -> (f64, f64) {
        (self.cos * x - self.sin * y, self.sin * x + self.cos * y)
    }

    /// The direction of the angle from `other` to this one.
    pub fn relative_to(self, other: Self) -> Self {
        Self {
            cos: self.cos * other.cos + self.sin * other.sin,
            sin: self.sin * other.cos - self.cos * other.sin,
        }
    }
}

impl BodyVelocity {
    /// No motion.
    pub const ZERO: Self = Self { speed_m_s: 0.0, turn_rate_rad_s: 0.0 };

    /// Both parts times one factor; the curvature stays.
    pub fn scaled(self, factor: f64) -> Self {
        Self { speed_m_s: self.speed_m_s * factor, turn_rate_rad_s: self.turn_rate_rad_s * factor }
    }

    /// True if both parts are finite numbers.
    pub fn is_finite(self) -> bool {
        self.speed_m_s.is_finite() && self.turn_rate_rad_s.is_finite()
    }

    /// True if both parts are exactly zero.
    pub fn is_zero(self) -> bool {
        self == Self::ZERO
    }
}

impl Pose {
    /// A pose from its numbers.
    pub const fn new(x_m: f64, y_m: f64, heading_rad: f64) -> Self {
        Self { x_m, y_m, heading_rad }
    }

    /// The pose after `seconds` at a constant body velocity: exact, the chassis moves on an arc. The heading is wrapped.
    pub fn moved(self, velocity: BodyVelocity, seconds: f64) -> Self {
        self.along_arc(velocity.speed_m_s * seconds, velocity.turn_rate_rad_s * seconds)
    }

    /// The pose after `length_m` along an arc that turns the heading by `turn_rad`. The heading is wrapped.
    ///
    /// The chord of an arc is its length times sinc of half its turn, and lies along the mean heading.
    pub fn along_arc(self, length_m: f64, turn_rad: f64) -> Self {
        let half = 0.5 * turn_rad;
        let chord = length_m * math::sinc(half);
        let mean = Direction::of(self.heading_rad + half);
        Self {
            x_m: self.x_m + chord * mean.cos,
            y_m: self.y_m + chord * mean.sin,
            heading_rad: math::wrap(self.heading_rad + turn_rad),
        }
    }

    /// Distance between the two positions, m.
    pub fn distance_to(self, other: Self) -> f64 {
        math::length(self.x_m - other.x_m, self.y_m - other.y_m)
    }
}

/// Actual minus reference, in the reference's frame.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct TrackingError {
    /// Along the reference's heading, m.
    pub along_m: f64,
    /// Across it, positive to the left, m.
    pub cross_m: f64,
    /// Heading, rad in (−π, π].
    pub heading_rad: f64,
}

impl TrackingError {
    /// The error of `actual` against `reference`, whose heading's direction is given.
    pub fn between(actual: Pose, reference: Pose, direction: Direction) -> Self {
        let (along_m, cross_m) = direction.into_frame(actual.x_m - reference.x_m, actual.y_m - reference.y_m);
        Self { along_m, cross_m, heading_rad: math::wrap(actual.heading_rad - reference.heading_rad) }
    }
}

/// Where the estimator's point and axis sit on the chassis.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Mount {
    /// The estimator's point in the chassis frame, m ahead of the chassis point.
    pub offset_x_m: f64,
    /// The estimator's point in the chassis frame, m to the left of the chassis point.
    pub offset_y_m: f64,
    /// The estimator's heading minus the chassis' heading, rad.
    pub heading_offset_rad: f64,
}

impl Mount {
    /// The chassis point's pose from the estimator's. The heading is wrapped.
    pub fn chassis(self, estimator: Pose) -> Pose {
        let heading_rad = math::wrap(estimator.heading_rad - self.heading_offset_rad);
        if self.offset_x_m == 0.0 && self.offset_y_m == 0.0 {
            return Pose { heading_rad, ..estimator };
        }
        let (x, y) = Direction::of(heading_rad).out_of_frame(self.offset_x_m, self.offset_y_m);
        Pose { x_m: estimator.x_m - x, y_m: estimator.y_m - y, heading_rad }
    }

    /// The estimator's pose from the chassis point's; the inverse of [`Mount::chassis`].
    pub fn estimator(self, chassis: Pose) -> Pose {
        let (x, y) = Direction::of(chassis.heading_rad).out_of_frame(self.offset_x_m, self.offset_y_m);
        Pose {
            x_m: chassis.x_m + x,
            y_m: chassis.y_m + y,
            heading_rad: math::wrap(chassis.heading_rad + self.heading_offset_rad),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn close(a: Pose, b: Pose, tolerance: f64) {
        assert!(a.distance_to(b) < tolerance, "{a:?} {b:?}");
        assert!(math::wrap(a.heading_rad - b.heading_rad).abs() < tolerance, "{a:?} {b:?}");
    }

    #[test]
    fn exact_step_as_computed_with_scipy() {
        // SciPy 1.17, solve_ivp DOP853, rtol 1e-12: from (0, 0, 0.3), v 0.5, ω 0.4, for 2 s.
        let velocity = BodyVelocity { speed_m_s: 0.5, turn_rate_rad_s: 0.4 };
        close(
            Pose::new(0.0, 0.0, 0.3).moved(velocity, 2.0),
            Pose::new(0.744_608_941_8, 0.627_175_459_6, 1.1),
            1e-10,
        );
    }

    #[test]
    fn two_halves_of_an_arc_make_the_whole() {
        for turn in [0.0, 1e-9, -1e-3, 0.3, -2.0, 7.0] {
            let start = Pose::new(3.0, -2.0, 2.9);
            close(
                start.along_arc(0.7, turn / 2.0).along_arc(0.7, turn / 2.0),
                start.along_arc(1.4, turn),
                1e-14,
            );
        }
    }

    #[test]
    fn mount_and_its_inverse_cancel() {
        let mount = Mount { offset_x_m: 0.4, offset_y_m: -0.1, heading_offset_rad: math::PI };
        let chassis = Pose::new(1.0, 2.0, 0.5);
        let estimator = mount.estimator(chassis);
        // The estimator looks backwards from a point ahead and to the right of the chassis point.
        close(estimator, Pose::new(1.398_975_576, 2.104_011_959, 0.5 - math::PI), 1e-8);
        close(mount.chassis(estimator), chassis, 1e-14);
    }

    #[test]
    fn error_is_actual_minus_reference_in_the_references_frame() {
        let reference = Pose::new(1.0, 1.0, math::FRAC_PI_2);
        let error =
            TrackingError::between(Pose::new(0.8, 1.5, 1.0), reference, Direction::of(math::FRAC_PI_2));
        assert!((error.along_m - 0.5).abs() < 1e-15, "ahead along +y");
        assert!((error.cross_m - 0.2).abs() < 1e-15, "left of a reference that looks along +y is −x");
        assert!((error.heading_rad - (1.0 - math::FRAC_PI_2)).abs() < 1e-15);
    }
}
