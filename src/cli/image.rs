//! `evensky image RUN.toml`.

use super::{CliError, Common};
use crate::beam;
use crate::run::RunFile;
use clap::Args;
use std::path::PathBuf;

/// Arguments of `image`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// The run file (TOML)
    #[arg(value_name = "RUN.toml")]
    pub run: PathBuf,
}

/// Makes the mosaic.
///
/// # Errors
/// When it cannot be made.
pub fn run(arguments: &Arguments, _common: &Common) -> Result<String, CliError> {
    let run = RunFile::read(&arguments.run)?;
    run.image()?;
    run.pointings()?;
    beam::patterns(&run)?;
    Err(CliError::Command("imaging is written on another branch".into()))
}
