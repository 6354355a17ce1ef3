//! What the columns of a table mean: quantity and unit, from their names.

use core::f64::consts::PI;

/// What a column holds.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Quantity {
    /// Time.
    Time,
    /// Position.
    X,
    /// Position.
    Y,
    /// Heading, counter-clockwise from +x.
    Heading,
    /// Speed, negative in reverse.
    Speed,
}

/// A column that is read.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Column {
    /// What it holds.
    pub quantity: Quantity,
    /// Its numbers times this are SI.
    pub factor: f64,
    /// True if its name said the unit.
    pub unit_given: bool,
}

const NAMES: [(Quantity, &[&str]); 5] = [
    (Quantity::Time, &["t", "time", "stamp", "timestamp"]),
    (Quantity::X, &["x", "east", "easting"]),
    (Quantity::Y, &["y", "north", "northing"]),
    (Quantity::Heading, &["heading", "yaw", "theta"]),
    (Quantity::Speed, &["speed", "v", "velocity"]),
];

impl Quantity {
    /// Units with their factors; the first one is SI and counts if none is named.
    fn units(self) -> &'static [(&'static str, f64)] {
        match self {
            Self::Time => &[("s", 1.0), ("ms", 1e-3), ("us", 1e-6), ("ns", 1e-9)],
            Self::X | Self::Y => &[("m", 1.0), ("cm", 1e-2), ("mm", 1e-3), ("km", 1e3)],
            Self::Heading => &[("rad", 1.0), ("deg", PI / 180.0), ("mrad", 1e-3)],
            Self::Speed => &[("m_s", 1.0), ("mm_s", 1e-3), ("cm_s", 1e-2), ("km_h", 1.0 / 3.6)],
        }
    }

    /// Its name for people.
    pub fn name(self) -> &'static str {
        match self {
            Self::Time => "t",
            Self::X => "x",
            Self::Y => "y",
            Self::Heading => "heading",
            Self::Speed => "speed",
        }
    }

    /// Its SI unit for people.
    pub fn si(self) -> &'static str {
        self.units()[0].0
    }
}

/// The meaning of a column's name, like `x`, `x_mm`, `X [mm]`, `heading (deg)`; none if it is not one that a path needs.
///
/// # Errors
/// If the quantity is known and its unit is not.
pub fn read_name(text: &str) -> Result<Option<Column>, String> {
    let name: String = text.trim().to_lowercase();
    let (word, unit) = match name.find(['[', '(']) {
        Some(at) => {
            (name[..at].trim().to_owned(), Some(name[at + 1..].trim_end_matches([']', ')']).to_owned()))
        }
        None => (name, None),
    };
    for (quantity, names) in NAMES {
        for known in names {
            let rest = match word.strip_prefix(known) {
                Some("") => unit.clone(),
                Some(rest) if rest.starts_with('_') && unit.is_none() => Some(rest[1..].to_owned()),
                _ => continue,
            };
            let Some(rest) = rest else {
                return Ok(Some(Column { quantity, factor: 1.0, unit_given: false }));
            };
            let plain = rest.trim().replace(['/', ' '], "_").replace('°', "deg").replace('µ', "u");
            if let Some((_, factor)) = quantity.units().iter().find(|(unit, _)| *unit == plain) {
                return Ok(Some(Column { quantity, factor: *factor, unit_given: true }));
            }
            if unit.is_some() {
                let known: Vec<&str> = quantity.units().iter().map(|(unit, _)| *unit).collect();
                return Err(format!(
                    "column {text:?}: no unit {rest:?} for {}; known are {}",
                    quantity.name(),
                    known.join(", ")
                ));
            }
        }
    }
    Ok(None)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_say_quantity_and_unit() {
        for (name, quantity, factor, unit_given) in [
            ("t", Quantity::Time, 1.0, false),
            ("t_ns", Quantity::Time, 1e-9, true),
            ("time_s", Quantity::Time, 1.0, true),
            (" X [mm] ", Quantity::X, 1e-3, true),
            ("y_m", Quantity::Y, 1.0, true),
            ("Heading (deg)", Quantity::Heading, PI / 180.0, true),
            ("yaw [°]", Quantity::Heading, PI / 180.0, true),
            ("theta", Quantity::Heading, 1.0, false),
            ("speed_km_h", Quantity::Speed, 1.0 / 3.6, true),
            ("v [m/s]", Quantity::Speed, 1.0, true),
        ] {
            assert_eq!(read_name(name), Ok(Some(Column { quantity, factor, unit_given })), "{name}");
        }
    }

    #[test]
    fn other_names_mean_nothing_and_unknown_units_are_told() {
        for name in ["", "-", "battery", "x_offset", "speed_limit", "true_x_m"] {
            assert_eq!(read_name(name), Ok(None), "{name}");
        }
        assert!(read_name("x [inch]").unwrap_err().contains("known are m, cm, mm, km"));
    }
}
