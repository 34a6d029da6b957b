//! `triage`: one recording in depth, or several one after the other.

use super::output::{
    SOME_FAILED, Stop, complain, is_stdout, shown, spare, terminal_width, to_file, to_stdout, usage,
};
use super::progress::Progress;
use super::reading::Reading;
use super::site::load_site;
use super::values::{Channel, Drawing, DrawingKind, channel, drawing, how_many};
use clap::Args;
use foldtrace::evidence::reference::{Reference, ReferenceFile};
use foldtrace::report::page::{self, Failed, Input, PictureError, Record, Subject, command_line};
use foldtrace::report::{json, plan_table, suspect_list, table, text::plain};
use foldtrace::sources::Site;
use foldtrace::triage;
use std::ffi::OsStr;
use std::io::{self, Write};
use std::num::NonZeroUsize;
use std::path::{Path, PathBuf};
use std::process::ExitCode;
use std::time::SystemTime;

/// Shown after the options.
pub const HELP: &str = "\
Reading the table: `seen Hz` is where the tone shows in the file. Each suspect below it is a line of a \
source, at the true frequency it would have in the analog world. Zone 1 is below half the sample rate, \
where things are as they seem; in any higher zone the tone has folded. `by luck` counts the listed lines \
expected as close by pure chance: a near match with 3 by luck is no match.

Exit: 0 done, 1 some input could not be read, 2 wrong usage or site file.

Examples:
  foldtrace triage sample-data/recordings/skid-8000.wav --site sample-data/orrowmere.toml
  foldtrace triage sample-data/recordings/skid-8000.wav \\
      --site sample-data/orrowmere.toml --report skid.html";

/// Options of `triage`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// Recordings: WAV, FLAC, or CSV logs
    #[arg(value_name = "REC", required = true)]
    pub recordings: Vec<PathBuf>,
    /// What is known of the place: a site file (TOML) or a list (CSV: name,hz,tolerance,orders);
    /// without it, a built-in list of common sources
    #[arg(long, value_name = "FILE")]
    pub site: Option<PathBuf>,
    /// One channel, counted from 1, or all of them merged
    #[arg(long, value_name = "N|all", default_value = "all", value_parser = channel)]
    pub channel: Channel,
    /// Write the suspect list as CSV; `-` writes it to stdout in place of the table
    #[arg(long, value_name = "FILE")]
    pub suspects: Option<PathBuf>,
    /// Write everything as JSON; `-` writes it to stdout in place of the table
    #[arg(long, value_name = "FILE")]
    pub json: Option<PathBuf>,
    /// Write one page that shows everything, to open in a browser, print or hand on
    #[arg(long, value_name = "FILE.html")]
    pub report: Option<PathBuf>,
    /// Draw the spectrum with its tones, as PNG or SVG by the name's ending; for one recording
    #[arg(long, value_name = "FILE.png|svg", value_parser = drawing)]
    pub picture: Option<Drawing>,
    /// A track of a source's frequency logged elsewhere: a CSV of time and hz or rpm, or of a
    /// tachometer's pulse times; may be repeated
    #[arg(long, value_name = "SOURCE=FILE")]
    pub reference: Vec<String>,
    /// Suspects listed per tone
    #[arg(long, value_name = "N", default_value = "5", value_parser = how_many)]
    pub top: NonZeroUsize,
    #[command(flatten)]
    pub reading: Reading,
}

/// Runs the command.
pub fn run(arguments: &Arguments) -> Result<ExitCode, Stop> {
    let (suspects, json) = (arguments.suspects.as_deref(), arguments.json.as_deref());
    let report = arguments.report.as_deref();
    let picture = arguments.picture.as_ref();
    let printed: Vec<&str> = [
        ("--suspects", suspects),
        ("--json", json),
        ("--report", report),
    ]
    .into_iter()
    .filter(|(_, path)| is_stdout(*path))
    .map(|(option, _)| option)
    .collect();
    if let [first, second, ..] = printed.as_slice() {
        return Err(usage(format!(
            "{first} - and {second} - cannot share stdout"
        )));
    }
    if picture.is_some() && arguments.recordings.len() > 1 {
        return Err(usage(
            "--picture draws one recording (give --report for a page with all of them)",
        ));
    }
    let with_table = printed.is_empty();
    let exports: Vec<&Path> = [suspects, json, report, picture.map(|p| p.path.as_path())]
        .into_iter()
        .flatten()
        .collect();
    let inputs = arguments.recordings.iter().chain(&arguments.site);
    spare(inputs.map(PathBuf::as_path), &exports)?;
    let (site, site_name) = load_site(arguments.site.as_deref())?;
    let options = triage::Options {
        open: arguments.reading.open_options(),
        channel: match arguments.channel {
            Channel::All => None,
            Channel::One(n) => Some(n.get()),
        },
        references: references(&arguments.reference, &site)?,
        threads: None,
    };
    let top = arguments.top.get();
    let width = terminal_width();
    let mut results = Vec::new();
    let mut failed = Vec::new();
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
                if !exports.is_empty() {
                    results.push(result);
                }
            }
            Err(error) => {
                let why = plain(&error.to_string());
                complain(&format!("{}: {why}", shown(path)));
                failed.push(Failed {
                    recording: path.to_string_lossy().into_owned(),
                    why,
                });
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
    if let Some(path) = report {
        let record = record(arguments);
        let planned: Vec<_> = results
            .iter()
            .map(|r| r.next.as_ref().map(|test| plan_table::planned(r, test)))
            .collect();
        let subject = Subject {
            results: &results,
            failed: &failed,
            site: &site,
            site_name: &site_name,
            top,
            planned: &planned,
            references: &options.references,
        };
        let write_page = |out: &mut dyn Write| page::write_triage(&subject, &record, out);
        if is_stdout(report) {
            to_stdout(write_page)?;
        } else {
            to_file(path, write_page)?;
        }
    }
    if let (Some(picture), Some(result)) = (picture, results.first()) {
        to_file(&picture.path, |out| {
            match picture.kind {
                DrawingKind::Png => page::write_png(result, out),
                DrawingKind::Svg => page::write_svg(result, out),
            }
            .map_err(|error| match error {
                PictureError::Io(error) => error,
                other => io::Error::other(other),
            })
        })?;
    }
    Ok(ExitCode::from(if failed.is_empty() {
        0
    } else {
        SOME_FAILED
    }))
}

/// How this run came about, for the page.
fn record(arguments: &Arguments) -> Record {
    let recordings = arguments.recordings.iter().map(|p| ("recording", p));
    let site = arguments.site.iter().map(|p| ("site file", p));
    let references: Vec<ReferenceFile> = arguments
        .reference
        .iter()
        .filter_map(|text| ReferenceFile::parse(text).ok())
        .collect();
    let references = references.iter().map(|r| ("reference", &r.path));
    let called: Vec<_> = std::env::args_os().skip(1).collect();
    let called = called.iter().map(|a| a.as_os_str());
    Record {
        command_line: command_line([OsStr::new("foldtrace")].into_iter().chain(called)),
        made: SystemTime::now(),
        inputs: recordings
            .chain(site)
            .chain(references)
            .map(|(role, path)| Input::read(role, path))
            .collect(),
    }
}

/// Reads the reference tracks; each must tell of a source that is listed.
fn references(named: &[String], site: &Site) -> Result<Vec<Reference>, Stop> {
    named
        .iter()
        .map(|text| {
            let file = ReferenceFile::parse(text).map_err(usage)?;
            let listed = &site.catalogue.sources;
            if !listed.iter().any(|s| s.name == file.source) {
                let names: Vec<String> = listed.iter().map(|s| plain(&s.name)).collect();
                return Err(usage(format!(
                    "--reference {}: no listed source has that name (there are: {})",
                    plain(&file.source),
                    names.join(", ")
                )));
            }
            Reference::read(&file).map_err(|e| {
                Stop(
                    SOME_FAILED,
                    format!("{}: {}", shown(&file.path), plain(&e.to_string())),
                )
            })
        })
        .collect()
}
