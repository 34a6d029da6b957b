//! Text in any of the encodings that recorders write, as UTF-8 bytes, with a
//! bound on the length of a line.

use std::io::{self, Read};

/// Longest accepted line, in bytes.
pub(super) const LONGEST_LINE: usize = 1 << 20;

/// How the characters are coded.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Encoding {
    /// ASCII, UTF-8 or a single-byte code that agrees with ASCII.
    Bytes,
    Utf16Le,
    Utf16Be,
}

const UTF8_BOM: &[u8] = b"\xEF\xBB\xBF";

impl Encoding {
    /// From the first bytes of a file; `None` if it is hardly text.
    pub(super) fn of(head: &[u8]) -> Option<Encoding> {
        if head.starts_with(b"\xFF\xFE") {
            return Some(Encoding::Utf16Le);
        }
        if head.starts_with(b"\xFE\xFF") {
            return Some(Encoding::Utf16Be);
        }
        if !head.contains(&0) {
            return Some(Encoding::Bytes);
        }
        // Without a mark: the text of a table is mostly ASCII, so nearly every
        // second byte is 0.
        let share = |parity: usize| {
            let bytes = head.iter().skip(parity).step_by(2);
            bytes.clone().filter(|&&byte| byte == 0).count() * 10 > bytes.len() * 9
        };
        match (share(0), share(1)) {
            (true, false) => Some(Encoding::Utf16Be),
            (false, true) => Some(Encoding::Utf16Le),
            _ => None,
        }
    }

    /// Whether at most one character in a hundred is a control character.
    pub(super) fn looks_like_text(self, head: &[u8]) -> bool {
        let odd = |unit: u16| unit < 32 && ![9, 10, 12, 13].contains(&unit) || unit == 127;
        let (odd, all) = match self {
            Encoding::Bytes => (
                head.iter().filter(|&&byte| odd(byte.into())).count(),
                head.len(),
            ),
            _ => {
                let units = head.chunks_exact(2).map(|pair| self.unit(pair));
                (units.filter(|&unit| odd(unit)).count(), head.len() / 2)
            }
        };
        odd * 100 <= all
    }

    fn unit(self, pair: &[u8]) -> u16 {
        match (self, pair) {
            (Encoding::Utf16Be, &[high, low]) | (_, &[low, high]) => {
                u16::from_le_bytes([low, high])
            }
            _ => 0,
        }
    }
}

/// UTF-8 of some cell; bytes that are not UTF-8 are taken as Latin-1.
pub(super) fn to_text(bytes: &[u8]) -> String {
    let bytes = bytes.strip_prefix(UTF8_BOM).unwrap_or(bytes);
    match std::str::from_utf8(bytes) {
        Ok(text) => text.to_owned(),
        // Cut within a character.
        Err(e) if e.error_len().is_none() => {
            to_text(bytes.get(..e.valid_up_to()).unwrap_or_default())
        }
        Err(_) => bytes.iter().map(|&byte| char::from(byte)).collect(),
    }
}

/// Reads text as UTF-8 (or Latin-1) bytes without a byte-order mark and with
/// `\n` where lines end in a lone `\r`.
#[derive(Debug)]
pub(super) struct TextReader<R> {
    inner: R,
    encoding: Encoding,
    at_start: bool,
    /// Lines end in a lone `\r`.
    cr_only: bool,
    raw: Vec<u8>,
    /// Bytes of `raw` that hold part of a character.
    held: usize,
    ready: Vec<u8>,
    given: usize,
}

impl<R: Read> TextReader<R> {
    pub(super) fn new(inner: R, encoding: Encoding, cr_only: bool) -> Self {
        TextReader {
            inner,
            encoding,
            at_start: true,
            cr_only,
            raw: Vec::new(),
            held: 0,
            ready: Vec::new(),
            given: 0,
        }
    }

    /// Takes in and converts the next bytes of UTF-16.
    fn refill(&mut self) -> io::Result<()> {
        self.ready.clear();
        self.given = 0;
        self.raw.resize(32 * 1024, 0);
        let got = self
            .inner
            .read(self.raw.get_mut(self.held..).unwrap_or_default())?;
        let mut end = self.held + got;
        let mut units: Vec<u16> = self
            .raw
            .get(..end)
            .unwrap_or_default()
            .chunks_exact(2)
            .map(|pair| self.encoding.unit(pair))
            .collect();
        // Half a surrogate pair waits for its other half.
        if got > 0
            && units
                .last()
                .is_some_and(|unit| (0xD800..0xDC00).contains(unit))
        {
            units.pop();
        }
        let used = 2 * units.len();
        let text = char::decode_utf16(units).map(|c| c.unwrap_or(char::REPLACEMENT_CHARACTER));
        let mut utf8 = [0; 4];
        for c in text {
            self.ready
                .extend_from_slice(c.encode_utf8(&mut utf8).as_bytes());
        }
        if got == 0 {
            end = used;
        }
        self.raw.copy_within(used..end, 0);
        self.held = end - used;
        Ok(())
    }

    fn read_raw(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        if self.encoding == Encoding::Bytes && self.given == self.ready.len() {
            return self.inner.read(buffer);
        }
        while self.given == self.ready.len() {
            let before = self.held;
            self.refill()?;
            if self.ready.is_empty() && self.held <= before {
                return Ok(0);
            }
        }
        let mut rest = self.ready.get(self.given..).unwrap_or_default();
        let n = rest.read(buffer)?;
        self.given += n;
        Ok(n)
    }

    /// Drops the byte-order mark, which may come in pieces.
    fn skip_mark(&mut self) -> io::Result<()> {
        let mut head = Vec::new();
        let mut byte = [0];
        while head.len() < UTF8_BOM.len()
            && UTF8_BOM.starts_with(&head)
            && self.read_raw(&mut byte)? == 1
        {
            head.push(byte[0]);
        }
        if head != UTF8_BOM {
            let rest = self.ready.get(self.given..).unwrap_or_default();
            head.extend_from_slice(rest);
            self.ready = head;
            self.given = 0;
        }
        Ok(())
    }
}

impl<R: Read> Read for TextReader<R> {
    fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        if self.at_start {
            self.at_start = false;
            self.skip_mark()?;
        }
        let n = self.read_raw(buffer)?;
        if self.cr_only {
            let read = buffer.get_mut(..n).unwrap_or_default();
            read.iter_mut()
                .filter(|byte| **byte == b'\r')
                .for_each(|byte| *byte = b'\n');
        }
        Ok(n)
    }
}

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

/// A line with each run of blanks and tabs made one blank, and none at its ends.
pub(super) fn squeeze(line: &[u8]) -> Vec<u8> {
    let mut squeezed = Vec::with_capacity(line.len());
    Squeezer::default().pass(line, &mut squeezed);
    squeezed
}

/// Makes one blank of each run of blanks and tabs, and drops those at the ends
/// of lines.
#[derive(Debug, Clone, Copy)]
struct Squeezer {
    /// A blank is due before the next character.
    due: bool,
    line_start: bool,
}

impl Default for Squeezer {
    fn default() -> Self {
        Squeezer {
            due: false,
            line_start: true,
        }
    }
}

impl Squeezer {
    fn pass(&mut self, bytes: &[u8], squeezed: &mut Vec<u8>) {
        for &byte in bytes {
            match byte {
                b' ' | b'\t' => self.due = !self.line_start,
                b'\n' | b'\r' => {
                    squeezed.push(byte);
                    *self = Squeezer::default();
                }
                _ => {
                    if self.due {
                        squeezed.push(b' ');
                    }
                    squeezed.push(byte);
                    *self = Squeezer {
                        due: false,
                        line_start: false,
                    };
                }
            }
        }
    }
}

/// Passes text through as it is, or squeezed for a table aligned with blanks.
#[derive(Debug)]
pub(super) struct BlankReader<R> {
    inner: R,
    squeezer: Option<Squeezer>,
    raw: Vec<u8>,
    ready: Vec<u8>,
    given: usize,
}

impl<R> BlankReader<R> {
    pub(super) fn new(inner: R, squeezed: bool) -> Self {
        BlankReader {
            inner,
            squeezer: squeezed.then(Squeezer::default),
            raw: Vec::new(),
            ready: Vec::new(),
            given: 0,
        }
    }
}

impl<R: Read> Read for BlankReader<R> {
    fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        let Some(squeezer) = &mut self.squeezer else {
            return self.inner.read(buffer);
        };
        self.raw.resize(32 * 1024, 0);
        while self.given == self.ready.len() {
            let got = self.inner.read(&mut self.raw)?;
            if got == 0 {
                return Ok(0);
            }
            self.ready.clear();
            self.given = 0;
            squeezer.pass(self.raw.get(..got).unwrap_or_default(), &mut self.ready);
        }
        let mut rest = self.ready.get(self.given..).unwrap_or_default();
        let n = rest.read(buffer)?;
        self.given += n;
        Ok(n)
    }
}
