//! Wander as evidence: a line wanders by its multiplier times its latent's wander.
//!
//! A latent's relative wander is unknown, so it is one more thing a place can
//! differ in: none, or one of a ladder of values. Each way the measured wander of
//! a tone is compared, on a logarithmic scale that goes linear below what can be
//! resolved, with what the line would show. A latent locked to a crystal has no
//! ladder: a tone that wanders is not its line.

use super::scene::Measured;
use std::sync::LazyLock;

/// Standard deviation of a measured wander's logarithm.
const SPREAD: f64 = 0.3;
/// Share of tones whose wander says nothing (disturbed, badly measured).
const ODD: f64 = 0.04;
/// Of tones that nothing listed made, those that are steady.
const STEADY: f64 = 0.6;
/// Range of the logarithm over which the wander of the others is spread.
const RANGE: f64 = 7.0;

/// Relative wander of latents: the ladder.
const LOWEST: f64 = 3e-7;
const STEP: f64 = 1.6;
const RUNGS: i32 = 26;
/// Prior probability that a free latent is steady within what can be resolved.
const FREE_STEADY: f64 = 0.35;

fn normal(x: f64, sd: f64) -> f64 {
    (-0.5 * (x / sd).powi(2)).exp() / (sd * (2.0 * std::f64::consts::PI).sqrt())
}

/// Relative wanders a latent may have, with their prior probabilities.
pub(super) fn ladder(quartz: bool) -> Vec<(f64, f64)> {
    if quartz {
        return vec![(0.0, 1.0)];
    }
    let each = (1.0 - FREE_STEADY) / f64::from(RUNGS);
    std::iter::once((0.0, FREE_STEADY))
        .chain((0..RUNGS).map(|i| (LOWEST * STEP.powi(i), each)))
        .collect()
}

/// Density of a tone's wander if its line wanders by `line_hz`, over that of a tone
/// that nothing listed made.
pub(super) fn ratio(tone: &Measured, line_hz: f64) -> f64 {
    let floor = tone.wander_floor_hz;
    ratio_of(
        (tone.wander_hz.hypot(floor) / floor).ln(),
        (line_hz.hypot(floor) / floor).ln(),
    )
}

fn ratio_of(measured: f64, expected: f64) -> f64 {
    let other = STEADY * normal(measured, SPREAD) + (1.0 - STEADY) / RANGE;
    (1.0 - ODD) * normal(measured - expected, SPREAD) / other + ODD
}

/// A way the latents could wander: log prior and, per line given, the ratio.
#[derive(Debug, Clone)]
pub(super) struct Variant {
    pub ln_prior: f64,
    pub ratios: Vec<f64>,
}

/// Variants worth telling apart at a place; `weights` says how much each entry
/// counts there. `entries` are `(tone, wander per unit of each latent's relative
/// wander)`.
pub(super) fn variants(
    entries: &[(&Measured, [f64; 2])],
    weights: &[f64],
    quartz: [bool; 2],
    two: bool,
) -> Vec<Variant> {
    const KEEP: usize = 4;
    const DEPTH: f64 = 7.0;
    let first = ladder(quartz[0]);
    let second = if two {
        ladder(quartz[1])
    } else {
        vec![(0.0, 1.0)]
    };
    let mut scored: Vec<(f64, Variant)> = Vec::new();
    for &(w0, p0) in &first {
        for &(w1, p1) in &second {
            let ratios: Vec<f64> = entries
                .iter()
                .map(|(tone, scale)| ratio(tone, (scale[0] * w0).hypot(scale[1] * w1)))
                .collect();
            let ln_prior = (p0 * p1).ln();
            let score = ln_prior
                + ratios
                    .iter()
                    .zip(weights)
                    .map(|(r, w)| w * r.ln())
                    .sum::<f64>();
            scored.push((score, Variant { ln_prior, ratios }));
        }
    }
    scored.sort_by(|a, b| b.0.total_cmp(&a.0));
    let best = scored.first().map_or(0.0, |s| s.0);
    let mut kept: Vec<(f64, Variant)> = Vec::new();
    for (score, variant) in scored {
        if score < best - DEPTH {
            break;
        }
        // One that says the same joins the one it repeats.
        let same = kept.iter().position(|(_, k)| {
            k.ratios
                .iter()
                .zip(&variant.ratios)
                .zip(weights)
                .map(|((a, b), w)| w * (a / b).ln().abs())
                .sum::<f64>()
                < 0.5
        });
        match same {
            Some(at) => {
                if let Some((_, k)) = kept.get_mut(at) {
                    k.ln_prior = (k.ln_prior.exp() + variant.ln_prior.exp()).ln();
                }
            }
            None if kept.len() < KEEP => kept.push((score, variant)),
            None => {}
        }
    }
    kept.into_iter().map(|(_, v)| v).collect()
}

/// Mean over the ladder of [`ratio`]: where nothing is known of the latents.
///
/// Tabulated over the logarithms of the tone's wander and of the line's scale, both
/// over what can be resolved.
#[derive(Debug, Clone)]
pub(super) struct MeanRatios {
    free: &'static [f64],
}

const MEASURED_STEP: f64 = 0.2;
const MEASURED_STEPS: usize = 45;
const SCALE_STEP: f64 = 0.5;
const SCALE_FROM: f64 = -4.0;
const SCALE_STEPS: usize = 64;

/// The same for every recording, and costs as much as judging a short one.
static FREE: LazyLock<Vec<f64>> = LazyLock::new(|| {
    let ladder = ladder(false);
    let mut free = Vec::with_capacity(MEASURED_STEPS * SCALE_STEPS);
    for m in 0..MEASURED_STEPS {
        let measured = m as f64 * MEASURED_STEP;
        for s in 0..SCALE_STEPS {
            let scale = (SCALE_FROM + s as f64 * SCALE_STEP).exp();
            free.push(
                ladder
                    .iter()
                    .map(|(w, p)| p * ratio_of(measured, (scale * w).hypot(1.0).ln()))
                    .sum(),
            );
        }
    }
    free
});

impl MeanRatios {
    pub fn new() -> MeanRatios {
        MeanRatios { free: &FREE }
    }

    /// `scale`: wander of the line per unit of each latent's relative wander, Hz.
    pub fn get(&self, tone: &Measured, scale: [f64; 2], quartz: [bool; 2]) -> f64 {
        // With two latents the one that moves the line more decides.
        let axis = usize::from(scale[1].abs() > scale[0].abs());
        if quartz[axis] {
            return ratio(tone, 0.0);
        }
        let floor = tone.wander_floor_hz;
        let measured = (tone.wander_hz.hypot(floor) / floor).ln();
        let m = (measured / MEASURED_STEP).round() as usize;
        let scale = (scale[axis].abs() / floor).max(1e-12).ln();
        let s = ((scale - SCALE_FROM) / SCALE_STEP).round().max(0.0) as usize;
        let slot = m.min(MEASURED_STEPS - 1) * SCALE_STEPS + s.min(SCALE_STEPS - 1);
        self.free.get(slot).copied().unwrap_or(1.0)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn tone(wander_hz: f64) -> Measured {
        Measured {
            nu: 100.0,
            var: 1e-6,
            snr_db: 40.0,
            level_dbfs: Some(-40.0),
            wander_hz,
            wander_floor_hz: 0.005,
        }
    }

    #[test]
    fn a_wandering_tone_is_not_a_crystals() {
        let wandering = MeanRatios::new().get(&tone(1.0), [1e5, 0.0], [true, false]);
        let steady = MeanRatios::new().get(&tone(0.0), [1e5, 0.0], [true, false]);
        assert!(wandering < 0.1 && steady > 1.0, "{wandering} {steady}");
    }

    /// Tones that wander in proportion to their orders are worth more together than
    /// tones that do not.
    #[test]
    fn wander_scales_with_the_order() {
        let value = |wanders: [f64; 3]| {
            let tones = wanders.map(tone);
            let entries: Vec<(&Measured, [f64; 2])> = tones
                .iter()
                .zip([1.0, 2.0, 5.0])
                .map(|(t, a)| (t, [50.0 * a, 0.0]))
                .collect();
            variants(&entries, &[1.0; 3], [false; 2], false)
                .iter()
                .map(|v| v.ln_prior.exp() * v.ratios.iter().product::<f64>())
                .sum::<f64>()
        };
        assert!(value([0.1, 0.2, 0.5]) > 100.0 * value([0.3, 0.3, 0.3]));
    }
}
