//! The spectrum as one line of a terminal.

use super::text::hertz;
use crate::triage::Triage;

/// Eighths of a line's height.
const BARS: [char; 8] = ['▁', '▂', '▃', '▄', '▅', '▆', '▇', '█'];
/// Characters of the strip itself, at least and at most.
const NARROWEST: usize = 16;
const WIDEST: usize = 64;

/// The loudest level of all channels in each of up to 64 columns, with what the ends
/// stand for; nothing where there is no spectrum.
pub fn line(result: &Triage, width: Option<usize>) -> Option<String> {
    let half_hz = result.spec.rate_hz / 2.0;
    // room for the words on either side
    let room = width.unwrap_or(usize::MAX).saturating_sub(50);
    let tops = tops(result, room.clamp(NARROWEST, WIDEST));
    let low = tops.iter().copied().fold(f32::INFINITY, f32::min);
    let high = tops.iter().copied().fold(f32::NEG_INFINITY, f32::max);
    if tops.is_empty() {
        return None;
    }
    Some(format!(
        "0 Hz {} {} Hz, {low:.0} to {high:.0} dBFS",
        bars(&tops, low, high),
        hertz(half_hz)
    ))
}

/// The loudest level in each of at most `columns` columns.
fn tops(result: &Triage, columns: usize) -> Vec<f32> {
    let all = result.tones.spectra.iter();
    let held = all.clone().map(|s| s.columns.len()).min().unwrap_or(0);
    let columns = columns.min(held);
    (0..columns)
        .map(|i| {
            let (from, to) = (i * held / columns, (i + 1) * held / columns);
            all.clone()
                .filter_map(|s| s.columns.get(from..to))
                .flatten()
                .map(|c| c.top_dbfs)
                .fold(f32::NEG_INFINITY, f32::max)
        })
        .collect()
}

fn bars(levels: &[f32], low: f32, high: f32) -> String {
    let last = BARS.len() - 1;
    levels
        .iter()
        .filter_map(|&level| {
            let share = (level - low) / (high - low).max(f32::MIN_POSITIVE);
            BARS.get(((share * last as f32).round() as usize).min(last))
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::bars;

    #[test]
    fn levels_become_heights() {
        assert_eq!(bars(&[-80.0, -40.0, -60.0], -80.0, -40.0), "▁█▅");
        assert_eq!(bars(&[-80.0; 3], -80.0, -80.0), "▁▁▁");
    }
}
