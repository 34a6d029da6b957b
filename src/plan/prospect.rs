//! What a test is worth: a discrete channel from answers to outcomes.

use std::collections::BTreeMap;

/// A question counts as settled once one answer is this probable.
pub const SETTLED: f64 = 0.9;

/// One answer to a tone's question, and what a test would show under it.
#[derive(Debug, Clone, PartialEq)]
pub struct Expectation {
    /// Answers with one number are one answer.
    pub answer: usize,
    /// Probability now.
    pub probability: f64,
    /// `(outcome, probability given the answer)`, summing to 1.
    pub outcomes: Vec<(usize, f64)>,
}

/// What to expect of a test.
#[derive(Debug, Clone, Copy, PartialEq, Default, serde::Serialize)]
pub struct Prospect {
    /// Mutual information between answer and outcome, bits.
    pub bits: f64,
    /// Chance that one answer is at least [`SETTLED`] probable afterwards.
    pub settles: f64,
}

/// Mutual information `Σ p(a) p(o|a) log₂ p(o|a)/p(o)` and the chance of settling.
/// Probabilities of the answers are taken relative to their sum.
pub fn prospect(expected: &[Expectation]) -> Prospect {
    let total: f64 = expected.iter().map(|e| e.probability).sum();
    if total <= 0.0 {
        return Prospect::default();
    }
    let mut joint: BTreeMap<(usize, usize), f64> = BTreeMap::new();
    let mut outcomes: BTreeMap<usize, f64> = BTreeMap::new();
    let mut answers: BTreeMap<usize, f64> = BTreeMap::new();
    for e in expected {
        let p = e.probability / total;
        *answers.entry(e.answer).or_insert(0.0) += p;
        for &(o, q) in &e.outcomes {
            *joint.entry((o, e.answer)).or_insert(0.0) += p * q;
            *outcomes.entry(o).or_insert(0.0) += p * q;
        }
    }
    let mut bits = 0.0;
    let mut best: BTreeMap<usize, f64> = BTreeMap::new();
    for (&(o, a), &p) in &joint {
        let (po, pa) = (
            outcomes.get(&o).copied().unwrap_or(1.0),
            answers.get(&a).copied().unwrap_or(1.0),
        );
        if p > 0.0 {
            bits += p * (p / (po * pa)).log2();
        }
        let b = best.entry(o).or_insert(0.0);
        *b = b.max(p);
    }
    let settles = best
        .iter()
        .filter_map(|(o, p)| {
            let po = outcomes.get(o)?;
            (*p >= SETTLED * po).then_some(*po)
        })
        .sum::<f64>();
    Prospect {
        bits: bits.max(0.0),
        settles: settles.min(1.0),
    }
}

/// Numbers places so that those that could not be told apart share one: `(Hz,
/// standard deviation)` each.
pub fn told_apart(places: &[(f64, f64)]) -> Vec<usize> {
    let mut order: Vec<usize> = (0..places.len()).collect();
    let at = |i: usize| places.get(i).copied().unwrap_or((0.0, 0.0));
    order.sort_by(|&a, &b| at(a).0.total_cmp(&at(b).0));
    let mut numbers = vec![0; places.len()];
    let mut number = 0;
    let mut reach = f64::NEG_INFINITY;
    for (n, &i) in order.iter().enumerate() {
        let (hz, sd) = at(i);
        if n > 0 && hz - 2.5 * sd > reach {
            number += 1;
            reach = f64::NEG_INFINITY;
        }
        reach = reach.max(hz + 2.5 * sd);
        if let Some(slot) = numbers.get_mut(i) {
            *slot = number;
        }
    }
    numbers
}

#[cfg(test)]
mod tests {
    use super::*;

    fn expect(answer: usize, probability: f64, outcomes: &[(usize, f64)]) -> Expectation {
        Expectation {
            answer,
            probability,
            outcomes: outcomes.to_vec(),
        }
    }

    /// Two equal answers seen in two places: one bit; in one place: none.
    #[test]
    fn a_bit_is_a_bit() {
        let apart = [expect(0, 0.5, &[(0, 1.0)]), expect(1, 0.5, &[(1, 1.0)])];
        let p = prospect(&apart);
        assert!((p.bits - 1.0).abs() < 1e-12 && (p.settles - 1.0).abs() < 1e-12);
        let same = [expect(0, 0.5, &[(0, 1.0)]), expect(1, 0.5, &[(0, 1.0)])];
        let p = prospect(&same);
        assert!(p.bits.abs() < 1e-12 && p.settles == 0.0);
    }

    /// The binary symmetric channel: 1 − H(e) bits (Cover and Thomas, Elements of
    /// Information Theory, ch. 7; from memory).
    #[test]
    fn a_noisy_test_is_worth_less() {
        let e: f64 = 0.2;
        let noisy = [
            expect(0, 0.5, &[(0, 1.0 - e), (1, e)]),
            expect(1, 0.5, &[(0, e), (1, 1.0 - e)]),
        ];
        let p = prospect(&noisy);
        let entropy = -e * e.log2() - (1.0 - e) * (1.0 - e).log2();
        assert!((p.bits - (1.0 - entropy)).abs() < 1e-12, "{p:?}");
        assert_eq!(p.settles, 0.0);
    }

    #[test]
    fn places_closer_than_can_be_told_are_one() {
        let n = told_apart(&[(100.0, 0.1), (50.0, 1.0), (100.3, 0.1), (52.0, 0.1)]);
        assert_eq!(n[0], n[2]);
        assert_eq!(n[1], n[3]);
        assert_ne!(n[0], n[1]);
    }
}
