//! What can be wrong with a recording.

use std::io;

use thiserror::Error;

use super::wording::count;

/// Why a recording could not be read. Prints as one line without the file's
/// name; text taken from the file is shortened and its control characters are
/// escaped.
#[derive(Debug, Error)]
#[non_exhaustive]
pub enum CaptureError {
    /// The operating system refused.
    #[error("cannot be read: {source}")]
    Io {
        /// What it said.
        #[from]
        source: io::Error,
    },
    /// A folder, pipe or device: it cannot be passed over several times.
    #[error("is {what}, not a file (copy the recording into a file first)")]
    NotAFile {
        /// "a directory" or the like.
        what: &'static str,
    },
    /// No byte in it.
    #[error("is empty")]
    Empty,
    /// `--rate` is not a rate.
    #[error("the sample rate {rate_hz} Hz is not a positive number")]
    BadRate {
        /// As given.
        rate_hz: f64,
    },
    /// Neither RIFF nor text.
    #[error("is not a WAV, FLAC or CSV recording (export it as PCM WAV or as CSV)")]
    NotARecording,
    /// A format known by its first bytes, which is not read.
    #[error("is {what}, not a WAV, FLAC or CSV recording ({help})")]
    ForeignFormat {
        /// Name of the format, with its article.
        what: &'static str,
        /// What to do about it.
        help: &'static str,
    },
    /// Text under a name that promises a WAV.
    #[error("is not a WAV file: it starts with the text {start:?} (if it is a CSV, name it so)")]
    TextNamedWav {
        /// First characters.
        start: String,
    },
    /// A header and nothing after it.
    #[error("has a header but no samples")]
    NoSamples,
    /// Too few samples for a spectrum.
    #[error("too short: {} (at least {least} are needed)", count(*frames, "sample", "samples"))]
    TooShort {
        /// Samples per channel that were found.
        frames: u64,
        /// Smallest accepted number.
        least: u64,
    },
    /// The header contradicts itself or lacks a part.
    #[error("damaged WAV header: {what}")]
    BadWavHeader {
        /// The fault, with the bad value in it.
        what: String,
    },
    /// A FLAC file without a frame that can be read.
    #[error("damaged FLAC: {what}")]
    BadFlac {
        /// The fault.
        what: String,
    },
    /// A FLAC file with samples of a rare size.
    #[error("FLAC with {bits}-bit samples (8, 12, 16, 20 and 24 are read; convert it to PCM WAV)")]
    UnsupportedFlac {
        /// Bits per sample.
        bits: u8,
    },
    /// Sample coding that is not PCM (linear, A-law, mu-law) or float.
    #[error("WAV with {coding} (convert it to PCM first)")]
    UnsupportedCoding {
        /// Name of the coding or the bad bit depth.
        coding: String,
    },
    /// More channels or columns than any recorder has.
    #[error("{count} channels (at most {limit} are read)")]
    TooManyChannels {
        /// Channels or columns that the file claims.
        count: u64,
        /// Largest accepted number.
        limit: u64,
    },
    /// A line so long that it is hardly a row of a table.
    #[error(
        "line {line} is longer than {limit} bytes: not a table of samples, or a quote is never closed"
    )]
    LineTooLong {
        /// 1-based line where it starts.
        line: u64,
        /// Largest accepted length.
        limit: usize,
    },
    /// No row of numbers within the first lines.
    #[error(
        "no rows of numbers found (a CSV has one row per sample: time and one column per channel)"
    )]
    NoNumbers,
    /// A time column and nothing else.
    #[error("no column of values beside the time")]
    NoChannels,
    /// The time of the samples is not told.
    #[error("no time column found: give the sample rate with --rate HZ")]
    NoTime,
    /// A first column of 0, 1, 2, … without a name: rows or seconds?
    #[error(
        "no time column found (the first column only counts the rows): give the sample rate with --rate HZ"
    )]
    OnlyIndex,
    /// An option names a column that is not there.
    #[error("has no column {asked:?}, only {has} (--time takes a name or a number from 1)")]
    NoSuchColumn {
        /// As asked for.
        asked: String,
        /// The columns, by number and name.
        has: String,
    },
    /// An option names a line beyond the first ones, in which the layout is found.
    #[error("has no line {line} among the first {lines} (--{option})")]
    NoSuchLine {
        /// The option.
        option: &'static str,
        /// As asked for.
        line: u64,
        /// Lines that are looked at.
        lines: u64,
    },
    /// A count of samples is a time only with a rate.
    #[error("sample numbers are no time by themselves: give the sample rate with --rate HZ")]
    SamplesNeedRate,
    /// Only words where numbers are expected.
    #[error("line {line}, column {column}: {text:?} is not a number ({share})")]
    NotANumber {
        /// 1-based line in the file.
        line: u64,
        /// 1-based column.
        column: usize,
        /// The cell.
        text: String,
        /// How much of the column is like that.
        share: String,
    },
    /// Time that mostly stands still or runs backwards.
    #[error(
        "time column {name:?} does not increase: {bad} of {rows} rows repeating or going back, first at line {line} (sort it, or give another time column)"
    )]
    TimeNotIncreasing {
        /// Column name.
        name: String,
        /// Rows whose stamp is not later than the one before.
        bad: u64,
        /// Rows in all.
        rows: u64,
        /// 1-based line of the first such row.
        line: u64,
    },
    /// Most stamps cannot be read.
    #[error(
        "line {line}, column {column}: not a time (none in {bad} of {rows} cells of this column)"
    )]
    BadStamps {
        /// 1-based line of the first bad stamp.
        line: u64,
        /// 1-based column.
        column: usize,
        /// Rows with such a cell.
        bad: u64,
        /// Rows in all.
        rows: u64,
    },
    /// The second pass found another file than the first.
    #[error("changed while it was being read ({what})")]
    Changed {
        /// What differs.
        what: String,
    },
}

/// The start of a text from the file, for a message: at most 32 characters.
/// Control characters are escaped where it is printed (with `{:?}`).
pub(super) fn excerpt(bytes: &[u8]) -> String {
    const LONGEST: usize = 32;
    let text = super::text::to_text(bytes.get(..4 * LONGEST).unwrap_or(bytes));
    let text = text.trim();
    let mut short: String = text.chars().take(LONGEST).collect();
    if short.len() < text.len() {
        short.push('…');
    }
    short
}
