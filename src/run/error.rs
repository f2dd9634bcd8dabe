//! What can be wrong with a run file, told to the person who wrote it: file, line, key, what was found, what was
//! expected.

use std::fmt;
use std::path::{Path, PathBuf};
use thiserror::Error;

/// Why a run file could not be used.
#[derive(Debug, Error)]
pub enum RunError {
    /// The file cannot be read at all.
    #[error("{}: the run file cannot be read: {source}; expected a TOML file", path.display())]
    Read {
        /// The file.
        path: PathBuf,
        /// What the operating system said.
        source: std::io::Error,
    },
    /// The file is not text.
    #[error("{}:{line}: the run file is not UTF-8 text; expected a TOML file, saved as UTF-8", path.display())]
    NotText {
        /// The file.
        path: PathBuf,
        /// Line of the first byte that is not UTF-8.
        line: usize,
    },
    /// Everything found wrong with the content, in the order of the lines.
    #[error("{}", Lines(.0))]
    Complaints(Vec<Complaint>),
}

impl RunError {
    /// The complaints about the content; empty when the file could not be read.
    pub fn complaints(&self) -> &[Complaint] {
        match self {
            RunError::Complaints(complaints) => complaints,
            _ => &[],
        }
    }
}

impl From<Complaint> for RunError {
    fn from(complaint: Complaint) -> Self {
        RunError::Complaints(vec![complaint])
    }
}

struct Lines<'a>(&'a [Complaint]);

impl fmt::Display for Lines<'_> {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (index, complaint) in self.0.iter().enumerate() {
            write!(f, "{}{complaint}", if index == 0 { "" } else { "\n" })?;
        }
        Ok(())
    }
}

/// One thing wrong, and where.
#[derive(Debug, Clone, PartialEq, Error)]
pub struct Complaint {
    /// The run file, or a table that it names.
    pub path: PathBuf,
    /// Line in that file, counted from 1.
    pub line: usize,
    /// Key with its tables (`image.pixel_arcsec`), or the column of a CSV file; empty for errors of syntax.
    pub key: String,
    /// What is wrong.
    pub problem: Problem,
}

impl Complaint {
    /// A complaint about `key` on `line` of `path`.
    pub fn new(path: &Path, line: usize, key: impl Into<String>, problem: Problem) -> Self {
        Complaint { path: path.to_owned(), line, key: key.into(), problem }
    }
}

impl fmt::Display for Complaint {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}:{}: ", self.path.display(), self.line)?;
        if !self.key.is_empty() {
            write!(f, "{}: ", self.key)?;
        }
        self.problem.fmt(f)
    }
}

/// The kinds of thing that are wrong.
#[derive(Debug, Clone, PartialEq, Error)]
pub enum Problem {
    /// Not TOML.
    #[error("{0}; expected TOML (key = value, [table], [[list of tables]])")]
    Syntax(String),
    /// A key nobody reads.
    #[error("unknown key{}; expected one of: {}", suggestion(.nearest), .known.join(", "))]
    UnknownKey {
        /// The known key that looks most like it.
        nearest: Option<String>,
        /// All keys that can stand here.
        known: Vec<String>,
    },
    /// A key that must be there.
    #[error("missing; expected {expected}")]
    Missing {
        /// What it should hold.
        expected: String,
    },
    /// A value of the wrong type or outside its range.
    #[error("found {found}; expected {expected}")]
    Value {
        /// What stands there.
        found: String,
        /// What can stand there.
        expected: String,
    },
    /// A name that nothing has.
    #[error("no {what} is called \"{name}\"{}; {}", suggestion(.nearest), there_are(.what, .known))]
    UnknownName {
        /// What was looked for.
        what: &'static str,
        /// The name.
        name: String,
        /// The known name that looks most like it.
        nearest: Option<String>,
        /// All names there are.
        known: Vec<String>,
    },
    /// Something planned that this version cannot do.
    #[error("\"{found}\" is not yet available; this version has {available}")]
    NotYet {
        /// What was asked for.
        found: String,
        /// What can be had.
        available: String,
    },
    /// A file named in the run file that cannot be used.
    #[error("{}: {problem}; expected {expected}", file.display())]
    File {
        /// The file.
        file: PathBuf,
        /// What is wrong.
        problem: String,
        /// What it should be.
        expected: &'static str,
    },
    /// Stations that were given no beam.
    #[error(
        "no beam for station{} {} of {origin}; expected every station to have one: add a row to station_table, or an \
         entry `[[stations]]`, `match = \"{}\"`, `beam = {}`",
        if .stations.len() == 1 { "" } else { "s" }, .stations.join(", "), example(.stations), beam_choice(.beams)
    )]
    NoBeam {
        /// The stations.
        stations: Vec<String>,
        /// Where the visibilities came from.
        origin: String,
        /// The beams of the run file.
        beams: Vec<String>,
    },
    /// Two keys that contradict each other.
    #[error("{found}; expected {expected}")]
    Conflict {
        /// What they say together.
        found: String,
        /// What would fit.
        expected: String,
    },
}

impl Problem {
    /// An unknown key, with the nearest of those that are known.
    pub fn unknown_key(key: &str, known: &[&str]) -> Problem {
        let known: Vec<String> = known.iter().map(|&k| k.to_owned()).collect();
        Problem::UnknownKey { nearest: nearest(key, &known), known }
    }

    /// An unknown name, with the nearest of those that are known.
    pub fn unknown_name(what: &'static str, name: &str, known: Vec<String>) -> Problem {
        Problem::UnknownName { what, name: name.to_owned(), nearest: nearest(name, &known), known }
    }

    /// A value that cannot stand where it stands.
    pub fn value(found: impl Into<String>, expected: impl Into<String>) -> Problem {
        Problem::Value { found: found.into(), expected: expected.into() }
    }
}

/// The known word nearest to `word`, when it is near enough to have been meant.
fn nearest(word: &str, known: &[String]) -> Option<String> {
    let lower = word.to_lowercase();
    let near = |candidate: &str| {
        // a key that starts alike, lacking its unit (`pixel` for `pixel_arcsec`), is a likelier slip than its edit
        // distance says
        let shortened = lower.len() >= 4 && candidate.to_lowercase().starts_with(&lower);
        strsim::jaro_winkler(&lower, &candidate.to_lowercase()).max(if shortened { 0.95 } else { 0.0 })
    };
    known
        .iter()
        .map(|k| (near(k), k))
        .filter(|(score, _)| *score > 0.75)
        .max_by(|a, b| a.0.total_cmp(&b.0))
        .map(|(_, k)| k.clone())
}

fn suggestion(nearest: &Option<String>) -> String {
    nearest.as_ref().map_or_else(String::new, |name| format!(" (did you mean \"{name}\"?)"))
}

fn there_are(what: &str, known: &[String]) -> String {
    if known.is_empty() { format!("there is no {what} at all") } else { format!("there are: {}", known.join(", ")) }
}

/// A glob for the common beginning of the names, as an example.
fn example(stations: &[String]) -> String {
    match stations {
        [one] => one.clone(),
        [first, rest @ ..] => {
            let common = rest.iter().fold(first.as_str(), |common, name| {
                let same = common.char_indices().zip(name.chars()).take_while(|((_, a), b)| a == b);
                let end = same.last().map_or(0, |((at, a), _)| at + a.len_utf8());
                &common[..end]
            });
            format!("{common}*")
        }
        [] => "*".to_owned(),
    }
}

fn beam_choice(beams: &[String]) -> String {
    match beams.first() {
        Some(name) => format!("\"{name}\""),
        None => "\"NAME\"`, with a table `[beams.NAME]".to_owned(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_nearest_word_is_the_one_meant() {
        let known: Vec<String> = ["pixel_arcsec", "size_px", "centre_deg", "tolerance"].map(String::from).into();
        for (typed, meant) in [
            ("pixel_arcsecs", Some("pixel_arcsec")),
            ("pixel", Some("pixel_arcsec")),
            ("center_deg", Some("centre_deg")),
            ("size", Some("size_px")),
            ("Tolerance", Some("tolerance")),
            ("qqq", None),
        ] {
            assert_eq!(nearest(typed, &known).as_deref(), meant, "{typed}");
        }
    }

    #[test]
    fn the_example_glob_is_the_common_beginning() {
        let names = |list: &[&str]| list.iter().map(|&s| s.to_owned()).collect::<Vec<_>>();
        assert_eq!(example(&names(&["HF01", "HF02"])), "HF0*");
        assert_eq!(example(&names(&["HF01"])), "HF01");
        assert_eq!(example(&names(&["é1", "é2"])), "é*");
        assert_eq!(example(&names(&["a", "b"])), "*");
    }
}
