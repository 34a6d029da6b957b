//! Text in any of the encodings that recorders write, as UTF-8 bytes.

use std::io::{self, Read};

/// How the characters are coded.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Encoding {
    /// ASCII, UTF-8 or a single-byte code that agrees with ASCII.
    Bytes,
    Utf16Le,
    Utf16Be,
    /// ISO 8859-1, whatever it looks like.
    Latin1,
}

/// So many zeros in a row end a text: room that was set aside for it.
const MOST_ZEROS: usize = 1 << 26;

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
            // A block that never reached the card reads as zeros.
            _ if 2 * head.iter().filter(|&&byte| byte == 0).count() <= head.len() => {
                Some(Encoding::Bytes)
            }
            _ => None,
        }
    }

    /// Whether at most one character in a hundred is a control character.
    pub(super) fn looks_like_text(self, head: &[u8]) -> bool {
        let odd = |unit: u16| unit < 32 && ![9, 10, 12, 13].contains(&unit) || unit == 127;
        let (odd, all) = match self {
            Encoding::Bytes | Encoding::Latin1 => (
                head.iter()
                    .filter(|&&byte| byte != 0 && odd(byte.into()))
                    .count(),
                head.iter().filter(|&&byte| byte != 0).count(),
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

    /// Takes in and converts the next bytes of UTF-16 or Latin-1.
    fn refill(&mut self) -> io::Result<()> {
        self.ready.clear();
        self.given = 0;
        self.raw.resize(32 * 1024, 0);
        let got = self
            .inner
            .read(self.raw.get_mut(self.held..).unwrap_or_default())?;
        let mut end = self.held + got;
        if self.encoding == Encoding::Latin1 {
            for &byte in self.raw.get(..end).unwrap_or_default() {
                let mut utf8 = [0; 2];
                let coded = char::from(byte).encode_utf8(&mut utf8);
                self.ready.extend_from_slice(coded.as_bytes());
            }
            self.held = 0;
            return Ok(());
        }
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

    /// Reads bytes and leaves out zeros, which are no text.
    fn read_without_zeros(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        let mut zeros = 0;
        loop {
            let got = self.inner.read(buffer)?;
            let read = buffer.get_mut(..got).unwrap_or_default();
            if got > 0 && read.iter().all(|&byte| byte == 0) {
                zeros += got;
                if zeros > MOST_ZEROS {
                    return Ok(0);
                }
                continue;
            }
            let Some(first) = memchr::memchr(0, read) else {
                return Ok(got);
            };
            let mut kept = first;
            for at in first..got {
                if let Some(&byte) = read.get(at)
                    && byte != 0
                {
                    if let Some(place) = read.get_mut(kept) {
                        *place = byte;
                    }
                    kept += 1;
                }
            }
            if kept > 0 {
                return Ok(kept);
            }
        }
    }

    fn read_raw(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        if self.encoding == Encoding::Bytes && self.given == self.ready.len() {
            return self.read_without_zeros(buffer);
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

#[cfg(test)]
mod tests {
    use super::super::line_limit::Drip;
    use super::*;

    fn converted(bytes: &[u8], encoding: Encoding, step: usize) -> String {
        let mut bytes_out = Vec::new();
        let mut reader = TextReader::new(Drip(bytes, step), encoding, false);
        reader.read_to_end(&mut bytes_out).unwrap();
        String::from_utf8_lossy(&bytes_out).into_owned()
    }

    #[test]
    fn marks_and_pairs_split_over_reads() {
        let text = "\u{FEFF}a\u{1F50A},ü\n";
        let little: Vec<u8> = text.encode_utf16().flat_map(u16::to_le_bytes).collect();
        let big: Vec<u8> = text.encode_utf16().flat_map(u16::to_be_bytes).collect();
        for step in 1..9 {
            assert_eq!(converted(text.as_bytes(), Encoding::Bytes, step), text[3..]);
            assert_eq!(converted(&little, Encoding::Utf16Le, step), text[3..]);
            assert_eq!(converted(&big, Encoding::Utf16Be, step), text[3..]);
            // Cut within a pair, and within a unit.
            assert_eq!(
                converted(&little[..6], Encoding::Utf16Le, step),
                "a\u{FFFD}"
            );
            assert_eq!(converted(&little[..5], Encoding::Utf16Le, step), "a");
            assert_eq!(converted(b"\xEF\xBBx", Encoding::Bytes, step), "\u{FFFD}x");
        }
    }

    #[test]
    fn encodings_by_their_first_bytes() {
        let utf16: Vec<u8> = "t,x\n1,2\n"
            .encode_utf16()
            .flat_map(u16::to_be_bytes)
            .collect();
        assert_eq!(Encoding::of(&utf16), Some(Encoding::Utf16Be));
        assert_eq!(Encoding::of(b"t,x"), Some(Encoding::Bytes));
        assert_eq!(Encoding::of(b"t\x00\x00\x00\x00\x01x\x00"), None);
        assert!(!Encoding::Bytes.looks_like_text(b"t,x\x00\x01\x00y"));
        assert!(Encoding::Bytes.looks_like_text(b"t,x\n1,2\x00\x00\x00\n"));
        assert!(Encoding::Bytes.looks_like_text(b"t,x\r\n"));
        assert!(!Encoding::Bytes.looks_like_text(b"t,x\x01\x02\r\n"));
    }

    #[test]
    fn squeezing() {
        assert_eq!(squeeze(b"  1 \t 2\t3  \n"), b"1 2 3\n");
        for step in 1..5 {
            let drip = Drip(b"\t 1  2 \n  3\t4", step);
            let mut text = String::new();
            BlankReader::new(drip, true)
                .read_to_string(&mut text)
                .unwrap();
            assert_eq!(text, "1 2\n3 4");
        }
    }

    #[test]
    fn any_bytes_make_a_text() {
        assert_eq!(to_text(b"\xEF\xBB\xBFx"), "x");
        assert_eq!(to_text("Größe".as_bytes()), "Größe");
        assert_eq!(to_text(b"Gr\xF6\xDFe"), "Größe");
        assert_eq!(to_text(&"ü".as_bytes()[..1]), "");
    }
}
