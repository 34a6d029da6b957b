//! From the solutions to findings: suspects with rungs and zones, fitted sources,
//! the clock.

use super::byproducts::Maker;
use super::prior::Normal;
use super::scene::Scene;
use super::shares::{Shares, collect};
use super::solution::Solution;
use super::timely::Timely;
use super::unlisted::Origins;
use super::{
    Cause, ClockFit, Finding, Ground, Inference, Place, SourceFit, Suspect, Verdict, clock,
};
use crate::sources::{LatentId, Line};
use crate::units::{Sense, TrueHz, U95};

/// Suspects less probable than this are not worth a row.
const LEAST: f64 = 1e-6;

/// Puts the solutions, with their weights, into words.
pub(super) fn attribute(scene: &Scene, solutions: &[(f64, Solution)]) -> Inference {
    let mut shares = collect(scene, solutions);
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
        .map(|i| solutions.iter().map(|(w, s)| w * s.left_over(i).0).sum())
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
                unlisted_at: None,
                grounds: Vec::new(),
            }
        })
        .collect();
    let timely = Timely::new(scene, &shares);
    if let Some(timely) = &timely {
        timely.reweigh(&mut shares);
    }
    propose(scene, &shares, &origins, epsilon, &mut findings);
    name_byproducts(scene, solutions, &origins, &mut findings);
    if let Some(timely) = &timely {
        for finding in &mut findings {
            timely.finish(finding);
        }
    }
    let explained = explained(scene, &findings);
    for finding in &mut findings {
        finding
            .suspects
            .sort_by(|a, b| b.probability.total_cmp(&a.probability));
        finding.folded_probability = finding.folded_probability.clamp(0.0, 1.0);
        finding.verdict = Verdict::from_folded_probability(finding.folded_probability);
        rest(finding, &explained, timely.as_ref());
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

/// What the most probable explanation rests on.
fn rest(finding: &mut Finding, explained: &[f64], timely: Option<&Timely>) {
    let top = finding
        .suspects
        .first()
        .filter(|s| s.probability > finding.unlisted_direct + finding.unlisted_folded);
    let mut grounds = timely.map_or(Vec::new(), |t| t.grounds(finding, top));
    let family = match top.map(|s| &s.cause) {
        Some(Cause::Source { source, .. }) => explained
            .get(*source)
            .is_some_and(|e| e - top.map_or(0.0, |s| s.probability) > 0.9),
        _ => false,
    };
    if family {
        grounds.push(Ground::Family);
    }
    grounds.push(Ground::Frequency);
    finding.grounds = grounds;
}

/// Enters every proposal.
fn propose(
    scene: &Scene,
    shares: &Shares,
    origins: &Origins,
    epsilon: Normal,
    findings: &mut [Finding],
) {
    let catalogue = &scene.site.catalogue;
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
            places: worth
                .zones
                .iter()
                .map(|(&zone, share)| Place {
                    recorder_hz: share.frequency().0,
                    zone,
                    probability: share.mass,
                })
                .collect(),
        });
    }
}

/// Expected number of tones that each source explains.
fn explained(scene: &Scene, findings: &[Finding]) -> Vec<f64> {
    let mut explained = vec![0.0; scene.site.catalogue.sources.len()];
    for s in findings.iter().flat_map(|f| &f.suspects) {
        if let Cause::Source { source, .. } = s.cause
            && let Some(e) = explained.get_mut(source)
        {
            *e += s.probability;
        }
    }
    explained
}

/// Rows of by-products, by falling probability: at most this many of a tone.
const MOST_BYPRODUCTS: usize = 4;

/// Enters products of tones and artefacts of the recorder. A product whose parents
/// are lines of one listed source, and which is a line of that source itself, goes
/// under the source's name.
fn name_byproducts(
    scene: &Scene,
    solutions: &[(f64, Solution)],
    origins: &Origins,
    findings: &mut [Finding],
) {
    let Some((_, first)) = solutions.first() else {
        return;
    };
    let mut entered: Vec<(usize, Suspect)> = Vec::new();
    for (k, b) in first.byproducts.products.iter().enumerate() {
        let probability: f64 = solutions
            .iter()
            .map(|(w, s)| {
                let open = s.gates.open.get(k).copied().unwrap_or(0.0);
                w * s.left_over(b.tone).1 * open * b.density
            })
            .sum();
        if probability < LEAST {
            continue;
        }
        let nu = scene.tones.get(b.tone).map_or(0.0, |t| t.seen_hz.0);
        let u95 = scene.tones.get(b.tone).map_or(0.0, |t| t.seen_hz_u95);
        let suspect = match &b.maker {
            Maker::Unlisted => {
                if let Some(finding) = findings.get_mut(b.tone) {
                    let folded = probability * origins.folded(nu);
                    finding.folded_probability += folded;
                    finding.unlisted_folded += folded;
                    finding.unlisted_direct += probability - folded;
                }
                continue;
            }
            Maker::Recorder => Suspect {
                cause: Cause::Recorder,
                line: b.label.clone(),
                true_hz: TrueHz(nu),
                true_hz_u95: u95,
                zone: 1,
                sense: Sense::Upright,
                probability,
                coincidence: chance_of_byproduct(scene, first, b.tone),
                places: vec![Place {
                    recorder_hz: nu,
                    zone: 1,
                    probability,
                }],
            },
            Maker::Parents(recipe) => {
                // As far as known, the parents are where their best suspects say.
                let f: f64 = recipe
                    .iter()
                    .map(|&(i, k)| f64::from(k) * parent_hz(scene, findings, i))
                    .sum();
                let f = f.abs();
                let seen = scene.chain.see(TrueHz(f));
                let own = own_line(scene, findings, recipe);
                let cause = own.as_ref().map_or_else(
                    || {
                        let number = |i: usize| scene.tones.get(i).map_or(i + 1, |t| t.number);
                        Cause::Parents(recipe.iter().map(|r| number(r.0)).collect())
                    },
                    |o| o.0.clone(),
                );
                Suspect {
                    cause,
                    line: own.map_or_else(|| b.label.clone(), |o| o.1),
                    true_hz: TrueHz(f),
                    true_hz_u95: u95,
                    zone: seen.zone,
                    sense: seen.sense,
                    probability,
                    coincidence: chance_of_byproduct(scene, first, b.tone),
                    places: vec![Place {
                        recorder_hz: f,
                        zone: seen.zone,
                        probability,
                    }],
                }
            }
        };
        entered.push((b.tone, suspect));
    }
    entered.sort_by(|a, b| b.1.probability.total_cmp(&a.1.probability));
    for (tone, suspect) in entered {
        let Some(finding) = findings.get_mut(tone) else {
            continue;
        };
        if suspect.zone > 1 {
            finding.folded_probability += suspect.probability;
        }
        let same = finding
            .suspects
            .iter_mut()
            .find(|s| s.cause == suspect.cause && s.line == suspect.line);
        let byproduct = |s: &&Suspect| !matches!(s.cause, Cause::Source { .. });
        if let Some(same) = same {
            same.probability += suspect.probability;
            same.places.extend(suspect.places);
        } else if finding.suspects.iter().filter(byproduct).count() < MOST_BYPRODUCTS {
            finding.suspects.push(suspect);
        } else if let Some(least) = finding
            .suspects
            .iter_mut()
            .rev()
            .find(|s| !matches!(s.cause, Cause::Source { .. }))
        {
            // Too faint for a row of its own, but not lost.
            least.probability += suspect.probability;
            if let Some(place) = least.places.first_mut() {
                place.probability += suspect.probability;
            }
        }
    }
}

/// By-products expected this close by chance.
fn chance_of_byproduct(scene: &Scene, solution: &Solution, tone: usize) -> f64 {
    let half = scene.chain.file_rate_hz() / 2.0;
    let var = solution.tones.get(tone).map_or(0.0, |t| t.var);
    solution.byproducts.products.len() as f64 * (2.0 * U95 * var.sqrt() / half).min(1.0)
}

fn parent_hz(scene: &Scene, findings: &[Finding], i: usize) -> f64 {
    let seen = scene.tones.get(i).map_or(0.0, |t| t.seen_hz.0);
    findings
        .get(i)
        .and_then(|f| f.suspects.iter().find(|s| s.probability > 0.5))
        .map_or(seen, |s| s.true_hz.0)
}

/// The listed source and line that a product of its own lines is.
fn own_line(
    scene: &Scene,
    findings: &[Finding],
    recipe: &[(usize, i32)],
) -> Option<(Cause, String)> {
    let catalogue = &scene.site.catalogue;
    let mut terms: Vec<(LatentId, f64)> = Vec::new();
    let mut owner: Option<(usize, &Cause)> = None;
    for &(i, k) in recipe {
        let best = findings
            .get(i)?
            .suspects
            .iter()
            .find(|s| s.probability > 0.5)?;
        let Cause::Source { source, line, .. } = &best.cause else {
            return None;
        };
        if owner.is_some_and(|o| o.0 != *source) {
            return None;
        }
        owner = Some((*source, &best.cause));
        for &(l, a) in &catalogue.sources.get(*source)?.lines.get(*line)?.terms {
            let a = f64::from(k) * a;
            match terms.iter_mut().find(|t| t.0 == l) {
                Some(t) => t.1 += a,
                None => terms.push((l, a)),
            }
        }
    }
    terms.retain(|t| t.1.abs() > 1e-9);
    let (source, cause) = owner?;
    let lines = &catalogue.sources.get(source)?.lines;
    let same = |line: &&Line| {
        line.terms.len() == terms.len()
            && [1.0, -1.0].iter().any(|sign| {
                line.terms.iter().all(|(l, a)| {
                    terms
                        .iter()
                        .any(|t| t.0 == *l && (sign * t.1 - a).abs() < 1e-9)
                })
            })
    };
    let index = lines.iter().position(|l| same(&l))?;
    let Cause::Source { name, kind, .. } = cause else {
        return None;
    };
    Some((
        Cause::Source {
            source,
            line: index,
            name: name.clone(),
            kind: *kind,
        },
        lines.get(index)?.label.clone(),
    ))
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
