//! A plan file as a document: its segments' timing taken away and given anew, everything else as it was.

use serde_json::{Map, Value, json};
use std::fmt::Write as _;
use trackhold_core::plan::retime::{NewTiming, Retimed, TimingPoint};

/// The keys that say a segment's timing.
const TIMING_KEYS: [&str; 14] = [
    "timing",
    "profile",
    "speed_m_s",
    "end_speed_m_s",
    "start_speed_m_s",
    "accel_m_s2",
    "decel_m_s2",
    "jerk_m_s3",
    "rate_rad_s",
    "end_rate_rad_s",
    "start_rate_rad_s",
    "accel_rad_s2",
    "decel_rad_s2",
    "jerk_rad_s3",
];

/// Keys of a plan in the order in which people read them; others follow, the segments come last.
const HEAD: [&str; 6] = ["format", "id", "revision", "open", "continues", "start"];

/// A plan file.
#[derive(Clone, Debug)]
pub(super) struct Document {
    head: Map<String, Value>,
    /// The segments, each an object.
    pub(super) segments: Vec<Map<String, Value>>,
}

impl Document {
    /// Reads a plan file.
    pub(super) fn read(raw: &[u8]) -> Result<Self, String> {
        if raw.first().is_some_and(|byte| !byte.is_ascii_whitespace() && *byte != b'{') {
            return Err("not JSON; retime reads plans in their JSON form, not the compact one".to_owned());
        }
        let value: Value =
            serde_json::from_slice(raw).map_err(|error| format!("not a plan file: {error}"))?;
        let Value::Object(mut head) = value else { return Err("not a plan file: not an object".to_owned()) };
        let Some(Value::Array(list)) = head.remove("segments") else {
            return Err("not a plan file: no list of segments".to_owned());
        };
        let mut segments = Vec::with_capacity(list.len());
        for (index, segment) in list.into_iter().enumerate() {
            let Value::Object(segment) = segment else {
                return Err(format!("segments[{index}] is not an object"));
            };
            segments.push(segment);
        }
        Ok(Self { head, segments })
    }

    /// True if the plan expects more segments.
    pub(super) fn is_open(&self) -> bool {
        self.head.get("open") == Some(&Value::Bool(true))
    }

    /// The plan with some slow timing everywhere.
    pub(super) fn slow(&self) -> String {
        let mut slow = self.clone();
        for segment in &mut slow.segments {
            match kind_of(segment) {
                "samples" | "dwell" => {}
                "pivot" => put(segment, [("rate_rad_s", json!(0.01))]),
                _ => put(segment, [("speed_m_s", json!(0.01))]),
            }
        }
        slow.print()
    }

    /// The plan with a new timing, and with the dwells that it needs.
    pub(super) fn timed(&self, found: &Retimed) -> String {
        let mut timed = self.clone();
        for (segment, timing) in timed.segments.iter_mut().zip(&found.timings) {
            match timing {
                NewTiming::Kept => {}
                NewTiming::Dwell { duration_s } => {
                    segment.insert("duration_s".to_owned(), json!(duration_s));
                }
                NewTiming::Pivot { rate_rad_s, accel_rad_s2 } => put(
                    segment,
                    [
                        ("profile", json!("trapezoid")),
                        ("rate_rad_s", json!(rate_rad_s)),
                        ("accel_rad_s2", json!(accel_rad_s2)),
                    ],
                ),
                NewTiming::Path(points) => {
                    put(segment, [("timing", Value::Array(points.iter().map(instant).collect()))]);
                }
            }
        }
        let fresh = found.dwells.iter().filter(|dwell| dwell.longer.is_none() && dwell.at_m == 0.0);
        for dwell in fresh.rev() {
            let rest = [("kind", json!("dwell")), ("duration_s", json!(dwell.duration_s))];
            let rest = rest.into_iter().map(|(key, value)| (key.to_owned(), value)).collect();
            timed.segments.insert(dwell.segment, rest);
        }
        timed.print()
    }

    fn print(&self) -> String {
        let mut out = String::from("{");
        let ordered = HEAD.iter().filter_map(|key| self.head.get_key_value(*key));
        let others = self.head.iter().filter(|(key, _)| !HEAD.contains(&key.as_str()));
        for (key, value) in ordered.chain(others) {
            let _ = write!(out, "{}: {value},\n ", Value::from(key.as_str()));
        }
        out.push_str("\"segments\": [");
        for (index, segment) in self.segments.iter().enumerate() {
            out.push_str(if index == 0 { "\n  " } else { ",\n  " });
            print_segment(segment, &mut out);
        }
        out.push_str("]}\n");
        out
    }
}

/// A segment's kind; empty if it does not say.
pub(super) fn kind_of(segment: &Map<String, Value>) -> &str {
    segment.get("kind").and_then(Value::as_str).unwrap_or_default()
}

/// Takes a segment's timing away and puts another one in its place.
fn put<const N: usize>(segment: &mut Map<String, Value>, timing: [(&str, Value); N]) {
    segment.retain(|key, _| !TIMING_KEYS.contains(&key.as_str()));
    for (key, value) in timing {
        segment.insert(key.to_owned(), value);
    }
}

fn instant(point: &TimingPoint) -> Value {
    json!({"t_s": point.t_s, "s_m": point.s_m, "speed_m_s": point.speed_m_s})
}

/// A segment in a line, lists of objects a line each.
fn print_segment(segment: &Map<String, Value>, out: &mut String) {
    let kind = segment.get_key_value("kind");
    let is_long = |value: &Value| value.as_array().is_some_and(|list| list.iter().any(Value::is_object));
    let rest = segment.iter().filter(|(key, _)| key.as_str() != "kind");
    let (long, short): (Vec<_>, Vec<_>) = rest.partition(|(_, value)| is_long(value));
    for (index, (key, value)) in kind.into_iter().chain(short).chain(long).enumerate() {
        out.push_str(if index == 0 { "{" } else { ", " });
        let _ = write!(out, "{}: ", Value::from(key.as_str()));
        match value.as_array().filter(|_| is_long(value)) {
            None => {
                let _ = write!(out, "{value}");
            }
            Some(list) => {
                for (index, item) in list.iter().enumerate() {
                    let _ = write!(out, "{}{}", if index == 0 { "[\n    " } else { ",\n    " }, Item(item));
                }
                out.push(']');
            }
        }
    }
    out.push('}');
}

/// A point, its time first.
struct Item<'a>(&'a Value);

impl std::fmt::Display for Item<'_> {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        let Some(object) = self.0.as_object() else { return write!(f, "{}", self.0) };
        let first = object.get_key_value("t_s");
        let rest = object.iter().filter(|(key, _)| key.as_str() != "t_s");
        for (index, (key, value)) in first.into_iter().chain(rest).enumerate() {
            let head = if index == 0 { "{" } else { ", " };
            write!(f, "{head}{}: {value}", Value::from(key.as_str()))?;
        }
        f.write_str("}")
    }
}
