//! Many recordings: each is read and judged like one, and what comes back is listed.
//!
//! [`inputs`] finds the recordings, [`pool`] works on several at once and keeps their
//! order, [`results`] writes so that a kill loses nothing finished. When all are
//! done, [`recurring`] reads the lists back ([`tally`]), groups tones that show at the
//! same frequency ([`groups`], with [`sorted`] for more than fit in memory), and settles
//! by several sample rates where a tone truly lies ([`settle`]).

mod error;
pub mod groups;
pub mod identity;
pub mod inputs;
pub mod pool;
pub mod recurring;
pub mod results;
mod rows;
pub mod settle;
pub mod sorted;
pub mod tally;
pub mod trend;

pub use error::ScanError;
pub use recurring::Overview;

use crate::report::suspect_list::{self, defuse};
use crate::sources::Site;
use crate::suspects::Verdict;
use crate::triage::{self, Triage};
use identity::{Checksum, Identity};
use inputs::Input;
use results::Results;
use std::num::NonZeroUsize;
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::path::PathBuf;

/// Columns of the list of recordings.
pub const RECORDING_COLUMNS: [&str; 10] = [
    "recording",
    "status",
    "error",
    "rate_hz",
    "channels",
    "samples",
    "gaps",
    "tones",
    "folded",
    "seconds",
];

/// What to scan, and how.
#[derive(Debug, Clone)]
pub struct ScanOptions {
    /// Files and folders, in the order of the results.
    pub paths: Vec<PathBuf>,
    /// Where the results go; made if it is not there.
    pub out: PathBuf,
    /// What is asked of each recording. `threads` is set by the scan.
    pub triage: triage::Options,
    /// Suspects listed per tone.
    pub top: NonZeroUsize,
    /// Recordings worked on at once. No result depends on it.
    pub jobs: NonZeroUsize,
    /// Go on with the scan begun in `out`, if there is one.
    pub resume: bool,
}

/// How far a scan is.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Progress {
    /// Recordings done, with those of an earlier run.
    pub done: usize,
    /// Recordings of an earlier run.
    pub before: usize,
    /// All recordings.
    pub of: usize,
}

/// What came of a scan.
#[derive(Debug, Clone, PartialEq)]
pub struct ScanSummary {
    /// Counts, the most common sources, and what recurs.
    pub overview: Overview,
    /// Files and folders passed over.
    pub skipped: u64,
    /// Recordings that an earlier run had done.
    pub before: usize,
}

/// What one recording leaves in the result files.
struct Rows {
    suspects: Vec<u8>,
    recording: Vec<u8>,
}

/// Reads all recordings and writes the results; goes on where an earlier run ended if
/// `options.resume` says so. A recording that cannot be read is a row with the reason.
///
/// # Errors
/// If there is nothing to scan, or the results cannot be written.
pub fn run(
    options: &ScanOptions,
    site: &Site,
    progress: &dyn Fn(Progress),
) -> Result<ScanSummary, ScanError> {
    let inputs = inputs::collect(&options.paths, &options.out)?;
    let recordings = inputs.recordings;
    if recordings.is_empty() {
        return Err(ScanError::Nothing {
            path: options.paths.first().cloned().unwrap_or_default(),
            skipped: inputs.skipped,
        });
    }
    let site_options = triage::Options {
        threads: None,
        ..options.triage.clone()
    };
    let identity = Identity {
        options: checksum(&[&format!("{site_options:?} {}", options.top)]),
        site: checksum(&[&format!("{site:?}")]),
        names: names_checksum(&recordings),
        recordings: recordings.len(),
    };
    let headers = headers(&options.out)?;
    let (mut results, before) = Results::open(
        &options.out,
        &identity,
        options.resume,
        (&headers.suspects, &headers.recording),
    )?;
    let of = recordings.len();
    progress(Progress {
        done: before,
        before,
        of,
    });
    let work = |i: usize, threads: usize| -> csv::Result<Rows> {
        // Never out of range: the pool counts the same list.
        let input = recordings.get(i).cloned().unwrap_or(Input {
            path: PathBuf::new(),
            problem: None,
        });
        judge(&input, site, options, threads)
    };
    let size = |rows: &csv::Result<Rows>| {
        rows.as_ref()
            .map_or(0, |r| r.suspects.len() + r.recording.len())
    };
    pool::in_order(before, of, options.jobs.get(), work, size, |i, rows| {
        let rows = rows.map_err(|e| ScanError::at(&options.out)(e.into()))?;
        results.append(&rows.suspects, &rows.recording)?;
        progress(Progress {
            done: i + 1,
            before,
            of,
        });
        Ok(())
    })?;
    results.sync()?;
    let name = |i: u32| {
        recordings
            .get(i as usize)
            .map_or_else(String::new, |input| defuse(&input.path.to_string_lossy()))
    };
    let overview = recurring::write(&recurring::Question {
        folder: &options.out,
        site,
        names: &name,
    })?;
    Ok(ScanSummary {
        overview,
        skipped: inputs.skipped,
        before,
    })
}

fn checksum(parts: &[&str]) -> u64 {
    let mut sum = Checksum::new();
    for part in parts {
        sum.add(part.as_bytes());
    }
    sum.value()
}

fn names_checksum(recordings: &[Input]) -> u64 {
    let mut sum = Checksum::new();
    for input in recordings {
        sum.add(input.path.as_os_str().as_encoded_bytes());
        sum.add(b"\0");
    }
    sum.value()
}

fn headers(out: &std::path::Path) -> Result<Rows, ScanError> {
    let mut suspects = Vec::new();
    let written = suspect_list::write_header(&mut suspects)
        .and_then(|()| line(RECORDING_COLUMNS.map(str::to_owned)));
    let recording = written.map_err(|e| ScanError::at(out)(e.into()))?;
    Ok(Rows {
        suspects,
        recording,
    })
}

/// One line of the list of recordings.
fn line(cells: [String; 10]) -> csv::Result<Vec<u8>> {
    let mut csv = csv::WriterBuilder::new()
        .terminator(csv::Terminator::CRLF)
        .from_writer(Vec::new());
    csv.write_record(cells)?;
    csv.into_inner().map_err(|e| e.into_error().into())
}

/// Reads one recording and puts what was found into rows.
fn judge(input: &Input, site: &Site, options: &ScanOptions, threads: usize) -> csv::Result<Rows> {
    let read = match &input.problem {
        Some(problem) => Err(problem.clone()),
        None => {
            let asked = triage::Options {
                threads: NonZeroUsize::new(threads),
                ..options.triage.clone()
            };
            // A fault of ours in one recording must not cost the others.
            let judge = || triage::run(&input.path, site, &asked, &|_, _| ());
            match catch_unwind(AssertUnwindSafe(judge)) {
                Ok(result) => result.map_err(|e| e.to_string()),
                Err(_) => Err("could not be judged: a fault in foldtrace itself".to_owned()),
            }
        }
    };
    let name = defuse(&input.path.to_string_lossy());
    match read {
        Ok(result) => {
            let mut suspects = Vec::new();
            suspect_list::write_rows(&result, options.top.get(), &mut suspects)?;
            Ok(Rows {
                suspects,
                recording: line(read_cells(name, &result))?,
            })
        }
        Err(reason) => {
            let mut cells: [String; 10] = Default::default();
            let [recording, status, error, ..] = &mut cells;
            (*recording, *status, *error) = (name, "failed".into(), defuse(&reason));
            Ok(Rows {
                suspects: Vec::new(),
                recording: line(cells)?,
            })
        }
    }
}

fn read_cells(name: String, result: &Triage) -> [String; 10] {
    let folded = result
        .rows()
        .filter(|(_, finding)| finding.verdict == Verdict::Folded)
        .count();
    [
        name,
        "read".into(),
        String::new(),
        result.spec.rate_hz.to_string(),
        result.spec.channels.len().to_string(),
        result.spec.frames.to_string(),
        result.gaps.to_string(),
        result.rows().count().to_string(),
        folded.to_string(),
        format!("{:.3}", result.spec.duration_s()),
    ]
}
