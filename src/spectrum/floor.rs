//! The noise floor per bin, by medians over frequency.
//!
//! A tone must not lift its own floor, a slope or a step must not make tones. So
//! the floor is found in two stages: a trend through medians of bands that widen
//! with frequency (which takes out pink, brown and the like), then medians of
//! the flattened spectrum in a window on either side of the bin. Where the two
//! sides differ by more than chance allows the greater one rules: the foot of a
//! step is not a line.

use statrs::function::gamma::gamma_ur;

/// Bins in the window on either side, and the distance between windows.
const WINDOW: usize = 128;
const STRIDE: usize = 16;
/// Bins next to the tested one that are left out of the windows.
const GUARD: usize = 3;

/// A noise floor with the worth of its estimate.
#[derive(Debug, Clone)]
pub struct Floor {
    /// Expected noise power per bin, same unit and length as the input.
    pub level: Vec<f32>,
    /// Number of independent bins whose mean would be as certain.
    pub cells: f64,
}

impl Floor {
    /// Lifts the floor to at least `least`.
    pub fn raise(&mut self, least: f32) {
        for level in &mut self.level {
            *level = level.max(least);
        }
    }
}

/// Median of a gamma variate of shape `shape` and mean 1.
fn median_of_unit_gamma(shape: f64) -> f64 {
    let (mut lo, mut hi) = (0.0, 2.0);
    for _ in 0..60 {
        let mid = 0.5 * (lo + hi);
        if gamma_ur(shape, shape * mid) > 0.5 {
            lo = mid;
        } else {
            hi = mid;
        }
    }
    0.5 * (lo + hi)
}

fn median(values: &mut [f32]) -> f32 {
    let mid = values.len() / 2;
    *values.select_nth_unstable_by(mid, f32::total_cmp).1
}

/// Estimates the floor under `power`.
///
/// `shape` is half the degrees of freedom of each bin on Gaussian noise (1 for
/// one unsmoothed transform, about the number of averages otherwise).
/// `independent` is the fraction of bins that are worth an independent one (1
/// for a rectangular window, less where neighbours overlap). `from_zero` says
/// that the first bin is at 0 Hz, so that a trend along the whole axis can be
/// taken out first.
pub fn estimate(power: &[f32], shape: f64, independent: f64, from_zero: bool) -> Floor {
    let n = power.len();
    let bias = median_of_unit_gamma(shape) as f32;
    let trend = if from_zero { trend(power) } else { None };
    let flat: Vec<f32> = match &trend {
        Some(t) => power.iter().zip(t).map(|(p, t)| p / t).collect(),
        None => power.to_vec(),
    };
    let window = WINDOW.min((n / 4).max(1));
    let starts = if n >= window {
        (n - window) / STRIDE + 1
    } else {
        0
    };
    let mut scratch = vec![0.0f32; window];
    let medians: Vec<f32> = (0..starts)
        .map(|s| {
            scratch.copy_from_slice(&flat[s * STRIDE..s * STRIDE + window]);
            median(&mut scratch)
        })
        .collect();
    // Relative variance of the median of n gamma variates: π/(2nκ) for large κ,
    // 1/(n·ln²2) = 2.08/n for κ = 1.
    let relative_variance =
        (1.571 / shape + 0.51 / (shape * shape)) / (window as f64 * independent);
    let chance = 3.5 * (2.0 * relative_variance).sqrt();
    let level = (0..n)
        .map(|k| {
            let left = k
                .checked_sub(window + GUARD)
                .map(|s| medians[(s / STRIDE).min(starts.saturating_sub(1))]);
            let right = medians.get((k + GUARD).div_ceil(STRIDE)).copied();
            let flat_level = match (left, right) {
                (Some(l), Some(r)) => {
                    if f64::from((l / r).ln().abs()) > chance {
                        l.max(r)
                    } else {
                        (l * r).sqrt()
                    }
                }
                (Some(m), None) | (None, Some(m)) => m,
                (None, None) => medians.first().copied().unwrap_or(0.0),
            };
            // Exact zeros (digital silence) must not divide.
            (flat_level / bias * trend.as_ref().map_or(1.0, |t| t[k])).max(f32::MIN_POSITIVE)
        })
        .collect();
    Floor {
        level,
        // both sides; a bin next to an edge or a step has half of it
        cells: 2.0 / (relative_variance * shape),
    }
}

/// Piecewise power law through medians of bands about half an octave wide;
/// `None` where the spectrum is too short or silent for one.
fn trend(power: &[f32]) -> Option<Vec<f32>> {
    let n = power.len();
    let mut points: Vec<(f64, f64)> = Vec::new();
    let mut scratch = Vec::new();
    let mut k = 1;
    while k < n {
        let width = (k / 2).max(16);
        let end = if k + 2 * width > n { n } else { k + width };
        scratch.clear();
        scratch.extend_from_slice(&power[k..end]);
        let m = f64::from(median(&mut scratch));
        if m <= 0.0 {
            return None;
        }
        points.push(((0.5 * (k + end) as f64).ln(), m.ln()));
        k = end;
    }
    if points.len() < 2 {
        return None;
    }
    let slope = |i: usize| {
        let ((x0, y0), (x1, y1)) = (points[i], points[i + 1]);
        ((y1 - y0) / (x1 - x0), x0, y0)
    };
    let last = points.len() - 2;
    let mut segment = 0;
    Some(
        (0..n)
            .map(|k| {
                let x = (k.max(1) as f64).ln();
                while segment < last && x > points[segment + 1].0 {
                    segment += 1;
                }
                let (s, x0, y0) = slope(segment);
                // Beyond the outer points only believable noise slopes.
                let outside = x < x0 || x > points[last + 1].0;
                let s = if outside { s.clamp(-4.0, 4.0) } else { s };
                (y0 + s * (x - x0)).exp() as f32
            })
            .collect(),
    )
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::{RngExt, SeedableRng, rngs::StdRng};

    fn exponential(rng: &mut StdRng) -> f32 {
        -(rng.random::<f32>().max(1e-30)).ln()
    }

    #[test]
    fn medians_of_known_distributions() {
        assert!((median_of_unit_gamma(1.0) - std::f64::consts::LN_2).abs() < 1e-9);
        assert!((median_of_unit_gamma(1e4) - 1.0).abs() < 1e-4);
    }

    #[test]
    fn floor_follows_slopes_and_ignores_lines() {
        let mut rng = StdRng::seed_from_u64(11);
        for exponent in [0.0, -1.0, -2.0, 2.0] {
            let law = |k: usize| (k.max(1) as f32).powf(exponent);
            let mut p: Vec<f32> = (0..20_000)
                .map(|k| law(k) * exponential(&mut rng))
                .collect();
            for k in (500..20_000).step_by(700) {
                p[k] *= 1e6;
            }
            let floor = estimate(&p, 1.0, 1.0, true);
            // Below a few hundred bins the trend itself is uncertain, and both sides
            // of a window see much of its slope.
            let worst = (200..20_000)
                .map(|k| (floor.level[k] / law(k)).ln().abs())
                .fold(0.0, f32::max);
            // four standard deviations of one side's median
            assert!(
                worst < 4.5 * (2.08f32 / WINDOW as f32).sqrt(),
                "exponent {exponent}: {worst}"
            );
        }
    }

    #[test]
    fn the_foot_of_a_step_keeps_the_high_floor() {
        let mut rng = StdRng::seed_from_u64(12);
        let p: Vec<f32> = (0..8_000)
            .map(|k| exponential(&mut rng) * if k < 3_000 { 1.0 } else { 1e4 })
            .collect();
        let floor = estimate(&p, 1.0, 1.0, true);
        for k in 3_000..3_100 {
            assert!(floor.level[k] > 0.4e4, "bin {k}: {}", floor.level[k]);
        }
    }
}
