//! Rows of a table without quotes, split in place: no cell is copied.

use std::io::Read;

use memchr::{memchr, memchr_iter};

use super::error::CaptureError;
use super::line_limit::LONGEST_LINE;

/// Bytes asked for at a time.
const PIECE: usize = 128 * 1024;

/// Reads lines and splits them at a delimiter.
#[derive(Debug)]
pub(super) struct Splitter<R> {
    inner: R,
    delimiter: u8,
    /// Each second delimiter is a decimal comma.
    paired: bool,
    buffer: Vec<u8>,
    /// The line in `buffer`, and where the next one starts.
    line: (usize, usize),
    next: usize,
    /// Bytes of `buffer` that were read.
    filled: usize,
    ended: bool,
    /// Ends of cells in `buffer`.
    ends: Vec<usize>,
    /// Lines before the next one.
    lines: u64,
}

impl<R: Read> Splitter<R> {
    pub(super) fn new(inner: R, delimiter: u8, paired: bool) -> Self {
        Splitter {
            inner,
            delimiter,
            paired,
            buffer: Vec::new(),
            line: (0, 0),
            next: 0,
            filled: 0,
            ended: false,
            ends: Vec::new(),
            lines: 0,
        }
    }

    /// Goes to the next line that is not empty and tells how many were before
    /// it; `None` at the end.
    ///
    /// # Errors
    /// Where a line is too long; lines count from `first_line` on.
    pub(super) fn next(&mut self, first_line: u64) -> Result<Option<u64>, CaptureError> {
        loop {
            let rest = self.buffer.get(self.next..self.filled).unwrap_or_default();
            let (length, step) = match memchr(b'\n', rest) {
                Some(length) => (length, length + 1),
                None if !self.ended => {
                    if rest.len() > LONGEST_LINE {
                        return Err(self.too_long(first_line));
                    }
                    self.refill()?;
                    continue;
                }
                None if rest.is_empty() => return Ok(None),
                None => (rest.len(), rest.len()),
            };
            if length > LONGEST_LINE {
                return Err(self.too_long(first_line));
            }
            let start = self.next;
            let number = self.lines;
            let mut line = rest.get(..length).unwrap_or_default();
            while let [before @ .., b'\r'] = line {
                line = before;
            }
            self.line = (start, start + line.len());
            self.next += step;
            self.lines += 1;
            if line.is_empty() {
                continue;
            }
            self.ends.clear();
            let mut second = false;
            for at in memchr_iter(self.delimiter, line) {
                second = !second;
                if !(self.paired && second) {
                    self.ends.push(start + at);
                }
            }
            self.ends.push(self.line.1);
            return Ok(Some(number));
        }
    }

    fn too_long(&self, first_line: u64) -> CaptureError {
        CaptureError::LineTooLong {
            line: first_line + self.lines,
            limit: LONGEST_LINE,
        }
    }

    /// Cells of the line.
    pub(super) fn len(&self) -> usize {
        self.ends.len()
    }

    /// A cell of the line.
    #[inline]
    pub(super) fn get(&self, cell: usize) -> Option<&[u8]> {
        let end = *self.ends.get(cell)?;
        let start = match cell.checked_sub(1) {
            Some(before) => self.ends.get(before)? + 1,
            None => self.line.0,
        };
        self.buffer.get(start..end)
    }

    /// Moves what is left to the front and reads on.
    fn refill(&mut self) -> Result<(), CaptureError> {
        self.buffer.copy_within(self.next..self.filled, 0);
        self.filled -= self.next;
        self.next = 0;
        if self.buffer.len() < self.filled + PIECE {
            self.buffer.resize(self.filled + PIECE, 0);
        }
        let room = self.buffer.get_mut(self.filled..).unwrap_or_default();
        let got = loop {
            match self.inner.read(room) {
                Err(e) if e.kind() == std::io::ErrorKind::Interrupted => {}
                other => break other?,
            }
        };
        // The last byte may be half of a line end.
        let from = self.filled.saturating_sub(1);
        self.filled += got;
        self.ended = got == 0;
        end_lines(self.buffer.get_mut(from..self.filled).unwrap_or_default());
        Ok(())
    }
}

/// Makes a line end of each lone `\r` among lines that end otherwise.
pub(super) fn end_lines(text: &mut [u8]) {
    let mut from = 0;
    while let Some(step) = memchr(b'\r', text.get(from..).unwrap_or_default()) {
        let at = from + step;
        if let Some([end, after]) = text.get_mut(at..at + 2)
            && !matches!(after, b'\n' | b'\r')
        {
            *end = b'\n';
        }
        from = at + 1;
    }
}

#[cfg(test)]
mod tests {
    use rand::{RngExt, SeedableRng};

    use super::super::line_limit::Drip;
    use super::*;

    #[test]
    fn rows_are_those_of_a_csv_reader() {
        const SEED: u64 = 31;
        let mut random = rand::rngs::StdRng::seed_from_u64(SEED);
        for case in 0..2000 {
            let n = random.random_range(0..80);
            let mut text: Vec<u8> = (0..n)
                .map(|_| b"12,;\n"[random.random_range(0..5)])
                .collect();
            if case % 2 == 0 {
                text = String::from_utf8(text)
                    .unwrap()
                    .replace('\n', "\r\n")
                    .into_bytes();
            }
            let mut reader = csv::ReaderBuilder::new()
                .has_headers(false)
                .flexible(true)
                .quoting(false)
                .from_reader(text.as_slice());
            let step = random.random_range(1..9);
            let mut splitter = Splitter::new(Drip(&text, step), b',', false);
            for expected in reader.byte_records() {
                let expected = expected.unwrap();
                let line = splitter.next(1).unwrap().unwrap();
                // Of a record after empty lines, the reader tells the first of these.
                assert!(
                    line >= expected.position().unwrap().line() - 1,
                    "case {case}"
                );
                let cells: Vec<&[u8]> = (0..splitter.len())
                    .map(|cell| splitter.get(cell).unwrap())
                    .collect();
                assert_eq!(cells, expected.iter().collect::<Vec<_>>(), "case {case}");
            }
            assert_eq!(splitter.next(1).unwrap(), None, "seed {SEED}, case {case}");
        }
    }

    #[test]
    fn pairs_are_joined() {
        let mut splitter = Splitter::new(&b"0,25,-1,5\n"[..], b',', true);
        assert_eq!(splitter.next(1).unwrap(), Some(0));
        assert_eq!(splitter.len(), 2);
        assert_eq!(splitter.get(0), Some(&b"0,25"[..]));
        assert_eq!(splitter.get(1), Some(&b"-1,5"[..]));
        assert_eq!(splitter.get(2), None);
    }

    #[test]
    fn a_line_without_an_end_is_refused_before_it_fills_the_memory() {
        let long = vec![b'1'; LONGEST_LINE + 2 * PIECE];
        let mut splitter = Splitter::new(long.as_slice(), b',', false);
        let error = splitter.next(5).unwrap_err();
        assert!(matches!(error, CaptureError::LineTooLong { line: 5, .. }));
        assert!(splitter.buffer.len() < LONGEST_LINE + 3 * PIECE);
    }
}
