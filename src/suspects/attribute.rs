//! From the solutions to findings: suspects with rungs and zones, fitted sources,
//! the clock.

use super::prior::Normal;
use super::scene::Scene;
use super::shares::{Shares, collect};
use super::solution::Solution;
use super::unlisted::Origins;
use super::{Cause, ClockFit, Finding, Inference, SourceFit, Suspect, Verdict, clock};
use crate::sources::LatentId;
use crate::units::{TrueHz, U95};

/// Suspects less probable than this are not worth a row.
const LEAST: f64 = 1e-6;

/// Puts the solutions, with their weights, into words.
pub(super) fn attribute(scene: &Scene, solutions: &[(f64, Solution)]) -> Inference {
    let shares = collect(scene, solutions);
    let best = solutions
        .iter()
        .max_by(|a, b| a.0.total_cmp(&b.0))
        .map(|s| &s.1);
    let (epsilon, used) = match best {
        Some(best) => clock::posterior(scene, &best.solved, &|_| false),
        None => (
            Normal {
                mean: 0.0,
                sd: clock::prior_sd(scene),
            },
            0,
        ),
    };
    let unlisted: Vec<f64> = (0..scene.tones.len())
        .map(|i| solutions.iter().map(|(w, s)| w * s.unlisted_share(i)).sum())
        .collect();
    let origins = Origins::new(scene, unlisted.iter().sum());
    let mut findings: Vec<Finding> = scene
        .tones
        .iter()
        .zip(&unlisted)
        .enumerate()
        .map(|(i, (tone, share))| {
            let folded = share * origins.folded(tone.seen_hz.0);
            Finding {
                tone: i,
                folded_probability: folded,
                verdict: Verdict::Open,
                suspects: Vec::new(),
                unlisted_direct: share - folded,
                unlisted_folded: folded,
            }
        })
        .collect();
    let explained = propose(scene, &shares, &origins, epsilon, &mut findings);
    for finding in &mut findings {
        finding
            .suspects
            .sort_by(|a, b| b.probability.total_cmp(&a.probability));
        finding.folded_probability = finding.folded_probability.clamp(0.0, 1.0);
        finding.verdict = Verdict::from_folded_probability(finding.folded_probability);
    }
    Inference {
        findings,
        fits: best.map_or(Vec::new(), |best| {
            source_fits(scene, best, &explained, epsilon)
        }),
        clock: ClockFit {
            ppm: 1e6 * epsilon.mean,
            ppm_u95: 1e6 * U95 * epsilon.sd,
            latents: used,
        },
    }
}

/// Enters every proposal; returns the number of tones each source explains.
fn propose(
    scene: &Scene,
    shares: &Shares,
    origins: &Origins,
    epsilon: Normal,
    findings: &mut [Finding],
) -> Vec<f64> {
    let catalogue = &scene.site.catalogue;
    let mut explained = vec![0.0; catalogue.sources.len()];
    for (proposal, worth) in shares {
        let Some(finding) = findings.get_mut(proposal.tone) else {
            continue;
        };
        let (total, folded) = (worth.mass(), worth.folded());
        let Some(source) = catalogue.sources.get(proposal.source) else {
            // A family nobody listed. Of an anonymous one only the place as seen is
            // known: it may be folded as a whole.
            let folded = if worth.anonymous {
                folded + (total - folded) * origins.family_folded(worth.fundamental / total)
            } else {
                folded
            };
            finding.folded_probability += folded;
            finding.unlisted_folded += folded;
            finding.unlisted_direct += total - folded;
            continue;
        };
        finding.folded_probability += folded;
        if let Some(e) = explained.get_mut(proposal.source) {
            *e += total;
        }
        let best = worth
            .zones
            .iter()
            .max_by(|a, b| a.1.mass.total_cmp(&b.1.mass));
        let Some((&zone, share)) = best.filter(|_| total >= LEAST) else {
            continue;
        };
        // From the recorder's own scale to true hertz.
        let (f, var) = share.frequency();
        let f = f * (1.0 + epsilon.mean);
        finding.suspects.push(Suspect {
            cause: Cause::Source {
                source: proposal.source,
                line: proposal.line,
                name: source.name.clone(),
                kind: source.kind,
            },
            line: source
                .lines
                .get(proposal.line)
                .map(|l| l.label.clone())
                .unwrap_or_default(),
            true_hz: TrueHz(f),
            true_hz_u95: U95 * var.sqrt().hypot(f * epsilon.sd),
            zone,
            sense: share.sense,
            probability: total,
            coincidence: worth.coincidence / total,
        });
    }
    explained
}

fn source_fits(
    scene: &Scene,
    solution: &Solution,
    explained: &[f64],
    epsilon: Normal,
) -> Vec<SourceFit> {
    let catalogue = &scene.site.catalogue;
    catalogue
        .sources
        .iter()
        .enumerate()
        .map(|(index, source)| {
            let mut latents: Vec<usize> = Vec::new();
            for &(LatentId(l), _) in source.lines.iter().flat_map(|l| &l.terms) {
                if !latents.contains(&l) {
                    latents.push(l);
                }
            }
            let absent = solution
                .solved
                .iter()
                .flat_map(|s| s.cluster.members.iter().zip(&s.value.absent))
                .find(|(m, _)| m.source == index)
                .map_or(1.0, |(_, a)| *a);
            SourceFit {
                source: index,
                latents: latents
                    .iter()
                    .filter_map(|&l| {
                        let latent = catalogue.latents.get(l)?;
                        let p = solution.latents.get(l)?;
                        let hz = p.mean * (1.0 + epsilon.mean);
                        // Never less certain than the listing itself.
                        let sd = p.sd.hypot(hz * epsilon.sd);
                        let sd = if sd < latent.sd_hz { sd } else { latent.sd_hz };
                        Some((latent.name.clone(), hz, U95 * sd))
                    })
                    .collect(),
                tones_explained: explained.get(index).copied().unwrap_or(0.0),
                present_probability: 1.0 - absent,
            }
        })
        .collect()
}
