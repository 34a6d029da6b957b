//! The elliptic rational function, with the Jacobi functions it needs.
//!
//! Definitions and identities as in chapters 19, 20 and 22 of the NIST Digital
//! Library of Mathematical Functions (from memory); `k` is the modulus, `k'` its
//! complement, `K` the quarter period, `q` the nome.

use std::f64::consts::PI;

/// Rounds of the arithmetic–geometric mean; it converges quadratically, so this is
/// ample for every modulus a double can hold.
const MAX_ROUNDS: usize = 40;

/// Terms of a theta series, enough for any nome below 0.9999.
const MAX_TERMS: i32 = 700;

/// `R_n(Ω)` for a given ratio of pass-band to stop-band ripple, `R_n(1) = 1`.
///
/// `R_n² ≤ 1` for `Ω ≤ 1` and `≥ 1/k1²` in the stop band.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct EllipticRational {
    odd: bool,
    /// Modulus, 1 over the start of the stop band.
    k: f64,
    /// Squares of the zeros above 0, with `ln(dn²/cn²)` that makes `R_n(1) = 1`.
    factors: Vec<(f64, f64)>,
}

impl EllipticRational {
    /// Of order `n ≥ 1` and discrimination `0 < k1 < 1`.
    ///
    /// The degree equation `n·K'/K(k) = K'/K(k1)` says that the nomes obey
    /// `q = q1^(1/n)`; the zeros are `x_i = cd((2i−1)K/n, k)`.
    pub(super) fn new(n: u32, k1: f64) -> Self {
        let k1_complement = ((1.0 - k1) * (1.0 + k1)).sqrt();
        let ln_q1 = -PI * agm(1.0, k1_complement) / agm(1.0, k1);
        let (k, k_complement) = moduli((ln_q1 / f64::from(n)).exp());
        let factors = (1..=n / 2)
            .map(|i| {
                // cd(u) = sn(K − u).
                let t = f64::from(n - 2 * i + 1) / f64::from(n);
                let (sn, cn, dn) = jacobi(t, k, k_complement);
                (sn * sn, 2.0 * (dn / cn).ln())
            })
            .collect();
        EllipticRational {
            odd: n % 2 == 1,
            k,
            factors,
        }
    }

    /// `ln R_n(Ω)²`, −∞ at a zero and +∞ at a pole.
    pub(super) fn ln_square(&self, omega: f64) -> f64 {
        // Beyond, the function is at its limit and Ω² would overflow.
        let omega = omega.min(1e100);
        let square = omega * omega;
        let from_zeros: f64 = self
            .factors
            .iter()
            .map(|&(zero, ln_scale)| {
                let pole_distance = 1.0 - self.k * self.k * zero * square;
                2.0 * ((square - zero).abs().ln() - pole_distance.abs().ln() + ln_scale)
            })
            .sum();
        if self.odd {
            from_zeros + square.ln()
        } else {
            from_zeros
        }
    }
}

/// Arithmetic–geometric mean of two positive numbers.
fn agm(mut a: f64, mut b: f64) -> f64 {
    for _ in 0..MAX_ROUNDS {
        if (a - b).abs() <= f64::EPSILON * a {
            break;
        }
        (a, b) = (0.5 * (a + b), (a * b).sqrt());
    }
    a
}

/// Modulus and complement of a nome, `k = (θ2/θ3)²`, `k' = (θ4/θ3)²`.
fn moduli(q: f64) -> (f64, f64) {
    let (mut theta2, mut theta3, mut theta4) = (0.0, 1.0, 1.0);
    for m in 0..MAX_TERMS {
        let term = q.powi(m * (m + 1));
        theta2 += 2.0 * term;
        let term = 2.0 * q.powi((m + 1) * (m + 1));
        theta3 += term;
        theta4 += if m % 2 == 0 { -term } else { term };
        if term < 1e-18 {
            break;
        }
    }
    let k = q.sqrt() * (theta2 / theta3).powi(2);
    (k.min(1.0), (theta4 / theta3).powi(2))
}

/// `sn`, `cn`, `dn` of `t·K` for `0 ≤ t ≤ 1`, by the descending Landen
/// transformation over the arithmetic–geometric mean.
fn jacobi(t: f64, k: f64, k_complement: f64) -> (f64, f64, f64) {
    let (mut a, mut b) = (1.0, k_complement);
    let mut ratios = Vec::new();
    for _ in 0..MAX_ROUNDS {
        let c = 0.5 * (a - b);
        (a, b) = (0.5 * (a + b), (a * b).sqrt());
        ratios.push(c / a);
        if c <= f64::EPSILON * a {
            break;
        }
    }
    // φ_N = 2^N·a_N·u with u = t·K and K = π/(2·a_N).
    let mut phi = 0.5 * PI * t * 2f64.powi(ratios.len() as i32);
    for ratio in ratios.iter().rev() {
        phi = 0.5 * (phi + (ratio * phi.sin()).asin());
    }
    let (sn, cn) = phi.sin_cos();
    // A sum of squares, so no digits are lost where dn is small.
    (sn, cn, k_complement.hypot(k * cn))
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Quarter-period values, exact for every modulus: sn = 1/√(1+k'),
    /// cn = √(k'/(1+k')), dn = √k' at K/2.
    #[test]
    fn half_the_quarter_period_is_known_exactly() {
        for k_complement in [0.999_f64, 0.7, 0.2, 1e-3, 1e-7] {
            let k = ((1.0 - k_complement) * (1.0 + k_complement)).sqrt();
            let (sn, cn, dn) = jacobi(0.5, k, k_complement);
            let expected = (
                1.0 / (1.0 + k_complement).sqrt(),
                (k_complement / (1.0 + k_complement)).sqrt(),
                k_complement.sqrt(),
            );
            // The arcsine's argument comes within about k' of 1, where it passes
            // rounding on multiplied by 1/√k'.
            let budget = 4.0 * f64::EPSILON / k_complement.sqrt();
            assert!((sn - expected.0).abs() < budget, "{k_complement}: {sn}");
            assert!((cn - expected.1).abs() < budget, "{k_complement}: {cn}");
            assert!((dn - expected.2).abs() < budget, "{k_complement}: {dn}");
        }
    }

    #[test]
    fn a_modulus_comes_back_from_its_nome() {
        for k in [1e-6_f64, 0.01, 0.5, 0.9, 0.999_999] {
            let complement = ((1.0 - k) * (1.0 + k)).sqrt();
            let q = (-PI * agm(1.0, complement) / agm(1.0, k)).exp();
            let (back, back_complement) = moduli(q);
            assert!((back / k - 1.0).abs() < 1e-13, "{k}: {back}");
            assert!(
                (back_complement - complement).abs() < 1e-13,
                "{k}: {back_complement}"
            );
        }
    }

    #[test]
    fn ripple_is_equal_and_the_stop_band_is_reached() {
        for (n, k1) in [(1, 0.1), (4, 0.01), (5, 1e-3), (12, 1e-5)] {
            let r = EllipticRational::new(n, k1);
            assert!(r.ln_square(1.0).abs() < 1e-9, "{n}");
            let sup_pass = (0..=4000)
                .map(|i| r.ln_square(f64::from(i) / 4000.0))
                .fold(f64::NEG_INFINITY, f64::max);
            assert!(sup_pass.abs() < 1e-9, "{n}: {sup_pass}");
            // R(1/(kΩ)) = 1/(k1·R(Ω)), so the stop band begins at 1/k with 1/k1².
            let edge = r.ln_square(1.0 / r.k);
            assert!((edge + 2.0 * k1.ln()).abs() < 1e-8, "{n}: {edge}");
            let inf_stop = (0..=4000)
                .map(|i| r.ln_square((1.0 + f64::from(i) / 200.0) / r.k))
                .fold(f64::INFINITY, f64::min);
            assert!((inf_stop + 2.0 * k1.ln()).abs() < 1e-8, "{n}: {inf_stop}");
        }
    }
}
