//! What can be wrong with a FITS file, or with writing one.

use std::path::{Path, PathBuf};
use thiserror::Error;

/// A problem with a named file.
#[derive(Debug, Error)]
#[error("{}: {problem}", path.display())]
pub struct FitsError {
    /// The file.
    pub path: PathBuf,
    /// What is wrong.
    #[source]
    pub problem: Box<FitsProblem>,
}

/// What is wrong, apart from where. `hdu` names the header and data unit as a person would count it.
#[derive(Debug, Error)]
pub enum FitsProblem {
    /// The operating system refused.
    #[error("cannot {action}: {source}")]
    Io {
        /// What was being done.
        action: String,
        /// The system's reason.
        source: std::io::Error,
    },
    /// A directory, a pipe or a device.
    #[error("is not an ordinary file; expected a FITS file")]
    NotAFile,
    /// No bytes at all.
    #[error("the file is empty; expected a FITS file")]
    Empty,
    /// Compressed files are not opened: their true size is not known beforehand.
    #[error("the file is {kind}-compressed; decompress it first")]
    Compressed {
        /// The kind of compression recognised.
        kind: &'static str,
    },
    /// The first card is not that of a FITS file.
    #[error("not a FITS file: it begins with {found:?}; expected `SIMPLE  =`")]
    NotFits {
        /// The first bytes.
        found: String,
    },
    /// No END card before the end of the file or the cap.
    #[error("{hdu}: no END card within {blocks} blocks of 2880 bytes; {reason}")]
    HeaderUnfinished {
        /// Which header.
        hdu: String,
        /// Blocks looked at.
        blocks: u64,
        /// Whether the file or our cap ended.
        reason: &'static str,
    },
    /// A card whose keyword field holds bytes that no keyword may hold.
    #[error("{hdu}: card {card} has the keyword field {found:?}; expected printable ASCII")]
    BadCard {
        /// Which header.
        hdu: String,
        /// Card number, from 1.
        card: usize,
        /// What stands there.
        found: String,
    },
    /// A keyword that must be there is not.
    #[error("{hdu}: keyword {keyword} is missing; expected {expected}")]
    Missing {
        /// Which header.
        hdu: String,
        /// The keyword.
        keyword: String,
        /// What it should hold.
        expected: String,
    },
    /// A keyword holds something else than it should.
    #[error("{hdu}: {keyword} = {found}; expected {expected}")]
    BadValue {
        /// Which header.
        hdu: String,
        /// The keyword.
        keyword: String,
        /// What it holds.
        found: String,
        /// What it should hold.
        expected: String,
    },
    /// The header declares more data than the file has.
    #[error(
        "{hdu}: the header declares {declared} bytes of data from byte {start}, but the file ends at byte {length}; \
         the file is cut short or the header is damaged"
    )]
    Truncated {
        /// Which header.
        hdu: String,
        /// Bytes declared.
        declared: u64,
        /// Where the data begin.
        start: u64,
        /// Length of the file.
        length: u64,
    },
    /// Bytes between two headers that neither claims.
    #[error(
        "{hdu}: its data end at byte {end}, but the next header begins at byte {next}: the sizes in the header \
         (NAXISn, PCOUNT, GCOUNT) do not describe the data"
    )]
    Gap {
        /// The header whose data end too early.
        hdu: String,
        /// Where they end, padded.
        end: u64,
        /// Where the next header was found.
        next: u64,
    },
    /// The file became shorter while it was read.
    #[error("bytes {start} to {end} could not be read: {source}")]
    Read {
        /// First byte wanted.
        start: u64,
        /// One past the last byte wanted.
        end: u64,
        /// The system's reason.
        source: std::io::Error,
    },
    /// A table column that is missing or of another kind than needed.
    #[error("{hdu}: column {column}: found {found}; expected {expected}")]
    Column {
        /// Which table.
        hdu: String,
        /// The column.
        column: String,
        /// What it is.
        found: String,
        /// What it should be.
        expected: String,
    },
    /// The caller asked the writer for something that FITS cannot hold, or that contradicts itself.
    #[error("cannot write {what}: found {found}; expected {expected}")]
    Unwritable {
        /// The keyword, column or image.
        what: String,
        /// What was handed in.
        found: String,
        /// What was needed.
        expected: String,
    },
}

impl FitsProblem {
    /// This problem, in that file.
    pub fn at(self, path: &Path) -> FitsError {
        FitsError { path: path.to_path_buf(), problem: Box::new(self) }
    }
}
