//! The foldtrace command line: parse, call the library, print.
#![cfg_attr(test, allow(clippy::unwrap_used, clippy::expect_used, clippy::panic))]

mod cli;
mod run;

use clap::Parser;
use clap::error::ErrorKind;
use std::process::ExitCode;

fn main() -> ExitCode {
    match cli::Cli::try_parse() {
        Ok(arguments) => run::run(arguments.command),
        Err(error) => match error.kind() {
            ErrorKind::DisplayHelp | ErrorKind::DisplayVersion => {
                // Nothing is left to tell anyone if stdout is closed.
                let _ = error.print();
                ExitCode::SUCCESS
            }
            ErrorKind::DisplayHelpOnMissingArgumentOrSubcommand => {
                run::complain(
                    &"say what to do: triage, fold, unfold or sources (see foldtrace --help)",
                );
                ExitCode::from(run::WRONG_USAGE)
            }
            _ => {
                run::complain(&run::one_line(&error));
                ExitCode::from(run::WRONG_USAGE)
            }
        },
    }
}
