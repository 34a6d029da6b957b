//! Where tones that go on and off are looked for, and what their switching leaves
//! elsewhere.

use super::cycle::{Demand, OF_LINES, cycle};
use super::statistic::Fine;
use super::track::Work;
use super::wander::{Patch, Wanderer};
use crate::spectrum::Band;
use crate::spectrum::fft::Complex64;

/// Lines that are looked at as tones that go on and off, the strongest.
const MOST_CYCLES: usize = 60;
/// Cells to either side that are cut out for one at most.
pub const WIDEST_CYCLE: usize = 4000;
/// The first side line of a switched tone has at least this share of its power.
const LEAST_SIDE: f32 = 0.003;

/// Tones that go on and off: a strong peak among weaker ones may be one of them with
/// the lines of its switching. The nearest of those is one switching rate away; four
/// to a side hold most of the rest.
pub fn cycles(
    band: &Band,
    fine: &Fine,
    peaks: &[usize],
    threshold: f64,
    work: &mut Work,
) -> Vec<Wanderer> {
    let mut found: Vec<Wanderer> = Vec::new();
    // strongest first, as they come
    for &i in peaks.iter().take(MOST_CYCLES) {
        let own = fine.hann[i];
        let nearest = peaks
            .iter()
            .filter(|&&k| k.abs_diff(i) > 2 && fine.hann[k] > LEAST_SIDE * own)
            .map(|&k| k.abs_diff(i))
            .min();
        let Some(nearest) = nearest else { continue };
        // The wider the cut the sharper the switching shows, if nothing else is there.
        for reach in [16 * nearest, 8 * nearest, 5 * nearest] {
            if i < reach || i + reach >= band.bins.len() || reach > WIDEST_CYCLE {
                continue;
            }
            let cells = i - reach..i + reach + 1;
            let inside: Vec<usize> = peaks
                .iter()
                .copied()
                .filter(|k| cells.contains(k))
                .collect();
            let taken = found.iter().any(|w| {
                w.cells.start < cells.end + band.first_bin
                    && cells.start + band.first_bin < w.cells.end
            });
            if taken || inside.len() < 3 || inside.iter().any(|&k| fine.hann[k] > own) {
                continue;
            }
            let noise = f64::from(fine.hann_floor.level[i]);
            let judged = judge_cycle(band, cells, noise, OF_LINES, work)
                .filter(|t| t.strength.powi(2) * t.duty > threshold * noise);
            if let Some(tone) = judged {
                found.push(tone);
                break;
            }
        }
    }
    found
}

/// Judges the cells `core` of `band` as one tone that goes on and off.
pub fn judge_cycle(
    band: &Band,
    core: std::ops::Range<usize>,
    noise: f64,
    demand: Demand,
    work: &mut Work,
) -> Option<Wanderer> {
    let pad = (core.len() / 8).max(6);
    let cells = core.start.saturating_sub(pad)..(core.end + pad).min(band.bins.len());
    let patch = Patch::cut(band, cells, noise);
    // The very ends ring, but a last stretch may be short.
    let inner = 1;
    let z = patch.z.get(inner..patch.z.len() - inner)?;
    let found = cycle(z, patch.noise, demand, work)?;
    let (first, last) = (found.on.first()?.start, found.on.last()?.end);
    let n = patch.z.len() as f64;
    // On at the spoilt ends is on from the start, or to the end.
    let from = if first == 0 {
        0.0
    } else {
        (first + inner) as f64 / n
    };
    let to = if last == z.len() {
        1.0
    } else {
        (last + inner) as f64 / n
    };
    let samples_share = band.samples as f64 / band.grid as f64;
    let width = patch.width as f64;
    Some(Wanderer {
        bin: patch.first as f64 + found.cycles.rem_euclid(1.0) * width,
        bin_sd: found.cycles_sd * width,
        wander: 0.0,
        // a steady tone of |c| has a power of |X|² = (|c|·samples)² over the grid's
        // share that holds samples
        strength: (found.power * samples_share).sqrt(),
        noise,
        present: (from, to),
        duty: found.duty(),
        on: found
            .on
            .iter()
            .map(|r| ((r.start + inner) as f64 / n, (r.end + inner) as f64 / n))
            .collect(),
        strays: 0.0,
        cells: band.first_bin + core.start..band.first_bin + core.end,
    })
}

/// Margin on the strength of a switched tone's side lines.
const SIDE_MARGIN: f64 = 1.5;

impl Wanderer {
    /// The strength that a tone's going on and off may leave at `bin`; `cells` is
    /// resolution cells in a bin. 0 for one that does not.
    ///
    /// A stretch on from a to b leaves ∫exp(−2πi·d·t)dt at d cells; stretches add up as
    /// they are where the tone keeps its phase, and as their squares where it starts
    /// anew.
    pub fn switching_at(&self, bin: f64, cells: f64) -> f64 {
        let d = (bin - self.bin) * cells;
        if self.on.is_empty() || d.abs() < 1.0 {
            return 0.0;
        }
        let sum: Complex64 = self
            .on
            .iter()
            .map(|&(a, b)| {
                let turn =
                    |t: f64| Complex64::from_polar(1.0, -std::f64::consts::TAU * (d * t).fract());
                turn(b) - turn(a)
            })
            .sum();
        let each = 2.0 * (self.on.len() as f64).sqrt();
        SIDE_MARGIN * self.strength * sum.norm().max(each) / (std::f64::consts::TAU * d.abs())
    }
}
