//! Recordings in: what a file is, and its samples in blocks.
//!
//! A [`Capture`] is opened once and can be passed over as often as needed with
//! [`Capture::blocks`]; no pass ever holds more than one block of samples.

use std::path::PathBuf;

/// One channel of a recording.
#[derive(Debug, Clone, PartialEq)]
pub struct Channel {
    /// Column name in a CSV; the 1-based number in a WAV.
    pub name: String,
    /// Unit of the samples where the file tells it.
    pub unit: Option<String>,
    /// Subtracted from every sample before it is narrowed to `f32`, so that a
    /// small tone on a large constant survives. 0 for WAV.
    pub offset: f64,
}

/// What a recording is, known before its samples are read.
#[derive(Debug, Clone, PartialEq)]
pub struct Spec {
    /// The file.
    pub path: PathBuf,
    /// Samples per second and channel, > 0.
    pub rate_hz: f64,
    /// In file order, never empty.
    pub channels: Vec<Channel>,
    /// Samples per channel.
    pub frames: u64,
    /// Container and sample format in a few words: "16-bit WAV".
    pub format: String,
    /// Samples are fractions of full scale (WAV), not physical values (CSV).
    pub normalised: bool,
    /// What was assumed or mended while reading, one clause each.
    pub notes: Vec<String>,
}

impl Spec {
    /// Length in seconds.
    pub fn duration_s(&self) -> f64 {
        self.frames as f64 / self.rate_hz
    }
}

/// A run of samples, one vector per channel, all equally long.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Block {
    /// Index of the first frame, from 0.
    pub first_frame: u64,
    /// `samples[channel][i]`; NaN where a value is missing.
    pub samples: Vec<Vec<f32>>,
}
