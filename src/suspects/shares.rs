//! What each proposal is worth: its mass by zone, summed over the places of its
//! cluster and over the solutions.

use super::hidden::Standing;
use super::modes::Entry;
use super::prior::{Normal, Prior};
use super::scene::Scene;
use super::solution::{Solution, Solved};
use crate::units::{Sense, TrueHz, U95};
use std::collections::BTreeMap;

/// Mass of one suspect in one zone.
#[derive(Debug, Clone, Copy)]
pub(super) struct Share {
    pub mass: f64,
    /// Mass-weighted sums of frequency, its square about `pivot`, and variance.
    sum: f64,
    square: f64,
    pivot: f64,
    pub sense: Sense,
}

/// A source's line proposed for a tone: indices of the tone, of the source in the
/// extended catalogue, and of the line.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub(super) struct Proposal {
    pub tone: usize,
    pub source: usize,
    pub line: usize,
}

/// What a proposal is worth, over all places and solutions.
#[derive(Debug, Clone, Default)]
pub(super) struct Worth {
    pub zones: BTreeMap<u64, Share>,
    /// Sum of mass × coincidence.
    pub coincidence: f64,
    /// Sum of mass × latent, for families of which only that is known.
    pub fundamental: f64,
    /// Nobody listed the family.
    pub anonymous: bool,
}

impl Worth {
    pub fn mass(&self) -> f64 {
        self.zones.values().map(|s| s.mass).sum()
    }

    /// Multiplies the mass of each zone.
    pub fn scale_zones(&mut self, factor: impl Fn(&Share) -> f64) {
        let before = self.mass();
        for share in self.zones.values_mut() {
            let factor = factor(share);
            share.mass *= factor;
            share.sum *= factor;
            share.square *= factor;
        }
        let scale = self.mass() / before.max(1e-300);
        self.coincidence *= scale;
        self.fundamental *= scale;
    }

    pub fn folded(&self) -> f64 {
        self.zones
            .iter()
            .filter(|(z, _)| **z > 1)
            .map(|(_, s)| s.mass)
            .sum()
    }
}

pub(super) type Shares = BTreeMap<Proposal, Worth>;

impl Share {
    /// Mean and variance of the analog frequency.
    pub fn frequency(&self) -> (f64, f64) {
        let mean = self.sum / self.mass;
        let var = (self.square / self.mass - mean * mean).max(0.0);
        (self.pivot + mean, var)
    }
}

struct Collector<'a> {
    scene: &'a Scene<'a>,
    shares: Shares,
}

/// A piece of a proposal's mass.
struct Piece {
    mass: f64,
    f: f64,
    var: f64,
    /// First latent.
    theta: f64,
}

impl Collector<'_> {
    fn add(&mut self, s: &Solved, coincidence: f64, tone: usize, line: usize, piece: Piece) {
        let Some(l) = s.cluster.lines.get(line) else {
            return;
        };
        let Some(member) = s.cluster.members.get(l.member) else {
            return;
        };
        let seen = self.scene.chain.see(TrueHz(piece.f));
        let proposal = Proposal {
            tone,
            source: member.source,
            line: l.line,
        };
        let worth = self.shares.entry(proposal).or_default();
        worth.anonymous = s.standing == Standing::Anonymous;
        worth.coincidence += piece.mass * coincidence;
        worth.fundamental += piece.mass * piece.theta;
        let share = worth.zones.entry(seen.zone).or_insert(Share {
            mass: 0.0,
            sum: 0.0,
            square: 0.0,
            pivot: piece.f,
            sense: seen.sense,
        });
        let d = piece.f - share.pivot;
        share.mass += piece.mass;
        share.sum += piece.mass * d;
        share.square += piece.mass * (d * d + piece.var);
    }
}

/// Mass of a piece that is not worth collecting.
const NEGLIGIBLE: f64 = 1e-7;

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

/// Collects the shares of every cluster of every solution.
pub(super) fn collect(scene: &Scene, solutions: &[(f64, Solution)]) -> Shares {
    let mut collector = Collector {
        scene,
        shares: Shares::new(),
    };
    for (weight, solution) in solutions {
        for s in &solution.solved {
            collector.cluster(*weight, solution, s);
        }
    }
    collector.shares
}

impl Collector<'_> {
    fn cluster(&mut self, weight: f64, solution: &Solution, s: &Solved) {
        // What a cluster claims, scaled so that all claims on a tone sum to 1.
        let claims = s.value.claims(&s.places, solution.tones.len());
        let scale: Vec<f64> = claims
            .iter()
            .enumerate()
            .map(|(i, p)| {
                let own = s.share.get(i).copied().unwrap_or(0.0);
                if *p > 0.0 { weight * own / p } else { 0.0 }
            })
            .collect();
        let half = self.scene.chain.file_rate_hz() / 2.0;
        let scaled = |tone: usize| scale.get(tone).copied().unwrap_or(0.0);
        let fit = s.fit();
        let modes = s.places.modes.iter().zip(&s.value.modes);
        for ((mode, value), weights) in modes.zip(&s.value.weights) {
            let count = mode.entries.len();
            let chance: Vec<f64> = mode
                .entries
                .iter()
                .map(|e| coincidence(self.scene, solution, s, &fit, e.line, e.tone))
                .collect();
            for (n, (node, w)) in mode.nodes.iter().zip(weights).enumerate() {
                if *w < 0.01 * NEGLIGIBLE {
                    continue;
                }
                for (k, (e, chance)) in mode.entries.iter().zip(&chance).enumerate() {
                    let r = value.responsibility.get(n * count + k);
                    let mass = w * r.copied().unwrap_or(0.0) * scaled(e.tone);
                    if mass < 0.01 * NEGLIGIBLE {
                        continue;
                    }
                    let (f, var) = line_frequency(s, e, node.theta, mode.axes, node.cell_var);
                    let tone_var = solution.tones.get(e.tone).map_or(0.0, |t| t.var);
                    let (f, var) = between(f, var, e.rung_hz, tone_var, e.var - tone_var);
                    let theta = node.theta[0];
                    let piece = Piece {
                        mass,
                        f,
                        var,
                        theta,
                    };
                    self.add(s, *chance, e.tone, e.line, piece);
                }
            }
        }
        for (e, r) in s.places.broad.iter().zip(&s.value.broad_responsibility) {
            let mass = s.value.broad_weight * r * scaled(e.tone);
            if mass < NEGLIGIBLE {
                continue;
            }
            let chance = coincidence(self.scene, solution, s, &None, e.line, e.tone);
            let (nu, var) = solution
                .tones
                .get(e.tone)
                .map_or((0.0, 0.0), |t| (t.nu, t.var));
            let a = s.cluster.lines.get(e.line).map_or(1.0, |l| l.a[0]);
            let mut add = |part: f64, f: f64| {
                let piece = Piece {
                    mass: mass * part,
                    f,
                    var,
                    theta: f / a,
                };
                self.add(s, chance, e.tone, e.line, piece);
            };
            let best = e.best.1 / e.density;
            add(best, e.best.0);
            // The other rungs, by which side of half the rate they are on.
            let best_folded = e.best.0 > half;
            let other_folded =
                (e.folded / e.density - if best_folded { best } else { 0.0 }).max(0.0);
            let other_direct = (1.0 - best - other_folded).max(0.0);
            if other_folded > 1e-9 {
                add(
                    other_folded,
                    if best_folded {
                        e.best.0
                    } else {
                        2.0 * half - e.best.0
                    },
                );
            }
            if other_direct > 1e-9 {
                add(other_direct, nu);
            }
        }
    }
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
    s: &Solved,
    fit: &Option<Vec<Normal>>,
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
    let (Some(t), Some(l)) = (solution.tones.get(tone), s.cluster.lines.get(line)) else {
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
    let window_var = match fit {
        Some(fit) => {
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
        None => t.var + l.var + before,
    };
    lines as f64 * (2.0 * U95 * window_var.sqrt() / half).min(1.0)
}
