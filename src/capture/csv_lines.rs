//! The first lines of a table, split into cells one by one.

use csv::ByteRecord;

use super::cells::Remarks;
use super::error::CaptureError;
use super::line_limit::LONGEST_LINE;
use super::text::squeeze;

/// A line of the file.
pub(super) struct Line {
    /// Bytes before it.
    pub start: usize,
    /// 1-based.
    pub number: u64,
    pub cells: ByteRecord,
    pub remark: bool,
}

/// Start and bytes of each line, so many at most.
pub(super) fn physical_lines(
    head: &[u8],
    whole: bool,
    most: usize,
) -> Result<Vec<(usize, &[u8])>, CaptureError> {
    let mut lines = Vec::new();
    let mut start = 0;
    for line in head.split_inclusive(|&c| c == b'\n').take(most) {
        let complete = line.ends_with(b"\n");
        if line.len() > LONGEST_LINE {
            let line = lines.len() as u64 + 1;
            return Err(CaptureError::LineTooLong {
                line,
                limit: LONGEST_LINE,
            });
        }
        if complete || whole {
            lines.push((start, line));
        }
        start += line.len();
    }
    Ok(lines)
}

/// Splits each line for itself, so that a stray quote spoils one line only.
pub(super) fn split(lines: &[(usize, &[u8])], delimiter: u8, remarks: &Remarks) -> Vec<Line> {
    let mut split = Vec::new();
    for (&(start, bytes), number) in lines.iter().zip(1..) {
        let squeezed;
        let bytes = match delimiter {
            b' ' => {
                squeezed = squeeze(bytes);
                squeezed.as_slice()
            }
            _ => bytes,
        };
        let cells = cells_of(bytes, delimiter);
        if !cells.is_empty() {
            let remark = remarks.marks(cells.get(0).unwrap_or_default(), delimiter);
            split.push(Line {
                start,
                number,
                cells,
                remark,
            });
        }
    }
    split
}

/// The lines with each second delimiter taken as a decimal comma. Lines of
/// words stay as they are.
pub(super) fn join_pairs(lines: Vec<Line>, delimiter: u8) -> Vec<Line> {
    let pairs = |line: Line| {
        let bare = |cell: &[u8]| {
            let digits = cell.strip_prefix(b"-").unwrap_or(cell);
            digits.iter().all(u8::is_ascii_digit)
        };
        if line.remark || line.cells.len() % 2 == 1 || !line.cells.iter().all(bare) {
            return line;
        }
        let mut cells = ByteRecord::new();
        let mut halves = line.cells.iter();
        while let (Some(whole), Some(decimals)) = (halves.next(), halves.next()) {
            cells.push_field(&[whole, &[delimiter], decimals].concat());
        }
        Line { cells, ..line }
    };
    lines.into_iter().map(pairs).collect()
}

/// The cells of one line, as a CSV reader would give them. Such a reader is
/// dear to set up, and here would be for each line.
fn cells_of(line: &[u8], delimiter: u8) -> ByteRecord {
    let mut rest = line.strip_suffix(b"\n").unwrap_or(line);
    rest = rest.strip_suffix(b"\r").unwrap_or(rest);
    let mut record = ByteRecord::new();
    if rest.is_empty() {
        return record;
    }
    let mut cell = Vec::new();
    loop {
        cell.clear();
        if let Some(mut quoted) = rest.strip_prefix(b"\"") {
            // Up to a quote that is not doubled, or to the end.
            loop {
                let end = quoted
                    .iter()
                    .position(|&c| c == b'"')
                    .unwrap_or(quoted.len());
                cell.extend_from_slice(quoted.get(..end).unwrap_or_default());
                rest = quoted.get(end + 1..).unwrap_or_default();
                match rest.strip_prefix(b"\"") {
                    Some(more) => quoted = more,
                    None => break,
                }
                cell.push(b'"');
            }
        }
        let end = rest.iter().position(|&c| c == delimiter);
        cell.extend_from_slice(rest.get(..end.unwrap_or(rest.len())).unwrap_or_default());
        record.push_field(&cell);
        match end {
            Some(end) => rest = rest.get(end + 1..).unwrap_or_default(),
            None => return record,
        }
    }
}

#[cfg(test)]
mod tests {
    use rand::{RngExt, SeedableRng};

    use super::*;

    #[test]
    fn cells_are_those_of_a_csv_reader() {
        const SEED: u64 = 99;
        let mut random = rand::rngs::StdRng::seed_from_u64(SEED);
        for case in 0..20_000 {
            let n = random.random_range(1..12);
            let line: Vec<u8> = (0..n)
                .map(|_| b"ab,,\"\" #"[random.random_range(0..8)])
                .collect();
            let mut expected = ByteRecord::new();
            csv::ReaderBuilder::new()
                .has_headers(false)
                .buffer_capacity(16)
                .from_reader([&line, &b"\r\n"[..]].concat().as_slice())
                .read_byte_record(&mut expected)
                .unwrap();
            let text = String::from_utf8_lossy(&line);
            // An open quote takes in the line end there, but not here.
            if !expected.iter().any(|cell| cell.contains(&b'\n')) {
                let cells = cells_of(&line, b',');
                assert_eq!(cells, expected, "seed {SEED}, case {case}: {text:?}");
            }
        }
    }
}
