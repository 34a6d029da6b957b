//! FLAC (RFC 9639): frames found and decoded one by one, so that a damaged one
//! costs its own samples and no others. Decoding is claxon's.

use std::fs::File;
use std::io::{Cursor, Read, Seek, SeekFrom};
use std::path::PathBuf;

use claxon::frame::FrameReader;

use super::error::CaptureError;
use super::flac_head::{self, Head};
use super::wording::{count, nine_digits};
use super::{Block, Channel, OpenOptions, Spec};

/// Bytes held at least, where the file has them: more than any frame takes
/// (65,535 samples of 8 channels and 24 bits).
const LARGEST_FRAME: usize = 1_600_000;
/// Bytes read at a time beyond that.
const PIECE: usize = 1 << 18;
/// Places tried in vain before the rest is given up: each costs a frame's work.
const MOST_TRIES: u32 = 2000;

/// All that is needed to pass over the samples.
#[derive(Debug, Clone)]
pub(super) struct FlacRecipe {
    path: PathBuf,
    head: Head,
    frames: u64,
}

/// Reads the head of `file`, then decodes it once to learn what is in it.
pub(super) fn open(
    path: PathBuf,
    mut file: File,
    length: u64,
    options: &OpenOptions,
) -> Result<(Spec, FlacRecipe), CaptureError> {
    let head = flac_head::read(&mut file, length)?;
    let mut notes = Vec::new();
    let (rate_hz, place) = match (options.rate_hz, head.rate_hz) {
        (Some(given), told) => {
            notes.push(format!(
                "sample rate {} Hz taken from --rate, not {told} Hz from the header",
                nine_digits(given)
            ));
            (given, "--rate")
        }
        (None, 0) => {
            return Err(CaptureError::BadFlac {
                what: "sample rate 0 (give the sample rate with --rate HZ)".into(),
            });
        }
        (None, told) => (f64::from(told), "the header"),
    };
    let mut decoder = Decoder::new(file, head)?;
    let mut found = 0u64;
    while let Some(run) = decoder.next_run()? {
        found += run.missing + run.frames as u64;
    }
    if found == 0 {
        return Err(match decoder.fault {
            Some(fault) => CaptureError::BadFlac { what: fault },
            None => CaptureError::NoSamples,
        });
    }
    decoder.note(found, &mut notes);
    let spec = Spec {
        path: path.clone(),
        rate_hz,
        rate_hz_u95: None,
        channels: (1..=head.channels)
            .map(|n| Channel {
                name: n.to_string(),
                unit: None,
                offset: 0.0,
            })
            .collect(),
        frames: found,
        format: format!("{}-bit FLAC", head.bits),
        normalised: true,
        step: Some(2f64.powi(1 - i32::from(head.bits))),
        read_as: vec![format!("rate from {place}")],
        gaps: 0,
        notes,
    };
    let recipe = FlacRecipe {
        path,
        head,
        frames: found,
    };
    Ok((spec, recipe))
}

/// A frame's samples, after so many that were lost.
struct Run {
    missing: u64,
    frames: usize,
}

/// Goes from frame to frame.
#[derive(Debug)]
struct Decoder {
    file: File,
    head: Head,
    /// A stretch of the file, and where in it the next frame starts.
    buffer: Vec<u8>,
    at: usize,
    ended: bool,
    /// Samples of the last frame, one channel after the other.
    samples: Vec<i32>,
    next_sample: u64,
    tries: u32,
    /// Places where frames were damaged, samples lost there, and what was wrong
    /// first.
    damaged: u64,
    lost: u64,
    fault: Option<String>,
    /// The last frame is not whole.
    cut: bool,
}

impl Decoder {
    fn new(mut file: File, head: Head) -> Result<Decoder, CaptureError> {
        file.seek(SeekFrom::Start(head.frames_start))?;
        Ok(Decoder {
            file,
            head,
            buffer: Vec::new(),
            at: 0,
            ended: false,
            samples: Vec::new(),
            next_sample: 0,
            tries: 0,
            damaged: 0,
            lost: 0,
            fault: None,
            cut: false,
        })
    }

    /// Makes sure that a whole frame is at hand, if the file has one.
    fn fill(&mut self) -> Result<(), CaptureError> {
        let held = self.buffer.len() - self.at;
        if self.ended || held >= LARGEST_FRAME {
            return Ok(());
        }
        self.buffer.drain(..self.at);
        self.at = 0;
        let room = (LARGEST_FRAME + PIECE - held) as u64;
        let file = &mut self.file;
        let got = file.take(room).read_to_end(&mut self.buffer)?;
        self.ended = (got as u64) < room;
        Ok(())
    }

    /// Decodes the next frame into `samples`; `None` at the end.
    fn next_run(&mut self) -> Result<Option<Run>, CaptureError> {
        self.fill()?;
        if self.at >= self.buffer.len() {
            return Ok(None);
        }
        match self.decode(self.at) {
            Ok(frame) => return Ok(Some(self.take(&frame, 0))),
            Err(fault) => {
                // The end of the stream, with tags behind it.
                let rest = self.buffer.get(self.at..).unwrap_or_default();
                if self.head.total == Some(self.next_sample)
                    || rest.starts_with(b"TAG")
                    || rest.starts_with(b"APETAGEX")
                    || rest.iter().all(|&byte| byte == 0) && self.ended
                {
                    return Ok(None);
                }
                self.fault.get_or_insert(fault);
            }
        }
        self.damaged += 1;
        self.resume()
    }

    /// Looks for the next whole frame.
    fn resume(&mut self) -> Result<Option<Run>, CaptureError> {
        let mut skipped = 0u64;
        loop {
            let rest = self.buffer.get(self.at + 1..).unwrap_or_default();
            match rest.windows(2).position(flac_head::is_sync) {
                Some(step) => {
                    self.at += 1 + step;
                    skipped += 1 + step as u64;
                    self.fill()?;
                    if let Ok(frame) = self.decode(self.at) {
                        let run = self.take(&frame, skipped);
                        self.lost += run.missing;
                        return Ok(Some(run));
                    }
                    self.tries += 1;
                }
                None if self.ended => break,
                None => {
                    let step = rest.len();
                    self.at += step;
                    skipped += step as u64;
                    self.fill()?;
                }
            }
            if self.tries > MOST_TRIES {
                break;
            }
        }
        self.cut = true;
        self.at = self.buffer.len();
        self.ended = true;
        Ok(None)
    }

    /// Decodes the frame at a place of the buffer.
    fn decode(&mut self, at: usize) -> Result<claxon::Block, String> {
        let bytes = self.buffer.get(at..).unwrap_or_default();
        // What this stream does not hold is found by chance in damage.
        if !self.head.fits(bytes) {
            return Err("a frame that is not of this stream".into());
        }
        let mut reader = FrameReader::new(Cursor::new(bytes));
        let samples = std::mem::take(&mut self.samples);
        match reader.read_next_or_eof(samples) {
            Ok(Some(block)) if block.channels() == u32::from(self.head.channels) => {
                let used = reader.into_inner().position();
                // Bounded by the buffer's length.
                self.at = at + used as usize;
                Ok(block)
            }
            Ok(_) => Err("a frame with another number of channels".into()),
            Err(claxon::Error::IoError(_)) => Err("the file ends within a frame".into()),
            Err(claxon::Error::FormatError(what) | claxon::Error::Unsupported(what)) => {
                Err(what.to_owned())
            }
        }
    }

    /// Takes over a decoded frame, found after so many skipped bytes.
    fn take(&mut self, block: &claxon::Block, skipped: u64) -> Run {
        let frames = block.duration() as usize;
        self.samples.clear();
        for channel in 0..block.channels() {
            self.samples.extend_from_slice(block.channel(channel));
        }
        let mut missing = 0;
        if skipped > 0 {
            // The frame knows its place; what cannot be in the bytes skipped
            // is not believed.
            let start = self.head.start_of(block);
            let gap = start.saturating_sub(self.next_sample);
            let most = (skipped / flac_head::LEAST_FRAME + 1) * self.head.most_samples();
            missing = if gap <= most { gap } else { 0 };
        }
        self.next_sample += missing + frames as u64;
        Run { missing, frames }
    }

    /// Says what was lost.
    fn note(&self, found: u64, notes: &mut Vec<String>) {
        let total = self.head.total.filter(|&total| total > found);
        if self.lost > 0 || self.damaged > u64::from(self.cut) {
            notes.push(format!(
                "{} ({}): {} taken as missing",
                count(self.damaged, "damaged place", "damaged places"),
                self.fault.as_deref().unwrap_or("unknown"),
                count(self.lost, "sample", "samples"),
            ));
        }
        match total {
            Some(total) => notes.push(format!(
                "the file ends early: {found} of {} read",
                count(total, "sample", "samples")
            )),
            None if self.cut => {
                notes.push("the file ends within a frame: read as far as it goes".into());
            }
            None => {}
        }
    }
}

impl FlacRecipe {
    pub(super) fn blocks(&self, frames_per_block: usize) -> Result<FlacBlocks, CaptureError> {
        Ok(FlacBlocks {
            decoder: Decoder::new(File::open(&self.path)?, self.head)?,
            scale: 2f32.powi(1 - i32::from(self.head.bits)),
            frames: self.frames,
            frames_per_block,
            next_frame: 0,
            run: Run {
                missing: 0,
                frames: 0,
            },
            given: 0,
        })
    }
}

/// One pass over the samples.
#[derive(Debug)]
pub(super) struct FlacBlocks {
    decoder: Decoder,
    scale: f32,
    frames: u64,
    frames_per_block: usize,
    next_frame: u64,
    /// The run being handed out, and its frames handed out.
    run: Run,
    given: usize,
}

impl std::fmt::Debug for Run {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        write!(f, "{} after {} missing", self.frames, self.missing)
    }
}

impl FlacBlocks {
    pub(super) fn next_into(&mut self, block: &mut Block) -> Result<bool, CaptureError> {
        block.start(self.next_frame, self.decoder.head.channels.into());
        let mut filled = 0;
        while filled < self.frames_per_block {
            let room = self.frames_per_block - filled;
            if self.run.missing > 0 {
                let n = room.min(usize::try_from(self.run.missing).unwrap_or(usize::MAX));
                for channel in &mut block.samples {
                    channel.resize(filled + n, f32::NAN);
                }
                self.run.missing -= n as u64;
                filled += n;
                continue;
            }
            if self.given == self.run.frames {
                let Some(run) = self.decoder.next_run()? else {
                    break;
                };
                self.run = run;
                self.given = 0;
                continue;
            }
            let n = room.min(self.run.frames - self.given);
            let channels = self.decoder.samples.chunks_exact(self.run.frames);
            for (out, samples) in block.samples.iter_mut().zip(channels) {
                let samples = samples.get(self.given..self.given + n).unwrap_or_default();
                out.extend(samples.iter().map(|&sample| sample as f32 * self.scale));
            }
            self.given += n;
            filled += n;
        }
        self.next_frame += filled as u64;
        let ended = filled < self.frames_per_block;
        if self.next_frame > self.frames || (ended && self.next_frame != self.frames) {
            return Err(CaptureError::Changed {
                what: "it has other samples now".into(),
            });
        }
        Ok(filled > 0)
    }
}
