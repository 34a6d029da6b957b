//! A bound on the length of a CSV record.

use std::io::{self, Read};

/// Longest accepted line, in bytes.
pub(super) const LONGEST_LINE: usize = 1 << 20;

/// What [`LineLimit`] fails with, inside an [`io::Error`].
#[derive(Debug, thiserror::Error)]
#[error("line {line} is too long")]
pub(super) struct TooLong {
    /// Lines before it, in this reader.
    pub line: u64,
}

/// Where a reader of CSV stands within a record.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Place {
    RecordStart,
    FieldStart,
    Plain,
    Quoted,
    /// After a quote within quotes: the end, or the first half of a quote.
    QuoteEnd,
}

/// Passes bytes through and fails when a CSV record grows beyond
/// [`LONGEST_LINE`]: a reader that collects records in memory behind it stays
/// bounded, even if a quote is never closed.
#[derive(Debug)]
pub(super) struct LineLimit<R> {
    inner: R,
    delimiter: u8,
    /// Whether cells may be in quotes.
    quoted: bool,
    place: Place,
    length: usize,
    /// Newlines passed, and those passed when the record began.
    lines: u64,
    record_line: u64,
}

impl<R> LineLimit<R> {
    pub(super) fn new(inner: R, delimiter: u8, quoted: bool) -> Self {
        LineLimit {
            inner,
            delimiter,
            quoted,
            place: Place::RecordStart,
            length: 0,
            lines: 0,
            record_line: 0,
        }
    }

    fn pass(&mut self, bytes: &[u8]) -> io::Result<()> {
        let within = matches!(self.place, Place::Quoted | Place::QuoteEnd);
        if self.quoted && (within || bytes.contains(&b'"')) {
            bytes.iter().for_each(|&byte| self.pass_byte(byte));
        } else {
            self.pass_plain(bytes);
        }
        if self.length > LONGEST_LINE {
            return Err(io::Error::other(TooLong {
                line: self.record_line,
            }));
        }
        Ok(())
    }

    /// As [`Self::pass_byte`] for each, where there is no quote.
    fn pass_plain(&mut self, bytes: &[u8]) {
        let line = match bytes.iter().rposition(|&byte| byte == b'\n') {
            Some(at) => {
                self.lines += bytes.iter().filter(|&&byte| byte == b'\n').count() as u64;
                self.record_line = self.lines;
                self.length = 0;
                self.place = Place::RecordStart;
                bytes.get(at + 1..).unwrap_or_default()
            }
            None => bytes,
        };
        self.length += line.len();
        if let Some(&last) = line.last() {
            self.place = if last == self.delimiter {
                Place::FieldStart
            } else {
                Place::Plain
            };
        }
    }

    fn pass_byte(&mut self, byte: u8) {
        self.length += 1;
        self.lines += u64::from(byte == b'\n');
        self.place = match (self.place, byte) {
            (Place::Quoted, b'"') => Place::QuoteEnd,
            (Place::Quoted, _) | (Place::QuoteEnd, b'"') => Place::Quoted,
            (_, b'\n') => {
                self.length = 0;
                self.record_line = self.lines;
                Place::RecordStart
            }
            (Place::RecordStart | Place::FieldStart, b'"') => Place::Quoted,
            (_, byte) if byte == self.delimiter => Place::FieldStart,
            _ => Place::Plain,
        };
    }
}

impl<R: Read> Read for LineLimit<R> {
    fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        let n = self.inner.read(buffer)?;
        self.pass(buffer.get(..n).unwrap_or_default())?;
        Ok(n)
    }
}

/// For tests: gives its bytes so many at a time.
#[cfg(test)]
pub(super) struct Drip<'a>(pub &'a [u8], pub usize);

#[cfg(test)]
impl Read for Drip<'_> {
    fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        let n = self.1.min(self.0.len()).min(buffer.len());
        self.0.read(&mut buffer[..n])
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Whether the limit passes a text, however it is cut into reads.
    fn passes(text: &[u8], quoted: bool) -> bool {
        let mut answers = [1 << 12, 1 << 16, 1 << 21].map(|step| {
            let mut limit = LineLimit::new(Drip(text, step), b',', quoted);
            io::copy(&mut limit, &mut io::sink()).is_ok()
        });
        answers.sort_unstable();
        assert_eq!(answers[0], answers[2]);
        answers[0]
    }

    #[test]
    fn long_records_are_stopped_and_short_ones_are_not() {
        let rows = b"1,\"2\"\"\",3\n\"a\nb\",\"c\"\n".repeat(200_000);
        assert!(passes(&rows, true));
        assert!(passes(&rows, false));
        let long = vec![b'1'; LONGEST_LINE + (1 << 16)];
        assert!(!passes(&long, false));
        // A quote that opens a cell runs on over lines; one within does not.
        let lines = b"\n1,2,3".repeat(400_000);
        assert!(!passes(&[b"1,\"2", lines.as_slice()].concat(), true));
        assert!(passes(&[b"1,2\"", lines.as_slice()].concat(), true));
        assert!(passes(&[b"1,\"2", lines.as_slice()].concat(), false));
    }
}
