//! Which sources could have made each tone, and how probable each is.
//!
//! Joint inference over all tones and all listed sources. Sources that share
//! latent frequencies form a *cluster* (`clusters`); where its latents could be
//! is found from where its lines meet tones (`places`, `pairs`); the likelihood
//! there, and who explains which tone, is `evaluate`; clusters are reconciled
//! with one another, with `unlisted` tones and with the recorder's `clock` in
//! `sweep` and `mixture`; `attribute` puts the result into words. Harmonics
//! of other tones and the recorder's own artefacts are `byproducts`; families that
//! nobody listed are `hidden` beside the listed ones. Evidence from time is multiplied
//! in at the end (`timely`).

mod attribute;
mod byproducts;
mod clock;
mod clusters;
mod evaluate;
mod gates;
mod hidden;
mod mixture;
mod modes;
mod pairs;
mod places;
mod prior;
mod scene;
mod shares;
mod solution;
mod strength;
mod sweep;
mod timely;
mod unlisted;
mod wander;

pub use scene::{Scene, position_variance};

use crate::sources::Kind;
use crate::units::{Sense, TrueHz};
use serde::Serialize;

/// Who is proposed for a tone.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub enum Cause {
    /// A listed source: index into the catalogue.
    Source {
        /// Index into `Catalogue::sources`.
        source: usize,
        /// Index into that source's lines.
        line: usize,
        /// For the reports.
        name: String,
        /// For the reports.
        kind: Kind,
    },
    /// A harmonic or intermodulation of seen tones (their numbers).
    Parents(Vec<usize>),
    /// The recorder's own artefact.
    Recorder,
}

/// One suspect for one tone.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Suspect {
    /// Who.
    pub cause: Cause,
    /// `7x`, `2c-4o`, `rate/3`.
    pub line: String,
    /// Posterior estimate of the analog frequency given this suspect.
    pub true_hz: TrueHz,
    /// ±, 95 %, Hz.
    pub true_hz_u95: f64,
    /// Nyquist zone, from 1.
    pub zone: u64,
    /// Upright or inverted.
    pub sense: Sense,
    /// Posterior probability.
    pub probability: f64,
    /// Listed lines expected this close by pure chance.
    pub coincidence: f64,
    /// Every place on the ladder where it could be, with probabilities in proportion. `true_hz`, `zone` and `sense` are those of the best.
    pub places: Vec<Place>,
}

/// One place on a tone's ladder at which a suspect could have made it.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Place {
    /// Analog frequency on the recorder's own scale, `f/(1+ε)`, Hz.
    pub recorder_hz: f64,
    /// Nyquist zone, from 1.
    pub zone: u64,
    /// Posterior probability of this suspect in this zone.
    pub probability: f64,
}

/// `direct`, `folded` or `open`.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Verdict {
    /// `folded_probability` ≤ 0.1.
    Direct,
    /// `folded_probability` ≥ 0.9.
    Folded,
    /// Between.
    Open,
}

impl Verdict {
    /// The contract's thresholds.
    pub fn from_folded_probability(p: f64) -> Self {
        if p <= 0.1 {
            Verdict::Direct
        } else if p >= 0.9 {
            Verdict::Folded
        } else {
            Verdict::Open
        }
    }
}

/// What an explanation rests on.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Ground {
    /// Where the tone is seen.
    Frequency,
    /// Other tones of the same source.
    Family,
    /// It moves with something.
    Movement,
    /// It turns in phase with something.
    Phase,
    /// Uneven time stamps.
    Timestamps,
}

/// Where time stamps say that an unlisted tone is.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Placed {
    /// The analog frequency.
    pub true_hz: TrueHz,
    /// ±, 95 %, Hz.
    pub true_hz_u95: f64,
    /// Nyquist zone, from 1.
    pub zone: u64,
    /// That it is there, if the tone is unlisted.
    pub probability: f64,
}

/// What is concluded about one tone.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Finding {
    /// Index into the tones.
    pub tone: usize,
    /// Probability that the tone is folded, over all suspects and unlisted.
    pub folded_probability: f64,
    /// From `folded_probability`.
    pub verdict: Verdict,
    /// By falling probability.
    pub suspects: Vec<Suspect>,
    /// Probability of no listed source, in band and folded.
    pub unlisted_direct: f64,
    /// See `unlisted_direct`.
    pub unlisted_folded: f64,
    /// Where the unlisted tone is, if time stamps tell.
    pub unlisted_at: Option<Placed>,
    /// What the most probable explanation rests on, the decisive first.
    pub grounds: Vec<Ground>,
}

/// What the recording says of one listed source.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct SourceFit {
    /// Index into `Catalogue::sources`.
    pub source: usize,
    /// `(latent name, fitted Hz, ± 95 % Hz)`.
    pub latents: Vec<(String, f64, f64)>,
    /// Expected number of tones it explains.
    pub tones_explained: f64,
    /// Probability that it is present at all.
    pub present_probability: f64,
}

/// The recorder's clock error, fitted.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct ClockFit {
    /// Relative error of the true rate against the nominal, parts per million.
    pub ppm: f64,
    /// ±, 95 %, parts per million.
    pub ppm_u95: f64,
    /// How many fitted latents it rests on; 0 means only the description.
    pub latents: usize,
}

/// All that is concluded about one recording.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Inference {
    /// One per tone, in their order.
    pub findings: Vec<Finding>,
    /// One per listed source, in the order of the catalogue.
    pub fits: Vec<SourceFit>,
    /// The clock that reconciles the sources.
    pub clock: ClockFit,
}

/// Infers who made each tone. Never fails: without sources every tone is unlisted.
pub fn infer(scene: &Scene) -> Inference {
    attribute::attribute(scene, &sweep::solve(scene))
}
