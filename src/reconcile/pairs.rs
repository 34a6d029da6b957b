//! How well a track and a tone of the next recording go together, as a function of
//! the clock error between them.

use super::tracks::{Place, Rung, Track};
use std::collections::BTreeMap;

/// A clock error at which a candidate of a track and one of a tone meet.
#[derive(Debug, Clone, Copy)]
pub(super) struct Vote {
    pub pair: usize,
    pub delta: f64,
    pub sd: f64,
    /// Odds at the peak, for tones that are always in both recordings.
    pub odds: f64,
}

/// A track and a tone that may be one.
#[derive(Debug, Clone, Copy)]
pub(super) struct Pair {
    pub track: usize,
    pub tone: usize,
    /// Odds that do not depend on the clock: the source moved meanwhile.
    pub flat: f64,
    /// Odds of an artefact of one expected: keeping its place in cycles per sample,
    /// and keeping its time.
    pub samples: f64,
    pub time: f64,
    /// Probability that both are one line of one source, each by its own recording.
    pub same_line: f64,
}

impl Pair {
    fn new(track: usize, tone: usize) -> Self {
        Pair {
            track,
            tone,
            flat: 0.0,
            samples: 0.0,
            time: 0.0,
            same_line: 0.0,
        }
    }
}

/// All that can meet.
pub(super) struct Pairs {
    pub pairs: Vec<Pair>,
    /// By falling reach; each class sorted by clock error.
    classes: Vec<(f64, Vec<Vote>)>,
    /// Chance that each track, or tone, would be seen in the other recording.
    pub track_visible: Vec<f64>,
    pub tone_visible: Vec<f64>,
    /// Tones expected to meet a track by chance, at one clock error.
    pub by_chance: f64,
}

/// Relative drift of what nobody listed between two recordings (one standard
/// deviation), and how often it drifts.
const DRIFT: f64 = 1e-3;
const DRIFTS: f64 = 0.05;
/// A wandering tone's mean may move this many times its wander, this often.
const WANDER_REACH: f64 = 0.5;
const WANDER_MOVES: f64 = 0.2;
/// How often a source moves anywhere within its tolerance meanwhile: free, locked.
const MOVES: [f64; 2] = [0.4, 0.02];
/// Standard deviations searched.
const REACH: f64 = 5.0;
/// Votes whose odds are less cannot matter.
const LEAST_ODDS: f64 = 1e-3;
/// Where a recording does not name a suspect, its share is at most this.
const UNNAMED: f64 = 1e-7;
const LEAST_SHARE: f64 = 1e-15;

fn gaussian(x: f64, var: f64) -> f64 {
    (-0.5 * x * x / var).exp() / (2.0 * std::f64::consts::PI * var).sqrt()
}

/// Where a track and a tone meet: odds per Hz⁻¹ of kernel.
struct Meeting {
    unlisted: f64,
    listed: Vec<(usize, f64)>,
}

impl Meeting {
    fn total(&self) -> f64 {
        self.unlisted + self.listed.iter().map(|l| l.1).sum::<f64>()
    }
}

/// A meeting that happened: part of a joined track.
pub(super) struct Piece {
    pub rung: Rung,
    pub odds: f64,
}

/// What `meet` needs of a pair beside the two rungs.
struct Between<'a> {
    place: &'a Place<'a>,
    track: &'a Track,
    tone: &'a Track,
    from: usize,
    to: usize,
    track_dbfs: f64,
    tone_dbfs: f64,
    single: bool,
    wander_hz: f64,
}

impl<'a> Between<'a> {
    fn new(place: &'a Place, track: &'a Track, tone: &'a Track, to: usize) -> Option<Self> {
        let (from, first) = place.first(track)?;
        let (_, other) = place.first(tone)?;
        Some(Between {
            place,
            track,
            tone,
            from,
            to,
            track_dbfs: first.level_dbfs,
            tone_dbfs: other.level_dbfs,
            single: track.members.iter().flatten().count() == 1,
            wander_hz: first.wander_hz.max(other.wander_hz).max(0.0),
        })
    }

    fn meet(&self, a: &Rung, b: &Rung) -> Meeting {
        let (ua, ub) = (a.unlisted.max(LEAST_SHARE), b.unlisted.max(LEAST_SHARE));
        let there = self
            .place
            .visible(self.from, self.to, self.track_dbfs, a.hz);
        // Two recordings tell the density at a place: their mean. A joined track
        // carries no density of its own.
        let unlisted = if self.single {
            let back = self.place.visible(self.to, self.from, self.tone_dbfs, b.hz);
            (ua * ub / (self.track.density * self.tone.density) * there * back).sqrt()
        } else {
            ua / self.tone.density * there
        };
        let keys: BTreeMap<usize, ()> = a
            .listed
            .iter()
            .chain(&b.listed)
            .map(|l| (l.0, ()))
            .collect();
        let listed = keys
            .into_keys()
            .filter(|&k| self.place.keys.get(k).is_some_and(|k| !k.is_recorder()))
            .map(|k| {
                let share = |r: &Rung| {
                    let named: f64 = r.listed.iter().filter(|l| l.0 == k).map(|l| l.1).sum();
                    named.max(UNNAMED)
                };
                let prior = self.place.prior_odds(k, a.hz);
                let (ea, eb) = (share(a) / ua / prior, share(b) / ub / prior);
                let evidence = ea.max(eb).max(1.0) * ea.min(eb).min(1.0);
                (k, unlisted * prior * evidence)
            })
            .collect();
        Meeting { unlisted, listed }
    }

    /// Kernels `(weight, variance)` for the distance between the two rungs.
    fn kernels(&self, var: f64) -> [(f64, f64); 2] {
        let wandering = self.wander_hz > 0.0;
        let moves = if wandering { WANDER_MOVES } else { 0.0 };
        [
            (1.0 - DRIFTS - moves, var),
            (moves, var + (WANDER_REACH * self.wander_hz).powi(2)),
        ]
    }

    /// Odds that a line both recordings name moved between them.
    fn moved(&self, key: usize, ma: f64, mb: f64) -> f64 {
        let Some(k) = self.place.keys.get(key) else {
            return 0.0;
        };
        let often = k.prior.map_or(1.0, |p| p.2).clamp(0.1, 1.0);
        (if k.free { MOVES[0] } else { MOVES[1] }) * ma * mb / often
    }
}

fn shares(track: &Track) -> BTreeMap<usize, f64> {
    let mut all = BTreeMap::new();
    for (k, p) in track.rungs.iter().flat_map(|r| &r.listed) {
        *all.entry(*k).or_insert(0.0) += p;
    }
    all
}

impl Pairs {
    /// Everything of recording `to` that could meet a track, for clock errors within
    /// `prior` (mean and standard deviation).
    pub fn new(place: &Place, tracks: &[Track], to: usize, prior: (f64, f64)) -> Pairs {
        let none = Vec::new();
        let tones = place.known.get(to).map_or(&none, |k| &k.tracks);
        let mut found: BTreeMap<(usize, usize), Pair> = BTreeMap::new();
        let mut votes: Vec<((usize, usize), Vote)> = Vec::new();
        let mut points: Vec<(f64, usize, &Rung)> = tones
            .iter()
            .enumerate()
            .flat_map(|(i, t)| t.rungs.iter().map(move |r| (r.hz, i, r)))
            .collect();
        points.sort_by(|a, b| a.0.total_cmp(&b.0));
        for (i, track) in tracks.iter().enumerate() {
            let widest = tones
                .iter()
                .filter_map(|t| Between::new(place, track, t, to))
                .map(|b| b.wander_hz)
                .fold(0.0, f64::max);
            for a in &track.rungs {
                let noise = (2.0 * a.var).sqrt() + WANDER_REACH * widest;
                let reach = REACH * ((prior.1 + prior.0.abs()) * a.hz + noise);
                let drift = REACH * DRIFT * a.hz;
                let direct = place.known.get(to).is_some_and(|k| a.hz < k.rate_hz / 2.0);
                let window = if direct { reach.max(drift) } else { reach };
                let start = points.partition_point(|p| p.0 < a.hz - window);
                for &(hz, j, b) in points.iter().skip(start) {
                    if hz > a.hz + window {
                        break;
                    }
                    let Some(tone) = tones.get(j) else { continue };
                    let Some(between) = Between::new(place, track, tone, to) else {
                        continue;
                    };
                    let met = between.meet(a, b);
                    let total = met.total();
                    let off = a.hz - hz;
                    if direct {
                        let flat =
                            DRIFTS * total * gaussian(off, (DRIFT * a.hz).powi(2).max(a.var));
                        if flat > 0.1 * LEAST_ODDS {
                            found.entry((i, j)).or_insert_with(|| Pair::new(i, j)).flat += flat;
                        }
                    }
                    for (weight, var) in between.kernels(a.var + b.var) {
                        let peak = weight * total / (2.0 * std::f64::consts::PI * var).sqrt();
                        if peak < LEAST_ODDS || hz <= 0.0 || off.abs() > reach {
                            continue;
                        }
                        found.entry((i, j)).or_insert_with(|| Pair::new(i, j));
                        votes.push((
                            (i, j),
                            Vote {
                                pair: 0,
                                delta: off / hz,
                                sd: var.sqrt() / hz,
                                odds: peak,
                            },
                        ));
                    }
                }
            }
        }
        named_alike(place, tracks, tones, to, &mut found);
        artefacts(place, tracks, tones, to, &mut found);
        let index: BTreeMap<(usize, usize), usize> =
            found.keys().enumerate().map(|(n, k)| (*k, n)).collect();
        for (key, vote) in &mut votes {
            vote.pair = index.get(key).copied().unwrap_or(0);
        }
        Pairs {
            pairs: found.into_values().collect(),
            classes: classes(votes.into_iter().map(|v| v.1).collect()),
            track_visible: tracks.iter().map(|t| visible(place, t, to)).collect(),
            tone_visible: tones.iter().map(|t| visible_in_any(place, t, to)).collect(),
            by_chance: chance(place, tracks, tones, to),
        }
    }

    /// Every vote, in no order.
    pub fn votes(&self) -> impl Iterator<Item = &Vote> {
        self.classes.iter().flat_map(|c| &c.1)
    }

    /// Odds of each pair that a vote near `delta` speaks for, repeatedly.
    pub fn at(&self, delta: f64, mut found: impl FnMut(&Vote, f64)) {
        for (sd, votes) in &self.classes {
            let reach = REACH * sd;
            let start = votes.partition_point(|v| v.delta < delta - reach);
            for v in votes.iter().skip(start) {
                if v.delta > delta + reach {
                    break;
                }
                let z = (delta - v.delta) / v.sd;
                if z.abs() < REACH {
                    found(v, v.odds * (-0.5 * z * z).exp());
                }
            }
        }
    }
}

/// Votes by how far they reach: a few wide ones must not make all searches long.
fn classes(mut votes: Vec<Vote>) -> Vec<(f64, Vec<Vote>)> {
    votes.sort_by(|a, b| b.sd.total_cmp(&a.sd));
    let mut all: Vec<(f64, Vec<Vote>)> = Vec::new();
    for v in votes {
        match all.last_mut() {
            Some(class) if v.sd > class.0 / 4.0 => class.1.push(v),
            _ => all.push((v.sd, vec![v])),
        }
    }
    for class in &mut all {
        class.1.sort_by(|a, b| a.delta.total_cmp(&b.delta));
    }
    all
}

/// Chance that a track would be seen in recording `to`.
fn visible(place: &Place, track: &Track, to: usize) -> f64 {
    let Some((from, tone)) = place.first(track) else {
        return 0.0;
    };
    let (mut sum, mut mass) = (0.0, 0.0);
    for r in &track.rungs {
        let m = r.mass();
        if m > 1e-6 {
            sum += m * place.visible(from, to, tone.level_dbfs, r.hz);
            mass += m;
        }
    }
    if mass > 0.0 { sum / mass } else { 0.0 }
}

/// Chance that a tone of recording `of` would be seen in one of those before.
fn visible_in_any(place: &Place, tone: &Track, of: usize) -> f64 {
    let missed: f64 = (0..of).map(|c| 1.0 - visible(place, tone, c)).product();
    1.0 - missed
}

/// Pairs that both recordings give to one line.
fn named_alike(
    place: &Place,
    tracks: &[Track],
    tones: &[Track],
    to: usize,
    found: &mut BTreeMap<(usize, usize), Pair>,
) {
    let mut by_key: BTreeMap<usize, Vec<(usize, f64)>> = BTreeMap::new();
    for (j, tone) in tones.iter().enumerate() {
        for (k, p) in shares(tone) {
            by_key.entry(k).or_default().push((j, p));
        }
    }
    for (i, track) in tracks.iter().enumerate() {
        for (k, p) in shares(track) {
            for &(j, q) in by_key.get(&k).into_iter().flatten() {
                let Some(tone) = tones.get(j).filter(|_| p * q > 1e-4) else {
                    continue;
                };
                let Some(between) = Between::new(place, track, tone, to) else {
                    continue;
                };
                let pair = found.entry((i, j)).or_insert_with(|| Pair::new(i, j));
                pair.same_line += p * q;
                pair.flat += between.moved(k, p, q);
            }
        }
    }
}

/// Pairs that keep their cycles per sample, or their time, though rate and clock
/// are others.
fn artefacts(
    place: &Place,
    tracks: &[Track],
    tones: &[Track],
    to: usize,
    found: &mut BTreeMap<(usize, usize), Pair>,
) {
    let Some(other) = place.known.get(to) else {
        return;
    };
    for (i, track) in tracks.iter().enumerate() {
        let Some((from, a)) = place.first(track) else {
            continue;
        };
        let Some(own) = place.known.get(from) else {
            continue;
        };
        let (ra, rb) = (own.rate_hz, other.rate_hz);
        // At one rate an artefact looks like any tone.
        if (ra / rb - 1.0).abs() < 1e-3 || a.wander_hz > 0.0 {
            continue;
        }
        for (j, tone) in tones.iter().enumerate() {
            let Some((_, b)) = place.first(tone).filter(|t| t.1.wander_hz <= 0.0) else {
                continue;
            };
            let var = |t: &Track| t.rungs.first().map_or(1.0, |r| r.var);
            let (va, vb) = (var(track), var(tone));
            let density = track.density * tone.density;
            let x = a.seen_hz.0 / ra - b.seen_hz.0 / rb;
            let x_var = va / (ra * ra) + vb / (rb * rb);
            let t = a.seen_hz.0 - b.seen_hz.0;
            let close = |d: f64, var: f64| d * d < REACH * REACH * var;
            let (samples, time) = (
                if close(x, x_var) {
                    2.0 / (ra * rb) * gaussian(x, x_var) / density
                } else {
                    0.0
                },
                if close(t, va + vb) {
                    2.0 / ra.min(rb) * gaussian(t, va + vb) / density
                } else {
                    0.0
                },
            );
            if samples + time > LEAST_ODDS {
                let pair = found.entry((i, j)).or_insert_with(|| Pair::new(i, j));
                pair.samples = samples;
                pair.time = time;
            }
        }
    }
}

/// Tones expected to agree with a track within three standard deviations, were they
/// all elsewhere.
fn chance(place: &Place, tracks: &[Track], tones: &[Track], to: usize) -> f64 {
    let half = place.known.get(to).map_or(1.0, |k| k.rate_hz / 2.0);
    let density = tones.len() as f64 / half;
    tracks
        .iter()
        .filter(|t| place.mains_share(t) < 0.5)
        .flat_map(|t| &t.rungs)
        .filter(|r| r.mass() > 1e-3)
        .map(|r| 6.0 * (2.0 * r.var).sqrt() * density)
        .sum()
}

/// Where track and tone meet at clock error `delta` ± `sd`, with odds.
pub(super) fn pieces(
    place: &Place,
    track: &Track,
    tone: &Track,
    to: usize,
    (delta, sd): (f64, f64),
) -> Vec<Piece> {
    let Some(between) = Between::new(place, track, tone, to) else {
        return Vec::new();
    };
    let mut all = Vec::new();
    for a in &track.rungs {
        for b in &tone.rungs {
            let hz = b.hz * (1.0 + delta);
            let off = a.hz - hz;
            let var_b = b.var + (b.hz * sd).powi(2);
            let direct = place.known.get(to).is_some_and(|k| a.hz < k.rate_hz / 2.0);
            let noise = (a.var + var_b).sqrt() + WANDER_REACH * between.wander_hz;
            let drift = if direct { DRIFT * a.hz } else { 0.0 };
            if off.abs() > REACH * noise.max(drift) {
                continue;
            }
            let met = between.meet(a, b);
            let mut kernel: f64 = between
                .kernels(a.var + var_b)
                .iter()
                .map(|k| k.0 * gaussian(off, k.1))
                .sum();
            let narrow = kernel;
            if direct {
                kernel += DRIFTS * gaussian(off, (DRIFT * a.hz).powi(2).max(a.var));
            }
            let odds = kernel * met.total();
            if odds < 1e-12 {
                continue;
            }
            let together = narrow > 0.5 * kernel;
            let var = 1.0 / (1.0 / a.var + 1.0 / var_b);
            all.push(Piece {
                rung: Rung {
                    hz: if together {
                        var * (a.hz / a.var + hz / var_b)
                    } else {
                        a.hz
                    },
                    var: if together { var } else { a.var },
                    unlisted: kernel * met.unlisted,
                    listed: met
                        .listed
                        .into_iter()
                        .map(|(k, w)| (k, kernel * w))
                        .collect(),
                },
                odds,
            });
        }
    }
    // A source both name that moved: where the track has it.
    let own = shares(tone);
    for a in &track.rungs {
        for &(k, p) in &a.listed {
            let Some(q) = own.get(&k) else { continue };
            let odds = between.moved(k, p, *q);
            if odds > 1e-12 {
                all.push(Piece {
                    rung: Rung {
                        hz: a.hz,
                        var: a.var,
                        unlisted: 0.0,
                        listed: vec![(k, odds)],
                    },
                    odds,
                });
            }
        }
    }
    all
}
