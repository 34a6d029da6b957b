//! The rates a signal went through, as `fold` and `unfold` take them.

use super::output::{Stop, to_stdout, usage};
use super::values::positive;
use clap::Args;
use foldtrace::fold::Chain;
use foldtrace::report::ladder::WriteError;
use std::io::Write;
use std::process::ExitCode;

/// The rates a signal went through.
#[derive(Debug, Args)]
pub struct Rates {
    /// Sample rate of the file
    #[arg(long, value_name = "HZ", allow_negative_numbers = true, value_parser = positive)]
    pub rate: f64,
    /// An earlier rate the signal went through, first the converter's; may be repeated
    #[arg(long, value_name = "HZ", allow_negative_numbers = true, value_parser = positive)]
    pub stage: Vec<f64>,
}

impl Rates {
    /// The converter's rate first, the file's last.
    pub fn chain(&self) -> Result<Chain, Stop> {
        let mut all = self.stage.clone();
        if all.last() != Some(&self.rate) {
            all.push(self.rate);
        }
        Chain::new(all).map_err(usage)
    }
}

/// A ladder that asks for too much is wrong usage, not a failing stdout.
pub fn to_stdout_or_usage(
    write: impl FnOnce(&mut dyn Write) -> Result<(), WriteError>,
) -> Result<ExitCode, Stop> {
    let mut refused = None;
    to_stdout(|out| match write(out) {
        Ok(()) => Ok(()),
        Err(WriteError::Io(error)) => Err(error),
        Err(WriteError::Ladder(error)) => {
            refused = Some(usage(error));
            Ok(())
        }
    })?;
    refused.map_or(Ok(ExitCode::SUCCESS), Err)
}
