//! The only file that names the FFT crates.
//!
//! No transform here is scaled, in either direction.

use realfft::{RealFftPlanner, RealToComplex};
use rustfft::{Fft, FftPlanner};
use std::sync::Arc;

use super::window::Window;

pub use rustfft::num_complex::{Complex32, Complex64};

/// Forward transform of `n` real samples to `n/2 + 1` bins.
#[derive(Clone)]
pub struct RealFft {
    plan: Arc<dyn RealToComplex<f32>>,
    scratch: Vec<Complex32>,
}

impl RealFft {
    /// Plans for `n` samples, n ≥ 1.
    pub fn new(n: usize) -> Self {
        let plan = RealFftPlanner::<f32>::new().plan_fft_forward(n);
        let scratch = plan.make_scratch_vec();
        RealFft { plan, scratch }
    }

    /// Number of bins, n/2 + 1.
    pub fn bins(&self) -> usize {
        self.plan.len() / 2 + 1
    }

    /// Transforms `input` (length n, destroyed) into `output` (length n/2 + 1).
    ///
    /// # Panics
    /// If a slice has another length: a mistake in this crate, never in a file.
    pub fn forward(&mut self, input: &mut [f32], output: &mut [Complex32]) {
        assert_eq!(input.len(), self.plan.len());
        assert_eq!(output.len(), self.bins());
        // With both lengths right the only complaint left is about imaginary
        // parts of an inverse transform, which this is not.
        let done = self
            .plan
            .process_with_scratch(input, output, &mut self.scratch);
        debug_assert!(done.is_ok());
    }
}

/// Forward transform of a segment under a periodic Hann window, whose half-overlapped
/// copies add up to exactly 1.
#[derive(Clone)]
pub struct HannFft {
    fft: RealFft,
    window: Arc<[f32]>,
    windowed: Vec<f32>,
    spectrum: Vec<Complex32>,
}

impl HannFft {
    /// Plans for segments of `n` samples, n ≥ 2.
    pub fn new(n: usize) -> Self {
        let fft = RealFft::new(n);
        let window = Window::Hann.coefficients(n);
        HannFft {
            window: window.into_iter().map(|w| w as f32).collect(),
            windowed: vec![0.0; n],
            spectrum: vec![Complex32::default(); fft.bins()],
            fft,
        }
    }

    /// Σ w²: what white noise of variance 1 leaves in each bin.
    pub fn energy(&self) -> f64 {
        self.window
            .iter()
            .map(|&w| f64::from(w) * f64::from(w))
            .sum()
    }

    /// The n/2 + 1 bins of `segment` (n samples), unscaled.
    ///
    /// # Panics
    /// If `segment` has another length: a mistake in this crate.
    pub fn transform(&mut self, segment: &[f32]) -> &[Complex32] {
        assert_eq!(segment.len(), self.window.len());
        for ((out, &v), &w) in self
            .windowed
            .iter_mut()
            .zip(segment)
            .zip(self.window.iter())
        {
            *out = v * w;
        }
        self.fft.forward(&mut self.windowed, &mut self.spectrum);
        &self.spectrum
    }
}

/// Transform of `n` complex samples, in place.
#[derive(Clone)]
pub struct ComplexFft {
    plan: Arc<dyn Fft<f32>>,
    scratch: Vec<Complex32>,
}

impl ComplexFft {
    /// Σ x·exp(−2πi…).
    pub fn forward(n: usize) -> Self {
        Self::with(FftPlanner::new().plan_fft_forward(n))
    }

    /// Σ x·exp(+2πi…), unscaled.
    pub fn inverse(n: usize) -> Self {
        Self::with(FftPlanner::new().plan_fft_inverse(n))
    }

    fn with(plan: Arc<dyn Fft<f32>>) -> Self {
        let scratch = vec![Complex32::default(); plan.get_inplace_scratch_len()];
        ComplexFft { plan, scratch }
    }

    /// Transforms in place.
    ///
    /// # Panics
    /// If the length is not the planned one: a mistake in this crate.
    pub fn process(&mut self, data: &mut [Complex32]) {
        assert_eq!(data.len(), self.plan.len());
        self.plan.process_with_scratch(data, &mut self.scratch);
    }
}

/// Smallest even length ≥ `n` whose prime factors are all ≤ 13: transforms of
/// such lengths need no chirp detour, and they are never more than a few
/// per mille above `n`.
pub fn next_fast_len(n: usize) -> usize {
    let mut m = n.max(2).next_multiple_of(2);
    while !is_smooth(m) {
        m += 2;
    }
    m
}

fn is_smooth(mut m: usize) -> bool {
    for p in [2, 3, 5, 7, 11, 13] {
        while m.is_multiple_of(p) {
            m /= p;
        }
    }
    m == 1
}

#[cfg(test)]
mod tests {
    use super::*;

    /// The slow obvious twin, in double precision.
    fn naive(x: &[f64]) -> Vec<Complex64> {
        let n = x.len();
        (0..=n / 2)
            .map(|k| {
                x.iter()
                    .enumerate()
                    .map(|(i, &v)| {
                        let phase = -std::f64::consts::TAU * ((k * i) % n) as f64 / n as f64;
                        Complex64::from_polar(v, phase)
                    })
                    .sum()
            })
            .collect()
    }

    #[test]
    fn agrees_with_the_sum_it_stands_for() {
        for n in [2usize, 16, 26, 77, 130] {
            let x: Vec<f64> = (0..n).map(|i| ((i * 37 + 11) % 23) as f64 - 11.0).collect();
            let mut fft = RealFft::new(n);
            let mut input: Vec<f32> = x.iter().map(|&v| v as f32).collect();
            let mut out = vec![Complex32::new(9.0, 9.0); fft.bins()];
            fft.forward(&mut input, &mut out);
            for (k, (a, b)) in out.iter().zip(naive(&x)).enumerate() {
                // f32 rounding: inputs up to 11, n terms, ~log2(n) stages.
                let bound = 11.0 * n as f64 * 1e-6;
                let err = (Complex64::new(a.re.into(), a.im.into()) - b).norm();
                assert!(err < bound, "n {n} bin {k}: {a} against {b}");
            }
        }
    }

    #[test]
    fn fast_lengths_are_close_above() {
        for n in [1, 7, 1_024, 40_009, 99_991, 1_000_003] {
            let m = next_fast_len(n);
            assert!(m >= n && m.is_multiple_of(2) && is_smooth(m), "{n} -> {m}");
            assert!((m as f64) < n as f64 * 1.01 + 4.0, "{n} -> {m}");
        }
    }
}
