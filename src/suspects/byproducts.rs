//! Tones without a source of their own: products of other tones, and the recorder's
//! artefacts.
//!
//! *Products.* Where something is not linear (clipping, a saturated sensor), strong
//! tones make harmonics and intermodulation. At one sample rate a product is seen at
//! the fold of the same combination of its parents' *seen* frequencies: the rungs
//! they are really on drop out, `fold(2(k·r ± ν)) = fold(2ν)`.
//!
//! *Artefacts.* Spurs at simple fractions of the rate; copies of strong tones about
//! half and a quarter of it (converters that take turns); combs at `rate/N` where a
//! buffer or packet of `N` samples leaves a seam.
//!
//! Each is a density at a tone, like an unlisted one's, so all compete on one scale.

use super::modes::gaussian;
use super::scene::{Measured, Scene};
use crate::fold::fold;
use crate::units::TrueHz;

/// Who made a by-product.
#[derive(Debug, Clone, PartialEq)]
pub(super) enum Maker {
    /// Tones (indices) and how often each enters.
    Parents(Vec<(usize, i32)>),
    /// The recorder.
    Recorder,
}

/// A tone as a by-product.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Byproduct {
    pub tone: usize,
    pub maker: Maker,
    pub label: String,
    /// Per Hz and dB.
    pub density: f64,
}

/// Tones that can be parents, and the least SNR for it, dB.
const PARENTS: usize = 6;
const PARENT_SNR_DB: f64 = 35.0;
/// A product is at least this much weaker than its weakest parent, dB: a distortion
/// of 4 % is already a bad one, unless the input clips.
const WEAKER_DB: f64 = 28.0;
/// The same for a parent at the clipping level, and what level that is, dBFS.
const CLIPPED_WEAKER_DB: f64 = 8.0;
const CLIPPING_DBFS: f64 = -6.0;
/// A product is at most this much weaker, dB.
const WEAKEST_DB: f64 = 90.0;
/// Chance that a given product shows, by its order (2, 3, 4, 5). Families of sources
/// make the same patterns and are far more common than distortion.
const PRODUCT: [f64; 4] = [0.01, 0.01, 0.004, 0.004];
/// Chance of a spur at a given fraction of the rate.
const SPUR: f64 = 0.01;
/// Chance of a copy about half or a quarter of the rate, of a given tone.
const COPY: f64 = 0.005;
/// Chance that a recorder leaves a comb; spread over the lengths looked at.
const COMB: f64 = 0.03;
/// Chance that a comb shows a given one of its first lines.
const COMB_LINE: f64 = 0.4;
/// Lines of a comb looked at.
const COMB_LINES: u32 = 40;
/// Unlisted tones assumed where a comb is weighed.
const STRAYS: f64 = 3.0;

/// Density (per dB) of a by-product's SNR below that of what it comes from.
fn weaker(parent_db: f64, least_db: f64, snr_db: f64) -> f64 {
    let below = parent_db - snr_db;
    // Flat with soft edges of a few dB.
    let edge = |x: f64| 1.0 / (1.0 + (-x / 1.5).exp());
    edge(below - least_db) * edge(WEAKEST_DB - below) / (WEAKEST_DB - least_db)
}

/// Every by-product worth a thought. `background` is the density of one unlisted
/// tone's frequency and level at each tone.
pub(super) fn find(scene: &Scene, tones: &[Measured], background: &[f64]) -> Vec<Byproduct> {
    let mut found = Vec::new();
    products(scene, tones, &mut found);
    spurs(scene, tones, background, &mut found);
    combs(scene, tones, background, &mut found);
    found
}

fn strongest(tones: &[Measured]) -> Vec<usize> {
    let mut order: Vec<usize> = (0..tones.len()).collect();
    let snr = |i: &usize| tones.get(*i).map_or(0.0, |t| t.snr_db);
    order.retain(|i| snr(i) > PARENT_SNR_DB);
    order.sort_by(|a, b| snr(b).total_cmp(&snr(a)));
    order.truncate(PARENTS);
    order
}

fn products(scene: &Scene, tones: &[Measured], found: &mut Vec<Byproduct>) {
    let parents = strongest(tones);
    let mut recipes: Vec<(Vec<(usize, i32)>, String)> = Vec::new();
    for (n, &a) in parents.iter().enumerate() {
        for k in 2..=5 {
            recipes.push((vec![(a, k)], format!("{k}x")));
        }
        for &b in parents.iter().skip(n + 1) {
            for (p, q, label) in [
                (1, 1, "a+b"),
                (1, -1, "a-b"),
                (2, 1, "2a+b"),
                (2, -1, "2a-b"),
                (1, 2, "a+2b"),
                (1, -2, "a-2b"),
            ] {
                recipes.push((vec![(a, p), (b, q)], label.to_owned()));
            }
        }
    }
    for (recipe, label) in recipes {
        let mut f = 0.0;
        let mut var = 0.0;
        let mut level = f64::INFINITY;
        let mut least = CLIPPED_WEAKER_DB;
        let mut order = 0;
        for &(i, k) in &recipe {
            if let Some(t) = tones.get(i) {
                f += f64::from(k) * t.nu;
                // What wanders takes its product along.
                var += f64::from(k).powi(2) * t.var;
                level = level.min(t.snr_db);
                if t.level_dbfs < CLIPPING_DBFS {
                    least = WEAKER_DB;
                }
                order += k.unsigned_abs() as usize;
            }
        }
        let seen = fold(TrueHz(f.abs()), scene.chain.file_rate_hz()).0;
        let chance = PRODUCT.get(order.saturating_sub(2)).copied().unwrap_or(0.0);
        for (i, t) in tones.iter().enumerate() {
            let var = var + t.var;
            let off = t.nu - seen;
            if off * off > 16.0 * var || recipe.iter().any(|r| r.0 == i) {
                continue;
            }
            found.push(Byproduct {
                tone: i,
                maker: Maker::Parents(recipe.clone()),
                label: label.clone(),
                density: chance * gaussian(off, var) * weaker(level, least, t.snr_db),
            });
        }
    }
}

fn spurs(scene: &Scene, tones: &[Measured], background: &[f64], found: &mut Vec<Byproduct>) {
    let rate = scene.chain.file_rate_hz();
    let half = rate / 2.0;
    for q in [2_u32, 3, 4, 5, 6, 8] {
        for p in 1..=q / 2 {
            if (2..=p).any(|d| p % d == 0 && q % d == 0) {
                continue;
            }
            let at = rate * f64::from(p) / f64::from(q);
            for (i, t) in tones.iter().enumerate() {
                let off = t.nu - at;
                if off * off > 16.0 * t.var {
                    continue;
                }
                let level = background.get(i).map_or(0.0, |b| b * half);
                found.push(Byproduct {
                    tone: i,
                    maker: Maker::Recorder,
                    label: if p == 1 {
                        format!("rate/{q}")
                    } else {
                        format!("{p}rate/{q}")
                    },
                    density: SPUR * gaussian(off, t.var) * level,
                });
            }
        }
    }
    for parent in strongest(tones) {
        let Some(p) = tones.get(parent) else { continue };
        for (about, label) in [(half, "rate/2"), (half / 2.0, "rate/4")] {
            for sign in [-1.0, 1.0] {
                let at = fold(TrueHz((about + sign * p.nu).abs()), rate).0;
                for (i, t) in tones.iter().enumerate() {
                    let var = p.var + t.var;
                    let off = t.nu - at;
                    if i == parent || off * off > 16.0 * var {
                        continue;
                    }
                    found.push(Byproduct {
                        tone: i,
                        maker: Maker::Recorder,
                        label: format!(
                            "{label}{}tone {}",
                            if sign < 0.0 { '-' } else { '+' },
                            parent + 1
                        ),
                        density: COPY * gaussian(off, var) * weaker(p.snr_db, WEAKER_DB, t.snr_db),
                    });
                }
            }
        }
    }
}

/// Buffer and packet lengths in samples: powers of two, blocks of 10 ms and so of
/// common rates, frames of common codecs (common practice).
fn lengths() -> Vec<u32> {
    let mut all: Vec<u32> = (4..=16).map(|b| 1 << b).collect();
    all.extend([
        80, 100, 120, 160, 192, 200, 240, 250, 320, 384, 441, 480, 500, 576, 640, 768, 882, 960,
        1000, 1152, 1764, 1920, 2000, 4000, 4410, 4800, 5000, 8000, 10_000,
    ]);
    all
}

fn combs(scene: &Scene, tones: &[Measured], background: &[f64], found: &mut Vec<Byproduct>) {
    let rate = scene.chain.file_rate_hz();
    let lengths = lengths();
    let prior = COMB / lengths.len() as f64;
    for n in lengths {
        let spacing = rate / f64::from(n);
        // Odds of each tone being a line of the comb, were there one.
        let mut lines: Vec<(usize, u32, f64)> = Vec::new();
        for (i, t) in tones.iter().enumerate() {
            let k = (t.nu / spacing).round();
            if k < 1.0 || k > f64::from(COMB_LINES) || t.wander_hz > 0.0 {
                continue;
            }
            let off = t.nu - k * spacing;
            if off * off > 16.0 * t.var {
                continue;
            }
            let others = STRAYS * background.get(i).copied().unwrap_or(1.0);
            let level = background.get(i).map_or(0.0, |b| b * rate / 2.0);
            let x = COMB_LINE * gaussian(off, t.var) * level / others;
            lines.push((i, k as u32, x));
        }
        let top = lines.iter().map(|l| l.1).max().unwrap_or(0);
        let hidden = (1.0 - COMB_LINE).ln() * f64::from(top.saturating_sub(lines.len() as u32));
        let all: f64 = lines.iter().map(|l| l.2.ln_1p()).sum::<f64>() + hidden;
        for &(i, k, x) in &lines {
            // The comb on the word of the other lines alone.
            let without = prior * (all - x.ln_1p()).min(600.0).exp();
            let present = without / (1.0 + without);
            let others = STRAYS * background.get(i).copied().unwrap_or(1.0);
            let density = present * x * others;
            if present > 1e-4 {
                found.push(Byproduct {
                    tone: i,
                    maker: Maker::Recorder,
                    label: if k == 1 {
                        format!("rate/{n}")
                    } else {
                        format!("{k}rate/{n}")
                    },
                    density,
                });
            }
        }
    }
}
