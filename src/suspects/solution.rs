//! A solution: every cluster's posterior and what it tells each tone.

use super::byproducts;
use super::clusters::Cluster;
use super::evaluate::Value;
use super::gates;
use super::hidden::Standing;
use super::modes::Places;
use super::prior::{Normal, Prior};
use super::scene::Measured;
use super::unlisted::Unlisted;
use std::rc::Rc;

/// A cluster with its latents' posterior.
#[derive(Debug, Clone)]
pub(super) struct Solved {
    pub cluster: Rc<Cluster>,
    pub prior: Vec<Prior>,
    pub standing: Standing,
    pub places: Rc<Places>,
    pub value: Value,
    /// Tones it would claim if it were alone.
    pub first_claims: f64,
    /// Everything else at each tone when it was last evaluated.
    pub met: Vec<f64>,
    /// What it tells each tone.
    pub message: Vec<f64>,
    /// Its share in each tone, once everything is settled.
    pub share: Vec<f64>,
}

/// Everything solved.
#[derive(Debug, Clone)]
pub(super) struct Solution {
    pub tones: Rc<Vec<Measured>>,
    pub unlisted: Rc<Vec<Unlisted>>,
    /// Expected number of unlisted tones, seen from each tone.
    pub unlisted_rate: Vec<f64>,
    /// Background density of each tone's strength, per dB.
    pub level_density: Rc<Vec<f64>>,
    /// The least the density of unlisted tones can become at each tone.
    pub least: Rc<Vec<f64>>,
    pub byproducts: Rc<byproducts::Found>,
    /// What their gates tell the tones.
    pub gates: gates::Told,
    pub solved: Vec<Solved>,
    /// Sum of all messages at each tone.
    pub told: Vec<f64>,
    /// Best present knowledge of each latent, on the recorder's scale.
    pub latents: Vec<Normal>,
}

/// Expected number of unlisted tones from how many there seem to be: gamma prior.
pub(super) fn unlisted_rate(count: f64) -> f64 {
    (1.0 + count) / 1.3
}

/// Gates compete among themselves: times each looks.
const GATE_ROUNDS: usize = 3;

impl Solution {
    /// Density of unlisted tones like tone `i`, per Hz and dB.
    pub fn background(&self, i: usize) -> f64 {
        let get = |v: &[f64]| v.get(i).copied().unwrap_or(0.0);
        let density = self.unlisted.get(i).map_or(0.0, Unlisted::total);
        (get(&self.unlisted_rate) * density * get(&self.level_density)).max(1e-300)
    }

    /// What clusters compete with apart from each other: unlisted tones and the
    /// recorder's artefacts.
    pub fn sourceless(&self, i: usize) -> f64 {
        self.background(i) + self.gates.rival_density.get(i).copied().unwrap_or(0.0)
    }

    /// Everything at tone `i`, distortion included.
    fn total(&self, i: usize) -> f64 {
        let get = |v: &[f64]| v.get(i).copied().unwrap_or(0.0);
        self.others(i, None) + get(&self.gates.density) - get(&self.gates.rival_density)
    }

    /// Everything but cluster `but` at tone `i` that clusters compete with.
    pub fn others(&self, i: usize, but: Option<usize>) -> f64 {
        let told = self.told.get(i).copied().unwrap_or(0.0);
        let own = but
            .and_then(|c| self.solved.get(c)?.message.get(i))
            .copied()
            .unwrap_or(0.0);
        let rest = if own == 0.0 {
            told
        } else if own < 0.5 * told {
            told - own
        } else {
            // The difference would cancel: add the others up.
            self.solved
                .iter()
                .enumerate()
                .filter(|(c, _)| Some(*c) != but)
                .filter_map(|(_, s)| s.message.get(i))
                .sum()
        };
        self.sourceless(i) + rest
    }

    /// Gives cluster `c` a new message.
    pub fn tell(&mut self, c: usize, message: Vec<f64>) {
        let Some(s) = self.solved.get_mut(c) else {
            return;
        };
        let changes = message.iter().zip(&s.message).zip(&mut self.told);
        let mut exact = true;
        for ((new, old), told) in changes {
            // Taking a large part away would leave rounding errors.
            exact &= *old < 0.5 * *told || old == new;
            *told += new - old;
        }
        s.message = message;
        if !exact {
            self.add_up();
        }
    }

    /// Adds the messages up anew.
    pub fn add_up(&mut self) {
        let mut told = vec![0.0; self.tones.len()];
        for s in &self.solved {
            for (t, m) in told.iter_mut().zip(&s.message) {
                *t += m;
            }
        }
        self.told = told;
    }

    pub fn all_others(&self, but: Option<usize>) -> Vec<f64> {
        (0..self.tones.len()).map(|i| self.others(i, but)).collect()
    }

    /// Share of each cluster in each tone.
    pub fn shares(&self) -> Vec<f64> {
        let total = self.all_others(None);
        self.solved
            .iter()
            .flat_map(|s| s.message.iter().zip(&total).map(|(m, t)| m / t))
            .collect()
    }

    /// What is left of each tone for the unlisted and for by-products: the first,
    /// and per unit of density of the second.
    pub fn left_over(&self, i: usize) -> (f64, f64) {
        let claimed: f64 = self.solved.iter().filter_map(|s| s.share.get(i)).sum();
        let left = (1.0 - claimed).max(0.0);
        let all = self.background(i) + self.gates.density.get(i).copied().unwrap_or(0.0);
        (left * self.background(i) / all, left / all)
    }

    /// Settles the shares from the messages, once the gates of by-products have
    /// looked at what is explained.
    pub fn settle(&mut self) {
        for _ in 0..GATE_ROUNDS {
            self.look_for_byproducts(false);
        }
        let total: Vec<f64> = (0..self.tones.len()).map(|i| self.total(i)).collect();
        for s in &mut self.solved {
            s.share = s.message.iter().zip(&total).map(|(m, t)| m / t).collect();
        }
    }

    /// Lets the gates of by-products, or the rivals of sources among them, look at
    /// what everything else explains.
    pub fn look_for_byproducts(&mut self, rivals: bool) {
        let others: Vec<f64> = self
            .told
            .iter()
            .enumerate()
            .map(|(i, told)| self.background(i) + told)
            .collect();
        self.gates = gates::look(
            &self.byproducts.gates,
            &self.byproducts.products,
            &others,
            &self.gates,
            rivals,
        );
    }

    /// Bethe's approximation of the log evidence.
    pub fn ln_evidence(&self) -> f64 {
        let total = self.all_others(None);
        let mut ln = total.iter().map(|t| t.ln()).sum::<f64>();
        // The unlisted are a Poisson process whose rate has a gamma prior: what a
        // high rate wins at the tones it pays here.
        let count: f64 = (0..total.len())
            .filter_map(|i| Some(self.background(i) / total.get(i)?))
            .sum();
        ln -= 1.0 + count;
        for s in &self.solved {
            ln += s.value.ln_evidence;
            for (t, m) in total.iter().zip(&s.message) {
                // ln(others/T) without cancellation where the message is small.
                ln += if *m < 0.5 * t {
                    (-m / t).ln_1p()
                } else {
                    ((t - m).max(1e-300) / t).ln()
                };
            }
        }
        ln
    }
}

impl Solved {
    /// Mean and standard deviation of each latent: the best mode's where one
    /// stands out, the prior's otherwise.
    pub fn posterior(&self) -> Vec<Normal> {
        self.fit()
            .unwrap_or_else(|| self.prior.iter().map(Prior::normal).collect())
    }

    /// [`posterior`](Solved::posterior) where the modes agree on one place.
    pub fn fit(&self) -> Option<Vec<Normal>> {
        let all =
            |k: usize| {
                self.places.modes.iter().zip(&self.value.weights).flat_map(
                    move |(mode, weights)| {
                        mode.nodes.iter().zip(weights).map(move |(n, w)| {
                            let along = |axis: [f64; 2]| axis.get(k).map_or(0.0, |a| a * a);
                            let cell = along(mode.axes[0]) * n.cell_var[0]
                                + along(mode.axes[1]) * n.cell_var[1];
                            (*w, n.theta.get(k).copied().unwrap_or(0.0), cell)
                        })
                    },
                )
            };
        // The best mode and all others whose middle lies with it.
        let masses: Vec<f64> = self.value.weights.iter().map(|w| w.iter().sum()).collect();
        let best = masses
            .iter()
            .enumerate()
            .max_by(|a, b| a.1.total_cmp(b.1))?;
        let mode = self.places.modes.get(best.0)?;
        let middle = mode.nodes.get(mode.nodes.len() / 2)?.theta;
        let extent = |k: usize| {
            mode.nodes
                .iter()
                .filter_map(|n| n.theta.get(k))
                .map(|t| (t - middle.get(k).copied().unwrap_or(0.0)).abs())
                .fold(0.0, f64::max)
        };
        let mut mass = 0.0;
        let fitted: Vec<Normal> = (0..self.prior.len())
            .map(|k| {
                let reach = extent(k);
                let pivot = middle.get(k).copied().unwrap_or(0.0);
                let (mut m, mut first, mut second) = (0.0, 0.0, 0.0);
                for (w, theta, cell) in all(k) {
                    let d = theta - pivot;
                    if d.abs() <= reach {
                        m += w;
                        first += w * d;
                        second += w * (d * d + cell);
                    }
                }
                mass = m;
                let d = first / m;
                Normal {
                    mean: pivot + d,
                    sd: (second / m - d * d).max(0.0).sqrt(),
                }
            })
            .collect();
        (mass > 0.5 && fitted.iter().all(|f| f.mean.is_finite())).then_some(fitted)
    }
}
