//! The table on the terminal: what was read, a row per tone with its suspects,
//! the sources that were fitted, and one sentence at the end.

use super::plan_table;
use super::reading;
use super::strip;
use super::text::{count, percent, plain, with_u95};
use crate::spectrum::condition::Condition;
use crate::suspects::{Finding, Ground, Suspect, Verdict};
use crate::tones::Tone;
use crate::triage::Triage;
use crate::units::U95;
use anstyle::{AnsiColor, Style};
use std::io::{self, Write};

/// A latent's own name without that of the source it is printed beside.
pub(super) fn latent_word(latent: &str, source: &str) -> String {
    let rest = latent.strip_prefix(source).unwrap_or(latent).trim();
    plain(if rest.is_empty() { "at" } else { rest })
}

/// Suspects less probable than this are not worth a line on the screen; they
/// stay in the exports.
pub(super) const WORTH_A_LINE: f64 = 0.02;

/// A source that explains fewer tones is only as probable as it was before.
pub(super) const EXPLAINS_SOMETHING: f64 = 0.05;

pub(super) const QUIET: Style = Style::new().dimmed();
pub(super) const HEAD: Style = Style::new().bold();

pub(super) fn verdict(v: Verdict) -> (&'static str, Style) {
    match v {
        Verdict::Direct => ("direct", Style::new()),
        Verdict::Folded => ("FOLDED", AnsiColor::Magenta.on_default().bold()),
        Verdict::Open => ("open?", AnsiColor::Yellow.on_default()),
    }
}

/// Writes one result. Styled with ANSI sequences; a stream that is not a colour
/// terminal must strip them. On a terminal of `width` columns that is too narrow
/// for one line per suspect, suspects stand below their tone.
///
/// # Errors
/// If `out` cannot be written.
pub fn write(
    result: &Triage,
    site_name: &str,
    top: usize,
    width: Option<usize>,
    out: &mut dyn Write,
) -> io::Result<()> {
    what_was_read(result, site_name, out)?;
    if let Some(strip) = strip::line(result, width) {
        writeln!(out, "  {strip}")?;
    }
    let rows: Vec<(&Tone, &Finding)> = result.rows().collect();
    if !rows.is_empty() {
        tones(&rows, top, width, out)?;
        if result.tones.left_out > 0 {
            writeln!(
                out,
                "{} weaker ones are left out",
                count(result.tones.left_out, "more tone,", "more tones,")
            )?;
        }
        sources(result, out)?;
        for line in from_time(result) {
            writeln!(out, "{line}")?;
        }
    }
    if let Some(next) = &result.next {
        writeln!(out)?;
        let advice = format!("Best next test: {}", plan_table::advice(result, next));
        for line in wrapped(&advice, width.unwrap_or(110)) {
            writeln!(out, "{line}")?;
        }
    }
    writeln!(out)?;
    let summary = format!("In short: {}.", result.summary());
    for (i, line) in wrapped(&summary, width.unwrap_or(usize::MAX))
        .iter()
        .enumerate()
    {
        match line.strip_prefix("In short:").filter(|_| i == 0) {
            Some(rest) => writeln!(out, "{HEAD}In short:{HEAD:#}{rest}")?,
            None => writeln!(out, "{line}")?,
        }
    }
    Ok(())
}

fn what_was_read(result: &Triage, site_name: &str, out: &mut dyn Write) -> io::Result<()> {
    let spec = &result.spec;
    reading::write(&result.recording, spec, Some(result.tones.cell_hz), out)?;
    match &result.full_scale {
        Some((value, unit)) => {
            writeln!(out, "  0 dBFS = amplitude {value} {}", plain(unit))?;
        }
        None if !spec.normalised => {
            writeln!(out, "  0 dBFS = amplitude 1 (full scale is not described)")?;
        }
        None => {}
    }
    condition(result, out)?;
    writeln!(out, "  sources: {}", plain(site_name))
}

/// What is wrong with the samples, and what was done about it.
fn condition(result: &Triage, out: &mut dyn Write) -> io::Result<()> {
    let conditions = &result.tones.condition;
    let total = |of: fn(&Condition) -> u64| conditions.iter().map(of).sum::<u64>() as usize;
    let samples = |n: usize, word: &str| {
        count(
            n,
            format!("{word} sample").trim_start(),
            format!("{word} samples").trim_start(),
        )
    };
    let (missing, stuck, clipped) = (
        total(|c| c.missing),
        total(|c| c.stuck),
        total(|c| c.clipped),
    );
    if missing > 0 {
        let what = samples(missing, "missing");
        writeln!(out, "  {what} bridged by straight lines")?;
    }
    if stuck > 0 {
        let what = samples(stuck, "");
        writeln!(
            out,
            "  {what} in runs that stand still (stuck, or dropped out) bridged by straight lines"
        )?;
    }
    if clipped > 0 {
        let what = samples(clipped, "clipped");
        writeln!(
            out,
            "  {what}, left as they are: clipping makes harmonics and mixtures of strong tones"
        )?;
    }
    let dead: Vec<String> = conditions
        .iter()
        .zip(&result.spec.channels)
        .filter(|(c, _)| c.constant)
        .map(|(_, channel)| plain(&channel.name))
        .collect();
    if !dead.is_empty() {
        writeln!(out, "  channel {} holds one value only", dead.join(", "))?;
    }
    Ok(())
}

/// One printed line: a tone's own cells are only on its first.
struct Row {
    tone: Option<[String; 3]>,
    verdict: Option<Verdict>,
    suspect: String,
    chance: String,
    /// True frequency, zone, luck; or words where nothing listed is meant.
    rest: Result<[String; 3], String>,
    /// What decided; once per tone.
    rests_on: &'static str,
}

fn rows(tones: &[(&Tone, &Finding)], top: usize) -> Vec<Row> {
    let mut all = Vec::new();
    for (tone, finding) in tones {
        let unlisted = finding.unlisted_direct + finding.unlisted_folded;
        let mut lines: Vec<(Option<&Suspect>, f64)> = shown(finding, top)
            .map(|s| (Some(s), s.probability))
            .collect();
        if unlisted >= WORTH_A_LINE || lines.is_empty() {
            lines.push((None, unlisted));
        }
        lines.sort_by(|a, b| b.1.total_cmp(&a.1));
        for (i, (suspect, p)) in lines.into_iter().enumerate() {
            let first = i == 0;
            let seen = with_u95(tone.seen_hz.0, tone.seen_hz_u95);
            all.push(Row {
                tone: first.then(|| {
                    [
                        tone.number.to_string(),
                        interval(&seen),
                        format!("{:.1}", tone.level_dbfs),
                    ]
                }),
                verdict: first.then_some(finding.verdict),
                suspect: suspect.map_or("unlisted".into(), label),
                chance: percent(p),
                rest: match suspect {
                    Some(s) => Ok([
                        interval(&with_u95(s.true_hz.0, s.true_hz_u95)),
                        if s.sense.is_inverted() {
                            format!("{} inv", s.zone)
                        } else {
                            s.zone.to_string()
                        },
                        luck(s.coincidence),
                    ]),
                    None => Err(unlisted_words(finding)),
                },
                rests_on: match finding.grounds.first() {
                    Some(ground) if first => ground_word(*ground),
                    _ => "",
                },
            });
        }
    }
    all
}

pub(super) fn interval((value, u95): &(String, String)) -> String {
    format!("{value} ± {u95}")
}

pub(super) fn ground_word(ground: Ground) -> &'static str {
    match ground {
        Ground::Frequency => "frequency",
        Ground::Family => "family",
        Ground::Movement => "movement",
        Ground::Phase => "phase",
        Ground::Timestamps => "timestamps",
    }
}

const HEADINGS: [&str; 10] = [
    "tone",
    "seen Hz ± 95 %",
    "dBFS",
    "verdict",
    "could be",
    "chance",
    "true Hz ± 95 %",
    "zone",
    "by luck",
    "rests on",
];

fn tones(
    found: &[(&Tone, &Finding)],
    top: usize,
    width: Option<usize>,
    out: &mut dyn Write,
) -> io::Result<()> {
    let rows = rows(found, top);
    let widest = |heading: usize, cell: &dyn Fn(&Row) -> Option<usize>| {
        rows.iter()
            .filter_map(cell)
            .chain([HEADINGS[heading].chars().count()])
            .max()
            .unwrap_or(0)
    };
    let of_tone = |i: usize| move |r: &Row| r.tone.as_ref().map(|t| t[i].chars().count());
    let of_rest = |i: usize| move |r: &Row| r.rest.as_ref().ok().map(|t| t[i].chars().count());
    let n = widest(0, &of_tone(0));
    let seen = widest(1, &of_tone(1));
    let dbfs = widest(2, &of_tone(2));
    let word = HEADINGS[3].len();
    let name = widest(4, &|r| Some(r.suspect.chars().count()));
    let chance = HEADINGS[5].len();
    let truth = widest(6, &of_rest(0));
    let zone = widest(7, &of_rest(1));
    let by_luck = HEADINGS[8].len();
    let left = n + seen + dbfs + word + 6;
    let rests_on = widest(9, &|r| Some(r.rests_on.len()));
    let right = name + chance + truth + zone + by_luck + rests_on + 10;
    // Beside each other if they fit, else suspects below their tone.
    let below = width.is_some_and(|w| left + 2 + right > w);
    let indent = if below { n + 2 } else { left + 2 };
    write!(
        out,
        "\n{QUIET}{:>n$}  {:>seen$}  {:>dbfs$}  {:<word$}",
        HEADINGS[0], HEADINGS[1], HEADINGS[2], HEADINGS[3],
    )?;
    let gap = if below {
        format!("\n{:indent$}", "")
    } else {
        "  ".into()
    };
    writeln!(
        out,
        "{gap}{:<name$}  {:>chance$}  {:>truth$}  {:<zone$}  {:>by_luck$}  {}{QUIET:#}",
        HEADINGS[4], HEADINGS[5], HEADINGS[6], HEADINGS[7], HEADINGS[8], HEADINGS[9],
    )?;
    for row in &rows {
        match (&row.tone, row.verdict) {
            (Some([number, seen_hz, level]), Some(v)) => {
                let (text, style) = verdict(v);
                write!(
                    out,
                    "{number:>n$}  {seen_hz:>seen$}  {level:>dbfs$}  {style}{text:<word$}{style:#}{gap}"
                )?;
            }
            _ => write!(out, "{:indent$}", "")?,
        }
        write!(out, "{:<name$}  {:>chance$}  ", row.suspect, row.chance)?;
        match &row.rest {
            Ok([true_hz, in_zone, lucky]) => {
                writeln!(
                    out,
                    "{}",
                    format!(
                        "{true_hz:>truth$}  {in_zone:<zone$}  {lucky:>by_luck$}  {}",
                        row.rests_on
                    )
                    .trim_end()
                )?;
            }
            Err(words) => {
                let room = truth + zone + by_luck + 4;
                let line = format!("{words:<room$}  {}", row.rests_on);
                writeln!(out, "{QUIET}{}{QUIET:#}", line.trim_end())?;
            }
        }
    }
    for line in wrapped(
        "seen Hz is as the recorder's clock has it; a clock error moves all tones alike. by luck: listed lines expected this close by pure chance. inv: inverted, what rises is seen to fall.",
        width.unwrap_or(110),
    ) {
        writeln!(out, "{QUIET}{line}{QUIET:#}")?;
    }
    Ok(())
}

/// Breaks `text` at blanks into lines of at most `width` characters, where words
/// allow it.
pub(super) fn wrapped(text: &str, width: usize) -> Vec<String> {
    let mut lines: Vec<String> = Vec::new();
    for word in text.split(' ') {
        match lines.last_mut() {
            Some(line) if line.chars().count() + 1 + word.chars().count() <= width => {
                line.push(' ');
                line.push_str(word);
            }
            _ => lines.push(word.to_owned()),
        }
    }
    lines
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

pub(super) fn luck(coincidence: f64) -> String {
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

pub(super) fn unlisted_words(finding: &Finding) -> String {
    if let Some(at) = &finding.unlisted_at {
        let (hz, u95) = with_u95(at.true_hz.0, at.true_hz_u95);
        return format!(
            "at {hz} ± {u95} Hz by its time stamps ({})",
            percent(at.probability)
        );
    }
    let all = finding.unlisted_direct + finding.unlisted_folded;
    let share = if all > 0.0 {
        finding.unlisted_folded / all
    } else {
        0.0
    };
    if share > 0.9 {
        "and then folded".into()
    } else if share < 0.1 {
        "and then real where it shows".into()
    } else {
        format!("and then {} folded", percent(share))
    }
}

/// What time stamps and references say, where there are any, a line each.
pub(super) fn from_time(result: &Triage) -> Vec<String> {
    let evidence = &result.evidence;
    let stamps = evidence.stamps.as_ref().filter(|s| s.jitter_s > 0.0);
    let rate = evidence.sampling.as_ref();
    let stamps = stamps
        .map(|s| &s.statement)
        .into_iter()
        .chain(rate.and_then(|s| s.statement.as_ref()))
        .map(|said| format!("time stamps: {}", plain(said)));
    let references = evidence.references.iter().map(|r| {
        let (hz, sd) = with_u95(r.mean_hz, (U95 * r.mean_sd_hz).max(1e-9 * r.mean_hz));
        let mut line = format!("reference {}: {hz} ± {sd} Hz", plain(&r.source));
        if r.offset_u95_s > 0.0 {
            let (offset, u95) = with_u95(r.offset_s, r.offset_u95_s);
            line.push_str(&format!(
                ", its clock is {offset} ± {u95} s off the recording's"
            ));
        }
        line
    });
    stamps.chain(references).collect()
}

fn sources(result: &Triage, out: &mut dyn Write) -> io::Result<()> {
    let fits: Vec<_> = result
        .fits()
        .filter(|(_, f)| f.tones_explained >= EXPLAINS_SOMETHING)
        .collect();
    if fits.is_empty() {
        return Ok(());
    }
    let width = fits
        .iter()
        .map(|(name, _)| plain(name).chars().count())
        .chain(["source".len()])
        .max()
        .unwrap_or(0);
    writeln!(
        out,
        "\n{QUIET}{:<width$}  there  tones  fitted ± 95 %{QUIET:#}",
        "source"
    )?;
    for (name, fit) in fits {
        let latents: Vec<String> = fit
            .latents
            .iter()
            .map(|(latent, value, u95)| {
                let (value, u95) = with_u95(*value, *u95);
                format!("{} {value} ± {u95} Hz", latent_word(latent, name))
            })
            .collect();
        writeln!(
            out,
            "{:<width$}  {:>5}  {:>5.1}  {}",
            plain(name),
            percent(fit.present_probability),
            fit.tones_explained,
            latents.join(", ")
        )?;
    }
    if let Some(clock) = clock(result) {
        writeln!(out, "recorder's clock: {clock}")?;
    }
    Ok(())
}

/// The fitted error of the recorder's clock, where the recording itself narrows it.
pub(super) fn clock(result: &Triage) -> Option<String> {
    let clock = &result.inference.clock;
    (clock.latents > 0 && clock.ppm_u95 < 0.8 * result.clock_described_ppm).then(|| {
        let (ppm, u95) = with_u95(clock.ppm, clock.ppm_u95);
        format!("{ppm} ± {u95} ppm")
    })
}
