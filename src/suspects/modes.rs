//! Where a cluster's latents could be: local grids around every place where its
//! lines meet tones, and the rest of the prior as one broad node.
//!
//! The places are found in [`super::places`] (one latent) and [`super::pairs`]
//! (two). All that is not in a grid is the broad node: there each tone is met as
//! often as the prior predicts.

use super::clusters::{Cluster, ClusterLine};
use super::prior::{PRIOR_REACH, Prior};
use super::scene::{Ladders, Measured, Meeting};
use super::strength::{self, PerClass, Strengths};
use super::wander;

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
    /// Odds of showing at this strength and wander, per class.
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
    /// How many latents are free.
    pub latents: usize,
}

/// Standard deviations of a meeting within which it counts as one.
pub(super) const REACH: f64 = 4.0;
/// Image frequencies of an interpolating stage are this much weaker, dB.
const IMAGE_DB: f64 = 20.0;

/// What proposals need beside the cluster.
pub(super) struct Setting<'a> {
    pub tones: &'a [Measured],
    pub ladders: &'a Ladders,
    pub strengths: &'a Strengths,
    /// Density of everything else at each tone, per Hz and dB.
    pub others: &'a [f64],
    /// Density of unlisted tones alone.
    pub background: &'a [f64],
    /// The least it can become.
    pub least: &'a [f64],
    pub mean_ratios: &'a wander::MeanRatios,
    /// Meetings looked at and places kept per cluster.
    pub effort: Effort,
    /// Half the file's rate, Hz.
    pub half_hz: f64,
}

/// How hard to look: less per cluster where there are many, so that the whole stays
/// within bounds.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Effort {
    pub meetings: usize,
    pub places: usize,
}

impl Effort {
    pub fn new(clusters: usize, tones: usize) -> Effort {
        let share = 1 + clusters / 16;
        Effort {
            // At least a few for each tone.
            meetings: (200_000 / (share * share)).max(3 * tones),
            places: (40 / share).max(4),
        }
    }
}

impl Setting<'_> {
    pub fn tone(&self, i: usize) -> Option<(&Measured, f64)> {
        Some((self.tones.get(i)?, *self.others.get(i)?))
    }

    pub fn odds(&self, line: &ClusterLine, tone: &Measured, image: bool) -> PerClass {
        let odds = if image {
            let fainter = line.faintness.fainter(IMAGE_DB);
            self.strengths.odds(&fainter, tone.snr_db)
        } else {
            self.strengths.odds(&line.faintness, tone.snr_db)
        };
        match strength::bearable(tone.level_dbfs, line.gain) {
            1.0 => odds,
            part => odds.map(|o| part * o),
        }
    }

    /// The entry of a line at a meeting.
    pub fn entry(&self, cluster: &Cluster, j: usize, meeting: &Meeting) -> Option<Entry> {
        let (line, (tone, _)) = (cluster.lines.get(j)?, self.tone(meeting.tone)?);
        Some(Entry {
            line: j,
            member: line.member,
            tone: meeting.tone,
            rung_hz: meeting.rung_hz,
            a: line.a,
            target: meeting.rung_hz - line.b,
            var: tone.var + line.var,
            odds: self.odds(line, tone, meeting.image),
        })
    }
}

pub(super) fn mean(odds: &PerClass) -> f64 {
    odds.iter().sum::<f64>() / odds.len() as f64
}

pub(super) fn gaussian(x: f64, var: f64) -> f64 {
    (-0.5 * x * x / var).exp() / (2.0 * std::f64::consts::PI * var).sqrt()
}

/// Every meeting of a line with a tone that the prior allows.
pub(super) fn meetings(
    line: &ClusterLine,
    prior: &[Prior],
    setting: &Setting,
    found: &mut dyn FnMut(Meeting, &Measured, f64),
) {
    let (mut low, mut high) = (line.b, line.b);
    let mut spread = line.var;
    for (a, p) in line.a.iter().zip(prior) {
        match p {
            Prior::Normal(n) => {
                low += a * n.mean;
                high += a * n.mean;
                spread += (a * n.sd).powi(2);
            }
            Prior::Anywhere { .. } => {
                let (l, h) = p.range();
                low += (a * l).min(a * h);
                high += (a * l).max(a * h);
            }
        }
    }
    // Wide enough for any tone; narrowed for each.
    let worst = setting.tones.iter().map(|t| t.var).fold(0.0, f64::max);
    let own = PRIOR_REACH * spread.sqrt();
    let reach = own + REACH * worst.sqrt();
    setting
        .ladders
        .between(low - reach, high + reach, &mut |m| {
            if let Some((tone, others)) = setting.tone(m.tone) {
                let own = own + REACH * tone.var.sqrt();
                if m.rung_hz >= low - own && m.rung_hz <= high + own {
                    found(m, tone, others);
                }
            }
        });
}

/// Collects what the prior predicts over rungs.
#[derive(Debug)]
pub(super) struct Broad {
    tones: usize,
    /// `1 +` index into `entries`, by line and tone.
    slots: Vec<u32>,
    entries: Vec<BroadEntry>,
    /// Least density of everything else at each tone.
    least: Vec<f64>,
}

/// Odds below which a meeting is not worth an entry in the broad node.
const NEGLIGIBLE: f64 = 1e-5;

impl Broad {
    pub fn new(cluster: &Cluster, setting: &Setting) -> Broad {
        let tones = setting.tones.len();
        Broad {
            tones,
            slots: vec![0; tones * cluster.lines.len()],
            entries: Vec::new(),
            least: setting.least.to_vec(),
        }
    }

    pub fn add(
        &mut self,
        cluster: &Cluster,
        prior: &[Prior],
        setting: &Setting,
        j: usize,
        meeting: &Meeting,
    ) {
        let (Some(line), Some((tone, _))) = (cluster.lines.get(j), setting.tone(meeting.tone))
        else {
            return;
        };
        let var = tone.var + line.var;
        let density = match prior {
            [one] => one.density_of_line(line.a[0], line.b, var, meeting.rung_hz),
            _ => {
                let (mut var, mut centre) = (var, line.b);
                for (a, p) in line.a.iter().zip(prior.iter().map(Prior::normal)) {
                    var += (a * p.sd).powi(2);
                    centre += a * p.mean;
                }
                gaussian(meeting.rung_hz - centre, var)
            }
        };
        let Some(slot) = self.slots.get_mut(j * self.tones + meeting.tone) else {
            return;
        };
        if *slot == 0 {
            let centre = |k: usize| prior.get(k).map_or(0.0, |p| p.normal().mean);
            let scale = [line.a[0] * centre(0), line.a[1] * centre(1)];
            let ratio = setting.mean_ratios.get(tone, scale, cluster.quartz);
            self.entries.push(BroadEntry {
                line: j,
                member: line.member,
                tone: meeting.tone,
                density: 0.0,
                best: (meeting.rung_hz, 0.0),
                folded: 0.0,
                odds: setting.odds(line, tone, meeting.image).map(|o| o * ratio),
            });
            *slot = self.entries.len() as u32;
        }
        let Some(entry) = self.entries.get_mut(*slot as usize - 1) else {
            return;
        };
        entry.density += density;
        if meeting.rung_hz > setting.half_hz {
            entry.folded += density;
        }
        if density > entry.best.1 {
            entry.best = (meeting.rung_hz, density);
        }
    }

    /// Lines that the prior spreads over more than the band land on any tone alike:
    /// one entry per member and tone stands for all of them, under the name of the
    /// likeliest.
    pub fn add_diffuse(
        &mut self,
        cluster: &Cluster,
        prior: &Prior,
        setting: &Setting,
        lines: &[usize],
    ) {
        for member in 0..cluster.members.len() {
            let own: Vec<(usize, &ClusterLine)> = lines
                .iter()
                .filter_map(|&j| Some((j, cluster.lines.get(j)?)))
                .filter(|(_, l)| l.member == member)
                .collect();
            let Some(&(first, line)) = own
                .iter()
                .max_by(|a, b| a.1.faintness.better(&b.1.faintness))
            else {
                continue;
            };
            let centre = prior.normal().mean;
            let nominal = line.a[0] * centre + line.b;
            let mut table: std::collections::BTreeMap<i64, PerClass> = Default::default();
            for (tone, t) in setting.tones.iter().enumerate() {
                let odds = table
                    .entry((t.snr_db / 2.0).round() as i64)
                    .or_insert_with(|| {
                        let mut sum = [0.0; super::strength::CLASSES];
                        for (_, l) in &own {
                            let odds = setting.strengths.odds(&l.faintness, t.snr_db);
                            for (s, o) in sum.iter_mut().zip(odds) {
                                *s += o;
                            }
                        }
                        sum
                    });
                let scale = [line.a[0] * centre, 0.0];
                let ratio = setting.mean_ratios.get(t, scale, cluster.quartz)
                    * strength::bearable(t.level_dbfs, line.gain);
                // The rung nearest to where the line is expected.
                let best = (2.0 * setting.half_hz * (nominal / (2.0 * setting.half_hz)).floor()
                    + t.nu)
                    .max(t.nu);
                self.entries.push(BroadEntry {
                    line: first,
                    member,
                    tone,
                    density: 1.0 / setting.half_hz,
                    best: (best, 1.0 / setting.half_hz),
                    folded: if best > setting.half_hz {
                        1.0 / setting.half_hz
                    } else {
                        0.0
                    },
                    odds: odds.map(|o| o * ratio),
                });
            }
        }
    }

    pub fn finish(self) -> Vec<BroadEntry> {
        let mut all = self.entries;
        all.retain(|e| {
            let others = self.least.get(e.tone).copied().unwrap_or(1.0);
            e.density * mean(&e.odds) > NEGLIGIBLE * others
        });
        all.sort_by_key(|e| (e.member, e.tone));
        all
    }
}

impl Mode {
    fn new(axes: [[f64; 2]; 2], nodes: Vec<Node>, entries: Vec<Entry>) -> Mode {
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

    /// The modes at one place: one for each way the latents could wander that
    /// makes a difference. `centre` is where the entries are weighed.
    pub fn variants(
        axes: [[f64; 2]; 2],
        nodes: Vec<Node>,
        mut entries: Vec<Entry>,
        centre: [f64; 2],
        cluster: &Cluster,
        setting: &Setting,
    ) -> Vec<Mode> {
        entries.sort_by_key(|e| (e.member, e.tone, e.line));
        let weights: Vec<f64> = entries
            .iter()
            .map(|e| {
                let off = e.a[0] * centre[0] + e.a[1] * centre[1] - e.target;
                let others = setting.background.get(e.tone).copied().unwrap_or(1.0);
                let x = 0.5 * mean(&e.odds) * gaussian(off, 2.0 * e.var) / others;
                x / (1.0 + x)
            })
            .collect();
        let scales: Vec<(&Measured, [f64; 2])> = entries
            .iter()
            .filter_map(|e| {
                let (tone, _) = setting.tone(e.tone)?;
                Some((tone, [e.a[0] * centre[0], e.a[1] * centre[1]]))
            })
            .collect();
        let two = cluster.latents.len() > 1;
        wander::variants(&scales, &weights, cluster.quartz, two)
            .into_iter()
            .map(|v| {
                let nodes = nodes
                    .iter()
                    .map(|n| Node {
                        ln_mass: n.ln_mass + v.ln_prior,
                        ..*n
                    })
                    .collect();
                let entries = entries
                    .iter()
                    .zip(&v.ratios)
                    .map(|(e, r)| Entry {
                        odds: e.odds.map(|o| o * r),
                        ..e.clone()
                    })
                    .collect();
                Mode::new(axes, nodes, entries)
            })
            .collect()
    }
}
