//! Places of a cluster with one latent.
//!
//! The likelihood of a latent has peaks only where some line meets some tone.
//! Each such meeting gives an interval `θ = (rung − b)/a ± reach`; the sum of
//! their gains over θ, swept from left to right, shows where several agree. The
//! best places get a grid whose steps grow geometrically away from the peak, so
//! that it is fine enough for the sharpest line there and still reaches as far as
//! the bluntest: taking any one tone away leaves a distribution the grid holds.

use super::clusters::Cluster;
use super::modes::{Broad, Entry, Mode, Node, Places, REACH, Setting, gaussian, mean, meetings};
use super::prior::Prior;
use super::scene::Meeting;

/// A place this many nats below the best is left to the broad node.
const DEPTH: f64 = 80.0;
/// Ratio by which the steps of a grid grow.
const GROWTH: f64 = 1.4;

/// A meeting within the prior's range.
#[derive(Debug, Clone, Copy)]
struct Candidate {
    line: usize,
    meeting: Meeting,
    theta: f64,
    half_width: f64,
    /// Log-likelihood won where it is met, against everything else.
    gain: f64,
    /// The same against unlisted tones alone.
    free_gain: f64,
    mean_odds: f64,
}

/// Which lines propose places, and which are too diffuse to say where they are.
struct Roles {
    proposing: Vec<usize>,
    /// Lines to be entered in the broad node one by one.
    broad: Vec<usize>,
    diffuse: Vec<usize>,
    fixed: Vec<usize>,
}

/// A line is diffuse when the prior spreads it over this much of the band (one
/// standard deviation).
const DIFFUSE: f64 = 0.5;

fn roles(cluster: &Cluster, prior: &Prior, setting: &Setting) -> Roles {
    let (low, high) = prior.range();
    let mut roles = Roles {
        proposing: Vec::new(),
        broad: Vec::new(),
        diffuse: Vec::new(),
        fixed: Vec::new(),
    };
    let mut order: Vec<(f64, usize)> = Vec::new();
    for (j, line) in cluster.lines.iter().enumerate() {
        let a = line.a[0].abs();
        if a == 0.0 {
            roles.fixed.push(j);
            continue;
        }
        let spread = match prior {
            Prior::Normal(n) => a * n.sd,
            Prior::Anywhere { .. } => 0.0,
        };
        if spread > DIFFUSE * setting.half_hz {
            roles.diffuse.push(j);
        } else {
            roles.broad.push(j);
        }
        order.push((a * (high - low) / setting.half_hz, j));
    }
    // Likely lines first, as many as there is time for.
    order.sort_by(
        |p, q| match (cluster.lines.get(p.1), cluster.lines.get(q.1)) {
            (Some(p), Some(q)) => q.faintness.better(&p.faintness),
            _ => std::cmp::Ordering::Equal,
        },
    );
    let mut left = setting.effort.meetings as f64;
    for (bands, j) in order {
        let cost = setting.tones.len() as f64 * bands.max(0.01) + 1.0;
        if cost <= left {
            left -= cost;
            roles.proposing.push(j);
        }
    }
    roles
}

/// Places of a one-latent cluster.
pub(super) fn find(cluster: &Cluster, prior: &Prior, setting: &Setting) -> Places {
    let mut candidates: Vec<Candidate> = Vec::new();
    let priors = [*prior];
    let roles = roles(cluster, prior, setting);
    // A tone meets a line on many rungs; its odds are the same on each.
    let mut odds_of_tone = vec![f64::NAN; setting.tones.len()];
    for &j in &roles.proposing {
        let Some(line) = cluster.lines.get(j) else {
            continue;
        };
        odds_of_tone.fill(f64::NAN);
        meetings(line, &priors, setting, &mut |meeting, tone, others| {
            let a = line.a[0];
            let var = tone.var + line.var;
            let odds = || mean(&setting.odds(line, tone, meeting.image));
            let mean_odds = match odds_of_tone.get_mut(meeting.tone) {
                Some(known) if !meeting.image => {
                    if known.is_nan() {
                        *known = odds();
                    }
                    *known
                }
                _ => odds(),
            };
            let peak = 0.5 * mean_odds / (2.0 * std::f64::consts::PI * var).sqrt();
            let background = setting.background.get(meeting.tone).copied().unwrap_or(1.0);
            candidates.push(Candidate {
                line: j,
                meeting,
                theta: (meeting.rung_hz - line.b) / a,
                half_width: REACH * var.sqrt() / a.abs(),
                gain: (peak / others).ln_1p(),
                free_gain: (peak / background).ln_1p(),
                mean_odds,
            });
        });
    }
    candidates.sort_unstable_by(|p, q| p.theta.total_cmp(&q.theta));
    let widest = candidates.iter().map(|c| c.half_width).fold(0.0, f64::max);
    let places = setting.effort.places;
    let mut found = peaks(&candidates, prior, places, |c| c.gain);
    if candidates.iter().any(|c| c.free_gain > c.gain + 0.5) {
        found.extend(peaks(&candidates, prior, places, |c| c.free_gain));
    }
    let mut centres: Vec<(f64, f64)> = found
        .into_iter()
        .map(|theta| settle(theta, &candidates, widest, cluster, prior, setting))
        .collect();
    centres.sort_by(|a, b| a.0.total_cmp(&b.0));
    centres.dedup_by(|b, a| (b.0 - a.0).abs() < 0.5 * a.1.min(b.1));
    let mut modes = Vec::new();
    let mut covered: Vec<(f64, f64)> = Vec::new();
    for (i, &(centre, width)) in centres.iter().enumerate() {
        let left = i
            .checked_sub(1)
            .and_then(|p| centres.get(p))
            .map(|p| 0.5 * (p.0 + centre));
        let right = centres.get(i + 1).map(|n| 0.5 * (n.0 + centre));
        let reach = near(&candidates, widest, centre, 0.0)
            .map(|c| c.half_width)
            .fold(6.0 * width, f64::max)
            .min(12.0 * prior.normal().sd);
        let low = (centre - 1.2 * reach).max(left.unwrap_or(f64::NEG_INFINITY));
        let high = (centre + 1.2 * reach).min(right.unwrap_or(f64::INFINITY));
        covered.push((low, high));
        modes.extend(Mode::variants(
            [[1.0, 0.0], [0.0, 1.0]],
            grid(centre, width, low, high, prior),
            entries(cluster, low, high, setting),
            [centre, 0.0],
            cluster,
            setting,
        ));
    }
    let inside: f64 = covered.iter().map(|&(l, h)| prior.mass(l, h)).sum();
    let mut broad = Broad::new(cluster, setting);
    for &j in roles.broad.iter().chain(&roles.fixed) {
        let Some(line) = cluster.lines.get(j) else {
            continue;
        };
        meetings(line, &priors, setting, &mut |meeting, _, _| {
            let theta = (meeting.rung_hz - line.b) / line.a[0];
            let at = covered.partition_point(|w| w.1 < theta);
            let inside = line.a[0] != 0.0 && covered.get(at).is_some_and(|w| w.0 <= theta);
            if !inside {
                broad.add(cluster, &priors, setting, j, &meeting);
            }
        });
    }
    broad.add_diffuse(cluster, prior, setting, &roles.diffuse);
    Places {
        modes,
        broad: broad.finish(),
        broad_mass: (1.0 - inside).max(0.0),
        latents: 1,
    }
}

/// Every meeting of any line within a window of the latent.
fn entries(cluster: &Cluster, low: f64, high: f64, setting: &Setting) -> Vec<Entry> {
    let mut found = Vec::new();
    let worst = setting.tones.iter().map(|t| t.var).fold(0.0, f64::max);
    for (j, line) in cluster.lines.iter().enumerate() {
        let (p, q) = (line.a[0] * low + line.b, line.a[0] * high + line.b);
        let (p, q) = (p.min(q), p.max(q));
        let reach = REACH * (line.var + worst).sqrt();
        setting.ladders.between(p - reach, q + reach, &mut |m| {
            let Some((tone, _)) = setting.tone(m.tone) else {
                return;
            };
            let own = REACH * (line.var + tone.var).sqrt();
            if m.rung_hz >= p - own && m.rung_hz <= q + own {
                found.extend(setting.entry(cluster, j, &m));
            }
        });
    }
    found
}

/// Candidates whose interval reaches into `theta ± half`.
fn near(
    candidates: &[Candidate],
    widest: f64,
    theta: f64,
    half: f64,
) -> impl Iterator<Item = &Candidate> {
    let start = candidates.partition_point(|c| c.theta < theta - half - widest);
    candidates
        .iter()
        .skip(start)
        .take_while(move |c| c.theta <= theta + half + widest)
        .filter(move |c| (c.theta - theta).abs() <= half + c.half_width)
}

/// Places where the summed gain peaks, best first.
fn peaks(
    candidates: &[Candidate],
    prior: &Prior,
    places: usize,
    gain: impl Fn(&Candidate) -> f64,
) -> Vec<f64> {
    // (position, gain); leaving an interval subtracts.
    let mut events: Vec<(f64, f64)> = Vec::with_capacity(2 * candidates.len());
    for c in candidates {
        let gain = gain(c);
        if gain > 0.02 {
            events.push((c.theta - c.half_width, gain));
            events.push((c.theta + c.half_width, -gain));
        }
    }
    events.sort_unstable_by(|a, b| a.0.total_cmp(&b.0));
    let (low, high) = prior.range();
    let level = prior.density(0.5 * (low + high));
    let ln_prior = |theta: f64| (prior.density(theta) / level).max(1e-300).ln();
    // (θ, score, width)
    let mut found: Vec<(f64, f64, f64)> = Vec::new();
    let mut score = 0.0;
    let mut rising = false;
    let mut since = 0.0;
    for &(at, gain) in &events {
        if gain < 0.0 && rising {
            let theta = 0.5 * (since + at);
            found.push((theta, score + ln_prior(theta), at - since));
            rising = false;
        }
        if gain > 0.0 {
            rising = true;
            since = at;
        }
        score += gain;
    }
    found.sort_unstable_by(|a, b| b.1.total_cmp(&a.1));
    let best = found.first().map_or(0.0, |f| f.1);
    let mut kept: Vec<(f64, f64, f64)> = Vec::new();
    for f in found {
        if kept.len() >= places || f.1 < best - DEPTH {
            break;
        }
        if kept.iter().all(|k| (k.0 - f.0).abs() > 0.5 * (k.2 + f.2)) {
            kept.push(f);
        }
    }
    kept.into_iter().map(|k| k.0).collect()
}

/// Runs down to the weighted least-squares place near `theta`: `(centre, width)`.
fn settle(
    theta: f64,
    candidates: &[Candidate],
    widest: f64,
    cluster: &Cluster,
    prior: &Prior,
    setting: &Setting,
) -> (f64, f64) {
    let prior = prior.normal();
    let mut centre = theta;
    let mut width = prior.sd;
    for _ in 0..4 {
        let (mut precision, mut sum) = (prior.sd.powi(-2), prior.mean * prior.sd.powi(-2));
        for c in near(candidates, widest, centre, 0.0) {
            let (Some(line), Some((tone, others))) =
                (cluster.lines.get(c.line), setting.tone(c.meeting.tone))
            else {
                continue;
            };
            let var = tone.var + line.var;
            let x = 0.5 * c.mean_odds * gaussian(line.a[0] * (c.theta - centre), var) / others;
            let weight = x / (1.0 + x) * line.a[0].powi(2) / var;
            precision += weight;
            sum += weight * c.theta;
        }
        centre = sum / precision;
        width = precision.sqrt().recip();
    }
    (centre, width)
}

/// Cells growing away from `centre`, from `low` to `high`, with the prior's mass.
fn grid(centre: f64, width: f64, low: f64, high: f64, prior: &Prior) -> Vec<Node> {
    let mut edges = Vec::new();
    let mut step = 0.45 * width;
    let mut x = 0.5 * step;
    while x < centre - low && edges.len() < 200 {
        edges.push(centre - x);
        step *= if x > 2.0 * width { GROWTH } else { 1.0 };
        x += step;
    }
    edges.push(low);
    edges.reverse();
    step = 0.45 * width;
    x = 0.5 * step;
    while x < high - centre && edges.len() < 400 {
        edges.push(centre + x);
        step *= if x > 2.0 * width { GROWTH } else { 1.0 };
        x += step;
    }
    edges.push(high);
    edges
        .windows(2)
        .filter_map(|e| match *e {
            [l, h] if h > l => Some(Node {
                theta: [0.5 * (l + h), 0.0],
                ln_mass: prior.mass(l, h).max(1e-300).ln(),
                cell_var: [(h - l).powi(2) / 12.0, 0.0],
            }),
            _ => None,
        })
        .collect()
}
