//! Magnitude responses of analog low-pass filters.
//!
//! Every family has `|H(Ω)|² = 1/(1 + z(Ω))` with `Ω = f/corner`, so the gain is
//! worked out from `ln z`, which neither overflows far above the corner nor loses
//! digits far below it. Formulas: A. I. Zverev, "Handbook of Filter Synthesis",
//! Wiley 1967, and the standard textbooks (from memory); checked against an
//! independent implementation in the tests.

use super::elliptic::EllipticRational;
use super::{AntiAlias, FLOOR_DB, Family};
use crate::units::TrueHz;
use std::f64::consts::{LN_2, LN_10};

/// Highest order of a described filter.
pub const MAX_ORDER: u32 = 20;

/// What makes a description no filter.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum FilterError {
    /// Order 0 or above [`MAX_ORDER`].
    #[error("a filter of order {order}: give an order from 1 to {MAX_ORDER}")]
    Order {
        /// The order given.
        order: u32,
    },
    /// The corner is zero, negative or not finite.
    #[error("a filter with its corner at {corner_hz} Hz: give a corner above 0 Hz")]
    Corner {
        /// The corner given.
        corner_hz: f64,
    },
    /// A ripple or attenuation outside what is meaningful.
    #[error("{key} = {value_db} dB: give a number above 0 and up to {limit_db} dB")]
    Decibels {
        /// `ripple_db` or `stop_db`.
        key: &'static str,
        /// The number given.
        value_db: f64,
        /// The most that is accepted.
        limit_db: f64,
    },
    /// An elliptic filter that ripples more than it stops.
    #[error(
        "ripple_db = {ripple_db} is not below stop_db = {stop_db}: the stop band must lie lower than the pass band's ripple"
    )]
    RippleAboveStop {
        /// Pass-band ripple.
        ripple_db: f64,
        /// Stop-band attenuation.
        stop_db: f64,
    },
}

/// An anti-alias filter worked out, ready for many frequencies.
#[derive(Debug, Clone, PartialEq)]
pub struct Prototype {
    corner_hz: f64,
    shape: Shape,
}

#[derive(Debug, Clone, PartialEq)]
enum Shape {
    /// `z = Ω^(2n)`.
    Butterworth { order: f64 },
    /// `z = ε²·T_n(Ω)²`, `ε² = 10^(ripple/10) − 1`.
    Chebyshev1 { order: f64, ln_epsilon2: f64 },
    /// `z = (10^(stop/10) − 1)/T_n(1/Ω)²`.
    Chebyshev2 { order: f64, ln_stop: f64 },
    /// `z = ε²·R_n(Ω)²`, `ε²` as for Chebyshev I.
    Elliptic {
        rational: EllipticRational,
        ln_epsilon2: f64,
    },
    /// `1 + z = Σ c_k·(Ω·ω0)^(2k)`, all `c_k > 0`, `c_0 = 1`.
    Bessel {
        /// `c_1, c_2, …`.
        coefficients: Vec<f64>,
        /// Where `1 + z = 2`.
        omega0: f64,
    },
}

impl Prototype {
    /// Works a description out.
    ///
    /// # Errors
    /// An order, corner, ripple or attenuation that makes no filter.
    pub fn new(filter: &AntiAlias) -> Result<Self, FilterError> {
        let AntiAlias {
            family,
            order,
            corner_hz,
        } = *filter;
        if !(1..=MAX_ORDER).contains(&order) {
            return Err(FilterError::Order { order });
        }
        if !(corner_hz.is_finite() && corner_hz > 0.0) {
            return Err(FilterError::Corner { corner_hz });
        }
        let n = f64::from(order);
        let shape = match family {
            Family::Butterworth => Shape::Butterworth { order: n },
            Family::Chebyshev1 { ripple_db } => Shape::Chebyshev1 {
                order: n,
                ln_epsilon2: ln_excess("ripple_db", ripple_db, 20.0)?,
            },
            Family::Chebyshev2 { stop_db } => Shape::Chebyshev2 {
                order: n,
                ln_stop: ln_excess("stop_db", stop_db, 200.0)?,
            },
            Family::Elliptic { ripple_db, stop_db } => {
                let ln_epsilon2 = ln_excess("ripple_db", ripple_db, 20.0)?;
                let ln_stop = ln_excess("stop_db", stop_db, 200.0)?;
                if ripple_db >= stop_db {
                    return Err(FilterError::RippleAboveStop { ripple_db, stop_db });
                }
                let k1 = (0.5 * (ln_epsilon2 - ln_stop)).exp();
                Shape::Elliptic {
                    rational: EllipticRational::new(order, k1),
                    ln_epsilon2,
                }
            }
            Family::Bessel => {
                let coefficients = bessel_coefficients(order);
                let omega0 = half_power(&coefficients);
                Shape::Bessel {
                    coefficients,
                    omega0,
                }
            }
        };
        Ok(Prototype { corner_hz, shape })
    }

    /// Magnitude at `f`, dB, from [`FLOOR_DB`] to 0. A negative `f` stands for its
    /// magnitude.
    pub fn magnitude_db(&self, f: TrueHz) -> f64 {
        let omega = f.0.abs() / self.corner_hz;
        let attenuation = match &self.shape {
            Shape::Butterworth { order } => softplus(2.0 * order * omega.ln()),
            Shape::Chebyshev1 { order, ln_epsilon2 } => {
                softplus(ln_epsilon2 + ln_chebyshev_square(*order, omega))
            }
            Shape::Chebyshev2 { order, ln_stop } => {
                softplus(ln_stop - ln_chebyshev_square(*order, 1.0 / omega))
            }
            Shape::Elliptic {
                rational,
                ln_epsilon2,
            } => softplus(ln_epsilon2 + rational.ln_square(omega)),
            Shape::Bessel {
                coefficients,
                omega0,
            } => bessel_excess(coefficients, omega * omega0).ln_1p(),
        };
        // 0 − x, not −x: no minus zero in the tables.
        (0.0 - 10.0 / LN_10 * attenuation).max(FLOOR_DB)
    }
}

/// `ln(10^(db/10) − 1)`.
fn ln_excess(key: &'static str, value_db: f64, limit_db: f64) -> Result<f64, FilterError> {
    if !(value_db > 0.0 && value_db <= limit_db) {
        return Err(FilterError::Decibels {
            key,
            value_db,
            limit_db,
        });
    }
    Ok((value_db * LN_10 / 10.0).exp_m1().ln())
}

/// `ln(1 + e^x)`.
fn softplus(x: f64) -> f64 {
    if x > 0.0 {
        x + (-x).exp().ln_1p()
    } else {
        x.exp().ln_1p()
    }
}

/// `ln T_n(x)²` for `x ≥ 0`, −∞ at a zero.
fn ln_chebyshev_square(n: f64, x: f64) -> f64 {
    if x <= 1.0 {
        return 2.0 * (n * x.acos()).cos().abs().ln();
    }
    let y = n * x.acosh();
    2.0 * (y - LN_2 + (-2.0 * y).exp().ln_1p())
}

/// `c_1 … c_n` of `|θ_n(jω)/θ_n(0)|² = Σ c_k·ω^(2k)` for the reverse Bessel
/// polynomial `θ_n`.
///
/// The squared modulus of the spherical Bessel functions (Abramowitz & Stegun
/// 10.1.27, from memory) gives `c_k ∝ (2n−k)!·(2n−2k)!·4^k/(k!·((n−k)!)²)`, hence
/// the ratio of neighbours below. All are positive: nothing cancels.
fn bessel_coefficients(order: u32) -> Vec<f64> {
    let n = f64::from(order);
    let mut c = 1.0;
    (0..order)
        .map(|k| {
            let k = f64::from(k);
            c *= 2.0 * (n - k) / ((2.0 * n - k) * (k + 1.0) * (2.0 * n - 2.0 * k - 1.0));
            c
        })
        .collect()
}

/// `Σ_{k≥1} c_k·ω^(2k)` by Horner's rule.
fn bessel_excess(coefficients: &[f64], omega: f64) -> f64 {
    let square = omega * omega;
    coefficients
        .iter()
        .rev()
        .fold(0.0, |sum, c| (sum + c) * square)
}

/// Where the sum is 1, the −3 dB point, by bisection: it grows with `ω`, and from
/// 1 (first order) with the order to below 6.
fn half_power(coefficients: &[f64]) -> f64 {
    let (mut low, mut high) = (0.5, 8.0);
    for _ in 0..60 {
        let middle = 0.5 * (low + high);
        if bessel_excess(coefficients, middle) < 1.0 {
            low = middle;
        } else {
            high = middle;
        }
    }
    0.5 * (low + high)
}
