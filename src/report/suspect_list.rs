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

pub(super) fn verdict(v: Verdict) -> &'static str {
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

/// A writer of the list, its header written.
pub(super) fn begin<W: Write>(out: W) -> csv::Result<csv::Writer<W>> {
    let mut csv = csv_writer(out);
    csv.write_record(COLUMNS)?;
    Ok(csv)
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
    begin(out)?.flush()?;
    Ok(())
}

/// Writes one result's rows without the header; see [`write()`].
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
            let cells = Cells {
                suspect: suspect.map_or("unlisted".into(), |s| s.cause.name()),
                line: suspect.map_or("", |s| &s.line),
                true_hz: suspect.map(|s| (s.true_hz.0, s.true_hz_u95)),
                zone: suspect.map(|s| (s.zone, s.sense.is_inverted())),
                probability: p,
                coincidence: suspect.map(|s| s.coincidence),
            };
            let mut record = tone_cells(
                &result.recording,
                &result.channel_names(tone),
                tone.number,
                tone,
            );
            record.extend([
                verdict(finding.verdict).to_owned(),
                format!("{:.6}", finding.folded_probability),
                (rank + 1).to_string(),
            ]);
            record.extend(cells.record());
            csv.write_record(&record)?;
        }
    }
    csv.flush()?;
    Ok(())
}

/// What is said of a suspect; `None` leaves a cell empty.
pub(super) struct Cells<'a> {
    pub suspect: String,
    pub line: &'a str,
    /// Value and ±.
    pub true_hz: Option<(f64, f64)>,
    /// Number, and whether it is inverted.
    pub zone: Option<(u64, bool)>,
    pub probability: f64,
    pub coincidence: Option<f64>,
}

impl Cells<'_> {
    /// The cells from `suspect` on.
    pub fn record(&self) -> [String; 8] {
        let (true_hz, u95) = self
            .true_hz
            .map_or(Default::default(), |(hz, u)| with_u95(hz, u));
        [
            defuse(&self.suspect),
            defuse(self.line),
            true_hz,
            u95,
            self.zone.map_or(String::new(), |z| z.0.to_string()),
            self.zone.map_or(String::new(), |z| z.1.to_string()),
            probability(self.probability),
            self.coincidence
                .map_or(String::new(), |c| format!("{c:.4}")),
        ]
    }
}

/// The cells up to `wander_hz`.
pub(super) fn tone_cells(
    recording: &str,
    channels: &str,
    number: usize,
    tone: &Tone,
) -> Vec<String> {
    let (seen, u95) = with_u95(tone.seen_hz.0, tone.seen_hz_u95);
    let wander_digits = decimals(tone.seen_hz_u95);
    vec![
        defuse(recording),
        defuse(channels),
        number.to_string(),
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
