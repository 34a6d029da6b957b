//! Where in a long recording's averaged spectrum to look closer.

use super::detect::{Found, merge, stand_out};
use super::statistic::Coarse;
use crate::spectrum::Band;
use crate::spectrum::slice::Want;
use crate::spectrum::welch::Averaged;
use std::ops::Range;

/// Bins on either side of what stood out: skirts, and a floor to stand on.
const MARGIN: usize = 8;
/// Complex samples over all bands that a second pass may keep, about 24 MB with
/// their transform.
const KEPT: u64 = 1 << 20;

/// A part of the averaged spectrum that stood out.
#[derive(Debug, Clone)]
pub struct Region {
    /// The band to cut out, wider than the core.
    pub want: Want,
    core: Range<usize>,
}

impl Region {
    /// Drops what was found in the margins: another region's, or cut off there.
    pub fn keep_core(&self, found: &mut Found, band: &Band) {
        // bins of the whole recording per bin of a segment
        let ratio = band.bins.len() as f64 / self.want.bins as f64;
        let (a, b) = (
            (self.core.start as f64 - 2.5) * ratio,
            (self.core.end as f64 + 1.5) * ratio,
        );
        found.lines.retain(|l| l.bin >= a && l.bin < b);
        found.wanderers.retain(|w| w.bin >= a && w.bin < b);
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
            let first = core.start.saturating_sub(MARGIN);
            let end = (core.end + MARGIN).min(bins);
            let count = (end - first).max(16).next_multiple_of(2);
            let first = first.min(bins.saturating_sub(count));
            Region {
                want: Want {
                    channel,
                    first,
                    bins: count.min(bins & !1),
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
