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
//! Those of one cause hang on one gate ([`super::gates`]).

use super::gates::Gate;
use super::modes::gaussian;
use super::scene::{Measured, Scene};
use crate::fold::fold;
use crate::units::TrueHz;

/// Who made a by-product.
#[derive(Debug, Clone, PartialEq)]
pub(super) enum Maker {
    /// Tones (indices) and how often each enters.
    Parents(Vec<(usize, i32)>),
    /// A cause that nobody listed: sidebands that some modulation makes.
    Unlisted,
    /// The recorder.
    Recorder,
}

/// A tone as a by-product.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Byproduct {
    pub tone: usize,
    pub maker: Maker,
    pub label: String,
    /// Per Hz and dB if its gate is open, over the chance of not showing.
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
/// Harmonics looked at.
const HARMONICS: i32 = 9;
/// Chance that a source of distortion is there: of a strong tone alone, of a pair
/// of them; and where a parent reaches the clipping level. Families of sources make
/// the same patterns and are far more common than distortion.
const DISTORTED: f64 = 0.01;
const MIXED: f64 = 0.003;
const CLIPPED: f64 = 0.3;
/// Chance that a pair of strong tones are two of a row of sidebands that no listed
/// source makes (a drive, a meshing gear). Equal spacing is what modulation and
/// third-order intermodulation have in common; modulation is far more common.
const MODULATED: f64 = 0.03;
/// Chance that distortion shows a given product, by its order from 2 on.
const PRODUCT: [f64; 8] = [0.5, 0.5, 0.3, 0.3, 0.2, 0.2, 0.15, 0.15];
/// Chance of a spur at a given fraction of the rate.
const SPUR: f64 = 0.01;
/// Chance that converters take turns unevenly, and that a given strong tone then
/// shows a copy.
const TURNS: f64 = 0.01;
const COPY: f64 = 0.5;
/// Chance that a recorder leaves a comb; spread over the lengths looked at.
const COMB: f64 = 0.03;
/// Chance that a comb shows a given one of its first lines.
const COMB_LINE: f64 = 0.4;
/// Lines of a comb looked at.
const COMB_LINES: u32 = 40;

/// Density (per dB) of a by-product's SNR below that of what it comes from.
fn weaker(parent_db: f64, least_db: f64, snr_db: f64) -> f64 {
    let below = parent_db - snr_db;
    // Flat with soft edges of a few dB.
    let edge = |x: f64| 1.0 / (1.0 + (-x / 1.5).exp());
    edge(below - least_db) * edge(WEAKEST_DB - below) / (WEAKEST_DB - least_db)
}

/// Part of that density above the detector's threshold.
fn clears(parent_db: f64, least_db: f64, threshold_db: f64) -> f64 {
    ((parent_db - least_db - threshold_db) / (WEAKEST_DB - least_db)).clamp(0.0, 1.0)
}

/// By-products and the causes they hang on.
#[derive(Debug, Clone, Default)]
pub(super) struct Found {
    pub products: Vec<Byproduct>,
    pub gates: Vec<Gate>,
}

impl Found {
    /// Enters a cause with the by-products added since `first`.
    fn gate(&mut self, prior: f64, ln_hidden: f64, rival: bool, first: usize) {
        if self.products.len() > first {
            self.gates.push(Gate {
                prior,
                ln_hidden,
                rival,
                products: first..self.products.len(),
            });
        }
    }
}

/// Every by-product worth a thought. `level` is the background density of a level
/// like each tone's, per dB; tones show from `threshold_db` of SNR on.
pub(super) fn find(scene: &Scene, tones: &[Measured], level: &[f64], threshold_db: f64) -> Found {
    let mut found = Found::default();
    products(scene, tones, threshold_db, &mut found);
    spurs(scene, tones, level, &mut found);
    copies(scene, tones, threshold_db, &mut found);
    combs(scene, tones, level, &mut found);
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

fn clips(tone: &Measured) -> bool {
    tone.level_dbfs.is_some_and(|l| l >= CLIPPING_DBFS)
}

/// One combination of parents.
type Recipe = (Vec<(usize, i32)>, String);

fn products(scene: &Scene, tones: &[Measured], threshold_db: f64, found: &mut Found) {
    let parents = strongest(tones);
    let clipping = |i: usize| tones.get(i).is_some_and(clips);
    for (n, &a) in parents.iter().enumerate() {
        let harmonics: Vec<Recipe> = (2..=HARMONICS)
            .map(|k| (vec![(a, k)], format!("{k}x")))
            .collect();
        let prior = if clipping(a) { CLIPPED } else { DISTORTED };
        distortion(scene, tones, threshold_db, &harmonics, prior, found);
        let spaced = |l: &str| matches!(l, "2a-b" | "a-2b");
        for &b in parents.iter().skip(n + 1) {
            let mixed: Vec<Recipe> = [
                (1, 1, "a+b"),
                (1, -1, "a-b"),
                (2, 1, "2a+b"),
                (2, -1, "2a-b"),
                (1, 2, "a+2b"),
                (1, -2, "a-2b"),
            ]
            .map(|(p, q, label)| (vec![(a, p), (b, q)], label.to_owned()))
            .to_vec();
            let prior = if clipping(a) || clipping(b) {
                CLIPPED
            } else {
                MIXED
            };
            distortion(scene, tones, threshold_db, &mixed, prior, found);
            let row: Vec<Recipe> = mixed.into_iter().filter(|m| spaced(&m.1)).collect();
            let first = found.products.len();
            distortion(scene, tones, threshold_db, &row, MODULATED, found);
            for b in found.products.iter_mut().skip(first) {
                b.maker = Maker::Unlisted;
            }
        }
    }
}

/// What one nonlinearity makes of its parents.
fn distortion(
    scene: &Scene,
    tones: &[Measured],
    threshold_db: f64,
    recipes: &[Recipe],
    prior: f64,
    found: &mut Found,
) {
    let first = found.products.len();
    let mut ln_hidden = 0.0;
    for (recipe, label) in recipes {
        let mut f = 0.0;
        let mut var = 0.0;
        let mut level = f64::INFINITY;
        let mut least = WEAKER_DB;
        let mut order = 0;
        for &(i, k) in recipe {
            if let Some(t) = tones.get(i) {
                f += f64::from(k) * t.nu;
                // What wanders takes its product along.
                var += f64::from(k).powi(2) * t.var;
                level = level.min(t.snr_db);
                if clips(t) {
                    least = CLIPPED_WEAKER_DB;
                }
                order += k.unsigned_abs() as usize;
            }
        }
        let seen = fold(TrueHz(f.abs()), scene.chain.file_rate_hz()).0;
        let chance = PRODUCT.get(order.saturating_sub(2)).copied().unwrap_or(0.0);
        let shows = chance * clears(level, least, threshold_db);
        ln_hidden += (-shows).ln_1p();
        for (i, t) in tones.iter().enumerate() {
            let var = var + t.var;
            let off = t.nu - seen;
            if off * off > 16.0 * var || recipe.iter().any(|r| r.0 == i) {
                continue;
            }
            found.products.push(Byproduct {
                tone: i,
                maker: Maker::Parents(recipe.clone()),
                label: label.clone(),
                density: chance / (1.0 - shows)
                    * gaussian(off, var)
                    * weaker(level, least, t.snr_db),
            });
        }
    }
    found.gate(prior, ln_hidden, false, first);
}

fn spurs(scene: &Scene, tones: &[Measured], level: &[f64], found: &mut Found) {
    let rate = scene.chain.file_rate_hz();
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
                let first = found.products.len();
                found.products.push(Byproduct {
                    tone: i,
                    maker: Maker::Recorder,
                    label: if p == 1 {
                        format!("rate/{q}")
                    } else {
                        format!("{p}rate/{q}")
                    },
                    density: gaussian(off, t.var) * level.get(i).copied().unwrap_or(0.0),
                });
                found.gate(SPUR, 0.0, true, first);
            }
        }
    }
}

/// Copies of strong tones about half and a quarter of the rate.
fn copies(scene: &Scene, tones: &[Measured], threshold_db: f64, found: &mut Found) {
    let rate = scene.chain.file_rate_hz();
    for (about, signs, label) in [
        (rate / 2.0, &[-1.0][..], "rate/2"),
        (rate / 4.0, &[-1.0, 1.0][..], "rate/4"),
    ] {
        let first = found.products.len();
        let mut ln_hidden = 0.0;
        for parent in strongest(tones) {
            let Some(p) = tones.get(parent) else { continue };
            let shows = COPY * clears(p.snr_db, WEAKER_DB, threshold_db);
            for sign in signs {
                ln_hidden += (-shows).ln_1p();
                let at = fold(TrueHz((about + sign * p.nu).abs()), rate).0;
                for (i, t) in tones.iter().enumerate() {
                    let var = p.var + t.var;
                    let off = t.nu - at;
                    if i == parent || off * off > 16.0 * var {
                        continue;
                    }
                    found.products.push(Byproduct {
                        tone: i,
                        maker: Maker::Recorder,
                        label: format!(
                            "{label}{}tone {}",
                            if *sign < 0.0 { '-' } else { '+' },
                            parent + 1
                        ),
                        density: COPY / (1.0 - shows)
                            * gaussian(off, var)
                            * weaker(p.snr_db, WEAKER_DB, t.snr_db),
                    });
                }
            }
        }
        found.gate(TURNS, ln_hidden, true, first);
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

fn combs(scene: &Scene, tones: &[Measured], level: &[f64], found: &mut Found) {
    let rate = scene.chain.file_rate_hz();
    let lengths = lengths();
    let prior = COMB / lengths.len() as f64;
    for n in lengths {
        let spacing = rate / f64::from(n);
        let first = found.products.len();
        let mut top = 0;
        for (i, t) in tones.iter().enumerate() {
            let k = (t.nu / spacing).round();
            if k < 1.0 || k > f64::from(COMB_LINES) || t.wander_hz > 0.0 {
                continue;
            }
            let off = t.nu - k * spacing;
            if off * off > 16.0 * t.var {
                continue;
            }
            top = top.max(k as u32);
            found.products.push(Byproduct {
                tone: i,
                maker: Maker::Recorder,
                label: if k == 1.0 {
                    format!("rate/{n}")
                } else {
                    format!("{k}rate/{n}")
                },
                density: COMB_LINE / (1.0 - COMB_LINE)
                    * gaussian(off, t.var)
                    * level.get(i).copied().unwrap_or(0.0),
            });
        }
        // How far a comb reaches is not known: lines beyond the last are not missed.
        let ln_hidden = f64::from(top) * (1.0 - COMB_LINE).ln();
        found.gate(prior, ln_hidden, true, first);
    }
}
