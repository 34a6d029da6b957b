//! A spectrum small enough to look at: what each of about a thousand columns
//! holds, in the levels that tones are given in.

use super::Band;
use super::welch::Averaged;
use crate::units::power_db;

/// Columns at most.
const COLUMNS: usize = 1024;
/// Equivalent noise bandwidth of the Hann window, in bins (Harris 1978, table 1).
const HANN_NOISE_BINS: f64 = 1.5;
/// Bins that hold the mean and what the window spreads of it.
const MEAN_BINS: usize = 2;
/// No level is given below this, dBFS: digital silence has none.
const SILENCE_DBFS: f64 = -300.0;

/// A column of bins, summed up.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Column {
    /// Median of the bins: the noise, where tones are few.
    pub middle_dbfs: f32,
    /// The loudest bin.
    pub top_dbfs: f32,
}

/// One channel's spectrum, Hann-windowed, from 0 Hz to half the rate in columns of
/// equal width.
///
/// A steady tone is within 1.5 dB of its level in dBFS (0 = a full-scale sine); noise
/// is shown as it falls into [`Spectrum::noise_hz`].
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Spectrum {
    /// Index of the channel, from 0.
    pub channel: usize,
    /// Width of the band in which noise is shown, Hz.
    pub noise_hz: f64,
    /// From 0 Hz up; never empty.
    pub columns: Vec<Column>,
}

impl Spectrum {
    /// From the transform of a whole channel. `full_scale` is the amplitude of a
    /// full-scale sine, in the unit of the samples.
    pub fn of_band(band: &Band, channel: usize, full_scale: f64) -> Self {
        let bins = band.bins.len() as i64;
        // A Hann window is three neighbours of the transform; it halves a sine.
        let scale = (4.0 / (band.samples.max(1) as f64 * full_scale)).powi(2);
        let at = |k: i64| band.get(band.first_bin as i64 + k).unwrap_or_default();
        let power = (0..bins)
            .map(|k| {
                let hann = at(k) * 0.5 - (at(k - 1) + at(k + 1)) * 0.25;
                scale * f64::from(hann.norm_sqr())
            })
            .collect();
        let cell_hz = band.rate_hz / band.samples.max(1) as f64;
        Self::new(channel, HANN_NOISE_BINS * cell_hz, power)
    }

    /// From the averaged segments of a long recording.
    pub fn of_averaged(averaged: &Averaged, channel: usize, full_scale: f64) -> Self {
        let segment = averaged.segment as f64;
        // |Σ w·x|² of a sine is (A·Σw/2)², divided by Σw² = 3/8 of the length.
        let scale = 6.0 / (segment * full_scale * full_scale);
        let bins = averaged.power.get(channel).map(Vec::as_slice);
        let power = bins
            .unwrap_or_default()
            .iter()
            .map(|&p| scale * f64::from(p))
            .collect();
        Self::new(channel, HANN_NOISE_BINS * averaged.rate_hz / segment, power)
    }

    /// `power` relative to a full-scale sine, per bin from 0 Hz to half the rate.
    fn new(channel: usize, noise_hz: f64, mut power: Vec<f64>) -> Self {
        let bins = power.len();
        if let Some(first) = power.get(MEAN_BINS).copied() {
            power.iter_mut().take(MEAN_BINS).for_each(|p| *p = first);
        }
        let count = COLUMNS.min(bins).max(1);
        let columns = (0..count)
            .map(|i| {
                let (from, to) = (i * bins / count, (i + 1) * bins / count);
                let level = |p: Option<f64>| power_db(p.unwrap_or(0.0)).max(SILENCE_DBFS) as f32;
                let Some(held) = power.get_mut(from..to) else {
                    return Column {
                        middle_dbfs: level(None),
                        top_dbfs: level(None),
                    };
                };
                held.sort_by(f64::total_cmp);
                Column {
                    middle_dbfs: level(held.get(held.len() / 2).copied()),
                    top_dbfs: level(held.last().copied()),
                }
            })
            .collect();
        Spectrum {
            channel,
            noise_hz,
            columns,
        }
    }

    /// The loudest column level, dBFS.
    pub fn top_dbfs(&self) -> f64 {
        let tops = self.columns.iter().map(|c| f64::from(c.top_dbfs));
        tops.fold(SILENCE_DBFS, f64::max)
    }

    /// The level that nineteen in twenty columns' medians exceed, dBFS.
    pub fn ground_dbfs(&self) -> f64 {
        let mut all: Vec<f32> = self.columns.iter().map(|c| c.middle_dbfs).collect();
        all.sort_by(f32::total_cmp);
        all.get(all.len() / 20)
            .map_or(SILENCE_DBFS, |&l| f64::from(l))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::spectrum::whole;

    /// A sine of amplitude 0.1.
    fn sine(cycles: f64, samples: usize) -> Vec<f32> {
        (0..samples)
            .map(|n| (0.1 * (std::f64::consts::TAU * cycles * n as f64).sin()) as f32)
            .collect()
    }

    #[test]
    fn a_sine_shows_at_its_level_in_its_column() {
        for offset in [0.0, 0.25, 0.5] {
            let samples = 40_000;
            let cycles = (5_000.0 + offset) / samples as f64;
            let band = whole::transform(sine(cycles, samples), samples, 8000.0, None);
            let spectrum = Spectrum::of_band(&band, 0, 1.0);
            // −20 dBFS, less up to 1.42 dB between bins (Harris 1978, table 1)
            let top = spectrum.top_dbfs();
            assert!((-21.45..=-19.99).contains(&top), "{offset}: {top}");
            let column = spectrum
                .columns
                .iter()
                .position(|c| f64::from(c.top_dbfs) == top)
                .unwrap();
            let edge = |i: usize| i * (samples / 2 + 1) / spectrum.columns.len();
            assert!(edge(column) <= 5_001 && edge(column + 1) > 5_000);
            assert!(spectrum.ground_dbfs() < -100.0);
        }
    }

    #[test]
    fn both_ways_show_the_same_level() {
        let segment = 4096;
        // power of a sine on a bin, as `welch::average` scales it: A²·segment/6
        let mut power = vec![1e-12f32; segment / 2 + 1];
        power[700] = 0.01 * segment as f32 / 6.0;
        let averaged = Averaged {
            power: vec![power],
            segment,
            count: 10,
            rate_hz: 8000.0,
            condition: Vec::new(),
        };
        let spectrum = Spectrum::of_averaged(&averaged, 0, 1.0);
        assert!((spectrum.top_dbfs() + 20.0).abs() < 0.01);
        let relative_to_two = Spectrum::of_averaged(&averaged, 0, 2.0);
        assert!((relative_to_two.top_dbfs() + 26.02).abs() < 0.01);
    }

    #[test]
    fn few_bins_and_silence_have_columns_too() {
        let band = whole::transform(vec![0.0; 16], 16, 8000.0, None);
        let spectrum = Spectrum::of_band(&band, 0, 1.0);
        assert_eq!(spectrum.columns.len(), 9);
        assert_eq!(spectrum.top_dbfs(), SILENCE_DBFS);
        assert_eq!(Spectrum::new(0, 1.0, Vec::new()).columns.len(), 1);
    }
}
