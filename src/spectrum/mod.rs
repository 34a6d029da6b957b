//! From blocks of samples to spectra: transforms, averaged periodograms, the
//! noise floor, and narrow slices of the transform of the whole recording.
//!
//! Short recordings are transformed whole ([`whole`]). Longer ones are averaged
//! over segments ([`welch`]) to find where something stands out, and a second
//! pass ([`mod@slice`]) then yields the transform of the *whole* recording in those
//! narrow bands only, so that memory does not grow with length while resolution
//! does.

pub mod condition;
pub mod display;
pub mod fft;
pub mod floor;
pub mod plan;
pub mod samples;
pub mod segments;
pub mod slice;
pub mod welch;
pub mod whole;
pub mod window;

pub use fft::Complex32;

/// A contiguous band of the discrete Fourier transform of a whole recording.
///
/// Bin `first_bin + i` holds `X[k] = Σ_n x[n]·exp(−2πi·k·n/grid)`, n from 0 to
/// `samples − 1`, no scaling: a sine of amplitude A has |X| = A·samples/2.
#[derive(Debug, Clone)]
pub struct Band {
    /// Index of the first bin held.
    pub first_bin: usize,
    /// The bins.
    pub bins: Vec<Complex32>,
    /// Length of the transform grid, ≥ `samples`; bin spacing is rate/grid.
    pub grid: usize,
    /// Number of real samples behind it.
    pub samples: usize,
    /// Sample rate, Hz.
    pub rate_hz: f64,
    /// Noise power per bin, E|X|², that rounding alone makes: none lower can be
    /// measured. See [`least_noise`].
    pub least_noise: f32,
    /// Noise power per bin as seen from afar, spread evenly over the band; empty where
    /// the band itself is all there is.
    pub floor: Vec<f32>,
}

/// Noise power per bin of `samples` samples of mean square `power`, given in whole
/// `step`s: quantising leaves step²/12 a sample (Bennett 1948), and single precision
/// about 8 units of 2⁻⁴⁸ of the power, for the samples themselves and the stages of
/// the transform.
pub fn least_noise(samples: usize, power: f64, step: Option<f64>) -> f32 {
    let quantised = step.map_or(0.0, |s| s * s / 12.0);
    let rounded = 8.0 * 2f64.powi(-48) * power;
    (samples as f64 * (quantised + rounded)) as f32
}

impl Band {
    /// Spacing of the bins, Hz.
    pub fn bin_hz(&self) -> f64 {
        self.rate_hz / self.grid as f64
    }

    /// Noise power seen from afar at the band's bin `i`; infinite where not known.
    pub fn known_floor(&self, i: usize) -> f32 {
        self.floor
            .get(i * self.floor.len() / self.bins.len().max(1))
            .copied()
            .unwrap_or(f32::INFINITY)
    }

    /// The bin at absolute index `k`; bins below 0 and above grid/2 are the
    /// conjugate mirror that every real signal has. `None` outside the band.
    pub fn get(&self, k: i64) -> Option<Complex32> {
        let grid = self.grid as i64;
        let (k, mirrored) = if k < 0 {
            (-k, true)
        } else if 2 * k > grid {
            (grid - k, true)
        } else {
            (k, false)
        };
        let i = k.checked_sub(self.first_bin as i64)?;
        let x = *self.bins.get(usize::try_from(i).ok()?)?;
        Some(if mirrored { x.conj() } else { x })
    }
}
