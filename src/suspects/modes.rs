//! Where a cluster's latents could be: local grids around every place where its
//! lines meet tones, and the rest of the prior as one broad node.
//!
//! The likelihood of a latent has peaks only where some line meets some tone.
//! Each such meeting gives an interval `θ = (rung − b)/a ± reach`; the sum of
//! their gains over θ, swept from left to right, shows where several agree. The
//! best places get a grid whose steps grow geometrically away from the peak, so
//! that it is fine enough for the sharpest line there and still reaches as far as
//! the bluntest: taking any one tone away leaves a distribution the grid holds.
//! All that is not in a grid is the broad node: there each tone is met as often
//! as the prior predicts.

use super::clusters::{Cluster, ClusterLine, Normal};
use super::scene::{Ladders, Measured, Meeting};
use super::strength::{PerClass, Strengths};
use statrs::function::erf::erfc;

/// A line meeting a tone.
#[derive(Debug, Clone)]
pub(super) struct Entry {
    /// Index into the cluster's lines.
    pub line: usize,
    pub member: usize,
    pub tone: usize,
    pub rung_hz: f64,
    pub a: [f64; 2],
    /// `rung − b`: the line is on the tone where `a·θ` is this.
    pub target: f64,
    pub var: f64,
    /// Odds of showing at this strength, per class.
    pub odds: PerClass,
}

/// A point of a grid with the prior's mass around it.
#[derive(Debug, Clone, Copy)]
pub(super) struct Node {
    pub theta: [f64; 2],
    pub ln_mass: f64,
    /// Variance of a uniform cell along each axis of the mode, in θ².
    pub cell_var: [f64; 2],
}

/// A local grid and the meetings in its reach.
#[derive(Debug, Clone)]
pub(super) struct Mode {
    /// Unit vectors along which the grid lies.
    pub axes: [[f64; 2]; 2],
    pub nodes: Vec<Node>,
    /// Sorted by member, then tone.
    pub entries: Vec<Entry>,
    /// Groups of entries of one line meeting different tones.
    pub rivals: Vec<Vec<usize>>,
}

/// A line meeting a tone somewhere in the rest of the prior.
#[derive(Debug, Clone)]
pub(super) struct BroadEntry {
    pub line: usize,
    pub member: usize,
    pub tone: usize,
    /// Density (per Hz) at which the prior puts the line on the tone, over rungs.
    pub density: f64,
    /// `(rung, density)` of the most probable rung.
    pub best: (f64, f64),
    /// Part of `density` that is folded.
    pub folded: f64,
    pub odds: PerClass,
}

/// The latents' possible places.
#[derive(Debug, Clone, Default)]
pub(super) struct Places {
    pub modes: Vec<Mode>,
    pub broad: Vec<BroadEntry>,
    /// Prior mass outside the modes.
    pub broad_mass: f64,
}

/// Standard deviations of a meeting within which it counts as one.
pub(super) const REACH: f64 = 4.0;
/// Standard deviations of the prior that are searched.
pub(super) const PRIOR_REACH: f64 = 4.5;
/// Image frequencies of an interpolating stage are this much weaker, dB.
const IMAGE_DB: f64 = 20.0;
/// Grids kept per cluster.
const MODES: usize = 40;
/// A place this many nats below the best is left to the broad node.
const DEPTH: f64 = 25.0;
/// Ratio by which the steps of a grid grow.
const GROWTH: f64 = 1.4;

/// What proposals need beside the cluster.
pub(super) struct Setting<'a> {
    pub tones: &'a [Measured],
    pub ladders: &'a Ladders,
    pub strengths: &'a Strengths,
    /// Density of everything else at each tone, per Hz and dB.
    pub others: &'a [f64],
    /// Half the file's rate, Hz.
    pub half_hz: f64,
}

impl Setting<'_> {
    pub fn tone(&self, i: usize) -> Option<(&Measured, f64)> {
        Some((self.tones.get(i)?, *self.others.get(i)?))
    }

    pub fn odds(&self, line: &ClusterLine, tone: &Measured, image: bool) -> PerClass {
        let faintness = if image {
            line.faintness.fainter(IMAGE_DB)
        } else {
            line.faintness
        };
        self.strengths.odds(&faintness, tone.snr_db)
    }
}

pub(super) fn mean(odds: &PerClass) -> f64 {
    odds.iter().sum::<f64>() / odds.len() as f64
}

pub(super) fn gaussian(x: f64, var: f64) -> f64 {
    (-0.5 * x * x / var).exp() / (2.0 * std::f64::consts::PI * var).sqrt()
}

/// A meeting within the prior's range.
#[derive(Debug, Clone, Copy)]
pub(super) struct Candidate {
    pub line: usize,
    pub meeting: Meeting,
    pub theta: f64,
    pub half_width: f64,
    pub gain: f64,
    pub mean_odds: f64,
}

/// Every meeting of a line with a tone that the prior allows.
pub(super) fn meetings(
    line: &ClusterLine,
    prior: &[Normal],
    setting: &Setting,
    found: &mut dyn FnMut(Meeting, &Measured, f64),
) {
    let spread: f64 = line
        .a
        .iter()
        .zip(prior)
        .map(|(a, p)| (a * p.sd).powi(2))
        .sum::<f64>()
        + line.var;
    let centre: f64 = line.b
        + line
            .a
            .iter()
            .zip(prior)
            .map(|(a, p)| a * p.mean)
            .sum::<f64>();
    // Wide enough for any tone; narrowed for each.
    let worst = setting.tones.iter().map(|t| t.var).fold(0.0, f64::max);
    let reach = PRIOR_REACH * spread.sqrt() + REACH * worst.sqrt();
    setting
        .ladders
        .between(centre - reach, centre + reach, &mut |m| {
            if let Some((tone, others)) = setting.tone(m.tone) {
                let own = PRIOR_REACH * spread.sqrt() + REACH * tone.var.sqrt();
                if (m.rung_hz - centre).abs() <= own {
                    found(m, tone, others);
                }
            }
        });
}

fn below(x: f64) -> f64 {
    0.5 * erfc(-x / std::f64::consts::SQRT_2)
}

/// The prior's mass between two points, in the tail without cancellation.
pub(super) fn prior_mass(prior: &Normal, low: f64, high: f64) -> f64 {
    let (l, h) = (
        (low - prior.mean) / prior.sd,
        (high - prior.mean) / prior.sd,
    );
    if l > 0.0 {
        below(-l) - below(-h)
    } else {
        below(h) - below(l)
    }
}

/// Places of a one-latent cluster.
pub(super) fn find(cluster: &Cluster, prior: &Normal, setting: &Setting) -> Places {
    let mut candidates: Vec<Candidate> = Vec::new();
    let mut fixed: Vec<(usize, Meeting)> = Vec::new();
    let priors = [*prior];
    for (j, line) in cluster.lines.iter().enumerate() {
        meetings(line, &priors, setting, &mut |meeting, tone, others| {
            let a = line.a[0];
            if a == 0.0 {
                fixed.push((j, meeting));
                return;
            }
            let var = tone.var + line.var;
            let mean_odds = mean(&setting.odds(line, tone, meeting.image));
            let peak = 1.0 / (2.0 * std::f64::consts::PI * var).sqrt();
            candidates.push(Candidate {
                line: j,
                meeting,
                theta: (meeting.rung_hz - line.b) / a,
                half_width: REACH * var.sqrt() / a.abs(),
                gain: (0.5 * mean_odds * peak / others).ln_1p(),
                mean_odds,
            });
        });
    }
    candidates.sort_by(|p, q| p.theta.total_cmp(&q.theta));
    let centres = peaks(&candidates, prior);
    let mut modes = Vec::new();
    let mut covered: Vec<(f64, f64)> = Vec::new();
    let widest = candidates.iter().map(|c| c.half_width).fold(0.0, f64::max);
    let mut sorted: Vec<(f64, f64)> = centres
        .iter()
        .map(|&(theta, _)| settle(theta, &candidates, widest, cluster, prior, setting))
        .collect();
    sorted.sort_by(|a, b| a.0.total_cmp(&b.0));
    sorted.dedup_by(|b, a| (b.0 - a.0).abs() < 0.5 * a.1.min(b.1));
    for (i, &(centre, width)) in sorted.iter().enumerate() {
        let left = i
            .checked_sub(1)
            .and_then(|p| sorted.get(p))
            .map(|p| 0.5 * (p.0 + centre));
        let right = sorted.get(i + 1).map(|n| 0.5 * (n.0 + centre));
        let reach = near(&candidates, widest, centre, 0.0)
            .map(|c| c.half_width)
            .fold(6.0 * width, f64::max)
            .min(12.0 * prior.sd);
        let low = (centre - 1.2 * reach).max(left.unwrap_or(f64::NEG_INFINITY));
        let high = (centre + 1.2 * reach).min(right.unwrap_or(f64::INFINITY));
        let nodes = grid(centre, width, low, high, prior);
        let mut entries: Vec<Entry> = Vec::new();
        let mut enter = |j: usize, meeting: Meeting| {
            let (Some(line), Some((tone, _))) = (cluster.lines.get(j), setting.tone(meeting.tone))
            else {
                return;
            };
            entries.push(Entry {
                line: j,
                member: line.member,
                tone: meeting.tone,
                rung_hz: meeting.rung_hz,
                a: line.a,
                target: meeting.rung_hz - line.b,
                var: tone.var + line.var,
                odds: setting.odds(line, tone, meeting.image),
            });
        };
        let middle = 0.5 * (low + high);
        for c in near(&candidates, widest, middle, 0.5 * (high - low)) {
            enter(c.line, c.meeting);
        }
        for &(j, meeting) in &fixed {
            enter(j, meeting);
        }
        covered.push((low, high));
        modes.push(Mode::new([[1.0, 0.0], [0.0, 1.0]], nodes, entries));
    }
    let inside: f64 = covered.iter().map(|&(l, h)| prior_mass(prior, l, h)).sum();
    let mut broad = Broad::default();
    let mut at = 0;
    for c in &candidates {
        while covered.get(at).is_some_and(|w| w.1 < c.theta) {
            at += 1;
        }
        if covered.get(at).is_some_and(|w| w.0 <= c.theta) {
            continue;
        }
        broad.add(cluster, &priors, setting, c.line, &c.meeting);
    }
    for (j, meeting) in &fixed {
        broad.add(cluster, &priors, setting, *j, meeting);
    }
    Places {
        modes,
        broad: broad.finish(),
        broad_mass: (1.0 - inside).max(0.0),
    }
}

/// Collects what the prior predicts over rungs.
#[derive(Debug, Default)]
pub(super) struct Broad(std::collections::BTreeMap<(usize, usize), BroadEntry>);

impl Broad {
    pub fn add(
        &mut self,
        cluster: &Cluster,
        prior: &[Normal],
        setting: &Setting,
        j: usize,
        meeting: &Meeting,
    ) {
        let (Some(line), Some((tone, _))) = (cluster.lines.get(j), setting.tone(meeting.tone))
        else {
            return;
        };
        let mut var = tone.var + line.var;
        let mut centre = line.b;
        for (a, p) in line.a.iter().zip(prior) {
            var += (a * p.sd).powi(2);
            centre += a * p.mean;
        }
        let density = gaussian(meeting.rung_hz - centre, var);
        let entry = self
            .0
            .entry((j, meeting.tone))
            .or_insert_with(|| BroadEntry {
                line: j,
                member: line.member,
                tone: meeting.tone,
                density: 0.0,
                best: (meeting.rung_hz, 0.0),
                folded: 0.0,
                odds: setting.odds(line, tone, meeting.image),
            });
        entry.density += density;
        if meeting.rung_hz > setting.half_hz {
            entry.folded += density;
        }
        if density > entry.best.1 {
            entry.best = (meeting.rung_hz, density);
        }
    }

    pub fn finish(self) -> Vec<BroadEntry> {
        let mut all: Vec<BroadEntry> = self.0.into_values().collect();
        all.sort_by_key(|e| (e.member, e.tone));
        all
    }
}

impl Mode {
    pub fn new(axes: [[f64; 2]; 2], nodes: Vec<Node>, mut entries: Vec<Entry>) -> Mode {
        entries.sort_by_key(|e| (e.member, e.tone, e.line));
        let mut by_line: std::collections::BTreeMap<usize, Vec<usize>> = Default::default();
        for (i, e) in entries.iter().enumerate() {
            by_line.entry(e.line).or_default().push(i);
        }
        let rivals = by_line.into_values().filter(|g| g.len() > 1).collect();
        Mode {
            axes,
            nodes,
            entries,
            rivals,
        }
    }
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

/// Places where the summed gain peaks: `(θ, score)`, best first.
fn peaks(candidates: &[Candidate], prior: &Normal) -> Vec<(f64, f64)> {
    // (position, gain); leaving an interval subtracts.
    let mut events: Vec<(f64, f64, f64)> = Vec::with_capacity(2 * candidates.len());
    for c in candidates {
        events.push((c.theta - c.half_width, c.gain, c.theta));
        events.push((c.theta + c.half_width, -c.gain, c.theta));
    }
    events.sort_by(|a, b| a.0.total_cmp(&b.0));
    let ln_prior = |theta: f64| -0.5 * ((theta - prior.mean) / prior.sd).powi(2);
    let mut found: Vec<(f64, f64, f64)> = Vec::new();
    let mut score = 0.0;
    let mut rising = false;
    let mut since = 0.0;
    for &(at, gain, _) in &events {
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
    found.sort_by(|a, b| b.1.total_cmp(&a.1));
    let best = found.first().map_or(0.0, |f| f.1);
    let mut kept: Vec<(f64, f64, f64)> = Vec::new();
    for f in found {
        if kept.len() >= MODES || f.1 < best - DEPTH {
            break;
        }
        if kept.iter().all(|k| (k.0 - f.0).abs() > 0.5 * (k.2 + f.2)) {
            kept.push(f);
        }
    }
    kept.into_iter().map(|k| (k.0, k.1)).collect()
}

/// Runs down to the weighted least-squares place near `theta`: `(centre, width)`.
fn settle(
    theta: f64,
    candidates: &[Candidate],
    widest: f64,
    cluster: &Cluster,
    prior: &Normal,
    setting: &Setting,
) -> (f64, f64) {
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
fn grid(centre: f64, width: f64, low: f64, high: f64, prior: &Normal) -> Vec<Node> {
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
                ln_mass: prior_mass(prior, l, h).max(1e-300).ln(),
                cell_var: [(h - l).powi(2) / 12.0, 0.0],
            }),
            _ => None,
        })
        .collect()
}
