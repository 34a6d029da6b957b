//! `fold`: where analog lines land.

use super::output::Stop;
use super::rates::{Rates, to_stdout_or_usage};
use super::values::not_negative;
use clap::Args;
use foldtrace::report::ladder;
use foldtrace::units::TrueHz;
use std::process::ExitCode;

/// Shown after the options.
pub const HELP: &str = "Examples:\n  foldtrace fold 4933.53 --rate 8000               (a line of the sample data's drive)\n  foldtrace fold 30000 --rate 8000 --stage 48000   (recorded at 48000 Hz, then reduced to 8000 Hz)";

/// Options of `fold`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// Analog frequencies
    #[arg(value_name = "HZ", required = true, allow_negative_numbers = true, value_parser = not_negative)]
    pub hz: Vec<f64>,
    #[command(flatten)]
    pub rates: Rates,
}

/// Runs the command.
pub fn run(arguments: &Arguments) -> Result<ExitCode, Stop> {
    let chain = arguments.rates.chain()?;
    let lines: Vec<TrueHz> = arguments.hz.iter().map(|&f| TrueHz(f)).collect();
    to_stdout_or_usage(|out| ladder::write_fold(&lines, &chain, out))
}
