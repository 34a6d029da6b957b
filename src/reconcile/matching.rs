//! Which tone of the next recording is which track, at each possible clock error.

use super::Belonging;
use super::clock::{self, Mode};
use super::pairs::{self, Pairs};
use super::tracks::{Place, Rung, Track};
use std::collections::BTreeMap;

/// One way all recordings so far can be read.
#[derive(Debug, Clone)]
pub(super) struct State {
    pub weight: f64,
    /// Clock error of each recording against the first: value and standard deviation.
    pub deltas: Vec<(f64, f64)>,
    /// Mean and standard deviation of the first recording's own clock error.
    pub epsilon: (f64, f64),
    pub tracks: Vec<Track>,
}

/// Probability that recordings given together are of one place.
const SAME_PLACE: f64 = 0.98;
/// Rungs less probable than this are dropped from a joined track.
const LEAST_RUNG: f64 = 1e-7;
/// Rounds of the sum-product algorithm.
const ROUNDS: usize = 30;

impl State {
    /// The first recording by itself.
    pub fn first(place: &Place) -> State {
        let known = place.known.first();
        State {
            weight: 1.0,
            deltas: vec![(0.0, 0.0)],
            epsilon: (0.0, known.map_or(0.0, |k| k.clock_sd)),
            tracks: known.map_or(Vec::new(), |k| k.tracks.clone()),
        }
    }
}

/// `(same place, shared, by chance, mains)` as one state has it.
pub(super) type Belongs = (f64, f64, f64, f64);

/// Means over the states.
pub(super) fn average(capture: usize, word: &[(f64, Belongs)]) -> Belonging {
    let total: f64 = word.iter().map(|w| w.0).sum();
    let mean = |get: fn(&Belongs) -> f64| word.iter().map(|w| w.0 * get(&w.1)).sum::<f64>() / total;
    Belonging {
        capture,
        same_place: mean(|b| b.0),
        shared: mean(|b| b.1),
        by_chance: mean(|b| b.2),
        mains: mean(|b| b.3).round() as usize,
    }
}

/// Adds a recording to a state: one new state per clock error that may be.
pub(super) fn add(place: &Place, state: &State, to: usize) -> (Vec<State>, Belongs) {
    let none = Vec::new();
    let (tones, clock_sd) = place
        .known
        .get(to)
        .map_or((&none, 0.0), |k| (&k.tracks, k.clock_sd));
    let prior = (-state.epsilon.0, state.epsilon.1.hypot(clock_sd));
    let pairs = Pairs::new(place, &state.tracks, to, prior);
    let modes = clock::modes(place, &state.tracks, to, &pairs, prior);
    let best = modes.first().map_or(0.0, |m| m.ln_odds);
    let weights: Vec<f64> = modes.iter().map(|m| (m.ln_odds - best).exp()).collect();
    let total: f64 = weights.iter().sum();
    let same = {
        let top = modes
            .iter()
            .map(|m| m.ln_same_place)
            .fold(f64::MIN, f64::max);
        let sum: f64 = modes.iter().map(|m| (m.ln_same_place - top).exp()).sum();
        let ln = top + sum.ln();
        let odds = SAME_PLACE / (1.0 - SAME_PLACE) * ln.min(600.0).exp();
        odds / (1.0 + odds)
    };
    // Ways of how much is common lead to one reading at each clock error.
    let mut by_delta: Vec<(Mode, f64)> = Vec::new();
    for (mode, w) in modes.iter().zip(&weights) {
        match by_delta
            .iter_mut()
            .find(|(m, _)| m.delta == mode.delta && m.blind == mode.blind)
        {
            Some((_, sum)) => *sum += w / total,
            None => by_delta.push((*mode, w / total)),
        }
    }
    let mut states = Vec::new();
    let (mut shared, mut mains) = (0.0, 0.0);
    for (mode, weight) in by_delta {
        let matched = if same < 0.5 {
            Vec::new()
        } else {
            matches(&pairs, &mode, state.tracks.len(), tones.len())
        };
        for m in &matched {
            let is_mains = state
                .tracks
                .get(m.track)
                .is_some_and(|t| place.mains_share(t) > 0.5);
            *(if is_mains { &mut mains } else { &mut shared }) += weight * m.probability;
        }
        let delta = if same < 0.5 {
            prior
        } else {
            (mode.delta, mode.sd)
        };
        let mut deltas = state.deltas.clone();
        deltas.push(delta);
        // ε_c = ε_0 + δ: what is known of ε_c speaks of ε_0.
        let own = clock_sd.powi(2) + delta.1.powi(2);
        let precision = state.epsilon.1.powi(-2) + 1.0 / own;
        let mean = (state.epsilon.0 * state.epsilon.1.powi(-2) - delta.0 / own) / precision;
        states.push(State {
            weight: state.weight * weight,
            deltas,
            epsilon: (mean, precision.sqrt().recip()),
            tracks: join(place, state, tones, to, &matched, &pairs, &mode, delta),
        });
        if same < 0.5 {
            // Nothing tells the clock errors apart.
            states.truncate(1);
            if let Some(only) = states.first_mut() {
                only.weight = state.weight;
            }
            break;
        }
    }
    (states, (same, shared, pairs.by_chance, mains))
}

/// A track and a tone taken for one.
struct Match {
    pair: usize,
    track: usize,
    tone: usize,
    probability: f64,
}

/// Pairs that are one tone with more than even chance.
fn matches(pairs: &Pairs, mode: &Mode, tracks: usize, tones: usize) -> Vec<Match> {
    let odds = clock::odds(pairs, mode);
    let mut by_track: Vec<Vec<usize>> = vec![Vec::new(); tracks];
    let mut by_tone: Vec<Vec<usize>> = vec![Vec::new(); tones];
    let mut weight = vec![0.0; odds.len()];
    for (n, (p, o)) in pairs.pairs.iter().zip(&odds).enumerate() {
        // Two tones that are surely one line cannot both be alone.
        let w = o / (1.0 - p.same_line).max(1e-4);
        if w < 1e-6 {
            continue;
        }
        if let Some(slot) = weight.get_mut(n) {
            *slot = w;
        }
        if let Some(list) = by_track.get_mut(p.track) {
            list.push(n);
        }
        if let Some(list) = by_tone.get_mut(p.tone) {
            list.push(n);
        }
    }
    let get = |v: &[f64], n: usize| v.get(n).copied().unwrap_or(0.0);
    // Messages: `claim` from tracks to tones, `free` from tones back.
    let mut claim = weight.clone();
    let mut free = vec![1.0; weight.len()];
    for _ in 0..ROUNDS {
        for list in &by_tone {
            let all: f64 = list.iter().map(|&n| get(&claim, n)).sum();
            for &n in list {
                let others = (all - get(&claim, n)).max(0.0);
                if let Some(f) = free.get_mut(n) {
                    *f = 1.0 / (1.0 + others);
                }
            }
        }
        for list in &by_track {
            let all: f64 = list.iter().map(|&n| get(&weight, n) * get(&free, n)).sum();
            for &n in list {
                let others = (all - get(&weight, n) * get(&free, n)).max(0.0);
                if let Some(c) = claim.get_mut(n) {
                    *c = get(&weight, n) / (1.0 + others);
                }
            }
        }
    }
    let mut found = Vec::new();
    for list in &by_track {
        let all: f64 = list.iter().map(|&n| get(&weight, n) * get(&free, n)).sum();
        for &n in list {
            let probability = get(&weight, n) * get(&free, n) / (1.0 + all);
            if let Some(p) = pairs.pairs.get(n).filter(|_| probability > 0.5) {
                found.push(Match {
                    pair: n,
                    track: p.track,
                    tone: p.tone,
                    probability,
                });
            }
        }
    }
    // Messages need not end in a matching: the likeliest claim on a tone holds.
    found.sort_by(|a, b| b.probability.total_cmp(&a.probability));
    let mut taken = vec![false; tones];
    found.retain(|m| {
        taken
            .get_mut(m.tone)
            .is_some_and(|t| !std::mem::replace(t, true))
    });
    found
}

/// The tracks once the matched tones have joined them and the others stand alone.
#[allow(clippy::too_many_arguments)]
fn join(
    place: &Place,
    state: &State,
    tones: &[Track],
    to: usize,
    matched: &[Match],
    pairs: &Pairs,
    mode: &Mode,
    delta: (f64, f64),
) -> Vec<Track> {
    let mut tracks = state.tracks.clone();
    let by_track: BTreeMap<usize, &Match> = matched.iter().map(|m| (m.track, m)).collect();
    for (i, track) in tracks.iter_mut().enumerate() {
        let Some(m) = by_track.get(&i) else {
            lonely(place, track, to, mode.common);
            continue;
        };
        let Some(tone) = tones.get(m.tone) else {
            continue;
        };
        let pieces = pairs::pieces(place, track, tone, to, delta);
        let pair = pairs.pairs.get(m.pair);
        let (samples, time) = pair.map_or((0.0, 0.0), |p| {
            (mode.artefacts.0 * p.samples, mode.artefacts.1 * p.time)
        });
        let all = pieces.iter().map(|p| p.odds).sum::<f64>() + samples + time;
        if all <= 0.0 {
            continue;
        }
        let p = m.probability;
        let mut rungs: Vec<Rung> = Vec::new();
        for mut piece in pieces {
            piece.rung.unlisted *= p / all;
            for l in &mut piece.rung.listed {
                l.1 *= p / all;
            }
            enter(&mut rungs, piece.rung);
        }
        for r in &track.rungs {
            let mut r = r.clone();
            r.unlisted *= 1.0 - p;
            for l in &mut r.listed {
                l.1 *= 1.0 - p;
            }
            enter(&mut rungs, r);
        }
        rungs.retain(|r| r.mass() > LEAST_RUNG);
        track.rungs = rungs;
        let artefact = p * (samples + time) / all;
        if artefact > track.artefact.0 {
            let words = if samples > time {
                "keeps its samples"
            } else {
                "keeps its time"
            };
            track.artefact = (artefact, words.to_owned());
        } else {
            track.artefact.0 *= artefact.max(1e-3);
        }
        if let Some(slot) = track.members.get_mut(to) {
            *slot = tone.members.get(to).copied().flatten();
        }
        track.association *= p;
    }
    let taken: BTreeMap<usize, ()> = matched.iter().map(|m| (m.tone, ())).collect();
    for (j, tone) in tones.iter().enumerate() {
        if taken.contains_key(&j) {
            continue;
        }
        let mut alone = tone.clone();
        for before in 0..to {
            lonely(place, &mut alone, before, mode.common);
        }
        for r in &mut alone.rungs {
            // Onto the first recording's scale.
            r.var += (r.hz * delta.1).powi(2);
            r.hz *= 1.0 + delta.0;
        }
        tracks.push(alone);
    }
    tracks
}

/// A tone not seen in recording `to` is less likely where it would have shown there.
fn lonely(place: &Place, track: &mut Track, to: usize, common: f64) {
    let Some((from, tone)) = place.first(track) else {
        return;
    };
    let level = tone.level_dbfs;
    let before: f64 = track.rungs.iter().map(Rung::mass).sum();
    for r in &mut track.rungs {
        let missed = 1.0 - common * place.visible(from, to, level, r.hz);
        r.unlisted *= missed;
        for l in &mut r.listed {
            l.1 *= missed;
        }
    }
    let after: f64 = track.rungs.iter().map(Rung::mass).sum();
    if after <= 0.0 {
        return;
    }
    for r in &mut track.rungs {
        r.unlisted *= before / after;
        for l in &mut r.listed {
            l.1 *= before / after;
        }
    }
}

/// Adds a rung to those at the same place.
fn enter(rungs: &mut Vec<Rung>, new: Rung) {
    let near = |r: &Rung| (r.hz - new.hz).powi(2) < 9.0 * (r.var + new.var);
    match rungs.iter_mut().find(|r| near(r)) {
        None => rungs.push(new),
        Some(r) => {
            if new.mass() > r.mass() {
                (r.hz, r.var) = (new.hz, new.var);
            }
            r.unlisted += new.unlisted;
            for (k, p) in new.listed {
                match r.listed.iter_mut().find(|l| l.0 == k) {
                    Some(l) => l.1 += p,
                    None => r.listed.push((k, p)),
                }
            }
        }
    }
}
