//! Reads the tables of PROTOCOL.md and decodes bytes by them alone, without this crate's own decoder.

use serde_json::{Map, Value, json};
use std::collections::BTreeMap;

/// The rows under each heading that has a back-quoted name, and under "Header".
pub(crate) struct Spec(BTreeMap<String, Vec<Vec<String>>>);

/// Bytes being read.
pub(crate) struct Cursor<'a> {
    pub(crate) bytes: &'a [u8],
    pub(crate) at: usize,
}

impl Cursor<'_> {
    fn take(&mut self, count: usize) -> &[u8] {
        self.at += count;
        &self.bytes[self.at - count..self.at]
    }

    fn whole(&mut self, bytes: usize) -> u64 {
        self.take(bytes).iter().rev().fold(0, |sum, byte| sum << 8 | u64::from(*byte))
    }
}

fn hex(bytes: &[u8]) -> Value {
    bytes.iter().map(|byte| format!("{byte:02x}")).collect::<String>().into()
}

fn text(bytes: &[u8]) -> Value {
    std::str::from_utf8(bytes).unwrap().into()
}

impl Spec {
    pub(crate) fn read() -> Self {
        let page = include_str!("../../PROTOCOL.md");
        let (mut all, mut heading) = (BTreeMap::<String, Vec<Vec<String>>>::new(), String::new());
        for line in page.lines() {
            if let Some(title) = line.strip_prefix('#') {
                let title = title.trim_start_matches(['#', ' ']);
                heading = title.split(", ").next().unwrap().replace([':', '`'], "");
            } else if let Some(row) = line.strip_prefix("| ").and_then(|row| row.strip_suffix('|')) {
                let cells = row.split('|').map(|cell| cell.trim().to_string()).collect();
                all.entry(heading.clone()).or_default().push(cells);
            }
        }
        for rows in all.values_mut() {
            rows.drain(..2);
        }
        Self(all)
    }

    /// The rows below a heading, without the table's head; none if there is no table.
    pub(crate) fn rows(&self, heading: &str) -> &[Vec<String>] {
        self.0.get(heading).map_or(&[], Vec::as_slice)
    }

    /// Headings that begin with `word`: the number and the name that follow.
    pub(crate) fn numbered(&self, word: &str) -> Vec<(u32, String)> {
        let page = include_str!("../../PROTOCOL.md");
        let titles = page.lines().filter_map(|line| line.strip_prefix("### ")?.strip_prefix(word));
        let parts = titles.map(|title| title.trim().split_once(": `").unwrap());
        parts
            .map(|(number, name)| (number.parse().unwrap(), name.split('`').next().unwrap().to_string()))
            .collect()
    }

    /// Decodes a message's payload by its table and checks each offset and size on the way.
    pub(crate) fn message(&self, kind: u32, name: &str, cursor: &mut Cursor) -> Value {
        let (begin, mut count, mut fields) = (cursor.at, 0, Map::new());
        for row in self.rows(&format!("Kind {kind} {name}")) {
            let [offset, size, kind_of, field] = [0, 1, 2, 3].map(|cell| row[cell].as_str());
            let from = cursor.at;
            let expected = |cell: &str, count: usize| match cell.strip_suffix("+n") {
                Some(fixed) => fixed.parse::<usize>().unwrap() + count,
                None => cell.parse().unwrap(),
            };
            assert_eq!(from - begin, expected(offset, count), "offset of {name}.{field}");
            let value = self.value(kind_of, cursor);
            if size == "2+n" {
                count += cursor.at - from - 2;
            }
            let own = if size == "2+n" { cursor.at - from - 2 } else { 0 };
            assert_eq!(cursor.at - from, expected(size, own), "size of {name}.{field}");
            match field.split_once('.') {
                Some((outer, inner)) => fields.entry(outer).or_insert(json!({}))[inner] = value,
                None => drop(fields.insert(field.to_string(), value)),
            }
        }
        Value::Object(fields)
    }

    /// Decodes a journal body's fields by their table.
    pub(crate) fn body(&self, number: u32, name: &str, cursor: &mut Cursor) -> Value {
        let rows = self.rows(&format!("Body {number} {name}"));
        if let [row] = rows
            && row[1] == name
        {
            // The body is that one thing.
            return self.value(&row[0], cursor);
        }
        Value::Object(rows.iter().map(|row| (row[1].clone(), self.value(&row[0], cursor))).collect())
    }

    fn value(&self, kind: &str, cursor: &mut Cursor) -> Value {
        let bound = |begin: &str| kind.strip_prefix(begin)?.trim_end_matches(']').parse::<usize>().ok();
        match kind {
            "u8" | "bool" => match (kind, cursor.whole(1)) {
                ("bool", flag) => (flag == 1).into(),
                (_, number) => number.into(),
            },
            "u16" => cursor.whole(2).into(),
            "u32" => cursor.whole(4).into(),
            "u64" => cursor.whole(8).into(),
            "i64" => cursor.whole(8).cast_signed().into(),
            "f64" => f64::from_bits(cursor.whole(8)).into(),
            "f64[4]" => (0..4).map(|_| f64::from_bits(cursor.whole(8))).collect(),
            "bytes" | "string" => {
                let count = cursor.whole(8) as usize;
                text(cursor.take(count))
            }
            "pose" => self.message(1, kind, cursor),
            "start" => self.message(3, kind, cursor),
            "command" => self.message(65, kind, cursor),
            _ => match (bound("bytes["), bound("blob "), bound("text ")) {
                (Some(count), ..) => hex(cursor.take(count)),
                (_, Some(most), _) => hex(counted(most, cursor)),
                (.., Some(most)) => text(counted(most, cursor)),
                _ => self.nested(kind, cursor),
            },
        }
    }

    fn nested(&self, kind: &str, cursor: &mut Cursor) -> Value {
        if let Some(inner) = kind.strip_prefix("list of ") {
            return (0..cursor.whole(8)).map(|_| self.value(inner, cursor)).collect();
        }
        if let Some(inner) = kind.strip_prefix("option of ") {
            return if cursor.whole(1) == 1 { self.value(inner, cursor) } else { Value::Null };
        }
        let number = cursor.whole(4).to_string();
        let find = |heading: String| self.rows(&heading).iter().find(|row| row[0] == number);
        if let Some(row) = find(format!("Words {kind}")) {
            return row[1].as_str().into();
        }
        let row = find(format!("Choice {kind}")).unwrap_or_else(|| panic!("type {kind}, number {number}"));
        if row[2].is_empty() {
            return row[1].as_str().into();
        }
        if !row[2].contains(' ') {
            return json!({ row[1].as_str(): self.value(&row[2], cursor) });
        }
        let fields = row[2].split(", ").map(|field| field.split_once(' ').unwrap());
        let fields: Map<_, _> = fields.map(|(name, of)| (name.to_string(), self.value(of, cursor))).collect();
        json!({ row[1].as_str(): fields })
    }
}

fn counted<'a>(most: usize, cursor: &'a mut Cursor) -> &'a [u8] {
    let count = cursor.whole(2) as usize;
    assert!(count <= most);
    cursor.take(count)
}
