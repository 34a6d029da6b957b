//! Numbers as tables write them: decimal point or comma, grouped thousands,
//! either minus sign, exponents.

/// Which character stands before decimals.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub(super) enum DecimalStyle {
    /// A lone point or comma does.
    #[default]
    Either,
    /// The point; commas group thousands.
    Point,
    /// The comma; points group thousands.
    Comma,
}

impl DecimalStyle {
    fn allows(self, mark: u8) -> bool {
        match self {
            DecimalStyle::Either => mark == b'.' || mark == b',',
            DecimalStyle::Point => mark == b'.',
            DecimalStyle::Comma => mark == b',',
        }
    }
}

/// Digits with at most one decimal mark.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) struct Digits {
    pub negative: bool,
    /// All digits as one whole number.
    pub mantissa: u64,
    /// How many of them are decimals, at most 19.
    pub decimals: u32,
}

/// Reads nothing but a sign, at most 19 digits and a decimal mark: what nearly
/// every cell is.
#[inline]
pub(super) fn read_digits(bytes: &[u8], style: DecimalStyle) -> Option<Digits> {
    const MOST: usize = 20;
    let (negative, digits) = match bytes {
        [b'-', rest @ ..] => (true, rest),
        [b'+', rest @ ..] => (false, rest),
        _ => (false, bytes),
    };
    if digits.len() > MOST {
        return None;
    }
    let mut mantissa = 0u64;
    let mut mark = None;
    for (at, &c) in digits.iter().enumerate() {
        let digit = c.wrapping_sub(b'0');
        if digit < 10 {
            mantissa = mantissa.wrapping_mul(10).wrapping_add(digit.into());
        } else if mark.is_none() && style.allows(c) {
            mark = Some(at);
        } else {
            return None;
        }
    }
    let count = digits.len() - usize::from(mark.is_some());
    // 19 digits fit; so does no digit, which is no number.
    if count == 0 || count >= MOST {
        return None;
    }
    Some(Digits {
        negative,
        mantissa,
        decimals: mark.map_or(0, |at| (digits.len() - at - 1) as u32),
    })
}

/// Powers of ten that a double holds exactly.
const POWERS: [f64; 23] = [
    1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11, 1e12, 1e13, 1e14, 1e15, 1e16,
    1e17, 1e18, 1e19, 1e20, 1e21, 1e22,
];

impl Digits {
    /// The number, where dividing two exact doubles gives the nearest one
    /// (Clinger 1990, "How to read floating point numbers accurately").
    #[inline]
    fn value(self) -> Option<f64> {
        let power = *POWERS.get(self.decimals as usize)?;
        let value = (self.mantissa <= 1 << 53).then(|| self.mantissa as f64 / power)?;
        Some(if self.negative { -value } else { value })
    }
}

/// Reads a number without blanks around it; infinite and NaN where so written.
#[inline]
pub(super) fn read_number(bytes: &[u8], style: DecimalStyle) -> Option<f64> {
    match read_digits(bytes, style).and_then(Digits::value) {
        Some(value) => Some(value),
        None => read_slowly(bytes, style),
    }
}

#[cold]
fn read_slowly(bytes: &[u8], style: DecimalStyle) -> Option<f64> {
    let as_written = |bytes: &[u8]| std::str::from_utf8(bytes).ok()?.parse::<f64>().ok();
    let pointed = bytes.contains(&b'.');
    if style == DecimalStyle::Comma && pointed {
        return read_mended(bytes, style);
    }
    as_written(bytes).or_else(|| read_mended(bytes, style))
}

/// What stands between groups of three digits beside the point and the comma:
/// apostrophes and blanks of many widths.
const GROUPERS: &[&[u8]] = &[
    b"'",
    b" ",
    b"\xC2\xA0",
    b"\xE2\x80\x89",
    b"\xE2\x80\xAF",
    b"\xE2\x80\x99",
    b"\xA0",
];

/// A number in another hand than a computer's: decimal comma, grouped
/// thousands, the minus sign of typography, `D` for the exponent.
fn read_mended(bytes: &[u8], style: DecimalStyle) -> Option<f64> {
    const LONGEST: usize = 64;
    const MINUS: &[u8] = "\u{2212}".as_bytes();
    let (sign, mut rest) = match bytes {
        [b'-', rest @ ..] => (-1.0, rest),
        [b'+', rest @ ..] => (1.0, rest),
        _ => match bytes.strip_prefix(MINUS) {
            Some(rest) => (-1.0, rest),
            None => (1.0, bytes),
        },
    };
    if rest.len() > LONGEST {
        return None;
    }
    let decimal = decimal_mark(rest, style);
    let mut plain = Vec::with_capacity(rest.len());
    // Digits since the last grouping mark, and whether there was one.
    let (mut run, mut grouped) = (0, false);
    while let Some((&c, after)) = rest.split_first() {
        let grouper = || GROUPERS.iter().find_map(|mark| rest.strip_prefix(*mark));
        if c.is_ascii_digit() {
            plain.push(c);
            run += 1;
            rest = after;
        } else if Some(c) == decimal || matches!(c, b'e' | b'E' | b'd' | b'D') {
            // The mantissa's whole part ends here; what follows is not grouped.
            if grouped && run != 3 {
                return None;
            }
            let tail = mended_tail(rest, decimal)?;
            plain.extend_from_slice(&tail);
            (run, grouped) = (3, true);
            break;
        } else if let Some(after) = match c {
            b'.' | b',' => Some(after),
            _ => grouper(),
        } {
            let whole = if grouped {
                run == 3
            } else {
                (1..=3).contains(&run)
            };
            if !whole {
                return None;
            }
            (run, grouped) = (0, true);
            rest = after;
        } else {
            return None;
        }
    }
    if grouped && run != 3 || plain.is_empty() {
        return None;
    }
    let value: f64 = std::str::from_utf8(&plain).ok()?.parse().ok()?;
    Some(sign * value)
}

/// Decimals and exponent as a computer writes them.
fn mended_tail(bytes: &[u8], decimal: Option<u8>) -> Option<Vec<u8>> {
    bytes
        .iter()
        .map(|&c| match c {
            _ if Some(c) == decimal => Some(b'.'),
            b'd' | b'D' | b'e' | b'E' => Some(b'e'),
            b'0'..=b'9' | b'+' | b'-' => Some(c),
            _ => None,
        })
        .collect()
}

/// The character before decimals in this number, if it has any.
fn decimal_mark(bytes: &[u8], style: DecimalStyle) -> Option<u8> {
    match style {
        DecimalStyle::Point => return Some(b'.'),
        DecimalStyle::Comma => return Some(b','),
        DecimalStyle::Either => {}
    }
    let last = *bytes.iter().rfind(|&&c| c == b'.' || c == b',')?;
    let times = bytes.iter().filter(|&&c| c == last).count();
    // Twice the same mark can only group.
    (times == 1).then_some(last)
}

/// What a number tells of its table: whether thousands are grouped in it, and
/// then which mark stands before decimals.
pub(super) fn told_style(bytes: &[u8]) -> Option<DecimalStyle> {
    let style = match (
        bytes.iter().filter(|&&c| c == b'.').count(),
        bytes.iter().filter(|&&c| c == b',').count(),
    ) {
        (0 | 1, 0) | (0, 1) => return None,
        (points, 0) if points > 1 => DecimalStyle::Comma,
        (0, commas) if commas > 1 => DecimalStyle::Point,
        _ => match bytes.iter().rfind(|&&c| c == b'.' || c == b',') {
            Some(b'.') => DecimalStyle::Point,
            _ => DecimalStyle::Comma,
        },
    };
    read_number(bytes, style).map(|_| style)
}

#[cfg(test)]
mod tests {
    use rand::{RngExt, SeedableRng};

    use super::*;

    #[test]
    fn fast_numbers_are_those_of_the_standard_library() {
        const SEED: u64 = 1990;
        let mut random = rand::rngs::StdRng::seed_from_u64(SEED);
        for case in 0..300_000 {
            let n = random.random_range(1..24);
            let text: String = (0..n)
                .map(|_| char::from(b"0123456789012345678901.-+e"[random.random_range(0..26)]))
                .collect();
            let expected = text.parse::<f64>().ok().map(f64::to_bits);
            let found = read_number(text.as_bytes(), DecimalStyle::Point).map(f64::to_bits);
            assert_eq!(found, expected, "seed {SEED}, case {case}: {text:?}");
        }
    }

    #[test]
    fn marks_by_their_style() {
        let read = |text: &str, style| read_number(text.as_bytes(), style);
        for (text, either, point, comma) in [
            ("1.5", Some(1.5), Some(1.5), None),
            ("1,5", Some(1.5), None, Some(1.5)),
            ("1,234", Some(1.234), Some(1234.0), Some(1.234)),
            ("1.234", Some(1.234), Some(1.234), Some(1234.0)),
            ("1,234.5", Some(1234.5), Some(1234.5), None),
            ("1.234,5", Some(1234.5), None, Some(1234.5)),
            ("-1.234.567", Some(-1_234_567.0), None, Some(-1_234_567.0)),
            ("1,234,567.25", Some(1_234_567.25), Some(1_234_567.25), None),
            ("1 234,5", Some(1234.5), None, Some(1234.5)),
            ("1'234.5e2", Some(123_450.0), Some(123_450.0), None),
            ("1.5D-3", Some(0.0015), Some(0.0015), None),
            ("1,5e-3", Some(0.0015), None, Some(0.0015)),
            ("12,34,5", None, None, None),
            ("1.2.3", None, None, None),
            ("1,2,3", None, None, None),
            ("1 2", None, None, None),
            (",", None, None, None),
            ("1e", None, None, None),
            ("1.5.e3", None, None, None),
            ("", None, None, None),
        ] {
            assert_eq!(read(text, DecimalStyle::Either), either, "{text}");
            assert_eq!(read(text, DecimalStyle::Point), point, "{text}");
            assert_eq!(read(text, DecimalStyle::Comma), comma, "{text}");
        }
    }

    #[test]
    fn only_grouped_numbers_tell_the_style() {
        for (text, style) in [
            ("1.5", None),
            ("1,234", None),
            ("1,234.5", Some(DecimalStyle::Point)),
            ("1.234,5", Some(DecimalStyle::Comma)),
            ("1.234.567", Some(DecimalStyle::Comma)),
            ("1,2,3", None),
            ("10.05.2031", None),
        ] {
            assert_eq!(told_style(text.as_bytes()), style, "{text}");
        }
    }
}
