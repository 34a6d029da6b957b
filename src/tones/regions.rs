//! Where in a long recording's averaged spectrum to look closer.

use super::detect::{Found, merge, stand_out};
use super::statistic::Coarse;
use crate::spectrum::Band;
use crate::spectrum::slice::Want;
use crate::spectrum::welch::Averaged;
use std::ops::Range;

/// Bins on either side of what stood out, for skirts.
const MARGIN: usize = 8;
/// Cells of the whole recording on either side, for a floor to stand on: several of
/// the windows in which it is estimated.
const FLOOR_CELLS: u64 = 768;
/// Complex samples over all bands that a second pass may keep, about 24 MB with
/// their transform.
const KEPT: u64 = 1 << 20;

/// A part of the averaged spectrum that stood out.
#[derive(Debug, Clone)]
pub struct Region {
    /// The band to cut out, wider than the core.
    pub want: Want,
    core: Range<usize>,
    /// Noise power per sample in each bin of the band, the least that any resolution
    /// sees.
    floor: Vec<f32>,
}

impl Region {
    /// The noise per cell of the whole recording, for each bin of the band: what is
    /// wide beside the band would pass for noise in it.
    pub fn floor(&self, samples: usize) -> Vec<f32> {
        self.floor.iter().map(|f| f * samples as f32).collect()
    }

    /// The core's cells in `band`.
    pub fn cells(&self, band: &Band) -> Range<usize> {
        let ratio = band.bins.len() / self.want.bins.max(1);
        let cells = |bin: usize| bin.saturating_sub(self.want.first) * ratio;
        cells(self.core.start)..cells(self.core.end).min(band.bins.len())
    }

    /// Drops what was found in the margins: another region's, or cut off there.
    pub fn keep_core(&self, found: &mut Found, band: &Band) {
        // bins of the whole recording per bin of a segment
        let ratio = band.bins.len() as f64 / self.want.bins as f64;
        let (a, b) = (
            (self.core.start as f64 - 2.5) * ratio,
            (self.core.end as f64 + 1.5) * ratio,
        );
        found.tones.retain(|t| t.bin >= a && t.bin < b);
    }
}

/// Regions of one channel worth a second pass, by rising frequency.
pub fn regions(averaged: &Averaged, channel: usize, false_alarms: f64, frames: u64) -> Vec<Region> {
    let power = &averaged.power[channel];
    let shape = averaged.shape();
    let views: Vec<Coarse> = std::iter::once(Coarse::unsmoothed(power, shape, true))
        .chain(Coarse::ladder(power, shape, true))
        .collect();
    let tests: usize = views.iter().map(|v| v.power.len()).sum();
    // This only chooses where to look; what is found there is tested again. So
    // the threshold may be lower than the final one.
    let pfa = (100.0 * false_alarms / tests as f64).min(0.01);
    let mut cores: Vec<Range<usize>> = Vec::new();
    for view in &views {
        let known = cores.clone();
        for patch in stand_out(view, pfa) {
            let by_finer: f64 = known
                .iter()
                .filter(|c| c.start < patch.end + 2 && c.end + 2 > patch.start)
                .map(|c| views[0].excess(&(c.start.saturating_sub(2)..c.end + 2)))
                .sum();
            if by_finer < 0.7 * view.excess(&patch) {
                cores.push(patch);
            }
        }
    }
    // Narrow ones first if there is too much to keep.
    let per_bin = frames.div_ceil(averaged.segment as u64) + 2;
    let bins = averaged.segment / 2 + 1;
    let mut by_width: Vec<Region> = merge(cores, 3)
        .into_iter()
        .map(|core| {
            // The floor must not be the tone's own foot: as much again on either side.
            let margin = MARGIN
                .max(core.len() * 3 / 2)
                .max(FLOOR_CELLS.div_ceil(per_bin) as usize);
            let first = core.start.saturating_sub(margin);
            let end = (core.end + margin).min(bins);
            let count = (end - first).max(16).next_multiple_of(2);
            let first = first.min(bins.saturating_sub(count));
            let count = count.min(bins & !1);
            Region {
                floor: (first..first + count)
                    .map(|bin| {
                        views
                            .iter()
                            .filter_map(|v| v.floor.level.get(bin / v.stride))
                            .fold(f32::INFINITY, |low, &f| low.min(f))
                    })
                    .collect(),
                want: Want {
                    channel,
                    first,
                    bins: count,
                },
                core,
            }
        })
        .collect();
    by_width.sort_by_key(|r| (r.want.bins, r.want.first));
    let mut kept = 0;
    by_width.retain(|r| {
        kept += r.want.bins as u64 * per_bin;
        kept <= KEPT
    });
    by_width.sort_by_key(|r| r.want.first);
    by_width
}
