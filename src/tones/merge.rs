//! One physical tone, one row: the same tone seen in several channels.

use super::Tone;

/// Merges tones of different channels that lie within each other's uncertainty,
/// wander, or a resolution cell; the strongest channel's measurement stands for
/// all. Returns the `most` strongest, numbered by rising frequency, and how many more
/// there were.
pub fn across_channels(mut all: Vec<Tone>, cell_hz: f64, most: usize) -> (Vec<Tone>, usize) {
    // strongest first, so that it takes the others in
    all.sort_by(|a, b| {
        b.snr_db
            .total_cmp(&a.snr_db)
            .then(a.seen_hz.0.total_cmp(&b.seen_hz.0))
    });
    let mut merged: Vec<Tone> = Vec::new();
    for tone in all {
        let near = |m: &Tone| {
            let reach = (2.0 * (m.seen_hz_u95 + tone.seen_hz_u95))
                .max(cell_hz)
                .max(m.wander_hz.max(tone.wander_hz));
            (m.seen_hz.0 - tone.seen_hz.0).abs() <= reach
        };
        let other_channel = |m: &Tone| {
            tone.channels
                .iter()
                .all(|c| m.channels.iter().all(|d| d.channel != c.channel))
        };
        match merged.iter_mut().find(|m| near(m) && other_channel(m)) {
            Some(m) => {
                m.channels.extend(tone.channels);
                m.from_s = m.from_s.min(tone.from_s);
                m.to_s = m.to_s.max(tone.to_s);
            }
            None => merged.push(tone),
        }
    }
    // Still strongest first.
    let left_out = merged.len().saturating_sub(most);
    merged.truncate(most);
    merged.sort_by(|a, b| a.seen_hz.0.total_cmp(&b.seen_hz.0));
    for (i, tone) in merged.iter_mut().enumerate() {
        tone.number = i + 1;
    }
    (merged, left_out)
}
