//! The first difference between what a log holds and what a replay made, named field by field.

use serde::de::{Deserialize, Deserializer, MapAccess, SeqAccess, Visitor};
use serde_json::json;
use std::fmt;
use trackhold_proto::journal::{Body, Entry};

/// Longest value shown to people, characters.
const SHOWN: usize = 200;

/// Where log and replay part.
#[derive(Clone, Debug, PartialEq)]
pub struct Difference {
    /// Number of the log's entry.
    pub entry: u64,
    /// Its moment, daemon's clock, ns.
    pub at_ns: u64,
    /// Its kind.
    pub kind: &'static str,
    /// The field, as a path: `command.wheels[1]`; `kind` where the kinds differ already.
    pub field: String,
    /// What the log has there.
    pub log: String,
    /// What the replay made.
    pub replay: String,
}

impl Difference {
    /// Names the first field in which two entries differ whose bytes do.
    pub fn between(log: &Entry, replay: &Entry) -> Self {
        let at = |field: &str, left: String, right: String| Self {
            entry: log.number,
            at_ns: log.at_ns,
            kind: log.body.name(),
            field: field.to_owned(),
            log: left,
            replay: right,
        };
        if log.body.name() != replay.body.name() {
            return at("kind", log.body.name().to_owned(), replay.body.name().to_owned());
        }
        if log.number != replay.number {
            return at("number", log.number.to_string(), replay.number.to_string());
        }
        if log.at_ns != replay.at_ns {
            return at("at_ns", log.at_ns.to_string(), replay.at_ns.to_string());
        }
        match first(&content(&log.body), &content(&replay.body), String::new()) {
            Some((field, left, right)) => at(field.trim_start_matches('.'), left, right),
            None => at("bits", "values that print alike".to_owned(), "but differ in their bits".to_owned()),
        }
    }

    /// An entry in the log that nothing in the replay leads to.
    pub fn surplus(log: &Entry) -> Self {
        Self {
            entry: log.number,
            at_ns: log.at_ns,
            kind: log.body.name(),
            field: "kind".to_owned(),
            log: log.body.name().to_owned(),
            replay: "nothing: the events so far have no more results".to_owned(),
        }
    }

    /// As JSON.
    pub fn to_json(&self) -> serde_json::Value {
        json!({
            "entry": self.entry,
            "at_ns": self.at_ns,
            "kind": self.kind,
            "field": self.field,
            "log": self.log,
            "replay": self.replay,
        })
    }
}

impl fmt::Display for Difference {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let Self { entry, at_ns, kind, field, log, replay } = self;
        write!(
            f,
            "entry {entry} ({kind} at {at_ns} ns), field {field}: the log has {log}, the replay {replay}"
        )
    }
}

/// An entry's fields, without the name of its kind around them.
fn content(body: &Body) -> Tree {
    match serde_json::to_string(body).and_then(|text| serde_json::from_str(&text)) {
        Ok(Tree::Object(mut fields)) if fields.len() == 1 => fields.remove(0).1,
        Ok(other) => other,
        Err(error) => Tree::Leaf(error.to_string()),
    }
}

fn first(log: &Tree, replay: &Tree, path: String) -> Option<(String, String, String)> {
    match (log, replay) {
        (Tree::Object(left), Tree::Object(right)) if names(left).eq(names(right)) => left
            .iter()
            .zip(right)
            .find_map(|((name, left), (_, right))| first(left, right, format!("{path}.{name}"))),
        (Tree::Array(left), Tree::Array(right)) if left.len() == right.len() => left
            .iter()
            .zip(right)
            .enumerate()
            .find_map(|(index, (left, right))| first(left, right, format!("{path}[{index}]"))),
        _ => {
            let (left, right) = (log.to_string(), replay.to_string());
            (left != right).then(|| (path, cut(left), cut(right)))
        }
    }
}

fn names(fields: &[(String, Tree)]) -> impl Iterator<Item = &str> {
    fields.iter().map(|(name, _)| name.as_str())
}

/// JSON whose fields keep their order: the first difference should be the first in the record, for the later ones follow
/// from it. Numbers are kept as text, for −0 and 0 are equal as numbers.
enum Tree {
    Object(Vec<(String, Tree)>),
    Array(Vec<Tree>),
    Leaf(String),
}

impl fmt::Display for Tree {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Leaf(text) => f.write_str(text),
            Self::Array(items) => {
                f.write_str("[")?;
                items.iter().try_for_each(|item| write!(f, "{item} "))?;
                f.write_str("]")
            }
            Self::Object(fields) => {
                f.write_str("{")?;
                fields.iter().try_for_each(|(name, value)| write!(f, "{name}: {value} "))?;
                f.write_str("}")
            }
        }
    }
}

impl<'de> Deserialize<'de> for Tree {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        deserializer.deserialize_any(TreeVisitor)
    }
}

struct TreeVisitor;

impl<'de> Visitor<'de> for TreeVisitor {
    type Value = Tree;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("JSON")
    }

    fn visit_f64<E>(self, value: f64) -> Result<Tree, E> {
        Ok(Tree::Leaf(format!("{value:?}")))
    }

    fn visit_u64<E>(self, value: u64) -> Result<Tree, E> {
        Ok(Tree::Leaf(value.to_string()))
    }

    fn visit_i64<E>(self, value: i64) -> Result<Tree, E> {
        Ok(Tree::Leaf(value.to_string()))
    }

    fn visit_bool<E>(self, value: bool) -> Result<Tree, E> {
        Ok(Tree::Leaf(value.to_string()))
    }

    fn visit_str<E>(self, value: &str) -> Result<Tree, E> {
        Ok(Tree::Leaf(value.to_owned()))
    }

    fn visit_unit<E>(self) -> Result<Tree, E> {
        Ok(Tree::Leaf("nothing".to_owned()))
    }

    fn visit_seq<A: SeqAccess<'de>>(self, mut seq: A) -> Result<Tree, A::Error> {
        let mut items = Vec::new();
        while let Some(item) = seq.next_element()? {
            items.push(item);
        }
        Ok(Tree::Array(items))
    }

    fn visit_map<A: MapAccess<'de>>(self, mut map: A) -> Result<Tree, A::Error> {
        let mut fields = Vec::new();
        while let Some(field) = map.next_entry()? {
            fields.push(field);
        }
        Ok(Tree::Object(fields))
    }
}

fn cut(text: String) -> String {
    match text.char_indices().nth(SHOWN) {
        Some((end, _)) => format!("{}… ({} bytes)", &text[..end], text.len()),
        None => text,
    }
}
