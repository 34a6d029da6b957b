//! The likelihood of a cluster's latents and who explains which tone there.
//!
//! At given latents and strengths each tone is either a line's or something
//! else's, and each line shows or hides:
//!
//! ```text
//! L(θ, class) = Π_j (1 − d_j) · Π_i (1 + Σ_j x_ij),
//! x_ij = d_j/(1 − d_j) · N(ν_i; g(a_j·θ), σ_ij²) / others_i
//! ```
//!
//! and tone `i` is line `j` with probability `x_ij / (1 + Σ_j x_ij)` there.
//! Averaged over the whole posterior, the broad node included, this *is* the
//! leave-one-out claim of method: `P = ∫ q r = X/(1 + X)` with
//! `X = ∫ q^(−i) x_i` and `q^(−i) ∝ q/(1 + x_i)`. What a tone says about where its
//! source is, it cannot also say about whether it is its own.

use super::clusters::Cluster;
use super::modes::{BroadEntry, Entry, Mode, Places, mean};
use super::strength::{CLASSES, PerClass};

/// What is believed of a member before looking.
#[derive(Debug, Clone, Copy)]
pub(super) struct Belief {
    /// Probability that it is present at all.
    pub present: f64,
}

/// A mode's nodes evaluated.
#[derive(Debug, Clone, Default)]
pub(super) struct ModeValue {
    /// Log of prior mass × likelihood, per node.
    pub ln_weight: Vec<f64>,
    /// `responsibility[node·entries + entry]`.
    pub responsibility: Vec<f64>,
    /// `absent[node·members + member]`: chance that it is absent, there.
    pub absent: Vec<f64>,
}

/// A cluster's places evaluated: normalised.
#[derive(Debug, Clone, Default)]
pub(super) struct Value {
    pub modes: Vec<ModeValue>,
    /// Normalised weight of each node, per mode.
    pub weights: Vec<Vec<f64>>,
    pub broad_weight: f64,
    pub broad_responsibility: Vec<f64>,
    pub broad_absent: Vec<f64>,
    /// Probability that each member is absent: its small values matter.
    pub absent: Vec<f64>,
    /// The belief that went in.
    pub beliefs: Vec<Belief>,
    /// Log of the cluster's evidence against every one of its sources hidden.
    pub ln_evidence: f64,
}

/// Share of measurements that are off by more than their uncertainty says, and
/// by how much.
const OFF_SHARE: f64 = 0.05;
const OFF_FACTOR: f64 = 3.0;

/// Density of a tone `d` from where it is expected: normal with a heavier tail.
fn kernel(d: f64, var: f64) -> f64 {
    let z2 = d * d / var;
    if z2 > 300.0 {
        return 0.0;
    }
    let norm = (2.0 * std::f64::consts::PI * var).sqrt().recip();
    let near = if z2 < 40.0 {
        (1.0 - OFF_SHARE) * (-0.5 * z2).exp()
    } else {
        0.0
    };
    norm * (near + OFF_SHARE / OFF_FACTOR * (-0.5 * z2 / (OFF_FACTOR * OFF_FACTOR)).exp())
}

/// Prior weights of a member's classes times the chance of every line hidden.
struct MemberBase {
    /// Relative to `exp(ln_scale)`.
    classes: PerClass,
    absent: f64,
    ln_scale: f64,
    /// Log of the member's factor where nothing meets it, and absence there.
    ln_nothing: f64,
    absent_by_itself: f64,
}

fn base(cluster: &Cluster, beliefs: &[Belief]) -> Vec<MemberBase> {
    cluster
        .members
        .iter()
        .zip(beliefs)
        .map(|(member, belief)| {
            let ln_prior = belief.present.max(1e-300).ln();
            let ln_classes: PerClass = std::array::from_fn(|c| {
                let get = |v: &PerClass| v.get(c).copied().unwrap_or(0.0);
                ln_prior + get(&member.class_prior).ln() + get(&member.ln_hidden)
            });
            let ln_absent = (1.0 - belief.present).max(1e-300).ln();
            // Absence may be out of the range of numbers against a family of
            // thousands of lines, never the classes among themselves.
            let most = ln_classes.iter().copied().fold(f64::NEG_INFINITY, f64::max);
            let ln_scale = most.max(ln_absent - 600.0);
            let mut base = MemberBase {
                classes: ln_classes.map(|l| (l - ln_scale).exp()),
                absent: (ln_absent - ln_scale).exp(),
                ln_scale,
                ln_nothing: 0.0,
                absent_by_itself: 0.0,
            };
            let (ln_nothing, _, absent) = Factor::new().finish(&base);
            base.ln_nothing = ln_nothing;
            base.absent_by_itself = absent;
            base
        })
        .collect()
}

/// One member at one place: multiplies in tones, then yields its factor.
struct Factor {
    /// Per class, in units of `SCALE` to the power `scaled`.
    product: PerClass,
    scaled: i32,
}

const SCALE: f64 = 1e100;

impl Factor {
    fn new() -> Factor {
        Factor {
            product: [1.0; CLASSES],
            scaled: 0,
        }
    }

    fn meet(&mut self, x: &PerClass) {
        let mut most = 0.0f64;
        for (p, x) in self.product.iter_mut().zip(x) {
            *p *= 1.0 + x;
            most = most.max(*p);
        }
        while most > SCALE {
            for p in &mut self.product {
                *p /= SCALE;
            }
            most /= SCALE;
            self.scaled += 1;
        }
    }

    /// `(ln factor, weight of each class, of absence)`, the weights summing to 1.
    fn finish(&self, base: &MemberBase) -> (f64, PerClass, f64) {
        let mut weights = base.classes;
        let mut total = 0.0;
        for (w, p) in weights.iter_mut().zip(&self.product) {
            *w *= p;
            total += *w;
        }
        let absent = base.absent * SCALE.powi(-self.scaled);
        total += absent;
        let ln = total.ln() + base.ln_scale + f64::from(self.scaled) * SCALE.ln();
        (ln, weights.map(|w| w / total), absent / total)
    }
}

/// A mode whose middle is this many nats below the best is not looked at further.
const HOPELESS: f64 = 30.0;

/// `best` is the greatest log weight of a node met so far.
fn evaluate_mode(
    mode: &Mode,
    cluster: &Cluster,
    bases: &[MemberBase],
    others: &[f64],
    best: &mut f64,
) -> ModeValue {
    let entries = &mode.entries;
    let count = entries.len();
    let members = cluster.members.len();
    let mut value = ModeValue {
        ln_weight: Vec::new(),
        responsibility: vec![0.0; mode.nodes.len() * count],
        absent: vec![0.0; mode.nodes.len() * members],
    };
    let mean_odds: Vec<f64> = entries.iter().map(|e| mean(&e.odds)).collect();
    let of = |tone: usize| others.get(tone).copied().unwrap_or(1.0);
    // Runs of entries of one member and tone.
    let runs = runs(entries, |e| (e.member, e.tone));
    let along = |e: &Entry, axis: [f64; 2]| (e.a[0] * axis[0] + e.a[1] * axis[1]).powi(2);
    let stretch: Vec<[f64; 2]> = entries
        .iter()
        .map(|e| [along(e, mode.axes[0]), along(e, mode.axes[1])])
        .collect();
    let mut density = vec![0.0; count];
    let mut met: Vec<PerClass> = vec![[0.0; CLASSES]; runs.len()];
    value.ln_weight = vec![f64::NEG_INFINITY; mode.nodes.len()];
    let middle = mode.nodes.len() / 2;
    let others_of_it = (0..mode.nodes.len()).filter(|n| *n != middle);
    for n in std::iter::once(middle).chain(others_of_it) {
        let Some(node) = mode.nodes.get(n) else {
            break;
        };
        for ((d, e), s) in density.iter_mut().zip(entries).zip(&stretch) {
            let off = e.a[0] * node.theta[0] + e.a[1] * node.theta[1] - e.target;
            let var = e.var + s[0] * node.cell_var[0] + s[1] * node.cell_var[1];
            *d = kernel(off, var) / of(e.tone);
        }
        share_between_rivals(&mode.rivals, &mean_odds, &mut density);
        let mut ln_weight = node.ln_mass;
        let mut first = 0;
        for (m, base) in bases.iter().enumerate() {
            let mut factor = Factor::new();
            let start = first;
            while let Some(run) = runs.get(first) {
                if entries.get(run.start).map(|e| e.member) != Some(m) {
                    break;
                }
                let x = meet(entries, &density, run.clone());
                if let Some(slot) = met.get_mut(first) {
                    *slot = x;
                }
                factor.meet(&x);
                first += 1;
            }
            let slot = value.absent.get_mut(n * members + m);
            if start == first {
                // Nothing meets it here.
                if let Some(p) = slot {
                    *p = base.absent_by_itself;
                }
                continue;
            }
            let (ln_factor, classes, absent) = factor.finish(base);
            ln_weight += ln_factor - base.ln_nothing;
            if let Some(p) = slot {
                *p = absent;
            }
            for r in start..first {
                let (Some(run), Some(x)) = (runs.get(r), met.get(r)) else {
                    continue;
                };
                for i in run.clone() {
                    let (Some(e), Some(d)) = (entries.get(i), density.get(i)) else {
                        continue;
                    };
                    if *d == 0.0 {
                        continue;
                    }
                    let r: f64 = classes
                        .iter()
                        .zip(&e.odds)
                        .zip(x)
                        .map(|((w, o), x)| w * o / (1.0 + x))
                        .sum();
                    if let Some(slot) = value.responsibility.get_mut(n * count + i) {
                        *slot = r * d;
                    }
                }
            }
        }
        if members > 1
            && let Some(all) = value.responsibility.get_mut(n * count..(n + 1) * count)
        {
            share_between_members(entries, all);
        }
        if let Some(slot) = value.ln_weight.get_mut(n) {
            *slot = ln_weight;
        }
        *best = best.max(ln_weight);
        if n == middle && ln_weight < *best - HOPELESS {
            break;
        }
    }
    value
}

fn meet(entries: &[Entry], density: &[f64], run: std::ops::Range<usize>) -> PerClass {
    let mut x = [0.0; CLASSES];
    for i in run {
        if let (Some(e), Some(&d)) = (entries.get(i), density.get(i))
            && d > 0.0
        {
            for (x, o) in x.iter_mut().zip(&e.odds) {
                *x += o * d;
            }
        }
    }
    x
}

/// Maximal ranges of equal key.
fn runs<T, K: PartialEq>(items: &[T], key: impl Fn(&T) -> K) -> Vec<std::ops::Range<usize>> {
    let mut runs: Vec<std::ops::Range<usize>> = Vec::new();
    let mut last: Option<K> = None;
    for (i, item) in items.iter().enumerate() {
        let k = key(item);
        if last.as_ref() == Some(&k) {
            if let Some(run) = runs.last_mut() {
                run.end = i + 1;
            }
        } else {
            runs.push(i..i + 1);
            last = Some(k);
        }
    }
    runs
}

/// A line makes one tone: tones that compete for it share it.
fn share_between_rivals(rivals: &[Vec<usize>], mean_odds: &[f64], density: &mut [f64]) {
    for group in rivals {
        let x = |i: &usize, density: &[f64]| {
            mean_odds.get(*i).copied().unwrap_or(0.0) * density.get(*i).copied().unwrap_or(0.0)
        };
        let all: Vec<f64> = group.iter().map(|i| x(i, density)).collect();
        let total: f64 = all.iter().sum();
        if total < 1e-3 {
            continue;
        }
        for (i, own) in group.iter().zip(&all) {
            if let Some(d) = density.get_mut(*i) {
                *d /= 1.0 + total - own;
            }
        }
    }
}

/// Members were evaluated each on its own; where they claim the same tone, they
/// share it.
fn share_between_members(entries: &[Entry], responsibility: &mut [f64]) {
    let mut odds: std::collections::BTreeMap<(usize, usize), f64> = Default::default();
    for (e, r) in entries.iter().zip(responsibility.iter()) {
        *odds.entry((e.tone, e.member)).or_default() += r;
    }
    let mut total: std::collections::BTreeMap<usize, f64> = Default::default();
    for (&(tone, _), r) in &odds {
        *total.entry(tone).or_default() += r / (1.0 - r).max(1e-12);
    }
    for (e, r) in entries.iter().zip(responsibility.iter_mut()) {
        let own = odds.get(&(e.tone, e.member)).copied().unwrap_or(0.0);
        let all = total.get(&e.tone).copied().unwrap_or(0.0);
        // own/(1−own) of all/(1+all), split as the member split it.
        *r *= 1.0 / ((1.0 - own).max(1e-12) * (1.0 + all));
    }
}

fn evaluate_broad(places: &Places, bases: &[MemberBase], others: &[f64], value: &mut Value) -> f64 {
    let entries: &[BroadEntry] = &places.broad;
    value.broad_responsibility = vec![0.0; entries.len()];
    value.broad_absent = bases.iter().map(|b| b.absent_by_itself).collect();
    if places.broad_mass < 1e-12 {
        return f64::NEG_INFINITY;
    }
    let mut ln_weight = places.broad_mass.ln();
    let scaled =
        |e: &BroadEntry| e.density / places.broad_mass / others.get(e.tone).copied().unwrap_or(1.0);
    for member in runs(entries, |e| e.member) {
        let Some(m) = entries.get(member.start).map(|e| e.member) else {
            continue;
        };
        let Some(base) = bases.get(m) else { continue };
        let own = entries.get(member.clone()).unwrap_or_default();
        // Away from every place that is kept, the latents meet as many tones at
        // once as there are latents: more would have been a place. So the factor is
        // 1 + e₁ (+ e₂), the elementary symmetric sums of the tones' x.
        let mut sum = [0.0; CLASSES];
        let mut squares = [0.0; CLASSES];
        let mut met = Vec::new();
        for run in runs(own, |e| e.tone) {
            let mut x = [0.0; CLASSES];
            for e in own.get(run.clone()).unwrap_or_default() {
                let d = scaled(e);
                for (x, o) in x.iter_mut().zip(&e.odds) {
                    *x += o * d;
                }
            }
            for ((s, q), x) in sum.iter_mut().zip(&mut squares).zip(&x) {
                *s += x;
                *q += x * x;
            }
            met.push((run, x));
        }
        let two = places.latents > 1;
        let mut factor = Factor::new();
        for ((p, s), q) in factor.product.iter_mut().zip(&sum).zip(&squares) {
            *p = 1.0 + s;
            if two {
                *p += 0.5 * (s * s - q).max(0.0);
            }
        }
        let totals = factor.product;
        let (ln_factor, classes, absent) = factor.finish(base);
        ln_weight += ln_factor - base.ln_nothing;
        if let Some(p) = value.broad_absent.get_mut(m) {
            *p = absent;
        }
        for (run, x) in met {
            // Weight with which one unit of odds at this tone counts, per class.
            let mut unit = classes;
            for (((u, t), s), x) in unit.iter_mut().zip(&totals).zip(&sum).zip(&x) {
                *u *= if two { 1.0 + (s - x).max(0.0) } else { 1.0 } / t;
            }
            for i in run {
                let Some(e) = own.get(i) else { continue };
                let r: f64 = unit.iter().zip(&e.odds).map(|(u, o)| u * o).sum();
                if let Some(slot) = value.broad_responsibility.get_mut(member.start + i) {
                    *slot = r * scaled(e);
                }
            }
        }
    }
    ln_weight
}

/// Evaluates every place of a cluster against `others`, the density of everything
/// else at each tone.
pub(super) fn evaluate(
    places: &Places,
    cluster: &Cluster,
    beliefs: &[Belief],
    others: &[f64],
) -> Value {
    let bases = base(cluster, beliefs);
    let mut value = Value::default();
    let ln_broad = evaluate_broad(places, &bases, others, &mut value);
    let mut best = ln_broad;
    for mode in &places.modes {
        value
            .modes
            .push(evaluate_mode(mode, cluster, &bases, others, &mut best));
    }
    let most = value
        .modes
        .iter()
        .flat_map(|m| m.ln_weight.iter().copied())
        .fold(ln_broad, f64::max);
    let total: f64 = (ln_broad - most).exp()
        + value
            .modes
            .iter()
            .flat_map(|m| &m.ln_weight)
            .map(|l| (l - most).exp())
            .sum::<f64>();
    value.ln_evidence = most + total.ln();
    value.broad_weight = (ln_broad - most).exp() / total;
    value.weights = value
        .modes
        .iter()
        .map(|m| {
            m.ln_weight
                .iter()
                .map(|l| (l - most).exp() / total)
                .collect()
        })
        .collect();
    let members = cluster.members.len();
    value.beliefs = beliefs.to_vec();
    value.absent = (0..members)
        .map(|m| {
            let mut p = value.broad_weight * value.broad_absent.get(m).copied().unwrap_or(0.0);
            for (mode, weights) in value.modes.iter().zip(&value.weights) {
                for (n, w) in weights.iter().enumerate() {
                    p += w * mode.absent.get(n * members + m).copied().unwrap_or(0.0);
                }
            }
            p.clamp(1e-290, 1.0)
        })
        .collect();
    value
}

impl Value {
    /// Total responsibility of the cluster for each tone.
    pub fn claims(&self, places: &Places, tones: usize) -> Vec<f64> {
        let mut claims = vec![0.0; tones];
        self.each(places, &mut |tone, share| {
            if let Some(c) = claims.get_mut(tone) {
                *c += share;
            }
        });
        claims
    }

    fn each(&self, places: &Places, claim: &mut dyn FnMut(usize, f64)) {
        for ((mode, value), weights) in places.modes.iter().zip(&self.modes).zip(&self.weights) {
            let count = mode.entries.len();
            for (n, w) in weights.iter().enumerate() {
                if *w < 1e-15 {
                    continue;
                }
                let rs = value.responsibility.iter().skip(n * count);
                for (e, r) in mode.entries.iter().zip(rs) {
                    claim(e.tone, w * r);
                }
            }
        }
        for (e, r) in places.broad.iter().zip(&self.broad_responsibility) {
            claim(e.tone, self.broad_weight * r);
        }
    }
}
