//! Which column of a table is the time, and in which unit.

use csv::ByteRecord;

use super::cells::{Cell, Heading, read_cell};
use super::csv_sniff::{Table, TimeColumn};
use super::error::CaptureError;
use super::numbers::DecimalStyle;
use super::options::{OpenOptions, TimeChoice};
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
    // As loggers of other languages say it.
    "zeit",
    "uhrzeit",
    "zeitstempel",
    "zeitpunkt",
    "temps",
    "tiempo",
    "tempo",
    "tijd",
    "tid",
    "czas",
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
    all_below_a_second: bool,
}

/// Finds the time column, if there is one, and leaves out columns that only
/// count the rows.
pub(super) fn find_time(
    table: &mut Table,
    rows: &[&ByteRecord],
    options: &OpenOptions,
) -> Result<(), CaptureError> {
    let rate_hz = options
        .rate_hz
        .or(table.told_rate.map(|(_, rate_hz)| rate_hz));
    let notation = options.layout.time_as;
    let told = match notation {
        Some(notation) => Some(
            notation
                .format(rate_hz)
                .ok_or(CaptureError::SamplesNeedRate)?,
        ),
        None => None,
    };
    match &options.layout.time {
        Some(TimeChoice::Nothing) => {
            return match rate_hz {
                Some(_) => Ok(()),
                None => Err(CaptureError::NoTime),
            };
        }
        Some(TimeChoice::Column(asked)) => {
            let column = find_column(table, asked)?;
            set_time(table, rows, column, told);
            leave_out_counts(table, rows);
            return Ok(());
        }
        None => {}
    }
    search(table, rows, told.is_none());
    if table.time.is_none() {
        // A count of samples tells lost ones, once the rate is known.
        let count = (0..table.columns.len()).find(|&column| counts_rows(table, rows, column));
        if let (Some(column), Some(rate_hz)) = (count, rate_hz) {
            set_time(table, rows, column, Some(StampFormat::Samples { rate_hz }));
        }
    }
    leave_out_counts(table, rows);
    if table.time.is_none() && !table.left_out(0) {
        time_in_first_column(table, rows, rate_hz.is_some());
    }
    if let (Some(format), Some(time)) = (told, table.time) {
        set_time(table, rows, time.column, Some(format));
    } else if told.is_some() {
        set_time(table, rows, 0, told);
    }
    match table.time {
        Some(_) => Ok(()),
        None if rate_hz.is_some() => Ok(()),
        None if table.left_out(0) => Err(CaptureError::OnlyIndex),
        None => Err(CaptureError::NoTime),
    }
}

/// A column of whole seconds and one of their fractions, as in `sec,usec`:
/// numbers below a second in a unit that the heading says.
#[allow(clippy::type_complexity)]
fn find_fraction(
    table: &Table,
    rows: &[&ByteRecord],
) -> Option<((usize, StampFormat), (usize, StampFormat))> {
    let named = |column: usize| table.columns.get(column).and_then(named_time);
    let columns = 0..table.columns.len();
    let fraction = columns.clone().find_map(|column| {
        let format = named(column)?.format?;
        let StampFormat::Decimal { exponent } = format else {
            return None;
        };
        let trial = Trial::of(table, rows, column, Some(format));
        // Elapsed milliseconds may stay below a second in the first rows.
        let says_time = table.columns.get(column).is_some_and(says_time);
        let wraps = !says_time || trial.steps.iter().any(|&step| step < 0.0);
        let below = exponent > 0 && trial.read == rows.len() && trial.all_below_a_second;
        (wraps && below && trial.format == format).then_some((column, format))
    })?;
    let whole = columns
        .filter(|&column| column != fraction.0)
        .find_map(|column| {
            let trial = Trial::of(table, rows, column, named(column)?.format);
            let whole = trial
                .steps
                .iter()
                .all(|step| step.fract() == 0.0 && *step >= 0.0);
            let stands = trial.steps.contains(&0.0);
            (named(column).is_some() && whole && stands && trial.read == rows.len())
                .then_some((column, trial.format))
        })?;
    Some((whole, fraction))
}

/// Index of the column that the user means.
fn find_column(table: &Table, asked: &str) -> Result<usize, CaptureError> {
    let width = table.columns.len();
    let by_name = |name: &str| {
        let matches = |column: &usize| table.column_name(*column).eq_ignore_ascii_case(name);
        (0..width).find(matches)
    };
    let by_number = || {
        let number: usize = asked.parse().ok()?;
        number.checked_sub(1).filter(|&column| column < width)
    };
    by_number().or_else(|| by_name(asked)).ok_or_else(|| {
        const SHOWN: usize = 12;
        let mut names: Vec<String> = (0..width.min(SHOWN))
            .map(|column| format!("{} {:?}", column + 1, table.column_name(column)))
            .collect();
        if width > SHOWN {
            names.push(format!("… {width}"));
        }
        CaptureError::NoSuchColumn {
            asked: asked.to_owned(),
            has: names.join(", "),
        }
    })
}

fn set_time(table: &mut Table, rows: &[&ByteRecord], column: usize, format: Option<StampFormat>) {
    let named = table.columns.get(column).and_then(named_time);
    let cells = cells_of(table, rows, column);
    let format = format
        .unwrap_or_else(|| StampFormat::of_cells(&cells, named.and_then(|named| named.format)));
    table.time = Some(TimeColumn {
        column,
        format,
        local: format.is_local(&cells),
        backwards: runs_backwards(&cells, format),
        fraction: None,
    });
    if table.time.is_some_and(|time| time.backwards) {
        table
            .notes
            .push("time runs backwards: rows taken in the order of the file".into());
    }
}

/// Whether nearly all stamps go back: a table sorted the other way round.
fn runs_backwards(cells: &[&[u8]], format: StampFormat) -> bool {
    let stamps: Vec<Stamp> = cells.iter().filter_map(|cell| format.read(cell)).collect();
    let back = stamps
        .windows(2)
        .filter(|pair| matches!(pair, [a, b] if b.since(*a) < 0.0));
    stamps.len() > 2 && back.count() * 20 >= 19 * (stamps.len() - 1)
}

fn cells_of<'a>(table: &Table, rows: &[&'a ByteRecord], column: usize) -> Vec<&'a [u8]> {
    let cell =
        |row: &&'a ByteRecord| table.without_unit(row.get(column).unwrap_or_default(), column);
    rows.iter().map(cell).collect()
}

fn leave_out_counts(table: &mut Table, rows: &[&ByteRecord]) {
    for column in 0..table.columns.len() {
        let is_time = table.time.is_some_and(|time| time.column == column);
        if !is_time && counts_rows(table, rows, column) {
            table.leave_out(column, "only counts the rows");
        }
    }
}

/// The column whose heading says time and whose cells run like one.
fn search(table: &mut Table, rows: &[&ByteRecord], guessing: bool) {
    let mut best: Option<(usize, usize, StampFormat)> = None;
    let mut times = Vec::new();
    for (column, heading) in table.columns.iter().enumerate() {
        let Some(named) = named_time(heading) else {
            continue;
        };
        let trial = Trial::of(table, rows, column, named.format);
        // Most cells must be times; a name that is none must at least run like one.
        if trial.read * 2 <= rows.len() || !(named.sure || trial.is_steady()) {
            continue;
        }
        let faults = trial.steps.iter().filter(|&&step| step <= 0.0).count();
        if trial.mostly_ahead() {
            times.push(column);
        }
        if best.as_ref().is_none_or(|&(least, ..)| faults < least) {
            best = Some((faults, column, trial.format));
        }
    }
    if let Some((_, column, format)) = best {
        set_time(table, rows, column, Some(format));
        let assumed = format.assumption(&cells_of(table, rows, column));
        table.notes.extend(assumed.filter(|_| guessing));
    }
    if let Some((seconds, fraction)) = find_fraction(table, rows) {
        set_time(table, rows, seconds.0, Some(seconds.1));
        if let Some(time) = &mut table.time {
            time.fraction = Some(fraction);
        }
        table.leave_out(fraction.0, "holds the fractions of the seconds");
        return;
    }
    for column in times {
        if table.time.is_some_and(|time| time.column != column) {
            table.leave_out(column, "is a second time");
        }
    }
}

/// The first column of numbers, if it runs on in even steps under no or another
/// name, is taken as seconds, unless its steps are whole: then nothing says
/// seconds.
fn time_in_first_column(table: &mut Table, rows: &[&ByteRecord], rate_known: bool) {
    let full = (0..table.columns.len().saturating_sub(1))
        .map(|column| (column, Trial::of(table, rows, column, None)))
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
    set_time(table, rows, column, Some(trial.format));
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
    let whole = |row: &&ByteRecord| {
        let cell = row.get(column).unwrap_or_default();
        match read_cell(cell, DecimalStyle::Either) {
            Cell::Number(number) if number.fract() == 0.0 => Some(number),
            _ => None,
        }
    };
    let numbers: Vec<f64> = rows.iter().filter_map(whole).collect();
    let ones = numbers
        .windows(2)
        .filter(|pair| matches!(pair, [a, b] if b - a == 1.0));
    // Under a name that says so, some rows may be lost.
    let least = if named { 0.9 } else { 1.0 };
    numbers.len() == rows.len() && ones.count() as f64 >= least * (rows.len() - 1) as f64
}

/// A heading that says time.
struct NamedTime {
    /// From the unit in it.
    format: Option<StampFormat>,
    /// The name says time, not only the unit.
    sure: bool,
}

fn says_time(heading: &Heading) -> bool {
    let words = words_of(&heading.name);
    words.iter().any(|word| TIME_WORDS.contains(&word.as_str()))
}

fn named_time(heading: &Heading) -> Option<NamedTime> {
    let words = words_of(&heading.name);
    let says_time = says_time(heading);
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
    fn of(
        table: &Table,
        rows: &[&ByteRecord],
        column: usize,
        format: Option<StampFormat>,
    ) -> Trial {
        let cells = cells_of(table, rows, column);
        let format = StampFormat::of_cells(&cells, format);
        let stamps: Vec<Stamp> = cells.iter().filter_map(|cell| format.read(cell)).collect();
        let steps = stamps.windows(2).map(|pair| match pair {
            [a, b] => b.since(*a),
            _ => 0.0,
        });
        Trial {
            format,
            read: stamps.len(),
            all_below_a_second: stamps
                .iter()
                .all(|stamp| stamp.seconds == 0 && stamp.rest >= 0.0),
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
