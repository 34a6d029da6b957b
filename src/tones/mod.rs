//! Tones: spectral lines found in a recording and measured.

pub mod cycle;
pub mod detect;
pub mod fits;
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
pub mod switching;
pub mod threshold;
pub mod together;
pub mod track;
pub mod wander;

pub use track::TrackPoint;

use crate::spectrum::condition::Condition;
use crate::spectrum::display::Spectrum;
use crate::spectrum::plan::Plan;
use crate::spectrum::samples::Passes;
use crate::spectrum::{Band, least_noise, slice, welch, whole};
use crate::units::{SeenHz, U95, amplitude_db, power_db};
use detect::Found;
use fits::Fit;
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
    /// Share of the time from `from_s` to `to_s` in which it is there, `(0, 1]`.
    pub duty: f64,
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
    // Each channel's share, and one for all of them together.
    let shares = match chosen.len() {
        0 | 1 => 1,
        several => several + 1,
    };
    let false_alarms = search.false_alarms / shares as f64;
    let mut rows = Rows::default();
    let mut spectra = Vec::new();
    let condition;
    match plan {
        Plan::Whole { grid, .. } => {
            let loaded = whole::load(recording, &|n| progress(n, frames))?;
            condition = loaded.condition;
            let mut searched = Vec::new();
            for (channel, samples) in loaded.channels.into_iter().enumerate() {
                if !chosen.contains(&channel) || samples.is_empty() {
                    continue;
                }
                let band = whole::transform(samples, grid, recording.rate_hz(), search.step);
                spectra.push(Spectrum::of_band(&band, channel, search.full_scale));
                let found = detect::detect(&band, false_alarms, &[]);
                rows.own(&found, channel, search.full_scale);
                searched.push((channel, found));
            }
            rows.shared(&searched, false_alarms, search.full_scale);
        }
        Plan::Segments { segment, .. } => {
            let averaged = welch::average(recording, segment, &|n| progress(n, 2 * frames))?;
            spectra.extend(
                chosen
                    .iter()
                    .map(|&c| Spectrum::of_averaged(&averaged, c, search.full_scale)),
            );
            let regions = regions::regions(&averaged, &chosen, false_alarms, frames);
            let wants: Vec<_> = regions.iter().flat_map(|r| r.wants()).collect();
            if !wants.is_empty() {
                let mut bands = slice::cut(recording, segment, &wants, &|n| {
                    progress(frames + n, 2 * frames)
                })?
                .into_iter();
                for region in &regions {
                    let mut searched = Vec::new();
                    for &channel in &region.channels {
                        let Some(mut band) = bands.next() else {
                            continue;
                        };
                        let power = averaged.mean_square(channel);
                        band.least_noise = least_noise(band.samples, power, search.step);
                        band.floor = region.floor(channel, band.samples);
                        let share = band.bins.len() as f64 / (band.grid / 2) as f64;
                        let mut found = if region.together {
                            Found::nothing(band)
                        } else {
                            detect::detect(&band, false_alarms * share, &[region.cells(&band)])
                        };
                        region.keep_core(&mut found);
                        rows.own(&found, channel, search.full_scale);
                        searched.push((channel, found));
                    }
                    let share = region.share(averaged.segment);
                    rows.shared(&searched, false_alarms * share, search.full_scale);
                }
            }
            condition = averaged.condition;
        }
    }
    let cell_hz = recording.rate_hz() / frames.max(1) as f64;
    let (tones, left_out) = merge::across_channels(rows.tones, cell_hz, MOST_TONES);
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

/// Rows as they are found, channel by channel.
#[derive(Default)]
struct Rows {
    tones: Vec<Tone>,
}

/// The noise is itself an estimate, worth about 93 cells: Student's factor to first
/// order, 1 + (z² + 1)/4n.
const STUDENT: f64 = 1.0 + (U95 * U95 + 1.0) / (4.0 * 93.0);
/// SNR in one cell at which a tone known from other channels counts as seen in one
/// more: noise exceeds it once in 10 000 times.
const SEEN_TOO: f64 = 9.2;
/// And the least at which a channel is named of those that only together show a tone.
const CONTRIBUTES: f64 = 4.0;

impl Rows {
    /// One channel's own tones: bins to hertz and decibels.
    fn own(&mut self, found: &Found, channel: usize, full_scale: f64) {
        let band = &found.rest;
        let bin_hz = band.bin_hz();
        let duration = band.samples as f64 / band.rate_hz;
        self.tones.extend(found.tones.iter().map(|fit| {
            let level = level(channel, fit.strength, fit.noise, band.samples, full_scale);
            Tone {
                number: 0,
                seen_hz: SeenHz((fit.bin * bin_hz).clamp(0.0, band.rate_hz / 2.0)),
                seen_hz_u95: STUDENT * U95 * fit.bin_sd * bin_hz,
                level_dbfs: level.level_dbfs,
                snr_db: level.snr_db,
                from_s: fit.present.0 * duration,
                to_s: fit.present.1 * duration,
                duty: fit.duty,
                wander_hz: fit.wander * bin_hz,
                linewidth_hz: 2.355 * fit.wander * bin_hz,
                track: points(&fit.track, bin_hz, duration, band.rate_hz / 2.0),
                track_step_s: match fit.track.windows {
                    0 => 0.0,
                    windows => duration / windows as f64,
                },
                channels: vec![level],
            }
        }));
    }

    /// What channels show together, and what one channel's steady tones leave in the
    /// others.
    fn shared(&mut self, searched: &[(usize, Found)], false_alarms: f64, full_scale: f64) {
        if searched.len() < 2 {
            return;
        }
        let bands: Vec<&Band> = searched.iter().map(|(_, f)| &f.rest).collect();
        let known: Vec<&Fit> = searched.iter().flat_map(|(_, f)| &f.tones).collect();
        for joint in together::together(&bands, &known, false_alarms) {
            let Some(band) = bands.first() else { return };
            let mut channels: Vec<ChannelLevel> = searched
                .iter()
                .zip(&joint.channels)
                .filter(|(_, (strength, noise))| strength * strength > CONTRIBUTES * noise)
                .map(|((channel, _), &(strength, noise))| {
                    level(*channel, strength, noise, band.samples, full_scale)
                })
                .collect();
            channels.sort_by(|a, b| b.snr_db.total_cmp(&a.snr_db));
            let Some(strongest) = channels.first() else {
                continue;
            };
            self.tones.push(Tone {
                seen_hz: SeenHz((joint.bin * band.bin_hz()).clamp(0.0, band.rate_hz / 2.0)),
                seen_hz_u95: STUDENT * U95 * joint.bin_sd * band.bin_hz(),
                level_dbfs: strongest.level_dbfs,
                snr_db: strongest.snr_db,
                to_s: band.samples as f64 / band.rate_hz,
                duty: 1.0,
                channels,
                ..Tone::default()
            });
        }
        for (channel, found) in searched {
            let band = &found.rest;
            let half = band.rate_hz / 2.0;
            let mut more = Vec::new();
            for tone in &mut self.tones {
                let bin = tone.seen_hz.0 / band.bin_hz();
                let inside =
                    bin >= band.first_bin as f64 && bin < (band.first_bin + band.bins.len()) as f64;
                let steady = tone.wander_hz == 0.0 && tone.seen_hz.0 < half;
                let near = |f: &&Fit| (f.bin - bin).abs() < 4.0 + 3.0 * f.wander;
                if !inside
                    || !steady
                    || tone.channels.iter().any(|c| c.channel == *channel)
                    || found.tones.iter().any(|f| near(&f))
                {
                    continue;
                }
                let strength = together::strength(band, bin);
                let noise = together::noise(band, bin);
                if strength * strength > SEEN_TOO * noise {
                    more.push((
                        tone,
                        level(*channel, strength, noise, band.samples, full_scale),
                    ));
                }
            }
            for (tone, level) in more {
                tone.channels.push(level);
            }
        }
    }
}

fn level(
    channel: usize,
    strength: f64,
    noise: f64,
    samples: usize,
    full_scale: f64,
) -> ChannelLevel {
    ChannelLevel {
        channel,
        level_dbfs: amplitude_db(2.0 * strength / samples as f64 / full_scale),
        snr_db: power_db(strength * strength / noise),
    }
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
