//! Several recordings of one place: which tones are one physical tone, and where
//! it truly is.
//!
//! A line at `f` is seen at `fold(f/(1+ε))` in each recording, each with a rate, a
//! clock error ε and a front end of its own. Every tone is a set of candidates on
//! the analog axis ([`crate::candidates`]); two tones are one where a candidate of
//! each lies at one frequency. That is the Chinese remainder theorem in its robust
//! form (Wang and Xia, IEEE Trans. Signal Process. 58 (2010) 5655–5666; from
//! memory), worked with densities: nothing need match exactly, a tone may be missing
//! from a recording, and what is left open stays a set of candidates.
//!
//! Recordings are taken one after the other. For each, the clock error relative to
//! the first is found from all tones at once (`clock`): a pair of candidates is a
//! vote for the error at which they meet. Where few tones leave several errors
//! possible, each is followed as a state of its own. In each, tones are matched by
//! the sum-product algorithm for data association (Williams and Lau, IEEE Trans.
//! Aerosp. Electron. Syst. 50 (2014) 2942–2959; from memory; `matching`).
//!
//! A source's likelihood is what a recording says beyond the prior; two recordings of
//! one place mostly see the same tones, so the strongest word for a source and the
//! strongest against it count, once each (`pairs`).

mod clock;
mod matching;
mod pairs;
mod rows;
mod tracks;

use crate::suspects::{Inference, Scene, Verdict};
use crate::units::Sense;

/// One recording as it comes in.
#[derive(Debug, Clone)]
pub struct Capture<'a> {
    /// Tones, site and sampling chain.
    pub scene: Scene<'a>,
    /// What is concluded from it alone.
    pub inference: &'a Inference,
}

/// Where a physical tone was seen.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, serde::Serialize)]
pub struct Sighting {
    /// Index of the recording.
    pub capture: usize,
    /// Index into its tones.
    pub tone: usize,
}

/// Who may have made a physical tone, and where it then is.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Row {
    /// Source, `tone 3`, `recorder` or `unlisted`.
    pub suspect: String,
    /// Its line; empty for `unlisted`.
    pub line: String,
    /// True frequency and ± (95 %), Hz; `None` for the rest that is not told apart.
    pub true_hz: Option<(f64, f64)>,
    /// Nyquist zone in the first recording where the tone is seen.
    pub zone: u64,
    /// Inverted there.
    pub sense: Sense,
    /// Posterior probability.
    pub probability: f64,
    /// Listed lines expected this close by chance; `None` for `unlisted`.
    pub coincidence: Option<f64>,
}

/// One physical tone.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Physical {
    /// From 1, by seen frequency in the first recording where it is seen.
    pub number: usize,
    /// By recording; never empty.
    pub sightings: Vec<Sighting>,
    /// Probability that exactly these sightings are one tone (1 for a single one
    /// that could be no other).
    pub association: f64,
    /// By falling probability; `unlisted` has a row per candidate.
    pub rows: Vec<Row>,
    /// Probability that it is folded in the first recording where it is seen.
    pub folded_probability: f64,
    /// From `folded_probability`.
    pub verdict: Verdict,
    /// A further sample rate that would end the ambiguity, and the chance that it does.
    pub extra_rate: Option<(f64, f64)>,
}

impl Physical {
    /// Places on the analog axis that stay possible: `(Hz, ± Hz, probability)`, by
    /// falling probability.
    pub fn places(&self) -> Vec<(f64, f64, f64)> {
        let mut places: Vec<(f64, f64, f64)> = Vec::new();
        for row in &self.rows {
            let Some((hz, u95)) = row.true_hz else {
                continue;
            };
            match places.iter_mut().find(|p| (p.0 - hz).abs() < u95 + p.1) {
                Some(p) => p.2 += row.probability,
                None => places.push((hz, u95, row.probability)),
            }
        }
        places.sort_by(|a, b| b.2.total_cmp(&a.2));
        places
    }
}

/// Whether a recording belongs with those before it.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Belonging {
    /// Index of the recording, from 1: the first has nothing to belong to.
    pub capture: usize,
    /// Probability that it is of the same place.
    pub same_place: f64,
    /// Expected number of its tones that are tones of the others too, not counting
    /// the mains, which every place has.
    pub shared: f64,
    /// As many would agree by pure chance.
    pub by_chance: f64,
    /// Common tones that are the mains.
    pub mains: usize,
}

/// A recording's clock.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Clock {
    /// Relative error against the first recording's clock, parts per million.
    pub ppm: f64,
    /// ±, 95 %.
    pub ppm_u95: f64,
}

/// All that several recordings say together.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Reconciled {
    /// By number.
    pub tones: Vec<Physical>,
    /// One per recording but the first.
    pub belonging: Vec<Belonging>,
    /// One per recording but the first.
    pub clocks: Vec<Clock>,
}

/// States followed beside each other, and the least weight of one.
const MOST_STATES: usize = 48;
const LEAST_STATE: f64 = 1e-5;

/// Reconciles recordings. `rates_hz` are the sample rates that could be used next.
pub fn reconcile(captures: &[Capture], rates_hz: &[f64]) -> Reconciled {
    let place = tracks::Place::new(captures);
    let mut states = vec![matching::State::first(&place)];
    let mut belonging = Vec::new();
    for capture in 1..captures.len() {
        let mut next = Vec::new();
        let mut word = Vec::new();
        for state in &states {
            let (grown, belongs) = matching::add(&place, state, capture);
            word.push((state.weight, belongs));
            next.extend(grown);
        }
        belonging.push(matching::average(capture, &word));
        next.sort_by(|a, b| b.weight.total_cmp(&a.weight));
        next.truncate(MOST_STATES);
        let total: f64 = next.iter().map(|s| s.weight).sum();
        next.retain(|s| s.weight > LEAST_STATE * total);
        let total: f64 = next.iter().map(|s| s.weight).sum();
        for s in &mut next {
            s.weight /= total;
        }
        states = next;
    }
    let clocks = states.first().map_or(Vec::new(), |best| {
        best.deltas
            .iter()
            .skip(1)
            .map(|d| Clock {
                ppm: 1e6 * d.0,
                ppm_u95: 1e6 * crate::units::U95 * d.1,
            })
            .collect()
    });
    Reconciled {
        tones: rows::physical(&place, &states, rates_hz),
        belonging,
        clocks,
    }
}
