//! Named numbers with unit, bound and meaning, as site files and plans give them.
//!
//! One table a section feeds the reader, the checks, the error texts and the printed reference. A value outside its
//! bound is refused, never clamped.

use alloc::borrow::ToOwned;
use alloc::collections::BTreeMap;
use alloc::format;
use alloc::string::{String, ToString};
use alloc::vec::Vec;
use core::fmt;

/// A key that a section understands.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Key {
    /// Its name, unit included.
    pub name: &'static str,
    /// Its unit for people; empty for pure numbers.
    pub unit: &'static str,
    /// What happens if it is not given.
    pub absent: Absent,
    /// The values allowed.
    pub bound: Bound,
    /// What it means, and what goes wrong where it is badly chosen.
    pub meaning: &'static str,
}

/// What happens if a key is not given.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Absent {
    /// It must be given.
    Required,
    /// This value stands for it.
    Default(f64),
    /// It has no value.
    Optional,
}

/// An interval.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Bound {
    low: f64,
    high: f64,
    low_included: bool,
}

impl Bound {
    /// From `low` to `high`, both included.
    pub const fn within(low: f64, high: f64) -> Self {
        Self { low, high, low_included: true }
    }

    /// Greater than zero, at most `high`.
    pub const fn positive(high: f64) -> Self {
        Self { low: 0.0, high, low_included: false }
    }

    /// The lower and the upper end, whether included or not.
    pub const fn ends(&self) -> (f64, f64) {
        (self.low, self.high)
    }

    /// True if `value` is a finite number inside.
    pub fn holds(&self, value: f64) -> bool {
        value.is_finite()
            && value <= self.high
            && (value > self.low || self.low_included && value == self.low)
    }
}

impl fmt::Display for Bound {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let low = if self.low_included { "at least" } else { "greater than" };
        write!(f, "{low} {} and at most {}", self.low, self.high)
    }
}

impl Key {
    /// A key that must be given.
    pub const fn required(
        name: &'static str,
        unit: &'static str,
        bound: Bound,
        meaning: &'static str,
    ) -> Self {
        Self { name, unit, absent: Absent::Required, bound, meaning }
    }

    /// A key with a default.
    pub const fn with_default(
        name: &'static str,
        unit: &'static str,
        default: f64,
        bound: Bound,
        meaning: &'static str,
    ) -> Self {
        Self { name, unit, absent: Absent::Default(default), bound, meaning }
    }

    /// A key that may be left out.
    pub const fn optional(
        name: &'static str,
        unit: &'static str,
        bound: Bound,
        meaning: &'static str,
    ) -> Self {
        Self { name, unit, absent: Absent::Optional, bound, meaning }
    }

    /// The problem of a value outside the bound.
    fn out_of_bound(&self, value: f64) -> Problem {
        Problem::new(self.name, format!("{value}{} is not {}", Unit(self.unit), self.in_bound()))
    }

    /// The bound in words, with the unit.
    pub fn in_bound(&self) -> String {
        format!("{}{}", self.bound, Unit(self.unit))
    }
}

/// A unit behind a number, with the space between; nothing for a pure number.
pub(crate) struct Unit(pub(crate) &'static str);

impl fmt::Display for Unit {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        if self.0.is_empty() { Ok(()) } else { write!(f, " {}", self.0) }
    }
}

/// What is wrong with a key, in words that say what to do.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Problem {
    /// The key, with its section once that is known: `vehicle.track_width_m`.
    pub key: String,
    /// Value, bound and unit, or what is missing.
    pub what: String,
}

impl Problem {
    /// A problem with a key.
    pub fn new(key: &str, what: impl Into<String>) -> Self {
        Self { key: key.to_owned(), what: what.into() }
    }

    /// The same problem, its key in `section`.
    pub fn within(self, section: &str) -> Self {
        Self { key: format!("{section}.{}", self.key), ..self }
    }
}

impl fmt::Display for Problem {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}: {}", self.key, self.what)
    }
}

/// Numbers by name.
#[derive(Clone, Debug, Default, PartialEq, serde::Serialize, serde::Deserialize)]
#[serde(transparent)]
pub struct Values(BTreeMap<String, f64>);

impl Values {
    /// Sets a value, given or not before.
    pub fn set(&mut self, name: &str, value: f64) {
        self.0.insert(name.to_owned(), value);
    }

    /// The value of a key that was read with a table in which it is required or has a default.
    ///
    /// # Panics
    /// If it was not: a mistake in the table, found by the first test that builds the section.
    pub fn get(&self, name: &str) -> f64 {
        match self.0.get(name) {
            Some(value) => *value,
            None => unreachable!("key {name} is neither required nor has a default"),
        }
    }

    /// The value of an optional key.
    pub fn find(&self, name: &str) -> Option<f64> {
        self.0.get(name).copied()
    }

    /// True if nothing is given.
    pub fn is_empty(&self) -> bool {
        self.0.is_empty()
    }

    /// All names and values, by name.
    pub fn iter(&self) -> impl Iterator<Item = (&str, f64)> {
        self.0.iter().map(|(name, value)| (name.as_str(), *value))
    }

    /// Checks the values given against `keys` and fills in the defaults.
    ///
    /// # Errors
    /// Every key that is unknown, missing or outside its bound.
    pub fn checked(&self, keys: &[Key]) -> Result<Self, Vec<Problem>> {
        let mut problems = Vec::new();
        let mut whole = BTreeMap::new();
        for (name, value) in &self.0 {
            match keys.iter().find(|key| key.name == name.as_str()) {
                None => {
                    problems.push(Problem::new(name, format!("no such key here; known are {}", names(keys))))
                }
                Some(key) if !key.bound.holds(*value) => problems.push(key.out_of_bound(*value)),
                Some(_) => {
                    whole.insert(name.clone(), *value);
                }
            }
        }
        for key in keys.iter().filter(|key| !self.0.contains_key(key.name)) {
            match key.absent {
                Absent::Required => {
                    problems
                        .push(Problem::new(key.name, format!("missing; give a value {}", key.in_bound())));
                }
                Absent::Default(value) => {
                    whole.insert(key.name.to_string(), value);
                }
                Absent::Optional => {}
            }
        }
        if problems.is_empty() { Ok(Self(whole)) } else { Err(problems) }
    }
}

/// The names of a table's keys, for an error text.
pub fn names(keys: &[Key]) -> String {
    let mut list = String::new();
    for key in keys {
        if !list.is_empty() {
            list.push_str(", ");
        }
        list.push_str(key.name);
    }
    list
}

#[cfg(test)]
mod tests {
    use super::*;

    const KEYS: &[Key] = &[
        Key::required("length_m", "m", Bound::positive(10.0), "a length"),
        Key::with_default("share", "", 0.5, Bound::within(0.0, 1.0), "a share"),
        Key::optional("mass_kg", "kg", Bound::positive(1e4), "a mass"),
    ];

    #[test]
    fn problems_name_key_value_bound_and_unit() {
        let mut values = Values::default();
        values.set("share", 1.5);
        values.set("lenght_m", 1.0);
        let problems = values.checked(KEYS).unwrap_err();
        let texts: Vec<String> = problems.iter().map(ToString::to_string).collect();
        assert_eq!(
            texts,
            [
                "lenght_m: no such key here; known are length_m, share, mass_kg",
                "share: 1.5 is not at least 0 and at most 1",
                "length_m: missing; give a value greater than 0 and at most 10 m",
            ]
        );
    }

    #[test]
    fn defaults_are_filled_in_and_nan_is_outside_every_bound() {
        let mut values = Values::default();
        values.set("length_m", 2.0);
        let whole = values.checked(KEYS).unwrap();
        assert_eq!((whole.get("length_m"), whole.get("share"), whole.find("mass_kg")), (2.0, 0.5, None));
        values.set("share", f64::NAN);
        assert_eq!(values.checked(KEYS).unwrap_err()[0].what, "NaN is not at least 0 and at most 1");
    }
}
