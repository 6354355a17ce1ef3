//! From TOML to a [`Site`]: what stands where, what is of the wrong type, what is unknown or given twice.
//!
//! Bounds are the business of the key tables; this module gives every problem its line.

use super::net::{self, Net, listen_address};
use super::{Placed, Site};
use std::collections::BTreeMap;
use toml::Spanned;
use toml::de::{DeInteger, DeTable, DeValue};
use trackhold_core::keys::{Key, Problem, Values, names};
use trackhold_core::node::params;
use trackhold_core::plan::check;
use trackhold_core::settings::{LawSettings, POSE_KEYS, Settings, VehicleSettings};
use trackhold_core::{law, vehicle};

/// The sections of a site file.
const SECTIONS: [&str; 6] = ["vehicle", "law", "node", "pose", "check", "net"];

/// Reads a site file's text.
pub(super) fn read(text: &str) -> Result<Site, Vec<Placed>> {
    let (document, errors) = DeTable::parse_recoverable(text);
    let mut reader = Reader::new(text);
    let only_duplicates = reader.note_syntax(&errors);
    if !only_duplicates {
        return Err(reader.finish());
    }
    let (settings, net) = reader.document(document.get_ref());
    match settings.checked() {
        Ok(checked) if reader.found.is_empty() => Ok(Site { settings: checked.settings, net }),
        Ok(_) => Err(reader.finish()),
        Err(problems) => {
            for problem in problems {
                reader.add_unless_known(problem);
            }
            Err(reader.finish())
        }
    }
}

struct Reader<'t> {
    text: &'t str,
    /// Where each key and section stands, bytes from the beginning.
    places: BTreeMap<String, usize>,
    found: Vec<(usize, Problem)>,
}

impl<'t> Reader<'t> {
    fn new(text: &'t str) -> Self {
        Self { text, places: BTreeMap::new(), found: Vec::new() }
    }

    /// Notes what is no TOML; true if that was nothing but keys given twice, so that the rest can be read.
    fn note_syntax(&mut self, errors: &[toml::de::Error]) -> bool {
        let mut only_duplicates = true;
        for error in errors {
            let span = error.span().unwrap_or(0..0);
            let place = self.text.get(span.clone()).map(str::trim).filter(|place| is_key(place));
            if error.message().contains("duplicate key") {
                let key = place.unwrap_or("key");
                self.found.push((span.start, Problem::new(key, "given twice; keep one of them")));
            } else {
                only_duplicates = false;
                let what = format!("not TOML: {}", error.message().replace('\n', "; "));
                self.found.push((span.start, Problem::new(place.unwrap_or("syntax"), what)));
            }
        }
        only_duplicates
    }

    fn document(&mut self, root: &DeTable<'_>) -> (Settings, Net) {
        for (key, value) in root {
            let name = key.get_ref().as_ref();
            self.places.insert(name.to_owned(), key.span().start);
            if !SECTIONS.contains(&name) {
                let what = match value.get_ref() {
                    DeValue::Table(_) => format!("no such section; known are {}", SECTIONS.join(", ")),
                    _ => format!("stands outside every section; put it under one of {}", SECTIONS.join(", ")),
                };
                self.found.push((key.span().start, Problem::new(name, what)));
            } else if value.get_ref().as_table().is_none() {
                let what = format!("{}; write it as a section, [{name}]", type_of(value.get_ref()));
                self.found.push((key.span().start, Problem::new(name, what)));
            }
        }
        let section = |name: &str| root.get(name).and_then(|value| value.get_ref().as_table());
        let vehicle = self.vehicle(section("vehicle"));
        let law = self.law(section("law"));
        let node = self.numbers("node", section("node"), Some(params::KEYS), &[]);
        let pose = self.numbers("pose", section("pose"), Some(POSE_KEYS), &[]);
        let check = self.numbers("check", section("check"), Some(check::KEYS), &[]);
        let net = self.net(section("net"));
        (Settings { vehicle, law, node, pose, check }, net)
    }

    fn vehicle(&mut self, table: Option<&DeTable<'_>>) -> VehicleSettings {
        let known: Vec<&str> = vehicle::KINDS.iter().map(|kind| kind.name).collect();
        let kind = self.name("vehicle", "kind", table, &known);
        let keys = vehicle::KINDS.iter().find(|entry| entry.name == kind).map(|entry| entry.keys);
        let values = self.numbers("vehicle", table, keys, &["kind"]);
        VehicleSettings { kind, values }
    }

    fn law(&mut self, table: Option<&DeTable<'_>>) -> LawSettings {
        let known: Vec<&str> = law::KINDS.iter().map(|kind| kind.name).collect();
        let name = self.name("law", "name", table, &known);
        let keys = law::find(&name).ok().map(law::Kind::keys);
        self.numbers("law", table, Some(&[]), &["name", "gains"]);
        let gains = table.and_then(|table| table.get("gains"));
        if let Some(gains) = gains.filter(|gains| gains.get_ref().as_table().is_none()) {
            let what = format!("{}; write it as a section, [law.gains]", type_of(gains.get_ref()));
            self.found.push((gains.span().start, Problem::new("law.gains", what)));
        }
        let gains = self.numbers(
            "law.gains",
            gains.and_then(|gains| gains.get_ref().as_table()),
            keys.as_deref(),
            &[],
        );
        LawSettings { name, gains }
    }

    fn net(&mut self, table: Option<&DeTable<'_>>) -> Net {
        let mut net = Net::default();
        let given = self.numbers("net", table, Some(net::KEYS), &["listen", "lock_memory"]);
        if let Some(value) = table.and_then(|table| table.get("listen")) {
            match value.get_ref().as_str().map(listen_address) {
                Some(Ok(address)) => net.listen = address,
                Some(Err(what)) => self.refuse("net.listen", what),
                None => self.refuse_type("net.listen", value, "a text such as \"127.0.0.1:4710\""),
            }
        }
        if let Some(value) = table.and_then(|table| table.get("lock_memory")) {
            match value.get_ref().as_bool() {
                Some(lock) => net.lock_memory = lock,
                None => self.refuse_type("net.lock_memory", value, "true or false"),
            }
        }
        let mut whole = Values::default();
        for (name, value) in given.iter() {
            if value.is_finite() && value.fract() != 0.0 {
                self.refuse(&format!("net.{name}"), format!("{value} is not a whole number"));
            } else {
                whole.set(name, value);
            }
        }
        if let Err(problems) = net.set_numbers(&whole) {
            problems.into_iter().for_each(|problem| self.add_unless_known(problem.within("net")));
        }
        net
    }

    /// The name that chooses a section's kind.
    fn name(&mut self, section: &str, key: &str, table: Option<&DeTable<'_>>, known: &[&str]) -> String {
        let path = format!("{section}.{key}");
        self.place_keys(section, table);
        let Some(value) = table.and_then(|table| table.get(key)) else {
            let what = format!("missing; give one of {}", known.join(", "));
            self.refuse(&path, what);
            return String::new();
        };
        if value.get_ref().as_str().is_none() {
            self.refuse_type(&path, value, &format!("a text, one of {}", known.join(", ")));
        }
        value.get_ref().as_str().unwrap_or_default().to_owned()
    }

    /// The numbers of a section. `keys` are those it knows, none while that is open; `others` are read elsewhere.
    fn numbers(
        &mut self,
        section: &str,
        table: Option<&DeTable<'_>>,
        keys: Option<&[Key]>,
        others: &[&str],
    ) -> Values {
        self.place_keys(section, table);
        let mut values = Values::default();
        for (key, value) in table.into_iter().flatten() {
            let (name, path) = (key.get_ref().as_ref(), format!("{section}.{}", key.get_ref()));
            if others.contains(&name) {
                continue;
            }
            if let Some(keys) = keys.filter(|keys| keys.iter().all(|key| key.name != name)) {
                let known: Vec<String> =
                    others.iter().map(|other| (*other).to_owned()).chain(Some(names(keys))).collect();
                let known = known.join(", ");
                self.refuse(&path, format!("no such key here; known are {}", known.trim_end_matches(", ")));
                continue;
            }
            match number(value.get_ref()) {
                Some(number) => values.set(name, number),
                None => self.refuse_type(&path, value, "a number"),
            }
        }
        values
    }

    fn place_keys(&mut self, section: &str, table: Option<&DeTable<'_>>) {
        for (key, _) in table.into_iter().flatten() {
            self.places.insert(format!("{section}.{}", key.get_ref()), key.span().start);
        }
    }

    fn refuse(&mut self, path: &str, what: String) {
        self.add_unless_known(Problem::new(path, what));
    }

    fn refuse_type(&mut self, path: &str, value: &Spanned<DeValue<'_>>, wanted: &str) {
        let written = self.text.get(value.span()).and_then(|text| text.lines().next()).unwrap_or_default();
        self.refuse(path, format!("{written} is {}, give {wanted}", type_of(value.get_ref())));
    }

    /// Adds a problem, unless one with the key was found before: that is then its cause.
    fn add_unless_known(&mut self, problem: Problem) {
        if self.found.iter().any(|(_, known)| known.key == problem.key) {
            return;
        }
        let mut path = problem.key.as_str();
        let place = loop {
            match (self.places.get(path), path.rsplit_once('.')) {
                (Some(place), _) => break *place,
                (None, Some((above, _))) => path = above,
                (None, None) => break 0,
            }
        };
        self.found.push((place, problem));
    }

    fn finish(mut self) -> Vec<Placed> {
        self.found.sort_by_key(|(place, _)| *place);
        let line = |place: usize| 1 + self.text.bytes().take(place).filter(|byte| *byte == b'\n').count();
        self.found.into_iter().map(|(place, problem)| Placed { line: line(place), problem }).collect()
    }
}

fn is_key(text: &str) -> bool {
    !text.is_empty() && text.chars().all(|letter| letter.is_ascii_alphanumeric() || "_-.".contains(letter))
}

/// A TOML number; whole ones are numbers too.
fn number(value: &DeValue<'_>) -> Option<f64> {
    match value {
        DeValue::Float(float) => float.as_str().parse().ok(),
        DeValue::Integer(whole) => integer(whole),
        _ => None,
    }
}

fn integer(whole: &DeInteger<'_>) -> Option<f64> {
    match whole.radix() {
        10 => whole.as_str().parse().ok(),
        radix => i64::from_str_radix(whole.as_str(), radix).ok().map(|value| value as f64),
    }
}

/// What kind of thing a value is, with its article.
const fn type_of(value: &DeValue<'_>) -> &'static str {
    match value {
        DeValue::String(_) => "a text",
        DeValue::Integer(_) | DeValue::Float(_) => "a number",
        DeValue::Boolean(_) => "a truth value",
        DeValue::Datetime(_) => "a date",
        DeValue::Array(_) => "an array",
        DeValue::Table(_) => "a section",
    }
}
