//! A header: keywords in order, parsed from a file or built by a caller.

use super::card::{self, Value};
use super::{BLOCK, CARD, FitsProblem};
use std::collections::HashMap;

/// One line of a header.
#[derive(Debug, Clone, PartialEq)]
enum Entry {
    Keyword { name: String, value: Value, comment: String },
    Text { name: &'static str, text: String },
}

/// Keywords that the writer derives from the data; a caller's own are left out on writing.
fn is_structural(name: &str) -> bool {
    const FIXED: [&str; 9] =
        ["SIMPLE", "XTENSION", "BITPIX", "NAXIS", "EXTEND", "TFIELDS", "THEAP", "END", "CONTINUE"];
    let numbered = |stem: &str| {
        name.strip_prefix(stem).is_some_and(|n| !n.is_empty() && n.bytes().all(|b| b.is_ascii_digit()))
    };
    FIXED.contains(&name) || numbered("NAXIS") || numbered("TTYPE") || numbered("TFORM") || numbered("TUNIT")
}

/// Keywords, comments and history, in order.
///
/// To write a file, set the keywords that describe the data and hand the header to a writer, which puts the
/// mandatory ones (BITPIX, NAXISn, …) in front itself.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Header {
    entries: Vec<Entry>,
    /// Where each keyword stands first, so that a header of a hundred thousand cards is not searched for each keyword.
    places: HashMap<String, usize>,
    label: String,
}

impl Header {
    /// An empty header.
    pub fn new() -> Header {
        Header::default()
    }

    /// Sets a keyword, in its old place when it is there already. An empty comment is left out.
    pub fn set(&mut self, name: &str, value: impl Into<Value>, comment: &str) -> &mut Header {
        let new = Entry::Keyword { name: name.to_string(), value: value.into(), comment: comment.to_string() };
        match self.places.get(name) {
            Some(place) => self.entries[*place] = new,
            None => self.push_keyword(new),
        }
        self
    }

    /// Adds HISTORY, on several cards when it is long.
    pub fn history(&mut self, text: &str) -> &mut Header {
        self.entries.push(Entry::Text { name: "HISTORY", text: text.to_string() });
        self
    }

    /// Adds a COMMENT, on several cards when it is long.
    pub fn comment(&mut self, text: &str) -> &mut Header {
        self.entries.push(Entry::Text { name: "COMMENT", text: text.to_string() });
        self
    }

    /// The texts of all HISTORY cards.
    pub fn history_lines(&self) -> impl Iterator<Item = &str> {
        self.entries.iter().filter_map(|entry| match entry {
            Entry::Text { name: "HISTORY", text } => Some(text.as_str()),
            _ => None,
        })
    }

    /// Which header this is, for messages.
    pub fn label(&self) -> &str {
        &self.label
    }

    /// The value of a keyword (of its first card, when it stands there twice).
    pub fn get(&self, name: &str) -> Option<&Value> {
        match self.entries.get(*self.places.get(name)?) {
            Some(Entry::Keyword { value, .. }) => Some(value),
            _ => None,
        }
    }

    fn push_keyword(&mut self, entry: Entry) {
        if let Entry::Keyword { name, .. } = &entry {
            self.places.entry(name.clone()).or_insert(self.entries.len());
        }
        self.entries.push(entry);
    }

    /// All keywords with their values, in order.
    pub fn keywords(&self) -> impl Iterator<Item = (&str, &Value)> {
        self.entries.iter().filter_map(|entry| match entry {
            Entry::Keyword { name, value, .. } => Some((name.as_str(), value)),
            Entry::Text { .. } => None,
        })
    }

    /// A complaint about a keyword of this header.
    pub fn complain(&self, keyword: &str, expected: &str) -> FitsProblem {
        let (hdu, keyword, expected) = (self.label.clone(), keyword.to_string(), expected.to_string());
        match self.get(&keyword) {
            None => FitsProblem::Missing { hdu, keyword, expected },
            Some(value) => FitsProblem::BadValue { hdu, found: value.to_string(), keyword, expected },
        }
    }

    fn typed<T>(
        &self,
        name: &str,
        expected: &str,
        read: fn(&Value) -> Option<T>,
    ) -> Result<Option<T>, FitsProblem> {
        match self.get(name) {
            None | Some(Value::Undefined) => Ok(None),
            Some(value) => read(value).map(Some).ok_or_else(|| self.complain(name, expected)),
        }
    }

    /// A string; `None` when the keyword is absent or has no value.
    ///
    /// # Errors
    /// When the value is not a string.
    pub fn text(&self, name: &str) -> Result<Option<String>, FitsProblem> {
        self.typed(name, "a string", |value| match value {
            Value::Text(text) => Some(text.trim_end().to_string()),
            _ => None,
        })
    }

    /// A whole number; `None` when absent or without value. A real number that is whole is taken too.
    ///
    /// # Errors
    /// When the value is not a whole number.
    pub fn integer(&self, name: &str) -> Result<Option<i64>, FitsProblem> {
        self.typed(name, "a whole number", |value| match value {
            Value::Integer(value) => Some(*value),
            Value::Float(value) if value.fract() == 0.0 && value.abs() < 9e15 => Some(*value as i64),
            _ => None,
        })
    }

    /// A finite real number; `None` when absent or without value.
    ///
    /// # Errors
    /// When the value is not a number.
    pub fn float(&self, name: &str) -> Result<Option<f64>, FitsProblem> {
        self.typed(name, "a number", |value| match value {
            Value::Integer(value) => Some(*value as f64),
            Value::Float(value) => Some(*value),
            _ => None,
        })
    }

    /// T or F; `None` when absent or without value.
    ///
    /// # Errors
    /// When the value is neither.
    pub fn logical(&self, name: &str) -> Result<Option<bool>, FitsProblem> {
        self.typed(name, "T or F", |value| match value {
            Value::Logical(value) => Some(*value),
            _ => None,
        })
    }

    /// A whole number that must be there and not negative.
    ///
    /// # Errors
    /// When it is absent, not whole or negative.
    pub fn count(&self, name: &str) -> Result<u64, FitsProblem> {
        let expected = "a whole number, 0 or more";
        let value = self.integer(name)?.ok_or_else(|| self.complain(name, expected))?;
        u64::try_from(value).map_err(|_| self.complain(name, expected))
    }

    /// Gives it another label.
    pub(super) fn set_label(&mut self, label: String) {
        self.label = label;
    }

    /// Parses the cards of a header. `label` names it in messages.
    pub(super) fn parse(bytes: &[u8], label: String) -> Result<Header, FitsProblem> {
        let mut header = Header { label, ..Header::default() };
        let mut open_string = false; // the last keyword is a string that ended in '&'
        for (number, raw) in bytes.chunks_exact(CARD).enumerate() {
            let (name_field, rest) = raw.split_at(8);
            if !name_field.iter().all(|b| (b' '..=b'~').contains(b)) {
                return Err(FitsProblem::BadCard {
                    hdu: header.label,
                    card: number + 1,
                    found: String::from_utf8_lossy(name_field).into_owned(),
                });
            }
            let name = String::from_utf8_lossy(name_field).trim_end().to_string();
            // Bytes outside ASCII are legal nowhere but do occur in comments: keep the card, mark the byte.
            let rest: String =
                rest.iter().map(|b| if (b' '..=b'~').contains(b) { char::from(*b) } else { '?' }).collect();
            if name == "CONTINUE" && open_string {
                open_string = header.extend_string(&rest);
                continue;
            }
            open_string = false;
            if let Some(field) = rest.strip_prefix("= ") {
                let (value, comment) = card::parse_value(field);
                open_string = matches!(&value, Value::Text(text) if text.ends_with('&'));
                header.push_keyword(Entry::Keyword { name, value, comment });
            } else if name == "HISTORY" {
                header.history(rest.trim_end());
            } else if name == "COMMENT" {
                header.comment(rest.trim_end());
            }
        }
        Ok(header)
    }

    /// Appends a CONTINUE card to the last string; says whether yet another may follow.
    fn extend_string(&mut self, rest: &str) -> bool {
        if let (Value::Text(more), _) = card::parse_value(rest)
            && let Some(Entry::Keyword { value: Value::Text(text), .. }) = self.entries.last_mut()
        {
            text.truncate(text.len().saturating_sub(1));
            text.push_str(&more);
            return text.ends_with('&');
        }
        false
    }

    /// The blocks of a header: `mandatory` first, then this header's own keywords that are not structural.
    ///
    /// # Errors
    /// When a keyword has a name that FITS does not allow.
    pub(super) fn to_blocks(&self, mandatory: &Header) -> Result<Vec<u8>, FitsProblem> {
        let mut bytes = Vec::new();
        let own = self.entries.iter().filter(
            |entry| !matches!(entry, Entry::Keyword { name, .. } if is_structural(name) || mandatory.get(name).is_some()),
        );
        for entry in mandatory.entries.iter().chain(own) {
            let cards = match entry {
                Entry::Text { name, text } => card::text_cards(name, text),
                Entry::Keyword { name, value, comment } => {
                    let allowed = |b: u8| b.is_ascii_uppercase() || b.is_ascii_digit() || b == b'-' || b == b'_';
                    if name.is_empty() || name.len() > 8 || !name.bytes().all(allowed) {
                        return Err(FitsProblem::Unwritable {
                            what: "a header keyword".to_string(),
                            found: format!("{name:?}"),
                            expected: "1 to 8 of A-Z, 0-9, - and _".to_string(),
                        });
                    }
                    card::keyword_cards(name, value, comment)
                }
            };
            bytes.extend(cards.iter().flat_map(|card| card.bytes()));
        }
        bytes.extend(format!("{:<CARD$}", "END").bytes());
        bytes.resize(bytes.len().next_multiple_of(BLOCK), b' ');
        Ok(bytes)
    }
}
