//! A sample rate written in the lines above a table.

use super::cells::{Cell, read_cell};
use super::csv_time::words_of;
use super::text::to_text;

/// Samples per second in a line such as `Sample rate: 8 kHz`, `fs=12.5` or
/// `Sampling interval: 0.5 ms`. The line must say both that it is about
/// samples and whether it tells a rate or a time, so that no other rate
/// is taken for it.
pub(super) fn read_rate(line: &[u8]) -> Option<f64> {
    let text = to_text(line);
    let start = text.find(|c: char| c.is_ascii_digit())?;
    let (label, rest) = text.split_at(start);
    let end = rest
        .find(|c: char| !(c.is_ascii_digit() || matches!(c, '.' | ',' | 'e' | 'E' | '+' | '-')))
        .unwrap_or(rest.len());
    let (digits, unit) = rest.split_at(end);
    let Cell::Number(number) = read_cell(digits.trim_end_matches([',', '.']).as_bytes()) else {
        return None;
    };
    let words = words_of(label);
    let says = |all: &[&str]| words.iter().any(|word| all.contains(&word.as_str()));
    let samples = words.iter().any(|word| word.starts_with("sampl"));
    let unit = unit.trim_matches(|c: char| c.is_whitespace() || "\"[](),;".contains(c));
    // A unit in the label: sample_rate_hz.
    let unit = match (unit, words.last()) {
        ("", Some(last)) => last.as_str(),
        _ => unit,
    };
    let unit = unit.to_lowercase();
    let rate = if samples && says(&["rate", "frequency", "freq"]) || says(&["fs", "samplerate"]) {
        match unit.as_str() {
            "khz" | "ks/s" | "ksps" => number * 1e3,
            "mhz" | "ms/s" | "msps" => number * 1e6,
            "hz" | "s/s" | "sa/s" | "sps" | "1/s" | "rate" | "frequency" | "freq" | "fs"
            | "samplerate" => number,
            _ => return None,
        }
    } else if samples && says(&["interval", "period"]) {
        match unit.as_str() {
            "s" | "sec" | "seconds" | "interval" | "period" => 1.0 / number,
            "ms" => 1e3 / number,
            "us" | "µs" | "μs" => 1e6 / number,
            "ns" => 1e9 / number,
            _ => return None,
        }
    } else {
        return None;
    };
    (rate.is_finite() && rate > 0.0).then_some(rate)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn only_a_sample_rate_is_a_sample_rate() {
        for (line, rate) in [
            ("Sample rate: 8 kHz", 8000.0),
            ("\"Sampling Rate (Hz)\",\"51,2\"", 51.2),
            ("Sample Rate [Hz];48000", 48_000.0),
            ("fs=12.5", 12.5),
            ("# Sampling period 2 ms", 500.0),
        ] {
            assert_eq!(read_rate(line.as_bytes()), Some(rate), "{line}");
        }
        for line in [
            "",
            "Rate: 7 Hz",
            "Sample 7",
            "Sample rate",
            "Sample rate: 7 m/s",
            "Sample rate: 0 Hz",
            "offs=7",
        ] {
            assert_eq!(read_rate(line.as_bytes()), None, "{line}");
        }
    }
}
