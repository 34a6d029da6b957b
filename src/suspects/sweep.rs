//! Clusters in turn, each against what the others make of the tones, until they
//! agree: belief propagation between sources and tones.
//!
//! What a cluster tells a tone is its claim with the tone's own evidence divided
//! out, `m = others · P/(1 − P)`; what a tone tells a cluster is the density of
//! everything else, `others = unlisted + Σ m` of the other clusters.

use super::clusters::{Cluster, Normal, Plan};
use super::evaluate::{Belief, Value, evaluate};
use super::modes::{Places, Setting};
use super::scene::{Ladders, Measured, Scene, measure};
use super::strength::Strengths;
use super::unlisted::{self, Unlisted};
use super::{clock, clusters, modes, pairs};

/// Probability that a listed source is present, before looking.
const PRESENT: f64 = 0.5;
/// Of a group of sources that exclude each other, that none is.
const NONE_OF_GROUP: f64 = 0.1;
/// Rounds of proposals, and rounds in all.
const PROPOSALS: usize = 2;
const ROUNDS: usize = 5;

/// A cluster with its latents' posterior.
pub(super) struct Solved {
    pub cluster: Cluster,
    pub prior: Vec<Normal>,
    pub places: Places,
    pub value: Value,
    /// What it tells each tone.
    pub message: Vec<f64>,
}

/// Everything solved.
pub(super) struct Solution {
    pub tones: Vec<Measured>,
    pub unlisted: Vec<Unlisted>,
    /// Expected number of unlisted tones, seen from each tone.
    pub unlisted_rate: Vec<f64>,
    /// Background density of each tone's strength, per dB.
    pub level_density: Vec<f64>,
    pub solved: Vec<Solved>,
    /// Best present knowledge of each latent, on the recorder's scale.
    pub latents: Vec<Normal>,
}

/// Expected number of unlisted tones from how many there seem to be: gamma prior.
fn unlisted_rate(count: f64) -> f64 {
    (1.0 + count) / 1.3
}

impl Solution {
    /// Density of unlisted tones like tone `i`, per Hz and dB.
    pub fn background(&self, i: usize) -> f64 {
        let get = |v: &[f64]| v.get(i).copied().unwrap_or(0.0);
        let density = self.unlisted.get(i).map_or(0.0, Unlisted::total);
        (get(&self.unlisted_rate) * density * get(&self.level_density)).max(1e-300)
    }

    /// Everything but cluster `but` at tone `i`.
    pub fn others(&self, i: usize, but: Option<usize>) -> f64 {
        self.background(i)
            + self
                .solved
                .iter()
                .enumerate()
                .filter(|(c, _)| Some(*c) != but)
                .filter_map(|(_, s)| s.message.get(i))
                .sum::<f64>()
    }
}

/// Detection threshold of the SNR in one resolution cell, dB: the level that noise
/// passes in one of a hundred recordings of so many cells, at most what was seen.
fn threshold_db(scene: &Scene) -> f64 {
    let cells = (scene.duration_s * scene.chain.file_rate_hz() / 2.0).max(10.0);
    let chance = 10.0 * (cells / 0.01).ln().log10();
    scene
        .tones
        .iter()
        .map(|t| t.snr_db)
        .filter(|s| s.is_finite())
        .fold(chance, f64::min)
        .max(3.0)
}

pub(super) fn solve(scene: &Scene) -> Solution {
    let tones = measure(scene);
    let strengths = Strengths::new(threshold_db(scene));
    let plans = clusters::plan(scene.site);
    let epsilon_sd = clock::prior_sd(scene);
    let latents: Vec<Normal> = scene
        .site
        .catalogue
        .latents
        .iter()
        .map(|l| Normal {
            mean: l.nominal_hz,
            sd: l.sd_hz.hypot(l.nominal_hz * epsilon_sd).max(1e-12),
        })
        .collect();
    let mut groups: Vec<String> = Vec::new();
    for g in scene
        .site
        .catalogue
        .sources
        .iter()
        .filter_map(|s| s.exclusive_group.as_ref())
    {
        if !groups.contains(g) {
            groups.push(g.clone());
        }
    }
    let up_to = scene
        .site
        .catalogue
        .sources
        .iter()
        .flat_map(|s| &s.lines)
        .map(|l| {
            scene.site.catalogue.nominal_hz(l).abs() + 6.0 * scene.site.catalogue.prior_sd_hz(l)
        })
        .fold(scene.chain.file_rate_hz(), f64::max);
    let ladders = Ladders::new(scene.chain, &tones, up_to);
    let mut solution = Solution {
        unlisted: unlisted::densities(scene, &tones),
        unlisted_rate: vec![unlisted_rate(1.0); tones.len()],
        level_density: tones
            .iter()
            .map(|t| strengths.background(t.snr_db))
            .collect(),
        tones,
        solved: Vec::new(),
        latents: latents.clone(),
    };
    for round in 0..ROUNDS {
        for (c, plan) in plans.iter().enumerate() {
            if round < PROPOSALS {
                propose(
                    scene,
                    &strengths,
                    &ladders,
                    &groups,
                    plan,
                    c,
                    &latents,
                    &mut solution,
                );
            }
            update(c, &mut solution);
        }
        update_unlisted(&mut solution);
    }
    solution
}

#[allow(clippy::too_many_arguments)] // the pieces of one call, no object of their own
fn propose(
    scene: &Scene,
    strengths: &Strengths,
    ladders: &Ladders,
    groups: &[String],
    plan: &Plan,
    c: usize,
    latents: &[Normal],
    solution: &mut Solution,
) {
    let known = &solution.latents;
    let at = |l: usize| {
        // Own latents at their prior, pinned ones where they were fitted.
        let from = if plan.latents.contains(&l) {
            latents
        } else {
            known
        };
        from.get(l)
            .copied()
            .unwrap_or(Normal { mean: 1.0, sd: 1.0 })
    };
    let cluster = Cluster::new(plan, scene.site, scene.chain, strengths, groups, &at);
    let prior: Vec<Normal> = cluster.latents.iter().map(|&l| at(l)).collect();
    let others: Vec<f64> = (0..solution.tones.len())
        .map(|i| solution.others(i, Some(c)))
        .collect();
    let setting = Setting {
        tones: &solution.tones,
        ladders,
        strengths,
        others: &others,
        half_hz: scene.chain.file_rate_hz() / 2.0,
    };
    let places = match prior.as_slice() {
        [one] => modes::find(&cluster, one, &setting),
        [one, two] => pairs::find(&cluster, &[*one, *two], &setting, scene.chain),
        _ => Places::default(),
    };
    let tones = solution.tones.len();
    let solved = Solved {
        cluster,
        prior,
        places,
        value: Value::default(),
        message: vec![0.0; tones],
    };
    match solution.solved.get_mut(c) {
        Some(slot) => {
            let message = std::mem::take(&mut slot.message);
            *slot = Solved { message, ..solved };
        }
        None => solution.solved.push(solved),
    }
}

/// Probability of presence of each member, given what excludes it.
fn beliefs(c: usize, solution: &Solution) -> Vec<Belief> {
    let Some(own) = solution.solved.get(c) else {
        return Vec::new();
    };
    own.cluster
        .members
        .iter()
        .map(|member| {
            let Some(group) = member.exclusive else {
                return Belief { present: PRESENT };
            };
            // Bayes factors of the group's other sources.
            let mut size = 1.0;
            let mut rivals = 0.0;
            for s in &solution.solved {
                let value = s.value.absent.iter().zip(&s.value.beliefs);
                for (m, (absent, belief)) in s.cluster.members.iter().zip(value) {
                    if m.exclusive == Some(group) && m.source != member.source {
                        size += 1.0;
                        rivals += (1.0 - absent) / absent * (1.0 - belief.present) / belief.present;
                    }
                }
            }
            let each = (1.0 - NONE_OF_GROUP) / size;
            let absent = NONE_OF_GROUP + each * rivals;
            Belief {
                present: (each / (each + absent)).max(1e-250),
            }
        })
        .collect()
}

fn update(c: usize, solution: &mut Solution) {
    let beliefs = beliefs(c, solution);
    let count = solution.tones.len();
    let others: Vec<f64> = (0..count).map(|i| solution.others(i, Some(c))).collect();
    let Some(solved) = solution.solved.get_mut(c) else {
        return;
    };
    let value = evaluate(&solved.places, &solved.cluster, &beliefs, &others);
    let claims = value.claims(&solved.places, count);
    solved.message = claims
        .iter()
        .zip(&others)
        .map(|(p, o)| o * p / (1.0 - p).max(1e-12))
        .collect();
    solved.value = value;
    let posterior = solved.posterior();
    for (&l, p) in solved.cluster.latents.iter().zip(posterior) {
        if let Some(slot) = solution.latents.get_mut(l) {
            *slot = p;
        }
    }
}

fn update_unlisted(solution: &mut Solution) {
    let count = solution.tones.len();
    let shares: Vec<f64> = (0..count)
        .map(|i| solution.background(i) / solution.others(i, None))
        .collect();
    let total: f64 = shares.iter().sum();
    // A tone may not vouch for itself here either.
    solution.unlisted_rate = shares.iter().map(|s| unlisted_rate(total - s)).collect();
}

impl Solved {
    /// Mean and standard deviation of each latent: the best mode's where one
    /// stands out, the prior's otherwise.
    pub fn posterior(&self) -> Vec<Normal> {
        self.fit().unwrap_or_else(|| self.prior.clone())
    }

    /// [`posterior`](Solved::posterior) where a mode stands out.
    pub fn fit(&self) -> Option<Vec<Normal>> {
        let masses: Vec<f64> = self.value.weights.iter().map(|w| w.iter().sum()).collect();
        let best = masses
            .iter()
            .enumerate()
            .max_by(|a, b| a.1.total_cmp(b.1))
            .filter(|(_, m)| **m > 0.5);
        let (b, mass) = best?;
        let (mode, weights) = (self.places.modes.get(b)?, self.value.weights.get(b)?);
        let fitted = (0..self.prior.len())
            .map(|k| {
                let at = |n: usize| {
                    mode.nodes
                        .get(n)
                        .and_then(|n| n.theta.get(k).copied())
                        .unwrap_or(0.0)
                };
                let mean: f64 = weights
                    .iter()
                    .enumerate()
                    .map(|(n, w)| w * at(n))
                    .sum::<f64>()
                    / mass;
                let var: f64 = weights
                    .iter()
                    .enumerate()
                    .map(|(n, w)| {
                        let cell = mode.nodes.get(n).map_or(0.0, |node| {
                            let along = |axis: [f64; 2]| axis.get(k).map_or(0.0, |a| a * a);
                            along(mode.axes[0]) * node.cell_var[0]
                                + along(mode.axes[1]) * node.cell_var[1]
                        });
                        w * ((at(n) - mean).powi(2) + cell)
                    })
                    .sum::<f64>()
                    / mass;
                Normal {
                    mean,
                    sd: var.sqrt(),
                }
            })
            .collect();
        Some(fitted)
    }
}
