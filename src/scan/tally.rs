//! The finished lists read back, tone by tone, in the order of the recordings.
//!
//! What recurs is worked out from the files alone, so it depends neither on the number
//! of jobs nor on how often the scan was interrupted.

use super::error::ScanError;
use super::results::{RECORDINGS, SUSPECTS};
use csv::StringRecord;
use std::fs::File;
use std::io;
use std::path::Path;

/// A recording that was read.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Recording {
    /// Its place among the inputs.
    pub index: u32,
    /// Sample rate, Hz.
    pub rate_hz: f64,
    /// Samples per channel.
    pub samples: u64,
    /// Tones found.
    pub tones: usize,
}

/// One suspect of a tone.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Named {
    /// A source, `unlisted`, `recorder`, or other tones.
    pub suspect: String,
    /// Its line.
    pub line: String,
    /// Hz; `None` for `unlisted`.
    pub true_hz: Option<f64>,
    /// ± Hz.
    pub true_hz_u95: f64,
    /// Whether the line lies above half the rate.
    pub folded: bool,
    /// Probability of this suspect.
    pub probability: f64,
}

/// One tone of a recording.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Heard {
    /// Where it shows, Hz.
    pub seen_hz: f64,
    /// ± Hz.
    pub seen_hz_u95: f64,
    /// dBFS.
    pub level_dbfs: f64,
    /// rms wander, Hz.
    pub wander_hz: f64,
    /// Probability that it is folded.
    pub folded_probability: f64,
    /// By falling probability.
    pub suspects: Vec<Named>,
}

/// Calls `each` for every recording of the finished lists in `folder` that was read,
/// with its tones; returns the rows of failed ones.
///
/// # Errors
/// If the lists cannot be read, or were changed meanwhile.
pub fn for_each_recording(
    folder: &Path,
    mut each: impl FnMut(&Recording, &[Heard]) -> io::Result<()>,
) -> Result<u64, ScanError> {
    let (list, table) = (folder.join(SUSPECTS), folder.join(RECORDINGS));
    let mut rows = Rows::open(&list).map_err(ScanError::at(&list))?;
    let mut recordings = csv::Reader::from_reader(io::BufReader::new(
        File::open(&table).map_err(ScanError::at(&table))?,
    ));
    let mut failed = 0;
    let mut row = StringRecord::new();
    let mut tones = Vec::new();
    let mut index = 0;
    while recordings
        .read_record(&mut row)
        .map_err(|e| ScanError::at(&table)(e.into()))?
    {
        if row.get(1) == Some("read") {
            let recording = Recording {
                index,
                rate_hz: number(&row, 3).map_err(ScanError::at(&table))?,
                samples: number(&row, 5).map_err(ScanError::at(&table))?,
                tones: number(&row, 7).map_err(ScanError::at(&table))?,
            };
            tones.clear();
            for _ in 0..recording.tones {
                tones.push(rows.tone().map_err(ScanError::at(&list))?);
            }
            each(&recording, &tones).map_err(ScanError::at(folder))?;
        } else {
            failed += 1;
        }
        index += 1;
    }
    Ok(failed)
}

fn number<T: std::str::FromStr>(row: &StringRecord, column: usize) -> io::Result<T> {
    row.get(column)
        .and_then(|cell| cell.parse().ok())
        .ok_or_else(|| io::Error::new(io::ErrorKind::InvalidData, "was changed while it was read"))
}

/// The suspect list, one tone at a time.
struct Rows {
    csv: csv::Reader<io::BufReader<File>>,
    /// The first row of the next tone, if there is one.
    next: StringRecord,
    more: bool,
}

impl Rows {
    fn open(path: &Path) -> io::Result<Rows> {
        let mut rows = Rows {
            csv: csv::Reader::from_reader(io::BufReader::new(File::open(path)?)),
            next: StringRecord::new(),
            more: true,
        };
        rows.advance()?;
        Ok(rows)
    }

    fn advance(&mut self) -> io::Result<()> {
        self.more = self.csv.read_record(&mut self.next)?;
        Ok(())
    }

    fn tone(&mut self) -> io::Result<Heard> {
        let row = &self.next;
        let mut tone = Heard {
            seen_hz: number(row, 3)?,
            seen_hz_u95: number(row, 4)?,
            level_dbfs: number(row, 5)?,
            wander_hz: number(row, 9)?,
            folded_probability: number(row, 11)?,
            suspects: Vec::new(),
        };
        // Ranks count from 1 for every tone.
        let mut rank = 0;
        while self.more {
            let row = &self.next;
            let this: u64 = number(row, 12)?;
            if this <= rank {
                break;
            }
            rank = this;
            let cell = |i| row.get(i).unwrap_or_default().to_owned();
            tone.suspects.push(Named {
                suspect: cell(13),
                line: cell(14),
                true_hz: number(row, 15).ok(),
                true_hz_u95: number(row, 16).unwrap_or(0.0),
                folded: row.get(17).is_some_and(|zone| zone != "1"),
                probability: number(row, 19)?,
            });
            self.advance()?;
        }
        Ok(tone)
    }
}
