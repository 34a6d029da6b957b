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

/// Numbers that loggers write where they have none (common practice).
const STAND_INS: [f64; 10] = [
    -9999.0, -999.0, -99999.0, -999.25, -9999.9, -999.9, 9999.0, 99999.0, 999_999.0, -999_999.0,
];

/// What one pass over all rows found.
pub(super) struct Scan {
    pub columns: Vec<ColumnScan>,
    pub frames: u64,
    counts: RowCounts,
    pub clock: Option<Clock>,
    /// Line after the longest gap.
    longest_gap: (u64, u64),
}

#[derive(Debug, Clone, Default)]
pub(super) struct ColumnScan {
    pub column: usize,
    /// First number that is no stand-in.
    pub first: Option<f64>,
    numbers: u64,
    /// Least and largest number that is no stand-in.
    range: Option<(f64, f64)>,
    /// How often each stand-in was met.
    stand_ins: [u64; STAND_INS.len()],
    words: u64,
    /// Line and cell of the first word.
    word: Option<(u64, String)>,
}

impl ColumnScan {
    fn take(&mut self, number: f64) {
        self.numbers += 1;
        if number.abs() >= 999.0
            && let Some(place) = STAND_INS.iter().position(|&one| one == number)
            && let Some(count) = self.stand_ins.get_mut(place)
        {
            *count += 1;
            return;
        }
        self.first.get_or_insert(number);
        self.range = Some(match self.range {
            Some((least, most)) => (least.min(number), most.max(number)),
            None => (number, number),
        });
    }

    /// A number that stands for none, and how often: one far from all others,
    /// which are most.
    pub(super) fn stand_in(&self) -> Option<(f64, u64)> {
        const FAR: f64 = 3.0;
        let (least, most) = self.range?;
        let far = |one: f64| {
            let off = if one < least { least - one } else { one - most };
            off > FAR * (most - least)
        };
        let mut met = STAND_INS.iter().zip(self.stand_ins);
        let (&one, count) = met.find(|&(&one, count)| count > 0 && far(one))?;
        (2 * count < self.numbers).then_some((one, count))
    }

    /// Too many words for slips.
    pub(super) fn is_worded(&self) -> bool {
        self.words as f64 > MOST_BAD * (self.numbers + self.words) as f64
    }

    fn share_of_words(&self) -> String {
        format!(
            "words in {} of {} cells of this column",
            self.words,
            self.numbers + self.words
        )
    }

    /// Any number, to measure the others from.
    pub(super) fn origin(&self) -> Option<f64> {
        let stand_in = || {
            let mut met = STAND_INS.iter().zip(self.stand_ins);
            met.find(|(_, count)| *count > 0).map(|(&one, _)| one)
        };
        self.first.or_else(stand_in)
    }
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
                    Cell::Number(number) => column.take(number),
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
        // A column of remarks costs nothing as long as there is one of numbers.
        let all_worded = self.columns.iter().all(ColumnScan::is_worded);
        if let Some(column) = self.columns.iter().find(|_| all_worded)
            && let Some((line, text)) = &column.word
        {
            return Err(CaptureError::NotANumber {
                line: *line,
                column: column.column + 1,
                text: text.clone(),
                share: column.share_of_words(),
            });
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
        Ok(())
    }

    /// The longest gap to believe in, in frames, if the gaps are too long for
    /// the rows: longer ones are a clock that was set.
    pub(super) fn longest_believed(&self) -> Option<u64> {
        let rows = self.counts.rows;
        let counts = self.clock.as_ref()?.counts;
        (counts.missing > rows.saturating_mul(MOST_MISSING_PER_ROW)).then_some(rows)
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
            note(
                counts.set_ahead,
                "jump ahead in time is too long for a gap",
                "jumps ahead in time are too long for gaps",
                "taken as a clock that was set, with no sample lost",
            );
            note(
                self.counts.daylight,
                "hour of daylight saving",
                "hours of daylight saving",
                "taken as a step of the clock, with no sample lost",
            );
            if counts.gaps > 0 {
                let (longest, line) = self.longest_gap;
                notes.push(format!(
                    "{} in the time column: {} filled in as missing (the longest, {longest}, before line {line})",
                    count(counts.gaps, "gap", "gaps"),
                    count(counts.missing, "sample was", "samples were"),
                ));
            }
            clock.note(notes);
        }
        for column in &self.columns {
            let name = table.column_name(column.column);
            if let Some((one, count)) = column.stand_in() {
                notes.push(format!(
                    "column {name:?}: {one} stands for no value {count} times: taken as missing"
                ));
            }
            if column.origin().is_none()
                && self.columns.iter().any(|other| other.origin().is_some())
            {
                notes.push(format!("column {name:?} holds no numbers: left out"));
            } else if column.origin().is_none() {
                notes.push(format!("column {name:?} holds no numbers"));
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
