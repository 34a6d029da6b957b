//! What inference works on: tones prepared for it, and where a listed line can
//! meet them.

use crate::evidence::Evidence;
use crate::fold::Chain;
use crate::sources::Site;
use crate::tones::Tone;
use crate::units::{SeenHz, TrueHz, U95};

/// One recording's tones, what is known of the place, and how it was sampled.
#[derive(Debug, Clone, Copy)]
pub struct Scene<'a> {
    /// By rising seen frequency.
    pub tones: &'a [Tone],
    /// Sources and recorder.
    pub site: &'a Site,
    /// Every rate the signal went through.
    pub chain: &'a Chain,
    /// Length of the recording, s, > 0.
    pub duration_s: f64,
    /// Levels are against the converter's full scale; in a log whose full scale
    /// nobody described they are only against one unit.
    pub full_scale_known: bool,
    /// Evidence from time, where it was gathered.
    pub evidence: Option<&'a Evidence>,
}

/// A tone as a measurement: a position with its variance, a strength, a wander.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Measured {
    pub nu: f64,
    /// Variance of `nu`, Hz².
    pub var: f64,
    pub snr_db: f64,
    /// Where full scale is known.
    pub level_dbfs: Option<f64>,
    pub wander_hz: f64,
    /// Below this a wander cannot be told from none, Hz.
    pub wander_floor_hz: f64,
}

/// The mean of a wandering tone, as a fraction of its wander, is this uncertain
/// beyond what was measured: two lines of one source need not be present, or
/// weighted, over quite the same time.
const MEAN_OF_WANDER: f64 = 0.06;

/// Smallest standard deviation believed, in resolution cells: a tone may stray by
/// less than can be told from steady, and then its mean is not quite where a steady
/// one fits best.
const LEAST_SD_CELLS: f64 = 0.05;

/// Variance of a tone's seen frequency as inference takes it, Hz²: its measured
/// uncertainty, never below a small part of a resolution cell of a recording of
/// `duration_s`, with some of its wander.
pub fn position_variance(tone: &Tone, duration_s: f64) -> f64 {
    let cell_hz = 1.0 / duration_s.max(1e-9);
    let sd = position_sd(tone, cell_hz);
    sd * sd + (MEAN_OF_WANDER * wander(tone)).powi(2)
}

fn position_sd(tone: &Tone, cell_hz: f64) -> f64 {
    let sd = (tone.seen_hz_u95 / U95).max(LEAST_SD_CELLS * cell_hz);
    if sd.is_finite() { sd } else { cell_hz }
}

fn wander(tone: &Tone) -> f64 {
    if tone.wander_hz.is_finite() {
        tone.wander_hz.max(0.0)
    } else {
        0.0
    }
}

pub(super) fn measure(scene: &Scene) -> Vec<Measured> {
    let cell_hz = 1.0 / scene.duration_s.max(1e-9);
    let half = scene.chain.file_rate_hz() / 2.0;
    scene
        .tones
        .iter()
        .map(|t| {
            let sd = position_sd(t, cell_hz);
            Measured {
                nu: t.seen_hz.0.clamp(0.0, half),
                var: position_variance(t, scene.duration_s),
                snr_db: if t.snr_db.is_finite() { t.snr_db } else { 20.0 },
                level_dbfs: Some(t.level_dbfs).filter(|l| scene.full_scale_known && l.is_finite()),
                wander_hz: wander(t),
                wander_floor_hz: (3.0 * sd).max(0.3 * cell_hz),
            }
        })
        .collect()
}

/// One way a tone could have come about: it, and an analog frequency it unfolds to.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Meeting {
    pub tone: usize,
    /// Analog frequency on the recorder's own scale, Hz.
    pub rung_hz: f64,
    /// An interpolating stage left it there.
    pub image: bool,
}

/// Every rung of every tone, searchable by analog frequency.
#[derive(Debug, Clone)]
pub(super) enum Ladders {
    /// One rate: found by arithmetic.
    Single {
        rate_hz: f64,
        /// `(seen, tone)` by rising seen frequency.
        seen: Vec<(f64, usize)>,
    },
    /// Several stages: listed, by rising analog frequency.
    Listed(Vec<Meeting>),
}

/// Rungs listed for a chain of several stages at most, over all tones.
const MOST_LISTED: f64 = 2e6;

impl Ladders {
    pub fn new(chain: &Chain, tones: &[Measured], up_to_hz: f64) -> Ladders {
        if chain.rates_hz().len() == 1 {
            let mut seen: Vec<(f64, usize)> =
                tones.iter().enumerate().map(|(i, t)| (t.nu, i)).collect();
            seen.sort_by(|a, b| a.0.total_cmp(&b.0));
            return Ladders::Single {
                rate_hz: chain.file_rate_hz(),
                seen,
            };
        }
        let per_tone = MOST_LISTED / (tones.len().max(1) as f64);
        let limit = up_to_hz.min(per_tone * chain.file_rate_hz() / 2.0);
        let mut all = Vec::new();
        for (tone, t) in tones.iter().enumerate() {
            if let Ok(rungs) = chain.unfold(SeenHz(t.nu), TrueHz(limit)) {
                all.extend(rungs.iter().map(|r| Meeting {
                    tone,
                    rung_hz: r.true_hz.0,
                    image: r.image,
                }));
            }
        }
        all.sort_by(|a, b| a.rung_hz.total_cmp(&b.rung_hz));
        Ladders::Listed(all)
    }

    /// Calls `found` for every meeting with `low ≤ rung ≤ high`.
    pub fn between(&self, low: f64, high: f64, found: &mut dyn FnMut(Meeting)) {
        match self {
            Ladders::Listed(all) => {
                let start = all.partition_point(|m| m.rung_hz < low);
                for m in all.iter().skip(start) {
                    if m.rung_hz > high {
                        break;
                    }
                    found(*m);
                }
            }
            Ladders::Single { rate_hz, seen } => {
                let half = rate_hz / 2.0;
                let mut segment = (low.max(0.0) / half).floor();
                // Every half-rate segment from the one that holds `low`.
                while segment * half <= high {
                    let base = segment * half;
                    let rises = segment % 2.0 == 0.0;
                    let (from, to) = (low - base, high - base);
                    let (from, to) = if rises {
                        (from, to)
                    } else {
                        (half - to, half - from)
                    };
                    let start = seen.partition_point(|s| s.0 < from);
                    for &(nu, tone) in seen.iter().skip(start) {
                        if nu > to {
                            break;
                        }
                        let rung_hz = if rises { base + nu } else { base + half - nu };
                        found(Meeting {
                            tone,
                            rung_hz,
                            image: false,
                        });
                    }
                    segment += 1.0;
                }
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn tones(nus: &[f64]) -> Vec<Measured> {
        nus.iter()
            .map(|&nu| Measured {
                nu,
                var: 1e-6,
                snr_db: 30.0,
                level_dbfs: Some(-40.0),
                wander_hz: 0.0,
                wander_floor_hz: 0.01,
            })
            .collect()
    }

    /// The arithmetic of one rate finds what the ladder of the sampling chain lists.
    #[test]
    fn meetings_are_the_rungs_of_the_ladder() {
        let chain = Chain::single(1000.0).unwrap();
        let tones = tones(&[3.0, 120.0, 499.0]);
        let ladders = Ladders::new(&chain, &tones, 1e5);
        for (low, high) in [(0.0, 200.0), (480.0, 520.0), (2990.0, 5130.0)] {
            let mut got = Vec::new();
            ladders.between(low, high, &mut |m| got.push((m.tone, m.rung_hz)));
            let mut expected = Vec::new();
            for (i, t) in tones.iter().enumerate() {
                for r in chain.unfold(SeenHz(t.nu), TrueHz(high)).unwrap() {
                    if r.true_hz.0 >= low {
                        expected.push((i, r.true_hz.0));
                    }
                }
            }
            got.sort_by(|a, b| a.1.total_cmp(&b.1));
            expected.sort_by(|a, b| a.1.total_cmp(&b.1));
            assert_eq!(got, expected, "{low}..{high}");
        }
    }
}
