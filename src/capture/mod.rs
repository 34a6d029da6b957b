//! Recordings in: what a file is, and its samples in blocks.
//!
//! A [`Capture`] is opened once and can be passed over as often as needed with
//! [`Capture::blocks`]; no pass ever holds more than one block of samples.
//!
//! WAV: `riff` walks the chunks without trusting a size, `wav` decodes blocks,
//! with `companded` for A-law and mu-law.
//! FLAC: `flac_head` reads what stands before frames, `flac` goes from one to
//! the next.
//! CSV: `text` and `line_limit` give bounded lines in UTF-8; `csv_lines`,
//! `csv_delimiter`, `csv_sniff`, `csv_headings`, `csv_rate` and `csv_time` find
//! the layout from the first lines, as far as `options` leave it open. `cells`
//! and `numbers` read cells, `stamps` and `dates` times; `clock_plan` and `clock`
//! turn these into frame numbers and a rate. `csv_split` splits plain rows in
//! place, `csv_rows` and `csv_scan` read all rows once, `csv` hands out blocks,
//! `stamped` rows with their own times.

mod cells;
mod clock;
mod clock_plan;
mod companded;
mod csv;
mod csv_delimiter;
mod csv_headings;
mod csv_lines;
mod csv_rate;
mod csv_rows;
mod csv_scan;
mod csv_sniff;
mod csv_split;
mod csv_time;
mod dates;
mod error;
mod flac;
mod flac_head;
#[cfg(fuzzing)]
pub mod fuzzing;
mod line_limit;
mod numbers;
mod options;
mod probe;
mod riff;
mod stamped;
mod stamps;
mod text;
mod wav;
mod wording;

use std::fs::File;
use std::path::{Path, PathBuf};

pub use error::CaptureError;
pub use options::{
    DecimalSign, LayoutOptions, OpenOptions, TextEncoding, TimeChoice, TimeNotation,
};
pub use stamped::{StampedBlock, StampedBlocks};

use probe::Kind;

/// Fewest samples per channel that are worth a look.
const LEAST_FRAMES: u64 = 16;
/// Most channels, so that no header makes us allocate without bound.
const MOST_CHANNELS: u64 = 4096;

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
    /// Half-width of its 95 % interval where time stamps tell the rate.
    pub rate_hz_u95: Option<f64>,
    /// In file order, never empty.
    pub channels: Vec<Channel>,
    /// Samples per channel.
    pub frames: u64,
    /// Container and sample format in a few words: "16-bit WAV".
    pub format: String,
    /// Samples are fractions of full scale (WAV), not physical values (CSV).
    pub normalised: bool,
    /// Smallest step between sample values, as a fraction of full scale, in
    /// `(0, 1]`: `2^-(bits - 1)` for an integer WAV, by the bits that carry data,
    /// not those of the container. Rounding to such steps adds noise of variance
    /// step²/12 spread over the whole band (Bennett 1948), so a noise floor
    /// measured below that tells of the rounding, not of the recorder's input.
    /// For A-law and mu-law it is the step around zero, where it is smallest.
    /// `None` for float WAV and CSV, whose steps are not known.
    pub step: Option<f64>,
    /// What the file was taken for: layout, time column, where the rate is from;
    /// one clause each.
    pub read_as: Vec<String>,
    /// Runs of samples missing between time stamps; their frames are NaN.
    /// 0 for formats whose frames have no stamps.
    pub gaps: u64,
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

impl Block {
    /// Frames in the block.
    pub fn frames(&self) -> usize {
        self.samples.first().map_or(0, Vec::len)
    }

    /// Empties the block for `channels` channels and keeps its memory.
    fn start(&mut self, first_frame: u64, channels: usize) {
        self.first_frame = first_frame;
        self.samples.resize_with(channels, Vec::new);
        self.samples.iter_mut().for_each(Vec::clear);
    }
}

/// An opened recording: what it is, and how to pass over its samples.
///
/// Holds no samples and no open file; [`Capture::blocks`] opens it anew.
#[derive(Debug, Clone)]
pub struct Capture {
    spec: Spec,
    recipe: Recipe,
}

#[derive(Debug, Clone)]
enum Recipe {
    Wav(wav::WavRecipe),
    Flac(flac::FlacRecipe),
    Csv(csv::CsvRecipe),
}

impl Capture {
    /// Finds out what the file at `path` is. Its content decides, not its
    /// name, but text named `.wav` is refused. A CSV is read through once: its
    /// rows are counted and its sample rate is measured.
    ///
    /// # Errors
    /// Where the file cannot be read or is no recording; see [`CaptureError`].
    pub fn open(path: &Path, options: &OpenOptions) -> Result<Capture, CaptureError> {
        if let Some(rate_hz) = options.rate_hz
            && !(rate_hz.is_finite() && rate_hz > 0.0)
        {
            return Err(CaptureError::BadRate { rate_hz });
        }
        let (mut file, length) = open_file(path)?;
        let (spec, recipe) = match probe::probe(&mut file, path)? {
            Kind::Wav => {
                let (spec, recipe) = wav::open(path.to_owned(), file, length, options)?;
                (spec, Recipe::Wav(recipe))
            }
            Kind::Flac => {
                let (spec, recipe) = flac::open(path.to_owned(), file, length, options)?;
                (spec, Recipe::Flac(recipe))
            }
            Kind::Text => {
                let (spec, recipe) = csv::open(path.to_owned(), options)?;
                (spec, Recipe::Csv(recipe))
            }
        };
        if spec.frames < LEAST_FRAMES && !options.any_length {
            return Err(CaptureError::TooShort {
                frames: spec.frames,
                least: LEAST_FRAMES,
            });
        }
        Ok(Capture { spec, recipe })
    }

    /// What the recording is.
    pub fn spec(&self) -> &Spec {
        &self.spec
    }

    /// Runs of samples missing between time stamps, as in [`Spec::gaps`].
    pub fn gaps(&self) -> u64 {
        self.spec.gaps
    }

    /// Starts a pass over all samples, `frames_per_block` frames at a time (at
    /// least 1). Every pass gives the same samples.
    ///
    /// # Errors
    /// Where the file can no longer be opened.
    pub fn blocks(&self, frames_per_block: usize) -> Result<Blocks, CaptureError> {
        let frames_per_block = frames_per_block.max(1);
        Ok(Blocks(match &self.recipe {
            Recipe::Wav(wav) => Pass::Wav(wav.blocks(frames_per_block)?),
            Recipe::Flac(flac) => Pass::Flac(Box::new(flac.blocks(frames_per_block)?)),
            Recipe::Csv(csv) => Pass::Csv(Box::new(csv.blocks(frames_per_block)?)),
        }))
    }

    /// Starts a pass over the rows that have a time of their own, with that time;
    /// `None` where the file has none (WAV, FLAC, or a CSV without a time column).
    ///
    /// # Errors
    /// Where the file can no longer be opened.
    pub fn stamped_blocks(
        &self,
        rows_per_block: usize,
    ) -> Result<Option<StampedBlocks>, CaptureError> {
        match &self.recipe {
            Recipe::Wav(_) | Recipe::Flac(_) => Ok(None),
            Recipe::Csv(csv) => csv.stamped(rows_per_block.max(1)),
        }
    }
}

/// A pass over the samples of a [`Capture`].
#[derive(Debug)]
pub struct Blocks(Pass);

#[derive(Debug)]
enum Pass {
    Wav(wav::WavBlocks),
    Flac(Box<flac::FlacBlocks>),
    Csv(Box<csv::CsvBlocks>),
}

impl Blocks {
    /// Fills `block` with the next frames, reusing its memory; every block is
    /// full but the last. `false`, and an empty block, at the end.
    ///
    /// # Errors
    /// Where the file cannot be read on, or is not what it was when opened.
    pub fn next_into(&mut self, block: &mut Block) -> Result<bool, CaptureError> {
        match &mut self.0 {
            Pass::Wav(wav) => wav.next_into(block),
            Pass::Flac(flac) => flac.next_into(block),
            Pass::Csv(csv) => csv.next_into(block),
        }
    }
}

/// Whether a file begins as a wave file does, whatever its name.
///
/// # Errors
/// If it cannot be read.
pub fn begins_as_wave(path: &Path) -> std::io::Result<bool> {
    let mut head = [0; 12];
    let got = riff::read_up_to(&mut File::open(path)?, &mut head)?;
    Ok(riff::is_wave(head.get(..got).unwrap_or_default()))
}

/// Opens a regular file and tells its length in bytes.
fn open_file(path: &Path) -> Result<(File, u64), CaptureError> {
    // Before opening: opening a pipe would wait for its writer.
    let meta = std::fs::metadata(path)?;
    if meta.is_dir() {
        return Err(CaptureError::NotAFile {
            what: "a directory",
        });
    }
    if !meta.is_file() {
        return Err(CaptureError::NotAFile {
            what: "a pipe or device",
        });
    }
    let file = File::open(path)?;
    if meta.len() == 0 {
        return Err(CaptureError::Empty);
    }
    Ok((file, meta.len()))
}

fn limit_channels(count: u64) -> Result<(), CaptureError> {
    if count > MOST_CHANNELS {
        return Err(CaptureError::TooManyChannels {
            count,
            limit: MOST_CHANNELS,
        });
    }
    Ok(())
}
