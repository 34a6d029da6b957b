//! Samples of a WAV file, decoded block by block.

use std::fs::File;
use std::io::{Read, Seek, SeekFrom};
use std::path::PathBuf;

use super::companded::{a_law, mu_law};
use super::error::CaptureError;
use super::riff::{self, Coding, Format, Layout};
use super::wording::nine_digits;
use super::{Block, Channel, OpenOptions, Spec};

/// Bytes read at once: fits the second-level cache, so that the strided passes
/// over several channels do not go back to memory.
const PIECE: usize = 128 * 1024;

/// All that is needed to pass over the samples.
#[derive(Debug, Clone)]
pub(super) struct WavRecipe {
    path: PathBuf,
    layout: Layout,
    /// Bits to move samples up, so that full scale is the container's.
    shift: u32,
}

/// Reads the header of `file`, `length` bytes long.
pub(super) fn open(
    path: PathBuf,
    mut file: File,
    length: u64,
    options: &OpenOptions,
) -> Result<(Spec, WavRecipe), CaptureError> {
    let layout = riff::walk(&mut file, length)?;
    if layout.frames == 0 {
        return Err(CaptureError::NoSamples);
    }
    let format = layout.format;
    let mut notes = layout.notes.clone();
    let rate_hz = match options.rate_hz {
        Some(rate_hz) => rate_hz,
        None if format.rate_hz == 0 => {
            return Err(CaptureError::BadWavHeader {
                what: "sample rate 0 (give the sample rate with --rate HZ)".into(),
            });
        }
        None => f64::from(format.rate_hz),
    };
    if options.rate_hz.is_some() {
        let (rate, header) = (nine_digits(rate_hz), format.rate_hz);
        notes.push(if rate == header.to_string() {
            format!("sample rate {rate} Hz taken from --rate; the header tells the same")
        } else {
            format!("sample rate {rate} Hz taken from --rate, not {header} Hz from the header")
        });
    }
    let (shift, step) = match format.coding {
        Coding::Float => (0, None),
        // Least steps of 16 and 8 in 16 bits.
        Coding::ALaw => (0, Some(2f64.powi(-11))),
        Coding::MuLaw => (0, Some(2f64.powi(-12))),
        Coding::Integer => {
            let place = find_samples(&mut file, &layout, &mut notes)?;
            // Exact: a power of two.
            (place.shift, Some(2f64.powi(1 - i32::from(place.bits))))
        }
    };
    let spec = Spec {
        path: path.clone(),
        rate_hz,
        rate_hz_u95: None,
        read_as: vec![format!(
            "rate from {}",
            match options.rate_hz {
                Some(_) => "--rate",
                None => "the header",
            }
        )],
        gaps: 0,
        channels: (1..=format.channels)
            .map(|n| Channel {
                name: n.to_string(),
                unit: None,
                offset: 0.0,
            })
            .collect(),
        frames: layout.frames,
        format: format_name(&layout),
        normalised: true,
        step,
        notes,
    };
    Ok((
        spec,
        WavRecipe {
            path,
            layout,
            shift,
        },
    ))
}

fn format_name(layout: &Layout) -> String {
    let Format {
        coding,
        valid_bits,
        width,
        ..
    } = layout.format;
    let container = match layout {
        Layout { large: true, .. } => "RF64",
        Layout { big_end: true, .. } => "RIFX WAV",
        _ => "WAV",
    };
    match coding {
        Coding::Float => format!("{valid_bits}-bit float {container}"),
        Coding::ALaw => format!("A-law {container}"),
        Coding::MuLaw => format!("mu-law {container}"),
        Coding::Integer if valid_bits == 8 * width => format!("{valid_bits}-bit {container}"),
        Coding::Integer => format!("{valid_bits}-in-{}-bit {container}", 8 * width),
    }
}

/// Which bits of each container carry the sample.
struct Place {
    /// Idle ones above it.
    shift: u32,
    /// Its own.
    bits: u16,
}

/// Finds the bits that carry samples.
///
/// Where a container has more bits than the sample, the specification puts the
/// sample at its upper end, but some writers put it at the lower end. The data
/// tell: a sample at the upper end leaves the lowest bits 0; above one at the
/// lower end its sign is repeated, or the bits are 0. Where neither holds, the
/// whole container is used.
fn find_samples(
    file: &mut File,
    layout: &Layout,
    notes: &mut Vec<String>,
) -> Result<Place, CaptureError> {
    let Format {
        valid_bits,
        width,
        channels,
        ..
    } = layout.format;
    let container = 8 * width;
    let spare = container - valid_bits;
    let whole = Place {
        shift: 0,
        bits: container,
    };
    if spare == 0 || width == 1 {
        return Ok(whole);
    }
    // Enough that a run of samples that happen to end in zeros does not decide.
    const ENOUGH: u64 = 10_000;
    let (mut upper, mut repeated, mut zero) = (true, true, true);
    let mut left = layout.frames * u64::from(channels) * u64::from(width);
    let mut seen = 0;
    let mut raw = vec![0; PIECE - PIECE % usize::from(width)];
    file.seek(SeekFrom::Start(layout.data_start))?;
    while left > 0 && seen < ENOUGH {
        let wanted = raw.len().min(usize::try_from(left).unwrap_or(usize::MAX));
        let got = riff::read_up_to(file, raw.get_mut(..wanted).unwrap_or_default())?;
        if got == 0 {
            break;
        }
        left -= got as u64;
        for bytes in raw
            .get(..got)
            .unwrap_or_default()
            .chunks_exact(width.into())
        {
            let add = |sum: i64, &byte: &u8| sum << 8 | i64::from(byte);
            let value = if layout.big_end {
                bytes.iter().fold(0, add)
            } else {
                bytes.iter().rev().fold(0, add)
            };
            let extended = value << (64 - container) >> (64 - container);
            upper &= value & ((1 << spare) - 1) == 0;
            repeated &= extended << (64 - valid_bits) >> (64 - valid_bits) == extended;
            zero &= value >> valid_bits == 0;
            seen += u64::from(value != 0);
        }
    }
    if upper {
        return Ok(Place {
            shift: 0,
            bits: valid_bits,
        });
    }
    if repeated || zero {
        notes.push(format!(
            "{valid_bits}-bit samples at the lower end of {container} bits"
        ));
        return Ok(Place {
            shift: spare.into(),
            bits: valid_bits,
        });
    }
    notes.push(format!(
        "header says {valid_bits} bits, but all {container} are used"
    ));
    Ok(whole)
}

/// One pass over the samples.
#[derive(Debug)]
pub(super) struct WavBlocks {
    recipe: WavRecipe,
    file: File,
    frames_per_block: usize,
    next_frame: u64,
    raw: Vec<u8>,
}

impl WavRecipe {
    pub(super) fn blocks(&self, frames_per_block: usize) -> Result<WavBlocks, CaptureError> {
        let mut file = File::open(&self.path)?;
        file.seek(SeekFrom::Start(self.layout.data_start))?;
        let frame = self.frame_bytes();
        let piece = (PIECE / frame).clamp(1, frames_per_block) * frame;
        Ok(WavBlocks {
            recipe: self.clone(),
            file,
            frames_per_block,
            next_frame: 0,
            raw: vec![0; piece],
        })
    }

    fn frame_bytes(&self) -> usize {
        usize::from(self.layout.format.width) * usize::from(self.layout.format.channels)
    }

    /// Appends the frames in `bytes` to one vector per channel.
    fn decode(&self, bytes: &[u8], samples: &mut [Vec<f32>]) {
        let shift = self.shift;
        let Format { coding, width, .. } = self.layout.format;
        // Powers of two: exact.
        const FULL_16: f32 = 1.0 / 32_768.0;
        const FULL_32: f32 = 1.0 / 2_147_483_648.0;
        match (coding, width) {
            (Coding::ALaw, _) => deal(bytes, samples, |[byte]| f32::from(a_law(byte)) * FULL_16),
            (Coding::MuLaw, _) => deal(bytes, samples, |[byte]| f32::from(mu_law(byte)) * FULL_16),
            (Coding::Integer, 1) => {
                deal(bytes, samples, |[byte]| (f32::from(byte) - 128.0) / 128.0);
            }
            (Coding::Integer, 2) => deal(bytes, samples, |pair| {
                f32::from(i16::from_le_bytes(pair) << shift) * FULL_16
            }),
            (Coding::Integer, 3) => deal(bytes, samples, |[a, b, c]| {
                (i32::from_le_bytes([0, a, b, c]) << shift) as f32 * FULL_32
            }),
            (Coding::Integer, 4) => deal(bytes, samples, |four| {
                (i32::from_le_bytes(four) << shift) as f32 * FULL_32
            }),
            (Coding::Integer, 5) => deal(bytes, samples, |five: [u8; 5]| wide(&five, shift)),
            (Coding::Integer, 6) => deal(bytes, samples, |six: [u8; 6]| wide(&six, shift)),
            (Coding::Integer, 7) => deal(bytes, samples, |seven: [u8; 7]| wide(&seven, shift)),
            (Coding::Integer, _) => deal(bytes, samples, |eight: [u8; 8]| wide(&eight, shift)),
            (Coding::Float, 8) => {
                deal(bytes, samples, |eight| {
                    present(f64::from_le_bytes(eight) as f32)
                });
            }
            (Coding::Float, _) => deal(bytes, samples, |four| present(f32::from_le_bytes(four))),
        }
    }
}

/// NaN is the one mark of a missing sample.
fn present(sample: f32) -> f32 {
    if sample.is_finite() { sample } else { f32::NAN }
}

/// An integer of more than four bytes, whose upper end is that of 64 bits.
fn wide(bytes: &[u8], shift: u32) -> f32 {
    const FULL_64: f32 = 1.0 / 9_223_372_036_854_775_808.0;
    let add = |sum: u64, &byte: &u8| sum << 8 | u64::from(byte);
    let spare = 64 - 8 * bytes.len() as u32;
    let value = bytes.iter().rev().fold(0, add) << spare << shift;
    (value as i64) as f32 * FULL_64
}

/// Deals interleaved samples of `W` bytes out to the channels.
fn deal<const W: usize>(
    bytes: &[u8],
    samples: &mut [Vec<f32>],
    decode: impl Fn([u8; W]) -> f32 + Copy,
) {
    let one = |bytes: &[u8]| bytes.try_into().map_or(f32::NAN, decode);
    if let [only] = samples {
        only.extend(bytes.chunks_exact(W).map(one));
        return;
    }
    let frame = W * samples.len();
    for (n, channel) in samples.iter_mut().enumerate() {
        // From the channel's first byte on, its samples start each piece.
        let shifted = bytes.get(n * W..).unwrap_or_default();
        channel.extend(
            shifted
                .chunks(frame)
                .map(|piece| one(piece.get(..W).unwrap_or_default())),
        );
    }
}

impl WavBlocks {
    pub(super) fn next_into(&mut self, block: &mut Block) -> Result<bool, CaptureError> {
        let Layout { format, frames, .. } = self.recipe.layout;
        let left = frames.saturating_sub(self.next_frame);
        let frame = self.recipe.frame_bytes();
        block.start(self.next_frame, format.channels.into());
        let mut wanted = self
            .frames_per_block
            .min(usize::try_from(left).unwrap_or(usize::MAX));
        if wanted == 0 {
            return Ok(false);
        }
        self.next_frame += wanted as u64;
        while wanted > 0 {
            let piece = wanted.min(self.raw.len() / frame);
            let raw = self.raw.get_mut(..piece * frame).unwrap_or_default();
            self.file.read_exact(raw).map_err(|e| match e.kind() {
                std::io::ErrorKind::UnexpectedEof => CaptureError::Changed {
                    what: "it became shorter".into(),
                },
                _ => e.into(),
            })?;
            if self.recipe.layout.big_end {
                raw.chunks_exact_mut(format.width.into())
                    .for_each(<[u8]>::reverse);
            }
            self.recipe.decode(raw, &mut block.samples);
            wanted -= piece;
        }
        Ok(true)
    }
}
