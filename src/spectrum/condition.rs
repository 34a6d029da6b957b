//! What is wrong with a channel's samples, and what is done about it.
//!
//! - *Missing* (NaN or infinite): a straight line from the last good value to the
//!   next, so that a gap adds no step.
//! - *Stuck* (a run of equal values in a signal that otherwise hardly ever repeats
//!   itself: a hung converter, a dropout to zero): bridged the same way. Coarsely
//!   quantised, slow, repeated or silent signals repeat themselves, and stay as they
//!   are.
//! - *Clipped* (flat where the signal would go beyond its largest or smallest value):
//!   counted and left: what was cut off is not known, and the harmonics that it makes
//!   are in the recording.
//!
//! A run that reaches past a block holds the last good value. Decisions depend only on
//! the samples before, so that every pass makes the same.

/// A channel's faults.
#[derive(Debug, Clone, Default, PartialEq, serde::Serialize)]
pub struct Condition {
    /// Samples without a value, bridged.
    pub missing: u64,
    /// Samples of runs that stood still, bridged.
    pub stuck: u64,
    /// Samples flat at the largest or smallest value, left as they are.
    pub clipped: u64,
    /// All values are the same.
    pub constant: bool,
    /// Bridged runs, first sample and length; no more than the first
    /// [`MOST_RUNS`].
    #[serde(skip)]
    pub bridged: Vec<(u64, u64)>,
}

/// Bridged runs that are remembered.
pub const MOST_RUNS: usize = 20_000;

/// Shortest run of equal values that may be a fault.
const SHORTEST: u64 = 8;
/// Expected runs that long by chance in a recording.
const BY_CHANCE: f64 = 1e-3;
/// Steps from sample to sample are averaged over about this many.
const MEMORY: f64 = 500.0;
/// A signal repeats itself too much for runs to mean anything if more than this share
/// of its steps is none.
const REPEATS: f64 = 0.1;
/// Typical step over least step from which a repeat is rare.
const RESOLVED: f32 = 8.0;
/// A run is entered or left with at least this share of a typical step: the crest of a
/// smooth wave is not.
const JUMP: f32 = 0.5;
/// A rail is reached in steps no larger than this many typical ones (of normal noise the
/// typical step is 1.13 σ, and one of 5 σ is rare); a dropout is not.
const REACH: f32 = 4.5;
/// Samples flat in a row that count as clipped.
const FLAT: u64 = 3;

/// The values nearest to one end of the range.
#[derive(Debug, Clone, Copy, Default)]
struct Rail {
    /// Outermost value and the next one; how many samples had each.
    value: Option<f32>,
    next: Option<f32>,
    count: u64,
    next_count: u64,
    /// Samples at `value` that were in flat runs, and how many runs.
    flat: u64,
    runs: u64,
}

impl Rail {
    /// A run of `length` equal samples; `outer` says whether one value is further out
    /// than another.
    fn add(&mut self, value: f32, length: u64, outer: impl Fn(f32, f32) -> bool) {
        let flat = if length >= FLAT { length } else { 0 };
        match self.value {
            Some(v) if v == value => {
                self.count += length;
                self.flat += flat;
                self.runs += u64::from(flat > 0);
            }
            Some(v) if outer(v, value) => match self.next {
                Some(n) if n == value => self.next_count += length,
                Some(n) if outer(n, value) => {}
                _ => (self.next, self.next_count) = (Some(value), length),
            },
            _ => {
                *self = Rail {
                    value: Some(value),
                    next: self.value,
                    count: length,
                    next_count: self.count,
                    flat,
                    runs: u64::from(flat > 0),
                };
            }
        }
    }

    /// Samples clipped here. A wave that just turns round leaves at most 2.4 times as
    /// many samples in the outermost step of its range as in the next one (the arcsine
    /// law); a signal of few values is not near its next one.
    fn clipped(&self, range: f32) -> u64 {
        let near = match (self.value, self.next) {
            (Some(v), Some(n)) => (v - n).abs() < 0.05 * range,
            _ => false,
        };
        if near && self.runs >= 2 && self.count > 4 * self.next_count {
            self.flat
        } else {
            0
        }
    }
}

/// Mends one channel block by block, and keeps account.
#[derive(Debug, Clone, Default)]
pub struct Mender {
    condition: Condition,
    /// Samples seen.
    position: u64,
    /// Last value of this channel as it came, and as it was passed on.
    last: Option<f32>,
    good: Option<f32>,
    /// `good` before the run of `last` began.
    good_before: Option<f32>,
    /// Length so far of the run of `last`, and the value before it.
    run: u64,
    before: Option<f32>,
    /// Mean step that is not zero, share of steps that are.
    step: f32,
    repeats: f64,
    steps: f64,
    least_step: f32,
    high: Rail,
    low: Rail,
}

impl Mender {
    /// Mends `samples` in place; call on successive blocks of one channel.
    pub fn fill(&mut self, samples: &mut [f32]) {
        let mut i = 0;
        while i < samples.len() {
            let value = samples[i];
            let mut end = i + 1;
            if value.is_finite() {
                while end < samples.len() && samples[end] == value {
                    end += 1;
                }
                self.run_of(value, i, end, samples);
            } else {
                while end < samples.len() && !samples[end].is_finite() {
                    end += 1;
                }
                self.condition.missing += (end - i) as u64;
                self.close();
                (self.last, self.run) = (None, 0);
                self.bridge(i, end, 0, samples);
            }
            i = end;
        }
        self.position += samples.len() as u64;
    }

    /// `samples[i..end]` are equal, and not equal to what follows in the block.
    fn run_of(&mut self, value: f32, i: usize, end: usize, samples: &mut [f32]) {
        let length = (end - i) as u64;
        let carried = if self.last == Some(value) {
            self.run
        } else {
            0
        };
        if carried == 0 {
            self.close();
            self.before = self.last;
            self.good_before = self.good;
            if let Some(last) = self.last {
                self.learn((value - last).abs());
            }
            self.run = 0;
        }
        self.last = Some(value);
        self.run += length;
        if self.stuck(value, samples.get(end).copied()) {
            // What lies in blocks before has been passed on, but counts.
            self.condition.stuck += if carried >= SHORTEST {
                length
            } else {
                self.run
            };
            self.good = self.good_before;
            self.bridge(i, end, carried, samples);
        } else {
            self.good = Some(value);
        }
    }

    /// Takes the run that has ended into account.
    fn close(&mut self) {
        let Some(value) = self.last else { return };
        self.high.add(value, self.run, |a, b| a > b);
        self.low.add(value, self.run, |a, b| a < b);
        // Repeats of a run that is a fault say nothing of the signal.
        let repeats = (self.run.saturating_sub(1)).min(SHORTEST);
        for _ in 0..repeats {
            self.steps += 1.0;
            self.repeats += (1.0 - self.repeats) / self.steps.min(MEMORY);
        }
    }

    fn learn(&mut self, step: f32) {
        self.steps += 1.0;
        let rate = 1.0 / self.steps.min(MEMORY);
        self.repeats -= self.repeats * rate;
        self.step += (step - self.step) * rate as f32;
        if step > 0.0 && (self.least_step == 0.0 || step < self.least_step) {
            self.least_step = step;
        }
    }

    fn stuck(&self, value: f32, after: Option<f32>) -> bool {
        let resolved = self.step >= RESOLVED * self.least_step && self.repeats < REPEATS;
        if self.run < SHORTEST || self.steps < MEMORY || !resolved {
            return false;
        }
        let chance = self
            .repeats
            .max(f64::from(0.5 * self.least_step / self.step));
        let by_chance = 1.0 + ((self.position as f64 + 1e4) / BY_CHANCE).ln() / -chance.ln();
        if (self.run as f64) < by_chance {
            return false;
        }
        let jump = |other: Option<f32>| {
            other
                .filter(|v| v.is_finite())
                .map_or(0.0, |v| (v - value).abs())
        };
        let (entered, left) = (jump(self.before), jump(after));
        let beyond = |rail: &Rail| rail.value.is_none_or(|v| v == value);
        let outermost = beyond(&self.high)
            || beyond(&self.low)
            || self.high.value.is_some_and(|v| value > v)
            || self.low.value.is_some_and(|v| value < v);
        if outermost {
            // Clipped, unless it fell there.
            entered > REACH * self.step
        } else {
            entered.max(left) > JUMP * self.step || after.is_none()
        }
    }

    fn bridge(&mut self, i: usize, end: usize, carried: u64, samples: &mut [f32]) {
        let right = samples.get(end).copied();
        let from = self.good.or(right).unwrap_or(0.0);
        let to = right.unwrap_or(from);
        let steps = (end - i + 1) as f32;
        for (j, s) in samples[i..end].iter_mut().enumerate() {
            *s = from + (to - from) * (j + 1) as f32 / steps;
        }
        let start = (self.position + i as u64).saturating_sub(carried);
        let length = (end - i) as u64 + carried;
        let room = self.condition.bridged.len() < MOST_RUNS;
        match self.condition.bridged.last_mut() {
            Some((s, l)) if *s + *l >= start => *l = start + length - *s,
            _ if room => {
                self.condition.bridged.push((start, length));
            }
            _ => {}
        }
    }

    /// The account, after the last block.
    pub fn finish(mut self) -> Condition {
        self.close();
        let range = match (self.high.value, self.low.value) {
            (Some(h), Some(l)) => h - l,
            _ => 0.0,
        };
        Condition {
            clipped: self.high.clipped(range) + self.low.clipped(range),
            constant: range == 0.0 && self.condition.missing < self.position,
            ..self.condition
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::{RngExt, SeedableRng, rngs::StdRng};

    fn mend(x: &mut [f32], block: usize) -> Condition {
        let mut mender = Mender::default();
        for part in x.chunks_mut(block) {
            mender.fill(part);
        }
        mender.finish()
    }

    #[test]
    fn gaps_become_straight_lines() {
        let mut mender = Mender::default();
        let mut a = [f32::NAN, 2.0, f32::NAN, f32::NAN, 5.0, f32::NAN];
        mender.fill(&mut a);
        assert_eq!(a, [2.0, 2.0, 3.0, 4.0, 5.0, 5.0]);
        let mut b = [f32::NAN, 9.0];
        mender.fill(&mut b);
        assert_eq!(b, [7.0, 9.0]);
        let condition = mender.finish();
        assert_eq!(condition.missing, 5);
        assert_eq!(condition.bridged, vec![(0, 1), (2, 2), (5, 2)]);
    }

    /// Noise of 30 steps rms on a slow wave, in whole steps.
    fn busy(rng: &mut StdRng, n: usize) -> Vec<f32> {
        (0..n)
            .map(|i| {
                let noise: f32 = (0..4).map(|_| rng.random::<f32>() - 0.5).sum();
                (52.0 * noise + 300.0 * (i as f32 * 0.01).sin()).round()
            })
            .collect()
    }

    #[test]
    fn dropouts_and_hangs_are_bridged() {
        let mut rng = StdRng::seed_from_u64(1);
        for block in [32_768, 1_000, 7] {
            let mut x = busy(&mut rng, 50_000);
            x[9_990..10_030].fill(0.0);
            let held = x[20_000];
            x[20_001..20_300].fill(held);
            let condition = mend(&mut x, block);
            assert!((320..=345).contains(&condition.stuck), "{condition:?}");
            assert_eq!((condition.missing, condition.clipped), (0, 0));
            let whole = x[10_000..10_020].iter().filter(|v| **v == 0.0).count();
            assert!(block < 40 || whole < 3, "the dropout is still there");
        }
        assert_eq!(
            mend(&mut busy(&mut rng, 200_000), 32_768),
            Condition::default()
        );
    }

    #[test]
    fn what_repeats_itself_is_left() {
        let mut rng = StdRng::seed_from_u64(2);
        // a slow logger of few steps; a clean slow wave; one that holds each sample;
        // two levels; a fade into silence; a gate
        let mut walk = 0.0f32;
        let logger: Vec<f32> = (0..50_000)
            .map(|_| {
                walk += 0.02 * (rng.random::<f32>() - 0.5);
                (walk * 10.0).round() / 10.0
            })
            .collect();
        let wave: Vec<f32> = (0..100_000)
            .map(|i| (20_000.0 * (i as f32 * 6e-4).sin()).round())
            .collect();
        let held: Vec<f32> = busy(&mut rng, 5_000)
            .into_iter()
            .flat_map(|v| [v; 10])
            .collect();
        let levels: Vec<f32> = (0..50_000).map(|i| ((i / 37) % 2) as f32).collect();
        let fade: Vec<f32> = busy(&mut rng, 50_000)
            .into_iter()
            .enumerate()
            .map(|(i, v)| (v * (1.0 - i as f32 / 40_000.0).max(0.0)).round())
            .collect();
        for (name, x) in [
            ("logger", logger),
            ("wave", wave),
            ("held", held),
            ("levels", levels),
            ("fade", fade),
        ] {
            let mut y = x.clone();
            let condition = mend(&mut y, 32_768);
            assert_eq!(condition, Condition::default(), "{name}");
            assert_eq!(x, y, "{name}");
        }
    }

    #[test]
    fn clipping_is_counted_and_left() {
        let mut rng = StdRng::seed_from_u64(3);
        let full: Vec<f32> = busy(&mut rng, 50_000);
        let mut x: Vec<f32> = full.iter().map(|v| v.clamp(-250.0, 250.0)).collect();
        let before = x.clone();
        let beyond = full.iter().filter(|v| v.abs() >= 250.0).count() as u64;
        let condition = mend(&mut x, 32_768);
        // all but those in runs shorter than three
        assert!(
            condition.clipped > beyond / 2 && condition.clipped <= beyond,
            "{condition:?} {beyond}"
        );
        assert_eq!(condition.stuck, 0);
        assert_eq!(x, before);
        // A wave in coarse steps is flat on top, and not clipped.
        let mut coarse: Vec<f32> = (0..50_000)
            .map(|i| (100.2 * (i as f32 * 0.01).sin()).round())
            .collect();
        assert_eq!(mend(&mut coarse, 32_768), Condition::default());
        // A dead channel says so.
        assert!(mend(&mut [3.0; 100], 64).constant);
    }
}
