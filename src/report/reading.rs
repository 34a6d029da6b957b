//! What a recording was taken for: the head of every report on it.

use super::text::{count, hertz, plain, with_u95};
use crate::capture::Spec;
use anstyle::Style;
use std::io::{self, Write};

const HEAD: Style = Style::new().bold();

/// Writes what was read and assumed, a line each. `cell_hz` is the resolution
/// of the spectrum, where there is one. Styled with ANSI sequences.
///
/// # Errors
/// If `out` cannot be written.
pub fn write(
    recording: &str,
    spec: &Spec,
    cell_hz: Option<f64>,
    out: &mut dyn Write,
) -> io::Result<()> {
    let resolves = cell_hz.map_or(String::new(), |hz| format!(", resolves {} Hz", hertz(hz)));
    writeln!(
        out,
        "{HEAD}{}{HEAD:#}: {}, {} Hz, {}, {}{resolves}",
        plain(recording),
        plain(&spec.format),
        hertz(spec.rate_hz),
        count(spec.channels.len(), "channel", "channels"),
        duration(spec.duration_s()),
    )?;
    writeln!(out, "  read as: {}", plain(&read_as(spec)))?;
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
    for note in &spec.notes {
        writeln!(out, "  {}", plain(note))?;
    }
    Ok(())
}

/// One line: layout, time, rate with its uncertainty, gaps.
pub fn read_as(spec: &Spec) -> String {
    let mut clauses = spec.read_as.clone();
    clauses.push(match spec.rate_hz_u95 {
        Some(u95) if u95 > 0.0 => {
            let (rate, u95) = with_u95(spec.rate_hz, u95);
            format!("{rate} Hz ± {u95}")
        }
        _ => format!("{} Hz", hertz(spec.rate_hz)),
    });
    if spec.gaps > 0 {
        clauses.push(match spec.gaps {
            1 => "1 gap".into(),
            n => format!("{n} gaps"),
        });
    }
    clauses.join(", ")
}

pub(super) fn duration(seconds: f64) -> String {
    if seconds < 120.0 {
        format!("{} s", hertz(seconds))
    } else if seconds < 7200.0 {
        format!("{:.1} min", seconds / 60.0)
    } else {
        format!("{:.2} h", seconds / 3600.0)
    }
}
