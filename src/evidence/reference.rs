//! Reference tracks: a grid-frequency log, a tachometer's log or its pulses, against
//! which tones are compared.
//!
//! The file is a CSV: a time column and one of Hz or rpm, read like any recording, or
//! one column of pulse times, one pulse a turn. Where its time scale and the
//! recording's are not the same, the offset is found from the movement itself.

use super::movement::{Following, Series, compare};
use crate::capture::{Capture, CaptureError, OpenOptions, StampedBlock};
use crate::tones::Tone;
use crate::units::U95;
use serde::Serialize;
use std::path::{Path, PathBuf};

/// Fewest points of a reference track.
const LEAST_POINTS: usize = 6;
/// Most points kept, about a day of one-second values.
const MOST_POINTS: usize = 100_000;
/// Stamps beyond this many seconds are dates, on the one scale all dates share.
const DATED_S: f64 = 1e8;
/// Tones by which the clocks are aligned, those that move most for their noise.
const ALIGNED_BY: usize = 12;
/// Offsets tried at most.
const MOST_OFFSETS: f64 = 600.0;
/// Log-likelihood over that of no offset at all which a found one must have.
const CLEARLY_OFF: f64 = 6.0;

/// One `--reference NAME=FILE`.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ReferenceFile {
    /// Name of the source it tells of.
    pub source: String,
    /// The file.
    pub path: PathBuf,
}

impl ReferenceFile {
    /// Reads `NAME=FILE`; the name ends at the first `=`.
    ///
    /// # Errors
    /// Without `=`, name or file.
    pub fn parse(text: &str) -> Result<Self, ReferenceError> {
        match text.split_once('=') {
            Some((name, file)) if !name.trim().is_empty() && !file.is_empty() => {
                Ok(ReferenceFile {
                    source: name.trim().to_owned(),
                    path: PathBuf::from(file),
                })
            }
            _ => Err(ReferenceError::NotNamed {
                text: text.to_owned(),
            }),
        }
    }
}

/// Why a reference cannot be used. Prints as one line without the file's name.
#[derive(Debug, thiserror::Error)]
pub enum ReferenceError {
    /// Not `NAME=FILE`.
    #[error("--reference {text:?} names no source (write NAME=FILE, as in mains=grid.csv)")]
    NotNamed {
        /// As given.
        text: String,
    },
    /// It could not be read as a table.
    #[error(transparent)]
    Capture(#[from] CaptureError),
    /// No column of frequencies.
    #[error(
        "reference: no column of Hz or rpm among {columns} (name one hz or rpm, or give one column of pulse times)"
    )]
    NoFrequency {
        /// The columns that were found.
        columns: String,
    },
    /// Too few values.
    #[error("reference: {points} usable values (at least {least} are needed)")]
    TooShort {
        /// How many there are.
        points: usize,
        /// Smallest accepted number.
        least: usize,
    },
}

/// A reference as read.
#[derive(Debug, Clone, PartialEq)]
pub struct Reference {
    /// Name of the source it tells of.
    pub source: String,
    /// Frequency through time, s from the file's own origin.
    pub series: Series,
    /// Value of time zero of `series` where the file's times are dates or times of the
    /// day, s.
    pub origin_s: f64,
}

impl Reference {
    /// Reads a reference file.
    ///
    /// # Errors
    /// If it is no table of frequencies or pulses.
    pub fn read(file: &ReferenceFile) -> Result<Reference, ReferenceError> {
        let (series, origin_s) = match Capture::open(&file.path, &OpenOptions::default()) {
            Ok(capture) => frequencies(&capture)?,
            Err(
                error @ (CaptureError::NoChannels
                | CaptureError::NoTime
                | CaptureError::OnlyIndex
                | CaptureError::TooShort { .. }),
            ) => match pulses(&file.path)? {
                Some(found) => found,
                None => return Err(error.into()),
            },
            Err(error) => return Err(error.into()),
        };
        if series.hz.len() < LEAST_POINTS {
            return Err(ReferenceError::TooShort {
                points: series.hz.len(),
                least: LEAST_POINTS,
            });
        }
        Ok(Reference {
            source: file.source.clone(),
            series: with_noise(series),
            origin_s,
        })
    }
}

/// Hz of one unit of a column, by its name or unit.
fn unit(name: &str) -> Option<f64> {
    let words = name
        .split(|c: char| !c.is_alphanumeric())
        .map(str::to_lowercase);
    words
        .filter_map(|w| match w.as_str() {
            "hz" | "frequency" | "freq" => Some(1.0),
            "mhz" => Some(1e-3),
            "rpm" => Some(1.0 / 60.0),
            _ => None,
        })
        .next()
}

fn frequencies(capture: &Capture) -> Result<(Series, f64), ReferenceError> {
    let channels = &capture.spec().channels;
    let found = channels.iter().enumerate().find_map(|(i, c)| {
        let by_unit = c.unit.as_deref().and_then(unit);
        Some((i, by_unit.or_else(|| unit(&c.name))?, c.offset))
    });
    let Some((channel, scale, offset)) = found else {
        let columns: Vec<String> = channels.iter().map(|c| format!("{:?}", c.name)).collect();
        return Err(ReferenceError::NoFrequency {
            columns: columns.join(", "),
        });
    };
    let mut series = Series::default();
    let Some(mut pass) = capture.stamped_blocks(1024)? else {
        return Err(CaptureError::NoTime.into());
    };
    let mut block = StampedBlock::default();
    while series.hz.len() < MOST_POINTS && pass.next_into(&mut block)? {
        let values = block.samples.get(channel).map_or(&[][..], Vec::as_slice);
        for (&t, &v) in block.times_s.iter().zip(values) {
            let hz = (f64::from(v) + offset) * scale;
            if hz.is_finite() && hz > 0.0 && series.at_s.last().is_none_or(|&last| t > last) {
                series.push(t, hz, 0.0);
            }
        }
    }
    Ok((series, pass.origin_s().unwrap_or(0.0)))
}

/// Pulse times, one number a line, seconds, after at most a heading; `None` where
/// there are none.
fn pulses(path: &Path) -> Result<Option<(Series, f64)>, ReferenceError> {
    use std::io::BufRead;
    let file = std::fs::File::open(path).map_err(CaptureError::from)?;
    let mut times: Vec<f64> = Vec::new();
    for line in std::io::BufReader::new(file).lines().take(MOST_POINTS) {
        let Ok(line) = line else { break };
        let cell = line.split([',', ';', '\t']).next().unwrap_or_default();
        match cell.trim().parse::<f64>() {
            Ok(t) if t.is_finite() && times.last().is_none_or(|&last| t > last) => times.push(t),
            Ok(_) => {}
            // Words among the numbers: no list of pulses.
            Err(_) if times.len() > 1 && !cell.trim().is_empty() => return Ok(None),
            Err(_) => {}
        }
    }
    let Some(&origin) = times.first() else {
        return Ok(None);
    };
    let mut series = Series::default();
    for pair in times.windows(2) {
        if let [a, b] = pair {
            series.push(0.5 * (a + b) - origin, 1.0 / (b - a), 0.0);
        }
    }
    Ok(Some((series, origin)))
}

/// Gives every point the noise that its fourth differences show: of white noise they
/// have 70 times the variance, of slow movement next to none. Noise overestimated
/// would make every slope against the reference too steep.
fn with_noise(mut series: Series) -> Series {
    let mut squares: Vec<f64> = series
        .hz
        .windows(5)
        .map(|w| match w {
            [a, b, c, d, e] => (a - 4.0 * b + 6.0 * c - 4.0 * d + e).abs(),
            _ => 0.0,
        })
        .collect();
    squares.sort_unstable_by(f64::total_cmp);
    // Median of the absolute, so that jumps do not count.
    let typical = squares.get(squares.len() / 2).copied().unwrap_or(0.0);
    let sd = 1.4826 * typical / 70f64.sqrt();
    series.sd_hz.iter_mut().for_each(|s| *s = sd);
    series
}

/// How the clocks of a reference and the recording were brought together.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Aligned {
    /// Both are dated.
    ByDates,
    /// Both count from the same start, as far as the movement tells.
    AsGiven,
    /// By where the movements agree.
    ByMovement,
}

/// A reference beside a recording.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Beside {
    /// Name of the source it tells of.
    pub source: String,
    /// Recording time of the reference's first moment, s.
    pub offset_s: f64,
    /// ±, 95 %, s; 0 where the clocks are taken as common.
    pub offset_u95_s: f64,
    /// How it was found.
    pub aligned: Aligned,
    /// Mean frequency of the reference while the recording ran, Hz.
    pub mean_hz: f64,
    /// Its standard deviation by the reference's own noise, Hz.
    pub mean_sd_hz: f64,
    /// rms movement about that mean, Hz.
    pub moves_hz: f64,
    /// `(tone, how it follows)` of every tone that could be compared.
    #[serde(skip)]
    pub follows: Vec<(usize, Following)>,
}

/// Compares tones' tracks with a reference. `followed` are the tones worth it, by index;
/// `recording_origin_s` is the time of the recording's first sample on its own scale,
/// where it has one. `None` where the two hardly overlap.
pub fn beside(
    reference: &Reference,
    followed: &[(usize, &Tone)],
    recording_origin_s: Option<f64>,
    duration_s: f64,
) -> Option<Beside> {
    let finest_s = reference.series.step_s();
    let tracks: Vec<(usize, Series)> = followed
        .iter()
        .map(|&(i, tone)| (i, Series::at_least(tone, finest_s)))
        .collect();
    let tracks = tracks.as_slice();
    let dated = |s: f64| s.abs() > DATED_S;
    let given = match recording_origin_s {
        Some(origin) if dated(origin) == dated(reference.origin_s) => reference.origin_s - origin,
        // A recording without times starts with the reference unless told otherwise;
        // one without dates says nothing about a dated one.
        None if !dated(reference.origin_s) => reference.origin_s,
        _ => 0.0,
    };
    let common = recording_origin_s.is_some_and(|o| dated(o) && dated(reference.origin_s));
    let (offset_s, offset_sd, aligned) = if common {
        (given, 0.0, Aligned::ByDates)
    } else {
        align(&reference.series, tracks, given, duration_s)
    };
    let series = reference.series.shifted(offset_s);
    let inside: Vec<(f64, f64)> = series
        .at_s
        .iter()
        .zip(series.hz.iter().zip(&series.sd_hz))
        .filter(|(t, _)| (0.0..=duration_s).contains(*t))
        .map(|(_, (hz, sd))| (*hz, *sd))
        .collect();
    if inside.len() < LEAST_POINTS {
        return None;
    }
    let n = inside.len() as f64;
    let mean_hz = inside.iter().map(|p| p.0).sum::<f64>() / n;
    let moves_hz = (inside.iter().map(|p| (p.0 - mean_hz).powi(2)).sum::<f64>() / n).sqrt();
    let noise = inside.iter().map(|p| p.1 * p.1).sum::<f64>() / n;
    Some(Beside {
        source: reference.source.clone(),
        offset_s,
        offset_u95_s: U95 * offset_sd,
        aligned,
        mean_hz,
        mean_sd_hz: (noise / n).sqrt(),
        moves_hz,
        follows: tracks
            .iter()
            .filter_map(|(tone, track)| Some((*tone, compare(track, &series)?)))
            .collect(),
    })
}

/// The offset at which tones and reference move together best, with its sd: the one
/// given, unless another is clearly better.
fn align(
    reference: &Series,
    tracks: &[(usize, Series)],
    given: f64,
    duration_s: f64,
) -> (f64, f64, Aligned) {
    let as_given = (given, 0.0, Aligned::AsGiven);
    let (Some(first), Some(last)) = (reference.at_s.first(), reference.at_s.last()) else {
        return as_given;
    };
    let mut by_movement: Vec<(&Series, f64)> = tracks
        .iter()
        .map(|(_, t)| (t, liveliness(t)))
        .filter(|t| t.1 > 1.0)
        .collect();
    by_movement.sort_by(|a, b| b.1.total_cmp(&a.1));
    by_movement.truncate(ALIGNED_BY);
    let score = |offset: f64| -> f64 {
        let moved = reference.shifted(offset);
        by_movement
            .iter()
            .map(|(track, _)| agreement(track, &moved))
            .sum()
    };
    // At least half of the recording, or of the reference, must be common.
    let half = 0.5 * duration_s.min(last - first);
    let (low, high) = (half - last, duration_s - half - first);
    let finest = by_movement
        .iter()
        .map(|t| t.0.step_s())
        .fold(f64::INFINITY, f64::min)
        .min(duration_s)
        .max(reference.step_s());
    let step = (0.5 * finest).max((high - low) / MOST_OFFSETS);
    if by_movement.is_empty() || !(step.is_finite() && step > 0.0 && high > low) {
        return as_given;
    }
    let mut best = (score(given), given);
    let before = best.0;
    for i in 0..=((high - low) / step) as usize {
        let offset = low + i as f64 * step;
        let s = score(offset);
        if s > best.0 {
            best = (s, offset);
        }
    }
    let mut h = 0.5 * step;
    for _ in 0..5 {
        for side in [best.1 - h, best.1 + h] {
            let s = score(side);
            if s > best.0 {
                best = (s, side);
            }
        }
        h *= 0.5;
    }
    if best.0 < before + CLEARLY_OFF {
        return as_given;
    }
    let bend = |h: f64| (score(best.1 - h) - 2.0 * best.0 + score(best.1 + h)) / (h * h);
    let curve = bend(step);
    let sd = if curve < 0.0 {
        (-1.0 / curve).sqrt()
    } else {
        step
    };
    (best.1, sd.max(0.1 * step), Aligned::ByMovement)
}

/// rms movement of a track over its noise.
fn liveliness(track: &Series) -> f64 {
    let n = track.hz.len();
    if n < LEAST_POINTS {
        return 0.0;
    }
    let mean = track.hz.iter().sum::<f64>() / n as f64;
    let moved = track.hz.iter().map(|h| (h - mean).powi(2)).sum::<f64>();
    let noise = track.sd_hz.iter().map(|s| s * s).sum::<f64>();
    (moved / noise.max(1e-300)).sqrt()
}

/// Log-likelihood gained by a straight relation, for as many independent points as
/// two tracks with such memories are worth (Bartlett 1935): −n/2·ln(1 − r²).
fn agreement(track: &Series, reference: &Series) -> f64 {
    let Some((y, x)) = super::movement::common_points(track, reference) else {
        return 0.0;
    };
    let n = y.len() as f64;
    let of = |a: &[f64], b: &[f64]| a.iter().zip(b).map(|(a, b)| a * b).sum::<f64>();
    let (yy, xx, xy) = (of(&y, &y), of(&x, &x), of(&x, &y));
    if yy <= 0.0 || xx <= 0.0 {
        return 0.0;
    }
    let memory = |v: &[f64], all: f64| of(v, v.get(1..).unwrap_or_default()) / all;
    let both = (memory(&y, yy) * memory(&x, xx)).clamp(0.0, 0.98);
    let worth = n * (1.0 - both) / (1.0 + both);
    let r2 = (xy * xy / (xx * yy)).min(1.0 - 1e-9);
    -0.5 * worth * (1.0 - r2).ln()
}
