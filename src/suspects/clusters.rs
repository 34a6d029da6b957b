//! Sources that share latents, solved together: one latent, or two.
//!
//! A source of two latents of which one is pinned elsewhere (a motor on a mains
//! that has its own lines) is solved in the other alone, the pinned one taken
//! from where it was fitted. A source's clock-scaled latents are worked with on
//! the recorder's own scale, `θ/(1+ε)`: only that can be seen.

use super::prior::Normal;
use super::strength::{Faintness, PerClass, Strengths};
use crate::fold::Chain;
use crate::frontend::Gain;
use crate::sources::{LatentId, Line, Site, Steadiness};
use crate::units::TrueHz;

/// A line as a function of its cluster's latents: `a·θ + b`.
#[derive(Debug, Clone)]
pub(super) struct ClusterLine {
    /// Which of the cluster's sources.
    pub member: usize,
    /// Index into the source's lines.
    pub line: usize,
    pub a: [f64; 2],
    pub b: f64,
    /// Variance beyond the cluster's latents, Hz².
    pub var: f64,
    pub faintness: Faintness,
    /// What the front end does to it.
    pub gain: Gain,
}

/// One of a cluster's sources.
#[derive(Debug, Clone)]
pub(super) struct Member {
    pub source: usize,
    /// Per class: log of the chance that none of its lines shows.
    pub ln_hidden: PerClass,
    /// Prior probability of each class.
    pub class_prior: PerClass,
    pub exclusive: Option<usize>,
    /// Probability that it is there, before looking.
    pub presence: f64,
}

/// Sources solved together.
#[derive(Debug, Clone)]
pub(super) struct Cluster {
    /// Catalogue indices: one or two.
    pub latents: Vec<usize>,
    pub members: Vec<Member>,
    pub lines: Vec<ClusterLine>,
    /// Whether each latent is locked to a crystal.
    pub quartz: [bool; 2],
}

/// The plan of clusters: which latents, which sources, what is pinned.
#[derive(Debug, Clone, Default)]
pub(super) struct Plan {
    pub latents: Vec<usize>,
    pub sources: Vec<usize>,
    pub pinned: Vec<usize>,
}

fn latents_of(site: &Site, source: usize) -> Vec<usize> {
    let mut latents: Vec<usize> = Vec::new();
    let Some(source) = site.catalogue.sources.get(source) else {
        return latents;
    };
    for line in &source.lines {
        for &(LatentId(l), _) in &line.terms {
            if l < site.catalogue.latents.len() && !latents.contains(&l) {
                latents.push(l);
            }
        }
    }
    latents.sort_unstable();
    latents
}

/// Groups the sources; in an order in which pinned latents are fitted first.
pub(super) fn plan(site: &Site) -> Vec<Plan> {
    let count = site.catalogue.sources.len();
    let sets: Vec<Vec<usize>> = (0..count).map(|s| latents_of(site, s)).collect();
    let mut plans: Vec<Plan> = Vec::new();
    // home[l]: the plan in which latent l is fitted.
    let mut home: Vec<Option<usize>> = vec![None; site.catalogue.latents.len()];
    let mut settle = |source: usize, set: &[usize], plans: &mut Vec<Plan>| {
        let known = |l: &usize| home.get(*l).copied().flatten();
        let homes: Vec<Option<usize>> = set.iter().map(known).collect();
        // All its latents are fitted in one place: join it.
        if let Some(Some(first)) = homes.first()
            && homes.iter().all(|h| *h == Some(*first))
        {
            if let Some(plan) = plans.get_mut(*first) {
                plan.sources.push(source);
            }
            return;
        }
        let mut free: Vec<usize> = set.iter().copied().filter(|l| known(l).is_none()).collect();
        let mut pinned: Vec<usize> = set.iter().copied().filter(|l| known(l).is_some()).collect();
        if free.is_empty() {
            // Latents of two other places: take the last as its place.
            if let Some(last) = pinned.pop()
                && let Some(plan) = known(&last).and_then(|h| plans.get_mut(h))
            {
                plan.sources.push(source);
                for p in pinned {
                    if !plan.pinned.contains(&p) && !plan.latents.contains(&p) {
                        plan.pinned.push(p);
                    }
                }
            }
            return;
        }
        // More than two free latents: the rest stay at their priors.
        while free.len() > 2 {
            pinned.extend(free.pop());
        }
        for &l in &free {
            if let Some(h) = home.get_mut(l) {
                *h = Some(plans.len());
            }
        }
        plans.push(Plan {
            latents: free,
            sources: vec![source],
            pinned,
        });
    };
    // Sources of one latent first, so that the latent's home is where it is
    // clearest; then the others in the order listed.
    for several in [false, true] {
        for (source, set) in sets.iter().enumerate() {
            if !set.is_empty() && (set.len() > 1) == several {
                settle(source, set, &mut plans);
            }
        }
    }
    plans
}

fn frequency(line: &Line, at: &dyn Fn(usize) -> Normal) -> f64 {
    line.terms
        .iter()
        .map(|&(LatentId(l), a)| a * at(l).mean)
        .sum()
}

impl Cluster {
    /// Expands a plan. `at(l)` is the best present knowledge of latent `l`.
    pub fn new(
        plan: &Plan,
        site: &Site,
        chain: &Chain,
        strengths: &Strengths,
        groups: &[String],
        at: &dyn Fn(usize) -> Normal,
    ) -> Cluster {
        let catalogue = &site.catalogue;
        let mut members = Vec::new();
        let mut lines = Vec::new();
        let top = site
            .recorder
            .front_end
            .bandwidth_hz
            .unwrap_or(f64::INFINITY);
        let rate = chain.converter_rate_hz();
        let front = site.recorder.front_end.prepared();
        for &s in &plan.sources {
            let Some(source) = catalogue.sources.get(s) else {
                continue;
            };
            let mut ln_hidden = [0.0; super::strength::CLASSES];
            let gains: Vec<Gain> = source
                .lines
                .iter()
                .map(|l| front.gain(TrueHz(frequency(l, at).abs()), rate))
                .collect();
            let best = source
                .lines
                .iter()
                .zip(&gains)
                .max_by(|a, b| {
                    let level = |(l, g): (&Line, &Gain)| Faintness::weight_db(l.weight) + g.mean_db;
                    level(*a).total_cmp(&level(*b))
                })
                .map_or(
                    Gain {
                        mean_db: 0.0,
                        sd_db: 0.0,
                    },
                    |(_, g)| *g,
                );
            for ((j, line), gain) in source.lines.iter().enumerate().zip(&gains) {
                let mut a = [0.0; 2];
                let mut b = 0.0;
                let mut var = 0.0;
                let mut nominal_hz = 0.0;
                for &(LatentId(l), multiplier) in &line.terms {
                    let normal = at(l);
                    nominal_hz += multiplier * normal.mean;
                    match plan.latents.iter().position(|&p| p == l) {
                        Some(slot) => {
                            if let Some(a) = a.get_mut(slot) {
                                *a += multiplier;
                            }
                        }
                        None => {
                            b += multiplier * normal.mean;
                            var += (multiplier * normal.sd).powi(2);
                        }
                    }
                }
                if nominal_hz < 0.0 {
                    a = a.map(|a| -a);
                    b = -b;
                    nominal_hz = -nominal_hz;
                }
                var += (line.extra_rel_sd * nominal_hz).powi(2);
                if !nominal_hz.is_finite() || nominal_hz > top || nominal_hz == 0.0 {
                    continue;
                }
                let faintness = strengths.prepare(Faintness::new(line.weight, *gain, best));
                let shown = strengths.shown(&faintness);
                for (h, s) in ln_hidden.iter_mut().zip(shown) {
                    *h += (-s).ln_1p();
                }
                lines.push(ClusterLine {
                    member: members.len(),
                    line: j,
                    a,
                    b,
                    var,
                    faintness,
                    gain: *gain,
                });
            }
            members.push(Member {
                source: s,
                ln_hidden,
                class_prior: Strengths::class_prior(best),
                exclusive: source
                    .exclusive_group
                    .as_ref()
                    .and_then(|g| groups.iter().position(|known| known == g)),
                presence: source.presence,
            });
        }
        let quartz = |slot: usize| {
            plan.latents
                .get(slot)
                .and_then(|&l| catalogue.latents.get(l))
                .is_some_and(|l| l.steadiness == Steadiness::Quartz)
        };
        Cluster {
            latents: plan.latents.clone(),
            members,
            lines,
            quartz: [quartz(0), quartz(1)],
        }
    }
}
