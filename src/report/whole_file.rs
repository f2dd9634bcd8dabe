//! Files that appear whole or not at all: written beside their place under a passing name, then renamed.

use serde::Serialize;
use std::fs::File;
use std::io::{BufWriter, Write};
use std::path::{Path, PathBuf};
use thiserror::Error;

/// Why a product could not be written. Whatever stood at the path before still stands there.
#[derive(Debug, Error)]
pub enum WriteError {
    /// The folder refused a new file.
    #[error(
        "{}: cannot be written, its folder takes no new file ({source}); check that the folder exists, is writable \
         and has space",
        path.display()
    )]
    Create {
        /// The product.
        path: PathBuf,
        /// What the system said.
        source: std::io::Error,
    },
    /// Writing stopped on the way.
    #[error("{}: writing stopped ({source}); nothing was left behind, check the space on the disk", path.display())]
    Write {
        /// The product.
        path: PathBuf,
        /// What the system said.
        source: std::io::Error,
    },
    /// The finished file could not take its name.
    #[error(
        "{}: the finished file could not take this name ({source}); is a folder of that name in the way?",
        path.display()
    )]
    Rename {
        /// The product.
        path: PathBuf,
        /// What the system said.
        source: std::io::Error,
    },
    /// A record that JSON cannot hold.
    #[error("{}: the record could not be put in JSON ({source}); this is a defect of evensky", path.display())]
    Json {
        /// The product.
        path: PathBuf,
        /// What the serialiser said.
        source: serde_json::Error,
    },
}

/// Writes a file through `fill` and gives it its name only when all of it is on the disk.
///
/// # Errors
/// When the folder takes no file, `fill` or the disk fails, or the name is taken by a folder. Nothing is left behind.
pub fn write_whole(
    path: &Path,
    fill: impl FnOnce(&mut BufWriter<&File>) -> std::io::Result<()>,
) -> Result<(), WriteError> {
    let folder = match path.parent() {
        Some(parent) if !parent.as_os_str().is_empty() => parent,
        _ => Path::new("."),
    };
    let create = |source| WriteError::Create { path: path.to_owned(), source };
    let mut builder = tempfile::Builder::new();
    builder.prefix(".unfinished-");
    // A temporary file is private by default; a product is as readable as any file the user makes.
    #[cfg(unix)]
    builder.permissions(std::os::unix::fs::PermissionsExt::from_mode(0o666));
    let temporary = builder.tempfile_in(folder).map_err(create)?;
    let write = |source| WriteError::Write { path: path.to_owned(), source };
    let mut buffered = BufWriter::with_capacity(1 << 18, temporary.as_file());
    fill(&mut buffered).map_err(write)?;
    buffered.flush().map_err(write)?;
    drop(buffered);
    temporary.as_file().sync_all().map_err(write)?;
    temporary.persist(path).map_err(|e| WriteError::Rename { path: path.to_owned(), source: e.error })?;
    Ok(())
}

/// Writes anything serialisable as indented JSON with a closing newline.
///
/// # Errors
/// As [`write_whole`], and when the value cannot be put in JSON.
pub fn write_json(path: &Path, value: &impl Serialize) -> Result<(), WriteError> {
    let text =
        serde_json::to_string_pretty(value).map_err(|source| WriteError::Json { path: path.to_owned(), source })?;
    write_whole(path, |file| file.write_all(text.as_bytes()).and_then(|()| file.write_all(b"\n")))
}
