//! Tones too weak for any one channel, found in all channels together.
//!
//! Each channel's power is scaled by its own noise and added. On independent noise the
//! sum over C channels is a gamma variate of shape C; but channels that hear the same
//! noise add nothing. With λ the largest eigenvalue of the channels' coherence matrix
//! (1 for independent noise, C for C copies of one) the sum exceeds a threshold no
//! more often than C/λ independent channels', so that is what it is taken for. λ is
//! estimated block by block along the frequency axis: noise is shared at some
//! frequencies and not at others.

use super::fits::Fit;
use super::kernel::dirichlet;
use super::peaks::LOWEST;
use super::refine::NOISE_REACH;
use super::statistic::Fine;
use super::threshold;
use crate::spectrum::Band;
use crate::spectrum::fft::Complex64;

/// Cells over which coherence is estimated.
const BLOCK: usize = 2048;
/// Rounds of power iteration for the largest eigenvalue.
const ROUNDS: usize = 24;
/// Cells on either side that enter a fit.
const REACH: i64 = 16;
/// Where the surroundings stand this far above the floor nothing is looked for: the
/// pedestal of a strong tone, or a hump.
const RAISED: f64 = 1.5;
/// Cells that the noise estimate around a fitted tone is worth, see
/// [`super::peaks::Level`].
const WORTH: f64 = 93.0;

/// A steady tone common to several channels.
#[derive(Debug, Clone)]
pub struct Joint {
    /// Frequency, bins, and its standard deviation.
    pub bin: f64,
    /// See `bin`.
    pub bin_sd: f64,
    /// Per channel: |c|·samples and noise power per cell.
    pub channels: Vec<(f64, f64)>,
}

/// Largest eigenvalue of the coherence matrix of `n` vectors of `c` channels, each of
/// mean power 1, freed of what sampling adds to it (Baik & Silverstein 2006: a spike ℓ
/// is seen at ℓ(1 + γ/(ℓ − 1)), γ = c/n; without one the edge is at (1 + √γ)²).
fn largest_eigenvalue(vectors: &[Vec<Complex64>], c: usize) -> f64 {
    let n = vectors.len();
    if n <= c || c < 2 {
        return c as f64;
    }
    // An uneven start is orthogonal to no likely eigenvector.
    let mut v: Vec<Complex64> = (0..c)
        .map(|i| Complex64::from_polar(1.0 + 0.1 * i as f64 / c as f64, 0.7 * i as f64))
        .collect();
    let mut lambda = 1.0;
    for _ in 0..ROUNDS {
        let norm = v.iter().map(|z| z.norm_sqr()).sum::<f64>().sqrt();
        v.iter_mut().for_each(|z| *z /= norm.max(1e-300));
        let mut next = vec![Complex64::default(); c];
        for x in vectors {
            let inner: Complex64 = x.iter().zip(&v).map(|(x, v)| x.conj() * v).sum();
            for (out, x) in next.iter_mut().zip(x) {
                *out += x * inner;
            }
        }
        lambda = next.iter().map(|z| z.norm_sqr()).sum::<f64>().sqrt() / n as f64;
        v = next;
    }
    let mean: f64 = vectors
        .iter()
        .flat_map(|x| x.iter().map(|z| z.norm_sqr()))
        .sum::<f64>()
        / (n * c) as f64;
    let lambda = lambda / mean.max(1e-300);
    let gamma = c as f64 / n as f64;
    if lambda <= (1.0 + gamma.sqrt()).powi(2) {
        return 1.0;
    }
    let b = 1.0 + lambda - gamma;
    let root = (b * b - 4.0 * lambda).max(0.0).sqrt();
    (0.5 * (b + root)).clamp(1.0, c as f64)
}

/// Finds tones in `bands`, one per channel over the same bins, out of which each
/// channel's own tones are taken; `known` tones are not found again.
///
/// `false_alarms` is the number expected in bands of noise only.
pub fn together(bands: &[&Band], known: &[&Fit], false_alarms: f64) -> Vec<Joint> {
    let c = bands.len();
    let Some(&one) = bands.first() else {
        return Vec::new();
    };
    let n = one.bins.len();
    if c < 2 || bands.iter().any(|b| b.bins.len() != n) {
        return Vec::new();
    }
    let fines: Vec<Fine> = bands.iter().map(|b| Fine::new(b)).collect();
    let sum = |of: &dyn Fn(&Fine) -> &Vec<f32>, i: usize| -> f64 {
        fines
            .iter()
            .map(|f| f64::from(of(f)[i] / f.plain_floor.level[i]))
            .sum()
    };
    let plain: Vec<f64> = (0..n).map(|i| sum(&|f| &f.plain, i)).collect();
    // As for one channel (see `Level::fitted`), for the highest point of a continuous
    // spectrum: √(πT/3) times as often, T about 16 and more for more channels.
    let crossings = (std::f64::consts::PI * (16.0 + 2.0 * c as f64) / 3.0).sqrt();
    let per_cell = (false_alarms / n as f64 / crossings).min(0.1);
    let lowest = LOWEST.saturating_sub(one.first_bin);
    let to_end = one.grid / 2 - one.first_bin.min(one.grid / 2);
    let highest = n.min(to_end.saturating_sub(2));
    let mut candidates: Vec<(f64, usize, f64, f64)> = Vec::new();
    for block in 0..n.div_ceil(BLOCK) {
        let cells = block * BLOCK..((block + 1) * BLOCK).min(n);
        // The last block reaches back for a full one's worth.
        let from = cells.end.saturating_sub(BLOCK);
        let quiet: Vec<Vec<Complex64>> = (from..cells.end)
            .filter(|&i| plain[i] < 8.0 * c as f64)
            .map(|i| {
                bands
                    .iter()
                    .zip(&fines)
                    .map(|(b, f)| {
                        let z = b.bins[i] / f.plain_floor.level[i].sqrt();
                        Complex64::new(z.re.into(), z.im.into())
                    })
                    .collect()
            })
            .collect();
        let lambda = largest_eigenvalue(&quiet, c);
        let needed = c as f64 * threshold::ratio(c as f64 / lambda, WORTH, per_cell);
        let (from, to) = (cells.start.max(lowest), cells.end.min(highest));
        for (i, &here) in plain.iter().enumerate().take(to).skip(from) {
            let power = here.max(sum(&|f| &f.between, i));
            if power > 0.8 * needed {
                candidates.push((power, i, needed, lambda));
            }
        }
    }
    candidates.sort_by(|a, b| b.0.total_cmp(&a.0).then(a.1.cmp(&b.1)));
    let mut found: Vec<Joint> = Vec::new();
    for (_, i, needed, lambda) in candidates {
        let bin = (one.first_bin + i) as f64;
        let taken = found.iter().any(|j| (j.bin - bin).abs() < 4.0)
            || known
                .iter()
                .any(|f| (f.bin - bin).abs() < 4.0 + 3.0 * f.wander);
        if taken || surroundings(&plain, i) > RAISED * c as f64 {
            continue;
        }
        let floors: Vec<f64> = fines
            .iter()
            .map(|f| f64::from(f.plain_floor.level[i]))
            .collect();
        let joint = fit(bands, &floors, bin, lambda);
        let snr: f64 = joint.channels.iter().map(|(s, noise)| s * s / noise).sum();
        if snr > needed {
            found.push(joint);
        }
    }
    found
}

/// Mean of the cells around `i`.
fn surroundings(power: &[f64], i: usize) -> f64 {
    let around: Vec<f64> = (i.saturating_sub(24)..(i + 25).min(power.len()))
        .filter(|&k| k.abs_diff(i) > 3)
        .map(|k| power[k])
        .collect();
    around.iter().sum::<f64>() / around.len().max(1) as f64
}

/// |c|·samples of a tone at `bin`, by its matched filter.
pub fn strength(band: &Band, bin: f64) -> f64 {
    let centre = bin.round() as i64;
    let (mut up, mut down) = (Complex64::default(), 0.0);
    for k in centre - REACH..=centre + REACH {
        let Some(z) = band.get(k) else { continue };
        let (d, _) = dirichlet(k as f64 - bin, band.samples, band.grid);
        up += Complex64::new(z.re.into(), z.im.into()) * d.conj();
        down += d.norm_sqr();
    }
    up.norm() / f64::max(down, 1e-300) * band.samples as f64
}

/// Noise power per cell around `bin`, by the median.
pub fn noise(band: &Band, bin: f64) -> f64 {
    let centre = bin.round() as i64;
    let mut powers: Vec<f32> = (centre - NOISE_REACH..=centre + NOISE_REACH)
        .filter_map(|k| band.get(k))
        .map(|z| z.norm_sqr())
        .collect();
    let mid = powers.len() / 2;
    if powers.is_empty() {
        return f64::INFINITY;
    }
    let median = *powers.select_nth_unstable_by(mid, f32::total_cmp).1;
    (f64::from(median) / std::f64::consts::LN_2)
        .max(f64::from(band.least_noise))
        .max(f64::MIN_POSITIVE)
}

fn fit(bands: &[&Band], floors: &[f64], start: f64, lambda: f64) -> Joint {
    let snr = |bin: f64| -> f64 {
        bands
            .iter()
            .zip(floors)
            .map(|(b, noise)| strength(b, bin).powi(2) / noise)
            .sum()
    };
    // The peak lies within a cell of the highest one; coarse, then golden section.
    let best = (-4..=4)
        .map(|i| start + 0.25 * f64::from(i))
        .max_by(|a, b| snr(*a).total_cmp(&snr(*b)))
        .unwrap_or(start);
    let (mut low, mut high) = (best - 0.25, best + 0.25);
    for _ in 0..16 {
        let (a, b) = (high - 0.618 * (high - low), low + 0.618 * (high - low));
        if snr(a) > snr(b) {
            high = b;
        } else {
            low = a;
        }
    }
    let bin = 0.5 * (low + high);
    let channels: Vec<(f64, f64)> = bands
        .iter()
        .zip(floors)
        .map(|(b, &noise)| (strength(b, bin), noise))
        .collect();
    let total: f64 = channels.iter().map(|(s, noise)| s * s / noise).sum();
    // Cramér–Rao bound for the channels together, in cells: 6/((2π)²·SNR); what
    // channels share counts once, and each one's fitted SNR is one too high.
    let weak = total / (total - bands.len() as f64).max(0.5 * total);
    let cells = bands
        .first()
        .map_or(1.0, |b| b.samples as f64 / b.grid as f64);
    Joint {
        bin,
        bin_sd: weak * (6.0 * lambda / total).sqrt() / std::f64::consts::TAU / cells,
        channels,
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::{SeedableRng, rngs::StdRng};
    use rand_distr::{Distribution, StandardNormal};

    #[test]
    fn eigenvalues_of_known_mixtures() {
        let mut rng = StdRng::seed_from_u64(5);
        let mut draw = || {
            let h = std::f64::consts::FRAC_1_SQRT_2;
            let re: f64 = StandardNormal.sample(&mut rng);
            let im: f64 = StandardNormal.sample(&mut rng);
            Complex64::new(h * re, h * im)
        };
        // a share of common noise: eigenvalue 1 + (c − 1)·share
        for (c, share) in [(2usize, 0.0f64), (3, 0.0), (3, 0.5), (2, 1.0), (8, 0.3)] {
            let vectors: Vec<Vec<Complex64>> = (0..2048)
                .map(|_| {
                    let common = draw() * share.sqrt();
                    (0..c)
                        .map(|_| common + draw() * (1.0 - share).sqrt())
                        .collect()
                })
                .collect();
            let expected = 1.0 + (c as f64 - 1.0) * share;
            let got = largest_eigenvalue(&vectors, c);
            assert!((got / expected - 1.0).abs() < 0.08, "{c} {share}: {got}");
        }
    }
}
