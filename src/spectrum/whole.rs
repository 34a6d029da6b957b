//! The transform of a whole short recording, one channel at a time.

use super::Band;
use super::condition::{Condition, Mender};
use super::fft::{Complex32, RealFft};
use super::samples::{Pass, Passes};
use crate::capture::Block;

/// Every channel's samples, bridged and with their mean removed.
#[derive(Debug, Clone)]
pub struct Loaded {
    /// `channels[c][n]`.
    pub channels: Vec<Vec<f32>>,
    /// Condition of the samples, per channel.
    pub condition: Vec<Condition>,
}

/// Reads all samples; only for recordings that [`super::plan::Plan`] calls whole.
///
/// # Errors
/// The recording's own.
pub fn load<P: Passes>(recording: &P, progress: &dyn Fn(u64)) -> Result<Loaded, P::Error> {
    let mut channels = vec![Vec::with_capacity(recording.frames() as usize); recording.channels()];
    let mut menders = vec![Mender::default(); channels.len()];
    let mut pass = recording.pass()?;
    let mut block = Block::default();
    while pass.next_into(&mut block)? {
        for ((channel, mender), samples) in channels
            .iter_mut()
            .zip(&mut menders)
            .zip(&mut block.samples)
        {
            mender.fill(samples);
            channel.extend_from_slice(samples);
        }
        progress(channels.first().map_or(0, Vec::len) as u64);
    }
    for channel in &mut channels {
        let mean = channel.iter().map(|&v| f64::from(v)).sum::<f64>() / channel.len().max(1) as f64;
        for v in channel.iter_mut() {
            *v -= mean as f32;
        }
    }
    Ok(Loaded {
        channels,
        condition: menders.into_iter().map(Mender::finish).collect(),
    })
}

/// Transforms one channel, consuming it: zero-padded to `grid`, all bins from 0
/// to grid/2. `step` is the least step between sample values, where there is one.
pub fn transform(mut channel: Vec<f32>, grid: usize, rate_hz: f64, step: Option<f64>) -> Band {
    let samples = channel.len();
    let power = channel
        .iter()
        .map(|&v| f64::from(v) * f64::from(v))
        .sum::<f64>()
        / samples.max(1) as f64;
    channel.resize(grid, 0.0);
    let mut fft = RealFft::new(grid);
    let mut bins = vec![Complex32::default(); fft.bins()];
    fft.forward(&mut channel, &mut bins);
    Band {
        first_bin: 0,
        bins,
        grid,
        samples,
        rate_hz,
        least_noise: super::least_noise(samples, power, step),
        floor: Vec::new(),
    }
}
