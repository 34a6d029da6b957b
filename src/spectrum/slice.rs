//! Second pass over a long recording: the transform of all of it, but only in
//! narrow bands.
//!
//! Each segment is transformed under a Hann window; the few bins of a band go
//! back through a short inverse transform and are overlap-added. Half-overlapped
//! Hann windows add up to 1, so the result is the recording, shifted down and
//! decimated, without any window; its transform is the wanted slice of the
//! transform of everything. Cost: one transform per segment, whatever the number
//! of bands.

use super::Band;
use super::fft::{Complex32, ComplexFft, HannFft};
use super::samples::Passes;
use super::segments::{Layout, for_each_group};

/// A wanted band in bins of a segment's transform.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Want {
    /// Which channel.
    pub channel: usize,
    /// First bin.
    pub first: usize,
    /// Number of bins, even and ≥ 8; the outer two on either side are only
    /// there for the window's skirts.
    pub bins: usize,
}

/// Cuts the wanted bands out of the transform of the whole recording.
///
/// # Errors
/// The recording's own.
pub fn cut<P: Passes>(
    recording: &P,
    segment: usize,
    wants: &[Want],
    progress: &(dyn Fn(u64) + Sync),
) -> Result<Vec<Band>, P::Error> {
    let layout = Layout {
        segment,
        padded: true,
    };
    let hop = layout.hop();
    let plan = HannFft::new(segment);
    let mut bands: Vec<Decimated> = wants
        .iter()
        .map(|&w| Decimated::new(w, layout.count(recording.frames()) as usize))
        .collect();
    for_each_group(
        recording,
        layout,
        progress,
        || plan.clone(),
        |fft, group| {
            // per segment, the wanted bins of every band one after another
            let mut out: Vec<Vec<Complex32>> = vec![Vec::new(); group.count];
            for (channel, samples) in group.samples.iter().enumerate() {
                if !wants.iter().any(|w| w.channel == channel) {
                    continue;
                }
                for (i, out) in out.iter_mut().enumerate() {
                    let spectrum = fft.transform(&samples[i * hop..i * hop + segment]);
                    for w in wants.iter().filter(|w| w.channel == channel) {
                        out.extend_from_slice(&spectrum[w.first..w.first + w.bins]);
                    }
                }
            }
            out
        },
        |group| {
            for bins in group {
                let mut rest = bins.as_slice();
                // the order in which the worker wrote them: by channel
                for channel in 0..recording.channels() {
                    for band in bands.iter_mut().filter(|b| b.want.channel == channel) {
                        let (mine, others) = rest.split_at(band.want.bins);
                        band.add(mine);
                        rest = others;
                    }
                }
            }
        },
    )?;
    let frames = recording.frames() as usize;
    Ok(bands
        .into_iter()
        .map(|band| band.into_band(segment, frames, recording.rate_hz()))
        .collect())
}

/// A band's decimated signal while it grows.
struct Decimated {
    want: Want,
    inverse: ComplexFft,
    work: Vec<Complex32>,
    next_segment: usize,
    signal: Vec<Complex32>,
}

impl Decimated {
    fn new(want: Want, segments: usize) -> Self {
        Decimated {
            want,
            inverse: ComplexFft::inverse(want.bins),
            work: vec![Complex32::default(); want.bins],
            next_segment: 0,
            signal: vec![Complex32::default(); (segments + 1) * want.bins / 2],
        }
    }

    fn add(&mut self, bins: &[Complex32]) {
        self.work.copy_from_slice(bins);
        self.inverse.process(&mut self.work);
        // Segment m starts m half-segments after the first: bin `first` has
        // turned by (−1)^(first·m) since.
        let odd = (self.want.first * self.next_segment) % 2 == 1;
        let start = self.next_segment * self.want.bins / 2;
        for (s, &w) in self.signal[start..].iter_mut().zip(&self.work) {
            *s += if odd { -w } else { w };
        }
        self.next_segment += 1;
    }

    fn into_band(self, segment: usize, frames: usize, rate_hz: f64) -> Band {
        let nb = self.want.bins;
        // The first half segment was padding. It turned bin `first` by
        // (−1)^first, which must be undone for phases to count from sample 0.
        let mut signal = self.signal;
        signal.drain(..nb / 2);
        let whole_segments = frames.div_ceil(segment);
        signal.resize(whole_segments * nb, Complex32::default());
        let sign = if self.want.first % 2 == 1 { -1.0 } else { 1.0 };
        // Each decimated sample is 1/nb of the unscaled short inverse; the sum
        // over decimated samples stands for segment/nb times as many.
        let scale = sign / nb as f32;
        ComplexFft::forward(signal.len()).process(&mut signal);
        for z in &mut signal {
            *z *= scale;
        }
        Band {
            first_bin: self.want.first * whole_segments,
            bins: signal,
            grid: whole_segments * segment,
            samples: frames,
            rate_hz,
            least_noise: 0.0,
            floor: Vec::new(),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::spectrum::samples::InMemory;
    use crate::spectrum::whole;

    #[test]
    fn a_slice_is_the_transform_of_everything() {
        let n = 10_000;
        let x: Vec<f32> = (0..n)
            .map(|i| {
                let t = i as f64;
                ((0.2345 * t).sin() + 0.3 * (0.2371 * t + 1.0).cos() + 0.01 * (1.7 * t).sin())
                    as f32
            })
            .collect();
        let recording = InMemory {
            rate_hz: 1000.0,
            channels: vec![x.clone()],
        };
        let segment = 256;
        // 0.2345 rad per sample is bin 9.55 of 256
        for first in [1usize, 2] {
            let want = Want {
                channel: 0,
                first,
                bins: 16,
            };
            let band = cut(&recording, segment, &[want], &|_| ())
                .unwrap()
                .remove(0);
            let full = whole::transform(x.clone(), band.grid, 1000.0, None);
            let tone = 0.2345 / std::f64::consts::TAU * band.grid as f64;
            let peak = full.get(tone.round() as i64).unwrap().norm();
            for k in tone as i64 - 40..tone as i64 + 60 {
                let (a, b) = (band.get(k).unwrap(), full.get(k).unwrap());
                // Bins outside the band are cut off: a Hann window's skirts from
                // 7 bins on hold below 1e-3 of the amplitude.
                assert!(
                    (a - b).norm() < 2e-3 * peak,
                    "first {first} bin {k}: {a} {b}"
                );
            }
        }
    }
}
