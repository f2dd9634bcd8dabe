//! The 80-character cards of a header: one value each way.

use super::CARD;

/// The value of a keyword.
#[derive(Debug, Clone, PartialEq)]
pub enum Value {
    /// T or F.
    Logical(bool),
    /// A whole number.
    Integer(i64),
    /// A real number. Written so that it reads back bit-equal; one that is not finite is written as undefined,
    /// since FITS has no way to say it.
    Float(f64),
    /// A string, without trailing blanks. Characters outside printable ASCII are written as `?`.
    Text(String),
    /// A keyword with no value.
    Undefined,
    /// Something that is none of these, as found. Never written.
    Unreadable(String),
}

macro_rules! from {
    ($($kind:ty => $variant:ident as $target:ty),*) => {$(
        impl From<$kind> for Value {
            fn from(value: $kind) -> Value {
                Value::$variant(value as $target)
            }
        }
    )*};
}
from!(bool => Logical as bool, i64 => Integer as i64, i32 => Integer as i64, u32 => Integer as i64,
      f64 => Float as f64);

impl From<usize> for Value {
    fn from(value: usize) -> Value {
        i64::try_from(value).map_or(Value::Float(value as f64), Value::Integer)
    }
}
impl From<f32> for Value {
    fn from(value: f32) -> Value {
        Value::Float(f64::from(value))
    }
}
impl From<&str> for Value {
    fn from(value: &str) -> Value {
        Value::Text(value.to_string())
    }
}
impl From<String> for Value {
    fn from(value: String) -> Value {
        Value::Text(value)
    }
}

impl std::fmt::Display for Value {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        match self {
            Value::Logical(value) => f.write_str(if *value { "T" } else { "F" }),
            Value::Integer(value) => write!(f, "{value}"),
            Value::Float(value) => f.write_str(&float_text(*value)),
            Value::Text(value) => write!(f, "'{value}'"),
            Value::Undefined => f.write_str("(no value)"),
            Value::Unreadable(text) => write!(f, "{text:?}"),
        }
    }
}

/// Parses the value field (all after `= `): the value and the comment.
pub(super) fn parse_value(field: &str) -> (Value, String) {
    let trimmed = field.trim_start();
    if let Some(rest) = trimmed.strip_prefix('\'') {
        return match parse_string(rest) {
            Some((text, after)) => (Value::Text(text), comment_of(after)),
            None => (Value::Unreadable(trimmed.trim_end().to_string()), String::new()),
        };
    }
    let (token, comment) = match trimmed.split_once('/') {
        Some((token, comment)) => (token.trim(), comment.trim().to_string()),
        None => (trimmed.trim(), String::new()),
    };
    let value = match token {
        "" => Value::Undefined,
        "T" => Value::Logical(true),
        "F" => Value::Logical(false),
        _ => parse_number(token).unwrap_or_else(|| Value::Unreadable(token.to_string())),
    };
    (value, comment)
}

/// The string after its opening quote, and what follows the closing one. `None` when it never closes.
fn parse_string(rest: &str) -> Option<(String, &str)> {
    let mut text = String::new();
    let mut after = rest;
    loop {
        let (before, tail) = after.split_once('\'')?;
        text.push_str(before);
        match tail.strip_prefix('\'') {
            Some(more) => {
                text.push('\'');
                after = more;
            }
            None => {
                text.truncate(text.trim_end_matches(' ').len());
                return Some((text, tail));
            }
        }
    }
}

fn comment_of(after: &str) -> String {
    after.split_once('/').map_or(String::new(), |(_, comment)| comment.trim().to_string())
}

fn parse_number(token: &str) -> Option<Value> {
    if !token.bytes().all(|b| b.is_ascii_digit() || b"+-.eEdD".contains(&b)) {
        return None; // Rust would also take "inf" and "nan", which FITS has not
    }
    if let Ok(value) = token.parse::<i64>() {
        return Some(Value::Integer(value));
    }
    let value: f64 = token.replace(['d', 'D'], "E").parse().ok()?;
    value.is_finite().then_some(Value::Float(value))
}

/// The shortest decimal that reads back bit-equal, always with a decimal point.
fn float_text(value: f64) -> String {
    let text = format!("{value:?}").replace('e', "E");
    match text.split_once('E') {
        Some((mantissa, exponent)) if !mantissa.contains('.') => format!("{mantissa}.0E{exponent}"),
        _ => text,
    }
}

/// Printable ASCII, with `?` for anything else.
fn printable(text: &str) -> String {
    text.chars().map(|c| if (' '..='~').contains(&c) { c } else { '?' }).collect()
}

/// Pads or cuts to one card.
fn card(text: &str) -> String {
    format!("{text:<CARD$.CARD$}")
}

/// The cards of one keyword: one, or several with CONTINUE for a long string.
pub(super) fn keyword_cards(name: &str, value: &Value, comment: &str) -> Vec<String> {
    let comment = printable(comment);
    let with_comment = |start: String| {
        let room = CARD.saturating_sub(start.len() + 3);
        card(&if comment.is_empty() || room == 0 { start } else { format!("{start} / {comment:.room$}") })
    };
    match value {
        Value::Text(text) => {
            let quoted = printable(text).replace('\'', "''");
            if quoted.len() <= CARD - 12 {
                vec![with_comment(format!("{name:<8}= {:<20}", format!("'{quoted:<8}'")))]
            } else {
                long_string_cards(name, &quoted, &with_comment)
            }
        }
        Value::Float(value) if !value.is_finite() => vec![with_comment(format!("{name:<8}= {:>20}", ""))],
        Value::Undefined | Value::Unreadable(_) => vec![with_comment(format!("{name:<8}= {:>20}", ""))],
        other => vec![with_comment(format!("{name:<8}= {:>20}", other.to_string()))],
    }
}

/// Splits an already quoted string over CONTINUE cards (FITS Standard 4.0, §4.2.1.2).
fn long_string_cards(name: &str, quoted: &str, with_comment: &dyn Fn(String) -> String) -> Vec<String> {
    const PIECE: usize = CARD - 10 - 2 - 1; // between the quotes, one place kept for '&'
    let mut cards = Vec::new();
    let mut rest = quoted;
    while !rest.is_empty() {
        let mut cut = rest.len().min(PIECE);
        // A doubled quote must not be torn: an even number of quotes must end the piece.
        if cut < rest.len() && rest[..cut].bytes().rev().take_while(|b| *b == b'\'').count() % 2 == 1 {
            cut -= 1;
        }
        let (piece, tail) = rest.split_at(cut);
        let start = if cards.is_empty() { format!("{name:<8}= ") } else { "CONTINUE  ".to_string() };
        let more = if tail.is_empty() { "" } else { "&" };
        let text = format!("{start}'{piece}{more}'");
        cards.push(if tail.is_empty() { with_comment(text) } else { card(&text) });
        rest = tail;
    }
    cards
}

/// Cards of free text under COMMENT, HISTORY or a blank keyword.
pub(super) fn text_cards(name: &str, text: &str) -> Vec<String> {
    let text = printable(text);
    let mut cards = Vec::new();
    let mut rest = text.as_str();
    loop {
        let (piece, tail) = rest.split_at(rest.len().min(CARD - 8));
        cards.push(card(&format!("{name:<8}{piece}")));
        rest = tail;
        if rest.is_empty() {
            return cards;
        }
    }
}
