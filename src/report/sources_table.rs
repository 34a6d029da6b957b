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
    writeln!(
        out,
        "{}, {}, {count} line{plural}",
        printable(&source.name),
        source.kind
    )?;
    for latent in latents_of(catalogue, source) {
        writeln!(out, "  {}", describe(latent))?;
    }
    if let Some(group) = &source.exclusive_group {
        writeln!(out, "  only one of the group {}", printable(group))?;
    }
    if !source.citation.is_empty() {
        writeln!(out, "  after: {}", printable(&source.citation))?;
    }
    let rows: Vec<[String; 3]> = source
        .lines
        .iter()
        .map(|line| row(catalogue, line))
        .collect();
    let heading = ["line", "hz", "u95_hz"].map(str::to_owned);
    let widths: [usize; 3] = std::array::from_fn(|column| {
        rows.iter()
            .chain([&heading])
            .filter_map(|row| row.get(column))
            .map(|cell| cell.chars().count())
            .max()
            .unwrap_or(0)
    });
    let [label_width, hz_width, u95_width] = widths;
    for [label, hz, u95] in std::iter::once(&heading).chain(&rows) {
        writeln!(
            out,
            "    {label:<label_width$}  {hz:>hz_width$}  {u95:>u95_width$}"
        )?;
    }
    Ok(())
}

fn row(catalogue: &Catalogue, line: &Line) -> [String; 3] {
    let (hz, u95) = digits(
        catalogue.nominal_hz(line).abs(),
        U95 * catalogue.prior_sd_hz(line),
    );
    [printable(&line.label), hz, u95]
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
    let (hz, u95) = digits(latent.nominal_hz, half_width);
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
    let name = printable(&latent.name);
    format!("rests on {name}: {hz} Hz ± {u95} Hz ({relative}), {moves}")
}

/// A value and its uncertainty, to two digits of the latter, at least to the unit.
fn digits(value: f64, u95: f64) -> (String, String) {
    // Rounding to two digits may carry into a third (0.0996 is 0.10): rounded first.
    let rounded: f64 = format!("{u95:.1e}").parse().unwrap_or(u95);
    let decimals = if rounded > 0.0 {
        (1.0 - rounded.log10().floor()).clamp(0.0, 12.0) as usize
    } else {
        6
    };
    (format!("{value:.decimals$}"), format!("{u95:.decimals$}"))
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
        let pair = |value, u95| {
            let (value, u95) = digits(value, u95);
            format!("{value} {u95}")
        };
        assert_eq!(pair(50.0, 0.5), "50.00 0.50");
        assert_eq!(pair(1447.0, 28.94), "1447 29");
        assert_eq!(pair(1447.3, 144.7), "1447 145");
        assert_eq!(pair(1.0, 0.0996), "1.00 0.10");
        assert_eq!(pair(32_768.0, 3.2768), "32768.0 3.3");
        assert_eq!(pair(1.0, 0.0), "1.000000 0.000000");
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
        assert!(text.contains("mains 50 Hz, mains, 50 lines\n"));
        assert!(
            text.contains("rests on watch crystal: 32768.0 Hz ± 3.3 Hz (100 ppm), crystal-locked")
        );
    }
}
