//! Where in a long recording's averaged spectrum to look closer.

use super::detect::{Found, stand_out};
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
    /// Channels in which to look closer.
    pub channels: Vec<usize>,
    /// It stood out only in all channels together.
    pub together: bool,
    first: usize,
    bins: usize,
    core: Range<usize>,
    /// Per channel, noise power per sample in each bin of the band, the least that any
    /// resolution sees.
    floors: Vec<Vec<f32>>,
}

impl Region {
    /// The bands to cut out, one per channel, wider than the core.
    pub fn wants(&self) -> impl Iterator<Item = Want> + '_ {
        self.channels.iter().map(|&channel| Want {
            channel,
            first: self.first,
            bins: self.bins,
        })
    }

    /// The noise per cell of the whole recording, for each bin of the band: what is
    /// wide beside the band would pass for noise in it.
    pub fn floor(&self, channel: usize, samples: usize) -> Vec<f32> {
        let at = self.channels.iter().position(|&c| c == channel);
        let floor = at.and_then(|i| self.floors.get(i));
        floor.map_or_else(Vec::new, |f| f.iter().map(|f| f * samples as f32).collect())
    }

    /// Share of all bins.
    pub fn share(&self, segment: usize) -> f64 {
        self.bins as f64 / (segment / 2).max(1) as f64
    }

    /// The core's cells in `band`.
    pub fn cells(&self, band: &Band) -> Range<usize> {
        let ratio = band.bins.len() / self.bins.max(1);
        let cells = |bin: usize| bin.saturating_sub(self.first) * ratio;
        cells(self.core.start)..cells(self.core.end).min(band.bins.len())
    }

    /// Drops what was found in the margins: another region's, or cut off there.
    pub fn keep_core(&self, found: &mut Found) {
        // bins of the whole recording per bin of a segment
        let ratio = found.rest.bins.len() as f64 / self.bins as f64;
        let (a, b) = (
            (self.core.start as f64 - 2.5) * ratio,
            (self.core.end as f64 + 1.5) * ratio,
        );
        found.tones.retain(|t| t.bin >= a && t.bin < b);
    }
}

/// Regions of the `chosen` channels worth a second pass, by rising frequency.
pub fn regions(
    averaged: &Averaged,
    chosen: &[usize],
    false_alarms: f64,
    frames: u64,
) -> Vec<Region> {
    let shape = averaged.shape();
    let per_bin = frames.div_ceil(averaged.segment as u64) + 2;
    let bins = averaged.segment / 2 + 1;
    let mut sum = vec![0.0f32; bins];
    let mut floors = Vec::new();
    let mut all: Vec<(Range<usize>, Option<usize>)> = Vec::new();
    for &channel in chosen {
        let Some(power) = averaged.power.get(channel) else {
            continue;
        };
        let views = views(power, shape);
        let floor: Vec<f32> = (0..bins)
            .map(|bin| {
                views
                    .iter()
                    .filter_map(|v| v.floor.level.get(bin / v.stride))
                    .fold(f32::INFINITY, |low, &f| low.min(f))
            })
            .collect();
        for ((s, p), f) in sum.iter_mut().zip(power).zip(&floor) {
            *s += p / f;
        }
        floors.push((channel, floor));
        all.extend(
            cores(&views, false_alarms)
                .into_iter()
                .map(|c| (c, Some(channel))),
        );
    }
    if chosen.len() > 1 {
        // How many channels' worth the sum is shows in its own spread.
        let shape = shape * chosen.len() as f64;
        for core in cores(&views(&sum, shape), false_alarms) {
            if !all
                .iter()
                .any(|(c, _)| c.start < core.end + 2 && core.start < c.end + 2)
            {
                all.push((core, None));
            }
        }
    }
    // Narrow ones first if there is too much to keep.
    let mut by_width: Vec<Region> = all
        .into_iter()
        .map(|(core, channel)| {
            // The floor must not be the tone's own foot: as much again on either side.
            let margin = MARGIN
                .max(core.len() * 3 / 2)
                .max(FLOOR_CELLS.div_ceil(per_bin) as usize);
            let first = core.start.saturating_sub(margin);
            let end = (core.end + margin).min(bins);
            let count = (end - first).max(16).next_multiple_of(2);
            let first = first.min(bins.saturating_sub(count));
            let count = count.min(bins & !1);
            let channels = channel.map_or_else(|| chosen.to_vec(), |c| vec![c]);
            let of = |c: &usize| floors.iter().find(|(channel, _)| channel == c);
            Region {
                floors: channels
                    .iter()
                    .map(|c| of(c).map_or_else(Vec::new, |(_, f)| f[first..first + count].to_vec()))
                    .collect(),
                together: channel.is_none(),
                channels,
                first,
                bins: count,
                core,
            }
        })
        .collect();
    by_width.sort_by_key(|r| (r.bins * r.channels.len(), r.first));
    let mut kept = 0;
    by_width.retain(|r| {
        kept += (r.bins * r.channels.len()) as u64 * per_bin;
        kept <= KEPT
    });
    by_width.sort_by_key(|r| r.first);
    by_width
}

fn views(power: &[f32], shape: f64) -> Vec<Coarse> {
    std::iter::once(Coarse::unsmoothed(power, shape, true))
        .chain(Coarse::ladder(power, shape, true))
        .collect()
}

/// What stands out in one spectrum at any resolution.
fn cores(views: &[Coarse], false_alarms: f64) -> Vec<Range<usize>> {
    let tests: usize = views.iter().map(|v| v.power.len()).sum();
    // This only chooses where to look; what is found there is tested again. So
    // the threshold may be lower than the final one.
    let pfa = (100.0 * false_alarms / tests as f64).min(0.01);
    let mut cores: Vec<Range<usize>> = Vec::new();
    for view in views {
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
    merge(cores, 3)
}

/// Joins ranges that overlap or lie at most `gap` apart.
pub fn merge(mut ranges: Vec<Range<usize>>, gap: usize) -> Vec<Range<usize>> {
    ranges.sort_by_key(|r| (r.start, r.end));
    let mut merged: Vec<Range<usize>> = Vec::new();
    for r in ranges {
        match merged.last_mut() {
            Some(last) if r.start <= last.end + gap => last.end = last.end.max(r.end),
            _ => merged.push(r),
        }
    }
    merged
}
