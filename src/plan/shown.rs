//! Outcomes of tests that only need the places of the candidates.

use super::bench::Prepared;
use super::prospect::told_apart;
use super::{Shown, Shows, is_recorder};

/// Order of the low-pass proposed, and how well a level repeats, dB.
const LOW_PASS_ORDER: i32 = 4;
const LEVEL_SD_DB: f64 = 1.5;
/// SNR below which a tone is not found, dB.
const FOUND_DB: f64 = 13.0;
/// Seen as outcome `at`, or with chance `miss` as `gone`.
pub(super) fn seen_or_gone(miss: f64, at: usize, gone: usize) -> Vec<(usize, f64)> {
    vec![(at, 1.0 - miss), (gone, miss)]
}

/// A test that shows nothing new.
pub(super) fn unchanged(p: &Prepared) -> Shown {
    Shown {
        outcomes: vec![vec![(0, 1.0)]; p.outlook.candidates.len()],
        shows: vec![Shows::Same],
    }
}

/// Candidates at the places given, each seen there with chance `found`.
pub(super) fn placed(p: &Prepared, seen: &[(f64, f64)], found: f64) -> Shown {
    let numbers = told_apart(seen);
    let gone = numbers.iter().max().map_or(0, |n| n + 1);
    let mut shows = vec![Shows::Gone; gone + 1];
    for (n, s) in numbers.iter().zip(seen) {
        if let Some(show) = shows.get_mut(*n)
            && *show == Shows::Gone
        {
            let same = (s.0 - p.nu).abs() < 2.5 * s.1;
            *show = if same { Shows::Same } else { Shows::At(s.0) };
        }
    }
    Shown {
        outcomes: numbers
            .into_iter()
            .map(|n| seen_or_gone(1.0 - found, n, gone))
            .collect(),
        shows,
    }
}

/// A low-pass of fourth order: the higher a candidate truly is, the more it is
/// weakened.
pub(super) fn low_pass(corner_hz: f64, p: &Prepared) -> Shown {
    let loss = |f: f64| 10.0 * (f / corner_hz).powi(2 * LOW_PASS_ORDER).ln_1p() / 10f64.ln();
    let seen: Vec<(f64, f64)> = p
        .outlook
        .candidates
        .iter()
        .map(|c| {
            let loss = if is_recorder(&c.who) {
                0.0
            } else {
                loss(c.recorder_hz)
            };
            // Too weak to be found: how weak is not seen.
            (loss.min(p.snr_db - FOUND_DB + 3.0).max(0.0), LEVEL_SD_DB)
        })
        .collect();
    let numbers = told_apart(&seen);
    let count = numbers.iter().max().map_or(0, |n| n + 1);
    let mut shows = vec![Shows::Same; count];
    for (n, s) in numbers.iter().zip(&seen) {
        if let Some(show) = shows.get_mut(*n) {
            *show = if s.0 >= p.snr_db - FOUND_DB {
                Shows::Gone
            } else if s.0 > 2.5 * LEVEL_SD_DB {
                Shows::Weaker(s.0)
            } else {
                Shows::Same
            };
        }
    }
    Shown {
        outcomes: numbers.into_iter().map(|n| vec![(n, 1.0)]).collect(),
        shows,
    }
}
