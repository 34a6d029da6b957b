//! The pictures: where each mark goes. The SVG templates draw them.
//!
//! SVG is written by the same templates as the page, because they escape what they are
//! given, and marks can then be links with names of their own that the page's style
//! and script reach. The spectrum and the folded axis share one frequency axis, so
//! that what lies under a tone is what may have made it.

mod folded;
mod png;
mod spectrum;
mod tracks;

pub(super) use folded::FoldedPicture;
pub use png::{PictureError, write_png, write_svg};
pub(super) use spectrum::SpectrumPicture;
pub(super) use tracks::{TrackPicture, by_source};

use super::Px;
use crate::report::text::hertz;
use crate::suspects::Verdict;

/// Width of a picture with the frequency axis, in its own units.
const WIDTH: f64 = 1120.0;
/// Room for labels on either side of the axis.
const LEFT: f64 = 76.0;
const RIGHT: f64 = 64.0;

/// 0 Hz to half the rate, left to right.
#[derive(Debug, Clone, Copy)]
struct Axis {
    top_hz: f64,
}

impl Axis {
    fn x(self, hz: f64) -> f64 {
        LEFT + (WIDTH - LEFT - RIGHT) * (hz / self.top_hz).clamp(0.0, 1.0)
    }

    fn ticks(self) -> Vec<Tick> {
        ticks(0.0, self.top_hz, 9)
            .into_iter()
            .map(|hz| Tick {
                at: Px(self.x(hz)),
                text: hertz(hz),
            })
            .collect()
    }
}

/// A place on an axis.
struct Tick {
    at: Px,
    text: String,
}

/// Round numbers from `low` to `high`, about `most` of them at most.
fn ticks(low: f64, high: f64, most: usize) -> Vec<f64> {
    let span = high - low;
    if !(span.is_finite() && span > 0.0) {
        return vec![low];
    }
    let rough = span / most.max(1) as f64;
    let decade = 10f64.powf(rough.log10().floor());
    let step = [1.0, 2.0, 5.0, 10.0]
        .map(|m| m * decade)
        .into_iter()
        .find(|&s| s >= rough)
        .unwrap_or(10.0 * decade);
    let first = (low / step).ceil();
    let last = (high / step + 1e-9).floor();
    let count = (last - first).max(0.0) as usize + 1;
    (0..count.min(4 * most + 4))
        .map(|i| (first + i as f64) * step)
        .collect()
}

/// The shape of a verdict, about the origin: a ring for direct, a filled wedge that
/// points down for folded, a hollow diamond for open.
pub(super) fn glyph(verdict: Verdict) -> &'static str {
    match verdict {
        Verdict::Direct => "M4.5 0A4.5 4.5 0 1 1-4.5 0A4.5 4.5 0 1 1 4.5 0Z",
        Verdict::Folded => "M-5.6-4.4H5.6L0 5.4Z",
        Verdict::Open => "M0-6L5.4 0L0 6L-5.4 0Z",
    }
}

/// The style class of a verdict, also its word.
pub(super) fn verdict_word(verdict: Verdict) -> &'static str {
    match verdict {
        Verdict::Direct => "direct",
        Verdict::Folded => "folded",
        Verdict::Open => "open",
    }
}

/// A path through points, to a tenth of a unit.
fn path(points: impl IntoIterator<Item = (f64, f64)>) -> String {
    let mut d = String::new();
    for (x, y) in points {
        d.push(if d.is_empty() { 'M' } else { 'L' });
        d.push_str(&format!("{} {}", Px(x), Px(y)));
    }
    d
}

/// Moves places apart until neighbours are `gap` from each other, within `low..=high`,
/// as little as that takes: where a run is too dense it is centred on its own mean.
/// `at` must rise and fit.
fn spread(at: &[f64], gap: f64, low: f64, high: f64) -> Vec<f64> {
    // Blocks of places that touch: the sum of where their first would like to be, and
    // how many there are.
    let mut blocks: Vec<(f64, usize)> = Vec::new();
    let start = |(sum, n): (f64, usize)| {
        let reach = gap * n.saturating_sub(1) as f64;
        (sum / n as f64).clamp(low, (high - reach).max(low))
    };
    for &x in at {
        blocks.push((x, 1));
        while let [.., before, last] = blocks.as_slice() {
            if start(*before) + gap * before.1 as f64 <= start(*last) {
                break;
            }
            let shift = gap * before.1 as f64 * last.1 as f64;
            let joined = (before.0 + last.0 - shift, before.1 + last.1);
            blocks.truncate(blocks.len() - 2);
            blocks.push(joined);
        }
    }
    blocks
        .into_iter()
        .flat_map(|b| (0..b.1).map(move |i| start(b) + gap * i as f64))
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn ticks_are_round_and_inside() {
        assert_eq!(ticks(0.0, 4000.0, 9).len(), 9);
        assert_eq!(ticks(0.0, 4000.0, 9)[1], 500.0);
        assert_eq!(ticks(-93.0, -21.0, 5), [-80.0, -60.0, -40.0]);
        assert_eq!(ticks(1.0, 1.0, 5), [1.0]);
        assert_eq!(ticks(0.0, f64::INFINITY, 5), [0.0]);
    }

    #[test]
    fn labels_keep_apart_and_near_their_place() {
        let at = [10.0, 10.0, 10.0, 50.0, 99.0, 100.0];
        let moved = spread(&at, 10.0, 0.0, 100.0);
        assert_eq!(moved, [0.0, 10.0, 20.0, 50.0, 90.0, 100.0]);
        // centred on their mean where there is room
        assert_eq!(
            spread(&[50.0, 50.0, 50.0], 10.0, 0.0, 100.0),
            [40.0, 50.0, 60.0]
        );
        for pair in moved.windows(2) {
            assert!(pair[1] - pair[0] >= 10.0 - 1e-9);
        }
        assert_eq!(spread(&[], 10.0, 0.0, 100.0), [0.0; 0]);
    }

    #[test]
    fn units_are_tenths() {
        assert_eq!(path([(1.04, 2.0), (3.26, -0.04)]), "M1 2L3.3 -0");
    }
}
