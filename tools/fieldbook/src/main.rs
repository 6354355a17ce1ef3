//! The program `fieldbook`: parses the command line and runs one subcommand.

use clap::Parser as _;
use fieldbook::cli::{COULD_NOT_RUN, Cli};
use std::process::ExitCode;

fn main() -> ExitCode {
    match Cli::parse().command.run() {
        Ok(code) => code,
        // Whoever read the output has seen enough.
        Err(error) if fieldbook::output::is_broken_pipe(&error) => ExitCode::SUCCESS,
        Err(error) => {
            eprintln!("fieldbook: {error:#}");
            ExitCode::from(COULD_NOT_RUN)
        }
    }
}
