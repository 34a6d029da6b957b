//! `sources`: every line with its frequency and tolerance.

use super::output::{Stop, to_stdout};
use super::site::load_site;
use clap::Args;
use foldtrace::report::sources_table;
use std::path::PathBuf;
use std::process::ExitCode;

/// Shown after the options.
pub const HELP: &str = "Examples:\n  foldtrace sources                (the built-in list)\n  foldtrace sources --site sample-data/orrowmere.toml";

/// Options of `sources`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// A site file (TOML) or a list (CSV); without it, the built-in list
    #[arg(long, value_name = "FILE")]
    pub site: Option<PathBuf>,
}

/// Runs the command.
pub fn run(arguments: &Arguments) -> Result<ExitCode, Stop> {
    let (site, _) = load_site(arguments.site.as_deref())?;
    to_stdout(|out| sources_table::write(&site, out))?;
    Ok(ExitCode::SUCCESS)
}
