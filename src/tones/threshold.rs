//! How far above its floor a bin must stand.
//!
//! A bin's power is a gamma variate of shape κ; its floor is an estimate worth n
//! such bins. Their ratio follows the F distribution with 2κ and 2nκ degrees of
//! freedom, so the chance that noise exceeds t is the regularised incomplete
//! beta function I_x(nκ, κ) at x = n/(n + t).

use statrs::function::beta::beta_reg;

/// Chance that noise of shape `shape` over a floor worth `cells` bins exceeds
/// `ratio`. Ranges: shape > 0, cells > 0, ratio ≥ 0.
pub fn exceedance(shape: f64, cells: f64, ratio: f64) -> f64 {
    if ratio <= 0.0 {
        return 1.0;
    }
    beta_reg(cells * shape, shape, cells / (cells + ratio))
}

/// The ratio that noise exceeds with chance `pfa`, 0 < pfa < 1.
pub fn ratio(shape: f64, cells: f64, pfa: f64) -> f64 {
    let (mut lo, mut hi) = (1e-6f64.ln(), 1e9f64.ln());
    for _ in 0..70 {
        let mid = 0.5 * (lo + hi);
        if exceedance(shape, cells, mid.exp()) > pfa {
            lo = mid;
        } else {
            hi = mid;
        }
    }
    (0.5 * (lo + hi)).exp()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn closed_form_of_a_single_bin() {
        // κ = 1: I_x(n, 1) = x^n, so t = n(pfa^(−1/n) − 1).
        for (n, pfa) in [(16.0, 1e-8f64), (46.0, 1e-6), (200.0, 1e-3)] {
            let expected = n * (pfa.powf(-1.0 / n) - 1.0);
            assert!((ratio(1.0, n, pfa) / expected - 1.0).abs() < 1e-9);
        }
    }

    #[test]
    fn many_averages_over_a_sure_floor_are_normal() {
        // 4.753 standard deviations leave 1e-6 (normal table); the gamma's
        // skewness adds (z² − 1)/3 · 1/κ to first order.
        let kappa: f64 = 1e4;
        let z: f64 = 4.753;
        let expected = 1.0 + z / kappa.sqrt() + (z * z - 1.0) / 3.0 / kappa;
        assert!((ratio(kappa, 1e4, 1e-6) - expected).abs() < 1e-4);
    }
}
