//! Tones: spectral lines found in a recording and measured.

pub mod detect;
pub mod kernel;
pub mod mean;
pub mod mended;
pub mod merge;
mod normal;
pub mod peaks;
mod pursuit;
pub mod refine;
pub mod regions;
pub mod statistic;
pub mod threshold;
pub mod track;
pub mod wander;

pub use track::TrackPoint;

use crate::spectrum::condition::Condition;
use crate::spectrum::display::Spectrum;
use crate::spectrum::plan::Plan;
use crate::spectrum::samples::Passes;
use crate::spectrum::{least_noise, slice, welch, whole};
use crate::units::{SeenHz, U95, amplitude_db, power_db};
use detect::Found;
use track::Track;

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

/// One spectral line that was seen.
#[derive(Debug, Clone, Default, PartialEq, serde::Serialize)]
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
    /// Frequency and phase over time, of a steady tone too; empty where the tone is too
    /// weak to be followed, or moves too fast. See [`track`].
    pub track: Vec<TrackPoint>,
    /// Length of the track's windows, s: the recording's over a power of two; 0 without
    /// a track.
    pub track_step_s: f64,
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
    /// What else is wrong with the samples, per channel.
    pub condition: Vec<Condition>,
    /// Weaker tones left out beyond [`MOST_TONES`].
    pub left_out: usize,
    /// The spectrum of each channel looked at, for looking at.
    pub spectra: Vec<Spectrum>,
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
    let mut spectra = Vec::new();
    let condition;
    match plan {
        Plan::Whole { grid, .. } => {
            let loaded = whole::load(recording, &|n| progress(n, frames))?;
            condition = loaded.condition;
            for (channel, samples) in loaded.channels.into_iter().enumerate() {
                if !chosen.contains(&channel) || samples.is_empty() {
                    continue;
                }
                let band = whole::transform(samples, grid, recording.rate_hz(), search.step);
                spectra.push(Spectrum::of_band(&band, channel, search.full_scale));
                let found = detect::detect(&band, false_alarms, &[]);
                per_channel.push((channel, tones_of(&found, &band, channel, search.full_scale)));
            }
        }
        Plan::Segments { segment, .. } => {
            let averaged = welch::average(recording, segment, &|n| progress(n, 2 * frames))?;
            spectra.extend(
                chosen
                    .iter()
                    .map(|&c| Spectrum::of_averaged(&averaged, c, search.full_scale)),
            );
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
                    band.floor = region.floor(band.samples);
                }
                for &channel in &chosen {
                    let mut tones = Vec::new();
                    for (region, band) in regions.iter().zip(&bands) {
                        if region.want.channel == channel {
                            let share = band.bins.len() as f64 / (band.grid / 2) as f64;
                            let mut found =
                                detect::detect(band, false_alarms * share, &[region.cells(band)]);
                            region.keep_core(&mut found, band);
                            tones.extend(tones_of(&found, band, channel, search.full_scale));
                        }
                    }
                    per_channel.push((channel, tones));
                }
            }
            condition = averaged.condition;
        }
    }
    let cell_hz = recording.rate_hz() / frames.max(1) as f64;
    let (tones, left_out) = merge::across_channels(per_channel, cell_hz, MOST_TONES);
    Ok(ToneSet {
        tones,
        plan,
        cell_hz,
        missing: condition.iter().map(|c| c.missing).collect(),
        condition,
        left_out,
        spectra,
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
    let tone = |fit: &detect::Fit| {
        let level_dbfs = amplitude_db(2.0 * fit.strength / band.samples as f64 / full_scale);
        let snr_db = power_db(fit.strength * fit.strength / fit.noise);
        Tone {
            number: 0,
            seen_hz: SeenHz((fit.bin * bin_hz).clamp(0.0, band.rate_hz / 2.0)),
            seen_hz_u95: student * U95 * fit.bin_sd * bin_hz,
            level_dbfs,
            snr_db,
            from_s: fit.present.0 * duration,
            to_s: fit.present.1 * duration,
            wander_hz: fit.wander * bin_hz,
            linewidth_hz: 2.355 * fit.wander * bin_hz,
            track: points(&fit.track, bin_hz, duration, band.rate_hz / 2.0),
            track_step_s: match fit.track.windows {
                0 => 0.0,
                windows => duration / windows as f64,
            },
            channels: vec![ChannelLevel {
                channel,
                level_dbfs,
                snr_db,
            }],
        }
    };
    found.tones.iter().map(tone).collect()
}

fn points(track: &Track, bin_hz: f64, duration: f64, half_hz: f64) -> Vec<TrackPoint> {
    track
        .points
        .iter()
        .map(|p| TrackPoint {
            at_s: (p.index as f64 + 0.5) * duration / track.windows as f64,
            seen_hz: SeenHz((p.bin * bin_hz).clamp(0.0, half_hz)),
            sd_hz: p.bin_sd * bin_hz,
            turns: p.turns,
            turns_sd: p.turns_sd,
        })
        .collect()
}
