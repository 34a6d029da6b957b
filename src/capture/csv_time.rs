//! Which column of a table is the time, and in which unit.

use csv::ByteRecord;

use super::cells::{Cell, Heading, read_cell};
use super::csv_sniff::{Table, TimeColumn};
use super::error::CaptureError;
use super::stamps::{Stamp, StampFormat};

/// Words in the heading of a time column.
const TIME_WORDS: &[&str] = &[
    "t",
    "time",
    "times",
    "timestamp",
    "timestamps",
    "stamp",
    "elapsed",
    "datetime",
    "utc",
    "epoch",
];

/// Words in the heading of a column that counts rows.
const INDEX_WORDS: &[&str] = &[
    "index", "idx", "sample", "samples", "n", "no", "nr", "row", "record", "count", "counter", "i",
    "k", "point", "id", "line", "frame",
];

/// What the first rows say of a column as a time.
struct Trial {
    format: StampFormat,
    read: usize,
    /// Steps from one stamp to the next.
    steps: Vec<f64>,
}

/// Finds the time column, if there is one, and leaves out columns that only
/// count the rows.
pub(super) fn find_time(
    table: &mut Table,
    rows: &[&ByteRecord],
    rate_known: bool,
) -> Result<(), CaptureError> {
    let mut best: Option<(usize, TimeColumn)> = None;
    let mut times = Vec::new();
    for (column, heading) in table.columns.iter().enumerate() {
        let Some(named) = named_time(heading) else {
            continue;
        };
        let trial = Trial::of(rows, column, named.format);
        // Most cells must be times; a name that is none must at least run like one.
        if trial.read * 2 <= rows.len() || !(named.sure || trial.is_steady()) {
            continue;
        }
        let faults = trial.steps.iter().filter(|&&step| step <= 0.0).count();
        if trial.mostly_ahead() {
            times.push(column);
        }
        if best.as_ref().is_none_or(|&(least, _)| faults < least) {
            best = Some((
                faults,
                TimeColumn {
                    column,
                    format: trial.format,
                },
            ));
        }
    }
    table.time = best.map(|(_, time)| time);
    if let Some(time) = table.time {
        let cells: Vec<&[u8]> = rows
            .iter()
            .map(|row| row.get(time.column).unwrap_or_default())
            .collect();
        table.notes.extend(time.format.assumption(&cells));
    }
    for column in times {
        if table.time.is_some_and(|time| time.column != column) {
            table.leave_out(column, "is a second time");
        }
    }
    for column in 0..table.columns.len() {
        let is_time = table.time.is_some_and(|time| time.column == column);
        if !is_time && counts_rows(table, rows, column) {
            table.leave_out(column, "only counts the rows");
        }
    }
    if table.time.is_none() && !table.left_out(0) {
        time_in_first_column(table, rows, rate_known);
    }
    match table.time {
        Some(_) => Ok(()),
        None if rate_known => Ok(()),
        None if table.left_out(0) => Err(CaptureError::OnlyIndex),
        None => Err(CaptureError::NoTime),
    }
}

/// The first column of numbers, if it runs on in even steps under no or another
/// name, is taken as seconds, unless its steps are whole: then nothing says
/// seconds.
fn time_in_first_column(table: &mut Table, rows: &[&ByteRecord], rate_known: bool) {
    let full = (0..table.columns.len().saturating_sub(1))
        .map(|column| (column, Trial::of(rows, column, None)))
        .find(|(_, trial)| trial.read == rows.len());
    let Some((column, trial)) = full else {
        return;
    };
    let heading = table.columns.get(column);
    let other_unit = heading.is_some_and(|heading| heading.unit.is_some());
    if other_unit || table.left_out(column) || !trial.is_steady() {
        return;
    }
    let seconds = trial.format == StampFormat::Decimal { exponent: 0 };
    if seconds && trial.steps.iter().all(|step| step.fract() == 0.0) {
        if rate_known {
            table.leave_out(column, "runs evenly in an unknown unit");
        }
        return;
    }
    table.time = Some(TimeColumn {
        column,
        format: trial.format,
    });
    let unit = if seconds { " in seconds" } else { "" };
    table.notes.push(format!(
        "{:?} taken as the time{unit}",
        table.column_name(column)
    ));
}

/// Whole numbers that go up by one each row, under a name that says so or none.
fn counts_rows(table: &Table, rows: &[&ByteRecord], column: usize) -> bool {
    let words = table
        .columns
        .get(column)
        .map(|heading| words_of(&heading.name));
    let unnamed = table.is_unnamed(column) && column == 0 && table.columns.len() > 1;
    let named = words.is_some_and(|words| {
        words
            .iter()
            .any(|word| INDEX_WORDS.contains(&word.as_str()))
            || words.is_empty() && !table.is_unnamed(column)
    });
    if !(unnamed || named) || rows.len() < 2 {
        return false;
    }
    let whole = |row: &&ByteRecord| match read_cell(row.get(column).unwrap_or_default()) {
        Cell::Number(number) if number.fract() == 0.0 => Some(number),
        _ => None,
    };
    rows.windows(2).all(|pair| {
        let mut numbers = pair.iter().map(whole);
        matches!((numbers.next(), numbers.next()), (Some(Some(a)), Some(Some(b))) if b - a == 1.0)
    })
}

/// A heading that says time.
struct NamedTime {
    /// From the unit in it.
    format: Option<StampFormat>,
    /// The name says time, not only the unit.
    sure: bool,
}

fn named_time(heading: &Heading) -> Option<NamedTime> {
    let words = words_of(&heading.name);
    let says_time = words.iter().any(|word| TIME_WORDS.contains(&word.as_str()));
    if let Some(unit) = &heading.unit {
        let format = StampFormat::from_unit(unit)?;
        return Some(NamedTime {
            format: Some(format),
            sure: says_time,
        });
    }
    // time_ms, "seconds", "elapsed us"
    let format = words.last().and_then(|word| StampFormat::from_unit(word));
    let only_unit = words.len() == 1 && format.is_some();
    // A plain "h" or "min" is more often something else.
    let short = words
        .first()
        .is_some_and(|word| matches!(word.as_str(), "h" | "min"));
    // A capital T without a unit is as often a temperature.
    let sure = heading.name.trim() != "T";
    (says_time || only_unit && !short).then_some(NamedTime { format, sure })
}

/// Lower-case words of a name: `Time_Stamp (rel.)` gives time, stamp, rel.
pub(super) fn words_of(name: &str) -> Vec<String> {
    name.split(|c: char| !c.is_alphanumeric())
        .filter(|word| !word.is_empty())
        .map(str::to_lowercase)
        .collect()
}

impl Trial {
    /// Reads a column as times in `format`, or in the format its cells suggest.
    fn of(rows: &[&ByteRecord], column: usize, format: Option<StampFormat>) -> Trial {
        let cells: Vec<&[u8]> = rows
            .iter()
            .map(|row| row.get(column).unwrap_or_default())
            .collect();
        let format = StampFormat::of_cells(&cells, format);
        let stamps: Vec<Stamp> = cells.iter().filter_map(|cell| format.read(cell)).collect();
        let steps = stamps.windows(2).map(|pair| match pair {
            [a, b] => b.since(*a),
            _ => 0.0,
        });
        Trial {
            format,
            read: stamps.len(),
            steps: steps.collect(),
        }
    }

    /// Goes ahead or stands still, as a time does, and not only the latter.
    fn mostly_ahead(&self) -> bool {
        let back = self.steps.iter().filter(|&&step| step < 0.0).count();
        back * 20 <= self.steps.len() && self.steps.iter().any(|&step| step > 0.0)
    }

    /// Always ahead, and nearly always by the same step.
    fn is_steady(&self) -> bool {
        let mut sorted = self.steps.clone();
        sorted.sort_unstable_by(f64::total_cmp);
        let Some(&middle) = sorted.get(sorted.len() / 2) else {
            return false;
        };
        let even = sorted
            .iter()
            .filter(|&&step| (step / middle - 1.0).abs() < 0.5)
            .count();
        sorted.first().is_some_and(|&least| least > 0.0) && even * 10 >= 9 * sorted.len()
    }
}
