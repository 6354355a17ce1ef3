//! The plan file, JSON: what was written, before anything is computed from it.

use crate::keys::Values;
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
    pub(super) start: RawPose,
    pub(super) segments: Vec<RawSegment>,
}

#[derive(Clone, Copy, Debug, serde::Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct RawPose {
    pub(super) x_m: f64,
    pub(super) y_m: f64,
    pub(super) heading_rad: f64,
}

#[derive(Clone, Copy, Debug, serde::Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct RawPoint {
    pub(super) t_s: f64,
    pub(super) x_m: f64,
    pub(super) y_m: f64,
    pub(super) heading_rad: f64,
    pub(super) speed_m_s: Option<f64>,
    pub(super) turn_rate_rad_s: Option<f64>,
}

/// A segment of any kind: its numbers by name, so that each kind checks its own.
#[derive(Debug, Default)]
pub(super) struct RawSegment {
    pub(super) kind: String,
    pub(super) numbers: Values,
    pub(super) reverse: bool,
    pub(super) points: Option<Vec<RawPoint>>,
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
                name => match map.next_value::<Number>()? {
                    Number::Is(value) => segment.numbers.set(name, value),
                    Number::IsNot => return Err(de::Error::custom(format_args!("{name} is not a number"))),
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

/// A number, or something else that an error text can then name.
enum Number {
    Is(f64),
    IsNot,
}

impl<'de> Deserialize<'de> for Number {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        deserializer.deserialize_any(NumberVisitor)
    }
}

struct NumberVisitor;

impl<'de> Visitor<'de> for NumberVisitor {
    type Value = Number;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("a number")
    }

    fn visit_f64<E: de::Error>(self, value: f64) -> Result<Number, E> {
        Ok(Number::Is(value))
    }

    fn visit_u64<E: de::Error>(self, value: u64) -> Result<Number, E> {
        Ok(Number::Is(value as f64))
    }

    fn visit_i64<E: de::Error>(self, value: i64) -> Result<Number, E> {
        Ok(Number::Is(value as f64))
    }

    fn visit_bool<E: de::Error>(self, _: bool) -> Result<Number, E> {
        Ok(Number::IsNot)
    }

    fn visit_str<E: de::Error>(self, _: &str) -> Result<Number, E> {
        Ok(Number::IsNot)
    }

    fn visit_unit<E: de::Error>(self) -> Result<Number, E> {
        Ok(Number::IsNot)
    }

    fn visit_seq<A: de::SeqAccess<'de>>(self, mut seq: A) -> Result<Number, A::Error> {
        while seq.next_element::<IgnoredAny>()?.is_some() {}
        Ok(Number::IsNot)
    }

    fn visit_map<A: MapAccess<'de>>(self, mut map: A) -> Result<Number, A::Error> {
        while map.next_entry::<IgnoredAny, IgnoredAny>()?.is_some() {}
        Ok(Number::IsNot)
    }
}

/// Reads a plan file's bytes; the error says line and column.
pub(super) fn read(raw: &[u8]) -> Result<RawPlan, String> {
    serde_json::from_slice(raw).map_err(|error| error.to_string())
}
