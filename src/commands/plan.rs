//! `plan`: which capture or test settles what is open.

use super::output::{Stop, is_stdout, shown, spare, terminal_width, to_file, to_stdout};
use super::progress::Progress;
use super::reading::Reading;
use super::site::load_site;
use super::values::{how_many, positive};
use clap::Args;
use foldtrace::plan::{plan, rates::usual};
use foldtrace::report::{plan_table, text::plain};
use foldtrace::triage;
use std::io::Write;
use std::num::NonZeroUsize;
use std::path::{Path, PathBuf};
use std::process::ExitCode;

/// Shown after the options.
pub const HELP: &str = "\
For a recording with tones that stay open: lists what a person could do next, best first, each with the \
information to expect in bits, how many open tones it is likely to settle (one answer at least 90 % \
probable), and what will be seen under each suspect. It considers other sample rates, a low-pass before the \
converter, a changed speed of a named source, a source switched off, a longer recording and a log of a \
source's speed. Tests that touch machines or wiring carry a caution; they are for licensed people, under \
your local codes.

Exit: 0 done, 1 the recording could not be read, 2 wrong usage or site file.

Example:
  foldtrace plan sample-data/recordings/skid-8000.wav \\
      --site sample-data/orrowmere.toml --rates 11025,16000,22050";

/// Options of `plan`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// Recording: WAV, or a CSV log
    #[arg(value_name = "REC")]
    pub recording: PathBuf,
    /// Sample rates that could be used next, separated by commas; without it, the usual ones
    #[arg(long, value_name = "HZ", value_delimiter = ',', allow_negative_numbers = true, value_parser = positive)]
    pub rates: Vec<f64>,
    /// What is known of the place: a site file (TOML) or a list (CSV)
    #[arg(long, value_name = "FILE")]
    pub site: Option<PathBuf>,
    /// Write everything as JSON; `-` writes it to stdout in place of the table
    #[arg(long, value_name = "FILE")]
    pub json: Option<PathBuf>,
    /// Tests listed
    #[arg(long, value_name = "N", default_value = "6", value_parser = how_many)]
    pub top: NonZeroUsize,
    #[command(flatten)]
    pub reading: Reading,
}

/// Runs the command.
pub fn run(arguments: &Arguments) -> Result<ExitCode, Stop> {
    let json = arguments.json.as_deref();
    let exports: Vec<&Path> = json.into_iter().collect();
    let inputs = std::iter::once(&arguments.recording).chain(&arguments.site);
    spare(inputs.map(PathBuf::as_path), &exports)?;
    let (site, _) = load_site(arguments.site.as_deref())?;
    let options = triage::Options {
        open: arguments.reading.open_options(),
        ..triage::Options::default()
    };
    let progress = Progress::new();
    let done = triage::run(&arguments.recording, &site, &options, &|done, of| {
        progress.show(done, of);
    });
    progress.clear();
    let result = done.map_err(|error| {
        let name = shown(&arguments.recording);
        Stop(
            super::output::SOME_FAILED,
            format!("{name}: {}", plain(&error.to_string())),
        )
    })?;
    let rates = if arguments.rates.is_empty() {
        usual(result.spec.rate_hz)
    } else {
        arguments.rates.clone()
    };
    let planned = plan(&result.scene(&site), &result.inference, &rates);
    if !is_stdout(json) {
        let width = terminal_width();
        to_stdout(|out| plan_table::write(&result, &planned, arguments.top.get(), width, out))?;
    }
    let all = |out: &mut dyn Write| plan_table::write_json(&result, &planned, out);
    match json {
        Some(_) if is_stdout(json) => to_stdout(all)?,
        Some(path) => to_file(path, all)?,
        None => {}
    }
    Ok(ExitCode::SUCCESS)
}
