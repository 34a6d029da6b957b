//! `triage`: one recording in depth, or several one after the other.

use super::output::{
    SOME_FAILED, Stop, complain, is_stdout, shown, spare, terminal_width, to_file, to_stdout, usage,
};
use super::progress::Progress;
use super::site::load_site;
use super::values::{Channel, channel, how_many, positive};
use clap::Args;
use foldtrace::report::{json, suspect_list, table, text::plain};
use foldtrace::triage;
use std::io::{self, Write};
use std::num::NonZeroUsize;
use std::path::{Path, PathBuf};
use std::process::ExitCode;

/// Shown after the options.
pub const HELP: &str = "\
Reading the table: `seen Hz` is where the tone shows in the file. Each suspect below it is a line of a \
source, at the true frequency it would have in the analog world. Zone 1 is below half the sample rate, \
where things are as they seem; in any higher zone the tone has folded. `by luck` counts the listed lines \
expected as close by pure chance: a near match with 3 by luck is no match.

Example:
  foldtrace triage sample-data/recordings/skid-8000.wav --site sample-data/orrowmere.toml

Exit: 0 done, 1 some input could not be read, 2 wrong usage or site file.";

/// Options of `triage`.
#[derive(Debug, Args)]
pub struct Arguments {
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

/// Runs the command.
pub fn run(arguments: &Arguments) -> Result<ExitCode, Stop> {
    let (suspects, json) = (arguments.suspects.as_deref(), arguments.json.as_deref());
    if is_stdout(suspects) && is_stdout(json) {
        return Err(usage("--suspects - and --json - cannot share stdout"));
    }
    let with_table = !is_stdout(suspects) && !is_stdout(json);
    let exports: Vec<&Path> = [suspects, json].into_iter().flatten().collect();
    let inputs = arguments.recordings.iter().chain(&arguments.site);
    spare(inputs.map(PathBuf::as_path), &exports)?;
    let (site, site_name) = load_site(arguments.site.as_deref())?;
    let options = triage::Options {
        rate_hz: arguments.rate,
        channel: match arguments.channel {
            Channel::All => None,
            Channel::One(n) => Some(n.get()),
        },
    };
    let top = arguments.top.get();
    let width = terminal_width();
    let mut results = Vec::new();
    let mut failed = false;
    for (i, path) in arguments.recordings.iter().enumerate() {
        let progress = Progress::new();
        let done = triage::run(path, &site, &options, &|done, of| progress.show(done, of));
        progress.clear();
        match done {
            Ok(result) => {
                if with_table {
                    to_stdout(|out| {
                        if i > 0 {
                            writeln!(out)?;
                        }
                        table::write(&result, &site_name, top, width, out)
                    })?;
                }
                if suspects.is_some() || json.is_some() {
                    results.push(result);
                }
            }
            Err(error) => {
                failed = true;
                complain(&format!("{}: {}", shown(path), plain(&error.to_string())));
            }
        }
    }
    let write_list =
        |out: &mut dyn Write| suspect_list::write(&results, top, out).map_err(io::Error::from);
    let write_json = |out: &mut dyn Write| json::write(&results, top, out);
    match suspects {
        Some(_) if is_stdout(suspects) => to_stdout(write_list)?,
        Some(path) => to_file(path, write_list)?,
        None => {}
    }
    match json {
        Some(_) if is_stdout(json) => to_stdout(write_json)?,
        Some(path) => to_file(path, write_json)?,
        None => {}
    }
    Ok(ExitCode::from(if failed { SOME_FAILED } else { 0 }))
}
