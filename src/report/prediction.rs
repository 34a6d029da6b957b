//! What a recorder would show of the listed sources, as a table and as JSON.

use super::table::{HEAD, QUIET, wrapped};
use super::text::{hertz, percent, plain, with_u95};
use crate::predict::{Line, Prediction, Rating};
use crate::units::U95;
use std::io::{self, Write};

/// Chances below this are not worth a word.
const WORTH_A_WORD: f64 = 0.01;

/// Writes every line, then the rates by merit.
///
/// # Errors
/// Those of `out`.
pub fn write(
    prediction: &Prediction,
    site_name: &str,
    keep_clear: Option<(f64, f64)>,
    ratings: &[Rating],
    described: bool,
    out: &mut dyn Write,
) -> io::Result<()> {
    let p = prediction;
    let half = p.rate_hz / 2.0;
    writeln!(
        out,
        "{HEAD}{}{HEAD:#} recorded at {} Hz: {} lines, about {:.1} of them folded and visible",
        plain(site_name),
        hertz(p.rate_hz),
        p.lines.len(),
        p.folded
    )?;
    if !described {
        writeln!(
            out,
            "  no front end is described: levels are what is typical, with a wide spread"
        )?;
    }
    let rows: Vec<[String; 8]> = p.lines.iter().map(|l| cells(p, l, half)).collect();
    let heads = [
        "seen Hz ± 95 %",
        "zone",
        "source and line",
        "true Hz ± 95 %",
        "level dB",
        "shows",
        if keep_clear.is_some() { "in band" } else { "" },
        "may fall on",
    ];
    let widths: Vec<usize> = (0..8)
        .map(|c| {
            rows.iter()
                .filter_map(|r| r.get(c))
                .map(|s| s.chars().count())
                .chain([heads.get(c).map_or(0, |h| h.chars().count())])
                .max()
                .unwrap_or(0)
        })
        .collect();
    let line = |cells: &[&str]| {
        let mut text = String::new();
        for (c, (cell, width)) in cells.iter().zip(&widths).enumerate() {
            if *width == 0 {
                continue;
            }
            if !text.is_empty() {
                text.push_str("  ");
            }
            let width = *width;
            if matches!(c, 1 | 2 | 7) {
                text.push_str(&format!("{cell:<width$}"));
            } else {
                text.push_str(&format!("{cell:>width$}"));
            }
        }
        text.trim_end().to_owned()
    };
    writeln!(out, "\n{QUIET}{}{QUIET:#}", line(&heads))?;
    for r in &rows {
        let cells: Vec<&str> = r.iter().map(String::as_str).collect();
        writeln!(out, "{}", line(&cells))?;
    }
    for text in wrapped(
        &format!(
            "level: dB relative to before the front end. shows: chance that the line is there and gets through. may fall on: the other source's line most likely to come within {} Hz, with the chance.",
            hertz(p.resolution_hz)
        ),
        110,
    ) {
        writeln!(out, "{QUIET}{text}{QUIET:#}")?;
    }
    rates(p, keep_clear, ratings, out)
}

fn cells(p: &Prediction, l: &Line, half: f64) -> [String; 8] {
    let spread = U95 * l.sd_hz;
    let seen = if spread >= half {
        "anywhere".to_owned()
    } else {
        let (value, u95) = with_u95(l.seen_hz, spread);
        format!("{value} ± {u95}")
    };
    let (value, u95) = with_u95(l.true_hz, spread);
    let gain = if l.gain_sd_db >= 1.0 {
        format!("{:.0} ± {:.0}", l.gain_db, U95 * l.gain_sd_db)
    } else {
        format!("{:.1}", l.gain_db)
    };
    let on =
        l.by.filter(|b| b.1 >= WORTH_A_WORD)
            .and_then(|(i, chance)| Some((p.lines.get(i)?, chance)));
    [
        seen,
        if l.sense.is_inverted() {
            format!("{} inv", l.zone)
        } else {
            l.zone.to_string()
        },
        format!("{} {}", plain(&l.name), plain(&l.label)),
        format!("{value} ± {u95}"),
        gain,
        percent(l.shows),
        if l.in_band >= WORTH_A_WORD {
            percent(l.in_band)
        } else {
            String::new()
        },
        on.map_or(String::new(), |(other, chance)| {
            format!(
                "{} {} ({})",
                plain(&other.name),
                plain(&other.label),
                percent(chance)
            )
        }),
    ]
}

fn rates(
    p: &Prediction,
    keep_clear: Option<(f64, f64)>,
    ratings: &[Rating],
    out: &mut dyn Write,
) -> io::Result<()> {
    if ratings.is_empty() {
        return Ok(());
    }
    let band = keep_clear.map_or(String::new(), |(low, high)| {
        format!("  {} to {} Hz clear", hertz(low), hertz(high))
    });
    writeln!(
        out,
        "\n{QUIET}{:>9}  {:>10}  {:>6}{band}{QUIET:#}",
        "rate Hz", "lines free", "folded"
    )?;
    for r in ratings {
        let clear = if keep_clear.is_some() {
            format!("  {}", percent(r.clear))
        } else {
            String::new()
        };
        let own = if (r.rate_hz / p.rate_hz - 1.0).abs() < 1e-9 {
            "  (the rate asked about)"
        } else {
            ""
        };
        writeln!(
            out,
            "{:>9}  {:>10}  {:>6.1}{clear}{own}",
            hertz(r.rate_hz),
            percent(r.clean),
            r.folded
        )?;
    }
    writeln!(out)?;
    let best = ratings.first().map_or(p.rate_hz, |r| r.rate_hz);
    writeln!(
        out,
        "In short: of these rates {} Hz keeps the sources apart best.",
        hertz(best)
    )
}

/// Writes everything as JSON.
///
/// # Errors
/// Those of `out`.
pub fn write_json(
    prediction: &Prediction,
    ratings: &[Rating],
    mut out: impl Write,
) -> io::Result<()> {
    let document = serde_json::json!({
        "program": env!("CARGO_PKG_NAME"),
        "version": env!("CARGO_PKG_VERSION"),
        "prediction": prediction,
        "rates": ratings,
    });
    serde_json::to_writer_pretty(&mut out, &document)?;
    out.write_all(b"\n")?;
    out.flush()
}
