//! One pass over all rows of a table: is it what it seemed, and what is mended?

use std::sync::Arc;

use super::cells::Cell;
use super::clock::Clock;
use super::clock_plan::ClockPlan;
use super::csv_rows::{RowCounts, Rows, Source};
use super::csv_sniff::Table;
use super::error::{CaptureError, excerpt};
use super::wording::count;

/// Share of words in a column, or of bad stamps, that is no longer a slip.
const MOST_BAD: f64 = 0.2;
/// Frames missing per row in the file beyond which the stamps are not believed.
const MOST_MISSING_PER_ROW: u64 = 100;

/// What one pass over all rows found.
pub(super) struct Scan {
    pub columns: Vec<ColumnScan>,
    pub frames: u64,
    counts: RowCounts,
    pub clock: Option<Clock>,
    /// Longest gap in frames, and the line after it.
    longest_gap: (u64, u64),
}

#[derive(Debug, Clone, Default)]
pub(super) struct ColumnScan {
    pub column: usize,
    /// First number.
    pub first: Option<f64>,
    numbers: u64,
    words: u64,
    /// Line and cell of the first word.
    word: Option<(u64, String)>,
}

impl Scan {
    pub(super) fn run(
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
        Ok(Scan {
            columns,
            frames,
            counts: rows.counts,
            clock: rows.clock,
            longest_gap,
        })
    }

    /// Refuses a file that is mostly something else than it seemed.
    pub(super) fn check(&self, table: &Table) -> Result<(), CaptureError> {
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
                    share: format!("words in {} of {cells} cells of this column", column.words),
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
        if counts.unstamped as f64 > MOST_BAD * rows as f64 {
            return Err(CaptureError::BadStamps {
                line: self.counts.first_unstamped.unwrap_or(table.first_line),
                column: time.column + 1,
                bad: counts.unstamped,
                rows,
            });
        }
        // A few steps back are slips or a clock that was set; more are no time.
        if counts.back > rows / 10 || counts.back + counts.repeated > rows / 2 {
            return Err(CaptureError::TimeNotIncreasing {
                name: table.column_name(time.column),
                bad: counts.back + counts.repeated,
                rows,
                line: self.counts.first_back.unwrap_or(table.first_line),
            });
        }
        if counts.missing > rows.saturating_mul(MOST_MISSING_PER_ROW) {
            let (missing, line) = self.longest_gap;
            return Err(CaptureError::GapTooLong {
                line,
                missing,
                rows,
            });
        }
        Ok(())
    }

    /// Says what was mended.
    pub(super) fn note(&self, table: &Table, notes: &mut Vec<String>) {
        let mut note = |n: u64, one: &str, many: &str, fate: &str| {
            if n > 0 {
                notes.push(format!("{}: {fate}", count(n, one, many)));
            }
        };
        note(
            self.counts.wordy,
            "line without a number",
            "lines without a number",
            "left out",
        );
        note(
            self.counts.short,
            "row has fewer cells than the others",
            "rows have fewer cells than the others",
            "taken as missing",
        );
        note(
            self.counts.long,
            "row has more cells than the others",
            "rows have more cells than the others",
            "the surplus was left out",
        );
        if let Some(clock) = &self.clock {
            let counts = clock.counts;
            note(
                counts.repeated,
                "row repeats the stamp before it",
                "rows repeat the stamp before them",
                "left out",
            );
            let next = "taken in the order of the file";
            note(
                counts.back,
                "row steps back in time",
                "rows step back in time",
                next,
            );
            note(
                counts.unstamped,
                "row has no readable time",
                "rows have no readable time",
                next,
            );
            if counts.gaps > 0 {
                notes.push(format!(
                    "{} in the time column: {} filled in as missing",
                    count(counts.gaps, "gap", "gaps"),
                    count(counts.missing, "sample was", "samples were"),
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
                    "column {name:?} has {} (first: line {line}, {text:?}): taken as missing",
                    count(
                        column.words,
                        "cell that is no number",
                        "cells that are no numbers"
                    ),
                ));
            }
        }
    }
}
