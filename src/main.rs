//! The program: read the command line, do what it asks, say how it went.

use std::process::ExitCode;

fn main() -> ExitCode {
    let asked = match evensky::cli::Cli::from_command_line() {
        Ok(asked) => asked,
        Err(refusal) => return refusal.tell(),
    };
    let outcome = asked.perform();
    evensky::cli::conclude(outcome)
}
