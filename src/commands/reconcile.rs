//! `reconcile`: several recordings of one place, tone by tone.

use super::output::{
    SOME_FAILED, Stop, complain, is_stdout, shown, spare, terminal_width, to_file, to_stdout, usage,
};
use super::progress::Progress;
use super::reading::Reading;
use super::site::load_site;
use super::values::{how_many, positive};
use clap::Args;

use foldtrace::plan::rates::usual;
use foldtrace::reconcile::{Capture, reconcile};
use foldtrace::report::{reconciled, text::plain};
use foldtrace::sources::Site;
use foldtrace::triage::{self, Triage};
use std::io::{self, Write};
use std::num::NonZeroUsize;
use std::path::{Path, PathBuf};
use std::process::ExitCode;

/// Shown after the options.
pub const HELP: &str = "\
For recordings of one place made at different sample rates (or at one rate with clocks that differ): a tone \
that has folded is seen elsewhere at another rate, and where all recordings agree is where it truly is, \
even if nothing listed made it. Each row is one physical tone: where each recording shows it, how sure it is \
that these are one tone, and what could have made it at which true frequency. A true frequency that stays \
open is given as the candidates that are left, with a further rate that would tell. Recordings that do not \
belong together are said to be so.

Exit: 0 done, 1 some input could not be read, 2 wrong usage or site file.

Example:
  foldtrace reconcile sample-data/recordings/skid-8000.wav \\
      sample-data/recordings/skid-11025.wav --site sample-data/orrowmere.toml";

/// Options of `reconcile`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// Recordings of one place, two or more: WAV, or CSV logs
    #[arg(value_name = "REC", required = true, num_args = 2..)]
    pub recordings: Vec<PathBuf>,
    /// What is known of the place: a site file (TOML) or a list (CSV); once for all recordings, or
    /// once for each in their order where the recorders differ
    #[arg(long, value_name = "FILE")]
    pub site: Vec<PathBuf>,
    /// Sample rates of the recordings in their order, separated by commas, where they differ and
    /// the files do not tell them; may be fractional
    #[arg(long, value_name = "HZ,HZ", value_delimiter = ',', allow_negative_numbers = true, conflicts_with = "rate", value_parser = positive)]
    pub rates: Vec<f64>,
    /// Write the suspect list as CSV; `-` writes it to stdout in place of the table
    #[arg(long, value_name = "FILE")]
    pub suspects: Option<PathBuf>,
    /// Write everything as JSON; `-` writes it to stdout in place of the table
    #[arg(long, value_name = "FILE")]
    pub json: Option<PathBuf>,
    /// Suspects listed per tone
    #[arg(long, value_name = "N", default_value = "5", value_parser = how_many)]
    pub top: NonZeroUsize,
    #[command(flatten)]
    pub reading: Reading,
}

/// The value for recording `n`, where one was given for all or one for each.
fn of<T>(all: &[T], n: usize) -> Option<&T> {
    if all.len() == 1 {
        all.first()
    } else {
        all.get(n)
    }
}

/// Runs the command.
pub fn run(arguments: &Arguments) -> Result<ExitCode, Stop> {
    let (suspects, json) = (arguments.suspects.as_deref(), arguments.json.as_deref());
    if is_stdout(suspects) && is_stdout(json) {
        return Err(usage("--suspects - and --json - cannot share stdout"));
    }
    let count = arguments.recordings.len();
    for (option, given) in [
        ("site", arguments.site.len()),
        ("rates", arguments.rates.len()),
    ] {
        if given > 1 && given != count {
            return Err(usage(format!(
                "{given} values of --{option} for {count} recordings: give one for all, or one for each in their order"
            )));
        }
    }
    let exports: Vec<&Path> = [suspects, json].into_iter().flatten().collect();
    let inputs = arguments.recordings.iter().chain(&arguments.site);
    spare(inputs.map(PathBuf::as_path), &exports)?;
    let sites: Vec<Site> = if arguments.site.is_empty() {
        vec![load_site(None)?.0]
    } else {
        arguments
            .site
            .iter()
            .map(|p| Ok(load_site(Some(p))?.0))
            .collect::<Result<_, Stop>>()?
    };
    let mut read: Vec<(Triage, &Site)> = Vec::new();
    let mut failed = false;
    for (n, path) in arguments.recordings.iter().enumerate() {
        let Some(site) = of(&sites, n) else { continue };
        let mut options = triage::Options {
            open: arguments.reading.open_options(),
            ..triage::Options::default()
        };
        if let Some(&rate) = of(&arguments.rates, n) {
            options.open.rate_hz = Some(rate);
        }
        let progress = Progress::new();
        let done = triage::run(path, site, &options, &|done, of| progress.show(done, of));
        progress.clear();
        match done {
            Ok(result) => read.push((result, site)),
            Err(error) => {
                failed = true;
                complain(&format!("{}: {}", shown(path), plain(&error.to_string())));
            }
        }
    }
    if read.len() < 2 {
        // Each that could not be read has been named.
        return Ok(ExitCode::from(SOME_FAILED));
    }
    let captures: Vec<Capture> = read
        .iter()
        .map(|(t, site)| Capture {
            scene: t.scene(site),
            inference: &t.inference,
        })
        .collect();
    let rates = read
        .first()
        .map_or(Vec::new(), |(t, _)| usual(t.spec.rate_hz));
    let result = reconcile(&captures, &rates);
    let triages: Vec<Triage> = read.into_iter().map(|(t, _)| t).collect();
    let top = arguments.top.get();
    if !is_stdout(suspects) && !is_stdout(json) {
        let width = terminal_width();
        to_stdout(|out| reconciled::write(&triages, &result, top, width, out))?;
    }
    let list = |out: &mut dyn Write| {
        reconciled::write_list(&triages, &result, top, out).map_err(io::Error::from)
    };
    let all = |out: &mut dyn Write| reconciled::write_json(&triages, &result, top, out);
    match suspects {
        Some(_) if is_stdout(suspects) => to_stdout(list)?,
        Some(path) => to_file(path, list)?,
        None => {}
    }
    match json {
        Some(_) if is_stdout(json) => to_stdout(all)?,
        Some(path) => to_file(path, all)?,
        None => {}
    }
    Ok(ExitCode::from(if failed { SOME_FAILED } else { 0 }))
}
