//! Where samples come from, as the spectrum sees it: something that can be
//! passed over again and again in blocks.

use crate::capture::{Block, Blocks, Capture, CaptureError};

/// Frames asked for at a time: small enough to stay in cache, large enough that
/// a call per block costs nothing.
pub const BLOCK_FRAMES: usize = 1 << 15;

/// A recording that can be read from start to end any number of times.
pub trait Passes: Sync {
    /// What can go wrong while reading.
    type Error: std::error::Error + Send + 'static;
    /// One pass.
    type Pass<'a>: Pass<Error = Self::Error>
    where
        Self: 'a;

    /// Samples per second and channel.
    fn rate_hz(&self) -> f64;
    /// Number of channels, ≥ 1.
    fn channels(&self) -> usize;
    /// Samples per channel.
    fn frames(&self) -> u64;
    /// Starts a pass.
    ///
    /// # Errors
    /// If the recording can no longer be read.
    fn pass(&self) -> Result<Self::Pass<'_>, Self::Error>;
    /// How many threads may work on a pass; 1 keeps all work on the caller's. No
    /// result depends on it.
    fn threads(&self) -> usize {
        std::thread::available_parallelism().map_or(1, |n| n.get().min(MOST_THREADS))
    }
}

/// Threads of one pass at most: each holds a group of segments.
pub const MOST_THREADS: usize = 8;

/// A recording whose passes get so many threads and no more, because others are
/// worked on at the same time.
pub struct OnThreads<'a, P>(pub &'a P, pub usize);

impl<P: Passes> Passes for OnThreads<'_, P> {
    type Error = P::Error;
    type Pass<'a>
        = P::Pass<'a>
    where
        Self: 'a;

    fn rate_hz(&self) -> f64 {
        self.0.rate_hz()
    }
    fn channels(&self) -> usize {
        self.0.channels()
    }
    fn frames(&self) -> u64 {
        self.0.frames()
    }
    fn pass(&self) -> Result<P::Pass<'_>, P::Error> {
        self.0.pass()
    }
    fn threads(&self) -> usize {
        self.1.clamp(1, MOST_THREADS)
    }
}

/// One pass over a recording.
pub trait Pass {
    /// What can go wrong while reading.
    type Error;
    /// Reads the next run of frames into `block`; `false` at the end.
    ///
    /// # Errors
    /// If the recording can no longer be read.
    fn next_into(&mut self, block: &mut Block) -> Result<bool, Self::Error>;
}

impl Passes for Capture {
    type Error = CaptureError;
    type Pass<'a> = Blocks;

    fn rate_hz(&self) -> f64 {
        self.spec().rate_hz
    }
    fn channels(&self) -> usize {
        self.spec().channels.len()
    }
    fn frames(&self) -> u64 {
        self.spec().frames
    }
    fn pass(&self) -> Result<Blocks, CaptureError> {
        self.blocks(BLOCK_FRAMES)
    }
}

impl Pass for Blocks {
    type Error = CaptureError;

    fn next_into(&mut self, block: &mut Block) -> Result<bool, CaptureError> {
        Blocks::next_into(self, block)
    }
}

/// Samples already in memory: simulated recordings and tests.
#[derive(Debug, Clone)]
pub struct InMemory {
    /// Sample rate, Hz.
    pub rate_hz: f64,
    /// `channels[c][n]`, all equally long.
    pub channels: Vec<Vec<f32>>,
}

/// See [`InMemory`].
pub struct InMemoryPass<'a> {
    data: &'a InMemory,
    next: usize,
}

impl Passes for InMemory {
    type Error = std::convert::Infallible;
    type Pass<'a> = InMemoryPass<'a>;

    fn rate_hz(&self) -> f64 {
        self.rate_hz
    }
    fn channels(&self) -> usize {
        self.channels.len()
    }
    fn frames(&self) -> u64 {
        self.channels.first().map_or(0, Vec::len) as u64
    }
    fn pass(&self) -> Result<InMemoryPass<'_>, Self::Error> {
        Ok(InMemoryPass {
            data: self,
            next: 0,
        })
    }
}

impl Pass for InMemoryPass<'_> {
    type Error = std::convert::Infallible;

    fn next_into(&mut self, block: &mut Block) -> Result<bool, Self::Error> {
        let frames = self.data.frames() as usize;
        let end = (self.next + BLOCK_FRAMES).min(frames);
        block.first_frame = self.next as u64;
        block
            .samples
            .resize_with(self.data.channels.len(), Vec::new);
        for (out, channel) in block.samples.iter_mut().zip(&self.data.channels) {
            out.clear();
            out.extend_from_slice(&channel[self.next..end]);
        }
        let any = end > self.next;
        self.next = end;
        Ok(any)
    }
}
