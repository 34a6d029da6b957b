//! Averaged modified periodograms (Welch 1967).

use super::condition::Condition;
use super::fft::HannFft;
use super::samples::Passes;
use super::segments::{Layout, for_each_group};

/// Averaged power per channel, Hann window, half overlap.
#[derive(Debug, Clone)]
pub struct Averaged {
    /// `power[channel][bin]`, bins 0 to segment/2: mean over segments of
    /// |Σ w·x·exp(…)|² / Σ w², so that white noise of variance σ² gives σ².
    pub power: Vec<Vec<f32>>,
    /// Samples per segment.
    pub segment: usize,
    /// Segments averaged.
    pub count: u64,
    /// Sample rate, Hz.
    pub rate_hz: f64,
    /// Condition of the samples, per channel.
    pub condition: Vec<Condition>,
}

impl Averaged {
    /// Half the degrees of freedom of each bin on Gaussian noise: segments that
    /// overlap by half under a Hann window share (1/6)² of their power (Welch
    /// 1967, eq. 11 with ρ = (Σ w·w shifted / Σ w²)² = 1/36).
    pub fn shape(&self) -> f64 {
        let k = self.count as f64;
        k / (1.0 + 2.0 * (k - 1.0).max(0.0) / k / 36.0)
    }

    /// Mean square of a channel's samples, 0 Hz and its neighbour left out.
    pub fn mean_square(&self, channel: usize) -> f64 {
        let bins = self.power[channel].get(2..).unwrap_or_default();
        bins.iter().map(|&p| f64::from(p)).sum::<f64>() / bins.len().max(1) as f64
    }

    /// One-sided power spectral density in units²/Hz (bins 0 and segment/2 keep
    /// half of it, as those have no mirror).
    pub fn density(&self, channel: usize) -> Vec<f64> {
        let last = self.segment / 2;
        self.power[channel]
            .iter()
            .enumerate()
            .map(|(k, &p)| {
                let sides = if k == 0 || k == last { 1.0 } else { 2.0 };
                sides * f64::from(p) / self.rate_hz
            })
            .collect()
    }
}

/// Averages a whole recording; the mean of each segment is left in (it stays in
/// the two lowest bins under a Hann window).
///
/// # Errors
/// The recording's own.
pub fn average<P: Passes>(
    recording: &P,
    segment: usize,
    progress: &(dyn Fn(u64) + Sync),
) -> Result<Averaged, P::Error> {
    let layout = Layout {
        segment,
        padded: false,
    };
    let hop = layout.hop();
    let channels = recording.channels();
    let bins = segment / 2 + 1;
    let plan = HannFft::new(segment);
    let mut sums = vec![vec![0.0f64; bins]; channels];
    let condition = for_each_group(
        recording,
        layout,
        progress,
        || plan.clone(),
        |fft, group| {
            group
                .samples
                .iter()
                .map(|samples| {
                    let mut sum = vec![0.0f32; bins];
                    for i in 0..group.count {
                        let spectrum = fft.transform(&samples[i * hop..i * hop + segment]);
                        for (s, z) in sum.iter_mut().zip(spectrum) {
                            *s += z.norm_sqr();
                        }
                    }
                    sum
                })
                .collect::<Vec<_>>()
        },
        |group| {
            for (sum, add) in sums.iter_mut().zip(&group) {
                for (s, &a) in sum.iter_mut().zip(add) {
                    *s += f64::from(a);
                }
            }
        },
    )?;
    let count = layout.count(recording.frames());
    let scale = 1.0 / (plan.energy() * count.max(1) as f64);
    Ok(Averaged {
        power: sums
            .into_iter()
            .map(|sum| sum.into_iter().map(|s| (s * scale) as f32).collect())
            .collect(),
        segment,
        count,
        rate_hz: recording.rate_hz(),
        condition,
    })
}
