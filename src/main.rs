//! The foldtrace command line: parse, call the library, print.
#![cfg_attr(test, allow(clippy::unwrap_used, clippy::expect_used, clippy::panic))]

mod commands;

use clap::Parser;
use clap::error::ErrorKind;
use std::process::ExitCode;

fn main() -> ExitCode {
    match commands::Cli::try_parse() {
        Ok(arguments) => commands::run(arguments.command),
        Err(error) => match error.kind() {
            ErrorKind::DisplayHelp | ErrorKind::DisplayVersion => {
                // Nothing is left to tell anyone if stdout is closed.
                let _ = error.print();
                ExitCode::SUCCESS
            }
            ErrorKind::DisplayHelpOnMissingArgumentOrSubcommand => {
                commands::complain(
                    &"say what to do: triage, scan, reconcile, plan, predict, inspect, fold, unfold or sources (see foldtrace --help)",
                );
                ExitCode::from(commands::WRONG_USAGE)
            }
            _ => {
                commands::complain(&commands::one_line(&error));
                ExitCode::from(commands::WRONG_USAGE)
            }
        },
    }
}
