//! Tables of samples as text: one row per sample, one column per channel.

use std::io::Read;
use std::path::PathBuf;
use std::sync::Arc;

use super::cells::Cell;
use super::clock::Clock;
use super::clock_plan::{ClockPlan, ClockProbe};
use super::csv_rows::{Rows, Source};
use super::csv_scan::{ColumnScan, Scan};
use super::csv_sniff::{Table, TimeColumn, sniff};
use super::csv_split::end_lines;
use super::error::CaptureError;
use super::line_limit::LONGEST_LINE;
use super::numbers::DecimalStyle;
use super::options::TextEncoding;
use super::stamped::StampedBlocks;
use super::stamps::StampFormat;
use super::text::Encoding;
use super::wording::nine_digits;
use super::{Block, Channel, OpenOptions, Spec};

/// All that is needed to pass over the samples.
#[derive(Debug, Clone)]
pub(super) struct CsvRecipe {
    source: Source,
    table: Arc<Table>,
    plan: Option<ClockPlan>,
    channels: Vec<Place>,
    frames: u64,
}

/// Where a channel's samples are.
#[derive(Debug, Clone, Copy)]
pub(super) struct Place {
    column: usize,
    /// Subtracted from each.
    offset: f64,
    /// The number that stands for none.
    stand_in: Option<f64>,
}

impl Place {
    /// The channel's sample in the current row.
    #[inline]
    pub(super) fn sample(&self, rows: &Rows) -> f32 {
        match rows.value(self.column) {
            Cell::Number(number) if Some(number) != self.stand_in => narrow(number - self.offset),
            _ => f32::NAN,
        }
    }
}

/// Finds out the table's layout from its first lines, then reads it through
/// once. A time column that turns out to be none is done without if the rate
/// is given.
pub(super) fn open(
    path: PathBuf,
    options: &OpenOptions,
) -> Result<(Spec, CsvRecipe), CaptureError> {
    let (source, table) = read_head(path, options)?;
    match read_through(&source, &table, options) {
        Err(CaptureError::TimeNotIncreasing { .. } | CaptureError::BadStamps { .. })
            if options.rate_hz.is_some() =>
        {
            read_through(&source, &table.without_time(), options)
        }
        result => result,
    }
}

fn read_through(
    source: &Source,
    table: &Table,
    options: &OpenOptions,
) -> Result<(Spec, CsvRecipe), CaptureError> {
    let table = Arc::new(table.clone());
    let mut plan =
        match table.time {
            Some(time) => Some(plan_clock(source, &table)?.map_err(|rows| {
                CaptureError::TimeNotIncreasing {
                    name: table.column_name(time.column),
                    bad: rows.saturating_sub(1),
                    rows,
                    line: table.first_line + 1,
                }
            })?),
            None => None,
        };
    let mut scan = Scan::run(source, &table, plan)?;
    scan.check(&table)?;
    if let (Some(longest_gap), Some(plan)) = (scan.longest_believed(), &mut plan) {
        plan.longest_gap = longest_gap;
        scan = Scan::run(source, &table, Some(*plan))?;
        scan.check(&table)?;
    }
    let mut notes = table.notes.clone();
    scan.note(&table, &mut notes);
    let (rate_hz, rate_hz_u95) = rate(&scan, &table, options, &mut notes)?;
    let columns = scan.columns.iter().filter(|column| !column.is_worded());
    let mut channels: Vec<Place> = columns
        .filter_map(|column| {
            Some(Place {
                column: column.column,
                offset: column.origin()?,
                stand_in: column.stand_in().map(|(one, _)| one),
            })
        })
        .collect();
    if channels.is_empty() {
        // Every value is missing, which is worth saying, but no error.
        let columns = scan.columns.iter();
        let place = |column: &ColumnScan| Place {
            column: column.column,
            offset: 0.0,
            stand_in: None,
        };
        channels = columns.map(place).collect();
    }
    let described = channels
        .iter()
        .map(|&Place { column, offset, .. }| Channel {
            name: table.column_name(column),
            unit: table
                .columns
                .get(column)
                .and_then(|heading| heading.unit.clone()),
            offset,
        });
    let gaps = scan.clock.as_ref().map_or(0, |clock| clock.counts.gaps);
    let spec = Spec {
        path: source.path.clone(),
        rate_hz,
        rate_hz_u95,
        read_as: read_as(source, &table)?,
        gaps,
        channels: described.collect(),
        frames: scan.frames,
        format: "CSV".into(),
        normalised: false,
        step: None,
        notes,
    };
    let source = source.clone();
    Ok((
        spec,
        CsvRecipe {
            source,
            table,
            plan,
            channels,
            frames: scan.frames,
        },
    ))
}

fn read_head(path: PathBuf, options: &OpenOptions) -> Result<(Source, Table), CaptureError> {
    let mut source = Source {
        path,
        encoding: Encoding::Bytes,
        cr_only: false,
    };
    let mut start = Vec::new();
    std::fs::File::open(&source.path)?
        .take(4096)
        .read_to_end(&mut start)?;
    source.encoding = match options.layout.encoding {
        Some(TextEncoding::Utf16Le) => Encoding::Utf16Le,
        Some(TextEncoding::Utf16Be) => Encoding::Utf16Be,
        Some(TextEncoding::Utf8) => Encoding::Bytes,
        Some(TextEncoding::Latin1) => Encoding::Latin1,
        None => Encoding::of(&start).ok_or(CaptureError::NotARecording)?,
    };
    let mut head = Vec::new();
    // One byte more than a line may have, so that a longer one shows.
    let limit = LONGEST_LINE + 1;
    source
        .open()?
        .take(limit as u64 + 1)
        .read_to_end(&mut head)?;
    let whole = head.len() <= limit;
    source.cr_only = !head.contains(&b'\n') && head.contains(&b'\r');
    end_lines(&mut head);
    if source.cr_only {
        head.iter_mut()
            .filter(|byte| **byte == b'\r')
            .for_each(|byte| *byte = b'\n');
    }
    let table = sniff(&head, whole, options)?;
    Ok((source, table))
}

/// The sample period from as many first rows as it takes; the number of rows
/// where time never moves.
fn plan_clock(source: &Source, table: &Arc<Table>) -> Result<Result<ClockPlan, u64>, CaptureError> {
    if let Some(StampFormat::Samples { rate_hz }) = table.time.map(|time| time.format) {
        return Ok(Ok(ClockPlan::even(1.0 / rate_hz)));
    }
    let mut rows = Rows::open(source, table, None)?;
    let mut probe = ClockProbe::new(resolution(source, table)?);
    let (mut before, mut row) = (Vec::new(), Vec::new());
    while rows.next_row()?.is_some() {
        row.clear();
        for column in 0..table.columns.len() {
            row.extend_from_slice(rows.bytes(column));
            row.push(table.delimiter);
        }
        let copy = row == before;
        std::mem::swap(&mut row, &mut before);
        if rows
            .last_stamp()
            .is_some_and(|stamp| probe.take(stamp, copy))
        {
            break;
        }
    }
    Ok(probe.plan().ok_or(rows.counts.rows))
}

/// Least step between time stamps that their decimals can tell, in seconds.
fn resolution(source: &Source, table: &Arc<Table>) -> Result<f64, CaptureError> {
    const ROWS: usize = 100;
    let Some(time) = table.time else {
        return Ok(0.0);
    };
    let mut rows = Rows::open(source, table, None)?;
    let mut least = f64::INFINITY;
    for _ in 0..ROWS {
        if rows.next_row()?.is_none() {
            break;
        }
        if let Some(step) = time.format.resolution(rows.bytes(time.column)) {
            least = least.min(step);
        }
    }
    Ok(if least.is_finite() { least } else { 0.0 })
}

/// The rate that counts and the half-width of its 95 % interval where it was
/// measured, with a note of what was taken over what: one from the user before
/// the time column, and that before a line above the table.
fn rate(
    scan: &Scan,
    table: &Table,
    options: &OpenOptions,
    notes: &mut Vec<String>,
) -> Result<(f64, Option<f64>), CaptureError> {
    // A count of samples tells no rate.
    let counted = |time: &TimeColumn| matches!(time.format, StampFormat::Samples { .. });
    let stamped = match table.time {
        Some(time) if !counted(&time) => scan.clock.as_ref().map(Clock::rate_hz),
        _ => None,
    };
    let told = match (stamped, table.told_rate) {
        (Some((stamped, _)), _) => Some((stamped, "the time column".to_owned())),
        (None, Some((line, rate_hz))) => Some((rate_hz, format!("line {line}"))),
        (None, None) => None,
    };
    match (options.rate_hz, told) {
        (Some(given), Some((told, place))) => {
            let (rate, other) = (nine_digits(given), nine_digits(told));
            notes.push(if rate == other {
                format!("sample rate {rate} Hz taken from --rate; {place} tells the same")
            } else {
                format!("sample rate {rate} Hz taken from --rate, not {other} Hz from {place}")
            });
            Ok((given, None))
        }
        (None, Some((told, place))) => {
            if stamped.is_none() {
                notes.push(format!(
                    "sample rate {} Hz taken from {place}",
                    nine_digits(told)
                ));
            }
            Ok((told, stamped.map(|(_, u95)| u95)))
        }
        (Some(given), None) => Ok((given, None)),
        (None, None) => Err(CaptureError::NoTime),
    }
}

/// What was taken for what, one clause each.
fn read_as(source: &Source, table: &Table) -> Result<Vec<String>, CaptureError> {
    let mut clauses = Vec::new();
    match source.encoding {
        Encoding::Bytes => {}
        Encoding::Latin1 => clauses.push("Latin-1".into()),
        Encoding::Utf16Le | Encoding::Utf16Be => clauses.push("UTF-16".into()),
    }
    let width = table.columns.len();
    clauses.push(match table.delimiter {
        _ if width == 1 => "one column".into(),
        b',' => "comma".into(),
        b';' => "semicolon".into(),
        b'\t' => "tab".into(),
        b' ' => "blanks".into(),
        b'|' => "vertical bar".into(),
        other => format!("delimiter {:?}", char::from(other)),
    });
    match (table.decimal, table.marks) {
        (DecimalStyle::Comma, _) | (_, (false, true)) => clauses.push("decimal comma".into()),
        (DecimalStyle::Point, _) | (_, (true, false)) => clauses.push("decimal point".into()),
        (_, (true, true)) => clauses.push("decimal point or comma".into()),
        (_, (false, false)) => {}
    }
    if table.quoted {
        clauses.push("quotes".into());
    }
    clauses.push(match table.names_line {
        Some(line) => format!("names in line {line}"),
        None => "no names".into(),
    });
    clauses.push(format!("rows from line {}", table.first_line));
    match table.time {
        None => clauses.push("no time column".into()),
        Some(time) => {
            let mut rows = Rows::open(source, &Arc::new(table.clone()), None)?;
            rows.next_row()?;
            let words = time.format.words(rows.bytes(time.column));
            clauses.push(format!("time in column {} as {words}", time.column + 1));
        }
    }
    Ok(clauses)
}

impl CsvRecipe {
    pub(super) fn blocks(&self, frames_per_block: usize) -> Result<CsvBlocks, CaptureError> {
        Ok(CsvBlocks {
            rows: Rows::open(&self.source, &self.table, self.plan)?,
            channels: self.channels.clone(),
            frames: self.frames,
            frames_per_block,
            next_frame: 0,
            missing: 0,
            row_waits: false,
        })
    }

    /// Rows with their own times; `None` without a time column.
    pub(super) fn stamped(
        &self,
        rows_per_block: usize,
    ) -> Result<Option<StampedBlocks>, CaptureError> {
        if self.plan.is_none() {
            return Ok(None);
        }
        Ok(Some(StampedBlocks {
            rows: Rows::open(&self.source, &self.table, self.plan)?,
            channels: self.channels.clone(),
            rows_per_block,
            next_frame: 0,
        }))
    }
}

/// One pass over the samples.
#[derive(Debug)]
pub(super) struct CsvBlocks {
    rows: Rows,
    channels: Vec<Place>,
    frames: u64,
    frames_per_block: usize,
    next_frame: u64,
    /// Missing frames still to be handed out before the row that was read.
    missing: u64,
    row_waits: bool,
}

impl CsvBlocks {
    pub(super) fn next_into(&mut self, block: &mut Block) -> Result<bool, CaptureError> {
        block.start(self.next_frame, self.channels.len());
        let mut filled = 0;
        while filled < self.frames_per_block {
            if !self.row_waits {
                match self.rows.next_row()? {
                    Some(row) => self.missing = row.missing,
                    None => break,
                }
                self.row_waits = true;
            }
            if self.missing > 0 {
                let room = self.frames_per_block - filled;
                let n = room.min(usize::try_from(self.missing).unwrap_or(usize::MAX));
                for channel in &mut block.samples {
                    channel.resize(filled + n, f32::NAN);
                }
                self.missing -= n as u64;
                filled += n;
                continue;
            }
            for (samples, place) in block.samples.iter_mut().zip(&self.channels) {
                samples.push(place.sample(&self.rows));
            }
            self.row_waits = false;
            filled += 1;
        }
        self.next_frame += filled as u64;
        let ended = filled < self.frames_per_block;
        if self.next_frame > self.frames || (ended && self.next_frame != self.frames) {
            return Err(CaptureError::Changed {
                what: "it has other rows now".into(),
            });
        }
        Ok(filled > 0)
    }
}

/// NaN is the one mark of a missing sample, also for one beyond `f32`.
fn narrow(value: f64) -> f32 {
    let value = value as f32;
    if value.is_finite() { value } else { f32::NAN }
}
