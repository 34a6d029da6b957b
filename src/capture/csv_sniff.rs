//! What a table is like, from its first lines: delimiter, where the rows of
//! numbers start, headings, units, and which column is the time.

use csv::ByteRecord;

use super::cells::{Cell, Heading, Remarks, read_cell, unit_suffix};
use super::csv_delimiter::choose_delimiter;
use super::csv_headings::{given_headings, headings};
use super::csv_lines::{Line, physical_lines};
use super::error::CaptureError;
use super::numbers::{DecimalStyle, told_style};
use super::options::{DecimalSign, OpenOptions};
use super::stamps::StampFormat;

/// Lines looked at first.
const MOST_LINES: usize = 1000;

/// The plan for reading a table.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Table {
    pub delimiter: u8,
    /// Each second delimiter is a decimal comma.
    pub paired: bool,
    /// Cells may be in quotes.
    pub quoted: bool,
    pub decimal: DecimalStyle,
    /// Decimal points and commas were seen.
    pub marks: (bool, bool),
    pub remarks: Remarks,
    /// Bytes of decoded text before the first row of numbers.
    pub skip_bytes: u64,
    /// 1-based line of that row.
    pub first_line: u64,
    pub columns: Vec<Heading>,
    pub time: Option<TimeColumn>,
    /// Line of the names, if there is one.
    pub names_line: Option<u64>,
    /// Line above the table that tells a sample rate in hertz, and that rate.
    pub told_rate: Option<(u64, f64)>,
    /// Indices of the columns of values.
    pub values: Vec<usize>,
    /// Indices of columns that are neither.
    left_out: Vec<usize>,
    pub notes: Vec<String>,
}

/// The column of time stamps.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct TimeColumn {
    pub column: usize,
    pub format: StampFormat,
    /// Written local time, which daylight saving may move.
    pub local: bool,
    /// Later rows are earlier.
    pub backwards: bool,
    /// The column with the fractions of the seconds, and its format.
    pub fraction: Option<(usize, StampFormat)>,
}

/// How the cells of a column mostly read.
#[derive(Debug, Clone, Copy, Default, PartialEq)]
pub(super) struct Tally {
    numbers: usize,
    /// Written times and dates.
    times: usize,
    words: usize,
}

impl Tally {
    fn numeric(self) -> bool {
        self.numbers + self.times > self.words
    }
}

/// Finds the layout of the table that starts with `head`. `whole`: the head is
/// all there is.
pub(super) fn sniff(
    head: &[u8],
    whole: bool,
    options: &OpenOptions,
) -> Result<Table, CaptureError> {
    if head.trim_ascii().is_empty() {
        return Err(if whole {
            CaptureError::Empty
        } else {
            CaptureError::NoNumbers
        });
    }
    let most = match sniff_lines(head, whole, options, MOST_LINES) {
        // A long preamble; looking at so many lines at once takes its time.
        Err(CaptureError::NoNumbers | CaptureError::NoSamples) => usize::MAX,
        other => return other,
    };
    sniff_lines(head, whole, options, most)
}

/// As [`sniff`], from so many lines at most.
fn sniff_lines(
    head: &[u8],
    whole: bool,
    options: &OpenOptions,
    most: usize,
) -> Result<Table, CaptureError> {
    let layout = &options.layout;
    let remarks = match &layout.comment {
        Some(start) => Remarks::Start(start.as_bytes().to_vec()),
        None => Remarks::Usual,
    };
    let lines = physical_lines(head, whole, most)?;
    let splitting = choose_delimiter(&lines, layout.delimiter, &remarks)?;
    let (delimiter, records) = (splitting.delimiter, splitting.lines);
    let start = match layout.first_row {
        Some(line) => place_of(&records, lines.len(), line, "first-row")?,
        None => 0,
    };
    let rows_only = records.get(start..).unwrap_or_default();
    let width = usual_width(rows_only);
    let tallies = tally(rows_only, width);
    let first = match layout.first_row {
        Some(_) => start,
        None => find_first(&records, width, &tallies, whole)?,
    };
    super::limit_channels(width as u64)?;
    let (before, data) = records.split_at(first);
    let start = data.first().map_or(0, |line| line.start);
    let (columns, names_line) = match given_headings(&records, lines.len(), width, layout)? {
        Some(given) => given,
        None => headings(before, width),
    };
    let mut table = Table {
        delimiter,
        paired: splitting.paired,
        // Without this, a stray quote in a remark could swallow rows.
        quoted: layout.quoted.unwrap_or_else(|| {
            lines
                .iter()
                .filter(|(at, bytes)| *at >= start && !remarks.marks(bytes, delimiter))
                .any(|(_, bytes)| bytes.contains(&b'"'))
        }),
        decimal: match layout.decimal {
            Some(DecimalSign::Point) => DecimalStyle::Point,
            Some(DecimalSign::Comma) => DecimalStyle::Comma,
            None => decimal_style(data),
        },
        marks: marks(data),
        remarks,
        skip_bytes: start as u64,
        first_line: data.first().map_or(1, |line| line.number),
        columns,
        time: None,
        names_line,
        told_rate: None,
        values: Vec::new(),
        left_out: Vec::new(),
        notes: Vec::new(),
    };
    if table.paired {
        table
            .notes
            .push("commas both separate the columns and mark decimals: taken in pairs".into());
        table.decimal = DecimalStyle::Comma;
    }
    table.told_rate = before.iter().rev().find_map(|line| {
        let (_, bytes) = lines.iter().find(|(start, _)| *start == line.start)?;
        Some((line.number, super::csv_rate::read_rate(bytes)?))
    });
    find_suffixes(&mut table, data);
    super::csv_time::find_time(&mut table, &rows(data), options)?;
    choose_values(&mut table, data, &tally(data, width))?;
    Ok(table)
}

/// The first row of numbers.
fn find_first(
    records: &[Line],
    width: usize,
    tallies: &[Tally],
    whole: bool,
) -> Result<usize, CaptureError> {
    let Some(first) = records.iter().position(|line| is_data(line, tallies)) else {
        let header_only = whole && records.iter().filter(|line| !line.remark).count() <= 2;
        return Err(if header_only {
            CaptureError::NoSamples
        } else {
            CaptureError::NoNumbers
        });
    };
    // Rows with a bad cell may come first, right under a heading of words.
    let heading = records
        .iter()
        .take(first)
        .rposition(|line| is_wordy(line, width));
    Ok(heading.map_or(first, |heading| heading + 1))
}

/// Index of the record on a line, or of the next one after it.
pub(super) fn place_of(
    records: &[Line],
    lines: usize,
    line: u64,
    option: &'static str,
) -> Result<usize, CaptureError> {
    let place = records.iter().position(|record| record.number >= line);
    place.ok_or(CaptureError::NoSuchLine {
        option,
        line,
        lines: lines as u64,
    })
}

/// Decimal mark of a table with grouped thousands, which tell it.
fn decimal_style(data: &[Line]) -> DecimalStyle {
    let cells = data.iter().filter(|line| !line.remark);
    let mut styles = cells
        .flat_map(|line| line.cells.iter())
        .filter_map(|cell| told_style(super::cells::trim(cell)));
    styles.next().unwrap_or_default()
}

/// Whether decimal points and commas are seen in numbers.
fn marks(data: &[Line]) -> (bool, bool) {
    let mut seen = (false, false);
    for cell in data
        .iter()
        .filter(|line| !line.remark)
        .flat_map(|line| line.cells.iter())
    {
        if matches!(read_cell(cell, DecimalStyle::Either), Cell::Number(_)) {
            seen.0 |= cell.contains(&b'.');
            seen.1 |= cell.contains(&b',');
        }
    }
    seen
}

/// Units behind the numbers, where a column mostly has the same one.
fn find_suffixes(table: &mut Table, data: &[Line]) {
    let decimal = table.decimal;
    for (column, heading) in table.columns.iter_mut().enumerate() {
        let cells = || {
            let rows = data.iter().filter(|line| !line.remark);
            rows.filter_map(move |line| line.cells.get(column))
        };
        let Some(suffix) = cells().find_map(|cell| unit_suffix(cell, decimal)) else {
            continue;
        };
        let same = cells().filter(|cell| unit_suffix(cell, decimal) == Some(suffix));
        if 2 * same.count() > cells().count() {
            heading.suffix = Some(suffix.to_owned());
            heading.unit.get_or_insert_with(|| suffix.to_owned());
        }
    }
}

/// The lines that are no remarks.
fn rows(data: &[Line]) -> Vec<&ByteRecord> {
    data.iter()
        .filter(|line| !line.remark)
        .map(|line| &line.cells)
        .collect()
}

/// What a cell may hold before the table's decimal mark and units are known.
enum Content {
    Number,
    Time,
    Missing,
    Word,
}

fn content(cell: &[u8]) -> Content {
    match read_cell(cell, DecimalStyle::Either) {
        Cell::Number(_) => Content::Number,
        Cell::Missing => Content::Missing,
        Cell::Word if StampFormat::is_written(cell) => Content::Time,
        Cell::Word if unit_suffix(cell, DecimalStyle::Either).is_some() => Content::Number,
        Cell::Word => Content::Word,
    }
}

/// 1 for a number or time, 1 for a word.
pub(super) fn tally_cell(cell: &[u8]) -> (usize, usize) {
    match content(cell) {
        Content::Number | Content::Time => (1, 0),
        Content::Missing => (0, 0),
        Content::Word => (0, 1),
    }
}

/// The commonest number of cells among the lines with a number in them.
pub(super) fn usual_width(lines: &[Line]) -> usize {
    let mut counts = std::collections::BTreeMap::new();
    for line in lines.iter().filter(|line| !line.remark) {
        if line.cells.iter().any(|cell| tally_cell(cell).0 > 0) {
            *counts.entry(line.cells.len()).or_insert(0) += 1;
        }
    }
    counts
        .into_iter()
        .max_by_key(|&(width, count)| (count, width))
        .map_or(1, |(width, _)| width)
}

pub(super) fn tally(lines: &[Line], width: usize) -> Vec<Tally> {
    let mut tallies = vec![Tally::default(); width];
    for line in lines
        .iter()
        .filter(|line| !line.remark && line.cells.len() == width)
    {
        for (tally, cell) in tallies.iter_mut().zip(&line.cells) {
            match content(cell) {
                Content::Number => tally.numbers += 1,
                Content::Time => tally.times += 1,
                Content::Missing => {}
                Content::Word => tally.words += 1,
            }
        }
    }
    tallies
}

/// A row of numbers: as wide as usual, with no word where numbers are usual.
pub(super) fn is_data(line: &Line, tallies: &[Tally]) -> bool {
    let mut numbers = 0;
    let mut words = 0;
    for (cell, tally) in line.cells.iter().zip(tallies) {
        if tally.numeric() {
            let (number, word) = tally_cell(cell);
            numbers += number;
            words += word;
        }
    }
    !line.remark && line.cells.len() == tallies.len() && numbers > 0 && words == 0
}

/// As wide as the rows, with words and no number.
fn is_wordy(line: &Line, width: usize) -> bool {
    let counts = line.cells.iter().map(tally_cell);
    let (numbers, words) = counts.fold((0, 0), |(n, w), (number, word)| (n + number, w + word));
    line.cells.len() == width && numbers == 0 && words > 0
}

/// Columns of numbers are channels; what else there is, is noted.
fn choose_values(table: &mut Table, data: &[Line], tallies: &[Tally]) -> Result<(), CaptureError> {
    let time = table.time.map(|time| time.column);
    // Nothing but marks of missing values is a channel without a sample.
    let no_numbers = tallies
        .iter()
        .enumerate()
        .all(|(column, tally)| Some(column) == time || tally.numbers == 0);
    let full = tallies
        .iter()
        .map(|tally| tally.numbers)
        .max()
        .unwrap_or(0)
        .max(1);
    for (column, tally) in tallies.iter().enumerate() {
        let name = table.column_name(column);
        if Some(column) == time || table.left_out(column) {
            continue;
        }
        if tally.words + tally.times > tally.numbers {
            let what = if tally.words > tally.times {
                "words"
            } else {
                "times"
            };
            table
                .notes
                .push(format!("column {name:?} holds {what}: left out"));
        } else if no_numbers && tally.words == 0 && tally.times == 0 {
            let marked = |line: &Line| line.cells.get(column).is_some_and(|c| !c.is_empty());
            if data.iter().any(|line| !line.remark && marked(line)) {
                table.values.push(column);
            }
        } else if table.is_unnamed(column) && 2 * tally.numbers < full {
            // Settings beside the first rows, or a trailing delimiter.
            if tally.numbers > 0 {
                table
                    .notes
                    .push(format!("column {name:?} is mostly empty: left out"));
            }
        } else {
            table.values.push(column);
        }
    }
    if !table.values.is_empty() {
        return Ok(());
    }
    let word = data.iter().filter(|line| !line.remark).find_map(|line| {
        let mut cells = line.cells.iter().enumerate();
        let (column, cell) = cells.find(|(_, cell)| tally_cell(cell).1 > 0)?;
        Some(CaptureError::NotANumber {
            line: line.number,
            column: column + 1,
            text: super::error::excerpt(cell),
            share: "no column of numbers beside the time".into(),
        })
    });
    Err(word.unwrap_or(CaptureError::NoChannels))
}

impl Table {
    /// The heading, or "column 2"; with the column's number where two columns
    /// have the same heading.
    pub(super) fn column_name(&self, column: usize) -> String {
        let number = column + 1;
        match self.columns.get(column) {
            Some(heading) if !heading.name.is_empty() => {
                let same = |other: &&Heading| other.name == heading.name;
                match self.columns.iter().filter(same).count() {
                    1 => heading.name.clone(),
                    _ => format!("{} (column {number})", heading.name),
                }
            }
            _ => format!("column {number}"),
        }
    }

    /// A cell without the unit that all cells of its column have.
    pub(super) fn without_unit<'a>(&self, cell: &'a [u8], column: usize) -> &'a [u8] {
        let suffix = self.columns.get(column).and_then(|c| c.suffix.as_ref());
        let number =
            suffix.and_then(|suffix| super::cells::trim(cell).strip_suffix(suffix.as_bytes()));
        number.unwrap_or(cell)
    }

    /// The same table, with a time column that is of no use.
    pub(super) fn without_time(&self) -> Table {
        let mut table = self.clone();
        if let Some(time) = table.time.take() {
            table.leave_out(time.column, "is no usable time");
        }
        table
    }

    /// Marks a column as neither time nor channel, and says why.
    pub(super) fn leave_out(&mut self, column: usize, why: &str) {
        self.notes.push(format!(
            "column {:?} {why}: left out",
            self.column_name(column)
        ));
        self.left_out.push(column);
    }

    pub(super) fn left_out(&self, column: usize) -> bool {
        self.left_out.contains(&column)
    }

    pub(super) fn is_unnamed(&self, column: usize) -> bool {
        self.columns
            .get(column)
            .is_none_or(|heading| heading.name.is_empty())
    }
}
