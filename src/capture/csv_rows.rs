//! The rows of a table in order, each with the samples missing before it.

use std::fs::File;
use std::io::Read;
use std::path::PathBuf;
use std::sync::Arc;

use csv::ByteRecord;

use super::cells::{Cell, read_cell, trim};
use super::clock::{Advance, Clock};
use super::clock_plan::ClockPlan;
use super::csv_sniff::Table;
use super::csv_split::Splitter;
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

type Text = BlankReader<TextReader<File>>;

/// Records one after the other; each takes the place of the one before.
enum Records {
    Plain(Box<Splitter<Text>>),
    /// Where cells may be in quotes.
    Quoted {
        reader: Box<csv::Reader<LineLimit<Text>>>,
        record: ByteRecord,
    },
}

impl Records {
    /// Goes to the next record and tells its line; `None` at the end.
    fn next(&mut self, first_line: u64) -> Result<Option<u64>, CaptureError> {
        match self {
            Records::Plain(splitter) => {
                let before = splitter.next(first_line)?;
                Ok(before.map(|lines| first_line + lines))
            }
            Records::Quoted { reader, record } => {
                let more = reader
                    .read_byte_record(record)
                    .map_err(|e| plain_error(e, first_line))?;
                let line = record.position().map_or(0, csv::Position::line);
                Ok(more.then(|| first_line + line.saturating_sub(1)))
            }
        }
    }

    fn len(&self) -> usize {
        match self {
            Records::Plain(splitter) => splitter.len(),
            Records::Quoted { record, .. } => record.len(),
        }
    }

    #[inline]
    fn get(&self, cell: usize) -> Option<&[u8]> {
        match self {
            Records::Plain(splitter) => splitter.get(cell),
            Records::Quoted { record, .. } => record.get(cell),
        }
    }

    /// Whether the cells from `first` on are blank.
    fn is_blank_from(&self, first: usize) -> bool {
        (first..self.len()).all(|cell| {
            self.get(cell)
                .is_none_or(|cell| cell.trim_ascii().is_empty())
        })
    }
}

/// Reads rows one by one.
pub(super) struct Rows {
    table: Arc<Table>,
    records: Records,
    origin: Option<Stamp>,
    /// Seconds added for midnights passed and hours of daylight saving.
    shift: f64,
    last: f64,
    last_stamp: Option<f64>,
    /// The last step that was not 0.
    usual_step: f64,
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
    /// Hours that daylight saving took or gave.
    pub daylight: u64,
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
        let records = if table.quoted {
            let reader = csv::ReaderBuilder::new()
                .has_headers(false)
                .flexible(true)
                .delimiter(table.delimiter)
                .buffer_capacity(64 * 1024)
                .from_reader(LineLimit::new(text, table.delimiter, true));
            Records::Quoted {
                reader: Box::new(reader),
                record: ByteRecord::new(),
            }
        } else {
            Records::Plain(Box::new(Splitter::new(text, table.delimiter, table.paired)))
        };
        Ok(Rows {
            table: Arc::clone(table),
            records,
            origin: None,
            shift: 0.0,
            last: 0.0,
            last_stamp: None,
            usual_step: 0.0,
            clock: plan.map(Clock::new),
            counts: RowCounts::default(),
        })
    }

    /// The next row; its cells are then in [`Self::value`].
    pub(super) fn next_row(&mut self) -> Result<Option<Row>, CaptureError> {
        while self.read_record()? {
            let line = self.counts.last_line;
            let stamp = self.stamp();
            self.last_stamp = stamp;
            if stamp.is_none() && self.is_wordy() {
                self.counts.wordy += u64::from(!self.records.is_blank_from(0));
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
            let cells = self.records.len();
            self.counts.short += u64::from(cells < width);
            self.counts.long += u64::from(cells > width && !self.records.is_blank_from(width));
            return Ok(Some(Row { line, missing }));
        }
        Ok(None)
    }

    /// Reads a record that is no remark; `false` at the end.
    fn read_record(&mut self) -> Result<bool, CaptureError> {
        let table = &self.table;
        while let Some(line) = self.records.next(table.first_line)? {
            super::limit_channels(self.records.len() as u64)?;
            self.counts.last_line = line;
            let first = self.records.get(0).unwrap_or_default();
            if !table.remarks.marks(first, table.delimiter) {
                return Ok(true);
            }
        }
        Ok(false)
    }

    /// Seconds from the first stamp to that of the current row.
    pub(super) fn last_stamp(&self) -> Option<f64> {
        self.last_stamp
    }

    /// Seconds since the first stamp.
    fn stamp(&mut self) -> Option<f64> {
        const DAY: f64 = DAY_S as f64;
        const HOUR: f64 = 3600.0;
        let time = self.table.time?;
        let cell = self.records.get(time.column)?;
        let mut stamp = time
            .format
            .read(self.table.without_unit(cell, time.column))?;
        if let Some((column, format)) = time.fraction {
            let fraction = format.read(self.records.get(column)?)?;
            stamp.seconds = stamp.seconds.saturating_add(fraction.seconds);
            stamp.rest += fraction.rest;
        }
        let origin = *self.origin.get_or_insert(stamp);
        let since = match time.backwards {
            false => stamp.since(origin),
            true => origin.since(stamp),
        };
        let mut since = since + self.shift;
        let step = since - self.last;
        // Past midnight, a clock time goes back by most of a day.
        if time.format == StampFormat::ClockTime && step < -DAY / 2.0 {
            self.shift += DAY;
            since += DAY;
        } else if time.local && self.passes_daylight_saving(stamp, step) {
            self.shift -= HOUR * step.signum();
            since -= HOUR * step.signum();
            self.counts.daylight += 1;
        }
        if since != self.last {
            self.usual_step = since - self.last;
        }
        self.last = since;
        Some(since)
    }

    /// Whether a step in local time is an hour that daylight saving took or
    /// gave: between one step and the next an hour more or less, at a full hour,
    /// where steps are far shorter.
    fn passes_daylight_saving(&self, stamp: Stamp, step: f64) -> bool {
        const HOUR: f64 = 3600.0;
        const LONGEST: f64 = 60.0;
        let usual = self.usual_step;
        let off = step.abs() - HOUR - usual * step.signum();
        let past_hour = stamp.seconds.rem_euclid(3600) as f64 + stamp.rest;
        let slack = 1.5 * usual + 1e-6;
        usual > 0.0 && usual < LONGEST && off.abs() <= slack && past_hour <= usual + slack
    }

    /// The first stamp, in seconds.
    pub(super) fn origin_s(&self) -> Option<f64> {
        self.origin.map(|stamp| stamp.seconds as f64 + stamp.rest)
    }

    /// Whether a row without a stamp is no row of samples: nothing in it, or a
    /// heading again. Without a time column, an empty row is a missing sample
    /// if it has as many cells as the others.
    fn is_wordy(&self) -> bool {
        let table = &self.table;
        let mut values = table.values.iter().map(|&column| self.value(column));
        match table.time {
            Some(_) => !values.any(|cell| matches!(cell, Cell::Number(_))),
            None if self.records.len() < table.columns.len() => {
                !values.any(|cell| matches!(cell, Cell::Number(_)))
            }
            None => values.all(|cell| cell == Cell::Word),
        }
    }

    /// Bytes of a cell of the current row.
    pub(super) fn bytes(&self, column: usize) -> &[u8] {
        self.records.get(column).unwrap_or_default()
    }

    /// A cell of the current row.
    #[inline]
    pub(super) fn value(&self, column: usize) -> Cell {
        let bytes = self.bytes(column);
        match read_cell(bytes, self.table.decimal) {
            Cell::Word => self.without_unit(bytes, column),
            cell => cell,
        }
    }

    /// A number with the unit that all cells of its column have.
    #[cold]
    fn without_unit(&self, bytes: &[u8], column: usize) -> Cell {
        let number = self.table.without_unit(bytes, column);
        if number.len() == bytes.len() {
            return Cell::Word;
        }
        read_cell(trim(number), self.table.decimal)
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
