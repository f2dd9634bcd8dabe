//! The command line: arguments, progress, one file a command.
//!
//! A command takes its arguments and the [`Common`] flags and returns what is to be said at the end, prose or JSON;
//! [`conclude`] writes it and turns failures into exit statuses:
//!
//! - 0: done (also when whoever read the output has gone away)
//! - 1: could not be done, the reason is on standard error
//! - 2: wrong usage or run file
//!
//! Products and conclusions go to files and standard output; progress, warnings and reasons to standard error.

pub mod combine;
pub mod describe;
pub mod image;
mod image_deconvolve;
mod image_files;
mod image_measure;
mod image_state;
pub mod inputs;
pub mod progress;
pub mod simulate;

use crate::observation::ObservationError;
use crate::response::ResponseError;
use crate::run::RunError;
use clap::{Args, Parser, Subcommand};
use progress::Progress;
use std::io::Write;
use std::path::{Path, PathBuf};
use std::process::ExitCode;
use thiserror::Error;

const HELP_END: &str = "\
Exit status: 0 done; 1 could not be done, the reason is on standard error; 2 wrong usage or run file.";

/// Primary-beam-corrected mosaics from interferometer visibilities, with weight maps, to a stated tolerance.
#[derive(Debug, Parser)]
#[command(name = "evensky", version, about, after_help = HELP_END, arg_required_else_help = true)]
pub struct Cli {
    #[command(subcommand)]
    command: Command,
    #[command(flatten)]
    common: Common,
}

/// What can be asked for.
#[derive(Debug, Subcommand)]
enum Command {
    /// Make the mosaic a run file describes: image, weight map, point spread function, report of accuracy
    Image(image::Arguments),
    /// Combine already-made images of single fields into one mosaic, with its weight map
    Combine(combine::Arguments),
    /// Make the invented observation a run file describes, and write it as a visibility file
    Simulate(simulate::Arguments),
    /// Say what visibility files hold: pointings, stations, channels, baselines, a fitting pixel and image size
    Describe(describe::Arguments),
}

/// Flags of every command.
#[derive(Debug, Clone, Default, Args)]
pub struct Common {
    /// Folder for what is written; it is made if it is not there [default: named after the run file, ending in -out]
    #[arg(long, value_name = "DIR", global = true, display_order = 100)]
    pub out: Option<PathBuf>,
    /// Number of threads [default: as many as the machine has]
    #[arg(long, value_name = "N", global = true, display_order = 101, value_parser = clap::value_parser!(u16).range(1..=4096))]
    pub threads: Option<u16>,
    /// No progress on standard error; warnings and errors still show
    #[arg(long, global = true, display_order = 102)]
    pub quiet: bool,
    /// One JSON object on standard output in place of prose, and no progress
    #[arg(long, global = true, display_order = 103)]
    pub json: bool,
}

impl Common {
    /// The folder for the products of a run file, made if it is not there: `--out`, or `NAME-out` in the current folder.
    ///
    /// # Errors
    /// When it cannot be made.
    pub fn out_folder(&self, run_file: &Path) -> Result<PathBuf, CliError> {
        let folder = self.out.clone().unwrap_or_else(|| {
            let stem = run_file.file_stem().unwrap_or(run_file.as_os_str()).to_string_lossy();
            PathBuf::from(format!("{stem}-out"))
        });
        std::fs::create_dir_all(&folder).map_err(|source| CliError::Folder { path: folder.clone(), source })?;
        Ok(folder)
    }

    /// Progress as these flags and the terminal want it.
    pub fn progress(&self) -> Progress {
        Progress::new(self.quiet || self.json)
    }

    /// The conclusion of a command: `record` as JSON when that was asked for, else `prose`.
    ///
    /// # Errors
    /// When the record cannot be put in JSON.
    pub fn conclusion(
        &self,
        record: &impl serde::Serialize,
        prose: impl FnOnce() -> String,
    ) -> Result<String, CliError> {
        if self.json { Ok(serde_json::to_string_pretty(record)? + "\n") } else { Ok(prose()) }
    }
}

/// Why a command failed.
#[derive(Debug, Error)]
pub enum CliError {
    /// The run file is wrong.
    #[error(transparent)]
    Run(#[from] RunError),
    /// Flags that do not go together, beyond what the parser knows.
    #[error("{0}")]
    Usage(&'static str),
    /// Visibilities cannot be had.
    #[error(transparent)]
    Observation(#[from] ObservationError),
    /// A response cannot be made or applied.
    #[error(transparent)]
    Response(#[from] ResponseError),
    /// The output folder cannot be made or takes no files.
    #[error("{}: the output folder cannot be made or written in ({source}); expected a folder, or a place for one (--out DIR)", path.display())]
    Folder {
        /// The folder.
        path: PathBuf,
        /// What the operating system said.
        source: std::io::Error,
    },
    /// The threads cannot be had.
    #[error("{threads} threads cannot be started ({source}); expected fewer (--threads N)")]
    Threads {
        /// How many were asked for.
        threads: u16,
        /// What the thread pool said.
        source: rayon::ThreadPoolBuildError,
    },
    /// The JSON object cannot be made.
    #[error("the JSON object cannot be made: {0}; this is a fault of evensky")]
    Json(#[from] serde_json::Error),
    /// Standard output cannot be written.
    #[error("standard output cannot be written: {0}")]
    Output(std::io::Error),
    /// A failure that only one command knows, told in full by its own error.
    #[error(transparent)]
    Command(Box<dyn std::error::Error + Send + Sync>),
}

impl CliError {
    /// The exit status.
    fn status(&self) -> u8 {
        match self {
            CliError::Run(_) | CliError::Usage(_) => 2,
            _ => 1,
        }
    }
}

/// A command line that asks for nothing that can be done: wrong usage, or only for help.
#[derive(Debug)]
pub struct Refusal(clap::Error);

impl Refusal {
    /// Tells the person, and gives the exit status.
    pub fn tell(&self) -> ExitCode {
        // whoever does not listen to the help has no need of an error about it
        let _ = self.0.print();
        if self.0.use_stderr() { ExitCode::from(2) } else { ExitCode::SUCCESS }
    }
}

impl Cli {
    /// Reads the command line of this process.
    ///
    /// # Errors
    /// A [`Refusal`] when it is wrong, or asks for help or the version.
    pub fn from_command_line() -> Result<Cli, Refusal> {
        Cli::try_parse().map_err(Refusal)
    }

    /// Does what was asked, and returns what to say.
    ///
    /// # Errors
    /// When it cannot be done.
    pub fn perform(&self) -> Result<String, CliError> {
        if let Some(threads) = self.common.threads {
            rayon::ThreadPoolBuilder::new()
                .num_threads(usize::from(threads))
                .build_global()
                .map_err(|source| CliError::Threads { threads, source })?;
        }
        match &self.command {
            Command::Image(arguments) => image::run(arguments, &self.common),
            Command::Combine(arguments) => combine::run(arguments, &self.common),
            Command::Simulate(arguments) => simulate::run(arguments, &self.common),
            Command::Describe(arguments) => describe::run(arguments, &self.common),
        }
    }
}

/// Says how it went, and gives the exit status.
pub fn conclude(outcome: Result<String, CliError>) -> ExitCode {
    let said = outcome.and_then(|text| match write_out(&text) {
        // the reader of a pipe may leave when it has seen enough
        Err(error) if error.kind() == std::io::ErrorKind::BrokenPipe => Ok(()),
        written => written.map_err(CliError::Output),
    });
    match said {
        Ok(()) => ExitCode::SUCCESS,
        Err(error) => {
            let _ = writeln!(std::io::stderr(), "evensky: {error}");
            ExitCode::from(error.status())
        }
    }
}

fn write_out(text: &str) -> std::io::Result<()> {
    let mut out = std::io::stdout().lock();
    out.write_all(text.as_bytes())?;
    out.flush()
}

#[cfg(test)]
mod tests {
    use super::*;
    use clap::CommandFactory;

    /// Walks every flag and argument of every command: clap's own consistency check, and each has a text for people.
    #[test]
    fn every_argument_is_consistent_and_explained() {
        Cli::command().debug_assert();
        let mut root = Cli::command();
        root.build();
        let mut seen = 0;
        for command in std::iter::once(&root).chain(root.get_subcommands()) {
            assert!(command.get_about().is_some(), "{} says nothing about itself", command.get_name());
            for argument in command.get_arguments() {
                let help = argument.get_help().map(ToString::to_string).unwrap_or_default();
                assert!(help.len() > 4, "{} {} is not explained", command.get_name(), argument.get_id());
                seen += 1;
            }
        }
        let names: Vec<&str> = root.get_subcommands().map(clap::Command::get_name).collect();
        assert_eq!(names, ["image", "combine", "simulate", "describe", "help"]);
        assert!(seen >= 4 * 5, "only {seen} arguments seen: common flags are missing somewhere");
    }

    #[test]
    fn common_flags_stand_before_or_after_the_command() {
        for line in [["evensky", "--json", "describe", "a"], ["evensky", "describe", "a", "--json"]] {
            assert!(Cli::try_parse_from(line).unwrap().common.json);
        }
        for wrong in ["0", "-1", "many", "5000"] {
            assert!(Cli::try_parse_from(["evensky", "describe", "a", "--threads", wrong]).is_err(), "{wrong}");
        }
    }
}
