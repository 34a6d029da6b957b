//! The table on the terminal: what was read, a row per tone with its suspects,
//! the sources that were fitted, and one sentence at the end.

use super::text::{count, hertz, percent, plain, with_u95};
use crate::suspects::{Finding, Suspect, Verdict};
use crate::tones::Tone;
use crate::triage::Triage;
use anstyle::{AnsiColor, Style};
use std::io::{self, Write};

/// Suspects less probable than this are not worth a line on the screen; they
/// stay in the exports.
const WORTH_A_LINE: f64 = 0.02;

const QUIET: Style = Style::new().dimmed();
const HEAD: Style = Style::new().bold();

fn verdict(v: Verdict) -> (&'static str, Style) {
    match v {
        Verdict::Direct => ("direct", Style::new()),
        Verdict::Folded => ("FOLDED", AnsiColor::Magenta.on_default().bold()),
        Verdict::Open => ("open?", AnsiColor::Yellow.on_default()),
    }
}

/// Writes one result. Styled with ANSI sequences; a stream that is not a colour
/// terminal must strip them.
///
/// # Errors
/// If `out` cannot be written.
pub fn write(result: &Triage, site_name: &str, top: usize, out: &mut dyn Write) -> io::Result<()> {
    what_was_read(result, site_name, out)?;
    let rows: Vec<(&Tone, &Finding)> = result.rows().collect();
    if !rows.is_empty() {
        tones(&rows, top, out)?;
        sources(result, out)?;
    }
    writeln!(out, "\n{HEAD}In short:{HEAD:#} {}.", result.summary())
}

fn what_was_read(result: &Triage, site_name: &str, out: &mut dyn Write) -> io::Result<()> {
    let spec = &result.spec;
    writeln!(
        out,
        "{HEAD}{}{HEAD:#}: {}, {} Hz, {}, {}, resolves {} Hz",
        plain(&result.recording),
        plain(&spec.format),
        hertz(spec.rate_hz),
        count(spec.channels.len(), "channel", "channels"),
        duration(spec.duration_s()),
        hertz(result.tones.cell_hz),
    )?;
    if !spec.normalised {
        let names: Vec<String> = spec
            .channels
            .iter()
            .map(|c| match &c.unit {
                Some(unit) => format!("{} [{}]", plain(&c.name), plain(unit)),
                None => plain(&c.name),
            })
            .collect();
        writeln!(out, "  columns: {}", names.join(", "))?;
    }
    match &result.full_scale {
        Some((value, unit)) => {
            writeln!(out, "  0 dBFS = amplitude {value} {}", plain(unit))?;
        }
        None if !spec.normalised => {
            writeln!(out, "  0 dBFS = amplitude 1 (full scale is not described)")?;
        }
        None => {}
    }
    for note in &spec.notes {
        writeln!(out, "  {}", plain(note))?;
    }
    let missing: u64 = result.tones.missing.iter().sum();
    if missing > 0 {
        writeln!(out, "  {missing} missing samples bridged by straight lines")?;
    }
    writeln!(out, "  sources: {}", plain(site_name))
}

fn duration(seconds: f64) -> String {
    if seconds < 120.0 {
        format!("{} s", hertz(seconds))
    } else if seconds < 7200.0 {
        format!("{:.1} min", seconds / 60.0)
    } else {
        format!("{:.2} h", seconds / 3600.0)
    }
}

fn tones(rows: &[(&Tone, &Finding)], top: usize, out: &mut dyn Write) -> io::Result<()> {
    // the unlisted row needs 8, the heading 7
    let name_width = rows
        .iter()
        .flat_map(|(_, f)| shown(f, top))
        .map(|s| label(s).chars().count())
        .max()
        .unwrap_or(0)
        .clamp(8, 40);
    writeln!(
        out,
        "\n{QUIET}tone      seen Hz ± 95 %        dBFS  verdict    could be {:<pad$}  chance      true Hz ± 95 %        zone   by luck{QUIET:#}",
        "",
        pad = name_width.saturating_sub(9),
    )?;
    for (tone, finding) in rows {
        let (seen, u95) = with_u95(tone.seen_hz.0, tone.seen_hz_u95);
        let (word, style) = verdict(finding.verdict);
        let mut head = format!(
            "{:>4}  {:>11} ± {:<9}  {:>6.1}  {style}{word:<9}{style:#}  ",
            tone.number, seen, u95, tone.level_dbfs
        );
        let unlisted = finding.unlisted_direct + finding.unlisted_folded;
        let mut lines: Vec<(Option<&Suspect>, f64)> = shown(finding, top)
            .map(|s| (Some(s), s.probability))
            .collect();
        if unlisted >= WORTH_A_LINE || lines.is_empty() {
            lines.push((None, unlisted));
        }
        lines.sort_by(|a, b| b.1.total_cmp(&a.1));
        for (suspect, p) in lines {
            write!(out, "{head}")?;
            head = " ".repeat(49);
            match suspect {
                Some(s) => {
                    let (true_hz, true_u95) = with_u95(s.true_hz.0, s.true_hz_u95);
                    let zone = if s.sense.is_inverted() {
                        format!("{} inv", s.zone)
                    } else {
                        s.zone.to_string()
                    };
                    writeln!(
                        out,
                        "{:<name_width$}  {:>6}  {:>13} ± {:<9}  {:<6}  {:>6}",
                        label(s),
                        percent(p),
                        true_hz,
                        true_u95,
                        zone,
                        luck(s.coincidence)
                    )?;
                }
                None => writeln!(
                    out,
                    "{:<name_width$}  {:>6}  {QUIET}{}{QUIET:#}",
                    "unlisted",
                    percent(p),
                    unlisted_words(finding)
                )?,
            }
        }
    }
    writeln!(
        out,
        "{QUIET}by luck: how many listed lines would fall this close by pure chance; inv: in an inverted zone, where rising is seen as falling{QUIET:#}"
    )
}

fn shown(finding: &Finding, top: usize) -> impl Iterator<Item = &Suspect> {
    finding
        .suspects
        .iter()
        .take(top)
        .filter(|s| s.probability >= WORTH_A_LINE)
}

fn label(s: &Suspect) -> String {
    format!("{} {}", plain(&s.cause.name()), s.line)
}

fn luck(coincidence: f64) -> String {
    if coincidence >= 10.0 {
        format!("{coincidence:.0}")
    } else if coincidence >= 0.995 {
        format!("{coincidence:.1}")
    } else if coincidence >= 0.01 {
        format!("{coincidence:.2}")
    } else {
        "<0.01".into()
    }
}

fn unlisted_words(finding: &Finding) -> String {
    let all = finding.unlisted_direct + finding.unlisted_folded;
    let share = if all > 0.0 {
        finding.unlisted_folded / all
    } else {
        0.0
    };
    if share > 0.9 {
        "nothing listed; folded if so".into()
    } else if share < 0.1 {
        "nothing listed; real where it shows if so".into()
    } else {
        format!("nothing listed; folded in {} of such cases", percent(share))
    }
}

fn sources(result: &Triage, out: &mut dyn Write) -> io::Result<()> {
    let fits: Vec<_> = result
        .fits()
        .filter(|(_, f)| f.present_probability >= 0.05)
        .collect();
    if fits.is_empty() {
        return Ok(());
    }
    writeln!(
        out,
        "\n{QUIET}source                    there  tones  fitted{QUIET:#}"
    )?;
    for (name, fit) in fits {
        let latents: Vec<String> = fit
            .latents
            .iter()
            .map(|(name, value, u95)| {
                let (value, u95) = with_u95(*value, *u95);
                format!("{} {value} ± {u95} Hz", plain(name))
            })
            .collect();
        writeln!(
            out,
            "{:<24}  {:>5}  {:>5.1}  {}",
            plain(name),
            percent(fit.present_probability),
            fit.tones_explained,
            latents.join(", ")
        )?;
    }
    let clock = &result.inference.clock;
    let (ppm, u95) = with_u95(clock.ppm, clock.ppm_u95);
    writeln!(out, "the recorder's clock is off by {ppm} ± {u95} ppm")
}
