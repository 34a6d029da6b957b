//! A plain list: `name,hz,tolerance,orders`.

use super::table::{out_of_range, printable, tolerance_of};
use super::{Description, Entry, Lines, MAX_LINES_PER_SOURCE};
use crate::sources::Steadiness;
use crate::sources::clock::Clock;
use crate::sources::error::{Problem, SiteError, nearest, shown};
use crate::sources::quantity::{MAX_HZ, MIN_HZ, Tolerance};
use crate::sources::tone::{self, Tone};

const COLUMNS: [&str; 4] = ["name", "hz", "tolerance", "orders"];

/// Whether the first line with anything on it is the heading of a list.
pub(super) fn is_list(text: &str) -> bool {
    heading(text).is_some_and(|heading| {
        let delimiter = char::from(delimiter(heading));
        let has = |column: &str| {
            heading
                .split(delimiter)
                .any(|cell| cell.trim().trim_matches('"').eq_ignore_ascii_case(column))
        };
        has("name") && has("hz")
    })
}

/// The first line with anything on it.
pub(super) fn heading(text: &str) -> Option<&str> {
    super::without_mark(text)
        .lines()
        .find(|line| !line.trim().is_empty() && !line.starts_with('#'))
}

/// The separator that the heading has most of.
fn delimiter(heading: &str) -> u8 {
    let count = |byte: u8| heading.bytes().filter(|&b| b == byte).count();
    [b',', b';', b'\t']
        .into_iter()
        .rev()
        .max_by_key(|&byte| count(byte))
        .unwrap_or(b',')
}

/// Where each column stands.
struct Layout {
    columns: [Option<usize>; 4],
}

pub(super) fn read(text: &str) -> Result<Vec<Entry>, SiteError> {
    let Some(first) = heading(text) else {
        return Err(SiteError::Empty);
    };
    let mut reader = csv::ReaderBuilder::new()
        .delimiter(delimiter(first))
        .comment(Some(b'#'))
        .flexible(true)
        .has_headers(false)
        .trim(csv::Trim::All)
        .from_reader(text.as_bytes());
    let lines = Lines::of(text.as_bytes());
    let mut layout = None;
    let mut entries = Vec::new();
    for record in reader.records() {
        let record = record.map_err(|error| SiteError::Syntax {
            line: error
                .position()
                .map_or(1, |position| record_line(text, &lines, position)),
            message: "cannot be read as a row of the list (check its quotes)".to_owned(),
        })?;
        let line = record
            .position()
            .map_or(1, |p| record_line(text, &lines, p));
        if record.iter().all(str::is_empty) {
            continue;
        }
        match &layout {
            None => layout = Some(Layout::of(&record, line)?),
            Some(layout) => entries.push(row(layout, &record, line)?),
        }
    }
    if entries.is_empty() {
        return Err(SiteError::Empty);
    }
    Ok(entries)
}

/// Line on which a record starts, past the blank lines and comments before it.
fn record_line(text: &str, lines: &Lines, position: &csv::Position) -> usize {
    let mut offset = usize::try_from(position.byte()).unwrap_or(usize::MAX);
    while let Some(rest) = text.get(offset..) {
        let line = rest.split_inclusive('\n').next().unwrap_or("");
        let skipped = line.trim_end_matches(['\r', '\n']).is_empty() || line.starts_with('#');
        if line.is_empty() || !skipped {
            break;
        }
        offset += line.len();
    }
    lines.at(offset)
}

impl Layout {
    fn of(heading: &csv::StringRecord, line: usize) -> Result<Layout, SiteError> {
        let mut columns = [None; 4];
        for (at, cell) in heading.iter().enumerate() {
            let slot = COLUMNS
                .iter()
                .zip(&mut columns)
                .find(|(column, _)| cell.eq_ignore_ascii_case(column));
            let problem = match slot {
                Some((_, slot @ None)) => {
                    *slot = Some(at);
                    continue;
                }
                Some((_, Some(_))) => Problem::OutOfRange {
                    wanted: "in the heading once".to_owned(),
                    got: "it twice".to_owned(),
                },
                None => Problem::UnknownKey {
                    nearest: nearest(cell, COLUMNS),
                    known: COLUMNS.to_vec(),
                },
            };
            return Err(SiteError::key(line, cell, problem));
        }
        let layout = Layout { columns };
        for needed in ["name", "hz"] {
            if layout.column(needed).is_none() {
                let needed_by = "the heading of a list".to_owned();
                return Err(SiteError::key(line, needed, Problem::Missing { needed_by }));
            }
        }
        Ok(layout)
    }

    fn column(&self, name: &str) -> Option<usize> {
        COLUMNS
            .iter()
            .zip(self.columns)
            .find(|(column, _)| **column == name)
            .and_then(|(_, at)| at)
    }

    /// A cell, if it is there and not empty.
    fn cell<'r>(&self, record: &'r csv::StringRecord, column: &str) -> Option<&'r str> {
        self.column(column)
            .and_then(|at| record.get(at))
            .filter(|cell| !cell.is_empty())
    }

    fn width(&self) -> usize {
        self.columns.iter().flatten().count()
    }
}

fn row(layout: &Layout, record: &csv::StringRecord, line: usize) -> Result<Entry, SiteError> {
    let fail = |column: &str, problem: Problem| Err(SiteError::key(line, column, problem));
    let missing = |column: &str| {
        let needed_by = "every row".to_owned();
        SiteError::key(line, column, Problem::Missing { needed_by })
    };
    if record.len() > layout.width() {
        return Err(SiteError::Syntax {
            line,
            message: format!(
                "has {} cells under {} columns (quote a cell that holds the separator)",
                record.len(),
                layout.width()
            ),
        });
    }
    let name = layout.cell(record, "name").ok_or_else(|| missing("name"))?;
    let name = match printable(name) {
        Ok(name) => name.to_owned(),
        Err(problem) => return fail("name", problem),
    };
    let cell = layout.cell(record, "hz").ok_or_else(|| missing("hz"))?;
    let hz = match number(cell) {
        Ok(hz) if (MIN_HZ..=MAX_HZ).contains(&hz) => hz,
        Ok(got) if got <= 0.0 => return fail("hz", Problem::NotPositive { got }),
        Ok(_) => return fail("hz", out_of_range(MIN_HZ, MAX_HZ, cell)),
        Err(problem) => return fail("hz", problem),
    };
    let tolerance = match layout.cell(record, "tolerance") {
        None => tone::TOLERANCE,
        Some(cell) => match tolerance_of(cell, hz) {
            Ok(tolerance) => tolerance,
            Err(problem) => return fail("tolerance", problem),
        },
    };
    let orders = match layout.cell(record, "orders") {
        None => 1,
        Some(cell) => match orders(cell) {
            Ok(orders) => orders,
            Err(problem) => return fail("orders", problem),
        },
    };
    Ok(Entry {
        line,
        name_line: line,
        description: description(name, hz, tolerance, orders),
    })
}

fn description(name: String, hz: f64, tolerance: Tolerance, orders: u32) -> Description {
    if orders == 1 {
        return Description::Tone(Tone {
            name,
            hz,
            tolerance,
        });
    }
    Description::Clock(Clock {
        name,
        hz,
        tolerance,
        // A list does not say what kind of thing it is.
        steadiness: Steadiness::Free,
        orders,
        sidebands: None,
    })
}

fn number(cell: &str) -> Result<f64, Problem> {
    match cell.parse::<f64>() {
        Ok(number) if number.is_finite() => Ok(number),
        Ok(got) => Err(Problem::NotFinite { got }),
        Err(_) => Err(Problem::WrongType {
            wanted: "a number with a decimal point and no unit",
            got: format!("`{}`", shown(cell)),
        }),
    }
}

fn orders(cell: &str) -> Result<u32, Problem> {
    match cell.parse::<i128>() {
        Ok(n) if n <= 0 => Err(Problem::NotPositive { got: n as f64 }),
        Ok(n) if n <= i128::from(MAX_LINES_PER_SOURCE) => Ok(u32::try_from(n).unwrap_or(1)),
        Ok(_) => Err(out_of_range(1.0, f64::from(MAX_LINES_PER_SOURCE), cell)),
        Err(_) => Err(Problem::WrongType {
            wanted: "a whole number",
            got: format!("`{}`", shown(cell)),
        }),
    }
}
