//! Tables of samples as text: one row per sample, one column per channel.

use std::io::Read;
use std::path::PathBuf;
use std::sync::Arc;

use super::cells::Cell;
use super::clock::Clock;
use super::clock_plan::{ClockPlan, ClockProbe};
use super::csv_rows::{RowCounts, Rows, Source};
use super::csv_sniff::{Table, sniff};
use super::error::{CaptureError, excerpt};
use super::text::{Encoding, LONGEST_LINE};
use super::{Block, Channel, OpenOptions, Spec};

/// Share of words in a column, or of bad stamps, that is no longer a slip.
const MOST_BAD: f64 = 0.2;
/// Frames missing per row in the file beyond which the stamps are not believed.
const MOST_MISSING_PER_ROW: u64 = 100;

/// All that is needed to pass over the samples.
#[derive(Debug, Clone)]
pub(super) struct CsvRecipe {
    source: Source,
    table: Arc<Table>,
    plan: Option<ClockPlan>,
    /// Column and offset of each channel.
    channels: Vec<(usize, f64)>,
    frames: u64,
}

/// Finds out the table's layout from its first lines, then reads it through
/// once.
pub(super) fn open(
    path: PathBuf,
    options: &OpenOptions,
) -> Result<(Spec, CsvRecipe), CaptureError> {
    let (source, table) = read_head(path, options)?;
    let table = Arc::new(table);
    let plan = match table.time {
        Some(time) => match plan_clock(&source, &table)? {
            Ok(plan) => Some(plan),
            Err(rows) => {
                return Err(CaptureError::TimeNotIncreasing {
                    name: table.column_name(time.column),
                    bad: rows.saturating_sub(1),
                    rows,
                    line: table.first_line + 1,
                });
            }
        },
        None => None,
    };
    let scan = Scan::run(&source, &table, plan)?;
    let mut notes = table.notes.clone();
    scan.check(&table)?;
    scan.note(&table, &mut notes);
    let channels: Vec<(usize, f64)> = scan
        .columns
        .iter()
        .filter_map(|column| Some((column.column, column.first?)))
        .collect();
    let rate_hz = rate(&scan, &table, options, &mut notes)?;
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
        notes,
    };
    let frames = scan.frames;
    Ok((
        spec,
        CsvRecipe {
            source,
            table,
            plan,
            channels,
            frames,
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

fn rate(
    scan: &Scan,
    table: &Table,
    options: &OpenOptions,
    notes: &mut Vec<String>,
) -> Result<f64, CaptureError> {
    let measured = scan.clock.as_ref().map(Clock::rate_hz).or(table.rate_hz);
    match (options.rate_hz, measured) {
        (Some(rate_hz), Some(measured)) => {
            const SAME: f64 = 1e-3;
            if (rate_hz / measured - 1.0).abs() > SAME {
                notes.push(format!(
                    "sample rate {measured:.6} Hz from the time column overridden by --rate"
                ));
            }
            Ok(rate_hz)
        }
        (Some(rate_hz), None) | (None, Some(rate_hz)) => Ok(rate_hz),
        (None, None) => Err(CaptureError::NoTime),
    }
}

/// What one pass over all rows found.
struct Scan {
    columns: Vec<ColumnScan>,
    frames: u64,
    counts: RowCounts,
    clock: Option<Clock>,
}

#[derive(Debug, Clone, Default)]
struct ColumnScan {
    column: usize,
    /// First number.
    first: Option<f64>,
    numbers: u64,
    words: u64,
    /// Line and cell of the first word.
    word: Option<(u64, String)>,
}

impl Scan {
    fn run(
        source: &Source,
        table: &Arc<Table>,
        plan: Option<ClockPlan>,
    ) -> Result<Scan, CaptureError> {
        let mut rows = Rows::open(source, table, plan)?;
        let mut columns: Vec<ColumnScan> = table
            .values
            .iter()
            .map(|&column| ColumnScan {
                column,
                ..ColumnScan::default()
            })
            .collect();
        let mut frames = 0u64;
        // A jump beyond this is refused, even if the file turned out that long.
        let mut longest_gap = (0, 0);
        while let Some(row) = rows.next_row()? {
            frames = frames.saturating_add(row.missing).saturating_add(1);
            if row.missing > longest_gap.0 {
                longest_gap = (row.missing, row.line);
            }
            for column in &mut columns {
                match rows.value(column.column) {
                    Cell::Number(number) => {
                        column.first.get_or_insert(number);
                        column.numbers += 1;
                    }
                    Cell::Missing => {}
                    Cell::Word => {
                        column.words += 1;
                        if column.word.is_none() {
                            column.word = Some((row.line, excerpt(rows.bytes(column.column))));
                        }
                    }
                }
            }
        }
        let counts = rows.counts;
        if longest_gap.0 > counts.rows.saturating_mul(MOST_MISSING_PER_ROW) {
            let (missing, line) = longest_gap;
            return Err(CaptureError::GapTooLong {
                line,
                missing,
                rows: counts.rows,
            });
        }
        Ok(Scan {
            columns,
            frames,
            counts,
            clock: rows.clock,
        })
    }

    /// Refuses a file that is mostly something else than it seemed.
    fn check(&self, table: &Table) -> Result<(), CaptureError> {
        let rows = self.counts.rows;
        if rows == 0 {
            return Err(CaptureError::NoSamples);
        }
        for column in &self.columns {
            let cells = column.numbers + column.words;
            let Some((line, text)) = &column.word else {
                continue;
            };
            if column.words as f64 > MOST_BAD * cells as f64 {
                return Err(CaptureError::NotANumber {
                    line: *line,
                    column: column.column + 1,
                    text: text.clone(),
                    share: format!("nor are {} of {cells} cells in this column", column.words),
                });
            }
        }
        if self.columns.iter().all(|column| column.first.is_none()) {
            return Err(CaptureError::NoNumbers);
        }
        let (Some(clock), Some(time)) = (&self.clock, table.time) else {
            return Ok(());
        };
        let counts = clock.counts;
        if 2 * (counts.back + counts.repeated) > rows {
            return Err(CaptureError::TimeNotIncreasing {
                name: table.column_name(time.column),
                bad: counts.back + counts.repeated,
                rows,
                line: self.counts.first_back.unwrap_or(table.first_line),
            });
        }
        if counts.unstamped as f64 > MOST_BAD * rows as f64 {
            return Err(CaptureError::BadStamps {
                line: self.counts.first_unstamped.unwrap_or(table.first_line),
                column: time.column + 1,
                bad: counts.unstamped,
                rows,
            });
        }
        Ok(())
    }

    /// Says what was mended.
    fn note(&self, table: &Table, notes: &mut Vec<String>) {
        let mut note = |count: u64, what: &str| {
            if count > 0 {
                notes.push(format!("{count} {what}"));
            }
        };
        note(self.counts.wordy, "lines without a number were left out");
        note(
            self.counts.short,
            "rows have fewer cells than the others: taken as missing",
        );
        note(
            self.counts.long,
            "rows have more cells than the others: the surplus was left out",
        );
        if let Some(clock) = &self.clock {
            let counts = clock.counts;
            note(
                counts.repeated,
                "rows repeat the stamp before them: left out",
            );
            note(
                counts.back,
                "rows step back in time: taken as the next samples",
            );
            note(
                counts.unstamped,
                "rows have no readable time: taken as the next samples",
            );
            if counts.gaps > 0 {
                notes.push(format!(
                    "{} gaps in the time column: {} missing samples were filled in as missing",
                    counts.gaps, counts.missing
                ));
            }
            clock.note(notes);
        }
        for column in &self.columns {
            let name = table.column_name(column.column);
            if column.first.is_none() {
                notes.push(format!("column {name:?} holds no numbers: left out"));
            } else if let Some((line, text)) = &column.word {
                notes.push(format!(
                    "{} cells of column {name:?} are no numbers (first: line {line}, {text:?}): taken as missing",
                    column.words
                ));
            }
        }
    }
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
fn narrow(value: f64) -> f32 {
    let value = value as f32;
    if value.is_finite() { value } else { f32::NAN }
}
