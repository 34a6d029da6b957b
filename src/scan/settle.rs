//! Groups at different sample rates that share one true frequency.
//!
//! A tone seen at ν at one rate may truly lie at any rung of its ladder. Each rung
//! predicts where the same line shows at another rate. A prediction that a group there
//! meets counts for the rung by Bayes' rule: the density of the offset if it is the
//! same line, against the density of groups thereabouts; one that nothing meets counts
//! against it. What the single recordings say of the rungs is the prior. Clocks are taken to
//! be off independently in each recording, by as much as the site file says.

use super::groups::{Group, Rate};
use crate::fold::{Rung, fold, rungs};
use crate::units::{SeenHz, TrueHz, U95};

/// How probable it is that a line seen at one rate was there at another too.
const PRESENT: f64 = 0.7;
/// A rung at least this probable settles the matter.
const SETTLED: f64 = 0.9;
/// Where nothing says how high analog frequencies go: this many times the highest rate's
/// half (as for single recordings).
const HIGHEST: f64 = 50.0;
/// Rungs looked at.
const MOST_RUNGS: f64 = 400.0;
/// Groups of a rate that take part: the most frequent, of those the strongest.
const MOST_PER_RATE: usize = 4000;
/// Rates that take part.
const MOST_RATES: usize = 32;

/// What the recordings of a group say of one true frequency, before other rates are
/// looked at.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Claim {
    /// Hz.
    pub true_hz: f64,
    /// Mean probability.
    pub probability: f64,
}

/// What was found of one group.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Settled {
    /// The most probable true frequency, Hz.
    pub true_hz: f64,
    /// Its probability.
    pub probability: f64,
    /// Probability of all rungs above half the rate.
    pub folded: f64,
    /// The rung.
    pub rung: Rung,
}

/// Groups of several rates with one true frequency.
#[derive(Debug, Clone, PartialEq)]
pub struct Kept {
    /// Index of each group and what is concluded of it, by rate.
    pub members: Vec<(usize, Settled)>,
}

/// What is known before.
pub struct Prior<'a> {
    /// ±, 95 %, of each recording's clock, parts per million.
    pub clock_ppm: f64,
    /// Highest analog frequency, where it is known, Hz.
    pub bandwidth_hz: Option<f64>,
    /// Of each group, what its recordings claim of listed sources.
    pub claims: &'a [Vec<Claim>],
}

/// Finds the groups that keep their true frequency across rates.
pub fn settle(groups: &[Group], rates: &[Rate], prior: &Prior) -> Vec<Kept> {
    if rates.len() < 2 || rates.len() > MOST_RATES {
        return Vec::new();
    }
    let shown: Vec<Vec<usize>> = (0..rates.len())
        .map(|rate| taking_part(groups, rate))
        .collect();
    let highest = rates.iter().map(|r| r.rate_hz).fold(0.0, f64::max);
    let table = Table {
        groups,
        rates,
        shown: &shown,
        top_hz: prior.bandwidth_hz.unwrap_or(0.5 * HIGHEST * highest),
        clock: prior.clock_ppm * 1e-6,
    };
    let mut settled: Vec<Option<Settled>> = vec![None; groups.len()];
    for &at in shown.iter().flatten() {
        let claims = prior.claims.get(at).map_or(&[][..], Vec::as_slice);
        let result = groups.get(at).and_then(|g| table.posterior(g, claims));
        if let Some(slot) = settled.get_mut(at) {
            *slot = result.filter(|s| s.probability >= SETTLED);
        }
    }
    table.join(&settled)
}

fn taking_part(groups: &[Group], rate: usize) -> Vec<usize> {
    let mut all: Vec<usize> = (0..groups.len())
        .filter(|&i| groups.get(i).is_some_and(|g| g.rate as usize == rate))
        .collect();
    if all.len() > MOST_PER_RATE {
        let rank = |i: &usize| groups.get(*i).map(|g| (g.recordings, g.level_dbfs));
        all.sort_by(|a, b| {
            let (a, b) = (rank(a), rank(b));
            b.partial_cmp(&a).unwrap_or(std::cmp::Ordering::Equal)
        });
        all.truncate(MOST_PER_RATE);
        all.sort_unstable();
    }
    all
}

struct Table<'a> {
    groups: &'a [Group],
    rates: &'a [Rate],
    /// Groups of each rate that take part, by rising frequency.
    shown: &'a [Vec<usize>],
    top_hz: f64,
    clock: f64,
}

impl Table<'_> {
    /// ±, 95 %, of the distance between two sightings of a line at `true_hz`.
    fn reach(&self, a: &Group, b: &Group, true_hz: f64) -> f64 {
        let clocks = std::f64::consts::SQRT_2 * self.clock * true_hz;
        a.reach_hz.hypot(b.reach_hz).hypot(clocks)
    }

    /// The group at another rate nearest to where a line of group `a` would show, with
    /// its distance, if near enough to be it.
    fn met(&self, a: &Group, true_hz: f64, rate: usize) -> Option<(usize, f64)> {
        let shown = self.shown.get(rate)?;
        let at = fold(TrueHz(true_hz), self.rates.get(rate)?.rate_hz).0;
        let group = |i: usize| Some((*shown.get(i)?, self.groups.get(*shown.get(i)?)?));
        let after = shown.partition_point(|&i| self.groups.get(i).is_some_and(|g| g.mean_hz < at));
        [after.checked_sub(1), Some(after)]
            .into_iter()
            .flatten()
            .filter_map(group)
            .map(|(i, g)| (i, g, (g.mean_hz - at).abs()))
            .filter(|(_, g, off)| *off <= 2.0 * self.reach(a, g, true_hz))
            .min_by(|x, y| x.2.total_cmp(&y.2))
            .map(|(i, _, off)| (i, off))
    }

    /// Groups per Hz around a frequency, from the nearest ten on each side.
    fn density(&self, rate: usize, near_hz: f64) -> f64 {
        const SIDE: usize = 10;
        let (Some(shown), Some(r)) = (self.shown.get(rate), self.rates.get(rate)) else {
            return 0.0;
        };
        let hz = |i: usize| Some(self.groups.get(*shown.get(i)?)?.mean_hz);
        let after =
            shown.partition_point(|&i| self.groups.get(i).is_some_and(|g| g.mean_hz < near_hz));
        let first = after.saturating_sub(SIDE);
        let last = (after + SIDE).min(shown.len());
        let low = if first == 0 { Some(0.0) } else { hz(first) };
        let high = hz(last).unwrap_or(0.5 * r.rate_hz);
        let width = high - low.unwrap_or(0.0);
        // A single group near the edge still leaves one in the band.
        (last - first).max(1) as f64 / width.max(1e-9)
    }

    fn posterior(&self, a: &Group, claims: &[Claim]) -> Option<Settled> {
        let rate_hz = self.rates.get(a.rate as usize)?.rate_hz;
        let half = 0.5 * rate_hz;
        let top = self.top_hz.max(half).min(MOST_RUNGS * half);
        let ladder: Vec<Rung> = rungs(SeenHz(a.mean_hz.clamp(0.0, half)), rate_hz, TrueHz(top))
            .ok()?
            .collect();
        let mut weights = prior_weights(a, &ladder, claims, half);
        for (rung, weight) in ladder.iter().zip(&mut weights) {
            for rate in (0..self.rates.len()).filter(|&r| r != a.rate as usize) {
                let f = rung.true_hz.0;
                *weight *= 1.0 - PRESENT;
                if let Some((i, off)) = self.met(a, f, rate)
                    && let Some(b) = self.groups.get(i)
                {
                    let sd = (self.reach(a, b, f) / U95).max(1e-12);
                    let same = (-0.5 * (off / sd).powi(2)).exp()
                        / (sd * (2.0 * std::f64::consts::PI).sqrt());
                    let odds = PRESENT / (1.0 - PRESENT) * same / self.density(rate, b.mean_hz);
                    *weight *= 1.0 + odds;
                }
            }
        }
        let total: f64 = weights.iter().sum();
        let (best, weight) = weights
            .iter()
            .enumerate()
            .max_by(|x, y| x.1.total_cmp(y.1))?;
        let rung = *ladder.get(best)?;
        let folded: f64 = ladder
            .iter()
            .zip(&weights)
            .filter(|(r, _)| r.zone > 1)
            .map(|(_, w)| w)
            .sum();
        (total > 0.0).then(|| Settled {
            true_hz: rung.true_hz.0,
            probability: weight / total,
            folded: folded / total,
            rung,
        })
    }

    /// Joins groups that agree on their true frequency, each with one group of every
    /// other rate at most.
    fn join(&self, settled: &[Option<Settled>]) -> Vec<Kept> {
        let mut taken = vec![false; settled.len()];
        let mut kept = Vec::new();
        for (at, result) in settled.iter().enumerate() {
            let (Some(mine), Some(a)) = (result, self.groups.get(at)) else {
                continue;
            };
            if taken.get(at).copied().unwrap_or(true) {
                continue;
            }
            let mut members = vec![(at, *mine)];
            for rate in (0..self.rates.len()).filter(|&r| r != a.rate as usize) {
                let Some((i, _)) = self.met(a, mine.true_hz, rate) else {
                    continue;
                };
                let (Some(b), Some(Some(theirs))) = (self.groups.get(i), settled.get(i)) else {
                    continue;
                };
                let free = !taken.get(i).copied().unwrap_or(true);
                let off = (theirs.true_hz - mine.true_hz).abs();
                if free && off <= 2.0 * self.reach(a, b, mine.true_hz) {
                    members.push((i, *theirs));
                }
            }
            if members.len() > 1 {
                for (i, _) in &members {
                    if let Some(flag) = taken.get_mut(*i) {
                        *flag = true;
                    }
                }
                members.sort_by_key(|(i, _)| *i);
                kept.push(Kept { members });
            }
        }
        kept
    }
}

/// What single recordings say of each rung: the listed sources' claims go to their
/// rungs, the rest of `folded` to all others with a density even over the logarithm
/// of frequency, the rest of what is direct to the lowest.
fn prior_weights(a: &Group, ladder: &[Rung], claims: &[Claim], half: f64) -> Vec<f64> {
    let mut weights = vec![0.0; ladder.len()];
    let (mut claimed_folded, mut claimed_direct) = (0.0, 0.0);
    for claim in claims {
        // Rungs are `2·seen` or more apart but for the folds; the nearest is meant.
        let nearest = ladder
            .iter()
            .enumerate()
            .min_by(|x, y| {
                let off = |r: &Rung| (r.true_hz.0 - claim.true_hz).abs();
                off(x.1).total_cmp(&off(y.1))
            })
            .map(|(i, _)| i);
        if let Some(weight) = nearest.and_then(|i| weights.get_mut(i)) {
            *weight += claim.probability;
            if claim.true_hz > half {
                claimed_folded += claim.probability;
            } else {
                claimed_direct += claim.probability;
            }
        }
    }
    // Never none: a listed source that explains it all may still be the wrong one.
    const LEAST: f64 = 0.005;
    let rest_folded = (a.folded - claimed_folded).max(LEAST);
    let rest_direct = (1.0 - a.folded - claimed_direct).max(LEAST);
    let spread: f64 = ladder
        .iter()
        .filter(|r| r.zone > 1)
        .map(|r| r.true_hz.0.recip())
        .sum();
    for (rung, weight) in ladder.iter().zip(&mut weights) {
        if rung.zone > 1 {
            *weight += rest_folded * rung.true_hz.0.recip() / spread;
        } else {
            *weight += rest_direct;
        }
    }
    weights
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::{RngExt, SeedableRng, rngs::StdRng};

    fn group(rate: u32, seen_hz: f64, folded: f64) -> Group {
        Group {
            rate,
            low_hz: seen_hz,
            high_hz: seen_hz,
            mean_hz: seen_hz,
            reach_hz: 0.01,
            recordings: 3,
            by_luck: 0.0,
            chance: 0.0,
            folded,
            level_dbfs: -50.0,
        }
    }

    fn rate(rate_hz: f64) -> Rate {
        Rate {
            rate_hz,
            recordings: 3,
            tones: 120,
        }
    }

    /// Scenes of lines at random true frequencies, seen at two rates by clocks that are
    /// off: what is called settled is right as often as it says.
    #[test]
    fn what_is_settled_is_right() {
        let mut random = StdRng::seed_from_u64(2026);
        let rates = [rate(8000.0), rate(11_025.0)];
        let ppm = 50.0;
        let (mut said, mut right, mut sum, mut lines) = (0, 0, 0.0, 0);
        for _ in 0..60 {
            // even over the logarithm, some at either rate only
            let scene: Vec<f64> = (0..30)
                .map(|_| 40.0 * 2000f64.powf(random.random::<f64>()))
                .collect();
            let mut groups = Vec::new();
            let mut truth = Vec::new();
            for (i, r) in rates.iter().enumerate() {
                let clock = 1.0 + 1e-6 * ppm / U95 * 1.2 * (2.0 * random.random::<f64>() - 1.0);
                let mut seen: Vec<(f64, f64)> = scene
                    .iter()
                    .filter(|_| random.random::<f64>() < 0.8)
                    .map(|&f| (fold(TrueHz(f * clock), r.rate_hz).0, f))
                    .collect();
                seen.sort_by(|a, b| a.0.total_cmp(&b.0));
                for (hz, f) in seen {
                    groups.push(group(i as u32, hz, 0.4));
                    truth.push(f);
                }
            }
            lines += scene.len();
            let prior = Prior {
                clock_ppm: ppm,
                bandwidth_hz: Some(80_000.0),
                claims: &[],
            };
            for kept in settle(&groups, &rates, &prior) {
                for (at, settled) in kept.members {
                    said += 1;
                    sum += settled.probability;
                    let off = (settled.true_hz - truth[at]).abs() / truth[at];
                    right += usize::from(off < 4e-6 * ppm);
                }
            }
        }
        let share = right as f64 / said as f64;
        let expected = sum / said as f64;
        // 1 sd of the share is below 0.012 with some hundred verdicts
        assert!(said > lines / 3, "{said} of {lines}");
        assert!(share > expected - 0.03, "{share} of {expected}");
    }

    #[test]
    fn one_rate_settles_nothing() {
        let prior = Prior {
            clock_ppm: 50.0,
            bandwidth_hz: None,
            claims: &[],
        };
        let groups = [group(0, 100.0, 0.3), group(0, 200.0, 0.3)];
        assert!(settle(&groups, &[rate(8000.0)], &prior).is_empty());
    }
}
