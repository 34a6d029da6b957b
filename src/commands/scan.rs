//! `scan`: many recordings, in parallel, with results that survive a kill.

use super::output::{SOME_FAILED, Stop, WRONG_USAGE, shown, to_stdout, usage};
use super::progress::Progress;
use super::reading::Reading;
use super::site::load_site;
use super::values::{Channel, channel, how_many};
use clap::Args;
use foldtrace::report::text::{count, plain};
use foldtrace::scan::{self, ScanOptions, ScanSummary};
use foldtrace::triage;
use std::io::{self, BufRead, BufReader, Write};
use std::num::NonZeroUsize;
use std::path::{Path, PathBuf};
use std::process::ExitCode;

/// Shown after the options.
pub const HELP: &str = "\
Writes three lists into the folder: suspects.csv (every tone and suspect), recordings.csv (one row per \
recording, also those that could not be read, with the reason) and recurring.csv (what comes back). A scan \
that was interrupted goes on with --resume and ends with the same files.

Exit: 0 done, 1 some recording could not be read, 2 wrong usage or site file.

Example:
  foldtrace scan sample-data/recordings --out results --site sample-data/orrowmere.toml";

/// Options of `scan`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// Recordings, or folders that are searched for recordings, sorted by name
    #[arg(value_name = "PATH", required_unless_present = "names_from")]
    pub paths: Vec<PathBuf>,
    /// Folder for the results; made if it is not there
    #[arg(long, value_name = "DIR")]
    pub out: PathBuf,
    /// What is known of the place: a site file (TOML) or a list (CSV: name,hz,tolerance,orders);
    /// without it, a built-in list of common sources
    #[arg(long, value_name = "FILE")]
    pub site: Option<PathBuf>,
    /// More paths, one a line; `-` reads them from stdin
    #[arg(long, value_name = "FILE")]
    pub names_from: Option<PathBuf>,
    /// Recordings worked on at once [default: one per core]
    #[arg(long, value_name = "N", value_parser = how_many)]
    pub jobs: Option<NonZeroUsize>,
    /// Go on with the scan begun in the folder, if there is one
    #[arg(long)]
    pub resume: bool,
    /// How recordings are read.
    #[command(flatten)]
    pub reading: Reading,
    /// One channel, counted from 1, or all of them merged
    #[arg(long, value_name = "N|all", default_value = "all", value_parser = channel)]
    pub channel: Channel,
    /// Suspects listed per tone
    #[arg(long, value_name = "N", default_value = "5", value_parser = how_many)]
    pub top: NonZeroUsize,
}

/// Runs the command.
pub fn run(arguments: &Arguments) -> Result<ExitCode, Stop> {
    let (site, _) = load_site(arguments.site.as_deref())?;
    let mut paths = arguments.paths.clone();
    if let Some(list) = &arguments.names_from {
        paths.extend(names(list)?);
    }
    let cores = || std::thread::available_parallelism().unwrap_or(NonZeroUsize::MIN);
    let options = ScanOptions {
        paths,
        out: arguments.out.clone(),
        triage: triage::Options {
            open: arguments.reading.open_options(),
            channel: match arguments.channel {
                Channel::All => None,
                Channel::One(n) => Some(n.get()),
            },
            references: Vec::new(),
            threads: None,
        },
        top: arguments.top,
        jobs: arguments.jobs.unwrap_or_else(cores),
        resume: arguments.resume,
    };
    let progress = Progress::of_recordings();
    let done = scan::run(&options, &site, &|p| {
        progress.show_from(p.before as u64, p.done as u64, p.of as u64);
    });
    progress.clear();
    let summary = done.map_err(|error| {
        let code = if error.is_usage() {
            WRONG_USAGE
        } else {
            SOME_FAILED
        };
        Stop(code, error.to_string())
    })?;
    to_stdout(|out| write_summary(&summary, &arguments.out, out))?;
    let failed = summary.overview.failed > 0;
    Ok(ExitCode::from(if failed { SOME_FAILED } else { 0 }))
}

/// The paths in a list, one a line.
fn names(list: &Path) -> Result<Vec<PathBuf>, Stop> {
    let failed = |e: io::Error| Stop(SOME_FAILED, format!("{}: {e}", shown(list)));
    let reader: Box<dyn BufRead> = if list == Path::new("-") {
        Box::new(io::stdin().lock())
    } else {
        Box::new(BufReader::new(std::fs::File::open(list).map_err(failed)?))
    };
    let mut paths = Vec::new();
    for (i, line) in reader.split(b'\n').enumerate() {
        let mut line = line.map_err(failed)?;
        if line.ends_with(b"\r") {
            line.pop();
        }
        if line.is_empty() {
            continue;
        }
        if line.contains(&0) {
            return Err(usage(format!(
                "{}: line {} is no path: it holds a zero byte (give one path a line)",
                shown(list),
                i + 1
            )));
        }
        paths.push(path_of(line));
    }
    if paths.is_empty() {
        return Err(Stop(
            SOME_FAILED,
            format!("{}: names no path (give one a line)", shown(list)),
        ));
    }
    Ok(paths)
}

/// A path is whatever bytes the system took for its name.
#[cfg(unix)]
fn path_of(bytes: Vec<u8>) -> PathBuf {
    use std::os::unix::ffi::OsStringExt;
    std::ffi::OsString::from_vec(bytes).into()
}
#[cfg(not(unix))]
fn path_of(bytes: Vec<u8>) -> PathBuf {
    String::from_utf8_lossy(&bytes).into_owned().into()
}

fn write_summary(summary: &ScanSummary, folder: &Path, out: &mut dyn Write) -> io::Result<()> {
    let o = &summary.overview;
    let number =
        |n: u64, one: &str, many: &str| count(usize::try_from(n).unwrap_or(usize::MAX), one, many);
    let mut first = format!("{} read", number(o.read, "recording", "recordings"));
    if summary.before > 0 {
        first.push_str(&format!(" ({} before this run)", summary.before));
    }
    if o.failed > 0 {
        first.push_str(&format!(
            ", {} could not be (recordings.csv says why)",
            o.failed
        ));
    }
    if summary.skipped > 0 {
        first.push_str(&format!(
            "; {} passed over",
            number(
                summary.skipped,
                "other file or folder",
                "other files and folders"
            )
        ));
    }
    writeln!(out, "{first}")?;
    writeln!(
        out,
        "{}: {} folded, {} open",
        number(o.tones, "tone", "tones"),
        o.folded,
        o.open
    )?;
    if !o.sources.is_empty() {
        let named: Vec<String> = o
            .sources
            .iter()
            .take(5)
            .map(|(name, n)| format!("{} in {n}", plain(name)))
            .collect();
        writeln!(out, "most often suspected: {}", named.join(", "))?;
    }
    let coming_back = o.by_true + o.by_source + o.by_seen;
    let mut last = match coming_back {
        0 => "nothing comes back across recordings".to_owned(),
        n => format!(
            "{} back across recordings",
            count(n, "tone comes", "tones come")
        ),
    };
    if o.by_true > 0 {
        last.push_str(&format!(
            "; {} settled by its true frequency at several rates, {} of them folded",
            o.by_true, o.true_folded
        ));
    }
    writeln!(out, "{last}")?;
    writeln!(
        out,
        "written to {}: suspects.csv, recordings.csv, recurring.csv",
        shown(folder)
    )
}
