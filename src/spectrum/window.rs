//! Spectral windows, their figures of merit and their responses.
//!
//! All are sums of cosines in the periodic (DFT-even) form, sample `i` of `N`
//!
//! ```text
//! w[i] = a0 − a1·cos(2πi/N) + a2·cos(4πi/N) − a3·cos(6πi/N)
//! ```
//!
//! which repeats after `N` samples, peaks at `i = N/2`, and whose transform is
//! zero at every whole bin past the main lobe. Coefficients and figures:
//! F. J. Harris, "On the use of windows for harmonic analysis with the discrete
//! Fourier transform", Proc. IEEE 66 (1978) 51–83; A. H. Nuttall, "Some windows
//! with very good sidelobe behavior", IEEE Trans. ASSP 29 (1981) 84–91.

use std::f64::consts::PI;

/// A spectral window.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, serde::Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Window {
    /// No window: the sharpest main lobe, sidelobes from −13 dB.
    Rectangular,
    /// Sidelobes from −31.5 dB, falling by 18 dB per octave.
    Hann,
    /// Sidelobes from −43 dB, falling by 6 dB per octave.
    Hamming,
    /// Minimum four-term Blackman–Harris: no sidelobe above −92 dB.
    BlackmanHarris,
    /// Nuttall's minimum four-term window: no sidelobe above −98 dB.
    Nuttall,
}

impl Window {
    /// Every window, the sharpest main lobe first.
    pub const ALL: [Window; 5] = [
        Window::Rectangular,
        Window::Hamming,
        Window::Hann,
        Window::Nuttall,
        Window::BlackmanHarris,
    ];

    /// `a0, a1, …` of the cosine sum, all positive; they add up to 1.
    pub const fn terms(self) -> &'static [f64] {
        match self {
            Window::Rectangular => &[1.0],
            Window::Hann => &[0.5, 0.5],
            Window::Hamming => &[0.54, 0.46],
            Window::BlackmanHarris => &[0.35875, 0.48829, 0.14128, 0.01168],
            Window::Nuttall => &[0.363_581_9, 0.489_177_5, 0.136_599_5, 0.010_641_1],
        }
    }

    /// The `n` samples of the periodic window, each in `[0, 1]`; the largest, at
    /// `n/2`, is 1 where `n` is even. One sample is 1, none is an empty vector.
    pub fn coefficients(self, n: usize) -> Vec<f64> {
        if n == 1 {
            return vec![1.0];
        }
        (0..n)
            .map(|i| {
                let value: f64 = self
                    .terms()
                    .iter()
                    .enumerate()
                    .map(|(k, a)| {
                        // Reduced before the division: no loss for long windows.
                        let turn = (k * i % n) as f64 / n as f64;
                        let sign = if k % 2 == 0 { 1.0 } else { -1.0 };
                        sign * a * (2.0 * PI * turn).cos()
                    })
                    .sum();
                value.max(0.0)
            })
            .collect()
    }

    /// Mean of the samples: by how much the amplitude of a tone on a bin shrinks.
    pub fn coherent_gain(self) -> f64 {
        self.first_term()
    }

    /// Equivalent noise bandwidth in bins of `rate/n`,
    /// `n·Σw²/(Σw)² = 1 + Σ_{k≥1} (a_k/a_0)²/2` for `n` of at least twice the
    /// number of terms.
    pub fn enbw_bins(self) -> f64 {
        let a0 = self.first_term();
        let higher: f64 = self.terms().iter().skip(1).map(|a| (a / a0).powi(2)).sum();
        1.0 + 0.5 * higher
    }

    /// Half-width of the main lobe to its first zero, in bins: the number of terms.
    pub fn main_lobe_half_width_bins(self) -> f64 {
        self.terms().len() as f64
    }

    /// Loss of a tone halfway between two bins, dB ≥ 0 (long window).
    pub fn scalloping_loss_db(self) -> f64 {
        -crate::units::amplitude_db(self.response(0.5, None))
    }

    /// The highest sidelobe relative to the main lobe, dB < 0 (long window), found
    /// on its response: all these windows have it within 20 bins.
    pub fn highest_sidelobe_db(self) -> f64 {
        let start = self.main_lobe_half_width_bins();
        let steps_per_bin = 64;
        let peak = (0..20 * steps_per_bin)
            .map(|i| start + f64::from(i) / f64::from(steps_per_bin))
            .map(|offset| self.response(offset, None).abs())
            .fold(0.0, f64::max);
        crate::units::amplitude_db(peak)
    }

    /// Response of a window of `n` samples to a tone `delta_bins` away from the bin
    /// looked at, relative to a tone on the bin: real, signed, even, 1 at 0,
    /// periodic in `n`.
    ///
    /// It is taken about the middle of the window, `n/2`; a transform that counts
    /// from the first sample carries `exp(−iπ·delta_bins)` on top. (Rectangular:
    /// about `(n−1)/2`, and `exp(−iπ·delta_bins·(n−1)/n)`.) As a sum of Dirichlet
    /// kernels
    ///
    /// ```text
    /// W(δ) = [ a0·D(δ) + Σ_k a_k/2·(D(δ−k) + D(δ+k)) ] / a0,   D(x) = sin(πx)·cot(πx/n)/n
    /// ```
    ///
    /// The first sample of a periodic window has no partner; what it adds in
    /// quadrature is left out: `|w[0]·sin(πδ)|/(n·a0)`, nothing for Hann and below
    /// 1.7e-4/n for Nuttall and Blackman–Harris.
    pub fn transform(self, delta_bins: f64, n: usize) -> f64 {
        if n <= 1 {
            return 1.0;
        }
        self.response(delta_bins, Some(n as f64))
    }

    fn first_term(self) -> f64 {
        self.terms().first().copied().unwrap_or(1.0)
    }

    /// [`transform`](Window::transform) for `n` samples or, with `None`, for
    /// infinitely many, where `D(x)` becomes `sin(πx)/(πx)`.
    fn response(self, delta: f64, n: Option<f64>) -> f64 {
        if self == Window::Rectangular {
            return match n {
                None => kernel(delta, None),
                Some(n) => dirichlet(delta, n),
            };
        }
        let sum: f64 = self
            .terms()
            .iter()
            .enumerate()
            .map(|(k, a)| {
                let k = k as f64;
                0.5 * a * (kernel(delta - k, n) + kernel(delta + k, n))
            })
            .sum();
        sum / self.first_term()
    }
}

/// `sin(πx)`, exact at whole numbers.
fn sin_pi(x: f64) -> f64 {
    let nearest = x.round();
    let sign = if nearest % 2.0 == 0.0 { 1.0 } else { -1.0 };
    sign * (PI * (x - nearest)).sin()
}

/// Real part of the mean of `exp(−2πi·m·x/n)` over `m = −n/2 … n/2 − 1`, or its
/// limit for long windows.
fn kernel(x: f64, n: Option<f64>) -> f64 {
    match n {
        None if x == 0.0 => 1.0,
        None => sin_pi(x) / (PI * x),
        Some(n) => {
            // Periodic in n (n even), so the angle stays small beside the poles.
            let sine = sin_pi(x / n);
            if sine == 0.0 {
                return 1.0;
            }
            sin_pi(x) * sin_pi(x / n + 0.5) / (n * sine)
        }
    }
}

/// Mean of `exp(−2πi·m·x/n)` over `n` values of `m` centred on 0.
fn dirichlet(x: f64, n: f64) -> f64 {
    let sine = sin_pi(x / n);
    if sine == 0.0 {
        let turns = (x / n).round();
        // At x = j·n the centre lies between two samples for even n.
        return if (turns * (n - 1.0)) % 2.0 == 0.0 {
            1.0
        } else {
            -1.0
        };
    }
    sin_pi(x) / (n * sine)
}
