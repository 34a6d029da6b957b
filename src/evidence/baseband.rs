//! Narrow bands of a recording as slow complex signals, and the smoothed phase of a
//! line in one.

use crate::spectrum::Band;
use crate::spectrum::fft::{Complex32, Complex64, ComplexFft};
use crate::spectrum::plan::Plan;
use crate::spectrum::samples::Passes;
use crate::spectrum::slice::{Want, cut};
use crate::spectrum::whole;
use std::f64::consts::TAU;

/// A band that is wanted of a channel, Hz as seen.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Request {
    /// Which channel.
    pub channel: usize,
    /// Lower end.
    pub low_hz: f64,
    /// Upper end.
    pub high_hz: f64,
}

/// The transform of the whole recording in each requested band, in their order.
/// `None` for an empty band.
///
/// # Errors
/// The recording's own.
pub fn bands<P: Passes>(
    recording: &P,
    requests: &[Request],
) -> Result<Vec<Option<Band>>, P::Error> {
    let mut found: Vec<Option<Band>> = vec![None; requests.len()];
    if requests.is_empty() {
        return Ok(found);
    }
    let rate_hz = recording.rate_hz();
    match Plan::new(recording.frames(), recording.channels()) {
        Plan::Whole { grid, .. } => {
            let loaded = whole::load(recording, &|_| ())?;
            for (channel, samples) in loaded.channels.into_iter().enumerate() {
                if !requests.iter().any(|r| r.channel == channel) {
                    continue;
                }
                let all = whole::transform(samples, grid, rate_hz, None);
                for (slot, request) in found.iter_mut().zip(requests) {
                    if request.channel == channel {
                        *slot = part(&all, request);
                    }
                }
            }
        }
        Plan::Segments { segment, .. } => {
            let bin_hz = rate_hz / segment as f64;
            let bins = segment / 2 + 1;
            let wants: Vec<Want> = requests
                .iter()
                .map(|r| {
                    // The outer two bins on either side are the window's skirts.
                    let first = ((r.low_hz / bin_hz).floor() - 2.0).max(0.0) as usize;
                    let end = ((r.high_hz / bin_hz).ceil() + 3.0).max(0.0) as usize;
                    let count = end.saturating_sub(first).max(8).next_multiple_of(2);
                    let count = count.min(bins & !1);
                    Want {
                        channel: r.channel,
                        first: first.min(bins - count),
                        bins: count,
                    }
                })
                .collect();
            let wide = cut(recording, segment, &wants, &|_| ())?;
            for ((slot, request), band) in found.iter_mut().zip(requests).zip(&wide) {
                *slot = part(band, request);
            }
        }
    }
    Ok(found)
}

/// The bins of a band that lie in a request.
fn part(band: &Band, request: &Request) -> Option<Band> {
    let bin = |hz: f64| (hz / band.bin_hz()).round().max(1.0) as usize;
    let first = bin(request.low_hz).max(band.first_bin);
    let end = (bin(request.high_hz) + 1).min(band.first_bin + band.bins.len());
    let bins = band
        .bins
        .get(first - band.first_bin..end.checked_sub(band.first_bin)?)?
        .to_vec();
    (!bins.is_empty()).then(|| Band {
        first_bin: first,
        bins,
        floor: Vec::new(),
        ..*band
    })
}

/// A band as a slow complex signal: the analytic signal is `z(t)·exp(2πi·f·t)` with
/// `f` = `reference_hz` and t = 0 at the first sample of the recording.
#[derive(Debug, Clone)]
pub struct Baseband {
    /// What 0 Hz of `z` is, as seen.
    pub reference_hz: f64,
    /// Time between samples of `z`, s; the band is sampled critically.
    pub step_s: f64,
    /// The signal; a real tone of amplitude A has |z| = A/2.
    pub z: Vec<Complex64>,
}

impl Baseband {
    /// Back from a band.
    pub fn new(band: &Band) -> Baseband {
        let width = band.bins.len();
        let mut z = band.bins.clone();
        ComplexFft::inverse(width).process(&mut z);
        let kept = (width * band.samples).div_ceil(band.grid).min(width);
        z.truncate(kept);
        let scale = 1.0 / band.grid as f64;
        Baseband {
            reference_hz: band.first_bin as f64 * band.bin_hz(),
            step_s: band.grid as f64 / band.rate_hz / width as f64,
            z: z.iter().map(|z| wide(*z) * scale).collect(),
        }
    }

    /// Back from a band whose outer sixths are tapered off. What was cut square rings
    /// at the ends of the recording, falling off as slowly as 1/n, and n times a phase
    /// error of a few hundredths of a radian matters.
    pub fn tapered(band: &Band) -> Baseband {
        let mut band = band.clone();
        let width = band.bins.len();
        let edge = (width / 6).max(1);
        for (i, x) in band.bins.iter_mut().enumerate() {
            let inside = i.min(width - 1 - i);
            if inside < edge {
                let u = (inside as f64 + 0.5) / edge as f64;
                *x *= (0.5 - 0.5 * (0.5 * TAU * u).cos()) as f32;
            }
        }
        // Sampled more finely than the band needs, to be read at any time between.
        band.bins.resize(OVERSAMPLED * width, Complex32::default());
        Baseband::new(&band)
    }

    /// Time of sample `i`, s.
    pub fn at_s(&self, i: usize) -> f64 {
        i as f64 * self.step_s
    }
}

fn wide(z: Complex32) -> Complex64 {
    Complex64::new(z.re.into(), z.im.into())
}

/// Phase of a line through time, smoothed as far as its noise demands.
#[derive(Debug, Clone)]
pub struct PhaseTrack {
    /// Mean frequency as seen, Hz.
    pub mean_hz: f64,
    /// rms deviation of the smoothed frequency from it, Hz.
    pub wander_hz: f64,
    /// Time between points, s.
    pub step_s: f64,
    /// Deviation from the phase of the mean frequency, turns.
    pub turns: Vec<f64>,
    /// Standard deviation of a point after smoothing, turns.
    pub sd_turns: f64,
    /// As `turns`, before smoothing.
    pub raw: Vec<f64>,
    /// Standard deviation of a point before smoothing, turns.
    pub raw_sd_turns: f64,
}

/// Samples per sample that a tapered band needs.
const OVERSAMPLED: usize = 4;
/// Share of the length that is left out at either end, where the cut rings, at most,
/// and in samples that the band needs.
const ENDS: (f64, f64) = (0.05, 4.0);
/// Points read in a window.
const READ: usize = 16;
/// Largest standard deviation of an unsmoothed phase, rad, with which turns can be
/// counted from sample to sample.
const COUNTABLE_RAD: f64 = 0.45;

impl PhaseTrack {
    /// Follows the one line in a tapered band. `noise` is the noise power over that of the
    /// line, in one sample of the signal,
    /// had the band not been tapered. `None` where turns cannot be counted, or
    /// the line is not there all the time.
    pub fn follow(signal: &Baseband, centre_hz: f64, noise: f64) -> Option<PhaseTrack> {
        // A sixth of the band on either side keeps 3/8 of its noise.
        let noise_rad2 = 0.5 * noise * (1.0 - 2.0 / 6.0 * 5.0 / 8.0);
        let n = signal.z.len();
        if n < 16 || noise_rad2.is_nan() || noise_rad2 > COUNTABLE_RAD * COUNTABLE_RAD {
            return None;
        }
        let mut sizes: Vec<f64> = signal.z.iter().map(|z| z.norm()).collect();
        sizes.sort_unstable_by(f64::total_cmp);
        // A hundredth of the samples may be lost in the noise or spoilt at the ends.
        if sizes.get(n / 100)? < &(0.2 * sizes.get(n / 2)?) {
            return None;
        }
        let turn = Complex64::from_polar(
            1.0,
            -TAU * (centre_hz - signal.reference_hz) * signal.step_s,
        );
        let mut turns = Vec::with_capacity(n);
        let mut sum = 0.0;
        let mut last = *signal.z.first()?;
        for &z in &signal.z {
            sum += (z * last.conj() * if turns.is_empty() { 1.0.into() } else { turn }).arg() / TAU;
            turns.push(sum);
            last = z;
        }
        let slope = detrend(&mut turns);
        let raw = turns.clone();
        let sd = smooth(&mut turns, noise_rad2 / (TAU * TAU));
        let steps = turns.windows(2).map(|w| match w {
            [a, b] => (b - a) / signal.step_s,
            _ => 0.0,
        });
        let (sum2, count) = steps.fold((0.0, 0.0), |(s, c), d| (s + d * d, c + 1.0));
        Some(PhaseTrack {
            mean_hz: centre_hz + slope / signal.step_s,
            wander_hz: (sum2 / f64::max(count, 1.0)).sqrt(),
            step_s: signal.step_s,
            turns,
            sd_turns: sd,
            raw,
            raw_sd_turns: noise_rad2.sqrt() / TAU,
        })
    }

    /// Deviation at a time, turns: cubic between points (Catmull–Rom).
    pub fn at(&self, t: f64) -> f64 {
        cubic(&self.turns, t / self.step_s)
    }

    /// Unsmoothed phase averaged in so many windows from `from_s` to `to_s`, lines
    /// taken out, and the noise variance of an average. `None` with fewer samples than
    /// windows.
    pub fn windows(&self, windows: usize, from_s: f64, to_s: f64) -> Option<(Vec<f64>, f64)> {
        let length = (to_s - from_s) / windows as f64;
        let each = length / (self.step_s * OVERSAMPLED as f64);
        if windows < 8 || each < 1.0 {
            return None;
        }
        let mut means: Vec<f64> = (0..windows)
            .map(|w| {
                let read = |i: usize| {
                    let u = w as f64 + (i as f64 + 0.5) / READ as f64;
                    cubic(&self.raw, (from_s + u * length) / self.step_s)
                };
                (0..READ).map(read).sum::<f64>() / READ as f64
            })
            .collect();
        detrend(&mut means);
        Some((means, self.raw_sd_turns.powi(2) / each))
    }

    /// What is left out at either end of [`Self::windows`], s.
    pub fn margin_s(&self) -> f64 {
        (ENDS.1 * OVERSAMPLED as f64 * self.step_s).min(ENDS.0 * self.duration_s())
    }

    /// Samples that the band needs.
    pub fn samples(&self) -> usize {
        self.raw.len() / OVERSAMPLED
    }

    /// Length, s.
    pub fn duration_s(&self) -> f64 {
        self.turns.len() as f64 * self.step_s
    }
}

/// Between points: Catmull–Rom.
fn cubic(values: &[f64], x: f64) -> f64 {
    let last = values.len().saturating_sub(1);
    let x = x.clamp(0.0, last as f64);
    let i = (x as usize).min(last.saturating_sub(1));
    let u = x - i as f64;
    let get = |j: usize| values.get(j.min(last)).copied().unwrap_or(0.0);
    let (a, b, c, d) = (get(i.saturating_sub(1)), get(i), get(i + 1), get(i + 2));
    b + 0.5 * u * (c - a + u * (2.0 * a - 5.0 * b + 4.0 * c - d + u * (3.0 * (b - c) + d - a)))
}

/// Takes the least-squares line out; its slope per sample.
fn detrend(values: &mut [f64]) -> f64 {
    let n = values.len() as f64;
    let middle = 0.5 * (n - 1.0);
    let mean = values.iter().sum::<f64>() / n;
    let (xy, xx) = values
        .iter()
        .enumerate()
        .fold((0.0, 0.0), |(xy, xx), (i, v)| {
            let x = i as f64 - middle;
            (xy + x * (v - mean), xx + x * x)
        });
    let slope = if xx > 0.0 { xy / xx } else { 0.0 };
    for (i, v) in values.iter_mut().enumerate() {
        *v -= mean + slope * (i as f64 - middle);
    }
    slope
}

/// Keeps the first terms of the cosine series, as many as make the expected squared
/// error least by Mallows' C_p (1973): what is left out, less the noise in it, plus
/// the noise in what is kept. Returns the standard deviation left in a point.
fn smooth(values: &mut [f64], variance: f64) -> f64 {
    let n = values.len();
    let mut work: Vec<Complex32> = values
        .iter()
        .chain(values.iter().rev())
        .map(|&v| Complex32::new(v as f32, 0.0))
        .collect();
    ComplexFft::forward(2 * n).process(&mut work);
    // |X|² of the mirrored signal is 4 times the squared cosine sum, whose variance
    // is n/2 per term: n·variance·2 per bin.
    // The noise is in the band alone.
    let expected = 2.0 * (n * OVERSAMPLED) as f64 * variance;
    let (mut best, mut least, mut sum) = (1, 0.0, 0.0);
    for (k, x) in work.iter().enumerate().take(n).skip(1) {
        sum += 2.0 * expected - f64::from(x.norm_sqr());
        if sum < least {
            least = sum;
            best = k + 1;
        }
    }
    let kept = work.len().min(2 * n);
    for (k, x) in work.iter_mut().enumerate() {
        if k >= best && k + best <= kept {
            *x = Complex32::default();
        }
    }
    ComplexFft::inverse(2 * n).process(&mut work);
    for (v, x) in values.iter_mut().zip(&work) {
        *v = f64::from(x.re) / (2 * n) as f64;
    }
    (variance * (best * OVERSAMPLED) as f64 / n as f64).sqrt()
}
