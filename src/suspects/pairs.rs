//! Places of a cluster with two latents.
//!
//! One meeting leaves a line of possible latents, two meet in a point. Points are
//! proposed from pairs of meetings of the strongest lines, judged by how many other
//! strong lines then find a tone, and the best are settled by least squares over
//! all lines and given a grid along the axes of their covariance. Places that fewer
//! than three tones agree on need no grid: with two latents free, two tones are
//! met independently, and that is what the broad node says.

use super::clusters::Cluster;
use super::modes::{Broad, Mode, Node, Places, REACH, Setting, gaussian, mean, meetings};
use super::prior::{Normal, PRIOR_REACH, Prior};
use super::scene::Meeting;
use crate::fold::Chain;
use crate::units::TrueHz;

/// Lines from which pairs are made.
const SEED_LINES: usize = 9;
/// Lines by which a pair is judged.
const JUDGE_LINES: usize = 24;
/// Pairs judged at most.
const PAIRS: usize = 120_000;
/// Pairs settled at most.
const SETTLED: usize = 150;
/// Grids kept.
const MODES: usize = 10;
/// Log-scores below the best that are still kept.
const DEPTH: f64 = 20.0;
/// Half the points of a grid along one axis, and how far it reaches in standard
/// deviations.
const HALF_POINTS: i32 = 6;
const GRID_REACH: f64 = 12.0;

type Vector = [f64; 2];
type Symmetric = [f64; 3];

fn dot(a: Vector, b: Vector) -> f64 {
    a[0] * b[0] + a[1] * b[1]
}

fn quadratic(m: Symmetric, a: Vector) -> f64 {
    m[0] * a[0] * a[0] + 2.0 * m[1] * a[0] * a[1] + m[2] * a[1] * a[1]
}

fn determinant(m: Symmetric) -> f64 {
    m[0] * m[2] - m[1] * m[1]
}

fn inverse(m: Symmetric) -> Symmetric {
    let d = determinant(m);
    [m[2] / d, -m[1] / d, m[0] / d]
}

/// Eigenvalues and unit eigenvectors.
fn eigen(m: Symmetric) -> ([f64; 2], [Vector; 2]) {
    let angle = 0.5 * (2.0 * m[1]).atan2(m[0] - m[2]);
    let (s, c) = angle.sin_cos();
    let (u, v) = ([c, s], [-s, c]);
    ([quadratic(m, u), quadratic(m, v)], [u, v])
}

struct Place {
    theta: Vector,
    covariance: Symmetric,
    score: f64,
    matched: usize,
}

fn ln_prior(prior: &[Normal; 2], theta: Vector) -> f64 {
    prior
        .iter()
        .zip(theta)
        .map(|(p, t)| -0.5 * ((t - p.mean) / p.sd).powi(2))
        .sum()
}

/// Finds tones near a seen frequency.
struct Near {
    sorted: Vec<(f64, usize)>,
    worst: f64,
}

impl Near {
    fn each(&self, seen: f64, reach: f64, found: &mut dyn FnMut(usize)) {
        let start = self.sorted.partition_point(|s| s.0 < seen - reach);
        for &(nu, tone) in self.sorted.iter().skip(start) {
            if nu > seen + reach {
                break;
            }
            found(tone);
        }
    }
}

/// Places of a two-latent cluster.
pub(super) fn find(
    cluster: &Cluster,
    prior: &[Normal; 2],
    setting: &Setting,
    chain: &Chain,
) -> Places {
    let priors = prior.map(Prior::Normal);
    let mut broad = Broad::new(cluster, setting);
    let mut met: Vec<Vec<Meeting>> = Vec::with_capacity(cluster.lines.len());
    for (j, line) in cluster.lines.iter().enumerate() {
        let mut own = Vec::new();
        meetings(line, &priors, setting, &mut |meeting, _, _| {
            broad.add(cluster, &priors, setting, j, &meeting);
            own.push(meeting);
        });
        met.push(own);
    }
    let mut sorted: Vec<(f64, usize)> = setting
        .tones
        .iter()
        .enumerate()
        .map(|(i, t)| (t.nu, i))
        .collect();
    sorted.sort_by(|a, b| a.0.total_cmp(&b.0));
    let near = Near {
        sorted,
        worst: setting.tones.iter().map(|t| t.var).fold(0.0, f64::max),
    };
    // Lines by how likely they show.
    let mut order: Vec<usize> = (0..cluster.lines.len()).collect();
    let likely = |j: &usize| {
        cluster.lines.get(*j).map_or(0.0, |l| {
            super::modes::mean(&setting.strengths.shown(&l.faintness))
        })
    };
    order.sort_by(|a, b| likely(b).total_cmp(&likely(a)));
    let judges: Vec<usize> = order.iter().copied().take(JUDGE_LINES).collect();
    let mut seeds = seeds(cluster, prior, setting, chain, &order, &met, &judges, &near);
    seeds.sort_by(|a, b| b.score.total_cmp(&a.score));
    let mut places: Vec<Place> = Vec::new();
    for seed in seeds.iter().take(SETTLED) {
        let place = settle(seed, cluster, prior, setting, chain, &near);
        if place.matched < 3 || !place.score.is_finite() {
            continue;
        }
        let new = places.iter().all(|p| {
            let d = [p.theta[0] - place.theta[0], p.theta[1] - place.theta[1]];
            quadratic(inverse(p.covariance), d) > 9.0
        });
        if new {
            places.push(place);
        }
    }
    places.sort_by(|a, b| b.score.total_cmp(&a.score));
    let best = places.first().map_or(0.0, |p| p.score);
    places.retain(|p| p.score > best - DEPTH);
    places.truncate(MODES);
    let modes: Vec<Mode> = places
        .iter()
        .flat_map(|p| grid(p, cluster, prior, setting, chain, &near))
        .collect();
    let inside: f64 = modes
        .iter()
        .flat_map(|m| &m.nodes)
        .map(|n| n.ln_mass.exp())
        .sum();
    Places {
        modes,
        broad: broad.finish(),
        broad_mass: (1.0 - inside).max(0.0),
        latents: 2,
    }
}

/// Rungs are worked with where the line is expected: tone, analog frequency.
fn rung(chain: &Chain, f: f64, tone_nu: f64) -> f64 {
    let seen = chain.see(TrueHz(f));
    f + seen.sense.sign() * (tone_nu - seen.seen.0)
}

#[allow(clippy::too_many_arguments)] // the pieces of one search
fn seeds(
    cluster: &Cluster,
    prior: &[Normal; 2],
    setting: &Setting,
    chain: &Chain,
    order: &[usize],
    met: &[Vec<Meeting>],
    judges: &[usize],
    near: &Near,
) -> Vec<Place> {
    let mut found = Vec::new();
    let mut budget = PAIRS;
    // Pairs of lines, strongest together first.
    let mut line_pairs: Vec<(usize, usize)> = Vec::new();
    for sum in 1..2 * SEED_LINES {
        for first in 0..SEED_LINES.min(sum) {
            let second = sum - first;
            if first < second && second < SEED_LINES {
                line_pairs.push((first, second));
            }
        }
    }
    let fair = (PAIRS / line_pairs.len().max(1)).max(500);
    for (p, q) in line_pairs {
        let (Some(&jp), Some(&jq)) = (order.get(p), order.get(q)) else {
            continue;
        };
        let (Some(lp), Some(lq)) = (cluster.lines.get(jp), cluster.lines.get(jq)) else {
            continue;
        };
        let d = lp.a[0] * lq.a[1] - lp.a[1] * lq.a[0];
        if d.abs() < 1e-9 {
            continue;
        }
        let (Some(mp), Some(mq)) = (met.get(jp), met.get(jq)) else {
            continue;
        };
        let mut by_rung: Vec<&Meeting> = mq.iter().collect();
        by_rung.sort_by(|a, b| a.rung_hz.total_cmp(&b.rung_hz));
        let mut used = 0;
        // Given line p's rung, the prior leaves line q only part of its range.
        let vp = quadratic([prior[0].sd.powi(2), 0.0, prior[1].sd.powi(2)], lp.a);
        let cross =
            lp.a[0] * lq.a[0] * prior[0].sd.powi(2) + lp.a[1] * lq.a[1] * prior[1].sd.powi(2);
        let vq = quadratic([prior[0].sd.powi(2), 0.0, prior[1].sd.powi(2)], lq.a);
        let rest = (vq - cross * cross / vp).max(0.0).sqrt();
        let means = [prior[0].mean, prior[1].mean];
        let (cp, cq) = (lp.b + dot(lp.a, means), lq.b + dot(lq.a, means));
        for m in mp {
            let centre = cq + cross / vp * (m.rung_hz - cp);
            let reach = PRIOR_REACH * rest;
            let start = by_rung.partition_point(|x| x.rung_hz < centre - reach);
            for n in by_rung.iter().skip(start) {
                if n.rung_hz > centre + reach || used > fair * 4 || budget == 0 {
                    break;
                }
                if n.tone == m.tone {
                    continue;
                }
                used += 1;
                budget -= 1;
                let (tp, tq) = (m.rung_hz - lp.b, n.rung_hz - lq.b);
                let theta = [
                    (lq.a[1] * tp - lp.a[1] * tq) / d,
                    (lp.a[0] * tq - lq.a[0] * tp) / d,
                ];
                let prior_ln = ln_prior(prior, theta);
                if prior_ln < -0.5 * PRIOR_REACH * PRIOR_REACH {
                    continue;
                }
                let (Some((t1, _)), Some((t2, _))) = (setting.tone(m.tone), setting.tone(n.tone))
                else {
                    continue;
                };
                let (v1, v2) = (t1.var + lp.var, t2.var + lq.var);
                // Covariance of the point: rows of the inverse system.
                let (r0, r1) = ([lq.a[1] / d, -lp.a[1] / d], [-lq.a[0] / d, lp.a[0] / d]);
                let covariance = [
                    r0[0] * r0[0] * v1 + r0[1] * r0[1] * v2,
                    r0[0] * r1[0] * v1 + r0[1] * r1[1] * v2,
                    r1[0] * r1[0] * v1 + r1[1] * r1[1] * v2,
                ];
                let mut score = prior_ln;
                let mut matched = 0;
                for &j in judges {
                    let Some(line) = cluster.lines.get(j) else {
                        continue;
                    };
                    let spread = quadratic(covariance, line.a) + line.var;
                    let f = line.b + dot(line.a, theta);
                    let seen = chain.see(TrueHz(f)).seen.0;
                    let mut best: f64 = 0.0;
                    near.each(seen, REACH * (spread + near.worst).sqrt(), &mut |i| {
                        if let Some((tone, others)) = setting.tone(i) {
                            let var = spread + tone.var;
                            let odds = 0.5 * mean(&setting.odds(line, tone, false));
                            let x = odds * gaussian(tone.nu - seen, var) / others;
                            best = best.max(x.ln_1p());
                        }
                    });
                    if best > 0.5 {
                        matched += 1;
                    }
                    score += best;
                }
                if matched >= 3 {
                    found.push(Place {
                        theta,
                        covariance,
                        score,
                        matched,
                    });
                }
            }
        }
    }
    found
}

/// Least squares over all lines near `seed`.
fn settle(
    seed: &Place,
    cluster: &Cluster,
    prior: &[Normal; 2],
    setting: &Setting,
    chain: &Chain,
    near: &Near,
) -> Place {
    let mut theta = seed.theta;
    let mut covariance = seed.covariance;
    let mut score = 0.0;
    let mut matched = 0;
    for _ in 0..4 {
        let (w0, w1) = (prior[0].sd.powi(-2), prior[1].sd.powi(-2));
        let mut precision = [w0, 0.0, w1];
        let mut sum = [
            w0 * (prior[0].mean - theta[0]),
            w1 * (prior[1].mean - theta[1]),
        ];
        score = 0.0;
        let mut tones: Vec<usize> = Vec::new();
        for line in &cluster.lines {
            let spread = quadratic(covariance, line.a) + line.var;
            let f = line.b + dot(line.a, theta);
            let seen = chain.see(TrueHz(f));
            near.each(
                seen.seen.0,
                REACH * (spread + near.worst).sqrt(),
                &mut |i| {
                    let Some((tone, others)) = setting.tone(i) else {
                        return;
                    };
                    let off = seen.sense.sign() * (tone.nu - seen.seen.0);
                    let odds = 0.5 * mean(&setting.odds(line, tone, false));
                    let x = odds * gaussian(off, spread + tone.var) / others;
                    let r = x / (1.0 + x);
                    let weight = r / (tone.var + line.var);
                    precision[0] += weight * line.a[0] * line.a[0];
                    precision[1] += weight * line.a[0] * line.a[1];
                    precision[2] += weight * line.a[1] * line.a[1];
                    sum[0] += weight * line.a[0] * off;
                    sum[1] += weight * line.a[1] * off;
                    score += x.ln_1p();
                    if r > 0.5 && !tones.contains(&i) {
                        tones.push(i);
                    }
                },
            );
        }
        covariance = inverse(precision);
        theta = [
            theta[0] + covariance[0] * sum[0] + covariance[1] * sum[1],
            theta[1] + covariance[1] * sum[0] + covariance[2] * sum[1],
        ];
        matched = tones.len();
    }
    // Laplace: the peak's share of the prior.
    let volume = (determinant(covariance).max(0.0).sqrt() / (prior[0].sd * prior[1].sd)).ln();
    Place {
        theta,
        covariance,
        score: score + ln_prior(prior, theta) + volume,
        matched,
    }
}

fn grid(
    place: &Place,
    cluster: &Cluster,
    prior: &[Normal; 2],
    setting: &Setting,
    chain: &Chain,
    near: &Near,
) -> Vec<Mode> {
    let (values, axes) = eigen(place.covariance);
    let sd = values.map(|v| v.max(1e-300).sqrt());
    // Edges grow like sinh: fine within a standard deviation, out to the reach.
    let bend = 0.6;
    let edge = |i: f64| {
        let t = i / (f64::from(HALF_POINTS) + 0.5);
        bend * (t * (GRID_REACH / bend).asinh()).sinh()
    };
    let cells: Vec<(f64, f64)> = (-HALF_POINTS..=HALF_POINTS)
        .map(|i| {
            let (l, h) = (edge(f64::from(i) - 0.5), edge(f64::from(i) + 0.5));
            (0.5 * (l + h), h - l)
        })
        .collect();
    let norm = (2.0 * std::f64::consts::PI * prior[0].sd * prior[1].sd).ln();
    let mut nodes = Vec::with_capacity(cells.len() * cells.len());
    for &(u, du) in &cells {
        for &(v, dv) in &cells {
            let (u, du, v, dv) = (u * sd[0], du * sd[0], v * sd[1], dv * sd[1]);
            let theta = [
                place.theta[0] + u * axes[0][0] + v * axes[1][0],
                place.theta[1] + u * axes[0][1] + v * axes[1][1],
            ];
            nodes.push(Node {
                theta,
                ln_mass: ln_prior(prior, theta) - norm + (du * dv).ln(),
                cell_var: [du * du / 12.0, dv * dv / 12.0],
            });
        }
    }
    let mut entries = Vec::new();
    for (j, line) in cluster.lines.iter().enumerate() {
        let extent = GRID_REACH * quadratic(place.covariance, line.a).sqrt();
        let f = line.b + dot(line.a, place.theta);
        let seen = chain.see(TrueHz(f)).seen.0;
        let reach = extent + REACH * (line.var + near.worst).sqrt();
        near.each(seen, reach, &mut |i| {
            let Some((tone, _)) = setting.tone(i) else {
                return;
            };
            if (tone.nu - seen).abs() > extent + REACH * 1.5 * (line.var + tone.var).sqrt() {
                return;
            }
            let meeting = Meeting {
                tone: i,
                rung_hz: rung(chain, f, tone.nu),
                image: false,
            };
            entries.extend(setting.entry(cluster, j, &meeting));
        });
    }
    Mode::variants(axes, nodes, entries, place.theta, cluster, setting)
}
