//! Tables of samples as text: one row per sample, one column per channel.

use std::io::Read;
use std::path::PathBuf;
use std::sync::Arc;

use super::cells::Cell;
use super::clock::Clock;
use super::clock_plan::{ClockPlan, ClockProbe};
use super::csv_rows::{Rows, Source};
use super::csv_scan::Scan;
use super::csv_sniff::{Table, sniff};
use super::error::CaptureError;
use super::line_limit::LONGEST_LINE;
use super::stamped::StampedBlocks;
use super::text::Encoding;
use super::wording::nine_digits;
use super::{Block, Channel, OpenOptions, Spec};

/// All that is needed to pass over the samples.
#[derive(Debug, Clone)]
pub(super) struct CsvRecipe {
    source: Source,
    table: Arc<Table>,
    plan: Option<ClockPlan>,
    /// Column and offset of each channel.
    channels: Vec<(usize, f64)>,
    frames: u64,
    gaps: u64,
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
        Err(
            CaptureError::TimeNotIncreasing { .. }
            | CaptureError::BadStamps { .. }
            | CaptureError::GapTooLong { .. },
        ) if options.rate_hz.is_some() => read_through(&source, &table.without_time(), options),
        result => result,
    }
}

fn read_through(
    source: &Source,
    table: &Table,
    options: &OpenOptions,
) -> Result<(Spec, CsvRecipe), CaptureError> {
    let table = Arc::new(table.clone());
    let plan =
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
    let scan = Scan::run(source, &table, plan)?;
    scan.check(&table)?;
    let mut notes = table.notes.clone();
    scan.note(&table, &mut notes);
    let rate_hz = rate(&scan, &table, options, &mut notes)?;
    let columns = scan.columns.iter();
    let channels: Vec<(usize, f64)> = columns
        .filter_map(|column| Some((column.column, column.first?)))
        .collect();
    let described = channels.iter().map(|&(column, offset)| Channel {
        name: table.column_name(column),
        unit: table
            .columns
            .get(column)
            .and_then(|heading| heading.unit.clone()),
        offset,
    });
    let spec = Spec {
        path: source.path.clone(),
        rate_hz,
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
            gaps: scan.clock.map_or(0, |clock| clock.counts.gaps),
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
    source.encoding = Encoding::of(&start).ok_or(CaptureError::NotARecording)?;
    let mut head = Vec::new();
    // One byte more than a line may have, so that a longer one shows.
    let limit = LONGEST_LINE + 1;
    source
        .open()?
        .take(limit as u64 + 1)
        .read_to_end(&mut head)?;
    let whole = head.len() <= limit;
    source.cr_only = !head.contains(&b'\n') && head.contains(&b'\r');
    if source.cr_only {
        head.iter_mut()
            .filter(|byte| **byte == b'\r')
            .for_each(|byte| *byte = b'\n');
    }
    let table = sniff(&head, whole, options.rate_hz.is_some())?;
    Ok((source, table))
}

/// The sample period from as many first rows as it takes; the number of rows
/// where time never moves.
fn plan_clock(source: &Source, table: &Arc<Table>) -> Result<Result<ClockPlan, u64>, CaptureError> {
    let mut rows = Rows::open(source, table, None)?;
    let mut probe = ClockProbe::default();
    while rows.next_row()?.is_some() {
        if rows.stamp().is_some_and(|stamp| probe.take(stamp)) {
            break;
        }
    }
    Ok(probe.plan().ok_or(rows.counts.rows))
}

/// The rate that counts, with a note of what was taken over what: one from the
/// user before the time column, and that before a line above the table.
fn rate(
    scan: &Scan,
    table: &Table,
    options: &OpenOptions,
    notes: &mut Vec<String>,
) -> Result<f64, CaptureError> {
    let stamped = scan.clock.as_ref().map(Clock::rate_hz);
    let told = match (stamped, table.told_rate) {
        (Some(stamped), _) => Some((stamped, "the time column".to_owned())),
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
            Ok(given)
        }
        (None, Some((told, place))) => {
            if stamped.is_none() {
                notes.push(format!(
                    "sample rate {} Hz taken from {place}",
                    nine_digits(told)
                ));
            }
            Ok(told)
        }
        (Some(given), None) => Ok(given),
        (None, None) => Err(CaptureError::NoTime),
    }
}

impl CsvRecipe {
    pub(super) fn gaps(&self) -> u64 {
        self.gaps
    }

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
    channels: Vec<(usize, f64)>,
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
            for (samples, &(column, offset)) in block.samples.iter_mut().zip(&self.channels) {
                samples.push(match self.rows.value(column) {
                    Cell::Number(number) => narrow(number - offset),
                    _ => f32::NAN,
                });
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
pub(super) fn narrow(value: f64) -> f32 {
    let value = value as f32;
    if value.is_finite() { value } else { f32::NAN }
}
