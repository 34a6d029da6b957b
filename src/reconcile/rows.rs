//! From states to one row per physical tone.

use super::matching::State;
use super::tracks::{Place, Rung, Track};
use super::{Physical, Row, Sighting};
use crate::fold::fold;
use crate::plan::prospect::{Expectation, prospect, told_apart};
use crate::suspects::Verdict;
use crate::units::{Sense, TrueHz, U95};
use std::collections::BTreeMap;

/// Candidates of `unlisted` are stated until this little is left over.
const LEFT_OVER: f64 = 0.002;
/// Most candidates stated one by one.
const MOST_CANDIDATES: usize = 40;
/// Suspects less probable than this are not worth a row.
const LEAST: f64 = 1e-6;
/// A place less probable than this leaves nothing open.
const OPEN: f64 = 0.02;

type Members = Vec<Option<usize>>;

/// Every physical tone, by number.
pub(super) fn physical(place: &Place, states: &[State], rates_hz: &[f64]) -> Vec<Physical> {
    // How probable each set of sightings is, over the states.
    let mut sets: BTreeMap<&Members, f64> = BTreeMap::new();
    for s in states {
        for t in &s.tracks {
            *sets.entry(&t.members).or_insert(0.0) += s.weight * t.association;
        }
    }
    let mut ranked: Vec<(&Members, f64)> = sets.into_iter().collect();
    // Together before alone where they are as probable.
    let count = |m: &Members| m.iter().flatten().count();
    ranked.sort_by(|a, b| b.1.total_cmp(&a.1).then(count(b.0).cmp(&count(a.0))));
    let mut taken: BTreeMap<(usize, usize), ()> = BTreeMap::new();
    let mut chosen: Vec<(Members, f64)> = Vec::new();
    let sightings = |m: &Members| -> Vec<(usize, usize)> {
        m.iter()
            .enumerate()
            .filter_map(|(c, t)| Some((c, (*t)?)))
            .collect()
    };
    for (members, probability) in ranked {
        let seen = sightings(members);
        if seen.iter().all(|s| !taken.contains_key(s)) {
            taken.extend(seen.into_iter().map(|s| (s, ())));
            chosen.push((members.clone(), probability.min(1.0)));
        }
    }
    // A tone whose likelier company went to others stands alone.
    for (c, known) in place.known.iter().enumerate() {
        for tone in known.tracks.iter().filter_map(|t| *t.members.get(c)?) {
            if !taken.contains_key(&(c, tone)) {
                let mut members = vec![None; place.known.len()];
                if let Some(m) = members.get_mut(c) {
                    *m = Some(tone);
                }
                chosen.push((members, 0.5));
            }
        }
    }
    let seen_hz = |m: &Members| {
        sightings(m).first().map_or(0.0, |&(c, t)| {
            let tone = place
                .known
                .get(c)
                .and_then(|k| k.capture.scene.tones.get(t));
            tone.map_or(0.0, |t| t.seen_hz.0)
        })
    };
    chosen.sort_by(|a, b| seen_hz(&a.0).total_cmp(&seen_hz(&b.0)));
    let mut numbers: BTreeMap<(usize, usize), usize> = BTreeMap::new();
    for (n, (members, _)) in chosen.iter().enumerate() {
        for s in sightings(members) {
            numbers.insert(s, n + 1);
        }
    }
    chosen
        .iter()
        .enumerate()
        .filter_map(|(n, (members, association))| {
            let seen = sightings(members);
            let first = *seen.first()?;
            let mut tone = one(place, states, first, &numbers)?;
            tone.number = n + 1;
            tone.association = *association;
            tone.sightings = seen
                .into_iter()
                .map(|(capture, tone)| Sighting { capture, tone })
                .collect();
            tone.extra_rate = extra_rate(place, &tone, rates_hz);
            Some(tone)
        })
        .collect()
}

/// A place with what is known of it, over all states.
struct Summed {
    rung: Rung,
    zone: u64,
    sense: Sense,
}

fn one(
    place: &Place,
    states: &[State],
    (capture, tone): (usize, usize),
    numbers: &BTreeMap<(usize, usize), usize>,
) -> Option<Physical> {
    let known = place.known.get(capture)?;
    let chain = known.capture.scene.chain;
    let mut all: Vec<Summed> = Vec::new();
    let mut artefact: (f64, f64, &str) = (0.0, 0.0, "");
    let mut products: &[super::tracks::Product] = &[];
    for state in states {
        let holds = |t: &&Track| t.members.get(capture).copied().flatten() == Some(tone);
        let Some(track) = state.tracks.iter().find(holds) else {
            continue;
        };
        products = &track.products;
        let delta = state.deltas.get(capture).map_or(0.0, |d| d.0);
        if track.artefact.0 > 0.0 {
            artefact.0 += state.weight * track.artefact.0;
            artefact.2 = &track.artefact.1;
        }
        for r in &track.rungs {
            let seen = chain.see(TrueHz(r.hz / (1.0 + delta)));
            let mut r = r.clone();
            r.var += (r.hz * state.epsilon.1).powi(2);
            r.hz *= 1.0 + state.epsilon.0;
            r.unlisted *= state.weight;
            for l in &mut r.listed {
                l.1 *= state.weight;
            }
            add(&mut all, r, seen.zone, seen.sense);
        }
    }
    let total: f64 = all.iter().map(|s| s.rung.mass()).sum::<f64>() + artefact.0;
    if total <= 0.0 {
        return None;
    }
    let folded: f64 = all
        .iter()
        .filter(|s| s.zone > 1)
        .map(|s| s.rung.mass())
        .sum();
    let mut rows = listed_rows(place, &all, total);
    // Products of other tones are part of what nothing listed made.
    let mut parents = Vec::new();
    let own = known
        .tracks
        .iter()
        .find(|t| t.members.get(capture).copied().flatten() == Some(tone));
    let original: f64 = own.map_or(1.0, |t| t.rungs.iter().map(|r| r.unlisted).sum());
    for p in products.iter().filter(|_| original > 0.0) {
        let Some(at) = all
            .iter_mut()
            .min_by(|a, b| {
                let off = |s: &Summed| (s.rung.hz - p.hz).abs();
                off(a).total_cmp(&off(b))
            })
            .filter(|s| (s.rung.hz - p.hz).abs() < 3.0 * s.rung.var.sqrt() + 1e-3 * p.hz)
        else {
            continue;
        };
        let rung_own: f64 = own
            .into_iter()
            .flat_map(|t| &t.rungs)
            .filter(|r| (r.hz - p.hz).abs() < 1e-6 * p.hz.max(1.0))
            .map(|r| r.unlisted)
            .sum();
        let part = at.rung.unlisted * (p.probability / rung_own.max(p.probability)).min(1.0);
        at.rung.unlisted -= part;
        if part / total < LEAST {
            continue;
        }
        let names: Vec<String> = p
            .tones
            .iter()
            .map(|&number| {
                // Tones are numbered from 1 in their own recording.
                let n = numbers.get(&(capture, number.saturating_sub(1)));
                format!("tone {}", n.copied().unwrap_or(number))
            })
            .collect();
        parents.push(Row {
            suspect: names.join(", "),
            line: p.label.clone(),
            true_hz: Some((at.rung.hz, U95 * at.rung.var.sqrt())),
            zone: at.zone,
            sense: at.sense,
            probability: part / total,
            coincidence: Some(0.0),
        });
    }
    rows.extend(parents);
    if artefact.0 / total >= LEAST {
        let tone = known.capture.scene.tones.get(tone)?;
        artefact_row(
            &mut rows,
            artefact.0 / total,
            artefact.2,
            tone.seen_hz.0,
            tone.seen_hz_u95,
        );
    }
    rows.extend(unlisted_rows(&all, total));
    rows.sort_by(|a, b| b.probability.total_cmp(&a.probability));
    let folded_probability = (folded / total).clamp(0.0, 1.0);
    Some(Physical {
        number: 0,
        sightings: Vec::new(),
        association: 1.0,
        rows,
        folded_probability,
        verdict: Verdict::from_folded_probability(folded_probability),
        extra_rate: None,
    })
}

/// The recorder, under the name one recording alone gave it if it did.
fn artefact_row(rows: &mut Vec<Row>, probability: f64, words: &str, hz: f64, u95: f64) {
    if let Some(known) = rows.iter_mut().find(|r| r.suspect == "recorder") {
        known.probability += probability;
        return;
    }
    rows.push(Row {
        suspect: "recorder".into(),
        line: words.to_owned(),
        true_hz: Some((hz, u95)),
        zone: 1,
        sense: Sense::Upright,
        probability,
        coincidence: Some(0.0),
    });
}

fn add(all: &mut Vec<Summed>, new: Rung, zone: u64, sense: Sense) {
    let near =
        |s: &Summed| (s.rung.hz - new.hz).powi(2) < 4.0 * s.rung.var.max(new.var) && s.zone == zone;
    match all.iter_mut().find(|s| near(s)) {
        None => all.push(Summed {
            rung: new,
            zone,
            sense,
        }),
        Some(s) => {
            if new.mass() > s.rung.mass() {
                (s.rung.hz, s.rung.var) = (new.hz, new.var);
            }
            s.rung.unlisted += new.unlisted;
            for (k, p) in new.listed {
                match s.rung.listed.iter_mut().find(|l| l.0 == k) {
                    Some(l) => l.1 += p,
                    None => s.rung.listed.push((k, p)),
                }
            }
        }
    }
}

fn listed_rows(place: &Place, all: &[Summed], total: f64) -> Vec<Row> {
    // Probability, and the likeliest place with its share.
    let mut by_key: BTreeMap<usize, (f64, f64, &Summed)> = BTreeMap::new();
    for s in all {
        for &(k, p) in &s.rung.listed {
            let e = by_key.entry(k).or_insert((0.0, 0.0, s));
            e.0 += p;
            if p > e.1 {
                (e.1, e.2) = (p, s);
            }
        }
    }
    by_key
        .into_iter()
        .filter_map(|(k, (p, _, at))| {
            let key = place.keys.get(k)?;
            (p / total >= LEAST).then(|| Row {
                suspect: key.name.clone(),
                line: key.line.clone(),
                true_hz: Some((at.rung.hz, U95 * at.rung.var.sqrt())),
                zone: at.zone,
                sense: at.sense,
                probability: p / total,
                coincidence: Some(key.coincidence),
            })
        })
        .collect()
}

/// One row per candidate of `unlisted`, the last of them for all the rest.
fn unlisted_rows(all: &[Summed], total: f64) -> Vec<Row> {
    let mut open: Vec<&Summed> = all.iter().collect();
    open.sort_by(|a, b| b.rung.unlisted.total_cmp(&a.rung.unlisted));
    let mut left: f64 = open.iter().map(|s| s.rung.unlisted).sum();
    let mut rows = Vec::new();
    for s in open {
        let enough = left / total < LEFT_OVER || rows.len() >= MOST_CANDIDATES;
        if enough && !rows.is_empty() {
            break;
        }
        left -= s.rung.unlisted;
        rows.push(Row {
            suspect: "unlisted".into(),
            line: String::new(),
            true_hz: Some((s.rung.hz, U95 * s.rung.var.sqrt())),
            zone: s.zone,
            sense: s.sense,
            probability: s.rung.unlisted / total,
            coincidence: None,
        });
    }
    if left / total >= LEFT_OVER {
        rows.push(Row {
            suspect: "unlisted".into(),
            line: String::new(),
            true_hz: None,
            zone: 0,
            sense: Sense::Upright,
            probability: left / total,
            coincidence: None,
        });
    }
    rows
}

/// The rate at which the places left open would be seen furthest apart.
fn extra_rate(place: &Place, tone: &Physical, rates_hz: &[f64]) -> Option<(f64, f64)> {
    let places = tone.places();
    if places.get(1).is_none_or(|p| p.2 < OPEN) {
        return None;
    }
    let clock = place.known.iter().map(|k| k.clock_sd).fold(0.0, f64::max);
    rates_hz
        .iter()
        .filter(|r| {
            place
                .known
                .iter()
                .all(|k| (k.rate_hz / **r - 1.0).abs() > 1e-4)
        })
        .map(|&rate| {
            let seen: Vec<(f64, f64)> = places
                .iter()
                .map(|p| (fold(TrueHz(p.0), rate).0, (p.1 / U95).hypot(p.0 * clock)))
                .collect();
            let outcomes = told_apart(&seen);
            let expected: Vec<Expectation> = places
                .iter()
                .zip(outcomes)
                .enumerate()
                .map(|(n, (p, o))| Expectation {
                    answer: n,
                    probability: p.2,
                    outcomes: vec![(o, 1.0)],
                })
                .collect();
            (rate, prospect(&expected))
        })
        .max_by(|a, b| a.1.bits.total_cmp(&b.1.bits))
        .map(|(rate, p)| (rate, p.settles))
}
