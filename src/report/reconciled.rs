//! Several recordings together: table, suspect list and JSON.

use super::reading::duration;
use super::suspect_list::{self, Cells};
use super::table::{HEAD, QUIET, interval, luck, verdict, wrapped};
use super::text::{count, hertz, percent, plain, with_u95};
use crate::reconcile::{Belonging, Physical, Reconciled, Row};
use crate::suspects::Verdict;
use crate::tones::Tone;
use crate::triage::Triage;
use serde_json::json;
use std::io::{self, Write};

/// Rows less probable than this stay in the exports.
const WORTH_A_LINE: f64 = 0.02;

fn tone_of<'t>(triages: &'t [Triage], tone: &Physical, capture: usize) -> Option<&'t Tone> {
    let s = tone.sightings.iter().find(|s| s.capture == capture)?;
    triages.get(capture)?.tones.tones.get(s.tone)
}

/// `top` suspects at most, and every stated candidate of `unlisted`.
fn listed(tone: &Physical, top: usize) -> Vec<&Row> {
    let mut suspects = 0;
    tone.rows
        .iter()
        .filter(|r| {
            let named = r.suspect != "unlisted";
            suspects += usize::from(named);
            !named || suspects <= top
        })
        .collect()
}

/// Writes the table.
///
/// # Errors
/// Those of `out`.
pub fn write(
    triages: &[Triage],
    result: &Reconciled,
    top: usize,
    width: Option<usize>,
    out: &mut dyn Write,
) -> io::Result<()> {
    let width = width.unwrap_or(110);
    for (n, t) in triages.iter().enumerate() {
        writeln!(
            out,
            "{HEAD}{} {}{HEAD:#}: {}, {} Hz, {}, {}",
            n + 1,
            plain(&t.recording),
            plain(&t.spec.format),
            hertz(t.spec.rate_hz),
            duration(t.spec.duration_s()),
            count(t.tones.tones.len(), "tone", "tones"),
        )?;
    }
    for (b, clock) in result.belonging.iter().zip(&result.clocks) {
        let mut text = belonging(triages, b);
        if b.same_place >= 0.5 && b.shared + b.mains as f64 >= 0.5 {
            let (ppm, u95) = with_u95(clock.ppm.abs(), clock.ppm_u95);
            let word = if clock.ppm < 0.0 { "slower" } else { "faster" };
            text.push_str(&format!(
                " Its clock runs {ppm} ± {u95} ppm {word} than that of recording 1."
            ));
        }
        for line in wrapped(&text, width) {
            writeln!(out, "{line}")?;
        }
    }
    if !result.tones.is_empty() {
        tones(triages, result, top, out)?;
    }
    writeln!(out)?;
    for line in wrapped(&format!("In short: {}", summary(result)), width) {
        writeln!(out, "{line}")?;
    }
    Ok(())
}

/// Whether a recording belongs with the others, in words.
fn belonging(triages: &[Triage], b: &Belonging) -> String {
    let own = triages.get(b.capture).map_or(0, |t| t.tones.tones.len());
    if own == 0 {
        return format!(
            "Recording {} has no tones: nothing to compare.",
            b.capture + 1
        );
    }
    let mains = match b.mains {
        0 => String::new(),
        n => format!(" (not counting {n} of the mains, which every place has)"),
    };
    let chance = format!("chance alone would bring {:.1}", b.by_chance);
    if b.same_place < 0.5 {
        return format!(
            "Recording {} does not look as if it were of the same place ({} likely to be): nothing ties its {} to the others beyond chance, so its tones are listed by themselves. Check that the files belong together.",
            b.capture + 1,
            percent(b.same_place),
            count(own, "tone", "tones"),
        );
    }
    let sure = if b.same_place < 0.9 {
        format!(", though not surely ({})", percent(b.same_place))
    } else {
        String::new()
    };
    format!(
        "Recording {} belongs with the others{sure}: {:.0} of its {} are theirs too{mains}; {chance}.",
        b.capture + 1,
        b.shared,
        count(own, "tone", "tones"),
    )
}

fn tones(
    triages: &[Triage],
    result: &Reconciled,
    top: usize,
    out: &mut dyn Write,
) -> io::Result<()> {
    let mut lines: Vec<Vec<String>> = Vec::new();
    let mut heads: Vec<String> = vec!["tone".into()];
    heads.extend((0..triages.len()).map(|n| format!("seen Hz in {}", n + 1)));
    heads.extend(
        [
            "same tone",
            "verdict",
            "could be",
            "chance",
            "true Hz ± 95 %",
            "zone",
            "by luck",
        ]
        .map(str::to_owned),
    );
    for tone in &result.tones {
        let rows: Vec<&Row> = listed(tone, top)
            .into_iter()
            .enumerate()
            .filter(|(n, r)| *n == 0 || r.probability >= WORTH_A_LINE)
            .map(|r| r.1)
            .collect();
        for (n, row) in rows.iter().enumerate() {
            let mut cells: Vec<String> = Vec::new();
            if n == 0 {
                cells.push(tone.number.to_string());
                for c in 0..triages.len() {
                    cells.push(
                        tone_of(triages, tone, c)
                            .map_or("-".into(), |t| with_u95(t.seen_hz.0, t.seen_hz_u95).0),
                    );
                }
                cells.push(if tone.sightings.len() > 1 {
                    percent(tone.association)
                } else {
                    String::new()
                });
                cells.push(verdict(tone.verdict).0.to_owned());
            } else {
                cells.extend(std::iter::repeat_n(String::new(), triages.len() + 3));
            }
            cells.push(
                format!("{} {}", plain(&row.suspect), plain(&row.line))
                    .trim()
                    .to_owned(),
            );
            cells.push(percent(row.probability));
            match row.true_hz {
                Some((hz, u95)) => {
                    cells.push(interval(&with_u95(hz, u95)));
                    cells.push(if row.sense.is_inverted() {
                        format!("{} inv", row.zone)
                    } else {
                        row.zone.to_string()
                    });
                }
                None => cells.extend(["elsewhere".into(), String::new()]),
            }
            cells.push(row.coincidence.map_or(String::new(), luck));
            lines.push(cells);
        }
        if let Some((rate, settles)) = tone.extra_rate {
            lines.push(vec![format!(
                "      a further recording at {} Hz would tell (chance {})",
                hertz(rate),
                percent(settles)
            )]);
        }
    }
    let columns = heads.len();
    let widths: Vec<usize> = (0..columns)
        .map(|c| {
            lines
                .iter()
                .filter(|l| l.len() == columns)
                .chain([&heads])
                .filter_map(|l| l.get(c))
                .map(|s| s.chars().count())
                .max()
                .unwrap_or(0)
        })
        .collect();
    // Words to the left, numbers to the right.
    let left = |c: usize| c >= columns - 7 && c != columns - 4 && c != columns - 3;
    let text = |cells: &[String]| {
        let mut all = String::new();
        for (c, (cell, &width)) in cells.iter().zip(&widths).enumerate() {
            if c > 0 {
                all.push_str("  ");
            }
            if left(c) {
                all.push_str(&format!("{cell:<width$}"));
            } else {
                all.push_str(&format!("{cell:>width$}"));
            }
        }
        all.trim_end().to_owned()
    };
    writeln!(out, "\n{QUIET}{}{QUIET:#}", text(&heads))?;
    for l in &lines {
        if l.len() == columns {
            writeln!(out, "{}", text(l))?;
        } else {
            writeln!(out, "{QUIET}{}{QUIET:#}", l.concat())?;
        }
    }
    Ok(())
}

fn summary(result: &Reconciled) -> String {
    let all = result.tones.len();
    let several = result
        .tones
        .iter()
        .filter(|t| t.sightings.len() > 1)
        .count();
    let open = result
        .tones
        .iter()
        .filter(|t| t.places().first().is_none_or(|p| p.2 < 0.9))
        .count();
    let folded = result
        .tones
        .iter()
        .filter(|t| t.verdict == Verdict::Folded)
        .count();
    format!(
        "{}, {several} of them seen in more than one recording; {folded} {} folded where first seen; of {open} the true frequency stays open.",
        count(all, "physical tone", "physical tones"),
        if folded == 1 { "is" } else { "are" },
    )
}

/// Writes the suspect list; see [`suspect_list::COLUMNS`].
///
/// # Errors
/// Those of `out`.
pub fn write_list(
    triages: &[Triage],
    result: &Reconciled,
    top: usize,
    out: impl Write,
) -> csv::Result<()> {
    let mut csv = suspect_list::begin(out)?;
    for tone in &result.tones {
        let Some(first) = tone.sightings.first() else {
            continue;
        };
        let Some(triage) = triages.get(first.capture) else {
            continue;
        };
        let Some(seen) = triage.tones.tones.get(first.tone) else {
            continue;
        };
        for (rank, row) in listed(tone, top).into_iter().enumerate() {
            let mut record = suspect_list::tone_cells(
                &names(triages, tone),
                &triage.channel_names(seen),
                tone.number,
                seen,
            );
            record.extend([
                suspect_list::verdict(tone.verdict).to_owned(),
                format!("{:.6}", tone.folded_probability),
                (rank + 1).to_string(),
            ]);
            let cells = Cells {
                suspect: row.suspect.clone(),
                line: &row.line,
                true_hz: row.true_hz,
                zone: row.true_hz.map(|_| (row.zone, row.sense.is_inverted())),
                probability: row.probability,
                coincidence: row.coincidence,
            };
            record.extend(cells.record());
            csv.write_record(&record)?;
        }
    }
    csv.flush()?;
    Ok(())
}

/// Recordings in which a tone is seen.
fn names(triages: &[Triage], tone: &Physical) -> String {
    let names: Vec<&str> = tone
        .sightings
        .iter()
        .filter_map(|s| Some(triages.get(s.capture)?.recording.as_str()))
        .collect();
    names.join(" + ")
}

/// Writes everything as JSON.
///
/// # Errors
/// Those of `out`.
pub fn write_json(
    triages: &[Triage],
    result: &Reconciled,
    top: usize,
    mut out: impl Write,
) -> io::Result<()> {
    let tones: Vec<serde_json::Value> = result
        .tones
        .iter()
        .map(|tone| {
            json!({
                "tone": tone.number,
                "recording": names(triages, tone),
                "seen": tone.sightings.iter().map(|s| {
                    let seen = triages.get(s.capture).and_then(|t| t.tones.tones.get(s.tone));
                    json!({
                        "recording": triages.get(s.capture).map(|t| &t.recording),
                        "tone": seen.map(|t| t.number),
                        "seen_hz": seen.map(|t| t.seen_hz),
                        "seen_hz_u95": seen.map(|t| t.seen_hz_u95),
                        "level_dbfs": seen.map(|t| t.level_dbfs),
                    })
                }).collect::<Vec<_>>(),
                "association": tone.association,
                "verdict": tone.verdict,
                "folded_probability": tone.folded_probability,
                "suspects": listed(tone, top),
                "further_rate_hz": tone.extra_rate.map(|r| r.0),
                "further_rate_settles": tone.extra_rate.map(|r| r.1),
            })
        })
        .collect();
    let document = json!({
        "program": env!("CARGO_PKG_NAME"),
        "version": env!("CARGO_PKG_VERSION"),
        "recordings": triages.iter().map(|t| json!({
            "recording": t.recording,
            "rate_hz": t.spec.rate_hz,
            "tones": t.tones.tones.len(),
        })).collect::<Vec<_>>(),
        "belonging": result.belonging,
        "clocks": result.clocks,
        "tones": tones,
        "summary": summary(result),
    });
    serde_json::to_writer_pretty(&mut out, &document)?;
    out.write_all(b"\n")?;
    out.flush()
}
