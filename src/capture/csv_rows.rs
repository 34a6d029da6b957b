//! The rows of a table in order, each with the samples missing before it.

use std::fs::File;
use std::io::Read;
use std::path::PathBuf;
use std::sync::Arc;

use csv::ByteRecord;

use super::cells::{Cell, is_remark, read_cell};
use super::clock::{Advance, Clock};
use super::clock_plan::ClockPlan;
use super::csv_sniff::Table;
use super::dates::DAY_S;
use super::error::CaptureError;
use super::line_limit::{LONGEST_LINE, LineLimit, TooLong};
use super::stamps::{Stamp, StampFormat};
use super::text::{BlankReader, Encoding, TextReader};

/// How the text of a file is read.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(super) struct Source {
    pub path: PathBuf,
    pub encoding: Encoding,
    pub cr_only: bool,
}

impl Source {
    pub(super) fn open(&self) -> Result<TextReader<File>, CaptureError> {
        Ok(TextReader::new(
            File::open(&self.path)?,
            self.encoding,
            self.cr_only,
        ))
    }
}

/// What a row is in time.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) struct Row {
    /// 1-based line in the file.
    pub line: u64,
    /// Frames missing before it.
    pub missing: u64,
}

/// Reads rows one by one into a record that is reused.
pub(super) struct Rows {
    table: Arc<Table>,
    reader: csv::Reader<LineLimit<BlankReader<TextReader<File>>>>,
    record: ByteRecord,
    origin: Option<Stamp>,
    /// Seconds of the days that clock times have passed, and the last one.
    days: f64,
    last: f64,
    pub clock: Option<Clock>,
    pub counts: RowCounts,
}

/// What was met on the way, for the notes.
#[derive(Debug, Clone, Copy, Default, PartialEq)]
pub(super) struct RowCounts {
    pub rows: u64,
    /// Lines without any number, left out.
    pub wordy: u64,
    /// Rows with fewer or more cells than usual.
    pub short: u64,
    pub long: u64,
    pub last_line: u64,
    /// Line of the first stamp that did not increase, and of the first that
    /// could not be read.
    pub first_back: Option<u64>,
    pub first_unstamped: Option<u64>,
}

impl std::fmt::Debug for Rows {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Rows")
            .field("counts", &self.counts)
            .finish_non_exhaustive()
    }
}

impl Rows {
    /// Opens the file again at its first row of numbers.
    pub(super) fn open(
        source: &Source,
        table: &Arc<Table>,
        plan: Option<ClockPlan>,
    ) -> Result<Rows, CaptureError> {
        let mut text = source.open()?;
        std::io::copy(
            &mut text.by_ref().take(table.skip_bytes),
            &mut std::io::sink(),
        )?;
        let text = BlankReader::new(text, table.delimiter == b' ');
        let reader = csv::ReaderBuilder::new()
            .has_headers(false)
            .flexible(true)
            .delimiter(table.delimiter)
            .quoting(table.quoted)
            .buffer_capacity(64 * 1024)
            .from_reader(LineLimit::new(text, table.delimiter, table.quoted));
        Ok(Rows {
            table: Arc::clone(table),
            reader,
            record: ByteRecord::new(),
            origin: None,
            days: 0.0,
            last: 0.0,
            clock: plan.map(Clock::new),
            counts: RowCounts::default(),
        })
    }

    /// The next row; its cells are then in [`Self::value`].
    pub(super) fn next_row(&mut self) -> Result<Option<Row>, CaptureError> {
        while self.read_record()? {
            let line = self.counts.last_line;
            let stamp = self.stamp();
            if stamp.is_none() && self.table.time.is_some() && !self.has_number() {
                self.counts.wordy += u64::from(!self.is_blank());
                continue;
            }
            let missing = match &mut self.clock {
                None => 0,
                Some(clock) => {
                    let before = clock.counts;
                    let advance = clock.take(stamp);
                    let after = clock.counts;
                    if after.back + after.repeated > before.back + before.repeated {
                        self.counts.first_back.get_or_insert(line);
                    }
                    if after.unstamped > before.unstamped {
                        self.counts.first_unstamped.get_or_insert(line);
                    }
                    match advance {
                        Advance::Frame { missing } => missing,
                        Advance::Drop => {
                            self.counts.rows += 1;
                            continue;
                        }
                    }
                }
            };
            self.counts.rows += 1;
            let width = self.table.columns.len();
            self.counts.short += u64::from(self.record.len() < width);
            self.counts.long += u64::from(self.record.len() > width && self.has_surplus());
            return Ok(Some(Row { line, missing }));
        }
        Ok(None)
    }

    /// Reads a record that is no remark; `false` at the end.
    fn read_record(&mut self) -> Result<bool, CaptureError> {
        let first_line = self.table.first_line;
        loop {
            let more = self
                .reader
                .read_byte_record(&mut self.record)
                .map_err(|e| plain_error(e, first_line))?;
            if !more {
                return Ok(false);
            }
            super::limit_channels(self.record.len() as u64)?;
            let line = self.record.position().map_or(0, csv::Position::line);
            self.counts.last_line = first_line + line.saturating_sub(1);
            let first = self.record.get(0).unwrap_or_default();
            if !is_remark(first, self.table.delimiter) {
                return Ok(true);
            }
        }
    }

    /// Seconds since the first stamp.
    pub(super) fn stamp(&mut self) -> Option<f64> {
        let time = self.table.time?;
        let stamp = time.format.read(self.record.get(time.column)?)?;
        let origin = *self.origin.get_or_insert(stamp);
        let mut since = stamp.since(origin) + self.days;
        // Past midnight, a clock time goes back by most of a day.
        if time.format == StampFormat::ClockTime {
            const DAY: f64 = DAY_S as f64;
            if since < self.last - DAY / 2.0 {
                self.days += DAY;
                since += DAY;
            }
            self.last = since;
        }
        Some(since)
    }

    /// The first stamp, in seconds.
    pub(super) fn origin_s(&self) -> Option<f64> {
        self.origin.map(|stamp| stamp.seconds as f64 + stamp.rest)
    }

    fn has_number(&self) -> bool {
        let mut values = self.table.values.iter();
        values.any(|&column| matches!(self.value(column), Cell::Number(_)))
    }

    fn is_blank(&self) -> bool {
        self.record.iter().all(|cell| cell.trim_ascii().is_empty())
    }

    fn has_surplus(&self) -> bool {
        let surplus = self.record.iter().skip(self.table.columns.len());
        surplus
            .into_iter()
            .any(|cell| !cell.trim_ascii().is_empty())
    }

    /// Bytes of a cell of the current row.
    pub(super) fn bytes(&self, column: usize) -> &[u8] {
        self.record.get(column).unwrap_or_default()
    }

    /// A cell of the current row.
    pub(super) fn value(&self, column: usize) -> Cell {
        read_cell(self.bytes(column))
    }
}

fn plain_error(error: csv::Error, first_line: u64) -> CaptureError {
    match error.into_kind() {
        csv::ErrorKind::Io(io) => match io.downcast::<TooLong>() {
            Ok(TooLong { line }) => CaptureError::LineTooLong {
                line: first_line + line,
                limit: LONGEST_LINE,
            },
            Err(io) => io.into(),
        },
        // No other kind arises from reading flexible byte records.
        other => std::io::Error::other(format!("{other:?}")).into(),
    }
}
