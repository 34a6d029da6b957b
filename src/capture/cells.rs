//! Single cells of a table: numbers, missing values, column names and units.

use super::numbers::{DecimalStyle, read_number};
use super::text::to_text;

/// What a cell holds.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Cell {
    Number(f64),
    /// Nothing, or one of the usual marks for nothing.
    Missing,
    Word,
}

/// Marks of a missing value, in lower case. NaN and infinities are missing too.
const MISSING: &[&str] = &[
    "-",
    "--",
    "---",
    "*",
    "?",
    "na",
    "n/a",
    "#n/a",
    "n.a.",
    "null",
    "nil",
    "none",
    "ol",
    "o.l",
    "+ol",
    "-ol",
    "over",
    "overload",
    "overflow",
    "ovl",
    "ovf",
    "invalid",
    "bad",
    "err",
    "error",
    "#value!",
    "#div/0!",
    "#num!",
    "#ref!",
    "missing",
    "nodata",
    "no data",
    "n.d.",
    "timeout",
    "fault",
    "open",
    "short",
    "over range",
    "overrange",
    "under range",
    "underrange",
    "udf",
    "unfl",
    "----",
    "-----",
    "------",
    "-.-",
    "--.-",
    "--.--",
    "***",
    "*****",
    "#####",
    "#name?",
    "#null!",
    ".",
    "<na>",
    "-nan",
    "+nan",
    "nan(ind)",
    "1.#snan",
    "+inf",
    "1.#ind",
    "-1.#ind",
    "1.#qnan",
    "-1.#qnan",
    "1.#inf",
    "-1.#inf",
    "-nan(ind)",
];

/// From here on, a number means "not a number" or "out of range": 9.91E37 and
/// 9.9E37 in SCPI-1999, volume 1, section 7.2.
const NO_VALUE: f64 = 9.9e37;

/// Reads a cell.
#[inline]
pub(super) fn read_cell(bytes: &[u8], style: DecimalStyle) -> Cell {
    match read_number(bytes, style) {
        Some(number) if number.abs() < NO_VALUE => Cell::Number(number),
        _ => read_odd_cell(bytes, style),
    }
}

#[cold]
fn read_odd_cell(bytes: &[u8], style: DecimalStyle) -> Cell {
    // Quotes are there where the reader was not told to expect any; `="1.5"`
    // and `'1.5` keep spreadsheets from reading a number.
    let mut bytes = trim(bytes);
    bytes = bytes.strip_prefix(b"=").unwrap_or(bytes);
    bytes = match bytes {
        [b'"', inside @ .., b'"'] | [b'\'', inside @ .., b'\''] | [b'\'', inside @ ..] => {
            trim(inside)
        }
        bytes => bytes,
    };
    if bytes.is_empty() {
        return Cell::Missing;
    }
    match read_number(bytes, style) {
        Some(number) if number.abs() < NO_VALUE => Cell::Number(number),
        Some(_) => Cell::Missing,
        None if is_missing_mark(bytes) => Cell::Missing,
        None => Cell::Word,
    }
}

/// A number with a unit behind it: `5 V`, `1.5mV`. Gives where the unit starts.
pub(super) fn unit_suffix(bytes: &[u8], style: DecimalStyle) -> Option<&str> {
    let bytes = trim(bytes);
    let start = 1 + bytes.iter().rposition(|c| c.is_ascii_digit())?;
    let (number, unit) = bytes.split_at_checked(start)?;
    // "m/s2" ends in a digit.
    let unit = std::str::from_utf8(unit).ok()?.trim();
    read_number(trim(number), style)?;
    (!unit.is_empty() && is_unit(unit)).then_some(unit)
}

/// Without blanks, also the non-breaking ones of Latin-1 and UTF-8.
#[inline]
pub(super) fn trim(bytes: &[u8]) -> &[u8] {
    // Nearly always there are none.
    match bytes {
        [first, .., last] if first.is_ascii_graphic() && last.is_ascii_graphic() => bytes,
        _ => trim_blanks(bytes),
    }
}

fn trim_blanks(bytes: &[u8]) -> &[u8] {
    let mut bytes = bytes.trim_ascii();
    loop {
        bytes = match bytes {
            // Before the lone byte, for it may end another character.
            [b'\xC2', b'\xA0', rest @ ..] | [rest @ .., b'\xC2', b'\xA0'] => rest,
            [b'\xA0', rest @ ..] => rest,
            [rest @ .., b'\xA0'] if rest.is_ascii() => rest,
            _ => return bytes,
        }
        .trim_ascii();
    }
}

fn is_missing_mark(bytes: &[u8]) -> bool {
    MISSING
        .iter()
        .any(|mark| bytes.eq_ignore_ascii_case(mark.as_bytes()))
}

/// What marks a line as a remark.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub(super) enum Remarks {
    /// `#`, `%`, `//`, or a `;` that is not the delimiter.
    #[default]
    Usual,
    /// What the user says.
    Start(Vec<u8>),
}

impl Remarks {
    /// Whether a record with this first cell is a remark.
    pub(super) fn marks(&self, first: &[u8], delimiter: u8) -> bool {
        let first = first.trim_ascii_start();
        if let Remarks::Start(start) = self {
            return !start.is_empty() && first.starts_with(start);
        }
        match first.first() {
            Some(b'#') => !is_missing_mark(first.trim_ascii_end()),
            Some(b'%') => true,
            Some(b'/') => first.starts_with(b"//"),
            Some(b';') => delimiter != b';',
            _ => false,
        }
    }
}

/// A column's heading, taken apart.
#[derive(Debug, Clone, Default, PartialEq)]
pub(super) struct Heading {
    /// Without the unit.
    pub name: String,
    pub unit: Option<String>,
    /// Unit behind each number of the column.
    pub suffix: Option<String>,
}

/// `accel [m/s^2]`, `U (V)`, `t/s` or plain `x`. Control characters stay: who
/// prints a name escapes them.
pub(super) fn read_heading(bytes: &[u8]) -> Heading {
    /// Characters of a name that are kept.
    const LONGEST: usize = 120;
    let mut text = to_text(bytes)
        .trim_matches(|c: char| c.is_whitespace() || c == '\u{FEFF}')
        .to_owned();
    if let Some((end, _)) = text.char_indices().nth(LONGEST) {
        text.truncate(end);
        text.push('…');
    }
    let text = text.as_str();
    for (open, close) in [('[', ']'), ('(', ')'), ('{', '}'), ('<', '>')] {
        let inside = text
            .strip_suffix(close)
            .and_then(|rest| rest.rsplit_once(open));
        if let Some((name, unit)) = inside {
            let (name, unit) = (name.trim(), unit.trim());
            // "x (left)" is a name, but a bracketed unit may be any word.
            if !unit.is_empty() && (open == '[' || is_unit(unit)) {
                let name = if name.is_empty() { text } else { name };
                return Heading {
                    name: name.into(),
                    unit: Some(unit.into()),
                    suffix: None,
                };
            }
        }
    }
    for separator in ['/', ','] {
        if let Some((name, unit)) = text.split_once(separator)
            && is_unit(unit.trim())
            && !name.trim().is_empty()
        {
            return Heading {
                name: name.trim().into(),
                unit: Some(unit.trim().into()),
                suffix: None,
            };
        }
    }
    // accel_g, current_mA: but x_in and run_1 are names.
    if let Some((name, unit)) = text.rsplit_once('_')
        && ENDINGS.contains(&unit)
        && !name.is_empty()
    {
        return Heading {
            name: name.into(),
            unit: Some(unit.into()),
            suffix: None,
        };
    }
    Heading {
        name: text.into(),
        unit: None,
        suffix: None,
    }
}

/// Units that stand behind an underscore and are hardly a word of a name.
const ENDINGS: &[&str] = &[
    "V", "mV", "uV", "kV", "A", "mA", "uA", "kA", "W", "kW", "Hz", "kHz", "Pa", "hPa", "kPa",
    "MPa", "mbar", "bar", "psi", "g", "mg", "degC", "degF", "deg", "rad", "rpm", "mm", "um", "nm",
    "cm", "m", "mps", "mps2", "ms2", "m_s2", "N", "kN", "Nm", "dB", "mT", "uT", "nT", "ohm", "pct",
    "percent", "ppm", "lx", "dBm", "dBV", "ips", "K",
];

/// Units of what recorders measure, without prefix.
const UNITS: &[&str] = &[
    "s", "sec", "min", "h", "V", "A", "W", "VA", "var", "Hz", "g", "m/s^2", "m/s²", "m/s2",
    "m/s**2", "m/s", "m", "in", "in/s", "mil", "mils", "ips", "Pa", "bar", "psi", "N", "Nm", "N·m",
    "N*m", "T", "G", "gauss", "K", "C", "degC", "°C", "F", "degF", "°F", "deg", "°", "rad",
    "rad/s", "deg/s", "°/s", "rpm", "1/min", "min-1", "r/min", "%", "dB", "dBm", "dBV", "ohm", "Ω",
    "F", "H", "C", "lx", "e", "eV", "V/m", "A/m", "l/min", "m3/h", "m³/h", "strain", "m/m", "1",
    "pu", "p.u.", "counts", "LSB", "FS", "Vrms", "Arms", "Vpp", "gn", "g_n",
];

/// Whether `text` is a known unit, with or without a prefix.
pub(super) fn is_unit(text: &str) -> bool {
    const PREFIXES: &[char] = &['n', 'u', 'µ', 'μ', 'm', 'c', 'k', 'M', 'G', 'p'];
    let known = |unit: &str| UNITS.contains(&unit);
    known(text) || text.strip_prefix(PREFIXES).is_some_and(known)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn cells() {
        for (text, number) in [
            ("1.5", 1.5),
            ("-0,25", -0.25),
            (" +7 ", 7.0),
            (".5", 0.5),
            (",5", 0.5),
            ("5.", 5.0),
            ("1e-3", 0.001),
            ("1,5E3", 1500.0),
            ("\u{2212}3.5", -3.5),
            ("\u{A0}4\u{A0}", 4.0),
            ("\"6\"", 6.0),
            ("=\"6.5\"", 6.5),
            ("'7", 7.0),
            ("1,234.5", 1234.5),
            ("1.234,5", 1234.5),
        ] {
            assert_eq!(
                read_cell(text.as_bytes(), DecimalStyle::Either),
                Cell::Number(number),
                "{text:?}"
            );
        }
        assert_eq!(
            read_cell(b"\xA04\xA0", DecimalStyle::Either),
            Cell::Number(4.0)
        );
        assert_eq!(trim("à".as_bytes()), "à".as_bytes());
        assert_eq!(read_cell(b"4\xA0", DecimalStyle::Either), Cell::Number(4.0));
        for text in [
            "", "  ", "NaN", "nan", "inf", "-inf", "1e999", "#N/A", "ol", "--", "\"\"", "9.91E37",
        ] {
            assert_eq!(
                read_cell(text.as_bytes(), DecimalStyle::Either),
                Cell::Missing,
                "{text:?}"
            );
        }
        let long = "1".repeat(1000) + "x";
        for text in [
            "x",
            "1.2.3",
            "1 2",
            "0x10",
            "5 V",
            "1,2,3",
            "\u{2212}",
            "\u{2212}-1",
            &long,
        ] {
            assert_eq!(
                read_cell(text.as_bytes(), DecimalStyle::Either),
                Cell::Word,
                "{text:?}"
            );
        }
    }

    #[test]
    fn remarks() {
        for text in ["# x", "#", " #x", "% x", "// x", "; x"] {
            assert!(Remarks::Usual.marks(text.as_bytes(), b','), "{text:?}");
        }
        for text in ["#N/A", "#VALUE!", "x", "/x", ""] {
            assert!(!Remarks::Usual.marks(text.as_bytes(), b','), "{text:?}");
        }
        assert!(!Remarks::Usual.marks(b";1", b';'));
    }

    #[test]
    fn headings() {
        for (text, name, unit) in [
            ("accel [m/s^2]", "accel", Some("m/s^2")),
            ("U (mV)", "U", Some("mV")),
            ("x (left)", "x (left)", None),
            ("x [left]", "x", Some("left")),
            ("[V]", "[V]", Some("V")),
            ("t/s", "t", Some("s")),
            ("a/b", "a/b", None),
            ("a, g", "a", Some("g")),
            ("\u{1b}[31ma\u{7}b", "\u{1b}[31ma\u{7}b", None),
            (
                "\u{FEFF} \t\u{1b}a\u{1b} [\u{1b}] \r",
                "\u{1b}a\u{1b}",
                Some("\u{1b}"),
            ),
            ("", "", None),
            ("()", "()", None),
        ] {
            let heading = read_heading(text.as_bytes());
            assert_eq!(
                (heading.name.as_str(), heading.unit.as_deref()),
                (name, unit),
                "{text:?}"
            );
        }
        assert_eq!(read_heading(&[b'x'; 1000]).name.chars().count(), 121);
        assert_eq!(read_heading(b"Gr\xF6\xDFe [\xB0]").name, "Größe");
    }
}
