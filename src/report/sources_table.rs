//! The listing of `foldtrace sources`: every line with its frequency and tolerance.

use crate::sources::{Catalogue, Latent, Line, Site, Source, Steadiness};
use crate::units::U95;
use std::collections::BTreeSet;
use std::io::{self, Write};

/// Writes each source with what it rests on and one row per line: label, nominal
/// frequency and ± (95 %), both in Hz. Difference lines that are nominally below
/// zero are written as they show, by their magnitude. Plain text, no colours.
///
/// # Errors
/// Those of `out`.
pub fn write(site: &Site, out: &mut dyn Write) -> io::Result<()> {
    let catalogue = &site.catalogue;
    for (n, source) in catalogue.sources.iter().enumerate() {
        if n > 0 {
            writeln!(out)?;
        }
        write_source(catalogue, source, out)?;
    }
    Ok(())
}

fn write_source(catalogue: &Catalogue, source: &Source, out: &mut dyn Write) -> io::Result<()> {
    let count = source.lines.len();
    let plural = if count == 1 { "" } else { "s" };
    let (name, kind) = (printable(&source.name), source.kind);
    writeln!(out, "{name} ({kind}, {count} line{plural})")?;
    for latent in latents_of(catalogue, source) {
        writeln!(out, "  {}", describe(latent))?;
    }
    if let Some(group) = &source.exclusive_group {
        writeln!(out, "  only one of the group {}", printable(group))?;
    }
    if !source.citation.is_empty() {
        writeln!(out, "  after: {}", printable(&source.citation))?;
    }
    let rows = rows(catalogue, &source.lines);
    let heading = ["line", "hz", "u95_hz"].map(str::to_owned);
    let [label_width, hz_width, u95_width]: [usize; 3] = std::array::from_fn(|column| {
        rows.iter()
            .chain([&heading])
            .filter_map(|row| row.get(column))
            .map(|cell| cell.chars().count())
            .max()
            .unwrap_or(0)
    });
    for [label, hz, u95] in std::iter::once(&heading).chain(&rows) {
        writeln!(
            out,
            "    {label:<label_width$}  {hz:>hz_width$}  {u95:>u95_width$}"
        )?;
    }
    Ok(())
}

/// Label, frequency and ± of each line. Nominal values are exact: they keep three
/// decimals even where the tolerance is wider, and a source's points line up.
fn rows(catalogue: &Catalogue, lines: &[Line]) -> Vec<[String; 3]> {
    let u95 = |line: &Line| U95 * catalogue.prior_sd_hz(line);
    let decimals = lines
        .iter()
        .map(|line| decimals(u95(line)))
        .fold(3, usize::max);
    lines
        .iter()
        .map(|line| {
            let hz = catalogue.nominal_hz(line).abs();
            [
                printable(&line.label),
                format!("{hz:.decimals$}"),
                two_digits(u95(line)),
            ]
        })
        .collect()
}

/// Latents that the lines of a source rest on, each once.
fn latents_of<'c>(
    catalogue: &'c Catalogue,
    source: &'c Source,
) -> impl Iterator<Item = &'c Latent> {
    let ids: BTreeSet<_> = source
        .lines
        .iter()
        .flat_map(|line| line.terms.iter().map(|&(id, _)| id))
        .collect();
    ids.into_iter().filter_map(|id| catalogue.latents.get(id.0))
}

fn describe(latent: &Latent) -> String {
    let half_width = U95 * latent.sd_hz;
    let decimals = decimals(half_width).max(3);
    let relative = half_width / latent.nominal_hz;
    let relative = if relative < 0.001 {
        format!("{} ppm", significant(relative * 1e6))
    } else {
        format!("{} %", significant(relative * 100.0))
    };
    let moves = match latent.steadiness {
        Steadiness::Quartz => "crystal-locked",
        Steadiness::Free => "may wander",
    };
    format!(
        "rests on {}: {:.decimals$} Hz ± {} Hz ({relative}), {moves}",
        printable(&latent.name),
        latent.nominal_hz,
        two_digits(half_width),
    )
}

/// Decimals that show two digits of an uncertainty, at least down to the unit.
fn decimals(u95: f64) -> usize {
    // Rounding to two digits may carry into a third (0.0996 is 0.10): rounded first.
    let rounded: f64 = format!("{u95:.1e}").parse().unwrap_or(u95);
    if rounded > 0.0 {
        (1.0 - rounded.log10().floor()).clamp(0.0, 12.0) as usize
    } else {
        0
    }
}

fn two_digits(u95: f64) -> String {
    let decimals = decimals(u95);
    format!("{u95:.decimals$}")
}

/// Two significant digits, without trailing zeros.
fn significant(value: f64) -> String {
    let rounded: f64 = format!("{value:.1e}").parse().unwrap_or(value);
    rounded.to_string()
}

fn printable(text: &str) -> String {
    text.chars()
        .flat_map(|c| {
            let escaped = c.is_control();
            let plain = (!escaped).then_some(c);
            plain
                .into_iter()
                .chain(escaped.then(|| c.escape_unicode()).into_iter().flatten())
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn two_digits_of_the_uncertainty() {
        for (u95, shown) in [
            (0.5, "0.50"),
            (28.94, "29"),
            (144.7, "145"),
            (0.0996, "0.10"),
            (3.2768, "3.3"),
            (1e-7, "0.00000010"),
            (0.0, "0"),
        ] {
            assert_eq!(two_digits(u95), shown);
        }
    }

    #[test]
    fn every_builtin_line_has_its_row() {
        let site = Site::builtin();
        let mut out = Vec::new();
        write(&site, &mut out).unwrap();
        let text = String::from_utf8(out).unwrap();
        let rows = text.lines().filter(|l| l.starts_with("    ")).count();
        let lines: usize = site.catalogue.sources.iter().map(|s| s.lines.len()).sum();
        assert_eq!(rows, lines + site.catalogue.sources.len());
        assert!(text.contains("mains 50 Hz (mains, 50 lines)\n"));
        // EN 50160: 50 Hz ± 1 % (from memory).
        let cells = |n: usize| {
            text.lines()
                .nth(n)
                .unwrap()
                .split_whitespace()
                .collect::<Vec<_>>()
        };
        assert_eq!(cells(4), ["line", "hz", "u95_hz"]);
        assert_eq!(cells(5), ["1x", "50.000", "0.50"]);
        assert!(
            text.contains(
                "rests on watch crystal: 32768.000 Hz ± 3.3 Hz (100 ppm), crystal-locked"
            )
        );
    }
}
