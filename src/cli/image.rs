//! `evensky image RUN.toml`.

use super::inputs::open_pointings;
use super::{CliError, Common};
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
pub fn run(arguments: &Arguments, common: &Common) -> Result<String, CliError> {
    let run = RunFile::read(&arguments.run)?;
    run.image()?;
    let inputs = open_pointings(&run, &common.progress())?;
    common.out_folder(&arguments.run)?;
    Err(CliError::Command(format!("{} pointings: imaging is written on another branch", inputs.len()).into()))
}
