//! Which character separates the cells of a table.

use super::cells::Remarks;
use super::csv_lines::{Line, join_pairs, split};
use super::csv_sniff::{is_data, tally, tally_cell, usual_width};
use super::error::CaptureError;

/// Characters that do nothing but separate, the less ambiguous first.
const DELIMITERS: &[u8] = b"\t;|,";

/// How the lines of a table are split.
pub(super) struct Splitting {
    pub delimiter: u8,
    /// Each second delimiter is a decimal comma.
    pub paired: bool,
    pub lines: Vec<Line>,
}

/// Splits by the delimiter that the user says, that a line `sep=;` says, or
/// else that makes the best table of the first lines.
pub(super) fn choose_delimiter(
    lines: &[(usize, &[u8])],
    told: Option<u8>,
    remarks: &Remarks,
) -> Result<Splitting, CaptureError> {
    let told = told.or_else(|| {
        let (_, first) = lines.first()?;
        match first.trim_ascii().trim_ascii_start() {
            [b'"', inside @ .., b'"'] => declared(inside),
            first => declared(first),
        }
    });
    let split_by = |delimiter| split(lines, delimiter, remarks);
    let (mut delimiter, mut records) = match told {
        Some(told) => (told, split_by(told)),
        None => best(&split_by),
    };
    if delimiter == b',' {
        match halved_numbers(&records) {
            // One column: any delimiter but the comma reads it.
            Some(2) if told.is_none() => {
                delimiter = b';';
                records = split_by(delimiter);
            }
            Some(_) => {
                return Ok(Splitting {
                    delimiter,
                    paired: true,
                    lines: join_pairs(records, delimiter),
                });
            }
            None => {}
        }
    }
    Ok(Splitting {
        delimiter,
        paired: false,
        lines: records,
    })
}

/// The delimiter that a line `sep=;` declares, as spreadsheets write it.
fn declared(line: &[u8]) -> Option<u8> {
    match line {
        [b's' | b'S', b'e' | b'E', b'p' | b'P', b'=', delimiter] => Some(*delimiter),
        // A tab was trimmed.
        [b's' | b'S', b'e' | b'E', b'p' | b'P', b'='] => Some(b'\t'),
        _ => None,
    }
}

fn best(split_by: &dyn Fn(u8) -> Vec<Line>) -> (u8, Vec<Line>) {
    let blanks = (b' ', split_by(b' '));
    let real = DELIMITERS
        .iter()
        .map(|&delimiter| (delimiter, split_by(delimiter)))
        .reduce(|best, next| {
            if fit(&next.1).score > fit(&best.1).score {
                next
            } else {
                best
            }
        });
    match real {
        Some(real) if fit(&real.1).goes_before_blanks(&fit(&blanks.1)) => real,
        _ => blanks,
    }
}

/// How well a delimiter fits.
#[derive(Debug, Clone, Copy, PartialEq)]
struct Fit {
    /// Usual cells per line.
    width: usize,
    /// Lines of that width that hold a number, and the words in them.
    lines: i64,
    words: i64,
    /// Numbers less words, over the lines of that width.
    score: i64,
}

fn fit(records: &[Line]) -> Fit {
    let width = usual_width(records);
    let mut fit = Fit {
        width,
        lines: 0,
        words: 0,
        score: 0,
    };
    for line in records
        .iter()
        .filter(|line| !line.remark && line.cells.len() == width)
    {
        let cells = line.cells.iter().map(tally_cell);
        let (numbers, words) = cells.fold((0, 0), |(n, w), (number, word)| (n + number, w + word));
        if numbers > 0 {
            fit.lines += 1;
            fit.words += words as i64;
            fit.score += numbers as i64 - words as i64;
        } else {
            fit.score -= 1;
        }
    }
    fit
}

impl Fit {
    /// Whether this delimiter is meant rather than blanks.
    ///
    /// Blanks also stand within names, dates and after commas, where splitting
    /// at them often gives more numbers. So a real delimiter that splits most
    /// lines stands, unless it leaves more words than blanks do: then it
    /// is the decimal mark, or there is a cell of numbers that only blanks
    /// take apart.
    fn goes_before_blanks(&self, blanks: &Fit) -> bool {
        let splits = self.width > 1 && 4 * self.lines >= 3 * blanks.lines;
        splits && self.words * blanks.lines <= blanks.words * self.lines
            || self.score >= blanks.score
    }
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
