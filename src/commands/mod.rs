//! One file per command: its arguments, and what it does with the library.

mod fold;
mod help_files;
mod inspect;
mod output;
mod plan;
mod predict;
mod progress;
mod rates;
mod reading;
mod reconcile;
mod scan;
mod site;
mod sources;
mod triage;
mod unfold;
mod values;

pub use output::{WRONG_USAGE, complain};

use clap::{Parser, Subcommand};
use foldtrace::report::text::plain;
use std::process::ExitCode;

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
    #[command(after_help = triage::HELP)]
    Triage(triage::Arguments),
    /// Find where tones truly are from recordings of one place at several sample rates
    #[command(after_help = reconcile::HELP)]
    Reconcile(reconcile::Arguments),
    /// List the tests that would settle a recording's open tones, best first
    #[command(after_help = plan::HELP)]
    Plan(plan::Arguments),
    /// Foresee where the listed sources will be seen, and rank sample rates
    #[command(after_help = predict::HELP)]
    Predict(predict::Arguments),
    /// What recordings were taken for: layout, rate, gaps, what was assumed
    #[command(after_help = inspect::HELP)]
    Inspect(inspect::Arguments),
    /// Find and judge the tones of many recordings, in parallel, and what comes back
    #[command(after_help = scan::HELP)]
    Scan(scan::Arguments),
    /// Where analog frequencies land once sampled
    #[command(after_help = fold::HELP)]
    Fold(fold::Arguments),
    /// Every analog frequency that would be seen at a given place
    #[command(after_help = unfold::HELP)]
    Unfold(unfold::Arguments),
    /// Every line of the listed sources with its frequency and tolerance
    #[command(after_help = sources::HELP)]
    Sources(sources::Arguments),
    /// Write shell completions and manual pages into a folder
    #[command(after_help = help_files::HELP)]
    HelpFiles(help_files::Arguments),
}

/// The gist of a usage error without the pages around it.
pub fn one_line(error: &clap::Error) -> String {
    let all = error.to_string();
    let gist: Vec<&str> = all
        .lines()
        .take_while(|l| !l.starts_with("Usage:") && !l.starts_with("For more"))
        .map(str::trim)
        .filter(|l| !l.is_empty())
        .collect();
    let gist = gist.join(" ");
    let gist = gist.strip_prefix("error: ").unwrap_or(&gist);
    format!("{} (see foldtrace --help)", plain(gist))
}

/// Runs one command.
pub fn run(command: Command) -> ExitCode {
    let done = match command {
        Command::Triage(arguments) => triage::run(&arguments),
        Command::Reconcile(arguments) => reconcile::run(&arguments),
        Command::Plan(arguments) => plan::run(&arguments),
        Command::Predict(arguments) => predict::run(&arguments),
        Command::Inspect(arguments) => inspect::run(&arguments),
        Command::Scan(arguments) => scan::run(&arguments),
        Command::Fold(arguments) => fold::run(&arguments),
        Command::Unfold(arguments) => unfold::run(&arguments),
        Command::Sources(arguments) => sources::run(&arguments),
        Command::HelpFiles(arguments) => help_files::run(&arguments),
    };
    match done {
        Ok(code) => code,
        Err(output::Stop(code, what)) => {
            complain(&what);
            ExitCode::from(code)
        }
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
