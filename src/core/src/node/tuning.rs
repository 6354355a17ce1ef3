//! From a tune's text to a law: a pure function that the shell calls away from the loop, and a replay calls again.

use crate::keys::{Problem, Values};
use crate::law::{self, Context, Law};
use crate::vehicle::Vehicle;
use alloc::boxed::Box;
use alloc::format;
use alloc::string::{String, ToString};
use alloc::vec;
use alloc::vec::Vec;
use core::fmt;
use serde::de::{self, MapAccess, Visitor};
use serde::{Deserialize, Deserializer};
use trackhold_proto::blob::Text;
use trackhold_proto::journal::LawChanged;

/// A law that was built, with what the journal says of it.
#[derive(Debug)]
pub struct Tuning {
    pub(super) law: Box<dyn Law>,
    pub(super) name: Text<32>,
    /// The gains as a JSON object, defaults filled in.
    pub(super) gains: String,
}

impl Tuning {
    /// Builds the law that a text describes: `{"name": NAME, "gains": {KEY: VALUE, …}}`. A gain that is not named has its
    /// default.
    ///
    /// # Errors
    /// Every problem found, a line each: what is no such text, no such law or gain, outside its bound, or not for this
    /// machine.
    pub fn build(text: &str, context: &Context) -> Result<Box<Self>, Vec<String>> {
        let RawLaw { name, gains: Gains(gains) } =
            serde_json::from_str(text).map_err(|error| vec![format!("law: {error}")])?;
        let (law, gains) = law::build(&name, &gains, context).map_err(lines)?;
        Ok(Box::new(Self { law, name: Text::cut(&name), gains: gains_text(&gains) }))
    }

    /// The law.
    pub fn law(&self) -> &dyn Law {
        &*self.law
    }

    /// The law's name.
    pub fn name(&self) -> &str {
        self.name.as_str()
    }

    /// The gains as a JSON object, defaults filled in.
    pub fn gains(&self) -> &str {
        &self.gains
    }
}

/// Gains as a JSON object. Numbers print so that they read back to the same bits.
pub fn gains_text(gains: &Values) -> String {
    match serde_json::to_string(gains) {
        Ok(json) => json,
        Err(error) => unreachable!("names and finite numbers always print: {error}"),
    }
}

/// What the journal says of a law that is in force on a machine.
pub fn told(name: &str, gains: String, law: &dyn Law, vehicle: &dyn Vehicle) -> LawChanged {
    let speed_m_s = vehicle.top_speed_m_s();
    LawChanged { name: Text::cut(name), gains, bandwidth_rad_s: law.bandwidth_rad_s(speed_m_s), speed_m_s }
}

fn lines(problems: Vec<Problem>) -> Vec<String> {
    problems.into_iter().map(|problem| problem.within("law").to_string()).collect()
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawLaw {
    name: String,
    #[serde(default)]
    gains: Gains,
}

/// Gains, each stated once: readers differ in which of two they keep.
#[derive(Default)]
struct Gains(Values);

impl<'de> Deserialize<'de> for Gains {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        deserializer.deserialize_map(GainsVisitor)
    }
}

struct GainsVisitor;

impl<'de> Visitor<'de> for GainsVisitor {
    type Value = Gains;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("gains: an object of numbers")
    }

    fn visit_map<A: MapAccess<'de>>(self, mut map: A) -> Result<Gains, A::Error> {
        let mut gains = Values::default();
        while let Some((name, value)) = map.next_entry::<String, serde_json::Value>()? {
            if gains.find(&name).is_some() {
                return Err(de::Error::custom(format_args!("gains.{name} is given twice")));
            }
            let Some(number) = value.as_f64() else {
                return Err(de::Error::custom(format_args!("gains.{name} is not a number")));
            };
            gains.set(&name, number);
        }
        Ok(Gains(gains))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::vehicle;
    use alloc::sync::Arc;

    fn context(kind: &str, values: &[(&str, f64)]) -> Context {
        let mut given = Values::default();
        values.iter().for_each(|(key, value)| given.set(key, *value));
        let vehicle: Arc<dyn crate::vehicle::Vehicle> = vehicle::build(kind, &given).unwrap().0;
        Context { vehicle, period_s: 0.02, dead_time_s: 0.0 }
    }

    fn cart() -> Context {
        let limits = [
            ("max_speed_m_s", 1.0),
            ("max_turn_rate_rad_s", 2.0),
            ("max_accel_m_s2", 1.0),
            ("max_turn_accel_rad_s2", 4.0),
        ];
        context("unicycle", &limits)
    }

    fn refusal(text: &str) -> String {
        Tuning::build(text, &cart()).map(|tuning| tuning.name).unwrap_err().join("; ")
    }

    #[test]
    fn a_text_gives_a_law_and_its_gains_with_defaults() {
        let tuning = Tuning::build(r#"{"name":"samson","gains":{"k_2":9,"k_1":0.1}}"#, &cart()).unwrap();
        assert_eq!(tuning.name(), "samson");
        let gains: Values = serde_json::from_str(tuning.gains()).unwrap();
        assert_eq!((gains.get("k_1"), gains.get("k_2")), (0.1, 9.0));
        assert!(gains.get("k_3") > 0.0, "the default is filled in");
        let read_back = alloc::format!(r#"{{"name":"samson","gains":{}}}"#, tuning.gains());
        assert_eq!(Tuning::build(&read_back, &cart()).unwrap().gains(), tuning.gains(), "to the same bits");
        assert!(Tuning::build(r#"{"name":"kanayama"}"#, &cart()).is_ok());
    }

    #[test]
    fn every_laws_gains_fit_on_the_wire() {
        use trackhold_proto::message::{GAINS_BYTES, LAW_BYTES};
        // The longest number is one like -1.2345678901234567e-300.
        const NUMBER: usize = 24;
        for kind in law::KINDS {
            let gains: usize = kind.gains.iter().map(|key| key.name.len() + "\"\":,".len() + NUMBER).sum();
            assert!(gains + "{}".len() <= GAINS_BYTES, "{}: {gains}", kind.name);
            let design: usize = law::design::KEYS.iter().map(|key| key.name.len() + 4 + NUMBER).sum();
            assert!(
                gains + design + kind.name.len() + 24 <= LAW_BYTES && kind.name.len() <= 32,
                "{}",
                kind.name
            );
        }
    }

    /// SplitMix64 (Steele, Lea and Flood, OOPSLA 2014).
    fn next(state: &mut u64) -> usize {
        *state = state.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mixed = (*state ^ (*state >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        ((mixed ^ (mixed >> 27)) >> 33) as usize
    }

    #[test]
    fn altered_texts_give_a_law_or_say_what_is_wrong_with_it() {
        const GOOD: &str = r#"{"name":"kanayama","gains":{"k_x":1.5,"k_y":9,"k_heading":6,"k_i":0.25}}"#;
        const PUT: &[u8] = b"{}[]\",:.-+eE0159 kx_yhnul\\";
        let (context, mut state, mut taken) = (cart(), 1, 0);
        for round in 0..20_000 {
            let mut text = GOOD.as_bytes().to_vec();
            for _ in 0..=round % 4 {
                let (at, byte) = (next(&mut state) % text.len(), PUT[next(&mut state) % PUT.len()]);
                match next(&mut state) % 3 {
                    0 => text[at] = byte,
                    1 => text.insert(at, byte),
                    _ => drop(text.remove(at)),
                }
            }
            let text = String::from_utf8(text).unwrap();
            match Tuning::build(&text, &context) {
                Ok(tuning) => {
                    taken += 1;
                    let bandwidth = tuning.law().bandwidth_rad_s(1.0);
                    assert!(bandwidth.is_finite() && bandwidth > 0.0, "{text}");
                }
                Err(lines) => assert!(
                    !lines.is_empty() && lines.iter().all(|line| line.starts_with("law")),
                    "{text}: {lines:?}"
                ),
            }
        }
        assert!(taken > 100, "{taken} texts stayed good");
    }

    #[test]
    fn hostile_texts_are_refused_by_name() {
        let deep = r#"{"name":"samson","gains":{"k_1":"#.to_string() + &"[".repeat(850);
        let cases = [
            ("", "law: EOF while parsing"),
            ("kanayama", "law: expected value"),
            ("null", "law: invalid type: null"),
            ("[]", "law: invalid length 0"),
            (r#"{"gains":{}}"#, "missing field `name`"),
            (r#"{"name":"samson","gain":{}}"#, "unknown field `gain`"),
            (r#"{"name":"samson","name":"samson"}"#, "duplicate field `name`"),
            (r#"{"name":"samson"} {"#, "trailing characters"),
            (r#"{"name":7}"#, "invalid type: integer `7`, expected a string"),
            (r#"{"name":"nobody"}"#, "law.name: no law \"nobody\"; known are "),
            (r#"{"name":"samson","gains":{"k_x":1}}"#, "law.gains.k_x: no such key here; known are k_1"),
            (r#"{"name":"samson","gains":{"k_1":-1}}"#, "law.gains.k_1: -1"),
            (r#"{"name":"samson","gains":{"k_1":1e300}}"#, "law.gains.k_1: 1"),
            (r#"{"name":"samson","gains":{"k_1":1e999}}"#, "law: number out of range"),
            (r#"{"name":"samson","gains":{"k_1":NaN}}"#, "law: expected value"),
            (r#"{"name":"samson","gains":{"k_1":"1"}}"#, "gains.k_1 is not a number"),
            (r#"{"name":"samson","gains":{"k_1":null}}"#, "gains.k_1 is not a number"),
            (r#"{"name":"samson","gains":{"k_1":1,"k_1":2}}"#, "gains.k_1 is given twice"),
            (r#"{"name":"samson","gains":[1,2,3]}"#, "invalid type: sequence, expected gains"),
            (&deep, "law: recursion limit exceeded"),
        ];
        for (text, expected) in cases {
            let said = refusal(text);
            assert!(said.contains(expected), "{text:.60}: {said}");
        }
    }
}
