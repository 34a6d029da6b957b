//! Quantities written as text in a site file: `1 %`, `100 ppm`, `0.5 Hz`,
//! `50 m/s^2`, `2..5 %`.

use super::error::{Problem, shown};
use crate::units::U95;

/// A tolerance, ± with 95 %.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Tolerance {
    /// As a fraction of the nominal frequency, in (0, 1).
    Relative(f64),
    /// In hertz, > 0.
    Hz(f64),
}

impl Tolerance {
    /// So many per cent.
    pub const fn percent(p: f64) -> Self {
        Tolerance::Relative(p / 100.0)
    }

    /// So many parts per million.
    pub const fn ppm(p: f64) -> Self {
        Tolerance::Relative(p / 1e6)
    }

    /// Half-width in hertz about `nominal_hz`.
    pub fn half_width_hz(self, nominal_hz: f64) -> f64 {
        match self {
            Tolerance::Relative(r) => r * nominal_hz,
            Tolerance::Hz(hz) => hz,
        }
    }

    /// Standard deviation of the normal prior, Hz: half-width over 1.96.
    pub fn sd_hz(self, nominal_hz: f64) -> f64 {
        self.half_width_hz(nominal_hz) / U95
    }

    /// Half-width as a fraction of `nominal_hz`.
    pub fn relative(self, nominal_hz: f64) -> f64 {
        self.half_width_hz(nominal_hz) / nominal_hz
    }
}

pub(super) const TOLERANCE_EXAMPLES: &str = "1 %, 100 ppm or 0.5 Hz";

/// Splits `50 m/s^2` into 50 and `m/s^2`. The number must be finite.
pub(super) fn number_and_unit(text: &str) -> Option<(f64, &str)> {
    let text = text.trim();
    // The longest prefix that is a number; an exponent's letter is part of it only
    // where digits follow, so that `5 eV` keeps its unit.
    let end = (1..=text.len())
        .rev()
        .filter(|&end| text.is_char_boundary(end))
        .find(|&end| {
            let head = &text[..end];
            head.ends_with(|c: char| c.is_ascii_digit() || c == '.') && head.parse::<f64>().is_ok()
        })?;
    let value: f64 = text[..end].parse().ok()?;
    value.is_finite().then(|| (value, text[end..].trim()))
}

/// Reads a tolerance: `1 %`, `100 ppm`, `0.5 Hz`, with or without a leading ±.
///
/// # Errors
/// An unknown or missing unit, a value that is not positive, or a relative
/// tolerance of 100 % and more.
pub fn parse_tolerance(text: &str) -> Result<Tolerance, Problem> {
    let bare = text.trim();
    let bare = bare
        .strip_prefix('±')
        .or_else(|| bare.strip_prefix("+-"))
        .or_else(|| bare.strip_prefix("+/-"))
        .unwrap_or(bare);
    let (value, unit) = number_and_unit(bare).ok_or_else(|| Problem::UnknownUnit {
        got: shown(text),
        examples: TOLERANCE_EXAMPLES,
    })?;
    let tolerance = match unit {
        "%" => Tolerance::percent(value),
        unit if unit.eq_ignore_ascii_case("ppm") => Tolerance::ppm(value),
        unit if unit.eq_ignore_ascii_case("hz") => Tolerance::Hz(value),
        _ => {
            return Err(Problem::UnknownUnit {
                got: shown(text),
                examples: TOLERANCE_EXAMPLES,
            });
        }
    };
    if value <= 0.0 {
        return Err(Problem::NotPositive { got: value });
    }
    match tolerance {
        Tolerance::Relative(r) if !(MIN_RELATIVE..1.0).contains(&r) => Err(Problem::OutOfRange {
            wanted: "at least 0.000001 ppm and below 100 %".to_owned(),
            got: shown(text),
        }),
        Tolerance::Hz(hz) if hz > MAX_HZ => Err(Problem::OutOfRange {
            wanted: "below the frequency itself".to_owned(),
            got: shown(text),
        }),
        tolerance => Ok(tolerance),
    }
}

/// Tighter than any clock, and far above rounding.
pub(super) const MIN_RELATIVE: f64 = 1e-12;
/// Lowest frequency a site file may name, Hz (once in twelve days).
pub(super) const MIN_HZ: f64 = 1e-6;
/// Highest frequency a site file may name, Hz.
pub(super) const MAX_HZ: f64 = 1e12;

/// Reads a slip range: `2..5 %`, `2 % to 5 %`, `0.02..0.05`; fractions of the
/// synchronous speed, low first.
///
/// # Errors
/// Anything else than two numbers with `..` or `to` between them, or values
/// outside [0, 1) or not rising.
pub fn parse_slip(text: &str) -> Result<(f64, f64), Problem> {
    let wrong = || Problem::UnknownUnit {
        got: shown(text),
        examples: SLIP_EXAMPLES,
    };
    let (low, high) = ["..", "to", "–"]
        .iter()
        .find_map(|between| text.split_once(between))
        .ok_or_else(wrong)?;
    let (low, low_unit) = number_and_unit(low).ok_or_else(wrong)?;
    let (high, high_unit) = number_and_unit(high).ok_or_else(wrong)?;
    let scale = match (low_unit, high_unit) {
        ("" | "%", "%") => 0.01,
        ("", "") => 1.0,
        _ => return Err(wrong()),
    };
    check_slip(low * scale, high * scale, text)
}

pub(super) const SLIP_EXAMPLES: &str = "\"2..5 %\" or [0.02, 0.05]";

/// Checks a slip range given as two fractions.
pub(super) fn check_slip(low: f64, high: f64, got: &str) -> Result<(f64, f64), Problem> {
    if low >= 0.0 && low < high && high < 1.0 {
        Ok((low, high))
    } else {
        Err(Problem::OutOfRange {
            wanted: format!(
                "a rising range of slip from 0 to below 100 %, such as {SLIP_EXAMPLES}"
            ),
            got: shown(got),
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn tolerances_of_each_unit() {
        assert_eq!(parse_tolerance("1 %"), Ok(Tolerance::Relative(0.01)));
        assert_eq!(parse_tolerance("±2.5%"), Ok(Tolerance::Relative(0.025)));
        assert_eq!(parse_tolerance("100 ppm"), Ok(Tolerance::Relative(1e-4)));
        assert_eq!(parse_tolerance(" 0.5 Hz "), Ok(Tolerance::Hz(0.5)));
        assert_eq!(parse_tolerance("1e2 ppm"), Ok(Tolerance::Relative(1e-4)));
    }

    #[test]
    fn tolerances_that_are_none() {
        for text in [
            "", "%", "1", "1 rpm", "one %", "nan %", "inf Hz", "1 % ppm", "1,5 %",
        ] {
            assert!(
                matches!(parse_tolerance(text), Err(Problem::UnknownUnit { .. })),
                "{text}"
            );
        }
        assert_eq!(
            parse_tolerance("0 %"),
            Err(Problem::NotPositive { got: 0.0 })
        );
        assert_eq!(
            parse_tolerance("-1 %"),
            Err(Problem::NotPositive { got: -1.0 })
        );
        assert!(matches!(
            parse_tolerance("100 %"),
            Err(Problem::OutOfRange { .. })
        ));
    }

    #[test]
    fn half_width_is_a_95_percent_statement() {
        // 95 % of a normal distribution lies within 1.96 standard deviations.
        assert!((Tolerance::percent(1.0).sd_hz(50.0) - 0.5 / 1.96).abs() < 1e-5);
        assert_eq!(Tolerance::Hz(0.5).relative(50.0), 0.01);
    }

    #[test]
    fn full_scale_units_may_hold_digits_and_letters() {
        assert_eq!(number_and_unit("50 m/s^2"), Some((50.0, "m/s^2")));
        assert_eq!(number_and_unit("5eV"), Some((5.0, "eV")));
        assert_eq!(number_and_unit("2e1 V"), Some((20.0, "V")));
        assert_eq!(number_and_unit("V"), None);
        assert_eq!(number_and_unit("1e999 V"), None);
    }

    #[test]
    fn slip_ranges() {
        for text in ["2..5 %", "2 % to 5 %", "0.02..0.05", "2–5 %"] {
            let (low, high) = parse_slip(text).unwrap();
            assert!(
                (low - 0.02).abs() < 1e-12 && (high - 0.05).abs() < 1e-12,
                "{text}"
            );
        }
        for text in ["5..2 %", "2 %", "2..5", "2..5 Hz", "-1..5 %", ""] {
            assert!(parse_slip(text).is_err(), "{text}");
        }
    }
}
