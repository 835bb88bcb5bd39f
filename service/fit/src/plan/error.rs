//! Errors of plans: which key, on which line, what was found and what is allowed.

use toml::Spanned;
use toml::de::{DeTable, DeValue};

use kilter_model::near_miss;

/// Why a plan was refused.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[error("{}{reason}", self.place())]
#[non_exhaustive]
pub struct PlanError {
    /// Dotted path of the key, entries of lists by their name (`field.weight_kg.range`); empty
    /// where the text is no TOML.
    pub key: String,
    /// Line in the text, counted from 1.
    pub line: Option<usize>,
    /// What was found and what is allowed.
    pub reason: String,
    /// What was probably meant.
    pub hint: Option<String>,
}

impl PlanError {
    fn place(&self) -> String {
        match (self.key.as_str(), self.line) {
            ("", None) => String::new(),
            ("", Some(line)) => format!("line {line}: "),
            (key, None) => format!("`{key}`: "),
            (key, Some(line)) => format!("`{key}` (line {line}): "),
        }
    }
}

/// One step into a document.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Step<'a> {
    Key(&'a str),
    Index(usize),
}

/// What is wrong with a value, by its place in the document.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(super) struct Objection<'a> {
    pub place: Vec<Step<'a>>,
    pub reason: String,
    pub hint: Option<String>,
}

impl<'a> Objection<'a> {
    pub(super) fn new(place: impl Into<Vec<Step<'a>>>, reason: impl Into<String>) -> Self {
        Self { place: place.into(), reason: reason.into(), hint: None }
    }

    /// Adds the nearest of the names that would have been right.
    pub(super) fn near<'b>(mut self, found: &str, known: impl IntoIterator<Item = &'b String>) -> Self {
        self.hint = near_miss(found, known).map(|name| format!("did you mean `{name}`?"));
        self
    }
}

/// A document with the places of its keys.
pub(super) struct Places<'a> {
    text: &'a str,
    table: Option<Spanned<DeTable<'a>>>,
}

impl<'a> Places<'a> {
    pub(super) fn new(text: &'a str) -> Self {
        Self { text, table: DeTable::parse(text).ok() }
    }

    /// The error of an objection, with its key and line.
    pub(super) fn error_at(&self, objection: Objection) -> PlanError {
        let mut key = String::new();
        let mut line = None;
        let mut at = Vec::new();
        for step in objection.place {
            at.push(step);
            match step {
                Step::Key(name) => join(&mut key, name),
                Step::Index(index) => {
                    let name = self.find(&at).and_then(|(value, _)| name_of(value));
                    join_index(&mut key, index, name);
                }
            }
            if let Some((_, start)) = self.find(&at) {
                line = Some(self.line(start));
            }
        }
        PlanError { key, line, reason: objection.reason, hint: objection.hint }
    }

    /// The error that reading the document gave, with its key.
    pub(super) fn error_of(&self, error: &toml::de::Error) -> PlanError {
        let start = error.span().map(|span| span.start);
        let mut key = String::new();
        if let (Some(start), Some(table)) = (start, &self.table) {
            key_at_table(table.get_ref(), start, &mut key);
        }
        let reason = in_plain_words(error.message());
        let hint = nearest_expected(&reason);
        PlanError { key, line: start.map(|start| self.line(start)), reason, hint }
    }

    fn line(&self, start: usize) -> usize {
        1 + self.text.bytes().take(start).filter(|&byte| byte == b'\n').count()
    }

    /// The value at a place and where its key starts.
    fn find(&self, place: &[Step]) -> Option<(&DeValue<'a>, usize)> {
        let (Step::Key(first), rest) = place.split_first()? else { return None };
        let (key, value) = self.table.as_ref()?.get_ref().iter().find(|(key, _)| key.get_ref() == first)?;
        let mut found = (value.get_ref(), key.span().start);
        for step in rest {
            found = match (step, found.0) {
                (Step::Key(name), DeValue::Table(table)) => {
                    let (key, value) = table.iter().find(|(key, _)| key.get_ref() == name)?;
                    (value.get_ref(), key.span().start)
                }
                (Step::Index(index), DeValue::Array(array)) => {
                    let value = array.get(*index)?;
                    (value.get_ref(), value.span().start)
                }
                _ => return None,
            };
        }
        Some(found)
    }
}

/// Appends the keys that lead to the byte at `start`; whether there are any.
fn key_at_table(table: &DeTable, start: usize, path: &mut String) -> bool {
    for (key, value) in table {
        let length = path.len();
        join(path, key.get_ref());
        let inside = key_at_value(value.get_ref(), start, path);
        if inside || key.span().contains(&start) || value.span().contains(&start) {
            return true;
        }
        path.truncate(length);
    }
    false
}

fn key_at_value(value: &DeValue, start: usize, path: &mut String) -> bool {
    match value {
        DeValue::Table(table) => key_at_table(table, start, path),
        DeValue::Array(array) => {
            for (index, item) in array.iter().enumerate() {
                let length = path.len();
                join_index(path, index, name_of(item.get_ref()));
                if key_at_value(item.get_ref(), start, path) || item.span().contains(&start) {
                    return true;
                }
                path.truncate(length);
            }
            false
        }
        _ => false,
    }
}

fn name_of<'b>(value: &'b DeValue) -> Option<&'b str> {
    value.as_table()?.iter().find(|(key, _)| key.get_ref() == "name")?.1.get_ref().as_str()
}

fn join(path: &mut String, key: &str) {
    if !path.is_empty() {
        path.push('.');
    }
    path.push_str(key);
}

/// Entries of lists go by their name, or else by their number, counted from 1.
fn join_index(path: &mut String, index: usize, name: Option<&str>) {
    match name {
        Some(name) => join(path, name),
        None => path.extend([format!("[{}]", index + 1)]),
    }
}

/// The message of the reader of TOML with the names of types said in words.
fn in_plain_words(message: &str) -> String {
    let words = [
        ("expected f64", "expected a number"),
        ("expected u64", "expected a whole number from 0 on"),
        ("expected u32", "expected a whole number from 0 on"),
    ];
    let message = message.trim().replace('\n', ", ");
    words.iter().fold(message, |message, (from, to)| message.replace(from, to))
}

/// The nearest of the names that a message of the form "unknown … `x`, expected one of `a`, `b`"
/// lists.
fn nearest_expected(message: &str) -> Option<String> {
    let (found, expected) = message.split_once("expected")?;
    let found = found.split('`').nth(1)?;
    let names: Vec<String> = expected.split('`').skip(1).step_by(2).map(String::from).collect();
    near_miss(found, &names).map(|name| format!("did you mean `{name}`?"))
}
