//! Evidence from time, multiplied in: which rung a tone is on by its time stamps, and
//! what it moves with.
//!
//! [`crate::evidence`] measures likelihoods of data that the frequency of a tone does
//! not use, so each explanation of a tone (a line in a zone, or `unlisted` direct or
//! folded) is multiplied by its own. A tone is weighed by one tie only, to a
//! reference or to a stronger tone, so that the same movement is not counted twice;
//! what the stronger tone is, is taken from everything but the tie.

use super::scene::Scene;
use super::shares::{Proposal, Shares};
use super::{Cause, Finding, Ground, Placed, Suspect};
use crate::evidence::timestamps::RungLikelihood;
use crate::evidence::{Anchor, Basis, Evidence, Tie};
use crate::sources::{LatentId, Line, Steadiness};
use crate::units::Sense;

/// Chance that an unlisted tone moves with a given other one because something that
/// nobody listed ties them; more where that one is unlisted too.
const TIED: f64 = 0.05;
const TIED_TO_UNLISTED: f64 = 0.5;
/// Ratios of unlisted ties are spread over the logarithm of such a range, and whole
/// numbers over so many.
const RATIOS: f64 = 1e3;
const ORDERS: f64 = 50.0;
/// No single piece of evidence counts for more, nats.
const MOST_NATS: f64 = 200.0;
/// Evidence that sets explanations this far apart is named as what decided, nats.
const DECISIVE: f64 = 3.0;
/// Suspects less probable than this are not worth a row.
const LEAST: f64 = 1e-6;

/// A listed line that a tone may be, as far as frequency and families say.
struct KnownLine {
    source: usize,
    line: usize,
    sense: Sense,
    hz: f64,
    probability: f64,
}

/// What one tone is.
struct Known {
    lines: Vec<KnownLine>,
}

/// Log-likelihoods of explanations of a tone.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub(super) struct Nats {
    /// By time stamps.
    pub stamps: f64,
    /// By a tie.
    pub tie: f64,
}

impl Nats {
    pub fn sum(&self) -> f64 {
        (self.stamps + self.tie).clamp(-MOST_NATS, MOST_NATS)
    }
}

/// Weighs explanations of tones by evidence from time.
pub(super) struct Timely<'a> {
    scene: &'a Scene<'a>,
    evidence: &'a Evidence,
    known: Vec<Known>,
    /// The tie each tone is weighed by.
    ties: Vec<Option<&'a Tie>>,
}

impl<'a> Timely<'a> {
    /// `None` where there is no evidence from time.
    pub fn new(scene: &'a Scene<'a>, shares: &Shares) -> Option<Timely<'a>> {
        let evidence = scene.evidence?;
        let mut known: Vec<Known> = scene
            .tones
            .iter()
            .map(|_| Known { lines: Vec::new() })
            .collect();
        for (proposal, worth) in shares {
            if scene.site.catalogue.sources.len() <= proposal.source {
                continue;
            }
            if let Some(k) = known.get_mut(proposal.tone) {
                for share in worth.zones.values() {
                    k.lines.push(KnownLine {
                        source: proposal.source,
                        line: proposal.line,
                        sense: share.sense,
                        hz: share.frequency().0,
                        probability: share.mass,
                    });
                }
            }
        }
        let ties = (0..scene.tones.len())
            .map(|i| chosen(scene, evidence, i))
            .collect();
        Some(Timely {
            scene,
            evidence,
            known,
            ties,
        })
    }

    /// Multiplies every proposal of a listed source, zone by zone. A tone's
    /// probabilities no longer sum to 1 until [`finish`](Timely::finish).
    pub fn reweigh(&self, shares: &mut Shares) {
        let listed = self.scene.site.catalogue.sources.len();
        for (proposal, worth) in shares.iter_mut() {
            if proposal.source < listed {
                worth.scale_zones(|share| {
                    let nats = self.line(*proposal, share.sense, share.frequency().0);
                    nats.sum().exp()
                });
            }
        }
    }

    /// Weighs what is unlisted, and has the probabilities sum to 1 again.
    pub fn finish(&self, finding: &mut Finding) {
        let (direct, folded) = self.unlisted(finding.tone);
        finding.folded_probability -= finding.unlisted_folded;
        finding.unlisted_direct *= direct.sum().exp();
        finding.unlisted_folded *= folded.sum().exp();
        finding.folded_probability += finding.unlisted_folded;
        let suspects: f64 = finding.suspects.iter().map(|s| s.probability).sum();
        let all = suspects + finding.unlisted_direct + finding.unlisted_folded;
        if all > 0.0 && all.is_finite() {
            for s in &mut finding.suspects {
                s.probability /= all;
            }
            finding.unlisted_direct /= all;
            finding.unlisted_folded /= all;
            finding.folded_probability /= all;
        }
        finding.suspects.retain(|s| s.probability >= LEAST);
        finding.unlisted_at = self.place(finding);
    }

    /// Which evidence from time decided for the explanation `top` (`None`: unlisted),
    /// by speaking for it or against another that frequency left open.
    pub fn grounds(&self, finding: &Finding, top: Option<&Suspect>) -> Vec<Ground> {
        let i = finding.tone;
        let (direct, folded) = self.unlisted(i);
        let mut rivals = vec![direct, folded];
        let mut own = if finding.unlisted_folded > finding.unlisted_direct {
            folded
        } else {
            direct
        };
        for k in self.known.get(i).map_or(&[][..], |k| &k.lines) {
            if k.probability < 0.01 {
                continue;
            }
            let proposal = Proposal {
                tone: i,
                source: k.source,
                line: k.line,
            };
            rivals.push(self.line(proposal, k.sense, k.hz));
        }
        if let Some(top) = top {
            let Cause::Source { source, line, .. } = top.cause else {
                return Vec::new();
            };
            let proposal = Proposal {
                tone: i,
                source,
                line,
            };
            own = self.line(proposal, top.sense, top.true_hz.0);
        }
        let ahead = |nats: &dyn Fn(&Nats) -> f64| {
            let behind = rivals.iter().map(|r| nats(&own) - nats(r));
            behind.fold(0.0, f64::max)
        };
        let mut grounds: Vec<(f64, Ground)> = vec![(ahead(&|n| n.stamps), Ground::Timestamps)];
        if let Some(basis) = self.ties.get(i).copied().flatten().map(|t| t.by) {
            let ground = match basis {
                Basis::Movement => Ground::Movement,
                Basis::Phase => Ground::Phase,
            };
            grounds.push((ahead(&|n| n.tie), ground));
        }
        grounds.retain(|g| g.0 > DECISIVE);
        grounds.sort_by(|a, b| b.0.total_cmp(&a.0));
        grounds.into_iter().map(|g| g.1).collect()
    }

    /// Of a listed line in a zone of that sense, at `true_hz`.
    pub fn line(&self, proposal: Proposal, sense: Sense, true_hz: f64) -> Nats {
        let tie = match (
            self.ties.get(proposal.tone).copied().flatten(),
            self.line_of(proposal.source, proposal.line),
        ) {
            (Some(tie), Some(line)) => self.tied(tie, line, sense),
            _ => 0.0,
        };
        Nats {
            stamps: self.evidence.ln_rung(proposal.tone, true_hz),
            tie,
        }
    }

    /// Of `unlisted`: direct, folded.
    pub fn unlisted(&self, tone: usize) -> (Nats, Nats) {
        let nu = self.scene.tones.get(tone).map_or(0.0, |t| t.seen_hz.0);
        let (direct, folded) = self.unlisted_tie(tone);
        (
            Nats {
                stamps: self.evidence.ln_rung(tone, nu),
                tie: direct,
            },
            Nats {
                stamps: self.folded_rungs(tone),
                tie: folded,
            },
        )
    }

    fn line_of(&self, source: usize, line: usize) -> Option<&'a Line> {
        let catalogue = &self.scene.site.catalogue;
        catalogue.sources.get(source)?.lines.get(line)
    }

    /// The latent a reference tells of: of the source's, the nearest to its mean.
    fn latent_of(&self, name: &str) -> Option<LatentId> {
        let mean = self
            .evidence
            .references
            .iter()
            .find(|r| r.source == name)?
            .mean_hz;
        let catalogue = &self.scene.site.catalogue;
        let source = catalogue.sources.iter().find(|s| s.name == name)?;
        source
            .lines
            .iter()
            .flat_map(|l| &l.terms)
            .map(|&(l, _)| l)
            .min_by(|a, b| {
                let off = |l: &LatentId| {
                    catalogue
                        .latents
                        .get(l.0)
                        .map_or(f64::INFINITY, |l| (l.nominal_hz / mean).ln().abs())
                };
                off(a).total_cmp(&off(b))
            })
    }

    /// How a line's analog frequency moves with a latent that can move.
    fn coefficient(&self, line: &Line, latent: LatentId) -> Option<f64> {
        let catalogue = &self.scene.site.catalogue;
        if catalogue.latents.get(latent.0)?.steadiness == Steadiness::Quartz {
            return None;
        }
        let (_, a) = line.terms.iter().find(|t| t.0 == latent)?;
        Some(if catalogue.nominal_hz(line) < 0.0 {
            -a
        } else {
            *a
        })
    }

    /// ln p(movement | this line) − ln p(movement | independent).
    fn tied(&self, tie: &Tie, line: &Line, sense: Sense) -> f64 {
        let own = |latent: LatentId| self.coefficient(line, latent);
        let likelihood = |multiplier: f64| {
            tie.ln_likelihood(multiplier)
                .unwrap_or(0.0)
                .clamp(-MOST_NATS, MOST_NATS)
        };
        match &tie.to {
            Anchor::Reference(name) => self
                .latent_of(name)
                .and_then(own)
                .map_or(0.0, |a| likelihood(sense.sign() * a)),
            Anchor::Tone(j) => {
                let Some(known) = self.known.get(*j) else {
                    return 0.0;
                };
                let mut rest = 1.0;
                let mut sum = 0.0;
                for k in &known.lines {
                    let (other_sense, p) = (k.sense, k.probability);
                    let Some(other) = self.line_of(k.source, k.line) else {
                        continue;
                    };
                    // Whichever common latent moves.
                    let ratios: Vec<f64> = other
                        .terms
                        .iter()
                        .filter_map(|&(l, _)| {
                            let (a, b) = (own(l)?, self.coefficient(other, l)?);
                            Some(sense.sign() * a / (other_sense.sign() * b))
                        })
                        .collect();
                    if ratios.is_empty() {
                        continue;
                    }
                    rest -= p;
                    let each = 1.0 / ratios.len() as f64;
                    sum += ratios
                        .iter()
                        .map(|&r| p * each * likelihood(r).exp())
                        .sum::<f64>();
                }
                (sum + rest.max(0.0)).ln()
            }
        }
    }

    fn unlisted_tie(&self, tone: usize) -> (f64, f64) {
        let Some(tie) = self.ties.get(tone).copied().flatten() else {
            return (0.0, 0.0);
        };
        // What the anchor is: probability that it is upright, and that it is unlisted.
        let (upright, unlisted) = match &tie.to {
            Anchor::Reference(_) => (1.0, 0.0),
            Anchor::Tone(j) => {
                let lines = self.known.get(*j).map_or(&[][..], |k| &k.lines);
                let listed: f64 = lines.iter().map(|l| l.probability).sum();
                let up: f64 = lines
                    .iter()
                    .filter(|l| l.sense == Sense::Upright)
                    .map(|l| l.probability)
                    .sum();
                let rest = (1.0 - listed).max(0.0);
                // Most unlisted tones are where they show.
                (up + 0.8 * rest, rest)
            }
        };
        let chance = TIED + (TIED_TO_UNLISTED - TIED) * unlisted;
        let ratios = if tie.sd > 0.0 {
            (2.5 * tie.sd / tie.multiplier.abs().max(tie.sd) / RATIOS.ln()).min(1.0)
        } else {
            1.0 / ORDERS
        };
        let tied = chance * ratios * tie.ln_ratio.clamp(-MOST_NATS, MOST_NATS).exp();
        let own_upright = if tie.multiplier > 0.0 {
            upright
        } else {
            1.0 - upright
        };
        // Half of all folded rungs are upright.
        let direct = (1.0 - chance) + tied * own_upright;
        let folded = (1.0 - chance) + tied * 0.5;
        (direct.ln(), folded.ln())
    }

    fn rungs(&self, tone: usize) -> &'a [RungLikelihood] {
        let stamps = self.evidence.stamps.as_ref();
        stamps
            .and_then(|s| s.tones.iter().find(|t| t.tone == tone))
            .map_or(&[], |t| &t.rungs)
    }

    /// Where an unlisted tone is by its time stamps.
    fn place(&self, finding: &Finding) -> Option<Placed> {
        let half = self.scene.chain.file_rate_hz() / 2.0;
        let unlisted = finding.unlisted_direct + finding.unlisted_folded;
        if unlisted < LEAST {
            return None;
        }
        let rungs = self.rungs(finding.tone);
        // Within the folded ones, lower rungs are more common.
        let all: f64 = rungs
            .iter()
            .filter(|r| r.true_hz.0 > half)
            .map(|r| r.ln_likelihood.max(-MOST_NATS).exp() / r.true_hz.0)
            .sum();
        let best = rungs.iter().map(|r| {
            let p = if r.true_hz.0 > half {
                let own = r.ln_likelihood.max(-MOST_NATS).exp() / r.true_hz.0;
                finding.unlisted_folded * own / all.max(1e-300)
            } else {
                finding.unlisted_direct
            };
            (p / unlisted, r)
        });
        let (probability, rung) = best.max_by(|a, b| a.0.total_cmp(&b.0))?;
        let tone = self.scene.tones.get(finding.tone)?;
        (probability > 0.5).then_some(Placed {
            true_hz: rung.true_hz,
            true_hz_u95: tone.seen_hz_u95,
            zone: rung.zone,
            probability,
        })
    }

    /// Mean likelihood of the folded rungs, the lower ones being more common.
    fn folded_rungs(&self, tone: usize) -> f64 {
        let half = self.scene.chain.file_rate_hz() / 2.0;
        let rungs = self.rungs(tone);
        let (mut sum, mut all) = (0.0, 0.0);
        for r in rungs.iter().filter(|r| r.true_hz.0 > half) {
            let weight = 1.0 / r.true_hz.0;
            all += weight;
            sum += weight * r.ln_likelihood.max(-MOST_NATS).exp();
        }
        if all > 0.0 {
            (sum / all).max(1e-80).ln()
        } else {
            0.0
        }
    }
}

/// The tie a tone is weighed by: a reference if it follows one, otherwise the
/// strongest to a stronger tone.
fn chosen<'a>(scene: &Scene, evidence: &'a Evidence, tone: usize) -> Option<&'a Tie> {
    let snr = |i: usize| scene.tones.get(i).map_or(f64::NEG_INFINITY, |t| t.snr_db);
    let ties = evidence.ties_of(tone);
    ties.iter()
        .find(|t| matches!(t.to, Anchor::Reference(_)))
        .or_else(|| {
            ties.iter().find(|t| match t.to {
                // Where two tracks hardly move their ratio means nothing.
                Anchor::Tone(_) if t.ln_ratio < DECISIVE => false,
                Anchor::Tone(j) => {
                    (snr(j), std::cmp::Reverse(j)) > (snr(tone), std::cmp::Reverse(tone))
                }
                Anchor::Reference(_) => false,
            })
        })
        .copied()
}
