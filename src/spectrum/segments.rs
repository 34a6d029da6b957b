//! Half-overlapped segments of a recording, worked on by several threads with a
//! result that does not depend on their number.
//!
//! Consecutive segments travel in groups of a fixed size; each group's result
//! is handed to the sink in order, so sums are formed in one order whatever
//! thread finishes first.

use super::condition::{Condition, Mender};
use super::samples::{Pass, Passes};
use crate::capture::Block;
use std::collections::BTreeMap;
use std::sync::{Mutex, mpsc};

/// Samples of a group, all channels together, that are kept small enough for
/// several groups to be in flight.
const GROUP_SAMPLES: usize = 1 << 20;

/// Where segments lie.
#[derive(Debug, Clone, Copy)]
pub struct Layout {
    /// Samples per segment, even.
    pub segment: usize,
    /// Put half a segment of zeros in front and pad the end with zeros, so that
    /// every sample lies in exactly two segments. Otherwise only whole segments
    /// are used and a remainder at the end is left out.
    pub padded: bool,
}

impl Layout {
    /// Distance between segments.
    pub fn hop(&self) -> usize {
        self.segment / 2
    }

    /// Number of segments for `frames` samples.
    pub fn count(&self, frames: u64) -> u64 {
        let hop = self.hop() as u64;
        if self.padded {
            frames.div_ceil(hop) + 1
        } else if frames < self.segment as u64 {
            0
        } else {
            (frames - self.segment as u64) / hop + 1
        }
    }

    fn group(&self, channels: usize) -> usize {
        (GROUP_SAMPLES / channels.max(1) / self.hop())
            .saturating_sub(1)
            .max(1)
    }
}

/// Consecutive segments: segment `i` of channel `c` is
/// `samples[c][i·hop .. i·hop + segment]`.
pub struct Group {
    index: u64,
    /// Number of segments.
    pub count: usize,
    /// `samples[channel]`, (count + 1)·hop long.
    pub samples: Vec<Vec<f32>>,
}

/// Runs `work` on every group and hands the results to `sink` in order; returns
/// the condition of the samples, per channel.
///
/// `progress` is told the frames read so far.
///
/// # Errors
/// The recording's own.
pub fn for_each_group<P, S, R>(
    recording: &P,
    layout: Layout,
    progress: &(dyn Fn(u64) + Sync),
    new_state: impl Fn() -> S + Sync,
    work: impl Fn(&mut S, &Group) -> R + Sync,
    mut sink: impl FnMut(R),
) -> Result<Vec<Condition>, P::Error>
where
    P: Passes,
    R: Send,
{
    let threads = recording.threads();
    if threads <= 1 {
        let mut state = new_state();
        return read_groups(recording, layout, progress, |group| {
            sink(work(&mut state, &group));
            true
        });
    }
    let (group_tx, group_rx) = mpsc::sync_channel::<Group>(1);
    let group_rx = Mutex::new(group_rx);
    let (result_tx, result_rx) = mpsc::channel::<(u64, R)>();
    let mut waiting = BTreeMap::new();
    let mut wanted = 0;
    let mut deliver = |index: u64, result: R| {
        waiting.insert(index, result);
        while let Some(r) = waiting.remove(&wanted) {
            sink(r);
            wanted += 1;
        }
    };
    std::thread::scope(|scope| {
        for _ in 0..threads {
            let result_tx = result_tx.clone();
            let (group_rx, new_state, work) = (&group_rx, &new_state, &work);
            scope.spawn(move || {
                let mut state = new_state();
                loop {
                    // A poisoned lock means another worker panicked; stop too,
                    // the scope passes that panic on.
                    let Ok(group) = group_rx.lock().map(|rx| rx.recv()) else {
                        break;
                    };
                    let Ok(group) = group else { break };
                    let result = work(&mut state, &group);
                    if result_tx.send((group.index, result)).is_err() {
                        break;
                    }
                }
            });
        }
        drop(result_tx);
        let read = read_groups(recording, layout, progress, |group| {
            while let Ok((index, result)) = result_rx.try_recv() {
                deliver(index, result);
            }
            group_tx.send(group).is_ok()
        });
        drop(group_tx);
        for (index, result) in result_rx.iter() {
            deliver(index, result);
        }
        read
    })
}

fn read_groups<P: Passes>(
    recording: &P,
    layout: Layout,
    progress: &(dyn Fn(u64) + Sync),
    mut send: impl FnMut(Group) -> bool,
) -> Result<Vec<Condition>, P::Error> {
    let channels = recording.channels();
    let hop = layout.hop();
    let per_group = layout.group(channels);
    let mut left = layout.count(recording.frames());
    let lead = if layout.padded { hop } else { 0 };
    let mut buffers: Vec<Vec<f32>> = vec![vec![0.0; lead]; channels];
    let mut menders = vec![Mender::default(); channels];
    let mut index = 0;
    let mut pass = recording.pass()?;
    let mut block = Block::default();
    let mut read = 0;
    loop {
        let more = pass.next_into(&mut block)?;
        if more {
            for ((buffer, mender), samples) in
                buffers.iter_mut().zip(&mut menders).zip(&mut block.samples)
            {
                mender.fill(samples);
                buffer.extend_from_slice(samples);
            }
            read += block.samples.first().map_or(0, Vec::len) as u64;
            progress(read);
        }
        while left > 0 {
            let count = per_group.min(usize::try_from(left).unwrap_or(usize::MAX));
            let needed = (count + 1) * hop;
            if !more && layout.padded {
                for buffer in &mut buffers {
                    if buffer.len() < needed {
                        buffer.resize(needed, 0.0);
                    }
                }
            }
            if buffers.first().is_none_or(|b| b.len() < needed) {
                break;
            }
            let samples = buffers
                .iter_mut()
                .map(|buffer| {
                    let group = buffer[..needed].to_vec();
                    buffer.drain(..count * hop);
                    group
                })
                .collect();
            left -= count as u64;
            let group = Group {
                index,
                count,
                samples,
            };
            if !send(group) {
                return Ok(Vec::new());
            }
            index += 1;
        }
        if !more {
            break;
        }
    }
    Ok(menders.into_iter().map(Mender::finish).collect())
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::spectrum::samples::{InMemory, OnThreads};

    fn segments(frames: usize, layout: Layout) -> Vec<Vec<f32>> {
        let recording = InMemory {
            rate_hz: 1.0,
            channels: vec![(0..frames).map(|i| i as f32 + 1.0).collect()],
        };
        let mut all = Vec::new();
        let hop = layout.hop();
        for_each_group(
            &recording,
            layout,
            &|_| (),
            || (),
            |(), group| {
                (0..group.count)
                    .map(|i| group.samples[0][i * hop..i * hop + layout.segment].to_vec())
                    .collect::<Vec<_>>()
            },
            |r| all.extend(r),
        )
        .unwrap();
        all
    }

    /// Sums in `f32` differ with their order: the same bits mean the same order.
    #[test]
    fn the_number_of_threads_changes_no_bit() {
        let recording = InMemory {
            rate_hz: 1.0,
            channels: vec![(0..3_000_000).map(|i| (i as f32 * 0.37).sin()).collect()],
        };
        let layout = Layout {
            segment: 1 << 12,
            padded: true,
        };
        let sum = |threads| {
            let mut sum = 0.0f32;
            for_each_group(
                &OnThreads(&recording, threads),
                layout,
                &|_| (),
                || (),
                |(), group| group.samples[0].iter().sum::<f32>(),
                |r| sum = sum * 0.999 + r,
            )
            .unwrap();
            sum.to_bits()
        };
        let alone = sum(1);
        assert_ne!(alone, 0);
        for threads in [2, 3, 8] {
            assert_eq!(sum(threads), alone, "{threads} threads");
        }
    }

    #[test]
    fn whole_segments_only() {
        let layout = Layout {
            segment: 4,
            padded: false,
        };
        let got = segments(9, layout);
        assert_eq!(got.len() as u64, layout.count(9));
        assert_eq!(got.last().unwrap(), &[5.0, 6.0, 7.0, 8.0]);
        assert_eq!(segments(3, layout).len(), 0);
    }

    #[test]
    fn padded_segments_hold_every_sample_twice() {
        for frames in [1usize, 4, 7, 300_001] {
            let layout = Layout {
                segment: 4,
                padded: true,
            };
            let got = segments(frames, layout);
            assert_eq!(got.len() as u64, layout.count(frames as u64));
            let sum: f64 = got.iter().flatten().map(|&v| f64::from(v)).sum();
            let n = frames as f64;
            assert_eq!(sum, n * (n + 1.0), "{frames} frames");
        }
    }
}
