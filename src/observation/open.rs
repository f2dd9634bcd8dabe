//! The one door to visibility files.

use super::{BlockSource, ObservationError, idi_reader, random_groups};
use crate::fits::{FitsFile, HduKind};
use std::path::Path;

/// Which sources of a file are wanted.
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub enum Selection {
    /// Each source is a pointing.
    #[default]
    All,
    /// Only the sources of these names.
    Names(Vec<String>),
}

impl Selection {
    /// Only the source of this name.
    pub fn named(name: impl Into<String>) -> Selection {
        Selection::Names(vec![name.into()])
    }
}

/// How to read.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct ReadOptions {
    /// Memory of a block and what is needed to read it, bytes; a block holds one row at least.
    pub block_bytes: usize,
}

impl Default for ReadOptions {
    fn default() -> Self {
        // Arrays of this size are given back and taken again without new pages from the system; of 64 MiB they are not.
        ReadOptions { block_bytes: 16 << 20 }
    }
}

/// Opens a visibility file, random groups or FITS-IDI: one source per pointing (and per frequency set-up, where a file
/// has several), in the order in which they first appear.
///
/// # Errors
/// When the file is damaged or holds something else, a name is not among its sources, or nothing in it can be used.
pub fn open(path: impl AsRef<Path>, selection: &Selection) -> Result<Vec<Box<dyn BlockSource>>, ObservationError> {
    open_with(path, selection, ReadOptions::default())
}

/// As [`open`], in blocks of a stated size.
///
/// # Errors
/// As [`open`].
pub fn open_with(
    path: impl AsRef<Path>,
    selection: &Selection,
    options: ReadOptions,
) -> Result<Vec<Box<dyn BlockSource>>, ObservationError> {
    let path = path.as_ref();
    let file = FitsFile::open(path)?;
    let hdus = file.hdus();
    if hdus[0].kind == HduKind::Groups {
        return random_groups::open(file, selection, options);
    }
    if hdus.iter().any(|hdu| hdu.name() == "UV_DATA") {
        return idi_reader::open(file, selection, options);
    }
    let tables: Vec<String> = hdus.iter().map(|hdu| hdu.name()).filter(|name| !name.is_empty()).collect();
    let problem = if tables.is_empty() {
        "no random groups and no tables".to_string()
    } else {
        format!("no random groups, and among the tables ({}) no UV_DATA", tables.join(", "))
    };
    Err(content(path, problem, "visibilities: random groups or FITS-IDI tables"))
}

/// The error for a good FITS file with unsuitable content.
pub(super) fn content(path: &Path, problem: impl Into<String>, expected: impl Into<String>) -> ObservationError {
    ObservationError::Content { path: path.to_path_buf(), problem: problem.into(), expected: expected.into() }
}
