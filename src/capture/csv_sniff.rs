//! What a table is like, from its first lines: delimiter, where the rows of
//! numbers start, headings, units, and which column is the time.

use csv::ByteRecord;

use super::cells::{Cell, Heading, is_remark, is_unit, read_cell, read_heading};
use super::csv_delimiter::choose_delimiter;
use super::csv_lines::{Line, physical_lines};
use super::error::CaptureError;
use super::stamps::StampFormat;

/// The plan for reading a table.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Table {
    pub delimiter: u8,
    /// Cells may be in quotes.
    pub quoted: bool,
    /// Bytes of decoded text before the first row of numbers.
    pub skip_bytes: u64,
    /// 1-based line of that row.
    pub first_line: u64,
    pub columns: Vec<Heading>,
    pub time: Option<TimeColumn>,
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
pub(super) fn sniff(head: &[u8], whole: bool, rate_given: bool) -> Result<Table, CaptureError> {
    if head.trim_ascii().is_empty() {
        return Err(if whole {
            CaptureError::Empty
        } else {
            CaptureError::NoNumbers
        });
    }
    let lines = physical_lines(head, whole)?;
    let (delimiter, records) = choose_delimiter(&lines)?;
    let width = usual_width(&records);
    let tallies = tally(&records, width);
    let first = records.iter().position(|line| is_data(line, &tallies));
    let Some(first) = first else {
        let header_only = whole && records.iter().filter(|line| !line.remark).count() <= 2;
        return Err(if header_only {
            CaptureError::NoSamples
        } else {
            CaptureError::NoNumbers
        });
    };
    super::limit_channels(width as u64)?;
    // Rows with a bad cell may come first, right under a heading of words.
    let heading = records
        .iter()
        .take(first)
        .rposition(|line| is_wordy(line, width));
    let first = heading.map_or(first, |heading| heading + 1);
    let (before, data) = records.split_at(first);
    let start = data.first().map_or(0, |line| line.start);
    let mut table = Table {
        delimiter,
        // Without this, a stray quote in a remark could swallow rows.
        quoted: lines
            .iter()
            .filter(|(at, bytes)| *at >= start && !is_remark(bytes, delimiter))
            .any(|(_, bytes)| bytes.contains(&b'"')),
        skip_bytes: start as u64,
        first_line: data.first().map_or(1, |line| line.number),
        columns: headings(before, width),
        time: None,
        told_rate: None,
        values: Vec::new(),
        left_out: Vec::new(),
        notes: Vec::new(),
    };
    table.told_rate = before.iter().rev().find_map(|line| {
        let (_, bytes) = lines.iter().find(|(start, _)| *start == line.start)?;
        Some((line.number, super::csv_rate::read_rate(bytes)?))
    });
    let rate_known = rate_given || table.told_rate.is_some();
    super::csv_time::find_time(&mut table, &rows(data), rate_known)?;
    choose_values(&mut table, data, &tallies)?;
    Ok(table)
}

/// The lines that are no remarks.
fn rows(data: &[Line]) -> Vec<&ByteRecord> {
    data.iter()
        .filter(|line| !line.remark)
        .map(|line| &line.cells)
        .collect()
}

/// 1 for a number or time, 1 for a word.
pub(super) fn tally_cell(cell: &[u8]) -> (usize, usize) {
    match read_cell(cell) {
        Cell::Number(_) => (1, 0),
        Cell::Missing => (0, 0),
        Cell::Word if StampFormat::is_written(cell) => (1, 0),
        Cell::Word => (0, 1),
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
            match read_cell(cell) {
                Cell::Number(_) => tally.numbers += 1,
                Cell::Missing => {}
                Cell::Word if StampFormat::is_written(cell) => tally.times += 1,
                Cell::Word => tally.words += 1,
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

/// Names and units from the lines before the data.
fn headings(before: &[Line], width: usize) -> Vec<Heading> {
    let mut rows = before
        .iter()
        .rev()
        .map(|line| header_cells(line, width))
        .skip_while(|cells| cells.iter().all(|cell| cell.is_empty()));
    let fits = |cells: &Vec<Vec<u8>>| {
        // A trailing delimiter may be in the header or in the rows only.
        let filled = cells.iter().filter(|cell| !cell.is_empty()).count();
        let numbers = cells.iter().filter(|cell| tally_cell(cell).0 > 0).count();
        cells.len().abs_diff(width) <= 1 && 2 * numbers <= filled && (width == 1 || filled > 1)
    };
    let last = rows.next().filter(fits);
    let mut units = None;
    let mut names = last;
    if names
        .as_ref()
        .is_some_and(|cells| cells.iter().all(|cell| is_unit_cell(cell)))
    {
        // A row of units only, if there are names above it.
        if let Some(above) = rows.next().filter(fits) {
            units = names.replace(above);
        }
    }
    (0..width)
        .map(|column| {
            let cell = |row: &Option<Vec<Vec<u8>>>| {
                row.as_ref()
                    .and_then(|row| row.get(column))
                    .cloned()
                    .unwrap_or_default()
            };
            let mut heading = read_heading(&cell(&names));
            let unit = read_heading(&cell(&units));
            let unit = unit.unit.unwrap_or(unit.name);
            if !unit.is_empty() {
                heading.unit = Some(unit.trim_matches(['[', ']', '(', ')']).into());
            }
            heading
        })
        .collect()
}

/// The cells of a line before the data, without the mark of a remark.
fn header_cells(line: &Line, width: usize) -> Vec<Vec<u8>> {
    let mut cells: Vec<Vec<u8>> = line
        .cells
        .iter()
        .map(|cell| super::cells::trim(cell).to_vec())
        .collect();
    if line.remark {
        if let Some(first) = cells.first_mut() {
            let marks = first.iter().take_while(|c| b"#%/; \t".contains(c)).count();
            first.drain(..marks);
        }
        // A mark set off by the delimiter is no cell.
        if cells.len() > width && cells.first().is_some_and(Vec::is_empty) {
            cells.remove(0);
        }
    }
    cells
}

fn is_unit_cell(cell: &[u8]) -> bool {
    let text = super::text::to_text(cell);
    let bare = text.trim().trim_matches(['[', ']', '(', ')']);
    bare.is_empty()
        || bare == "-"
        || bare.len() < text.trim().len()
        || is_unit(bare)
        || StampFormat::from_unit(bare).is_some()
}

/// Columns of numbers are channels; what else there is, is noted.
fn choose_values(table: &mut Table, data: &[Line], tallies: &[Tally]) -> Result<(), CaptureError> {
    let time = table.time.map(|time| time.column);
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
