//! What `image --continue` goes on from: the state of the deconvolution after its last pass, in the folder of products.

use super::CliError;
use super::progress::Progress;
use crate::imaging::deconvolve::State;
use crate::report::{RunRecord, write_whole};
use serde::{Deserialize, Serialize};
use sha2::{Digest, Sha256};
use std::io::Write;
use std::path::{Path, PathBuf};

/// Name of the file.
const NAME: &str = "deconvolution.state";
/// How it begins; what follows are the SHA-256 of the rest, and the rest.
const HEAD: &[u8] = b"evensky deconvolution state 1\n";

/// Where states are kept, and what they belong to.
pub(super) struct Keeper {
    path: PathBuf,
    key: [u8; 32],
    threads: usize,
    /// The state to go on from.
    found: Option<State>,
    /// That the disk takes no state has been said.
    told: bool,
}

#[derive(Serialize, Deserialize)]
struct Kept {
    key: [u8; 32],
    threads: usize,
    state: State,
}

/// Why a run cannot go on.
#[derive(Debug, thiserror::Error)]
enum NotContinued {
    #[error("{}: cannot be read ({source}); run again without --continue to start from the beginning", path.display())]
    Unreadable { path: PathBuf, source: std::io::Error },
    #[error(
        "{}: is damaged or of another version of evensky; run again without --continue to start from the beginning",
        path.display()
    )]
    Damaged { path: PathBuf },
    #[error(
        "{}: belongs to another run: the run file, a table, the data or the program have changed since; run again without \
         --continue to start from the beginning",
        path.display()
    )]
    Other { path: PathBuf },
}

impl Keeper {
    /// The keeper of a run whose inputs `record` tells, with the state to go on from if `wanted` and there.
    ///
    /// # Errors
    /// When a state is wanted and is there, but cannot be used.
    pub(super) fn new(
        folder: &Path,
        run_file: &Path,
        record: &RunRecord,
        wanted: bool,
        progress: &Progress,
    ) -> Result<Keeper, CliError> {
        let mut keeper = Keeper {
            path: folder.join(NAME),
            key: key(run_file, record),
            threads: record.threads,
            found: None,
            told: false,
        };
        match (wanted, keeper.path.exists()) {
            (true, true) => keeper.found = Some(keeper.read(progress)?),
            (true, false) => progress.note(&format!(
                "--continue: {} is not there, so the run had not ended a major cycle: it starts from the beginning",
                keeper.path.display()
            )),
            (false, true) => progress.note(&format!(
                "{} is of a run that did not end; --continue would have gone on from it, now it starts from the beginning",
                keeper.path.display()
            )),
            (false, false) => {}
        }
        Ok(keeper)
    }

    fn read(&self, progress: &Progress) -> Result<State, CliError> {
        let path = self.path.clone();
        let failed = |problem: NotContinued| CliError::Command(Box::new(problem));
        let bytes = std::fs::read(&path)
            .map_err(|source| failed(NotContinued::Unreadable { path: path.clone(), source }))?;
        let Some(kept) = decoded(&bytes) else { return Err(failed(NotContinued::Damaged { path })) };
        if kept.key != self.key {
            return Err(failed(NotContinued::Other { path }));
        }
        if kept.threads != self.threads {
            progress.warn(&format!(
                "the run that stopped had {} threads, this one has {}: the result is that of one never stopped up to \
                 rounding",
                kept.threads, self.threads
            ));
        }
        progress.note(&format!("going on after major cycle {}", kept.state.cycles()));
        Ok(kept.state)
    }

    /// The state to go on from, once.
    pub(super) fn take(&mut self) -> Option<State> {
        self.found.take()
    }

    /// Keeps a state in place of the one before. A disk that takes none is warned of; the run goes on.
    pub(super) fn keep(&mut self, state: &State, progress: &Progress) {
        let kept = Kept { key: self.key, threads: self.threads, state: state.clone() };
        let written = postcard::to_stdvec(&kept).map_err(|e| e.to_string()).and_then(|rest| {
            let sum: [u8; 32] = Sha256::digest(&rest).into();
            let parts = [HEAD, sum.as_slice(), rest.as_slice()];
            write_whole(&self.path, |file| parts.iter().try_for_each(|part| file.write_all(part)))
                .map_err(|e| e.to_string())
        });
        if let Err(problem) = written
            && !std::mem::replace(&mut self.told, true)
        {
            progress
                .warn(&format!("the state of the deconvolution is not kept, --continue would go back: {problem}"));
        }
    }

    /// Removes the state: the run has ended.
    pub(super) fn done(self) {
        // one that is left is refused or harmlessly gone on from
        let _ = std::fs::remove_file(&self.path);
    }
}

fn decoded(bytes: &[u8]) -> Option<Kept> {
    let (sum, rest) = bytes.strip_prefix(HEAD)?.split_at_checked(32)?;
    let right: [u8; 32] = Sha256::digest(rest).into();
    if sum != right {
        return None;
    }
    postcard::from_bytes(rest).ok()
}

/// What a state belongs to: program, run file (its tables, not its layout or place) and the content of every other file.
fn key(run_file: &Path, record: &RunRecord) -> [u8; 32] {
    let mut digest = Sha256::new();
    digest.update(&record.versions.evensky);
    // it was read and found sound a moment ago
    let text = std::fs::read_to_string(run_file).unwrap_or_default();
    let table = text.parse::<toml::Table>().map_or(text, |table| table.to_string());
    digest.update(Sha256::digest(table));
    for input in record.inputs.iter().filter(|input| input.role != "run file") {
        digest.update(&input.sha256);
    }
    digest.finalize().into()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_damaged_state_is_not_read() {
        let rest = b"anything".to_vec();
        let mut bytes = HEAD.to_vec();
        bytes.extend(Sha256::digest(&rest));
        bytes.extend(&rest);
        // the sum is right, what it sums is no state
        assert!(decoded(&bytes).is_none());
        bytes.truncate(HEAD.len() + 20);
        assert!(decoded(&bytes).is_none());
        assert!(decoded(b"").is_none());
    }
}
