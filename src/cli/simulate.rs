//! `evensky simulate RUN.toml`.

use super::{CliError, Common};
use crate::run::RunFile;
use clap::Args;
use std::path::PathBuf;

/// Arguments of `simulate`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// The run file (TOML)
    #[arg(value_name = "RUN.toml")]
    pub run: PathBuf,
}

/// Makes the observation.
///
/// # Errors
/// When it cannot be made.
pub fn run(arguments: &Arguments, _common: &Common) -> Result<String, CliError> {
    let run = RunFile::read(&arguments.run)?;
    run.simulate()?.layout()?;
    Err(CliError::Command("simulation is written on another branch".into()))
}
