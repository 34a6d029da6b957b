//! Arguments only: every option typed, nothing looked up by string later.

use clap::{Args, Parser, Subcommand};
use std::num::NonZeroUsize;
use std::path::PathBuf;

/// Traces a tone in a sampled recording back to the physical sources that could
/// have made it, whether it is real where it shows or has folded down from above
/// half the sample rate.
#[derive(Debug, Parser)]
#[command(version, max_term_width = 100)]
pub struct Cli {
    /// What to do
    #[command(subcommand)]
    pub command: Command,
}

/// The commands.
#[derive(Debug, Subcommand)]
pub enum Command {
    /// Find the tones of recordings and rank what could have made each
    #[command(after_help = TRIAGE_HELP)]
    Triage(Triage),
    /// Where analog frequencies land once sampled
    #[command(
        after_help = "Example:\n  foldtrace fold 100 1200 --rate 80\n  foldtrace fold 30000 --rate 8000 --stage 48000   (recorded at 48000 Hz, then reduced to 8000 Hz)"
    )]
    Fold(Fold),
    /// Every analog frequency that would be seen at a given place
    #[command(after_help = "Example:\n  foldtrace unfold 20 --rate 80 --up-to 500")]
    Unfold(Unfold),
    /// Every line of the listed sources with its frequency and tolerance
    #[command(
        after_help = "Example:\n  foldtrace sources --site sample-data/orrowmere.toml\n  foldtrace sources                (the built-in list)"
    )]
    Sources(Sources),
}

const TRIAGE_HELP: &str = "\
Reading the table: `seen Hz` is where the tone shows in the file. Each suspect below it is a line of a \
source, at the true frequency it would have in the analog world. Zone 1 is below half the sample rate, \
where things are as they seem; in any higher zone the tone has folded. `by luck` counts the listed lines \
expected as close by pure chance: a near match with 3 by luck is no match.

Example:
  foldtrace triage sample-data/recordings/skid-8000.wav --site sample-data/orrowmere.toml

Exit: 0 done, 1 some input could not be read, 2 wrong usage or site file.";

/// Options of `triage`.
#[derive(Debug, Args)]
pub struct Triage {
    /// Recordings: WAV, or CSV logs
    #[arg(value_name = "REC", required = true)]
    pub recordings: Vec<PathBuf>,
    /// What is known of the place: a site file (TOML) or a list (CSV: name,hz,tolerance,orders);
    /// without it, a built-in list of common sources
    #[arg(long, value_name = "FILE")]
    pub site: Option<PathBuf>,
    /// Sample rate, where the file does not tell it or tells it wrong
    #[arg(long, value_name = "HZ", allow_negative_numbers = true, value_parser = positive)]
    pub rate: Option<f64>,
    /// One channel, counted from 1, or all of them merged
    #[arg(long, value_name = "N|all", default_value = "all", value_parser = channel)]
    pub channel: Channel,
    /// Write the suspect list as CSV; `-` writes it to stdout in place of the table
    #[arg(long, value_name = "FILE")]
    pub suspects: Option<PathBuf>,
    /// Write everything as JSON; `-` writes it to stdout in place of the table
    #[arg(long, value_name = "FILE")]
    pub json: Option<PathBuf>,
    /// Suspects listed per tone
    #[arg(long, value_name = "N", default_value = "5", value_parser = how_many)]
    pub top: NonZeroUsize,
}

/// Options of `fold`.
#[derive(Debug, Args)]
pub struct Fold {
    /// Analog frequencies
    #[arg(value_name = "HZ", required = true, allow_negative_numbers = true, value_parser = not_negative)]
    pub hz: Vec<f64>,
    #[command(flatten)]
    pub rates: Rates,
}

/// Options of `unfold`.
#[derive(Debug, Args)]
pub struct Unfold {
    /// Seen frequencies, up to half the sample rate
    #[arg(value_name = "HZ", required = true, allow_negative_numbers = true, value_parser = not_negative)]
    pub hz: Vec<f64>,
    #[command(flatten)]
    pub rates: Rates,
    /// Highest analog frequency listed
    #[arg(long, value_name = "HZ", allow_negative_numbers = true, value_parser = positive)]
    pub up_to: f64,
}

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

/// Options of `sources`.
#[derive(Debug, Args)]
pub struct Sources {
    /// A site file (TOML) or a list (CSV); without it, the built-in list
    #[arg(long, value_name = "FILE")]
    pub site: Option<PathBuf>,
}

/// Which channels to use.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Channel {
    /// All, tones merged across them.
    All,
    /// One, counted from 1.
    One(NonZeroUsize),
}

fn channel(text: &str) -> Result<Channel, String> {
    if text == "all" {
        return Ok(Channel::All);
    }
    text.parse()
        .map(Channel::One)
        .map_err(|_| "give a channel number from 1, or `all`".to_owned())
}

/// Beyond any signal there is; keeps zones within what a number can count.
const HIGHEST_HZ: f64 = 1e12;
/// One sample in twelve days.
const LOWEST_RATE_HZ: f64 = 1e-6;

fn finite(text: &str) -> Result<f64, String> {
    match text.parse::<f64>() {
        Ok(v) if v.is_finite() && v <= HIGHEST_HZ => Ok(v),
        Ok(v) if v.is_finite() => Err(format!("must be at most {HIGHEST_HZ:e} Hz")),
        _ => Err("give a number in Hz, such as 8000 or 0.5".into()),
    }
}

fn positive(text: &str) -> Result<f64, String> {
    match finite(text)? {
        v if v >= LOWEST_RATE_HZ => Ok(v),
        v if v > 0.0 => Err(format!("must be at least {LOWEST_RATE_HZ:e} Hz")),
        _ => Err("must be above 0".into()),
    }
}

fn how_many(text: &str) -> Result<NonZeroUsize, String> {
    text.parse()
        .map_err(|_| "give a whole number from 1".to_owned())
}

fn not_negative(text: &str) -> Result<f64, String> {
    match finite(text)? {
        v if v >= 0.0 => Ok(v),
        _ => Err("must not be below 0".into()),
    }
}

#[cfg(test)]
mod tests {
    use clap::CommandFactory;

    #[test]
    fn arguments_are_consistent() {
        super::Cli::command().debug_assert();
    }
}
