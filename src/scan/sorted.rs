//! More tones than should be held at once, in order of rate and seen frequency.
//!
//! Tones are gathered up to a fixed number, sorted, and written to a nameless
//! temporary file, one run after the other; at the end the runs are merged.

use std::cmp::Ordering;
use std::fs::File;
use std::io::{self, BufReader, BufWriter, Read, Seek, Write};
use std::path::{Path, PathBuf};

/// Tones held in memory at once.
const MOST_HELD: usize = 1 << 20;
/// Runs merged at once: bounds open files.
const MOST_RUNS: usize = 32;
const BYTES: usize = 40;

/// One tone, as little of it as grouping needs.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Digest {
    /// Index of the sample rate.
    pub rate: u32,
    /// Index of the recording.
    pub recording: u32,
    /// Hz.
    pub seen_hz: f64,
    /// How far off it may be, Hz.
    pub reach_hz: f64,
    /// Probability that it is folded.
    pub folded: f64,
    /// dBFS.
    pub level_dbfs: f64,
}

impl Digest {
    fn order(&self, other: &Digest) -> Ordering {
        self.rate
            .cmp(&other.rate)
            .then(self.seen_hz.total_cmp(&other.seen_hz))
            .then(self.recording.cmp(&other.recording))
    }

    fn write(&self, out: &mut impl Write) -> io::Result<()> {
        out.write_all(&self.rate.to_le_bytes())?;
        out.write_all(&self.recording.to_le_bytes())?;
        for value in [self.seen_hz, self.reach_hz, self.folded, self.level_dbfs] {
            out.write_all(&value.to_le_bytes())?;
        }
        Ok(())
    }

    fn read(input: &mut impl Read) -> io::Result<Digest> {
        let mut bytes = [0; BYTES];
        input.read_exact(&mut bytes)?;
        let mut rest = bytes.as_slice();
        let mut eight = || {
            let (now, later) = rest.split_first_chunk::<8>().unwrap_or((&[0; 8], &[]));
            rest = later;
            *now
        };
        let [r0, r1, r2, r3, i0, i1, i2, i3] = eight();
        Ok(Digest {
            rate: u32::from_le_bytes([r0, r1, r2, r3]),
            recording: u32::from_le_bytes([i0, i1, i2, i3]),
            seen_hz: f64::from_le_bytes(eight()),
            reach_hz: f64::from_le_bytes(eight()),
            folded: f64::from_le_bytes(eight()),
            level_dbfs: f64::from_le_bytes(eight()),
        })
    }
}

struct Run {
    file: File,
    count: u64,
}

/// Gathers tones in any order and gives them back in order.
pub struct Sorter {
    folder: PathBuf,
    held: Vec<Digest>,
    most_held: usize,
    runs: Vec<Run>,
}

impl Sorter {
    /// Temporary files go to `folder`.
    pub fn new(folder: &Path) -> Self {
        Self::holding(folder, MOST_HELD)
    }

    fn holding(folder: &Path, most_held: usize) -> Self {
        Sorter {
            folder: folder.to_owned(),
            held: Vec::new(),
            most_held,
            runs: Vec::new(),
        }
    }

    /// Takes one more.
    ///
    /// # Errors
    /// If a temporary file cannot be written.
    pub fn push(&mut self, digest: Digest) -> io::Result<()> {
        self.held.push(digest);
        if self.held.len() >= self.most_held {
            self.held.sort_unstable_by(Digest::order);
            let held = std::mem::take(&mut self.held);
            let run = self.write(|put| held.iter().try_for_each(put))?;
            self.held = held;
            self.held.clear();
            self.runs.push(run);
            if self.runs.len() >= MOST_RUNS {
                let runs = std::mem::take(&mut self.runs);
                let merged = self.write(|put| merge(runs, &[], |d| put(&d)))?;
                self.runs.push(merged);
            }
        }
        Ok(())
    }

    fn write(
        &self,
        fill: impl FnOnce(&mut dyn FnMut(&Digest) -> io::Result<()>) -> io::Result<()>,
    ) -> io::Result<Run> {
        let mut out = BufWriter::with_capacity(1 << 16, tempfile::tempfile_in(&self.folder)?);
        let mut count = 0;
        fill(&mut |digest| {
            count += 1;
            digest.write(&mut out)
        })?;
        let file = out
            .into_inner()
            .map_err(std::io::IntoInnerError::into_error)?;
        Ok(Run { file, count })
    }

    /// Gives all back, in order.
    ///
    /// # Errors
    /// If a temporary file cannot be read, and those of `each`.
    pub fn drain(mut self, each: impl FnMut(Digest) -> io::Result<()>) -> io::Result<()> {
        self.held.sort_unstable_by(Digest::order);
        merge(self.runs, &self.held, each)
    }
}

/// Merges sorted runs and what is sorted in memory.
fn merge(
    runs: Vec<Run>,
    held: &[Digest],
    mut each: impl FnMut(Digest) -> io::Result<()>,
) -> io::Result<()> {
    let mut readers = Vec::new();
    for mut run in runs {
        run.file.rewind()?;
        let mut reader = BufReader::with_capacity(1 << 16, run.file);
        if run.count > 0 {
            let first = Digest::read(&mut reader)?;
            readers.push((first, run.count - 1, reader));
        }
    }
    let mut held = held.iter().copied().peekable();
    loop {
        let least = readers
            .iter()
            .enumerate()
            .min_by(|(_, a), (_, b)| a.0.order(&b.0))
            .map(|(i, run)| (i, run.0));
        let next = match (least, held.peek()) {
            (Some((i, digest)), mine) if mine.is_none_or(|m| digest.order(m).is_le()) => {
                if let Some((head, left, reader)) = readers.get_mut(i) {
                    if *left == 0 {
                        readers.swap_remove(i);
                    } else {
                        *head = Digest::read(reader)?;
                        *left -= 1;
                    }
                }
                digest
            }
            _ => match held.next() {
                Some(digest) => digest,
                None => return Ok(()),
            },
        };
        each(next)?;
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::{RngExt, SeedableRng, rngs::StdRng};

    #[test]
    fn however_many_runs_all_come_back_in_order() {
        let folder = tempfile::tempdir().unwrap();
        let mut random = StdRng::seed_from_u64(6);
        // 100 held at once: 3,417 make 34 runs, one more than is merged at once
        for count in [0u32, 1, 99, 100, 3_417] {
            let mut sorter = Sorter::holding(folder.path(), 100);
            let mut all: Vec<Digest> = (0..count)
                .map(|recording| Digest {
                    rate: random.random_range(0..3),
                    recording,
                    seen_hz: f64::from(random.random_range(0..500u32)),
                    reach_hz: 0.5,
                    folded: random.random(),
                    level_dbfs: -60.0,
                })
                .collect();
            for &digest in &all {
                sorter.push(digest).unwrap();
            }
            let mut back = Vec::new();
            sorter
                .drain(|d| {
                    back.push(d);
                    Ok(())
                })
                .unwrap();
            all.sort_by(Digest::order);
            assert_eq!(back, all);
        }
        assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 0);
    }
}
