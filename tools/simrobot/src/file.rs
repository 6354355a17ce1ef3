//! Sections of named numbers in a TOML file, with the line of each, so that an error can say where.

use std::collections::BTreeMap;
use std::fmt;
use toml::de::{DeTable, DeValue};
use trackhold_core::keys::{Problem, Values};

/// What is wrong with a file: every problem on a line of its own, `FILE:LINE: key: what`.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub struct FileError {
    lines: Vec<String>,
}

impl fmt::Display for FileError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.lines.join("\n"))
    }
}

impl FileError {
    pub(crate) fn new(line: String) -> Self {
        Self { lines: vec![line] }
    }

    pub(crate) fn unreadable(name: &str, error: &std::io::Error) -> Self {
        Self::new(format!("{name}: cannot be read: {error}"))
    }
}

/// The numbers and words of one section.
#[derive(Debug, Default)]
pub(crate) struct Section {
    pub(crate) values: Values,
    pub(crate) words: BTreeMap<String, String>,
}

/// A file in sections.
#[derive(Debug)]
pub(crate) struct File<'a> {
    name: &'a str,
    /// Sections by name; "" is what stands before the first.
    sections: BTreeMap<String, Section>,
    /// Line of each `section.key`, of each section, and of each key before the first section.
    lines: BTreeMap<String, usize>,
    /// Values that are neither numbers nor words, by `section.key`.
    strange: Vec<Problem>,
}

impl<'a> File<'a> {
    /// Reads `text`; `name` is for error texts.
    ///
    /// # Errors
    /// If it is not TOML.
    pub(crate) fn parse(text: &str, name: &'a str) -> Result<Self, FileError> {
        let line_of = |at: usize| 1 + text.bytes().take(at).filter(|&byte| byte == b'\n').count();
        let table = DeTable::parse(text).map_err(|error| {
            let place = error.span().map(|span| format!(":{}", line_of(span.start))).unwrap_or_default();
            FileError::new(format!("{name}{place}: {}", error.message()))
        })?;
        let mut file = Self { name, sections: BTreeMap::new(), lines: BTreeMap::new(), strange: Vec::new() };
        for (key, value) in table.get_ref() {
            let (key, line) = (key.get_ref().to_string(), line_of(key.span().start));
            match value.get_ref() {
                DeValue::Table(members) => file.take_section(&key, line, members, &line_of),
                other => file.take("", &key, line, other),
            }
        }
        Ok(file)
    }

    fn take_section(
        &mut self,
        section: &str,
        line: usize,
        members: &DeTable<'_>,
        line_of: &dyn Fn(usize) -> usize,
    ) {
        self.lines.insert(section.to_owned(), line);
        self.sections.entry(section.to_owned()).or_default();
        for (key, value) in members {
            self.take(section, key.get_ref(), line_of(key.span().start), value.get_ref());
        }
    }

    fn take(&mut self, section: &str, key: &str, line: usize, value: &DeValue<'_>) {
        let path = path(section, key);
        self.lines.insert(path.clone(), line);
        let into = self.sections.entry(section.to_owned()).or_default();
        match (number(value), value.as_str()) {
            (Some(number), _) => into.values.set(key, number),
            (None, Some(word)) => {
                into.words.insert(key.to_owned(), word.to_owned());
            }
            (None, None) => {
                let what = format!("{} where a number belongs", value.type_str());
                self.strange.push(Problem { key: path, what });
            }
        }
    }

    /// Takes a section out; empty if the file has none of this name.
    pub(crate) fn section(&mut self, name: &str) -> Section {
        self.sections.remove(name).unwrap_or_default()
    }

    /// What is left as problems: sections nobody took, keys before the first section, and values that are not numbers.
    pub(crate) fn left_over(&self, known: &str) -> Vec<Problem> {
        let mut problems = self.strange.clone();
        for (name, section) in &self.sections {
            if name.is_empty() {
                let keys =
                    section.values.iter().map(|(key, _)| key).chain(section.words.keys().map(String::as_str));
                problems.extend(
                    keys.map(|key| Problem::new(key, format!("no such key here; known are {known}"))),
                );
            } else {
                problems.push(Problem::new(name, format!("no such section; known are {known}")));
            }
        }
        problems
    }

    /// Values that are neither numbers nor words in `section`.
    pub(crate) fn strange_in(&self, section: &str) -> Vec<Problem> {
        let prefix = path(section, "");
        self.strange.iter().filter(|problem| problem.key.starts_with(&prefix)).cloned().collect()
    }

    /// The problems as an error that names file and line.
    pub(crate) fn error(&self, problems: &[Problem]) -> FileError {
        let mut lines: Vec<(usize, String)> = problems.iter().map(|problem| self.placed(problem)).collect();
        lines.sort();
        FileError { lines: lines.into_iter().map(|(_, line)| line).collect() }
    }

    fn placed(&self, problem: &Problem) -> (usize, String) {
        let section = problem.key.split('.').next().unwrap_or_default();
        match self.lines.get(&problem.key).or_else(|| self.lines.get(section)) {
            Some(line) => (*line, format!("{}:{line}: {problem}", self.name)),
            None => (0, format!("{}: {problem}", self.name)),
        }
    }
}

/// Words where numbers belong, as problems.
pub(crate) fn no_words(section: &Section) -> Vec<Problem> {
    let words = section.words.iter();
    words.map(|(key, word)| Problem::new(key, format!("the text {word:?} where a number belongs"))).collect()
}

fn path(section: &str, key: &str) -> String {
    if section.is_empty() { key.to_owned() } else { format!("{section}.{key}") }
}

fn number(value: &DeValue<'_>) -> Option<f64> {
    if let Some(whole) = value.as_integer() {
        return i64::from_str_radix(whole.as_str(), whole.radix()).ok().map(|whole| whole as f64);
    }
    value.as_float()?.as_str().parse().ok()
}
