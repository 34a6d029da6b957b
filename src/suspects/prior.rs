//! What is known of a latent before looking.

use statrs::function::erf::erfc;

/// A normal distribution.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Normal {
    pub mean: f64,
    pub sd: f64,
}

/// Prior of a latent.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Prior {
    /// A listed one.
    Normal(Normal),
    /// The fundamental, as seen, of a family nobody listed: in part even over the
    /// logarithm, in part even over the band (a folded one can be anywhere).
    Anywhere { low: f64, high: f64 },
}

/// Standard deviations of a normal prior that are searched.
pub(super) const PRIOR_REACH: f64 = 4.5;
/// Part of the anonymous prior that is even over the band.
const EVEN: f64 = 0.4;

fn below(x: f64) -> f64 {
    0.5 * erfc(-x / std::f64::consts::SQRT_2)
}

impl Prior {
    /// `(low, high)` worth searching.
    pub fn range(&self) -> (f64, f64) {
        match *self {
            Prior::Normal(n) => (n.mean - PRIOR_REACH * n.sd, n.mean + PRIOR_REACH * n.sd),
            Prior::Anywhere { low, high } => (low, high),
        }
    }

    /// Mass between two points; in a tail without cancellation.
    pub fn mass(&self, from: f64, to: f64) -> f64 {
        match *self {
            Prior::Normal(n) => {
                let (l, h) = ((from - n.mean) / n.sd, (to - n.mean) / n.sd);
                if l > 0.0 {
                    below(-l) - below(-h)
                } else {
                    below(h) - below(l)
                }
            }
            Prior::Anywhere { low, high } => {
                let (l, h) = (from.clamp(low, high), to.clamp(low, high));
                EVEN * (h - l) / (high - low) + (1.0 - EVEN) * (h / l).ln() / (high / low).ln()
            }
        }
    }

    /// Density per Hz.
    pub fn density(&self, x: f64) -> f64 {
        match *self {
            Prior::Normal(n) => {
                let z = (x - n.mean) / n.sd;
                (-0.5 * z * z).exp() / (n.sd * (2.0 * std::f64::consts::PI).sqrt())
            }
            Prior::Anywhere { low, high } => {
                if x < low || x > high {
                    0.0
                } else {
                    EVEN / (high - low) + (1.0 - EVEN) / (x * (high / low).ln())
                }
            }
        }
    }

    /// Density at which `a·θ + b`, seen with variance `var`, is at `x`.
    pub fn density_of_line(&self, a: f64, b: f64, var: f64, x: f64) -> f64 {
        match *self {
            Prior::Normal(n) => {
                let var = var + (a * n.sd).powi(2);
                let d = x - b - a * n.mean;
                (-0.5 * d * d / var).exp() / (2.0 * std::f64::consts::PI * var).sqrt()
            }
            Prior::Anywhere { .. } => self.density((x - b) / a) / a.abs(),
        }
    }

    /// As a normal distribution: its own, or one too wide to matter.
    pub fn normal(&self) -> Normal {
        match *self {
            Prior::Normal(n) => n,
            Prior::Anywhere { low, high } => Normal {
                mean: 0.5 * (low + high),
                sd: 1e3 * (high - low),
            },
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Mass is the integral of density, over the whole range 1.
    #[test]
    fn masses_integrate_densities() {
        let priors = [
            Prior::Normal(Normal {
                mean: 50.0,
                sd: 0.25,
            }),
            Prior::Anywhere {
                low: 0.5,
                high: 100.0,
            },
        ];
        for prior in priors {
            let (low, high) = prior.range();
            assert!((prior.mass(low, high) - 1.0).abs() < 1e-5, "{prior:?}");
            let (mut sum, steps) = (0.0, 20_000);
            let (from, to) = (low + 0.3 * (high - low), low + 0.7 * (high - low));
            let step = (to - from) / f64::from(steps);
            for i in 0..steps {
                sum += step * prior.density(from + (f64::from(i) + 0.5) * step);
            }
            let mass = prior.mass(from, to);
            assert!((sum - mass).abs() < 1e-6, "{prior:?}: {sum} {mass}");
        }
    }
}
