//! TOML with line numbers: tables that remember which keys were asked for, and collect complaints as they are read.

use super::{Complaint, Problem, RunError};
use serde::Serialize;
use std::cell::RefCell;
use std::path::{Path, PathBuf};
use toml::Spanned;
use toml::de::{DeTable, DeValue};

/// A value and the line it stands on.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
#[serde(transparent)]
pub struct At<T> {
    /// The value.
    pub value: T,
    /// Its line in the run file, counted from 1; for a default, the line of the table it belongs to.
    #[serde(skip)]
    pub line: usize,
}

/// The file being read, and what was found wrong so far.
pub(super) struct Document<'a> {
    pub path: &'a Path,
    text: &'a str,
    complaints: RefCell<Vec<Complaint>>,
}

impl<'a> Document<'a> {
    pub fn new(path: &'a Path, text: &'a str) -> Self {
        Document { path, text, complaints: RefCell::new(Vec::new()) }
    }

    /// Parses the text. Errors of syntax are all reported, and nothing else then: what they leave is guesswork.
    pub fn parse(&self) -> Result<DeTable<'a>, RunError> {
        let (root, errors) = DeTable::parse_recoverable(self.text);
        if errors.is_empty() {
            return Ok(root.into_inner());
        }
        for error in errors {
            let span = error.span().unwrap_or(0..0);
            // what the parser stumbled over, when it is a word and not a gap
            let word = self.text.get(span.clone()).and_then(|text| text.lines().next()).map_or("", str::trim);
            let at = if word.is_empty() { String::new() } else { format!(" at `{word:.60}`") };
            self.complain(self.line_at(span.start), "", Problem::Syntax(format!("{}{at}", error.message())));
        }
        Err(self.failure().unwrap_or(RunError::Complaints(Vec::new())))
    }

    pub fn line_at(&self, offset: usize) -> usize {
        1 + self.text.as_bytes()[..offset.min(self.text.len())].iter().filter(|&&b| b == b'\n').count()
    }

    pub fn complain(&self, line: usize, key: impl Into<String>, problem: Problem) {
        self.add(Complaint::new(self.path, line, key, problem));
    }

    pub fn add(&self, complaint: Complaint) {
        self.complaints.borrow_mut().push(complaint);
    }

    /// All complaints so far as an error, in the order of their lines.
    pub fn failure(&self) -> Option<RunError> {
        let mut complaints = self.complaints.borrow_mut();
        if complaints.is_empty() {
            return None;
        }
        complaints.sort_by_key(|complaint| (complaint.path != self.path, complaint.line));
        Some(RunError::Complaints(std::mem::take(&mut *complaints)))
    }

    /// A path of the run file, relative to the folder the run file is in.
    pub fn resolve(&self, name: &str) -> PathBuf {
        self.path.parent().unwrap_or(Path::new("")).join(name)
    }
}

/// One table of the run file.
pub(super) struct Section<'d, 'a> {
    pub document: &'d Document<'a>,
    /// Name with its parents, for messages; empty for the whole file.
    pub name: String,
    pub line: usize,
    table: &'d DeTable<'a>,
    asked: RefCell<Vec<&'static str>>,
}

impl<'d, 'a> Section<'d, 'a> {
    pub fn root(document: &'d Document<'a>, table: &'d DeTable<'a>) -> Self {
        Section { document, name: String::new(), line: 1, table, asked: RefCell::default() }
    }

    /// The key with its tables.
    pub fn full(&self, key: &str) -> String {
        if self.name.is_empty() { key.to_owned() } else { format!("{}.{key}", self.name) }
    }

    /// Complains about a key of this table.
    pub fn complain(&self, line: usize, key: &str, problem: Problem) {
        self.document.complain(line, self.full(key), problem);
    }

    fn entry(&self, key: &'static str) -> Option<(usize, &'d DeValue<'a>)> {
        self.asked.borrow_mut().push(key);
        self.table
            .iter()
            .find(|(name, _)| name.get_ref() == key)
            .map(|(name, value)| (self.document.line_at(name.span().start), value.get_ref()))
    }

    /// Whether the key is there, without asking for it.
    pub fn has(&self, key: &str) -> bool {
        self.table.iter().any(|(name, _)| name.get_ref() == key)
    }

    /// The line of a key, or of the table when it is not there.
    pub fn line_of(&self, key: &str) -> usize {
        let found = self.table.iter().find(|(name, _)| name.get_ref() == key);
        found.map_or(self.line, |(name, _)| self.document.line_at(name.span().start))
    }

    /// The value of `key`, if it is there and `convert` takes it; a complaint when it does not.
    pub fn optional<T>(
        &self,
        key: &'static str,
        expected: &str,
        convert: impl FnOnce(&DeValue) -> Option<T>,
    ) -> Option<At<T>> {
        let (line, value) = self.entry(key)?;
        let converted = convert(value);
        if converted.is_none() {
            self.complain(line, key, Problem::value(describe(value), expected));
        }
        converted.map(|value| At { value, line })
    }

    /// As [`Section::optional`], with a value for when the key is not there.
    pub fn or<T>(
        &self,
        key: &'static str,
        default: T,
        expected: &str,
        convert: impl FnOnce(&DeValue) -> Option<T>,
    ) -> At<T> {
        self.optional(key, expected, convert).unwrap_or(At { value: default, line: self.line })
    }

    /// As [`Section::optional`], with a complaint when the key is not there.
    pub fn required<T>(
        &self,
        key: &'static str,
        expected: &str,
        convert: impl FnOnce(&DeValue) -> Option<T>,
    ) -> Option<At<T>> {
        if !self.has(key) {
            self.asked.borrow_mut().push(key);
            self.complain(self.line, key, Problem::Missing { expected: expected.to_owned() });
            return None;
        }
        self.optional(key, expected, convert)
    }

    /// The table `[key]` below this one.
    pub fn table(&self, key: &'static str) -> Option<Section<'d, 'a>> {
        let (line, value) = self.entry(key)?;
        let expected = format!("a table, written [{}]", self.full(key));
        self.below(self.full(key), line, value, &expected)
    }

    /// The tables `[[key]]` below this one, in their order.
    pub fn tables(&self, key: &'static str) -> Vec<Section<'d, 'a>> {
        let Some((line, value)) = self.entry(key) else { return Vec::new() };
        let expected = format!("a list of tables, each written [[{}]]", self.full(key));
        let DeValue::Array(items) = value else {
            self.complain(line, key, Problem::value(describe(value), expected));
            return Vec::new();
        };
        let place = |item: &Spanned<DeValue>| self.document.line_at(item.span().start);
        let many = items.len() > 1;
        let number =
            |index: usize| if many { format!("{}[{}]", self.full(key), index + 1) } else { self.full(key) };
        items
            .iter()
            .enumerate()
            .filter_map(|(i, item)| self.below(number(i), place(item), item.get_ref(), &expected))
            .collect()
    }

    /// All tables `[this.NAME]` with any name.
    pub fn named_tables(&self) -> Vec<(String, Section<'d, 'a>)> {
        let mut found: Vec<(String, Section<'d, 'a>)> = self
            .table
            .iter()
            .filter_map(|(name, value)| {
                let line = self.document.line_at(name.span().start);
                let full = self.full(name.get_ref());
                let expected = format!("a table, written [{full}]");
                self.below(full, line, value.get_ref(), &expected).map(|s| (name.get_ref().to_string(), s))
            })
            .collect();
        found.sort_by_key(|(_, section)| section.line);
        found
    }

    fn below(&self, name: String, line: usize, value: &'d DeValue<'a>, expected: &str) -> Option<Section<'d, 'a>> {
        match value {
            DeValue::Table(table) => {
                Some(Section { document: self.document, name, line, table, asked: RefCell::default() })
            }
            other => {
                self.document.complain(line, name, Problem::value(describe(other), expected));
                None
            }
        }
    }

    /// Complains about every key that was never asked for. To be called when all have been.
    pub fn finish(&self) {
        let asked = self.asked.borrow();
        for (name, _) in self.table.iter().filter(|(name, _)| !asked.iter().any(|&a| name.get_ref() == a)) {
            let line = self.document.line_at(name.span().start);
            self.complain(line, name.get_ref(), Problem::unknown_key(name.get_ref(), &asked));
        }
    }
}

/// Any string that is not blank.
pub(super) fn text(value: &DeValue) -> Option<String> {
    match value {
        DeValue::String(text) if !text.trim().is_empty() => Some(text.to_string()),
        _ => None,
    }
}

/// A finite number, whole or not, that `accepts` takes.
pub(super) fn number(accepts: impl Fn(f64) -> bool) -> impl Fn(&DeValue) -> Option<f64> {
    move |value| {
        let number = match value {
            DeValue::Float(float) => float.as_str().parse::<f64>().ok()?,
            DeValue::Integer(_) => whole(value)? as f64,
            _ => return None,
        };
        (number.is_finite() && accepts(number)).then_some(number)
    }
}

/// A whole number.
pub(super) fn whole(value: &DeValue) -> Option<i64> {
    match value {
        DeValue::Integer(integer) => i64::from_str_radix(integer.as_str(), integer.radix()).ok(),
        _ => None,
    }
}

/// A whole number from `low` to `high`.
pub(super) fn count(low: usize, high: usize) -> impl Fn(&DeValue) -> Option<usize> {
    move |value| whole(value).and_then(|n| usize::try_from(n).ok()).filter(|n| (low..=high).contains(n))
}

/// A list, each item taken by `item`.
pub(super) fn list<T>(item: impl Fn(&DeValue) -> Option<T>) -> impl Fn(&DeValue) -> Option<Vec<T>> {
    move |value| match value {
        DeValue::Array(items) => items.iter().map(|entry| item(entry.get_ref())).collect(),
        _ => None,
    }
}

/// A list of two, each taken by `item`.
pub(super) fn pair<T>(item: impl Fn(&DeValue) -> Option<T>) -> impl Fn(&DeValue) -> Option<[T; 2]> {
    move |value| list(&item)(value)?.try_into().ok()
}

/// What stands there, for a message.
pub(super) fn describe(value: &DeValue) -> String {
    match value {
        DeValue::String(text) if text.trim().is_empty() => "an empty string".to_owned(),
        DeValue::String(text) => {
            let shown: String = text.chars().take(60).collect();
            format!("the string {shown:?}{}", if shown.len() < text.len() { " …" } else { "" })
        }
        DeValue::Integer(integer) => format!("the number {integer}"),
        DeValue::Float(float) => format!("the number {float}"),
        DeValue::Boolean(truth) => truth.to_string(),
        DeValue::Datetime(moment) => format!("the time {moment}"),
        DeValue::Array(items) if items.is_empty() => "an empty list".to_owned(),
        DeValue::Array(items) => {
            let shown: Vec<String> = items.iter().take(4).map(|item| brief(item.get_ref())).collect();
            format!("the list [{}{}]", shown.join(", "), if items.len() > 4 { ", …" } else { "" })
        }
        DeValue::Table(_) => "a table".to_owned(),
    }
}

fn brief(value: &DeValue) -> String {
    match value {
        DeValue::String(text) => format!("{text:?}"),
        DeValue::Array(_) => "[…]".to_owned(),
        DeValue::Table(_) => "{…}".to_owned(),
        DeValue::Integer(integer) => integer.to_string(),
        DeValue::Float(float) => float.to_string(),
        DeValue::Boolean(truth) => truth.to_string(),
        DeValue::Datetime(moment) => moment.to_string(),
    }
}
