//! The plan file, JSON: what was written, before anything is computed from it.

use crate::keys::Values;
use alloc::borrow::ToOwned;
use alloc::collections::BTreeMap;
use alloc::string::{String, ToString};
use alloc::vec::Vec;
use core::fmt;
use serde::de::{self, Deserialize, Deserializer, IgnoredAny, MapAccess, Visitor};

/// The format's name and version, the first key of every plan.
pub const FORMAT: &str = "trackhold-plan/1";

#[derive(Debug, serde::Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct RawPlan {
    pub(super) format: String,
    pub(super) id: String,
    pub(super) revision: u32,
    #[serde(default)]
    pub(super) open: bool,
    pub(super) continues: Option<Continues>,
    pub(super) origin: Option<RawOrigin>,
    pub(super) start: RawPose,
    pub(super) segments: Vec<RawSegment>,
}

/// Says that a plan goes on with the clock of the plan in force, which has the same id and a smaller revision.
#[derive(Clone, Copy, Debug, serde::Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Continues {
    /// The plan time at which its first segment begins.
    pub(super) at_s: f64,
}

/// Where on Earth the site frame's origin lies (WGS 84; x is east, y is north there). Kept for people and their maps; it
/// decides nothing.
#[derive(Clone, Copy, Debug, serde::Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct RawOrigin {
    pub(super) latitude_deg: f64,
    pub(super) longitude_deg: f64,
    pub(super) altitude_m: f64,
}

#[derive(Clone, Copy, Debug, serde::Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct RawPose {
    pub(super) x_m: f64,
    pub(super) y_m: f64,
    pub(super) heading_rad: f64,
}

/// A point of any kind of segment; each kind says which of the optional numbers it needs and knows.
#[derive(Clone, Copy, Debug, serde::Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct RawPoint {
    /// NaN where it is not given; a plan file cannot say NaN.
    #[serde(default = "absent")]
    pub(super) t_s: f64,
    pub(super) x_m: f64,
    pub(super) y_m: f64,
    /// NaN where it is not given.
    #[serde(default = "absent")]
    pub(super) heading_rad: f64,
    pub(super) speed_m_s: Option<f64>,
    pub(super) turn_rate_rad_s: Option<f64>,
    pub(super) curvature_1_m: Option<f64>,
}

fn absent() -> f64 {
    f64::NAN
}

/// A point of a segment's timing: metres, or radians on a pivot.
#[derive(Clone, Copy, Debug, serde::Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct RawInstant {
    pub(super) t_s: f64,
    pub(super) s_m: Option<f64>,
    pub(super) speed_m_s: Option<f64>,
    pub(super) s_rad: Option<f64>,
    pub(super) rate_rad_s: Option<f64>,
}

/// A segment of any kind: its numbers and its lists of numbers by name, so that each kind checks its own.
#[derive(Debug, Default)]
pub(super) struct RawSegment {
    pub(super) kind: String,
    pub(super) numbers: Values,
    pub(super) lists: BTreeMap<String, Vec<f64>>,
    pub(super) reverse: bool,
    pub(super) points: Option<Vec<RawPoint>>,
    pub(super) profile: Option<String>,
    pub(super) timing: Option<Vec<RawInstant>>,
}

impl<'de> Deserialize<'de> for RawSegment {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        deserializer.deserialize_map(SegmentVisitor)
    }
}

struct SegmentVisitor;

impl<'de> Visitor<'de> for SegmentVisitor {
    type Value = RawSegment;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("a segment: an object with a kind and numbers")
    }

    fn visit_map<A: MapAccess<'de>>(self, mut map: A) -> Result<RawSegment, A::Error> {
        let mut segment = RawSegment::default();
        let mut seen: Vec<String> = Vec::new();
        while let Some(key) = map.next_key::<String>()? {
            if seen.contains(&key) {
                return Err(de::Error::custom(format_args!("{key} is given twice")));
            }
            match key.as_str() {
                "kind" => segment.kind = map.next_value()?,
                "reverse" => segment.reverse = map.next_value()?,
                "points" => segment.points = Some(map.next_value()?),
                "profile" => segment.profile = Some(map.next_value()?),
                "timing" => segment.timing = Some(map.next_value()?),
                name => match map.next_value::<Named>()? {
                    Named::Number(value) => segment.numbers.set(name, value),
                    Named::List(list) => {
                        segment.lists.insert(name.to_owned(), list);
                    }
                    Named::Neither => {
                        return Err(de::Error::custom(format_args!(
                            "{name} is not a number, nor a list of numbers"
                        )));
                    }
                },
            }
            seen.push(key);
        }
        if segment.kind.is_empty() {
            return Err(de::Error::missing_field("kind"));
        }
        Ok(segment)
    }
}

/// A number, a list of numbers, or something else that an error text can then name.
enum Named {
    Number(f64),
    List(Vec<f64>),
    Neither,
}

impl<'de> Deserialize<'de> for Named {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        deserializer.deserialize_any(NamedVisitor)
    }
}

struct NamedVisitor;

impl<'de> Visitor<'de> for NamedVisitor {
    type Value = Named;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("a number or a list of numbers")
    }

    fn visit_f64<E: de::Error>(self, value: f64) -> Result<Named, E> {
        Ok(Named::Number(value))
    }

    fn visit_u64<E: de::Error>(self, value: u64) -> Result<Named, E> {
        Ok(Named::Number(value as f64))
    }

    fn visit_i64<E: de::Error>(self, value: i64) -> Result<Named, E> {
        Ok(Named::Number(value as f64))
    }

    fn visit_bool<E: de::Error>(self, _: bool) -> Result<Named, E> {
        Ok(Named::Neither)
    }

    fn visit_str<E: de::Error>(self, _: &str) -> Result<Named, E> {
        Ok(Named::Neither)
    }

    fn visit_unit<E: de::Error>(self) -> Result<Named, E> {
        Ok(Named::Neither)
    }

    fn visit_seq<A: de::SeqAccess<'de>>(self, mut seq: A) -> Result<Named, A::Error> {
        let mut list = Vec::new();
        while let Some(value) = seq.next_element()? {
            list.push(value);
        }
        Ok(Named::List(list))
    }

    fn visit_map<A: MapAccess<'de>>(self, mut map: A) -> Result<Named, A::Error> {
        while map.next_entry::<IgnoredAny, IgnoredAny>()?.is_some() {}
        Ok(Named::Neither)
    }
}

/// Reads a plan file's bytes; the error says line and column.
pub(super) fn read(raw: &[u8]) -> Result<RawPlan, String> {
    serde_json::from_slice(raw).map_err(|error| error.to_string())
}
