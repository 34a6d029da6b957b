//! Numbers and names as people read them.

use std::fmt::Write;

/// A name from outside made safe for a terminal: control characters and marks
/// that reorder text are shown as escapes, and so are the two code points that XML
/// cannot hold.
pub fn plain(name: &str) -> String {
    let mut out = String::with_capacity(name.len());
    for c in name.chars() {
        let reorders = matches!(c, '\u{200e}' | '\u{200f}' | '\u{202a}'..='\u{202e}' | '\u{2066}'..='\u{2069}');
        if c.is_control() || reorders || matches!(c, '\u{fffe}' | '\u{ffff}') {
            // escape_unicode never fails; write! to a String neither
            let _ = write!(out, "{}", c.escape_unicode());
        } else {
            out.push(c);
        }
    }
    out
}

/// Decimals that leave `u95` two significant digits, 0 to 12.
pub fn decimals(u95: f64) -> usize {
    if !(u95.is_finite() && u95 > 0.0) {
        return 6;
    }
    // rounding 0.0996 to two digits gives 0.10, which has one decimal less
    let rounded: f64 = format!("{u95:.1e}").parse().unwrap_or(u95);
    (1.0 - rounded.log10().floor()).clamp(0.0, 12.0) as usize
}

/// A value and its half-width with matching decimals.
pub fn with_u95(value: f64, u95: f64) -> (String, String) {
    let d = decimals(u95);
    (format!("{value:.d$}"), format!("{u95:.d$}"))
}

/// A probability in whole percent, never rounded up to a certainty it is not.
pub fn percent(p: f64) -> String {
    if p >= 0.995 {
        ">99 %".into()
    } else if p < 0.01 {
        "<1 %".into()
    } else {
        format!("{:.0} %", (100.0 * p).floor())
    }
}

/// A frequency without an interval: up to six significant digits, no trailing
/// zeros.
pub fn hertz(f: f64) -> String {
    if f == 0.0 || !f.is_finite() {
        return format!("{f}");
    }
    let digits = (5.0 - f.abs().log10().floor()).clamp(0.0, 9.0) as usize;
    let s = format!("{f:.digits$}");
    if s.contains('.') {
        s.trim_end_matches('0').trim_end_matches('.').to_owned()
    } else {
        s
    }
}

/// "1 tone", "2 tones".
pub fn count(n: usize, one: &str, many: &str) -> String {
    format!("{n} {}", if n == 1 { one } else { many })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn two_digits_of_uncertainty() {
        assert_eq!(
            with_u95(49.981_234, 0.004_56),
            ("49.9812".into(), "0.0046".into())
        );
        assert_eq!(with_u95(1234.5, 0.0996), ("1234.50".into(), "0.10".into()));
        assert_eq!(with_u95(1234.5, 37.0), ("1234".into(), "37".into()));
    }

    #[test]
    fn no_control_character_reaches_a_terminal() {
        assert_eq!(
            plain("a\u{1b}[2Jb\r\u{202e}"),
            "a\\u{1b}[2Jb\\u{d}\\u{202e}"
        );
        assert_eq!(plain("Prüfstand 3"), "Prüfstand 3");
    }

    #[test]
    fn percent_never_claims_certainty() {
        assert_eq!(percent(1.0), ">99 %");
        assert_eq!(percent(0.999), ">99 %");
        assert_eq!(percent(0.9), "90 %");
        assert_eq!(percent(0.0), "<1 %");
    }

    #[test]
    fn hertz_keeps_what_matters() {
        assert_eq!(hertz(8000.0), "8000");
        assert_eq!(hertz(16.666_666_7), "16.6667");
        assert_eq!(hertz(1_234_567.0), "1234567");
    }
}
