//! From the solution to findings: suspects with rungs and zones, fitted sources,
//! the clock.

use super::hidden::Standing;
use super::modes::Entry;
use super::prior::{Normal, Prior};
use super::scene::Scene;
use super::sweep::{Solution, Solved};
use super::{Cause, ClockFit, Finding, Inference, SourceFit, Suspect, Verdict, clock};
use crate::sources::LatentId;
use crate::units::{Sense, TrueHz, U95};
use std::collections::BTreeMap;

/// Suspects less probable than this are not worth a row.
const LEAST: f64 = 1e-6;

/// Mass of one suspect in one zone.
#[derive(Debug, Clone, Copy)]
struct Share {
    mass: f64,
    /// Mass-weighted sums of frequency, its square about `pivot`, and variance.
    sum: f64,
    square: f64,
    pivot: f64,
    sense: Sense,
}

/// Per tone, `(cluster line)` and zone.
type Shares = BTreeMap<(usize, usize, usize), BTreeMap<u64, Share>>;

struct Collector<'a> {
    scene: &'a Scene<'a>,
    shares: Shares,
}

impl Collector<'_> {
    /// `mass` of tone `tone` goes to line `line` of cluster `c` at analog `f`.
    fn add(&mut self, c: usize, tone: usize, line: usize, mass: f64, f: f64, var: f64) {
        let seen = self.scene.chain.see(TrueHz(f));
        let share = self
            .shares
            .entry((tone, c, line))
            .or_default()
            .entry(seen.zone)
            .or_insert(Share {
                mass: 0.0,
                sum: 0.0,
                square: 0.0,
                pivot: f,
                sense: seen.sense,
            });
        let d = f - share.pivot;
        share.mass += mass;
        share.sum += mass * d;
        share.square += mass * (d * d + var);
    }
}

/// Best estimate of a line's own frequency where its source says `f` and its tone
/// `rung`: a line that strays from its latents by `line_var` is where it is seen.
fn between(f: f64, f_var: f64, rung: f64, tone_var: f64, line_var: f64) -> (f64, f64) {
    let all = tone_var + line_var;
    let pull = line_var / all;
    (
        f + pull * (rung - f),
        (1.0 - pull).powi(2) * f_var + tone_var * pull,
    )
}

fn collect(scene: &Scene, solution: &Solution) -> Shares {
    let mut collector = Collector {
        scene,
        shares: Shares::new(),
    };
    for (c, s) in solution.solved.iter().enumerate() {
        // What a cluster claims, scaled so that all claims on a tone sum to 1.
        let claims = s.value.claims(&s.places, solution.tones.len());
        let scale: Vec<f64> = claims
            .iter()
            .enumerate()
            .map(|(i, p)| {
                let own = s.message.get(i).copied().unwrap_or(0.0) / solution.others(i, None);
                if *p > 0.0 { own / p } else { 0.0 }
            })
            .collect();
        let scaled = |tone: usize| scale.get(tone).copied().unwrap_or(0.0);
        for ((mode, value), weights) in s
            .places
            .modes
            .iter()
            .zip(&s.value.modes)
            .zip(&s.value.weights)
        {
            let count = mode.entries.len();
            for (n, (node, w)) in mode.nodes.iter().zip(weights).enumerate() {
                if *w < 1e-12 {
                    continue;
                }
                for (k, e) in mode.entries.iter().enumerate() {
                    let r = value
                        .responsibility
                        .get(n * count + k)
                        .copied()
                        .unwrap_or(0.0);
                    let mass = w * r * scaled(e.tone);
                    if mass < 1e-12 {
                        continue;
                    }
                    let (f, var) = line_frequency(s, e, node.theta, mode.axes, node.cell_var);
                    let tone_var = solution.tones.get(e.tone).map_or(0.0, |t| t.var);
                    let (f, var) = between(f, var, e.rung_hz, tone_var, e.var - tone_var);
                    collector.add(c, e.tone, e.line, mass, f, var);
                }
            }
        }
        for (e, r) in s.places.broad.iter().zip(&s.value.broad_responsibility) {
            let mass = s.value.broad_weight * r * scaled(e.tone);
            if mass < 1e-12 {
                continue;
            }
            let var = solution.tones.get(e.tone).map_or(0.0, |t| t.var);
            let best = e.best.1 / e.density;
            collector.add(c, e.tone, e.line, mass * best, e.best.0, var);
            // The other rungs, by which side of half the rate they are on.
            let half = scene.chain.file_rate_hz() / 2.0;
            let best_folded = e.best.0 > half;
            let other_folded =
                (e.folded / e.density - if best_folded { best } else { 0.0 }).max(0.0);
            let other_direct = (1.0 - best - other_folded).max(0.0);
            if other_folded > 1e-9 {
                let f = if best_folded {
                    e.best.0
                } else {
                    2.0 * half - e.best.0
                };
                collector.add(c, e.tone, e.line, mass * other_folded, f, var);
            }
            if other_direct > 1e-9 {
                let nu = solution.tones.get(e.tone).map_or(0.0, |t| t.nu);
                collector.add(c, e.tone, e.line, mass * other_direct, nu, var);
            }
        }
    }
    collector.shares
}

fn line_frequency(
    s: &Solved,
    e: &Entry,
    theta: [f64; 2],
    axes: [[f64; 2]; 2],
    cell: [f64; 2],
) -> (f64, f64) {
    let b = s.cluster.lines.get(e.line).map_or(0.0, |l| l.b);
    let along = |axis: [f64; 2]| (e.a[0] * axis[0] + e.a[1] * axis[1]).powi(2);
    (
        e.a[0] * theta[0] + e.a[1] * theta[1] + b,
        along(axes[0]) * cell[0] + along(axes[1]) * cell[1],
    )
}

/// Listed lines expected by chance within the window in which the suspect's line
/// would have been accepted: all listed lines that could show, spread evenly over
/// the band, times the width of that window.
fn coincidence(
    scene: &Scene,
    solution: &Solution,
    fits: &[Option<Vec<Normal>>],
    c: usize,
    line: usize,
    tone: usize,
) -> f64 {
    let half = scene.chain.file_rate_hz() / 2.0;
    let lines: usize = solution
        .solved
        .iter()
        .filter(|s| s.standing == Standing::Listed)
        .map(|s| s.cluster.lines.len())
        .sum();
    let (Some(s), Some(t)) = (solution.solved.get(c), solution.tones.get(tone)) else {
        return 0.0;
    };
    let Some(l) = s.cluster.lines.get(line) else {
        return 0.0;
    };
    let spread = |latents: &[Normal]| -> f64 {
        l.a.iter()
            .zip(latents)
            .map(|(a, p)| (a * p.sd).powi(2))
            .sum()
    };
    let prior: Vec<Normal> = s.prior.iter().map(Prior::normal).collect();
    let before = spread(&prior);
    let window_var = match fits.get(c) {
        Some(Some(fit)) => {
            // What is known of the line without this tone.
            let with = spread(fit);
            let own = t.var + l.var;
            let without = if with < 0.98 * own {
                with * own / (own - with)
            } else {
                before
            };
            own + without.min(before)
        }
        _ => t.var + l.var + before,
    };
    lines as f64 * (2.0 * U95 * window_var.sqrt() / half).min(1.0)
}

/// Puts the solution into words.
pub(super) fn attribute(scene: &Scene, solution: &Solution) -> Inference {
    let shares = collect(scene, solution);
    let (epsilon, used) = clock::posterior(scene, &solution.solved, &|_| false);
    let fits: Vec<Option<Vec<Normal>>> = solution.solved.iter().map(Solved::fit).collect();
    let catalogue = &scene.site.catalogue;
    let mut findings: Vec<Finding> = (0..solution.tones.len())
        .map(|i| {
            let unlisted = solution.background(i) / solution.others(i, None);
            let (direct, folded) = solution
                .unlisted
                .get(i)
                .map_or((1.0, 0.0), |u| (u.direct, u.folded));
            let folded_share = folded / (direct + folded).max(1e-300);
            Finding {
                tone: i,
                folded_probability: unlisted * folded_share,
                verdict: Verdict::Open,
                suspects: Vec::new(),
                unlisted_direct: unlisted * (1.0 - folded_share),
                unlisted_folded: unlisted * folded_share,
            }
        })
        .collect();
    let mut explained = vec![0.0; catalogue.sources.len()];
    for (&(tone, c, line), zones) in &shares {
        let Some(finding) = findings.get_mut(tone) else {
            continue;
        };
        let total: f64 = zones.values().map(|s| s.mass).sum();
        let folded: f64 = zones
            .iter()
            .filter(|(z, _)| **z > 1)
            .map(|(_, s)| s.mass)
            .sum();
        let Some(solved) = solution.solved.get(c) else {
            continue;
        };
        if solved.standing != Standing::Listed {
            // A family nobody listed. Of an anonymous one only the place as seen is
            // known: it may be folded as a whole.
            let folded = if solved.standing == Standing::Anonymous {
                let unlisted = solution.unlisted.get(tone);
                let share = unlisted.map_or(0.0, |u| u.folded / u.total());
                folded + share * (total - folded)
            } else {
                folded
            };
            finding.folded_probability += folded;
            finding.unlisted_folded += folded;
            finding.unlisted_direct += total - folded;
            continue;
        }
        finding.folded_probability += folded;
        let cluster = &solved.cluster;
        let Some(cluster_line) = cluster.lines.get(line) else {
            continue;
        };
        let Some(source_index) = cluster.members.get(cluster_line.member).map(|m| m.source) else {
            continue;
        };
        if let Some(e) = explained.get_mut(source_index) {
            *e += total;
        }
        let best = zones.iter().max_by(|a, b| a.1.mass.total_cmp(&b.1.mass));
        let (Some((&zone, share)), Some(source)) = (best, catalogue.sources.get(source_index))
        else {
            continue;
        };
        if total < LEAST {
            continue;
        }
        let mean = share.sum / share.mass;
        let var = (share.square / share.mass - mean * mean).max(0.0);
        // From the recorder's own scale to true hertz.
        let f = (share.pivot + mean) * (1.0 + epsilon.mean);
        let sd = var.sqrt().hypot(f * epsilon.sd);
        finding.suspects.push(Suspect {
            cause: Cause::Source {
                source: source_index,
                line: cluster_line.line,
                name: source.name.clone(),
                kind: source.kind,
            },
            line: source
                .lines
                .get(cluster_line.line)
                .map(|l| l.label.clone())
                .unwrap_or_default(),
            true_hz: TrueHz(f),
            true_hz_u95: U95 * sd,
            zone,
            sense: share.sense,
            probability: total,
            coincidence: coincidence(scene, solution, &fits, c, line, tone),
        });
    }
    for finding in &mut findings {
        finding
            .suspects
            .sort_by(|a, b| b.probability.total_cmp(&a.probability));
        finding.folded_probability = finding.folded_probability.clamp(0.0, 1.0);
        finding.verdict = Verdict::from_folded_probability(finding.folded_probability);
    }
    Inference {
        findings,
        fits: source_fits(scene, solution, &explained, epsilon),
        clock: ClockFit {
            ppm: 1e6 * epsilon.mean,
            ppm_u95: 1e6 * U95 * epsilon.sd,
            latents: used,
        },
    }
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
