//! Clusters in turn, each against what the others make of the tones, until they
//! agree: belief propagation between sources and tones.
//!
//! What a cluster tells a tone is its claim with the tone's own evidence divided
//! out, `m = others · P/(1 − P)`; what a tone tells a cluster is the density of
//! everything else, `others = unlisted + Σ m` of the other clusters.
//!
//! Where families compete for the same tones there is more than one way to agree.
//! Several orders are tried and weighed by their evidence (Bethe's approximation,
//! Yedidia, Freeman & Weiss 2005, from memory; mixed in [`super::mixture`]):
//!
//! ```text
//! ln Z = Σ_c ln Z_c + Σ_i ln T_i − Σ_c Σ_i ln(T_i / others_ci),
//! ```
//!
//! `T_i` the sum of everything at tone i, `Z_c` the evidence of cluster c.

use super::clusters::{Cluster, Plan};
use super::evaluate::{Belief, Value, evaluate};
use super::hidden::{self, Extended, Standing};
use super::modes::{Effort, Places, Setting};
use super::prior::{Normal, Prior};
use super::scene::{Ladders, Scene, measure};
use super::solution::{Solution, Solved, unlisted_rate};
use super::strength::Strengths;
use super::wander::MeanRatios;
use super::{byproducts, clock, clusters, gates, mixture, pairs, places, unlisted};
use std::rc::Rc;

/// Of a group of sources that exclude each other, that none is.
const NONE_OF_GROUP: f64 = 0.1;
/// Rounds in all.
const ROUNDS: usize = 8;
/// Claims that change by less have settled.
const SETTLED: f64 = 1e-4;
/// Scenes with more clusters than this are solved in one order only.
pub(super) const MANY: usize = 24;

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

/// What does not change while sweeping.
pub(super) struct Problem<'a> {
    scene: &'a Scene<'a>,
    pub extended: Extended,
    plans: Vec<Plan>,
    strengths: Strengths,
    mean_ratios: MeanRatios,
    ladders: Ladders,
    groups: Vec<String>,
}

impl Problem<'_> {
    fn cluster(&self, plan: &Plan, known: &[Normal]) -> Cluster {
        let at = |l: usize| {
            // Own latents at their prior, pinned ones where they were fitted.
            let prior = self.extended.priors.get(l).map(Prior::normal);
            if plan.latents.contains(&l) {
                prior
            } else {
                known.get(l).copied().or(prior)
            }
            .unwrap_or(Normal { mean: 1.0, sd: 1.0 })
        };
        Cluster::new(
            plan,
            &self.extended.site,
            self.scene.chain,
            &self.strengths,
            &self.groups,
            &at,
        )
    }

    fn places(&self, c: usize, solution: &Solution) -> Places {
        match solution.solved.get(c) {
            Some(solved) => self.places_of(solved, solution, &solution.all_others(Some(c))),
            None => Places::default(),
        }
    }

    /// Places of a cluster where everything else at the tones is `others`.
    pub fn places_of(&self, solved: &Solved, solution: &Solution, others: &[f64]) -> Places {
        let background: Vec<f64> = (0..solution.tones.len())
            .map(|i| solution.sourceless(i))
            .collect();
        let setting = Setting {
            tones: &solution.tones,
            ladders: &self.ladders,
            strengths: &self.strengths,
            others,
            background: &background,
            least: &solution.least,
            mean_ratios: &self.mean_ratios,
            effort: Effort::new(solution.solved.len(), solution.tones.len()),
            half_hz: self.scene.chain.file_rate_hz() / 2.0,
        };
        match solved.prior.as_slice() {
            [one] => places::find(&solved.cluster, one, &setting),
            [one, two] => pairs::find(
                &solved.cluster,
                &[one.normal(), two.normal()],
                &setting,
                self.scene.chain,
            ),
            _ => Places::default(),
        }
    }
}

pub(super) fn solve(scene: &Scene) -> Vec<(f64, Solution)> {
    let tones = measure(scene);
    let strengths = Strengths::new(threshold_db(scene));
    let extended = hidden::extend(scene, clock::prior_sd(scene));
    let catalogue = &extended.site.catalogue;
    let mut groups: Vec<String> = Vec::new();
    for g in catalogue
        .sources
        .iter()
        .filter_map(|s| s.exclusive_group.as_ref())
    {
        if !groups.contains(g) {
            groups.push(g.clone());
        }
    }
    let up_to = catalogue
        .sources
        .iter()
        .flat_map(|s| &s.lines)
        .map(|l| catalogue.nominal_hz(l).abs() + 6.0 * catalogue.prior_sd_hz(l))
        .fold(scene.chain.file_rate_hz(), f64::max);
    let problem = Problem {
        scene,
        plans: clusters::plan(&extended.site),
        ladders: Ladders::new(scene.chain, &tones, up_to),
        strengths,
        mean_ratios: MeanRatios::new(),
        groups,
        extended,
    };
    let latents: Vec<Normal> = problem.extended.priors.iter().map(Prior::normal).collect();
    let unlisted = unlisted::densities(scene, &tones);
    let level_density: Vec<f64> = tones
        .iter()
        .map(|t| problem.strengths.background(t.snr_db))
        .collect();
    let one: Vec<f64> = unlisted
        .iter()
        .zip(&level_density)
        .map(|(u, l)| (u.total() * l).max(1e-300))
        .collect();
    let byproducts = byproducts::find(scene, &tones, &level_density, threshold_db(scene));
    let mut start = Solution {
        gates: gates::Told::default(),
        byproducts: Rc::new(byproducts),
        // Before looking, nothing is explained: sources have to win each tone.
        unlisted_rate: vec![unlisted_rate(tones.len() as f64); tones.len()],
        least: Rc::new(one.iter().map(|d| unlisted_rate(0.0) * d).collect()),
        told: vec![0.0; tones.len()],
        unlisted: Rc::new(unlisted),
        level_density: Rc::new(level_density),
        tones: Rc::new(tones),
        solved: Vec::new(),
        latents,
    };
    for plan in &problem.plans {
        let standing = plan
            .sources
            .first()
            .and_then(|&s| problem.extended.standing.get(s))
            .copied()
            .unwrap_or(Standing::Listed);
        start.solved.push(Solved {
            cluster: Rc::new(problem.cluster(plan, &start.latents)),
            prior: plan
                .latents
                .iter()
                .filter_map(|&l| problem.extended.priors.get(l).copied())
                .collect(),
            standing,
            places: Rc::default(),
            value: Value::default(),
            message: vec![0.0; start.tones.len()],
            met: Vec::new(),
            first_claims: 0.0,
            share: Vec::new(),
        });
    }
    start.look_for_byproducts(true);
    first_look(&problem, &mut start);
    let orders = orders(&start);
    let mut found: Vec<(f64, Solution)> = Vec::new();
    for (parallel, order) in orders {
        let mut solution = run(&problem, start.clone(), parallel, &order, found.is_empty());
        if found.is_empty() {
            // Proposals made against rivals serve the other orders too.
            for (s, solved) in start.solved.iter_mut().zip(&solution.solved) {
                if s.standing != Standing::Anonymous {
                    s.places = solved.places.clone();
                    s.cluster = solved.cluster.clone();
                }
            }
        }
        solution.settle();
        found.push((solution.ln_evidence(), solution));
    }
    mixture::mix(&problem, found)
}

/// Every cluster but the anonymous ones alone against the background.
fn first_look(problem: &Problem, solution: &mut Solution) {
    for c in 0..solution.solved.len() {
        if solution.solved.get(c).map(|s| s.standing) == Some(Standing::Anonymous) {
            continue;
        }
        let places = problem.places(c, solution);
        let beliefs = beliefs(c, solution);
        let others = solution.all_others(Some(c));
        if let Some(s) = solution.solved.get_mut(c) {
            s.value = evaluate(&places, &s.cluster, &beliefs, &others);
            s.first_claims = s.value.claims(&places, others.len()).iter().sum();
            s.places = Rc::new(places);
        }
    }
}

/// `(all at once first?, order of clusters)` of each attempt.
fn orders(start: &Solution) -> Vec<(bool, Vec<usize>)> {
    let standing = |c: &usize| start.solved.get(*c).map(|s| s.standing);
    let strength = |c: &usize| start.solved.get(*c).map_or(0.0, |s| s.value.ln_evidence);
    let all: Vec<usize> = (0..start.solved.len()).collect();
    let mut strongest = all.clone();
    strongest.sort_by(|a, b| {
        let anonymous = |c| standing(c) == Some(Standing::Anonymous);
        anonymous(a)
            .cmp(&anonymous(b))
            .then(strength(b).total_cmp(&strength(a)))
    });
    if all.len() > MANY {
        return vec![(true, strongest)];
    }
    let mut weakest: Vec<usize> = strongest.clone();
    weakest.sort_by(|a, b| {
        let anonymous = |c| standing(c) == Some(Standing::Anonymous);
        anonymous(a)
            .cmp(&anonymous(b))
            .then(strength(a).total_cmp(&strength(b)))
    });
    let mut hidden_first = strongest.clone();
    hidden_first.sort_by_key(|c| standing(c) == Some(Standing::Listed));
    vec![
        (true, strongest.clone()),
        (false, strongest),
        (false, weakest),
        (false, hidden_first),
    ]
}

/// Sweeps in one order; `propose` asks for proposals against rivals.
fn run(
    problem: &Problem,
    mut solution: Solution,
    parallel: bool,
    order: &[usize],
    propose: bool,
) -> Solution {
    if parallel {
        let looked: Vec<Option<Vec<f64>>> = (0..solution.solved.len())
            .map(|c| message(c, &solution))
            .collect();
        for (s, m) in solution.solved.iter_mut().zip(looked) {
            if let Some(m) = m {
                s.message = m;
            }
        }
        solution.add_up();
    }
    let mut before = solution.shares();
    // Anonymous families explain what is left over, unless they come first.
    let anonymous =
        |c: &usize| solution.solved.get(*c).map(|s| s.standing) == Some(Standing::Anonymous);
    let from = if order.first().is_some_and(anonymous) {
        0
    } else {
        2
    };
    let many = solution.solved.len() > MANY;
    for round in 0..ROUNDS {
        for &c in order {
            let renew = match solution.solved.get(c).map(|s| s.standing) {
                Some(Standing::Anonymous) if round < from => continue,
                Some(Standing::Anonymous) => round < from + if many { 1 } else { 3 },
                _ => propose && round == 1 && (!many || lost(c, &solution)),
            };
            if renew {
                renew_pinned(problem, c, &mut solution);
                let places = problem.places(c, &solution);
                if let Some(s) = solution.solved.get_mut(c) {
                    s.places = Rc::new(places);
                    s.met.clear();
                }
            }
            update(c, &mut solution);
        }
        solution.add_up();
        solution.look_for_byproducts(true);
        update_unlisted(&mut solution);
        let after = solution.shares();
        let moved = before
            .iter()
            .zip(&after)
            .map(|(a, b)| (a - b).abs())
            .fold(0.0, f64::max);
        before = after;
        if round >= from + 2 && moved < SETTLED {
            break;
        }
    }
    solution
}

/// A cluster with pinned latents is expanded anew once they are fitted.
fn renew_pinned(problem: &Problem, c: usize, solution: &mut Solution) {
    let Some(plan) = problem.plans.get(c).filter(|p| !p.pinned.is_empty()) else {
        return;
    };
    let cluster = problem.cluster(plan, &solution.latents);
    if let Some(s) = solution.solved.get_mut(c) {
        s.cluster = Rc::new(cluster);
    }
}

/// Probability of presence of each member, given what excludes it.
pub(super) fn beliefs(c: usize, solution: &Solution) -> Vec<Belief> {
    let Some(own) = solution.solved.get(c) else {
        return Vec::new();
    };
    own.cluster
        .members
        .iter()
        .map(|member| {
            let (plain, none) = match own.standing {
                Standing::Supply => (hidden::SUPPLY_PRESENT, 1.0 - hidden::SUPPLY_PRESENT),
                Standing::Listed | Standing::Anonymous => (member.presence, NONE_OF_GROUP),
            };
            let Some(group) = member.exclusive else {
                return Belief { present: plain };
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
            let each = (1.0 - none) / size;
            let absent = none + each * rivals;
            Belief {
                present: (each / (each + absent)).max(1e-250),
            }
        })
        .collect()
}

/// What a cluster tells the tones, from its present value.
fn message(c: usize, solution: &Solution) -> Option<Vec<f64>> {
    let others = solution.all_others(Some(c));
    let solved = solution.solved.get(c)?;
    let claims = solved.value.claims(&solved.places, others.len());
    Some(messages(&claims, &others))
}

/// Claims with the tones' own evidence divided out.
fn messages(claims: &[f64], others: &[f64]) -> Vec<f64> {
    claims
        .iter()
        .zip(others)
        .map(|(p, o)| o * p / (1.0 - p).max(1e-12))
        .collect()
}

/// Others that moved by less than this, relatively, leave a value as it is.
const UNMOVED: f64 = 1e-3;

fn update(c: usize, solution: &mut Solution) {
    let beliefs = beliefs(c, solution);
    let others = solution.all_others(Some(c));
    let Some(solved) = solution.solved.get_mut(c) else {
        return;
    };
    let same_beliefs = beliefs.len() == solved.value.beliefs.len()
        && beliefs
            .iter()
            .zip(&solved.value.beliefs)
            .all(|(a, b)| (a.present / b.present).ln().abs() < UNMOVED);
    let unmoved = solved.met.len() == others.len()
        && solved
            .met
            .iter()
            .zip(&others)
            .all(|(a, b)| (a - b).abs() < UNMOVED * b);
    if unmoved && same_beliefs {
        return;
    }
    solved.value = evaluate(&solved.places, &solved.cluster, &beliefs, &others);
    let claims = solved.value.claims(&solved.places, others.len());
    let message = messages(&claims, &others);
    solved.met = others;
    let posterior = solved.posterior();
    for (&l, p) in solved.cluster.latents.iter().zip(posterior) {
        if let Some(slot) = solution.latents.get_mut(l) {
            *slot = p;
        }
    }
    solution.tell(c, message);
}

/// A cluster that alone would claim tones, but now has less than half of them.
fn lost(c: usize, solution: &Solution) -> bool {
    let Some(s) = solution.solved.get(c) else {
        return false;
    };
    let claims: f64 = s.value.claims(&s.places, solution.tones.len()).iter().sum();
    s.first_claims > 1.0 && claims < 0.5 * s.first_claims
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
