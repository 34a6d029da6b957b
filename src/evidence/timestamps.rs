//! Uneven time stamps break the folding: a tone fits the samples at their true
//! instants only if it is taken at its true frequency.
//!
//! Every rung of a tone's ladder is fitted at the stamped instants (generalised
//! Lomb–Scargle, Zechmeister & Kürster 2009). With jitter of standard deviation σ, a
//! rung Δf from the truth keeps exp(−(2πΔfσ)²) of the tone's power. Δf is measured
//! with an inverted rung counted negative, for its phase runs backwards: the rungs of
//! one tone are whole sample rates apart, however near in hertz.
//!
//! Two things are not taken on trust. Stamps that are rounded jitter by the rounding
//! alone: only the jitter beyond it counts (`super::stamp_line`). And stamps may
//! jitter where samples do not, as when a computer stamps what a converter took
//! evenly: the same tone fitted on an even time line is the rival of all rungs, and
//! what the tones say together decides between the two.

use super::lomb_scargle::{Sums, unit};
use super::stamp_line::{StampLine, StampedPasses};
use crate::capture::StampedBlock;
use crate::spectrum::fft::Complex64;
use crate::units::{Sense, TrueHz};
use serde::Serialize;

/// Blocks in time in which the sums are gathered: a frequency may be off by a few
/// resolution cells and be refined afterwards.
const BLOCKS: usize = 64;
/// How far from its nominal place a rung is searched, in resolution cells, at least
/// and at most.
const REACH: (f64, f64) = (1.5, 6.0);
/// Most rungs of all tones together that are followed in one pass (5 kB each).
const MOST_RUNGS: usize = 8192;
/// Most samples times rungs: some ten seconds of work. Longer logs are judged by
/// their beginning.
const MOST_WORK: f64 = 2e9;
/// Probability, before any tone was looked at, that samples were taken when the
/// stamps say. Software that polls a sensor stamps truly, software that receives
/// from a converter's buffer does not, and both are common practice.
const STAMPS_TRUE: f64 = 0.5;

/// A tone to test.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Target {
    /// Index of the tone.
    pub tone: usize,
    /// Channel in which it is strongest.
    pub channel: usize,
    /// Where it is seen, cycles per sample of the even grid, 0 to 0.5.
    pub cycles: f64,
    /// Half-width of its 95 % interval, cycles per sample.
    pub cycles_u95: f64,
    /// rms wander as seen, Hz.
    pub wander_hz: f64,
}

/// What the stamps say of one rung.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct RungLikelihood {
    /// The analog frequency, on the stamps' time scale.
    pub true_hz: TrueHz,
    /// Nyquist zone, from 1.
    pub zone: u64,
    /// Upright or inverted.
    pub sense: Sense,
    /// ln p(samples | the tone is on this rung), less that of the best rung: ≤ 0.
    /// Over the amplitude, phase and constant it is maximised; over whether the
    /// stamps are the instants of sampling it is averaged, with what all *other*
    /// tones say about it.
    pub ln_likelihood: f64,
}

/// What the stamps say of one tone.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ToneRungs {
    /// Index of the tone.
    pub tone: usize,
    /// Every rung up to the limit, by rising frequency.
    pub rungs: Vec<RungLikelihood>,
    /// Tone power over noise power in a resolution cell, at the best rung and the
    /// stamped instants, dB.
    pub snr_db: f64,
    /// Rungs at least this far apart are told apart with 95 % probability at this
    /// tone's strength, Hz; infinite where none are. Counted along the signed
    /// frequency axis, on which an inverted rung is negative and all rungs are whole
    /// rates apart: below the rate, all are told apart.
    pub resolves_hz: f64,
}

/// What the stamps of a file say.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct StampEvidence {
    /// Step of rounded stamps, s; 0 where none shows.
    pub rounding_s: f64,
    /// rms deviation of stamps from an even time line, s.
    pub scatter_s: f64,
    /// Of it, what rounding does not explain: what breaks the folding, s.
    pub jitter_s: f64,
    /// Probability that samples were taken when the stamps say, by all tones.
    pub stamps_true: f64,
    /// One per tone that could be tested; none where no claim is made.
    pub tones: Vec<ToneRungs>,
    /// In plain words how far the jitter breaks the folding, or why not.
    pub statement: String,
}

/// Tests every rung up to `up_to_hz` of every target at the stamped instants.
/// `None` for a recording without stamps.
///
/// # Errors
/// The recording's own.
pub fn test<P: StampedPasses>(
    recording: &P,
    targets: &[Target],
    up_to_hz: f64,
) -> Result<Option<StampEvidence>, P::Error> {
    let Some(mut line) = StampLine::survey(recording)? else {
        return Ok(None);
    };
    let mut evidence = StampEvidence {
        rounding_s: line.rounding_s,
        scatter_s: line.scatter_s,
        jitter_s: line.jitter_s,
        stamps_true: STAMPS_TRUE,
        tones: Vec::new(),
        statement: line.statement(),
    };
    if line.jitter_s <= 0.0 || targets.is_empty() {
        return Ok(Some(evidence));
    }
    let slowest = targets.iter().fold(0.5, |low: f64, t| low.min(t.cycles));
    line.slow_drift(slowest);
    let mut fits = Fits::new(&line, targets, up_to_hz);
    // Again with the other tones taken out: at a wrong rung, and at uneven instants,
    // a strong tone is noise to the others.
    fits.gather(recording, &line)?;
    if fits.take_out_others() {
        fits.gather(recording, &line)?;
    }
    let judged: Vec<Judged> = fits
        .tones
        .iter()
        .filter_map(|t| {
            t.judge(
                &line,
                fits.noise.get(t.target.channel).copied()?,
                fits.block_s,
            )
        })
        .collect();
    let odds: Vec<f64> = judged.iter().map(Judged::ln_odds_true).collect();
    let prior = (STAMPS_TRUE / (1.0 - STAMPS_TRUE)).ln();
    let all = prior + odds.iter().sum::<f64>();
    evidence.stamps_true = probability(all);
    evidence.tones = judged
        .iter()
        .zip(&odds)
        .map(|(j, own)| j.rungs(probability(all - own), &line))
        .collect();
    Ok(Some(evidence))
}

fn probability(ln_odds: f64) -> f64 {
    1.0 / (1.0 + (-ln_odds).exp())
}

/// ln Σ exp.
pub(super) fn ln_sum_exp(values: impl Iterator<Item = f64> + Clone) -> f64 {
    let top = values.clone().fold(f64::NEG_INFINITY, f64::max);
    if top.is_finite() {
        top + values.map(|v| (v - top).exp()).sum::<f64>().ln()
    } else {
        top
    }
}

/// One rung while sums are gathered: multiple of the rate, and sign.
#[derive(Debug, Clone, Copy)]
struct Step {
    multiple: usize,
    sign: f64,
}

/// A wave that was fitted: what to take out of the samples for the other tones.
#[derive(Debug, Clone, Copy)]
struct Wave {
    channel: usize,
    hz: f64,
    /// cos and sin amplitude.
    a: f64,
    b: f64,
}

/// One tone while sums are gathered.
struct ToneFit {
    target: Target,
    steps: Vec<Step>,
    /// `blocks[rung][block]`; the last rung is the even time line.
    blocks: Vec<Vec<Sums>>,
    /// Fitted and taken out in the second pass; given back to the tone itself.
    wave: Option<Wave>,
    rate_hz: f64,
}

struct Fits {
    tones: Vec<ToneFit>,
    /// Rows looked at.
    rows: f64,
    /// Noise variance per sample, by channel.
    noise: Vec<f64>,
    /// Length of a block of sums, s.
    block_s: f64,
}

impl Fits {
    fn new(line: &StampLine, targets: &[Target], up_to_hz: f64) -> Fits {
        let mut left = MOST_RUNGS;
        let mut tones = Vec::new();
        for &target in targets {
            let steps = steps(&target, line.rate_hz, up_to_hz, left);
            // A single rung has no rival to be told from.
            if steps.len() < 2 {
                continue;
            }
            left -= steps.len();
            tones.push(ToneFit {
                target,
                blocks: Vec::new(),
                steps,
                wave: None,
                rate_hz: line.rate_hz,
            });
        }
        let rungs: usize = tones.iter().map(|t| t.steps.len() + 1).sum();
        let rows = (MOST_WORK / rungs.max(1) as f64).min(line.rows);
        Fits {
            tones,
            rows,
            noise: Vec::new(),
            block_s: 0.0,
        }
    }

    fn gather<P: StampedPasses>(
        &mut self,
        recording: &P,
        line: &StampLine,
    ) -> Result<(), P::Error> {
        for tone in &mut self.tones {
            tone.blocks = vec![vec![Sums::default(); BLOCKS]; tone.steps.len() + 1];
        }
        let waves: Vec<Wave> = self.tones.iter().filter_map(|t| t.wave).collect();
        let limit = self.rows as u64;
        let seconds = line.duration_s * self.rows / line.rows;
        let block_s = seconds / BLOCKS as f64;
        let mut row = 0u64;
        let mut squares: Vec<(f64, f64)> = vec![(0.0, 0.0); recording.channels()];
        let mut cursor = line.cursor();
        let tones = &mut self.tones;
        recording.for_each_stamped(&mut |block: &StampedBlock| {
            for (i, (&frame, &stamp)) in block.frames.iter().zip(&block.times_s).enumerate() {
                if row >= limit {
                    return false;
                }
                let instant = cursor.instant(frame, stamp);
                let even = line.even(frame);
                let slot = ((instant / block_s).max(0.0) as usize).min(BLOCKS - 1);
                for (channel, samples) in block.samples.iter().enumerate() {
                    let Some(&value) = samples.get(i).filter(|v| v.is_finite()) else {
                        continue;
                    };
                    let mut rest = f64::from(value) - cursor.drift(channel, row);
                    for wave in waves.iter().filter(|w| w.channel == channel) {
                        rest -= wave.at(instant);
                    }
                    if let Some(s) = squares.get_mut(channel) {
                        s.0 += 1.0;
                        s.1 += rest * rest;
                    }
                    for tone in tones.iter_mut().filter(|t| t.target.channel == channel) {
                        let own = tone.wave.map_or(0.0, |w| w.at(instant));
                        tone.add(slot, rest + own, instant, even, line.rate_hz);
                    }
                }
                row += 1;
            }
            true
        })?;
        self.noise = squares
            .iter()
            .map(|&(n, ss)| if n > 0.0 { ss / n } else { 0.0 })
            .collect();
        self.block_s = block_s;
        Ok(())
    }

    /// Notes each tone's wave at its best rung for the next pass. `false` where
    /// there is nothing to gain.
    fn take_out_others(&mut self) -> bool {
        for tone in &mut self.tones {
            tone.wave = tone.best_wave(self.block_s);
        }
        self.tones.iter().any(|t| t.wave.is_some())
    }
}

impl Wave {
    fn at(&self, instant: f64) -> f64 {
        let e = unit(self.hz * instant);
        self.a * e.re + self.b * e.im
    }
}

/// The ladder of one tone as multiples of the rate, lowest first.
fn steps(target: &Target, rate_hz: f64, up_to_hz: f64, most: usize) -> Vec<Step> {
    let limit = up_to_hz / rate_hz;
    let mut steps = Vec::new();
    for multiple in 0.. {
        for sign in [-1.0, 1.0] {
            let cycles = multiple as f64 + sign * target.cycles;
            if cycles <= 0.0 {
                continue;
            }
            if cycles > limit || steps.len() >= most {
                return steps;
            }
            steps.push(Step { multiple, sign });
        }
    }
    steps
}

/// How a wave fitted to some blocks explains them.
#[derive(Debug, Clone, Copy, Default)]
struct Fitted {
    shift_hz: f64,
    explained: f64,
    parts: [f64; 3],
}

/// Best frequency within `reach_hz` of the one at which the sums were gathered.
fn refine(blocks: &[Sums], first: usize, block_s: f64, reach_hz: f64) -> Fitted {
    let at = |shift_hz: f64| {
        let mut all = Sums::default();
        for (i, sums) in blocks.iter().enumerate() {
            let middle = ((first + i) as f64 + 0.5) * block_s;
            all.merge(&sums.turned(unit(shift_hz * middle)));
        }
        let (explained, parts) = all.fit();
        Fitted {
            shift_hz,
            explained,
            parts,
        }
    };
    let cell = 1.0 / (blocks.len() as f64 * block_s);
    let steps = (reach_hz / (0.25 * cell)).ceil().max(1.0) as i32;
    let mut best = Fitted::default();
    for step in -steps..=steps {
        let one = at(f64::from(step) * 0.25 * cell);
        if one.explained > best.explained {
            best = one;
        }
    }
    // Halving steps about the best: to a ten-thousandth of a cell.
    let mut step = 0.125 * cell;
    while step > 1e-4 * cell {
        let sides = [at(best.shift_hz - step), at(best.shift_hz + step)];
        match sides.iter().find(|s| s.explained > best.explained) {
            Some(&better) => best = better,
            None => step *= 0.5,
        }
    }
    best
}

impl ToneFit {
    /// Adds a sample to every rung: exp(2πi(k·r ± ν)t) by repeated multiplication.
    fn add(&mut self, slot: usize, x: f64, instant: f64, even: f64, rate_hz: f64) {
        let nu_hz = self.target.cycles * rate_hz;
        let whole = unit(rate_hz * instant);
        let nu = unit(nu_hz * instant);
        let mut power = Complex64::new(1.0, 0.0);
        let mut multiple = 0;
        for (step, blocks) in self.steps.iter().zip(&mut self.blocks) {
            if step.multiple > multiple {
                power *= whole;
                multiple = step.multiple;
            }
            let e = power * if step.sign > 0.0 { nu } else { nu.conj() };
            if let Some(sums) = blocks.get_mut(slot) {
                sums.add(x, e);
            }
        }
        if let Some(sums) = self.blocks.last_mut().and_then(|b| b.get_mut(slot)) {
            sums.add(x, unit(nu_hz * even));
        }
    }

    /// Blocks in which the tone is coherent, as stretches: all of them for a steady
    /// tone, fewer for one that wanders. `None` where it moves too fast.
    fn stretch(&self, block_s: f64) -> Option<usize> {
        /// Turns by which a tone may stray within a stretch, rms.
        const STRAY: f64 = 0.1;
        let seconds = STRAY / self.target.wander_hz.max(1e-300);
        let blocks = seconds / block_s;
        if blocks >= BLOCKS as f64 {
            return Some(BLOCKS);
        }
        (blocks >= 4.0).then(|| 1 << (blocks.log2() as u32))
    }

    /// Best fit of one rung, stretch by stretch.
    fn fit(&self, blocks: &[Sums], block_s: f64, rate_hz: f64) -> Option<Vec<Fitted>> {
        let stretch = self.stretch(block_s)?;
        let cell = 1.0 / (stretch as f64 * block_s);
        let unsure = self.target.cycles_u95 * rate_hz + 2.5 * self.target.wander_hz;
        let reach = (unsure / cell + 0.5).clamp(REACH.0, REACH.1) * cell;
        Some(
            blocks
                .chunks(stretch)
                .enumerate()
                .map(|(i, chunk)| refine(chunk, i * stretch, block_s, reach))
                .collect(),
        )
    }

    /// The wave of a steady tone at its best rung.
    fn best_wave(&self, block_s: f64) -> Option<Wave> {
        if self.stretch(block_s)? != BLOCKS {
            return None;
        }
        let rate_hz = self.rate_hz;
        let (step, fit) = self
            .steps
            .iter()
            .zip(&self.blocks)
            .filter_map(|(s, b)| Some((s, *self.fit(b, block_s, rate_hz)?.first()?)))
            .max_by(|a, b| a.1.explained.total_cmp(&b.1.explained))?;
        let [a, b, _] = fit.parts;
        Some(Wave {
            channel: self.target.channel,
            hz: step.hz(&self.target, rate_hz) + fit.shift_hz,
            a,
            b,
        })
    }

    fn judge(&self, line: &StampLine, noise: f64, block_s: f64) -> Option<Judged> {
        let mut fits = Vec::with_capacity(self.blocks.len());
        for blocks in &self.blocks {
            fits.push(self.fit(blocks, block_s, line.rate_hz)?);
        }
        let explained = |f: &Vec<Fitted>| f.iter().map(|s| s.explained).sum::<f64>();
        let best = fits
            .iter()
            .zip(&self.blocks)
            .max_by(|a, b| explained(a.0).total_cmp(&explained(b.0)))?;
        let mut noise = noise;
        if let [one] = best.0.as_slice() {
            noise = noise.max(local_noise(best.1, one.shift_hz, block_s));
        }
        if noise.is_nan() || noise <= 0.0 {
            return None;
        }
        let mut gains: Vec<f64> = fits.iter().map(|f| 0.5 * explained(f) / noise).collect();
        let even = gains.pop()?;
        let rungs = self
            .steps
            .iter()
            .zip(gains)
            .map(|(s, gain)| (*s, s.hz(&self.target, line.rate_hz), gain))
            .collect();
        Some(Judged {
            tone: self.target.tone,
            rungs,
            even,
        })
    }
}

/// Noise variance per sample as it is near a tone: what waves a few cells away
/// explain, two degrees of freedom each.
fn local_noise(blocks: &[Sums], shift_hz: f64, block_s: f64) -> f64 {
    let cell = 1.0 / (blocks.len() as f64 * block_s);
    let mut sum = 0.0;
    let mut count = 0.0;
    for cells in 5..=12 {
        for side in [-1.0, 1.0] {
            let shift = shift_hz + side * f64::from(cells) * cell;
            let mut all = Sums::default();
            for (i, sums) in blocks.iter().enumerate() {
                all.merge(&sums.turned(unit(shift * (i as f64 + 0.5) * block_s)));
            }
            // Within a block the wave turns by this much against the sums.
            let turn = std::f64::consts::PI * shift.abs() * block_s;
            let kept = (turn.sin() / turn.max(1e-12)).powi(2).max(0.1);
            sum += all.fit().0 / kept;
            count += 2.0;
        }
    }
    sum / count
}

impl Step {
    fn hz(&self, target: &Target, rate_hz: f64) -> f64 {
        (self.multiple as f64 + self.sign * target.cycles) * rate_hz
    }
}

/// A tone's rungs with the log-likelihood gained over no tone at all.
struct Judged {
    tone: usize,
    rungs: Vec<(Step, f64, f64)>,
    /// The same on the even time line, where all rungs are one.
    even: f64,
}

impl Judged {
    /// For stamps that are the instants, against an even time line.
    fn ln_odds_true(&self) -> f64 {
        let gains = self.rungs.iter().map(|r| r.2);
        ln_sum_exp(gains) - (self.rungs.len().max(1) as f64).ln() - self.even
    }

    fn rungs(&self, stamps_true: f64, line: &StampLine) -> ToneRungs {
        let p = stamps_true.clamp(1e-300, 1.0);
        let mixed = |gain: f64| {
            let even = (1.0 - p).max(1e-300).ln() + self.even;
            ln_sum_exp([p.ln() + gain, even].into_iter())
        };
        let top = self.rungs.iter().fold(0.0f64, |top, r| top.max(r.2));
        let best = mixed(top);
        ToneRungs {
            tone: self.tone,
            snr_db: crate::units::power_db(top),
            resolves_hz: line.resolves_hz(top),
            rungs: self
                .rungs
                .iter()
                .map(|&(step, hz, gain)| RungLikelihood {
                    true_hz: TrueHz(hz),
                    zone: 2 * step.multiple as u64 + u64::from(step.sign > 0.0),
                    sense: if step.sign > 0.0 {
                        Sense::Upright
                    } else {
                        Sense::Inverted
                    },
                    ln_likelihood: mixed(gain) - best,
                })
                .collect(),
        }
    }
}
