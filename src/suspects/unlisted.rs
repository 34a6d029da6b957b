//! Tones that nothing listed made: where they fall, and how likely they are folded.
//!
//! Analog frequencies are taken to be spread evenly over the logarithm, from a
//! small part of the band to the top of what reaches the converter. What part of
//! that lies above half the rate and would still be seen after the front end is
//! the prior mass of `unlisted, folded`; it is near 0 behind a steep described
//! filter and substantial behind nothing.

use super::scene::{Measured, Scene};
use crate::frontend::PreparedFrontEnd;
use crate::units::{SeenHz, TrueHz};

/// Density per Hz of unlisted tones at a seen frequency, per expected tone.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Unlisted {
    pub direct: f64,
    pub folded: f64,
}

impl Unlisted {
    pub fn total(&self) -> f64 {
        self.direct + self.folded
    }
}

/// Lowest analog frequency over half the rate: two decades and a bit.
const LOWEST: f64 = 1.0 / 200.0;
/// Where nothing says how high analog frequencies go: this many times half the rate.
const HIGHEST: f64 = 50.0;
/// Part of the direct tones that is spread evenly over the band.
const EVEN: f64 = 0.5;
/// Rungs looked at.
const MOST_RUNGS: f64 = 400.0;

/// Share of tones that would still be seen behind the front end at `f`.
fn passing(scene: &Scene, front: &PreparedFrontEnd, f: f64) -> f64 {
    front.share_seen(TrueHz(f), scene.chain.converter_rate_hz())
}

/// Densities at each tone.
pub(super) fn densities(scene: &Scene, tones: &[Measured]) -> Vec<Unlisted> {
    let half = scene.chain.file_rate_hz() / 2.0;
    let front = scene.site.recorder.front_end.prepared();
    let top = scene
        .site
        .recorder
        .front_end
        .bandwidth_hz
        .unwrap_or(HIGHEST * half)
        .max(half);
    let top = top.min(MOST_RUNGS * half);
    let direct_mass = LOWEST.recip().ln();
    let steps = 200;
    let octaves = (top / half).ln();
    let folded_mass: f64 = (0..steps)
        .map(|i| {
            let f = half * (octaves * (f64::from(i) + 0.5) / f64::from(steps)).exp();
            passing(scene, &front, f) * octaves / f64::from(steps)
        })
        .sum();
    let mass = direct_mass + folded_mass;
    let low = LOWEST * half;
    tones
        .iter()
        .map(|t| {
            let spread = 1.0 / ((t.nu + low) * ((half + low) / low).ln());
            let direct = (EVEN / half + (1.0 - EVEN) * spread) * direct_mass / mass;
            let folded = scene
                .chain
                .unfold(SeenHz(t.nu), TrueHz(top))
                .map(|rungs| {
                    rungs
                        .iter()
                        .filter(|r| r.zone > 1)
                        .map(|r| passing(scene, &front, r.true_hz.0) / r.true_hz.0)
                        .sum::<f64>()
                })
                .unwrap_or(0.0)
                / mass;
            Unlisted { direct, folded }
        })
        .collect()
}

/// Where tones that nothing listed made come from: direct or folded.
///
/// A lone stray is judged within the band it was looked for in: analog frequencies
/// relative to the rate. Many unlisted tones are families, and machines do not know
/// the recorder's rate: theirs are judged on an absolute scale, frequencies being
/// spread evenly over the logarithm from [`SLOWEST_HZ`] up to [`FASTEST_HZ`].
#[derive(Debug)]
pub(super) struct Origins<'a> {
    scene: &'a Scene<'a>,
    front: PreparedFrontEnd,
    /// Expected number of unlisted tones.
    count: f64,
}

/// Machines and supplies seldom make anything slower.
const SLOWEST_HZ: f64 = 8.0;
/// Lines above this are rarely looked at.
const FASTEST_HZ: f64 = 2e5;
/// Lone strays expected in a recording.
const STRAYS: f64 = 2.0;

impl<'a> Origins<'a> {
    pub fn new(scene: &'a Scene<'a>, count: f64) -> Self {
        Origins {
            scene,
            front: scene.site.recorder.front_end.prepared(),
            count,
        }
    }

    fn share(&self, nu: f64, density: impl Fn(f64) -> f64) -> f64 {
        let half = self.scene.chain.file_rate_hz() / 2.0;
        let nu = nu.clamp(0.0, half);
        let direct = density(nu.max(1e-3 * half));
        let top = TrueHz(MOST_RUNGS * half);
        let folded: f64 = self
            .scene
            .chain
            .unfold(SeenHz(nu), top)
            .map(|rungs| {
                rungs
                    .iter()
                    .filter(|r| r.zone > 1)
                    .map(|r| passing(self.scene, &self.front, r.true_hz.0) * density(r.true_hz.0))
                    .sum()
            })
            .unwrap_or(0.0);
        folded / (direct + folded)
    }

    /// Chance that a family with its fundamental seen at `nu` is folded as a whole.
    pub fn family_folded(&self, nu: f64) -> f64 {
        self.share(nu, |f| {
            1.0 / (f * (1.0 + (SLOWEST_HZ / f).powi(2)) * (1.0 + f / FASTEST_HZ))
        })
    }

    /// Chance that an unlisted tone at `nu` is folded.
    pub fn folded(&self, nu: f64) -> f64 {
        let half = self.scene.chain.file_rate_hz() / 2.0;
        let low = LOWEST * half;
        let stray = self.share(nu, |f| {
            if f <= half {
                let spread = 1.0 / ((f + low) * ((half + low) / low).ln());
                (EVEN / half + (1.0 - EVEN) * spread) * LOWEST.recip().ln()
            } else if f <= HIGHEST * half {
                1.0 / f
            } else {
                0.0
            }
        });
        let weight = STRAYS / STRAYS.max(self.count);
        weight * stray + (1.0 - weight) * self.family_folded(nu)
    }
}
