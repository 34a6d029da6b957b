//! `unfold`: the ladder of analog candidates.

use super::output::{Stop, usage};
use super::rates::{Rates, to_stdout_or_usage};
use super::values::{not_negative, positive};
use clap::Args;
use foldtrace::report::ladder;
use foldtrace::units::{SeenHz, TrueHz};
use std::process::ExitCode;

/// Shown after the options.
pub const HELP: &str =
    "Example:\n  foldtrace unfold 3066.46 --rate 8000 --up-to 20000   (tone 33 of the sample data)";

/// Options of `unfold`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// Seen frequencies, up to half the sample rate
    #[arg(value_name = "HZ", required = true, allow_negative_numbers = true, value_parser = not_negative)]
    pub hz: Vec<f64>,
    #[command(flatten)]
    pub rates: Rates,
    /// Highest analog frequency listed
    #[arg(long, value_name = "HZ", allow_negative_numbers = true, value_parser = positive)]
    pub up_to: f64,
}

/// Runs the command.
pub fn run(arguments: &Arguments) -> Result<ExitCode, Stop> {
    let chain = arguments.rates.chain()?;
    let half = arguments.rates.rate / 2.0;
    if let Some(f) = arguments.hz.iter().find(|&&f| f > half) {
        return Err(usage(format!(
            "a tone cannot be seen at {f} Hz: half of --rate is {half} Hz"
        )));
    }
    let seen: Vec<SeenHz> = arguments.hz.iter().map(|&f| SeenHz(f)).collect();
    to_stdout_or_usage(|out| ladder::write_unfold(&seen, &chain, TrueHz(arguments.up_to), out))
}
