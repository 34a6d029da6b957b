//! Mixing what cannot be decided.
//!
//! Sweeps settle on one way of sharing the tones; where another is nearly as good,
//! the truth is a mixture of both. Two kinds of alternative are weighed: the other
//! ends that other orders came to, and for each family whether the listed source
//! that has it, or one that could have had it, should change places with a family
//! nobody listed.

use super::evaluate::evaluate;
use super::hidden::Standing;
use super::solution::{Solution, Solved};
use super::sweep::{MANY, Problem, beliefs};
use std::rc::Rc;

/// Solutions whose shares differ by less are the same.
const SAME: f64 = 0.03;
/// Bethe's evidence is an approximation: differences count a little less.
const TRUST: f64 = 0.8;
/// Alternatives less probable than this are left out.
const LEAST: f64 = 0.003;
/// Tones a source must claim to be worth a second thought.
const CLAIMS: f64 = 1.2;

/// Weighs solutions against one another; weights sum to 1.
pub(super) fn mix(problem: &Problem, found: Vec<(f64, Solution)>) -> Vec<(f64, Solution)> {
    let best = found
        .iter()
        .map(|f| f.0)
        .filter(|l| l.is_finite())
        .fold(f64::NEG_INFINITY, f64::max);
    let mut kept: Vec<(f64, Solution)> = Vec::new();
    for (ln, solution) in found {
        let weight = (TRUST * (ln - best)).exp();
        let new = kept.iter().all(|(_, k)| different(k, &solution));
        if weight > LEAST && new {
            kept.push((weight, solution));
        }
    }
    let total: f64 = kept.iter().map(|k| k.0).sum();
    for (weight, solution) in &mut kept {
        *weight /= total;
        if solution.solved.len() <= MANY && *weight > 0.02 {
            exchange(problem, solution);
        }
    }
    kept
}

fn different(a: &Solution, b: &Solution) -> bool {
    a.solved.iter().zip(&b.solved).any(|(s, t)| {
        s.share
            .iter()
            .zip(&t.share)
            .any(|(x, y)| (x - y).abs() > SAME)
    })
}

fn claimed(s: &Solved) -> f64 {
    s.share.iter().sum()
}

/// A cluster put in another's place: the log evidence and its value where that one
/// explains nothing.
fn replace(
    problem: &Problem,
    solution: &Solution,
    comes: usize,
    goes: usize,
) -> Option<(f64, Solved)> {
    let comer = solution.solved.get(comes)?;
    let others: Vec<f64> = solution
        .all_others(Some(goes))
        .iter()
        .zip(&comer.message)
        .map(|(o, m)| {
            if *m < 0.5 * o {
                o - m
            } else {
                o * 1e-12 + (o - m).max(0.0)
            }
        })
        .enumerate()
        .map(|(i, o)| o.max(solution.sourceless(i)))
        .collect();
    let places = problem.places_of(comer, solution, &others);
    let value = evaluate(&places, &comer.cluster, &beliefs(comes, solution), &others);
    let share = value.claims(&places, others.len());
    let ln = value.ln_evidence;
    let guest = Solved {
        places: Rc::new(places),
        value,
        message: vec![0.0; share.len()],
        share,
        ..comer.clone()
    };
    Some((ln, guest))
}

/// Weighs, family by family, who else could have it.
fn exchange(problem: &Problem, solution: &mut Solution) {
    let count = solution.solved.len();
    let idle_anonymous = (0..count).find(|&c| {
        solution
            .solved
            .get(c)
            .is_some_and(|s| s.standing == Standing::Anonymous && claimed(s) < 0.5)
    });
    let mut changes: Vec<(usize, f64, Vec<Solved>)> = Vec::new();
    for c in 0..count {
        let Some(s) = solution.solved.get(c) else {
            continue;
        };
        if claimed(s) < CLAIMS {
            continue;
        }
        let candidates: Vec<usize> = match s.standing {
            Standing::Listed => idle_anonymous.into_iter().collect(),
            Standing::Anonymous | Standing::Supply => (0..count)
                .filter(|&o| {
                    solution
                        .solved
                        .get(o)
                        .is_some_and(|s| s.standing == Standing::Listed && claimed(s) < 0.7)
                })
                .collect(),
        };
        let mut guests: Vec<(f64, Solved)> = Vec::new();
        for other in candidates {
            let now = s.value.ln_evidence
                + solution
                    .solved
                    .get(other)
                    .map_or(0.0, |o| o.value.ln_evidence);
            if let Some((ln, guest)) = replace(problem, solution, other, c) {
                guests.push(((TRUST * (ln - now)).min(50.0).exp(), guest));
            }
        }
        let total = 1.0 + guests.iter().map(|g| g.0).sum::<f64>();
        let guests: Vec<Solved> = guests
            .into_iter()
            .filter(|(odds, _)| odds / total > LEAST)
            .map(|(odds, mut guest)| {
                for (share, own) in guest.share.iter_mut().zip(&s.share) {
                    // A guest may have at most what it takes over.
                    *share = odds / total * share.min(*own);
                }
                guest
            })
            .collect();
        if !guests.is_empty() {
            changes.push((c, 1.0 / total, guests));
        }
    }
    for (c, stays, guests) in changes {
        if let Some(s) = solution.solved.get_mut(c) {
            for share in &mut s.share {
                *share *= stays;
            }
        }
        solution.solved.extend(guests);
    }
}
