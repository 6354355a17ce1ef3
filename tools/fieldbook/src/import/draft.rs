//! A plan being drafted: its pieces in their order, and the plan file they become.

use super::geographic::Origin;
use serde_json::{Value, json};
use std::fmt::Write as _;
use trackhold_core::geometry::Pose;

/// A plan being drafted.
#[derive(Clone, Debug, PartialEq)]
pub struct Draft {
    /// Pose at its beginning.
    pub start: Pose,
    /// Where on Earth the site frame's origin lies, if the source says.
    pub origin: Option<Origin>,
    /// Its segments.
    pub pieces: Vec<Piece>,
}

/// A segment.
#[derive(Clone, Debug, PartialEq)]
pub struct Piece {
    /// Where it comes from, in words.
    pub place: String,
    /// What it looks like.
    pub shape: Shape,
    /// Its timing; none where the shape has its own.
    pub pace: Option<Pace>,
    /// True if it is driven backwards.
    pub reverse: bool,
}

/// How fast a piece is driven: m/s and m/s², or rad/s and rad/s² on a pivot.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Pace {
    /// Greatest rate.
    pub rate: f64,
    /// If given, the rate rises and falls with this acceleration from and to the rates at the ends; else it is there from
    /// the first instant to the last.
    pub ramp: Option<Ramp>,
}

/// A rise and a fall of the rate.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Ramp {
    /// Acceleration and deceleration.
    pub accel: f64,
    /// Rate at the beginning.
    pub start: f64,
    /// Rate at the end.
    pub end: f64,
}

/// What a piece looks like.
#[derive(Clone, Debug, PartialEq)]
pub enum Shape {
    /// A straight line, m.
    Line(f64),
    /// An arc: radius, m, and turn, rad, positive to the left.
    Arc(f64, f64),
    /// A turn on the spot, rad, positive to the left.
    Pivot(f64),
    /// A curve through way-poses; their headings are the machine's.
    Spline(Vec<Pose>),
    /// A rational spline.
    Nurbs(Nurbs),
    /// Stamped way-poses.
    Samples(Vec<Stamped>),
}

/// A rational B-spline in the site frame.
#[derive(Clone, Debug, PartialEq)]
pub struct Nurbs {
    /// Degree.
    pub degree: usize,
    /// Knots, 0 to 1.
    pub knots: Vec<f64>,
    /// Control points, m.
    pub points: Vec<(f64, f64)>,
    /// A weight for each of them.
    pub weights: Vec<f64>,
}

/// A way-pose with its time.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Stamped {
    /// Time from the first one, s.
    pub t_s: f64,
    /// Where the machine is then.
    pub pose: Pose,
    /// Its speed, negative in reverse, if the source says, m/s.
    pub speed_m_s: Option<f64>,
}

/// Who a plan is.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Name {
    /// The plan's id.
    pub id: String,
    /// Its revision.
    pub revision: u32,
}

type Fields = Vec<(&'static str, Value)>;

impl Draft {
    /// The plan file, a line a segment, a line a point.
    pub fn to_json(&self, name: &Name) -> String {
        let mut text = String::from("{\n");
        let mut head: Fields = vec![
            ("format", json!(trackhold_core::plan::FORMAT)),
            ("id", json!(name.id)),
            ("revision", json!(name.revision)),
        ];
        for (key, value) in head.drain(..) {
            let _ = writeln!(text, "  \"{key}\": {value},");
        }
        if let Some(origin) = &self.origin {
            let _ = writeln!(text, "  \"origin\": {},", object(&origin.fields()));
        }
        let _ = write!(text, "  \"start\": {},\n  \"segments\": [", object(&pose_fields(self.start)));
        for (index, piece) in self.pieces.iter().enumerate() {
            text.push_str(if index == 0 { "\n" } else { ",\n" });
            text.push_str(&piece.to_json());
        }
        text.push_str("\n  ]\n}\n");
        text
    }
}

impl Piece {
    fn to_json(&self) -> String {
        let mut fields: Fields = vec![("kind", json!(self.shape.kind()))];
        match &self.shape {
            Shape::Line(length_m) => fields.push(("length_m", json!(length_m))),
            Shape::Arc(radius_m, turn_rad) => {
                fields.push(("radius_m", json!(radius_m)));
                fields.push(("turn_rad", json!(turn_rad)));
            }
            Shape::Pivot(turn_rad) => fields.push(("turn_rad", json!(turn_rad))),
            Shape::Nurbs(curve) => {
                fields.push(("degree", json!(curve.degree)));
                fields.push(("knots", json!(curve.knots)));
                fields.push(("weights", json!(curve.weights)));
            }
            Shape::Spline(_) | Shape::Samples(_) => {}
        }
        if let Some(pace) = &self.pace {
            fields.extend(pace.fields(matches!(self.shape, Shape::Pivot(_))));
        }
        if self.reverse {
            fields.push(("reverse", json!(true)));
        }
        let points = self.shape.points();
        let flat = object(&fields);
        if points.is_empty() {
            return format!("    {flat}");
        }
        let rows: Vec<String> = points.iter().map(|fields| format!("      {}", object(fields))).collect();
        format!("    {}, \"points\": [\n{}\n    ] }}", flat.trim_end_matches(" }"), rows.join(",\n"))
    }
}

impl Shape {
    /// The segment kind's name in the plan file.
    pub fn kind(&self) -> &'static str {
        match self {
            Self::Line(_) => "line",
            Self::Arc(..) => "arc",
            Self::Pivot(_) => "pivot",
            Self::Spline(_) => "spline",
            Self::Nurbs(_) => "nurbs",
            Self::Samples(_) => "samples",
        }
    }

    fn points(&self) -> Vec<Fields> {
        match self {
            Self::Line(_) | Self::Arc(..) | Self::Pivot(_) => Vec::new(),
            Self::Spline(poses) => poses.iter().map(|pose| pose_fields(*pose)).collect(),
            Self::Nurbs(curve) => {
                curve.points.iter().map(|(x, y)| vec![("x_m", json!(x)), ("y_m", json!(y))]).collect()
            }
            Self::Samples(points) => points.iter().map(Stamped::fields).collect(),
        }
    }
}

impl Stamped {
    fn fields(&self) -> Fields {
        let mut fields = vec![("t_s", json!(self.t_s))];
        fields.extend(pose_fields(self.pose));
        fields.extend(self.speed_m_s.map(|speed| ("speed_m_s", json!(speed))));
        fields
    }
}

impl Pace {
    fn fields(&self, on_the_spot: bool) -> Fields {
        let names = if on_the_spot {
            ["rate_rad_s", "accel_rad_s2", "start_rate_rad_s", "end_rate_rad_s"]
        } else {
            ["speed_m_s", "accel_m_s2", "start_speed_m_s", "end_speed_m_s"]
        };
        let Some(ramp) = self.ramp else { return vec![(names[0], json!(self.rate))] };
        let mut fields = vec![
            ("profile", json!("trapezoid")),
            (names[0], json!(self.rate)),
            (names[1], json!(ramp.accel)),
        ];
        for (name, rate) in [(names[2], ramp.start), (names[3], ramp.end)] {
            if rate > 0.0 {
                fields.push((name, json!(rate)));
            }
        }
        fields
    }
}

fn pose_fields(pose: Pose) -> Fields {
    vec![("x_m", json!(pose.x_m)), ("y_m", json!(pose.y_m)), ("heading_rad", json!(pose.heading_rad))]
}

/// An object on one line, its keys in the order given.
fn object(fields: &[(&'static str, Value)]) -> String {
    let members: Vec<String> = fields.iter().map(|(key, value)| format!("\"{key}\": {value}")).collect();
    format!("{{ {} }}", members.join(", "))
}
