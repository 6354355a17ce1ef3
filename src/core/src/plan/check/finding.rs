//! What the check finds: where, how bad, what it means, what would mend it.

use crate::geometry::Pose;
use crate::vehicle::LimitName;
use alloc::format;
use alloc::string::String;
use core::fmt;

/// How bad a finding is.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Severity {
    /// Good to know.
    Information,
    /// The machine will do it, but not exactly, or with little authority left.
    Warning,
    /// The machine cannot do it.
    Unfit,
}

impl Severity {
    /// The name that reports use.
    pub const fn name(self) -> &'static str {
        match self {
            Self::Information => "information",
            Self::Warning => "warning",
            Self::Unfit => "unfit",
        }
    }
}

impl fmt::Display for Severity {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.pad(self.name())
    }
}

/// What is found.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Fault {
    /// The bytes are no plan file.
    Unreadable,
    /// A value in it is missing, unknown, or outside its bound.
    Value,
    /// The file has too many bytes.
    TooLarge,
    /// It has too many way-poses.
    TooManySamples,
    /// It lasts too long.
    TooLong,
    /// The position jumps.
    Gap,
    /// The heading jumps.
    Kink,
    /// The speed jumps.
    SpeedStep,
    /// The turn rate jumps on the spot.
    TurnRateStep,
    /// The curvature jumps.
    CurvatureStep,
    /// A rest is too short for the steering to get to what comes next.
    SteeringTime,
    /// The direction of travel changes.
    Cusp,
    /// The motion does not go along the heading.
    Sideways,
    /// A turn on the spot, for a machine that cannot.
    Pivot,
    /// The acceleration changes faster than the site file's jerk.
    Jerk,
    /// A load beyond a limit, or near it.
    Limit(LimitName),
    /// A direction of travel that the law cannot follow.
    LawDirection,
    /// A segment slower than the law steers for by itself.
    LawSpeed,
}

impl Fault {
    /// The name that reports and tests use.
    pub const fn name(self) -> &'static str {
        match self {
            Self::Unreadable => "unreadable",
            Self::Value => "value",
            Self::TooLarge => "too-large",
            Self::TooManySamples => "too-many-samples",
            Self::TooLong => "too-long",
            Self::Gap => "gap",
            Self::Kink => "kink",
            Self::SpeedStep => "speed-step",
            Self::TurnRateStep => "turn-rate-step",
            Self::CurvatureStep => "curvature-step",
            Self::SteeringTime => "steering-time",
            Self::Cusp => "cusp",
            Self::Sideways => "sideways",
            Self::Pivot => "pivot",
            Self::Jerk => "jerk",
            Self::Limit(limit) => limit_name(limit),
            Self::LawDirection => "law-direction",
            Self::LawSpeed => "law-speed",
        }
    }

    /// What the finding's value is, in words.
    pub(super) const fn what(self) -> &'static str {
        match self {
            Self::Unreadable => "not a plan file",
            Self::Value => "value",
            Self::TooLarge => "size of the plan file",
            Self::TooManySamples => "number of way-poses",
            Self::TooLong => "duration",
            Self::Gap => "jump of the position",
            Self::Kink => "jump of the heading",
            Self::SpeedStep => "step of the speed",
            Self::TurnRateStep => "step of the turn rate",
            Self::CurvatureStep => "step of the curvature",
            Self::SteeringTime => "the steering needs",
            Self::Cusp => "step of the speed where the direction of travel changes",
            Self::Sideways => "angle between motion and heading",
            Self::Pivot => "turn rate on the spot",
            Self::Jerk => "jerk",
            Self::Limit(limit) => limit.words(),
            Self::LawDirection => "speed against the law's direction",
            Self::LawSpeed => "greatest speed, below the least that the law steers for by itself,",
        }
    }

    /// What would mend it.
    pub(super) const fn remedy(self) -> &'static str {
        match self {
            Self::Unreadable | Self::Value => "correct the plan file",
            Self::TooLarge => "send the plan in parts that continue each other, or in the compact form",
            Self::TooManySamples => "leave way-poses out: cubics join them",
            Self::TooLong => "divide the plan into several",
            Self::Gap => "let the segment begin where the one before ends",
            Self::Kink => "join the headings with an arc, or at rest with a pivot",
            Self::SpeedStep => "ramp the speed: end_speed_m_s, a profile, or fieldbook retime",
            Self::TurnRateStep => "ramp the rate: end_rate_rad_s, or a profile",
            Self::CurvatureStep => "put a clothoid between the curvatures, or a rest",
            Self::SteeringTime => {
                "put in a dwell that lasts as long as the steering needs; fieldbook retime does that"
            }
            Self::Cusp => "end the one direction at rest, then begin the other from rest",
            Self::Sideways => "let the headings point along the path, or against it in reverse",
            Self::Pivot => "turn along an arc: a machine that steers cannot turn on the spot",
            Self::Jerk => "a profile with jerk_m_s3, or fieldbook retime",
            Self::Limit(LimitName::SteeringAngle) => "turn wider",
            Self::Limit(
                LimitName::Acceleration
                | LimitName::Deceleration
                | LimitName::WheelAcceleration
                | LimitName::WheelDeceleration
                | LimitName::TurnAcceleration
                | LimitName::TurnDeceleration,
            ) => "ramp the speed over a longer way, or slow down",
            Self::Limit(LimitName::SteeringRate) => {
                "slow down, or let the curvature change over a longer way"
            }
            Self::Limit(_) => "slow down or turn wider",
            Self::LawDirection => "choose another law, or the other sign of law.gains.x_p_m",
            Self::LawSpeed => "nothing: the law it falls back to steers; or lower law.gains.least_speed_m_s",
        }
    }
}

/// The name of a limit in reports.
pub const fn limit_name(limit: LimitName) -> &'static str {
    match limit {
        LimitName::WheelSpeed => "wheel-speed",
        LimitName::WheelAcceleration => "wheel-acceleration",
        LimitName::WheelDeceleration => "wheel-deceleration",
        LimitName::Speed => "speed",
        LimitName::Acceleration => "acceleration",
        LimitName::Deceleration => "deceleration",
        LimitName::TurnRate => "turn-rate",
        LimitName::TurnAcceleration => "turn-acceleration",
        LimitName::TurnDeceleration => "turn-deceleration",
        LimitName::SteeringAngle => "steering-angle",
        LimitName::SteeringRate => "steering-rate",
        LimitName::LateralAcceleration => "lateral-acceleration",
    }
}

/// A place on the plan.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Place {
    /// Index of the segment.
    pub segment: usize,
    /// Its kind.
    pub kind: &'static str,
    /// Plan time, s.
    pub t_s: f64,
    /// Progress from the segment's beginning: m, or rad on a pivot.
    pub progress: f64,
    /// Pose there.
    pub pose: Pose,
}

impl fmt::Display for Place {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "segments[{}] ({}), {:.3} s", self.segment, self.kind, self.t_s)
    }
}

/// Where a finding lies.
#[derive(Clone, Debug, PartialEq)]
pub enum Where {
    /// In the plan as a whole.
    Plan,
    /// At a key of the plan file, such as `segments[2] (arc).radius_m`.
    Key(String),
    /// At a place on the plan.
    At(Place),
}

/// Something to know about a plan.
#[derive(Clone, Debug, PartialEq)]
pub struct Finding {
    /// What.
    pub fault: Fault,
    /// How bad.
    pub severity: Severity,
    /// Where; of several such places in a segment the worst.
    pub place: Where,
    /// In how many places of the segment (or of the plan) it was seen.
    pub places: u64,
    /// The value there and its limit; none where the fault is no number.
    pub value: Option<(f64, f64)>,
    /// Unit of both.
    pub unit: &'static str,
    /// What it means.
    pub meaning: String,
    /// What would mend it.
    pub remedy: &'static str,
}

impl Finding {
    /// The place on the plan, if it has one.
    pub fn at(&self) -> Option<&Place> {
        match &self.place {
            Where::At(place) => Some(place),
            _ => None,
        }
    }

    /// The finding in a line: place, value, limit, unit, and what would mend it.
    pub fn line(&self) -> String {
        let place = match &self.place {
            Where::Plan => String::from("plan"),
            Where::Key(key) => return format!("{key}: {}", self.meaning),
            Where::At(place) => format!("{place}"),
        };
        let what = self.fault.what();
        match self.value {
            None => format!("{place}: {what}: {}", self.remedy),
            Some(_) if (self.fault, self.severity) == (Fault::Cusp, Severity::Information) => {
                format!("{place}: the direction of travel changes, at rest")
            }
            Some((value, _))
                if (self.fault, self.severity) == (Fault::CurvatureStep, Severity::Information) =>
            {
                format!("{place}: the curvature steps by {} 1/m, at rest", Number(value))
            }
            Some((value, limit)) => {
                let bound = match (self.severity, self.fault) {
                    (_, Fault::SteeringTime) => format!(", the rest there lasts {} s", Number(limit)),
                    (Severity::Information, _) | (_, Fault::Pivot | Fault::LawDirection) => String::new(),
                    (_, Fault::Limit(_)) => {
                        format!(", the limit is {}{}", Number(limit), Unit(self.unit))
                    }
                    _ => format!(", the threshold is {}{}", Number(limit), Unit(self.unit)),
                };
                format!("{place}: {what} {}{}{bound}: {}", Number(value), Unit(self.unit), self.remedy)
            }
        }
    }
}

struct Unit(&'static str);

impl fmt::Display for Unit {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        if self.0.is_empty() { Ok(()) } else { write!(f, " {}", self.0) }
    }
}

/// A number with at most four decimals, none that are zero.
struct Number(f64);

impl fmt::Display for Number {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let text = format!("{:.4}", self.0);
        let text = if text.contains('.') { text.trim_end_matches('0').trim_end_matches('.') } else { &text };
        f.write_str(text)
    }
}
