//! The recorder's clock error: the one `ε` that best reconciles every source with
//! its prior.
//!
//! A latent is seen at `θ/(1+ε)`. With `y` its fitted over its nominal value less 1,
//! `y = δ − ε` with the source's own deviation `δ ~ N(0, (sd/nominal)²)`: every
//! source that was found is a measurement `−y` of ε, as good as the source is known.

use super::hidden::Standing;
use super::prior::Normal;
use super::scene::Scene;
use super::solution::Solved;

/// Sources less certain than this say nothing about the clock.
const SURE: f64 = 0.99;

/// Standard deviation of ε before looking.
pub(super) fn prior_sd(scene: &Scene) -> f64 {
    let ppm = scene.site.recorder.assumed_clock_ppm();
    (ppm * 1e-6 / crate::units::U95).max(1e-12)
}

/// Posterior of ε, leaving out the latents for which `without` holds. Also how
/// many latents it rests on.
pub(super) fn posterior(
    scene: &Scene,
    solved: &[Solved],
    without: &dyn Fn(usize) -> bool,
) -> (Normal, usize) {
    let mut precision = prior_sd(scene).powi(-2);
    let mut sum = 0.0;
    let mut used = 0;
    for s in solved.iter().filter(|s| s.standing == Standing::Listed) {
        let present = s.value.absent.iter().map(|a| 1.0 - a).fold(0.0, f64::max);
        let Some(fit) = s.fit().filter(|_| present > SURE) else {
            continue;
        };
        for (&l, p) in s.cluster.latents.iter().zip(&fit) {
            let Some(latent) = scene.site.catalogue.latents.get(l) else {
                continue;
            };
            if without(l) || latent.nominal_hz <= 0.0 {
                continue;
            }
            let own = latent.sd_hz / latent.nominal_hz;
            let seen = p.sd / latent.nominal_hz;
            let weight = 1.0 / (own * own + seen * seen).max(1e-24);
            precision += weight;
            sum -= weight * (p.mean / latent.nominal_hz - 1.0);
            used += 1;
        }
    }
    let fitted = Normal {
        mean: sum / precision,
        sd: precision.sqrt().recip(),
    };
    (fitted, used)
}
