//! A pass over the rows of a table with the time written beside each, for those
//! to whom the exact instants matter. [`super::Blocks`] hands out evenly numbered
//! frames instead.

use super::csv::Place;
use super::csv_rows::Rows;
use super::error::CaptureError;

/// A run of rows that have a time of their own.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct StampedBlock {
    /// Frame number of each row, counting missing frames, rising.
    pub frames: Vec<u64>,
    /// Seconds from the file's first stamp to the row's, as written.
    pub times_s: Vec<f64>,
    /// `samples[channel][i]`, less the channel's offset; NaN where missing.
    pub samples: Vec<Vec<f32>>,
}

impl StampedBlock {
    /// Empties the block for `channels` channels and keeps its memory.
    pub fn start(&mut self, channels: usize) {
        self.frames.clear();
        self.times_s.clear();
        self.samples.resize_with(channels, Vec::new);
        self.samples.iter_mut().for_each(Vec::clear);
    }
}

/// A pass over the stamped rows of a [`super::Capture`].
#[derive(Debug)]
pub struct StampedBlocks {
    pub(super) rows: Rows,
    pub(super) channels: Vec<Place>,
    pub(super) rows_per_block: usize,
    pub(super) next_frame: u64,
}

impl StampedBlocks {
    /// The first stamp as seconds on the file's own scale (since 1970 for dates, since
    /// midnight for times of the day), once a row has been read.
    pub fn origin_s(&self) -> Option<f64> {
        self.rows.origin_s()
    }

    /// Fills `block` with the next rows; `false`, and an empty block, at the end.
    /// Rows without a readable stamp, and those after the clock was set back, whose
    /// times do not belong to those before, are passed over.
    ///
    /// # Errors
    /// Where the file cannot be read on.
    pub fn next_into(&mut self, block: &mut StampedBlock) -> Result<bool, CaptureError> {
        block.start(self.channels.len());
        while block.frames.len() < self.rows_per_block {
            let Some(row) = self.rows.next_row()? else {
                break;
            };
            let frame = self.next_frame.saturating_add(row.missing);
            self.next_frame = frame.saturating_add(1);
            let Some(time) = self.rows.clock.as_ref().and_then(|clock| clock.accepted()) else {
                continue;
            };
            block.frames.push(frame);
            block.times_s.push(time);
            for (samples, place) in block.samples.iter_mut().zip(&self.channels) {
                samples.push(place.sample(&self.rows));
            }
        }
        Ok(!block.frames.is_empty())
    }
}
