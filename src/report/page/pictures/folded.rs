//! The folded axis: the analog frequencies laid in folds over the seen band, each
//! suspect where its line truly is.

use super::{Axis, LEFT, Px, RIGHT, Tick, WIDTH, path, verdict_word};
use crate::fold::Chain;
use crate::report::page::triage::ToneView;
use crate::report::text::{count, hertz};
use crate::suspects::Verdict;
use crate::units::TrueHz;
use askama::Template;
use std::collections::BTreeMap;

/// Folds drawn at most: those with the most probable suspects.
const FOLDS: usize = 24;
/// Height of a fold, and of the place of folds that are left out.
const FOLD: f64 = 40.0;
const BREAK: f64 = 30.0;
const TOP: f64 = 46.0;

/// Fills `folded.svg`.
#[derive(Template)]
#[template(config = "src/report/page/askama.toml", path = "pictures/folded.svg")]
pub(in crate::report::page) struct FoldedPicture {
    prefix: String,
    width: Px,
    height: Px,
    left: Px,
    right: Px,
    title: String,
    description: String,
    folds: Vec<Fold>,
    breaks: Vec<Break>,
    drops: Vec<Drop>,
    marks: Vec<Mark>,
    ticks: Vec<Tick>,
    pub(in crate::report::page) left_out: Option<String>,
}

/// One zone: a straight piece of the analog axis.
struct Fold {
    class: &'static str,
    line: String,
    zone: u64,
    label_y: Px,
    from: End,
    to: End,
}

/// Where a piece begins or ends.
struct End {
    x: Px,
    y: Px,
    anchor: &'static str,
    hz: String,
    /// The next piece joins here and names the place.
    joined: bool,
}

struct Break {
    y: Px,
    line: String,
    words: String,
}

struct Drop {
    anchor: String,
    x: Px,
    bottom: Px,
}

struct Mark {
    anchor: String,
    class: &'static str,
    x: Px,
    y: Px,
    letter: String,
    title: String,
    first: bool,
}

impl FoldedPicture {
    /// Nothing where no suspect is proposed.
    pub(in crate::report::page) fn new(
        rate_hz: f64,
        chain: &Chain,
        tones: &[ToneView],
        prefix: &str,
    ) -> Option<Self> {
        let axis = Axis {
            top_hz: rate_hz / 2.0,
        };
        let (zones, left_out) = zones(tones);
        if zones.is_empty() {
            return None;
        }
        let mut y = TOP;
        let mut folds: Vec<Fold> = Vec::new();
        let mut breaks = Vec::new();
        // zone → (lowest and highest frequency, y of its top)
        let mut places: BTreeMap<u64, (f64, f64, f64)> = BTreeMap::new();
        let mut before = 0;
        for &zone in &zones {
            let joined = zone == before + 1;
            if !joined {
                breaks.push(gap(y, before + 1, zone - 1));
                y += BREAK;
            } else if let Some(fold) = folds.last_mut() {
                fold.to.joined = true;
            }
            before = zone;
            let (low_hz, high_hz) = edges(chain, zone);
            folds.push(fold(chain, axis, zone, (low_hz, high_hz), y));
            places.insert(zone, (low_hz, high_hz, y));
            y += FOLD;
        }
        let mut marks = Vec::new();
        let mut drops = Vec::new();
        for tone in tones {
            let x = axis.x(tone.hz);
            let mut deepest = f64::NEG_INFINITY;
            for (i, suspect) in tone.suspects.iter().enumerate() {
                let Some((zone, true_hz)) = suspect.place else {
                    continue;
                };
                let Some(&(low_hz, high_hz, top)) = places.get(&zone) else {
                    continue;
                };
                let share = ((true_hz - low_hz) / (high_hz - low_hz)).clamp(0.0, 1.0);
                let y = top + FOLD * if share.is_finite() { share } else { 0.5 };
                deepest = deepest.max(y);
                marks.push(Mark {
                    anchor: tone.anchor.clone(),
                    class: verdict_word(if zone == 1 {
                        Verdict::Direct
                    } else {
                        Verdict::Folded
                    }),
                    x: Px(x),
                    y: Px(y),
                    letter: suspect.letter.clone(),
                    title: format!("tone {}: {}", tone.number, suspect.sentence),
                    first: i == 0,
                });
            }
            if deepest > 0.0 {
                drops.push(Drop {
                    anchor: tone.anchor.clone(),
                    x: Px(x),
                    bottom: Px(deepest),
                });
            }
        }
        // What is less likely lies underneath.
        marks.sort_by_key(|m| m.first);
        Some(FoldedPicture {
            prefix: prefix.to_owned(),
            width: Px(WIDTH),
            height: Px(y + 18.0),
            left: Px(LEFT),
            right: Px(WIDTH - RIGHT),
            title: "The analog axis, folded".into(),
            description: format!(
                "Each fold is one Nyquist zone. {} in {} lie below the tones that they could have made.",
                count(marks.len(), "suspect", "suspects"),
                count(zones.len(), "zone", "zones")
            ),
            folds,
            breaks,
            drops,
            marks,
            ticks: axis.ticks(),
            left_out,
        })
    }
}

/// Zones to draw, rising, and what is left out, in words.
fn zones(tones: &[ToneView]) -> (Vec<u64>, Option<String>) {
    let mut weights: BTreeMap<u64, f64> = BTreeMap::new();
    for tone in tones {
        for suspect in &tone.suspects {
            if let Some((zone, _)) = suspect.place {
                *weights.entry(zone.max(1)).or_default() += suspect.probability;
            }
        }
    }
    let all = weights.len();
    let mut by_weight: Vec<(u64, f64)> = weights.into_iter().collect();
    by_weight.sort_by(|a, b| b.1.total_cmp(&a.1));
    by_weight.truncate(FOLDS);
    let mut kept: Vec<u64> = by_weight.into_iter().map(|(zone, _)| zone).collect();
    kept.sort_unstable();
    let words = (kept.len() < all).then(|| {
        format!(
            "{} with less probable suspects are left out.",
            count(all - kept.len(), "zone", "zones")
        )
    });
    (kept, words)
}

/// Lowest and highest frequency of a zone. The number of folds never falls with
/// frequency, so that halving finds where it changes, whatever the chain of rates.
fn edges(chain: &Chain, zone: u64) -> (f64, f64) {
    let mut top = chain.file_rate_hz();
    // At most a turn per half of the smallest rate; each doubling passes as many again.
    for _ in 0..200 {
        if chain.see(TrueHz(top)).zone > zone || !top.is_finite() {
            break;
        }
        top *= 2.0;
    }
    let first_in = |zone: u64| {
        let (mut low, mut high) = (0.0, top);
        for _ in 0..80 {
            let middle = 0.5 * (low + high);
            if chain.see(TrueHz(middle)).zone < zone {
                low = middle;
            } else {
                high = middle;
            }
        }
        high
    };
    let low = if zone <= 1 { 0.0 } else { first_in(zone) };
    (low, first_in(zone + 1))
}

fn fold(chain: &Chain, axis: Axis, zone: u64, (low_hz, high_hz): (f64, f64), y: f64) -> Fold {
    // Just inside: at the very edge a place belongs to both neighbours.
    let inside = 1e-9 * (high_hz - low_hz);
    let seen = |hz: f64| axis.x(chain.see(TrueHz(hz)).seen.0);
    let (x0, x1) = (seen(low_hz + inside), seen(high_hz - inside));
    let end = |x: f64, y: f64, other: f64, hz: f64| End {
        x: Px(x + if x > other { 9.0 } else { -9.0 }),
        y: Px(y),
        anchor: if x > other { "start" } else { "end" },
        hz: hertz(hz),
        joined: false,
    };
    Fold {
        class: if x1 >= x0 { "upright" } else { "inverted" },
        line: path([(x0, y), (x1, y + FOLD)]),
        zone,
        label_y: Px(y + FOLD / 2.0),
        from: end(x0, y, x1, low_hz),
        to: end(x1, y + FOLD, x0, high_hz),
    }
}

fn gap(y: f64, from: u64, to: u64) -> Break {
    let middle = y + BREAK / 2.0;
    let teeth = (0..=56).map(|i| {
        let x = LEFT + (WIDTH - LEFT - RIGHT) * f64::from(i) / 56.0;
        (x, middle + if i % 2 == 0 { -2.5 } else { 2.5 })
    });
    Break {
        y: Px(middle),
        line: path(teeth),
        words: if from == to {
            format!("zone {from}: no suspect")
        } else {
            format!("zones {from} to {to}: no suspect")
        },
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn edges_are_half_rates() {
        let chain = Chain::single(8000.0).unwrap();
        for zone in 1..20 {
            let (low, high) = edges(&chain, zone);
            let half = 4000.0;
            assert!(
                (low - half * (zone - 1) as f64).abs() < 1e-6,
                "{zone}: {low}"
            );
            assert!((high - half * zone as f64).abs() < 1e-6, "{zone}: {high}");
        }
        // a megahertz line in a slow logger
        let (low, high) = edges(&Chain::single(256.0).unwrap(), 210_938);
        assert!((low - 128.0 * 210_937.0).abs() < 1e-3 && (high - low - 128.0).abs() < 1e-3);
    }

    #[test]
    fn a_chain_whose_rates_do_not_divide_has_uneven_folds() {
        // 10 kHz then 8 kHz: turns at 4000, at 5000 (seen at 3000 there), at 6000, at 10 000 …
        let chain = Chain::new(vec![10_000.0, 8_000.0]).unwrap();
        let found: Vec<(f64, f64)> = (1..=4).map(|z| edges(&chain, z)).collect();
        for (got, expected) in found.iter().zip([
            (0.0, 4000.0),
            (4000.0, 5000.0),
            (5000.0, 6000.0),
            (6000.0, 10_000.0),
        ]) {
            assert!((got.0 - expected.0).abs() < 1e-6 && (got.1 - expected.1).abs() < 1e-6);
        }
        let axis = Axis { top_hz: 4000.0 };
        let piece = fold(&chain, axis, 2, found[1], 0.0);
        assert_eq!(piece.class, "inverted");
        assert!((piece.to.x.0 + 9.0 - axis.x(3000.0)).abs() < 0.01);
    }
}
