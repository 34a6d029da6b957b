//! Tones: spectral lines found in a recording and measured.

use crate::units::SeenHz;

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
    /// Every channel in which it was seen, strongest first.
    pub channels: Vec<ChannelLevel>,
}
