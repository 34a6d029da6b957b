//! The suspect list as CSV (RFC 4180), one row per tone and suspect.

use super::text::{decimals, plain, with_u95};
use crate::suspects::{Suspect, Verdict};
use crate::tones::Tone;
use crate::triage::Triage;
use std::io::Write;

/// The columns, in order.
pub const COLUMNS: [&str; 21] = [
    "recording",
    "channel",
    "tone",
    "seen_hz",
    "seen_hz_u95",
    "level_dbfs",
    "snr_db",
    "from_s",
    "to_s",
    "wander_hz",
    "verdict",
    "folded_probability",
    "rank",
    "suspect",
    "line",
    "true_hz",
    "true_hz_u95",
    "zone",
    "inverted",
    "probability",
    "coincidence",
];

/// A text cell that no spreadsheet runs as a formula and no terminal obeys: a
/// leading apostrophe where it could be one, control characters as escapes.
pub fn defuse(cell: &str) -> String {
    let safe = plain(cell);
    match cell.chars().next() {
        Some('=' | '+' | '-' | '@' | '\t' | '\r') => format!("'{safe}"),
        _ => safe,
    }
}

/// Six decimals, rounded down, so that a tone's probabilities never sum to more
/// than 1.
fn probability(p: f64) -> String {
    format!("{:.6}", (p * 1e6).floor() / 1e6)
}

fn verdict(v: Verdict) -> &'static str {
    match v {
        Verdict::Direct => "direct",
        Verdict::Folded => "folded",
        Verdict::Open => "open",
    }
}

fn csv_writer<W: Write>(out: W) -> csv::Writer<W> {
    csv::WriterBuilder::new()
        .terminator(csv::Terminator::CRLF)
        .from_writer(out)
}

/// Writes the header and every result's rows; `top` suspects a tone at most, and
/// always the row `unlisted`.
///
/// # Errors
/// If `out` cannot be written.
pub fn write(results: &[Triage], top: usize, mut out: impl Write) -> csv::Result<()> {
    write_header(&mut out)?;
    for result in results {
        write_rows(result, top, &mut out)?;
    }
    out.flush()?;
    Ok(())
}

/// Writes the header alone.
///
/// # Errors
/// If `out` cannot be written.
pub fn write_header(out: impl Write) -> csv::Result<()> {
    let mut csv = csv_writer(out);
    csv.write_record(COLUMNS)?;
    csv.flush()?;
    Ok(())
}

/// Writes one result's rows without the header; see [`write`].
///
/// # Errors
/// If `out` cannot be written.
pub fn write_rows(result: &Triage, top: usize, out: impl Write) -> csv::Result<()> {
    let mut csv = csv_writer(out);
    for (tone, finding) in result.rows() {
        let unlisted = finding.unlisted_direct + finding.unlisted_folded;
        let mut rows: Vec<(Option<&Suspect>, f64)> = finding
            .suspects
            .iter()
            .take(top)
            .map(|s| (Some(s), s.probability))
            .collect();
        rows.push((None, unlisted));
        rows.sort_by(|a, b| b.1.total_cmp(&a.1));
        for (rank, (suspect, p)) in rows.into_iter().enumerate() {
            let mut record = tone_cells(result, tone);
            record.push(verdict(finding.verdict).into());
            record.push(format!("{:.6}", finding.folded_probability));
            record.push((rank + 1).to_string());
            match suspect {
                Some(s) => {
                    let (true_hz, u95) = with_u95(s.true_hz.0, s.true_hz_u95);
                    record.extend([
                        defuse(&s.cause.name()),
                        defuse(&s.line),
                        true_hz,
                        u95,
                        s.zone.to_string(),
                        s.sense.is_inverted().to_string(),
                        probability(p),
                        format!("{:.4}", s.coincidence),
                    ]);
                }
                None => {
                    record.push("unlisted".into());
                    record.extend(std::iter::repeat_n(String::new(), 5));
                    record.extend([probability(p), String::new()]);
                }
            }
            csv.write_record(&record)?;
        }
    }
    csv.flush()?;
    Ok(())
}

fn tone_cells(result: &Triage, tone: &Tone) -> Vec<String> {
    let (seen, u95) = with_u95(tone.seen_hz.0, tone.seen_hz_u95);
    let wander_digits = decimals(tone.seen_hz_u95);
    vec![
        defuse(&result.recording),
        defuse(&result.channel_names(tone)),
        tone.number.to_string(),
        seen,
        u95,
        format!("{:.2}", tone.level_dbfs),
        format!("{:.2}", tone.snr_db),
        format!("{:.3}", tone.from_s),
        format!("{:.3}", tone.to_s),
        format!("{:.*}", wander_digits, tone.wander_hz),
    ]
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn formulas_are_defused() {
        for bad in ["=1+1", "+1", "-1", "@x", "\tx", "\rx"] {
            assert!(defuse(bad).starts_with('\''), "{bad:?}");
        }
        assert_eq!(defuse("7x"), "7x");
    }

    #[test]
    fn probabilities_never_sum_to_more_than_one() {
        let third: f64 = probability(1.0 / 3.0).parse().unwrap();
        let two: f64 = probability(2.0 / 3.0).parse().unwrap();
        assert!(third + two <= 1.0);
    }
}
