//! Tones: spectral lines found in a recording and measured.

pub mod detect;
pub mod kernel;
pub mod mended;
pub mod merge;
pub mod peaks;
pub mod refine;
pub mod regions;
pub mod statistic;
pub mod threshold;
pub mod wander;

use crate::spectrum::plan::Plan;
use crate::spectrum::samples::Passes;
use crate::spectrum::{least_noise, slice, welch, whole};
use crate::units::{SeenHz, U95, amplitude_db, power_db};
use detect::Found;

/// A tone's strength in one channel.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct ChannelLevel {
    /// Index into the recording's channels, from 0.
    pub channel: usize,
    /// dB, 0 = a sine whose amplitude is full scale.
    pub level_dbfs: f64,
    /// Tone power over the local noise power in one resolution cell of the file, dB.
    pub snr_db: f64,
}

/// A tone's frequency in one stretch of time.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct TrackPoint {
    /// Middle of the stretch, seconds from the start.
    pub at_s: f64,
    /// Seen frequency.
    pub seen_hz: SeenHz,
    /// Its standard deviation, Hz.
    pub sd_hz: f64,
}

/// One spectral line that was seen.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Tone {
    /// From 1, in order of seen frequency.
    pub number: usize,
    /// Mean frequency over the time present.
    pub seen_hz: SeenHz,
    /// Half-width of the 95 % interval of `seen_hz`, Hz.
    pub seen_hz_u95: f64,
    /// Level in the strongest channel, dB; 0 = full-scale sine (AES17 convention).
    pub level_dbfs: f64,
    /// SNR in the strongest channel, dB, in one resolution cell of the whole file.
    pub snr_db: f64,
    /// First and last moment the tone is present, seconds from the start.
    pub from_s: f64,
    /// See `from_s`.
    pub to_s: f64,
    /// rms deviation of the tone's frequency from its mean, Hz; 0 when steady
    /// within what can be resolved.
    pub wander_hz: f64,
    /// Full width at half height of a line broadened by normal wander: 2.355 × the
    /// rms wander, Hz; 0 when steady.
    pub linewidth_hz: f64,
    /// Frequency over time of a tone that wanders or comes and goes; empty for a
    /// steady one.
    pub track: Vec<TrackPoint>,
    /// Every channel in which it was seen, strongest first.
    pub channels: Vec<ChannelLevel>,
}

/// What to look for.
#[derive(Debug, Clone)]
pub struct Search {
    /// Expected number of tones found in a recording of pure noise.
    pub false_alarms: f64,
    /// Amplitude of a full-scale sine, in the unit of the samples.
    pub full_scale: f64,
    /// Least step between sample values, where there is one.
    pub step: Option<f64>,
    /// Channels to use, indices from 0; empty for all.
    pub channels: Vec<usize>,
}

impl Default for Search {
    fn default() -> Self {
        Search {
            false_alarms: 0.01,
            full_scale: 1.0,
            step: None,
            channels: Vec::new(),
        }
    }
}

/// The tones of a recording and how they were found.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct ToneSet {
    /// By rising frequency.
    pub tones: Vec<Tone>,
    /// The way it was analysed.
    pub plan: Plan,
    /// One resolution cell of the whole file, Hz.
    pub cell_hz: f64,
    /// Missing samples bridged, per channel.
    pub missing: Vec<u64>,
    /// Weaker tones left out beyond [`MOST_TONES`].
    pub left_out: usize,
}

/// Most tones reported of a recording, the strongest: a noiseless test signal can
/// have thousands of lines of its own quantising.
pub const MOST_TONES: usize = 500;

/// Finds and measures the tones of a recording.
///
/// `progress(done, of)` counts frames over all passes.
///
/// # Errors
/// The recording's own.
pub fn find<P: Passes>(
    recording: &P,
    search: &Search,
    progress: &(dyn Fn(u64, u64) + Sync),
) -> Result<ToneSet, P::Error> {
    let frames = recording.frames();
    let plan = Plan::new(frames, recording.channels());
    let chosen: Vec<usize> = (0..recording.channels())
        .filter(|c| search.channels.is_empty() || search.channels.contains(c))
        .collect();
    let false_alarms = search.false_alarms / chosen.len().max(1) as f64;
    let mut per_channel = Vec::new();
    let missing;
    match plan {
        Plan::Whole { grid, .. } => {
            let loaded = whole::load(recording, &|n| progress(n, frames))?;
            missing = loaded.missing;
            for (channel, samples) in loaded.channels.into_iter().enumerate() {
                if !chosen.contains(&channel) || samples.is_empty() {
                    continue;
                }
                let band = whole::transform(samples, grid, recording.rate_hz(), search.step);
                let found = detect::detect(&band, false_alarms);
                per_channel.push((channel, tones_of(&found, &band, channel, search.full_scale)));
            }
        }
        Plan::Segments { segment, .. } => {
            let averaged = welch::average(recording, segment, &|n| progress(n, 2 * frames))?;
            let regions: Vec<_> = chosen
                .iter()
                .flat_map(|&c| regions::regions(&averaged, c, false_alarms, frames))
                .collect();
            let wants: Vec<_> = regions.iter().map(|r| r.want).collect();
            if !wants.is_empty() {
                let mut bands = slice::cut(recording, segment, &wants, &|n| {
                    progress(frames + n, 2 * frames)
                })?;
                for (region, band) in regions.iter().zip(&mut bands) {
                    let power = averaged.mean_square(region.want.channel);
                    band.least_noise = least_noise(band.samples, power, search.step);
                }
                for &channel in &chosen {
                    let mut tones = Vec::new();
                    for (region, band) in regions.iter().zip(&bands) {
                        if region.want.channel == channel {
                            let share = band.bins.len() as f64 / (band.grid / 2) as f64;
                            let mut found = detect::detect(band, false_alarms * share);
                            region.keep_core(&mut found, band);
                            tones.extend(tones_of(&found, band, channel, search.full_scale));
                        }
                    }
                    per_channel.push((channel, tones));
                }
            }
            missing = averaged.missing;
        }
    }
    let cell_hz = recording.rate_hz() / frames.max(1) as f64;
    let (tones, left_out) = merge::across_channels(per_channel, cell_hz, MOST_TONES);
    Ok(ToneSet {
        tones,
        plan,
        cell_hz,
        missing,
        left_out,
    })
}

/// Bins to hertz and decibels.
fn tones_of(
    found: &Found,
    band: &crate::spectrum::Band,
    channel: usize,
    full_scale: f64,
) -> Vec<Tone> {
    let bin_hz = band.bin_hz();
    let duration = band.samples as f64 / band.rate_hz;
    // The noise is itself an estimate, worth about 93 cells: Student's factor to
    // first order, 1 + (z² + 1)/4n.
    let student = 1.0 + (U95 * U95 + 1.0) / (4.0 * 93.0);
    let tone = |bin: f64, sd: f64, strength: f64, noise: f64, present: (f64, f64), wander: f64| {
        let level_dbfs = amplitude_db(2.0 * strength / band.samples as f64 / full_scale);
        let snr_db = power_db(strength * strength / noise);
        Tone {
            number: 0,
            seen_hz: SeenHz((bin * bin_hz).clamp(0.0, band.rate_hz / 2.0)),
            seen_hz_u95: student * U95 * sd * bin_hz,
            level_dbfs,
            snr_db,
            from_s: present.0 * duration,
            to_s: present.1 * duration,
            wander_hz: wander * bin_hz,
            linewidth_hz: 2.355 * wander * bin_hz,
            track: Vec::new(),
            channels: vec![ChannelLevel {
                channel,
                level_dbfs,
                snr_db,
            }],
        }
    };
    let steady = found.lines.iter().map(|l| {
        let strength = l.c.norm() * band.samples as f64;
        tone(l.bin, l.bin_sd, strength, l.noise, (0.0, 1.0), 0.0)
    });
    let moving = found.wanderers.iter().map(|w| Tone {
        track: w
            .track
            .iter()
            .map(|p| TrackPoint {
                at_s: p.at * duration,
                seen_hz: SeenHz((p.bin * bin_hz).clamp(0.0, band.rate_hz / 2.0)),
                sd_hz: p.sd * bin_hz,
            })
            .collect(),
        ..tone(w.bin, w.bin_sd, w.strength, w.noise, w.present, w.wander)
    });
    steady.chain(moving).collect()
}
