//! The clock error between two recordings, from all their tones at once.
//!
//! Every meeting of candidates is a vote for one error. Each peak of the evidence is
//! a mode; with many common tones one remains, with a single tone as many as it has
//! candidates. A source that can drift may have drifted as a whole: all its tones
//! together then count no more against another error than one that moved.

use super::pairs::{Pair, Pairs};
use super::tracks::{Place, Track};
use std::collections::BTreeMap;

/// Part of the tones that two recordings of one place share, with its prior: mostly
/// nearly all that are strong enough for both.
const COMMON: [(f64, f64); 4] = [(0.4, 0.01), (0.8, 0.05), (0.97, 0.24), (0.995, 0.7)];
/// The one used to find modes.
const SEARCH_COMMON: f64 = 0.8;
/// Expected artefacts of each sort before looking.
const ARTEFACTS: f64 = 0.05;
/// What it costs to say that a source drifted as a whole, nats: how much sharper its
/// tones are than it drifts.
const FAMILY_DRIFT: f64 = 6.5;
/// Modes followed, and how far below the best one may be, nats.
const MOST_MODES: usize = 96;
const LEAST_MODE: f64 = 14.0;
/// Errors tried, the most promising votes first.
const MOST_TRIED: usize = 4000;

/// A clock error that may be, with how much of the tones is common.
#[derive(Debug, Clone, Copy)]
pub(super) struct Mode {
    pub delta: f64,
    pub sd: f64,
    pub common: f64,
    /// Nothing tells the clock error: no vote counts.
    pub blind: bool,
    /// Expected artefacts that keep their samples, or their time.
    pub artefacts: (f64, f64),
    /// Log evidence over that of two places with nothing in common.
    pub ln_odds: f64,
    /// The same without the mains.
    pub ln_same_place: f64,
}

impl Mode {
    fn at(delta: f64, sd: f64) -> Self {
        Mode {
            delta,
            sd,
            common: SEARCH_COMMON,
            blind: false,
            artefacts: (ARTEFACTS, ARTEFACTS),
            ln_odds: 0.0,
            ln_same_place: 0.0,
        }
    }
}

/// Odds of each pair at one mode.
pub(super) fn odds(pairs: &Pairs, mode: &Mode) -> Vec<f64> {
    let mut odds: Vec<f64> = pairs
        .pairs
        .iter()
        .map(|p| p.flat + mode.artefacts.0 * p.samples + mode.artefacts.1 * p.time)
        .collect();
    if !mode.blind {
        pairs.at(mode.delta, |vote, w| {
            if let Some(o) = odds.get_mut(vote.pair) {
                *o += w;
            }
        });
    }
    for (o, p) in odds.iter_mut().zip(&pairs.pairs) {
        *o *= factor(pairs, p, mode.common);
    }
    odds
}

/// From odds of tones that are always common to those where a part is.
fn factor(pairs: &Pairs, pair: &Pair, common: f64) -> f64 {
    let missed = |all: &[f64], i: usize| 1.0 - common * all.get(i).copied().unwrap_or(0.0);
    common / (missed(&pairs.track_visible, pair.track) * missed(&pairs.tone_visible, pair.tone))
}

/// A clock error and how wide its vote is, the sums of the families, and the rest.
type Look<'f> = ((f64, f64), BTreeMap<&'f str, f64>, f64);

/// Sums over the tracks, at one clock error.
struct Evidence<'a> {
    pairs: &'a Pairs,
    /// Tracks and tones that are the mains.
    mains: (Vec<bool>, Vec<bool>),
    /// Source that may drift and has the track to itself.
    family: Vec<Option<String>>,
    /// Left of "both alone" where both name one line, per track.
    alone: Vec<f64>,
    prior: (f64, f64),
}

impl Evidence<'_> {
    /// `ln(alone + Σ odds)` of each track that something meets; the rest has `ln alone`.
    fn tracks(&self, odds: &[f64]) -> Vec<f64> {
        let mut sums = self.alone.clone();
        for (o, p) in odds.iter().zip(&self.pairs.pairs) {
            if let Some(s) = sums.get_mut(p.track) {
                *s += o;
            }
        }
        sums.iter().map(|s| s.ln()).collect()
    }

    /// Families' sums and the rest, of all tracks or without the mains.
    fn split(&self, terms: &[f64], with_mains: bool) -> (BTreeMap<&str, f64>, f64) {
        let mut families = BTreeMap::new();
        let mut rest = 0.0;
        for ((t, family), mains) in terms.iter().zip(&self.family).zip(&self.mains.0) {
            if *mains && !with_mains {
                continue;
            }
            match family {
                Some(f) => *families.entry(f.as_str()).or_insert(0.0) += t,
                None => rest += t,
            }
        }
        (families, rest)
    }

    /// What the tones missing from the other recording cost.
    fn missing(&self, common: f64, with_mains: bool) -> f64 {
        let sum = |visible: &[f64], mains: &[bool]| -> f64 {
            visible
                .iter()
                .zip(mains)
                .filter(|(_, m)| with_mains || !**m)
                .map(|(v, _)| (1.0 - common * v).ln())
                .sum()
        };
        sum(&self.pairs.track_visible, &self.mains.0) + sum(&self.pairs.tone_visible, &self.mains.1)
    }

    /// Moves to the middle of the votes that agree; its standard deviation.
    fn refine(&self, start: f64) -> (f64, f64) {
        let (mean, sd) = self.prior;
        let mut delta = start;
        let mut width = sd;
        for _ in 0..6 {
            let mode = Mode::at(delta, width);
            let terms = self.tracks(&odds(self.pairs, &mode));
            let (mut precision, mut sum) = (sd.powi(-2), mean * sd.powi(-2));
            self.pairs.at(delta, |vote, w| {
                let Some(pair) = self.pairs.pairs.get(vote.pair) else {
                    return;
                };
                let all = terms.get(pair.track).map_or(1.0, |t| t.exp());
                let share = w * factor(self.pairs, pair, SEARCH_COMMON) / all;
                precision += share * vote.sd.powi(-2);
                sum += share * vote.delta * vote.sd.powi(-2);
            });
            let next = sum / precision;
            width = precision.sqrt().recip();
            let moved = (next - delta).abs();
            delta = next;
            if moved < 0.01 * width {
                break;
            }
        }
        (delta, width)
    }
}

/// Every clock error that may be, by falling evidence; `prior` is its mean and
/// standard deviation before looking. Never empty.
pub(super) fn modes(
    place: &Place,
    tracks: &[Track],
    to: usize,
    pairs: &Pairs,
    prior: (f64, f64),
) -> Vec<Mode> {
    let none = Vec::new();
    let tones = place.known.get(to).map_or(&none, |k| &k.tracks);
    let is_mains = |all: &[Track]| all.iter().map(|t| place.mains_share(t) > 0.5).collect();
    let mut alone = vec![1.0; tracks.len()];
    for p in &pairs.pairs {
        if let Some(a) = alone.get_mut(p.track) {
            *a -= p.same_line;
        }
    }
    for a in &mut alone {
        *a = a.max(1e-4);
    }
    let evidence = Evidence {
        pairs,
        mains: (is_mains(tracks), is_mains(tones)),
        family: tracks.iter().map(|t| family(place, t)).collect(),
        alone,
        prior,
    };
    let mut tried: Vec<(f64, f64, f64)> = pairs.votes().map(|v| (v.delta, v.sd, v.odds)).collect();
    tried.sort_by(|a, b| (b.1 * b.2).total_cmp(&(a.1 * a.2)));
    tried.truncate(MOST_TRIED);
    // First look: the evidence at every vote.
    let mut peaks: BTreeMap<&str, f64> = BTreeMap::new();
    let looked: Vec<Look> = tried
        .iter()
        .map(|&(delta, sd, _)| {
            let mode = Mode::at(delta, prior.1);
            let terms = evidence.tracks(&odds(pairs, &mode));
            let (families, rest) = evidence.split(&terms, true);
            for (f, l) in &families {
                let peak = peaks.entry(f).or_insert(f64::NEG_INFINITY);
                *peak = peak.max(*l);
            }
            ((delta, sd.min(prior.1)), families, rest)
        })
        .collect();
    let drifted = |families: &BTreeMap<&str, f64>| -> f64 {
        families
            .iter()
            .map(|(f, l)| {
                let floor = peaks.get(f).map_or(*l, |p| p - FAMILY_DRIFT);
                l.max(floor) + (-(l - floor).abs()).exp().ln_1p()
            })
            .sum()
    };
    let ln_prior = |d: f64| {
        let z = (d - prior.0) / prior.1;
        -0.5 * z * z - prior.1.ln()
    };
    let mut ranked: Vec<(f64, f64)> = looked
        .iter()
        .map(|((d, sd), families, rest)| (*d, rest + drifted(families) + ln_prior(*d) + sd.ln()))
        .collect();
    ranked.sort_by(|a, b| b.1.total_cmp(&a.1));
    let mut modes: Vec<Mode> = Vec::new();
    let mut best = f64::NEG_INFINITY;
    let mut met: Vec<(f64, f64)> = Vec::new();
    for (start, _) in ranked.into_iter().take(6 * MOST_MODES) {
        // Votes within a narrow mode already found lead to it again.
        let near =
            |x: f64, reach: &dyn Fn(f64) -> f64| met.iter().any(|(d, w)| (x - d).abs() < reach(*w));
        if near(start, &|w| if w < 0.3 * prior.1 { w } else { 0.0 }) || met.len() >= MOST_MODES {
            continue;
        }
        let (delta, sd) = evidence.refine(start);
        if near(delta, &|w| 2.0 * w.min(sd)) {
            continue;
        }
        met.push((delta, sd));
    }
    let blind = !met.iter().any(|m| m.1 > 0.5 * prior.1);
    let all = met.into_iter().map(|m| (m, false));
    for ((delta, sd), blind) in all.chain(blind.then_some((prior, true))) {
        for (common, share) in COMMON {
            let mut mode = Mode {
                common,
                blind,
                ..Mode::at(delta, sd)
            };
            let found = settle_artefacts(pairs, &evidence.alone, &mut mode);
            let terms = evidence.tracks(&found);
            let width =
                share.ln() + ln_prior(delta) + sd.ln() - (mode.artefacts.0 + mode.artefacts.1);
            let total = |with_mains: bool| {
                let (families, rest) = evidence.split(&terms, with_mains);
                rest + drifted(&families) + width + evidence.missing(common, with_mains)
            };
            mode.ln_odds = total(true);
            mode.ln_same_place = total(false);
            best = best.max(mode.ln_odds);
            modes.push(mode);
        }
    }
    modes.retain(|m| m.ln_odds > best - LEAST_MODE);
    modes.sort_by(|a, b| b.ln_odds.total_cmp(&a.ln_odds));
    modes
}

/// Lets the expected number of artefacts follow what is found; the odds then.
fn settle_artefacts(pairs: &Pairs, alone: &[f64], mode: &mut Mode) -> Vec<f64> {
    let mut found = odds(pairs, mode);
    if pairs.pairs.iter().all(|p| p.samples + p.time <= 0.0) {
        return found;
    }
    for _ in 0..4 {
        let mut sums = alone.to_vec();
        for (o, p) in found.iter().zip(&pairs.pairs) {
            if let Some(s) = sums.get_mut(p.track) {
                *s += o;
            }
        }
        let (mut samples, mut time) = (ARTEFACTS, ARTEFACTS);
        for p in &pairs.pairs {
            let all = sums.get(p.track).copied().unwrap_or(1.0);
            let f = factor(pairs, p, mode.common) / all;
            samples += mode.artefacts.0 * p.samples * f;
            time += mode.artefacts.1 * p.time * f;
        }
        mode.artefacts = (samples, time);
        found = odds(pairs, mode);
    }
    found
}

/// The source that made a track, where one that can drift is likely.
fn family(place: &Place, track: &Track) -> Option<String> {
    let mut by_source: BTreeMap<&str, f64> = BTreeMap::new();
    for (k, p) in track.rungs.iter().flat_map(|r| &r.listed) {
        if let Some(key) = place.keys.get(*k).filter(|k| k.free) {
            *by_source.entry(&key.name).or_insert(0.0) += p;
        }
    }
    by_source
        .into_iter()
        .find(|(_, p)| *p > 0.5)
        .map(|(name, _)| name.to_owned())
}
