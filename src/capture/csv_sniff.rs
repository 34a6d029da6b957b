//! What a table is like, from its first lines: delimiter, where the rows of
//! numbers start, headings, units, and which column is the time.

use csv::ByteRecord;

use super::cells::{Cell, Heading, is_remark, is_unit, read_cell, read_heading};
use super::csv_lines::{Line, physical_lines, split};
use super::error::CaptureError;
use super::stamps::StampFormat;

/// Delimiters, the less ambiguous first.
const DELIMITERS: &[u8] = b"\t;, ";

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
    /// Sample rate from a line above the table, where there is no time column.
    pub rate_hz: Option<f64>,
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
struct Tally {
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
    let (mut delimiter, mut records) = DELIMITERS
        .iter()
        .map(|&delimiter| (delimiter, split(&lines, delimiter)))
        .reduce(|best, next| {
            if score(&next.1) > score(&best.1) {
                next
            } else {
                best
            }
        })
        .ok_or(CaptureError::NoNumbers)?;
    if delimiter == b',' {
        match halved_numbers(&records) {
            // One column: any delimiter but the comma reads it.
            Some(2) => {
                delimiter = b';';
                records = split(&lines, delimiter);
            }
            Some(_) => return Err(CaptureError::AmbiguousCommas),
            None => {}
        }
    }
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
        rate_hz: None,
        values: Vec::new(),
        left_out: Vec::new(),
        notes: Vec::new(),
    };
    let told = before.iter().rev().find_map(|line| {
        let (_, bytes) = lines.iter().find(|(start, _)| *start == line.start)?;
        Some((line.number, super::csv_rate::read_rate(bytes)?))
    });
    super::csv_time::find_time(&mut table, &rows(data), rate_given || told.is_some())?;
    if let (Some((line, rate_hz)), None, false) = (told, table.time, rate_given) {
        table.rate_hz = Some(rate_hz);
        table
            .notes
            .push(format!("sample rate {rate_hz} Hz taken from line {line}"));
    }
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

/// Cells per row, if commas split what are numbers with decimal commas.
///
/// Each second cell is then bare digits, the others are whole, and there are
/// zeros that whole numbers have no use for: `-0` or `05`, or the heading has
/// half as many cells.
fn halved_numbers(records: &[Line]) -> Option<usize> {
    let width = usual_width(records);
    if !width.is_multiple_of(2) {
        return None;
    }
    let tallies = tally(records, width);
    let first = records.iter().position(|line| is_data(line, &tallies))?;
    let (before, data) = records.split_at(first);
    let heading = before.last().map_or(0, |line| line.cells.len());
    let mut needless_zero = heading == width / 2;
    for line in data.iter().filter(|line| is_data(line, &tallies)) {
        for (cell, second) in line.cells.iter().zip([false, true].into_iter().cycle()) {
            let digits = if second {
                cell
            } else {
                cell.strip_prefix(b"-").unwrap_or(cell)
            };
            if digits.is_empty() || !digits.iter().all(u8::is_ascii_digit) {
                return None;
            }
            let leading_zero = digits.len() > 1 && digits.starts_with(b"0");
            needless_zero |= second && leading_zero || !second && cell == b"-0";
        }
    }
    (needless_zero && heading != width).then_some(width)
}

/// 1 for a number or time, 1 for a word.
fn tally_cell(cell: &[u8]) -> (usize, usize) {
    match read_cell(cell) {
        Cell::Number(_) => (1, 0),
        Cell::Missing => (0, 0),
        Cell::Word if StampFormat::is_written(cell) => (1, 0),
        Cell::Word => (0, 1),
    }
}

/// Numbers less words, over the lines that hold a number.
fn score(lines: &[Line]) -> i64 {
    let width = usual_width(lines);
    let of_line = |line: &Line| {
        let (numbers, words) = line
            .cells
            .iter()
            .map(tally_cell)
            .fold((0, 0), |(n, w), (number, word)| (n + number, w + word));
        if numbers > 0 {
            numbers as i64 - words as i64
        } else {
            -1
        }
    };
    lines
        .iter()
        .filter(|line| !line.remark && line.cells.len() == width)
        .map(of_line)
        .sum()
}

/// The commonest number of cells among the lines with a number in them.
fn usual_width(lines: &[Line]) -> usize {
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

fn tally(lines: &[Line], width: usize) -> Vec<Tally> {
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
fn is_data(line: &Line, tallies: &[Tally]) -> bool {
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
