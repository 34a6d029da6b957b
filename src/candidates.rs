//! Every analog frequency a tone of one recording may truly have, with who would
//! have made it there and how probable that is.
//!
//! The suspects of [`crate::suspects`] name sources; a source known loosely can
//! meet a tone at several rungs of its ladder, and a tone that nothing listed made
//! can be on any rung. What follows (comparing recordings, choosing the next test)
//! needs them one by one.

use crate::fold::Rung;
use crate::frontend::Gain;
use crate::sources::{Catalogue, LatentId, Line, Source, Steadiness};
use crate::suspects::{Cause, Finding, Inference, Scene, position_variance};
use crate::units::{SeenHz, Sense, TrueHz};

/// Who would have made the tone.
#[derive(Debug, Clone, PartialEq, Eq, Hash, PartialOrd, Ord, serde::Serialize)]
pub enum Who {
    /// Line of a listed source: indices into the catalogue.
    Listed {
        /// Index into `Catalogue::sources`.
        source: usize,
        /// Index into that source's lines.
        line: usize,
    },
    /// A product of other tones (their numbers).
    Parents {
        /// Numbers of the parents.
        tones: Vec<usize>,
        /// `2x`, `a+b`, …
        label: String,
    },
    /// The recorder's own artefact.
    Recorder {
        /// `rate/1024`, …
        label: String,
    },
    /// Nothing listed.
    Unlisted,
}

/// One place a tone may truly come from.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Candidate {
    /// Who would have made it there.
    pub who: Who,
    /// Analog frequency on the recorder's own scale, `f/(1+ε)`, Hz.
    pub recorder_hz: f64,
    /// Nyquist zone, from 1.
    pub zone: u64,
    /// Upright or inverted.
    pub sense: Sense,
    /// Posterior probability, from this recording alone.
    pub probability: f64,
}

/// A tone's candidates.
#[derive(Debug, Clone, PartialEq)]
pub struct Outlook {
    /// Index into the scene's tones.
    pub tone: usize,
    /// Variance of the seen frequency, Hz².
    pub var: f64,
    /// Probabilities sum to about 1; no order.
    pub candidates: Vec<Candidate>,
}

/// Where nothing says how high analog frequencies go: this many times half the rate.
const HIGHEST: f64 = 50.0;
/// Rungs looked at.
const MOST_RUNGS: f64 = 400.0;
/// Part of the unlisted folded tones that is spread evenly over the analog axis; the
/// others are spread evenly over its logarithm.
const EVEN: f64 = 0.5;
/// Candidates less probable than this are not worth a thought.
const LEAST: f64 = 1e-9;

/// The highest analog frequency looked at for this scene, Hz.
pub fn top_hz(scene: &Scene) -> f64 {
    let half = scene.chain.file_rate_hz() / 2.0;
    scene
        .site
        .recorder
        .front_end
        .bandwidth_hz
        .unwrap_or(HIGHEST * half)
        .clamp(half, MOST_RUNGS * half)
}

/// Density of folded tones that nothing listed made, before any front end, at `f`
/// between `half` and `top` (Hz), in units of one tone per e-fold of frequency.
pub fn folded_density(f: f64, half: f64, top: f64) -> f64 {
    let folds = (top / half).max(1.0).ln();
    (1.0 - EVEN) / f.max(1e-9) + EVEN * folds / (top - half).max(1e-9 * half)
}

/// Candidates of every tone, up to `up_to_hz` of the analog axis.
pub fn of(scene: &Scene, inference: &Inference, up_to_hz: f64) -> Vec<Outlook> {
    let half = scene.chain.file_rate_hz() / 2.0;
    let up_to = TrueHz(up_to_hz.clamp(half, MOST_RUNGS * half));
    let front = scene.site.recorder.front_end.prepared();
    let rate = scene.chain.converter_rate_hz();
    let folded = |f: f64| front.share_seen(TrueHz(f), rate) * folded_density(f, half, up_to.0);
    inference
        .findings
        .iter()
        .filter_map(|finding| outlook(scene, finding, up_to, &folded))
        .collect()
}

/// Candidates of one tone, up to [`top_hz`].
pub fn one(scene: &Scene, finding: &Finding) -> Option<Outlook> {
    let front = scene.site.recorder.front_end.prepared();
    let rate = scene.chain.converter_rate_hz();
    let (half, top) = (scene.chain.file_rate_hz() / 2.0, top_hz(scene));
    let folded = |f: f64| front.share_seen(TrueHz(f), rate) * folded_density(f, half, top);
    outlook(scene, finding, TrueHz(top), &folded)
}

fn outlook(
    scene: &Scene,
    finding: &Finding,
    up_to: TrueHz,
    folded: &dyn Fn(f64) -> f64,
) -> Option<Outlook> {
    let half = scene.chain.file_rate_hz() / 2.0;
    let tone = scene.tones.get(finding.tone)?;
    let seen = SeenHz(tone.seen_hz.0.clamp(0.0, half));
    let ladder = scene.chain.unfold(seen, up_to).ok()?;
    Some(Outlook {
        tone: finding.tone,
        var: position_variance(tone, scene.duration_s),
        candidates: candidates(finding, &ladder, folded),
    })
}

fn candidates(finding: &Finding, ladder: &[Rung], folded: &dyn Fn(f64) -> f64) -> Vec<Candidate> {
    let mut all = Vec::new();
    for suspect in &finding.suspects {
        let who = match &suspect.cause {
            Cause::Source { source, line, .. } => Who::Listed {
                source: *source,
                line: *line,
            },
            Cause::Parents(tones) => Who::Parents {
                tones: tones.clone(),
                label: suspect.line.clone(),
            },
            Cause::Recorder => Who::Recorder {
                label: suspect.line.clone(),
            },
        };
        // What came later (time, references) changed the whole, not its division.
        let told: f64 = suspect.places.iter().map(|p| p.probability).sum();
        let scale = if told > 0.0 {
            suspect.probability / told
        } else {
            0.0
        };
        for place in suspect
            .places
            .iter()
            .filter(|p| scale * p.probability > LEAST)
        {
            // The tone is measured far better than its source is known: where the
            // source meets it, the rung tells the frequency.
            let rung = ladder
                .iter()
                .filter(|r| r.zone == place.zone)
                .min_by(|a, b| {
                    let off = |r: &Rung| (r.true_hz.0 - place.recorder_hz).abs();
                    off(a).total_cmp(&off(b))
                });
            let at = rung.map_or(place.recorder_hz, |r| r.true_hz.0);
            all.push(Candidate {
                who: who.clone(),
                recorder_hz: at,
                zone: place.zone,
                sense: if place.zone % 2 == 0 {
                    Sense::Inverted
                } else {
                    Sense::Upright
                },
                probability: scale * place.probability,
            });
        }
    }
    let weight = |r: &Rung| folded(r.true_hz.0);
    let total: f64 = ladder.iter().filter(|r| r.zone > 1).map(weight).sum();
    for rung in ladder {
        let probability = if rung.zone == 1 {
            finding.unlisted_direct
        } else if total > 0.0 {
            finding.unlisted_folded * weight(rung) / total
        } else {
            0.0
        };
        if probability > LEAST * LEAST {
            all.push(Candidate {
                who: Who::Unlisted,
                recorder_hz: rung.true_hz.0,
                zone: rung.zone,
                sense: rung.sense,
                probability,
            });
        }
    }
    all
}

/// SNR from which a tone is found, dB, and how well the level of one tone in another
/// recording can be foreseen. Judgements, not measurements.
const FOUND_DB: f64 = 13.0;
const FORESEEN_DB: f64 = 4.0;
/// Part of an undescribed filter's spread that two recordings do not share: most
/// recorders at one place are of one make.
const OWN_FILTER: f64 = 0.12;
/// An undescribed filter may follow the rate or stay: this part of the difference
/// between two rates is expected.
const FOLLOWS_RATE: f64 = 0.2;

/// Chance that a tone is found again, where its SNR would be `snr_db` behind the same
/// front end, once the gain before the converter is `to` instead of `from`.
pub fn chance_seen(snr_db: f64, from: Gain, to: Gain) -> f64 {
    let unsure = from.sd_db.max(to.sd_db);
    let part = if unsure > 1.0 { FOLLOWS_RATE } else { 1.0 };
    let sd = FORESEEN_DB.hypot(OWN_FILTER * unsure);
    let z = (snr_db + part * (to.mean_db - from.mean_db) - FOUND_DB) / sd;
    (0.5 * statrs::function::erf::erfc(-z / std::f64::consts::SQRT_2)).clamp(0.01, 0.999)
}

impl Who {
    /// The listed source and line meant.
    pub fn listed<'c>(&self, catalogue: &'c Catalogue) -> Option<(&'c Source, &'c Line)> {
        let Who::Listed { source, line } = self else {
            return None;
        };
        let source = catalogue.sources.get(*source)?;
        Some((source, source.lines.get(*line)?))
    }
}

/// Whether a line may move on its own: one of its latents is not locked to quartz.
pub fn is_free(catalogue: &Catalogue, line: &Line) -> bool {
    line.terms.iter().any(|&(LatentId(l), _)| {
        catalogue
            .latents
            .get(l)
            .is_some_and(|l| l.steadiness == Steadiness::Free)
    })
}
