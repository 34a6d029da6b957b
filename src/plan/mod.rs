//! Which test settles an open tone.
//!
//! A tone's candidates ([`crate::candidates`]: suspects at each place they can meet it,
//! and `unlisted` on every rung) are pushed through what a person could do: record
//! at another rate, filter, change a speed, switch something off, record longer, log
//! a speed beside. Each test is a channel from "which candidate" to "what will be
//! seen"; its worth is the mutual information between the two, in bits, and the
//! chance that one candidate is then at least [`prospect::SETTLED`] probable
//! ([`mod@prospect`]).

mod bench;
pub mod prospect;
pub mod rates;
mod shown;

use crate::candidates::{self, Outlook, Who};
use crate::suspects::{Finding, Inference, Scene};
use bench::{Bench, Prepared};
use prospect::{Expectation, Prospect, SETTLED, prospect};

/// A test that a person could do.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
#[serde(rename_all = "lowercase")]
pub enum What {
    /// Record again at this sample rate, Hz.
    Rate(f64),
    /// A low-pass of fourth order with this corner, Hz, before the converter.
    LowPass(f64),
    /// Change a source's speed by this many percent.
    Speed {
        /// Its name.
        source: String,
        /// By how much.
        percent: f64,
    },
    /// Switch a source off.
    Off {
        /// Its name.
        source: String,
    },
    /// Record this many times as long.
    Longer(f64),
    /// Log a source's speed or frequency while recording.
    Reference {
        /// Its name.
        source: String,
    },
}

/// What is seen of a tone in a test.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Shows {
    /// It stays as it is.
    Same,
    /// At another place, Hz.
    At(f64),
    /// Weaker by this many decibels.
    Weaker(f64),
    /// Not at all, or behind another tone.
    Gone,
    /// Still where its source says, now that both are known better.
    Fits,
    /// No longer where its source says.
    Strays,
    /// Its wander follows the log, times this factor (negative: mirrored).
    Follows(f64),
}

/// One outcome for a tone, with the candidates that lead to it.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Outcome {
    /// What is seen.
    pub shows: Shows,
    /// Candidates that say so, by falling probability: who, and their probability.
    pub under: Vec<(String, f64)>,
    /// Probability of this outcome.
    pub probability: f64,
}

/// What a test says of one tone.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Told {
    /// Index into the tones.
    pub tone: usize,
    /// What to expect of it.
    pub prospect: Prospect,
    /// By falling probability.
    pub outcomes: Vec<Outcome>,
}

/// A test with what it is worth.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Test {
    /// What to do.
    pub what: What,
    /// Expected information over all open tones, bits.
    pub bits: f64,
    /// Expected number of open tones it settles.
    pub settles: f64,
    /// Tone by tone, the most doubtful first.
    pub tones: Vec<Told>,
}

/// Tests for the open tones of a recording.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Plan {
    /// Indices of the open tones, the most doubtful first, with the uncertainty of each
    /// in bits.
    pub open: Vec<(usize, f64)>,
    /// Best first.
    pub tests: Vec<Test>,
}

/// Open tones planned for, the most doubtful.
const MOST_OPEN: usize = 40;
/// A test worth less than this, in bits, is left out.
const LEAST_BITS: f64 = 0.01;

/// Uncertainty of a question, bits, over its answers.
fn entropy(answers: &[f64]) -> f64 {
    let total: f64 = answers.iter().sum();
    answers
        .iter()
        .filter(|p| **p > 0.0)
        .map(|p| -p / total * (p / total).log2())
        .sum()
}

/// A cheap look at how doubtful a finding is: over suspects and the two halves of
/// `unlisted`. `None` where one answer is settled.
fn doubt(finding: &Finding) -> Option<f64> {
    let mut answers: Vec<f64> = finding.suspects.iter().map(|s| s.probability).collect();
    answers.extend([finding.unlisted_direct, finding.unlisted_folded]);
    let total: f64 = answers.iter().sum();
    let best = answers.iter().copied().fold(0.0, f64::max);
    // A tone that nothing listed made, folded, has many places.
    let settled = best >= SETTLED * total && finding.unlisted_folded < 0.5 * total;
    (!settled).then(|| entropy(&answers) + 3.0 * finding.unlisted_folded)
}

/// Plans tests for every open tone. `rates_hz` are the sample rates to choose from;
/// the recording's own is passed over.
pub fn plan(scene: &Scene, inference: &Inference, rates_hz: &[f64]) -> Plan {
    let mut doubtful: Vec<(&Finding, f64)> = inference
        .findings
        .iter()
        .filter_map(|f| Some((f, doubt(f)?)))
        .collect();
    doubtful.sort_by(|a, b| b.1.total_cmp(&a.1));
    doubtful.truncate(MOST_OPEN);
    let findings: Vec<&Finding> = doubtful.iter().map(|d| d.0).collect();
    of(scene, inference, rates_hz, &findings)
}

/// The single best test for the most doubtful tone; `None` where none is open or
/// nothing would tell.
pub fn next(scene: &Scene, inference: &Inference, rates_hz: &[f64]) -> Option<Test> {
    for_most_doubtful(scene, inference, rates_hz).next()
}

/// The same among other sample rates only.
pub fn best_rate(scene: &Scene, inference: &Inference, rates_hz: &[f64]) -> Option<Test> {
    for_most_doubtful(scene, inference, rates_hz).find(|t| matches!(t.what, What::Rate(_)))
}

/// Tests for the most doubtful tone, best first.
fn for_most_doubtful(
    scene: &Scene,
    inference: &Inference,
    rates_hz: &[f64],
) -> impl Iterator<Item = Test> {
    let finding = inference
        .findings
        .iter()
        .filter_map(|f| Some((f, doubt(f)?)))
        .max_by(|a, b| a.1.total_cmp(&b.1));
    finding
        .map(|(f, _)| of(scene, inference, rates_hz, &[f]).tests)
        .unwrap_or_default()
        .into_iter()
}

fn of(scene: &Scene, inference: &Inference, rates_hz: &[f64], open: &[&Finding]) -> Plan {
    let prepared: Vec<Prepared> = open
        .iter()
        .filter_map(|f| {
            let outlook = candidates::one(scene, f)?;
            Some(Prepared::new(scene, f, outlook))
        })
        .collect();
    let mut order: Vec<(usize, f64)> = prepared
        .iter()
        .map(|p| {
            let answers: Vec<f64> = p.outlook.candidates.iter().map(|c| c.probability).collect();
            (p.outlook.tone, entropy(&answers))
        })
        .collect();
    order.sort_by(|a, b| b.1.total_cmp(&a.1));
    let bench = Bench::new(scene, inference, &prepared);
    let mut tests: Vec<Test> = bench
        .possible(rates_hz)
        .into_iter()
        .map(|what| evaluate(&bench, &prepared, what))
        .filter(|t| t.bits >= LEAST_BITS)
        .collect();
    // What is worth as much and is less trouble comes first.
    let worth = |t: &Test| t.settles + 0.1 * t.bits - 0.02 * trouble(&t.what);
    tests.sort_by(|a, b| worth(b).total_cmp(&worth(a)));
    Plan { open: order, tests }
}

/// How much trouble a test is, on a scale of its own.
fn trouble(what: &What) -> f64 {
    match what {
        What::Rate(_) => 0.0,
        What::Longer(_) => 0.5,
        What::Reference { .. } => 1.5,
        What::LowPass(_) => 2.0,
        What::Speed { .. } => 3.0,
        What::Off { .. } => 4.0,
    }
}

fn evaluate(bench: &Bench, prepared: &[Prepared], what: What) -> Test {
    let mut tones: Vec<Told> = prepared
        .iter()
        .map(|p| {
            let shown = bench.show(&what, p);
            told(p, &shown)
        })
        .collect();
    tones.sort_by(|a, b| b.prospect.bits.total_cmp(&a.prospect.bits));
    Test {
        what,
        bits: tones.iter().map(|t| t.prospect.bits).sum(),
        settles: tones.iter().map(|t| t.prospect.settles).sum(),
        tones,
    }
}

/// Outcomes of a test for one tone: for each candidate `(number, probability)`, and
/// what each number shows.
struct Shown {
    outcomes: Vec<Vec<(usize, f64)>>,
    shows: Vec<Shows>,
}

/// Outcomes less probable than this are not worth words.
const WORTH_WORDS: f64 = 0.01;

fn told(p: &Prepared, shown: &Shown) -> Told {
    let candidates = &p.outlook.candidates;
    let expected: Vec<Expectation> = candidates
        .iter()
        .zip(&shown.outcomes)
        .enumerate()
        .map(|(n, (c, outcomes))| Expectation {
            answer: n,
            probability: c.probability,
            outcomes: outcomes.clone(),
        })
        .collect();
    let total: f64 = candidates.iter().map(|c| c.probability).sum();
    let mut outcomes: Vec<Outcome> = shown
        .shows
        .iter()
        .enumerate()
        .map(|(o, shows)| {
            let mut under: Vec<(String, f64)> = Vec::new();
            let mut probability = 0.0;
            for (e, name) in expected.iter().zip(&p.names) {
                let q: f64 = e.outcomes.iter().filter(|x| x.0 == o).map(|x| x.1).sum();
                probability += e.probability * q / total;
                if q >= 0.5 {
                    under.push((name.clone(), e.probability / total));
                }
            }
            under.sort_by(|a, b| b.1.total_cmp(&a.1));
            Outcome {
                shows: *shows,
                under,
                probability,
            }
        })
        .filter(|o| o.probability >= WORTH_WORDS)
        .collect();
    outcomes.sort_by(|a, b| b.probability.total_cmp(&a.probability));
    Told {
        tone: p.outlook.tone,
        prospect: prospect(&expected),
        outcomes,
    }
}

/// Whether a candidate is what the recorder made itself.
fn is_recorder(who: &Who) -> bool {
    matches!(who, Who::Recorder { .. })
}

/// The outlook of a tone, if it is one of those prepared.
fn of_tone(prepared: &[Prepared], tone: usize) -> Option<&Outlook> {
    prepared.iter().map(|p| &p.outlook).find(|o| o.tone == tone)
}
