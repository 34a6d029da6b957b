//! A sample rate written in the lines above a table.

use super::cells::{Cell, read_cell};
use super::csv_time::words_of;
use super::numbers::DecimalStyle;
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
    let digits = digits.trim_end_matches([',', '.']).as_bytes();
    let Cell::Number(number) = read_cell(digits, DecimalStyle::Either) else {
        return None;
    };
    let words = words_of(label);
    let says = |all: &[&str]| words.iter().any(|word| all.contains(&word.as_str()));
    let of_samples = |word: &String| {
        ["sampl", "abtast", "scan", "acqui"]
            .iter()
            .any(|start| word.starts_with(start))
    };
    let samples = words.iter().any(of_samples);
    let alone = |all: &[&str]| match words.as_slice() {
        [only] => all.contains(&only.as_str()),
        _ => false,
    };
    let unit = unit.trim_matches(|c: char| c.is_whitespace() || "\"[](),;".contains(c));
    // A unit in the label: sample_rate_hz, Rate (S/s).
    let label_ends = |end: &str| {
        label
            .trim_end_matches([' ', ':', '=', ')', ',', ';', ']'])
            .ends_with(end)
    };
    let unit = match (unit, words.last()) {
        ("", Some(_)) if label_ends("S/s") => "s/s",
        ("", Some(last)) => last.as_str(),
        _ => unit,
    };
    let unit = unit.to_lowercase();
    let per_second = says(&["samples"]) && says(&["per"]) && says(&["second", "sec", "s"]);
    let rate_words = ["rate", "frequency", "freq", "frequenz"];
    let whole_words = [
        "fs",
        "samplerate",
        "abtastrate",
        "abtastfrequenz",
        "samplingrate",
    ];
    let is_rate = samples && says(&rate_words)
        || says(&whole_words)
        || per_second
        || matches!(unit.as_str(), "samples/s" | "samples/sec" | "sa/s" | "sps")
        || words.first().is_some_and(|word| word == "rate") && unit == "s/s";
    let times = ["interval", "period", "abtastintervall", "intervall"];
    let rate = if is_rate {
        match unit.as_str() {
            "khz" | "ks/s" | "ksps" => number * 1e3,
            "mhz" | "ms/s" | "msps" => number * 1e6,
            "hz" | "s/s" | "sa/s" | "sps" | "1/s" | "samples/s" | "samples/sec" => number,
            // No unit, but the last word of the label.
            word if rate_words.contains(&word) || whole_words.contains(&word) => number,
            "second" | "sec" | "s" if per_second => number,
            _ => return None,
        }
    } else if samples && says(&times) || says(&["dt"]) || alone(&times) {
        match unit.as_str() {
            "s" | "sec" | "seconds" => 1.0 / number,
            word if times.contains(&word) && samples || word == "dt" => 1.0 / number,
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
            ("Abtastrate: 1000 Hz", 1000.0),
            ("dt = 0.001 s", 1000.0),
            ("Rate (S/s): 1000", 1000.0),
            ("Samples per second: 1000", 1000.0),
            ("1000 samples/s", 1000.0),
            ("Interval;0,001;s", 1000.0),
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
            "Interval: 7",
            "Averaging interval: 7 s",
            "Samples: 7",
        ] {
            assert_eq!(read_rate(line.as_bytes()), None, "{line}");
        }
    }
}
