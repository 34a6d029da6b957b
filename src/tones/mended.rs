//! Tones of a recording with missing samples.
//!
//! A straight line over a gap takes a piece out of every tone: a strong one
//! then no longer looks steady, and gaps that come again and again give it
//! sidebands. So the strongest lines are fitted to the samples that are there, by
//! least squares, and drawn on through the gaps; then the search is made. Gaps get
//! no tone that the samples around them do not carry, and count for nothing in the
//! fit.

use super::normal::Normal;
use super::pursuit::{Line, pursue};
use super::{Search, Tone, ToneSet, find};
use crate::capture::Block;
use crate::spectrum::plan::Plan;
use crate::spectrum::samples::{Pass, Passes};
use std::f64::consts::TAU;

/// Runs of missing frames at least this long are gaps rather than scattered
/// samples.
const LONG_GAP: u64 = 32;
/// Share of missing frames beyond which gaps are too long to be drawn through.
const MOST_MISSING: f64 = 0.5;
/// Most tones drawn through the gaps, and the work that fitting them may take:
/// tones squared times frames.
const MOST_LINES: usize = 16;
const MOST_WORK: f64 = 1e9;

/// As [`find`], for recordings that may have missing samples (NaN), with what
/// was done about them, a clause each.
///
/// # Errors
/// The recording's own.
pub fn find_mended<P: Passes>(
    recording: &P,
    search: &Search,
    progress: &(dyn Fn(u64, u64) + Sync),
) -> Result<(ToneSet, Vec<String>), P::Error> {
    let (mut found, notes) = mend(recording, search, progress)?;
    drop_rounding(recording, search, &mut found)?;
    Ok((found, notes))
}

/// Drops tones below what a sample of 24 bits holds beside the largest: the
/// rounding error of a ramp comes again and again, like a tone.
fn drop_rounding<P: Passes>(
    recording: &P,
    search: &Search,
    found: &mut ToneSet,
) -> Result<(), P::Error> {
    /// Hardly a recording is so loud, in its own unit, that a tone this strong is in
    /// doubt: not worth another pass over a long one.
    const SURE_DBFS: f64 = -90.0;
    /// The last bit, as a share of the largest sample.
    const LAST_BIT: f64 = 1.0 / 8_388_608.0;
    let long = matches!(found.plan, Plan::Segments { .. });
    let sure = |tone: &Tone| long && tone.level_dbfs > SURE_DBFS;
    if found.tones.iter().all(sure) {
        return Ok(());
    }
    let mut peaks = vec![0.0f32; recording.channels()];
    let mut pass = recording.pass()?;
    let mut block = Block::default();
    while pass.next_into(&mut block)? {
        for (peak, samples) in peaks.iter_mut().zip(&block.samples) {
            // `max` passes over NaN.
            *peak = samples
                .iter()
                .fold(*peak, |most, value| most.max(value.abs()));
        }
    }
    let holds = |tone: &Tone| {
        tone.channels.iter().any(|channel| {
            let amplitude = search.full_scale * 10f64.powf(channel.level_dbfs / 20.0);
            let peak = peaks.get(channel.channel).copied().unwrap_or(0.0);
            amplitude > LAST_BIT * f64::from(peak)
        })
    };
    found.tones.retain(holds);
    for (tone, number) in found.tones.iter_mut().zip(1..) {
        tone.number = number;
    }
    Ok(())
}

fn mend<P: Passes>(
    recording: &P,
    search: &Search,
    progress: &(dyn Fn(u64, u64) + Sync),
) -> Result<(ToneSet, Vec<String>), P::Error> {
    let first = find(recording, search, progress)?;
    let frames = recording.frames();
    if first.missing.iter().all(|&n| n == 0 || n == frames) {
        return Ok((first, Vec::new()));
    }
    let stretch = longest_stretch(recording)?;
    let stretch_s = |frame: u64| frame as f64 / recording.rate_hz();
    let part = Part {
        whole: recording,
        from: stretch.from,
        to: stretch.to,
    };
    if stretch.lost as f64 > MOST_MISSING * frames as f64 {
        let found = find(&part, search, progress)?;
        let note = format!(
            "gaps are longer than what is between them: only the longest stretch was searched, {:.3} to {:.3} s",
            stretch_s(stretch.from),
            stretch_s(stretch.to)
        );
        return Ok((moved(found, stretch_s(stretch.from)), vec![note]));
    }
    let missing = first.missing.clone();
    let condition = first.condition.clone();
    let model = match first.plan {
        Plan::Whole { .. } => Model::pursue(recording)?,
        // Too long to be held: a tone is steady between gaps, if it is at all.
        Plan::Segments { .. } if stretch.lost > 0 => {
            Model::fit(recording, &find(&part, search, progress)?.tones)?
        }
        Plan::Segments { .. } => Model::fit(recording, &first.tones)?,
    };
    let drawn = model.most();
    if drawn == 0 {
        return Ok((first, Vec::new()));
    }
    let filled = Filled {
        recording,
        model: &model,
    };
    let mut tones = find(&filled, search, progress)?;
    // Samples that were drawn tell nothing new.
    let most = missing.iter().copied().max().unwrap_or(0);
    let present = (frames - most.min(frames)) as f64 / frames as f64;
    for tone in &mut tones.tones {
        tone.seen_hz_u95 /= present.sqrt();
    }
    tones.missing = missing;
    tones.condition = condition;
    let note = match drawn {
        0 => Vec::new(),
        1 => vec!["the strongest steady tone was drawn on through the missing samples".into()],
        n => vec![format!(
            "the {n} strongest steady tones were drawn on through the missing samples"
        )],
    };
    Ok((tones, note))
}

/// The tones of a part, in the time of the whole.
fn moved(mut found: ToneSet, by_s: f64) -> ToneSet {
    for tone in &mut found.tones {
        tone.from_s += by_s;
        tone.to_s += by_s;
        for point in &mut tone.track {
            point.at_s += by_s;
        }
    }
    found
}

/// The longest run of frames without a gap.
struct Stretch {
    from: u64,
    to: u64,
    /// Frames missing in all gaps.
    lost: u64,
}

fn longest_stretch<P: Passes>(recording: &P) -> Result<Stretch, P::Error> {
    let mut pass = recording.pass()?;
    let mut block = Block::default();
    let mut best = Stretch {
        from: 0,
        to: 0,
        lost: 0,
    };
    // Where the current stretch starts and ends, and the missing run after it.
    let (mut from, mut to, mut run, mut frame) = (0, 0, 0, 0);
    let mut end_run = |run: u64, from: &mut u64, to: u64, frame: u64| {
        if run >= LONG_GAP {
            best.lost += run;
            if to - *from > best.to - best.from {
                (best.from, best.to) = (*from, to);
            }
            *from = frame;
        }
    };
    while pass.next_into(&mut block)? {
        for i in 0..block.frames() {
            let gone = |channel: &Vec<f32>| channel.get(i).is_none_or(|value| value.is_nan());
            if block.samples.iter().all(gone) {
                run += 1;
            } else {
                end_run(run, &mut from, to, frame);
                run = 0;
                to = frame + 1;
            }
            frame += 1;
        }
    }
    end_run(run.max(LONG_GAP) * u64::from(run > 0), &mut from, to, frame);
    if to > from && to - from > best.to - best.from {
        (best.from, best.to) = (from, to);
    }
    Ok(best)
}

/// Frames `from..to` of a recording.
struct Part<'a, P> {
    whole: &'a P,
    from: u64,
    to: u64,
}

struct PartPass<'a, P: Passes + 'a> {
    pass: P::Pass<'a>,
    from: u64,
    to: u64,
}

impl<P: Passes> Passes for Part<'_, P> {
    type Error = P::Error;
    type Pass<'b>
        = PartPass<'b, P>
    where
        Self: 'b;

    fn rate_hz(&self) -> f64 {
        self.whole.rate_hz()
    }
    fn channels(&self) -> usize {
        self.whole.channels()
    }
    fn frames(&self) -> u64 {
        self.to - self.from
    }
    fn pass(&self) -> Result<Self::Pass<'_>, Self::Error> {
        Ok(PartPass {
            pass: self.whole.pass()?,
            from: self.from,
            to: self.to,
        })
    }
}

impl<P: Passes> Pass for PartPass<'_, P> {
    type Error = P::Error;

    fn next_into(&mut self, block: &mut Block) -> Result<bool, P::Error> {
        while self.pass.next_into(block)? {
            let start = block.first_frame;
            let end = start + block.frames() as u64;
            if end <= self.from {
                continue;
            }
            if start >= self.to {
                break;
            }
            // Both within the block's length.
            let skip = self.from.saturating_sub(start) as usize;
            let keep = (end.min(self.to) - start) as usize;
            for channel in &mut block.samples {
                channel.truncate(keep);
                channel.drain(..skip);
            }
            block.first_frame = start.max(self.from) - self.from;
            return Ok(true);
        }
        block.samples.iter_mut().for_each(Vec::clear);
        Ok(false)
    }
}

/// Steady lines as the samples that are there have them.
struct Model {
    /// `lines[channel]`.
    lines: Vec<Vec<Line>>,
}

impl Model {
    /// From all samples, of a recording short enough to be held.
    fn pursue<P: Passes>(recording: &P) -> Result<Model, P::Error> {
        let mut channels: Vec<Vec<f32>> = vec![Vec::new(); recording.channels()];
        let mut pass = recording.pass()?;
        let mut block = Block::default();
        while pass.next_into(&mut block)? {
            for (all, samples) in channels.iter_mut().zip(&block.samples) {
                all.extend_from_slice(samples);
            }
        }
        let most = most_lines(recording.frames());
        let lines = |samples: &Vec<f32>| {
            if samples.iter().any(|sample| sample.is_nan()) {
                pursue(samples, most)
            } else {
                Vec::new()
            }
        };
        Ok(Model {
            lines: channels.iter().map(lines).collect(),
        })
    }

    /// From the steady ones among tones found before.
    fn fit<P: Passes>(recording: &P, tones: &[Tone]) -> Result<Model, P::Error> {
        let mut steady: Vec<&Tone> = tones.iter().filter(|tone| tone.wander_hz == 0.0).collect();
        steady.sort_by(|a, b| b.level_dbfs.total_cmp(&a.level_dbfs));
        steady.truncate(most_lines(recording.frames()));
        let cycles: Vec<f64> = steady
            .iter()
            .map(|tone| tone.seen_hz.0 / recording.rate_hz())
            .collect();
        // A constant, then cosine and sine of each.
        let unknowns = 1 + 2 * cycles.len();
        let mut sums = vec![Normal::new(unknowns); recording.channels()];
        let mut pass = recording.pass()?;
        let mut block = Block::default();
        let mut row = vec![1.0; unknowns];
        while pass.next_into(&mut block)? {
            for i in 0..block.frames() {
                let frame = block.first_frame + i as u64;
                let pairs = row.get_mut(1..).unwrap_or_default().chunks_exact_mut(2);
                for (&cycles, pair) in cycles.iter().zip(pairs) {
                    let (sin, cos) = (TAU * (cycles * frame as f64).fract()).sin_cos();
                    pair.copy_from_slice(&[cos, sin]);
                }
                for (sum, channel) in sums.iter_mut().zip(&block.samples) {
                    let value = channel.get(i).copied().unwrap_or(f32::NAN);
                    if value.is_finite() {
                        sum.add(&row, value.into());
                    }
                }
            }
        }
        let lines = |sum: Normal| {
            let solved = sum.solve();
            let pairs = solved.get(1..).unwrap_or_default().chunks_exact(2);
            let line = |(&cycles, pair): (&f64, &[f64])| match pair {
                &[cos, sin] => Some(Line { cycles, cos, sin }),
                _ => None,
            };
            cycles.iter().zip(pairs).filter_map(line).collect()
        };
        Ok(Model {
            lines: sums.into_iter().map(lines).collect(),
        })
    }

    fn most(&self) -> usize {
        self.lines.iter().map(Vec::len).max().unwrap_or(0)
    }

    fn value(&self, channel: usize, frame: u64) -> f64 {
        let lines = self.lines.get(channel).map_or(&[][..], Vec::as_slice);
        lines.iter().map(|line| line.at(frame)).sum()
    }
}

/// Lines that can be fitted to so many frames within the work allowed.
fn most_lines(frames: u64) -> usize {
    let work = (MOST_WORK / frames.max(1) as f64).sqrt();
    (work as usize).clamp(1, MOST_LINES)
}

/// A recording whose missing samples are what a model has, on a straight line
/// between what it leaves on either side.
struct Filled<'a, P> {
    recording: &'a P,
    model: &'a Model,
}

struct FilledPass<'a, P: Passes + 'a> {
    pass: P::Pass<'a>,
    model: &'a Model,
    /// What the model left of the last sample, per channel.
    left: Vec<f64>,
}

impl<P: Passes> Passes for Filled<'_, P> {
    type Error = P::Error;
    type Pass<'b>
        = FilledPass<'b, P>
    where
        Self: 'b;

    fn rate_hz(&self) -> f64 {
        self.recording.rate_hz()
    }
    fn channels(&self) -> usize {
        self.recording.channels()
    }
    fn frames(&self) -> u64 {
        self.recording.frames()
    }
    fn pass(&self) -> Result<Self::Pass<'_>, Self::Error> {
        Ok(FilledPass {
            pass: self.recording.pass()?,
            model: self.model,
            left: vec![f64::NAN; self.recording.channels()],
        })
    }
}

impl<P: Passes> Pass for FilledPass<'_, P> {
    type Error = P::Error;

    fn next_into(&mut self, block: &mut Block) -> Result<bool, P::Error> {
        let more = self.pass.next_into(block)?;
        let first_frame = block.first_frame;
        let channels = block.samples.iter_mut().zip(&mut self.left).enumerate();
        for (channel, (samples, left)) in channels {
            let model = |i: usize| self.model.value(channel, first_frame + i as u64);
            let mut i = 0;
            while i < samples.len() {
                if !samples[i].is_nan() {
                    i += 1;
                    continue;
                }
                let start = i;
                while i < samples.len() && samples[i].is_nan() {
                    i += 1;
                }
                if let Some(before) = start.checked_sub(1) {
                    *left = f64::from(samples[before]) - model(before);
                }
                let right = samples.get(i).map(|&after| f64::from(after) - model(i));
                let from = if left.is_nan() {
                    right.unwrap_or(0.0)
                } else {
                    *left
                };
                let to = right.unwrap_or(from);
                let steps = (i - start + 1) as f64;
                for (n, sample) in (start..i).zip(samples.iter_mut().skip(start)) {
                    let line = from + (to - from) * (n - start + 1) as f64 / steps;
                    *sample = (model(n) + line) as f32;
                }
            }
            if let Some((last, &value)) = samples.iter().enumerate().next_back() {
                *left = f64::from(value) - model(last);
            }
        }
        Ok(more)
    }
}
