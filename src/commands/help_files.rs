//! `help-files`: completions for shells and pages for `man`.

use super::Cli;
use super::output::{SOME_FAILED, Stop, shown};
use clap::{Args, CommandFactory};
use clap_complete::Shell;
use std::io;
use std::path::PathBuf;
use std::process::ExitCode;

/// Shown after the options.
pub const HELP: &str = "\
Writes foldtrace.bash, _foldtrace (zsh), foldtrace.fish, foldtrace.elv and _foldtrace.ps1, and a \
manual page for foldtrace and each of its commands.

Example:
  foldtrace help-files target/help-files";

/// Options of `help-files`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// Folder to write into; made if it is not there
    #[arg(value_name = "DIR")]
    pub folder: PathBuf,
}

/// Runs the command.
pub fn run(arguments: &Arguments) -> Result<ExitCode, Stop> {
    let folder = &arguments.folder;
    write(arguments).map_err(|e| Stop(SOME_FAILED, format!("{}: {e}", shown(folder))))?;
    Ok(ExitCode::SUCCESS)
}

fn write(arguments: &Arguments) -> io::Result<()> {
    let folder = &arguments.folder;
    std::fs::create_dir_all(folder)?;
    let mut command = Cli::command().disable_help_subcommand(true);
    for shell in [
        Shell::Bash,
        Shell::Zsh,
        Shell::Fish,
        Shell::Elvish,
        Shell::PowerShell,
    ] {
        clap_complete::generate_to(shell, &mut command, "foldtrace", folder)?;
    }
    clap_mangen::generate_to(command, folder)
}
