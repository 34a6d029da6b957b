//! The sample period, found from the first time stamps of a table.
//!
//! Stamps may be even, jitter, be rounded so that steps alternate or rows share
//! a stamp, come in bursts, and leave gaps. Errors of single stamps cancel over
//! a window of many steps, lost samples do not: that tells them apart.

/// The time line as the first rows show it, in seconds.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct ClockPlan {
    /// Time from one sample to the next, > 0.
    pub period: f64,
    /// Width of the interval in which stamps scatter about an even time line:
    /// the step of rounded stamps, or the peak-to-peak jitter.
    pub scatter: f64,
    /// Several rows share a stamp, or nearly: an equal stamp is no repetition.
    pub shared: bool,
    /// Time of the first frame on the line less its stamp.
    pub start: f64,
    /// Most frames that a gap may hold; a longer one is a clock that was set.
    pub longest_gap: u64,
}

impl ClockPlan {
    /// Exact stamps of a known period.
    pub(super) fn even(period: f64) -> ClockPlan {
        ClockPlan {
            period,
            scatter: 0.0,
            shared: false,
            start: 0.0,
            longest_gap: u64::MAX,
        }
    }
}

/// Collects stamps until they suffice for a [`ClockPlan`].
#[derive(Debug, Default)]
pub(super) struct ClockProbe {
    /// Each stamp, and how many rows in succession have it.
    runs: Vec<(f64, u64)>,
    rows: u64,
    /// Rows that are wholly like the one before.
    copies: u64,
    /// Least step that the stamps' decimals can tell, in seconds; 0 if unknown.
    resolution: f64,
}

impl ClockProbe {
    /// For stamps written to so many seconds.
    pub(super) fn new(resolution: f64) -> ClockProbe {
        ClockProbe {
            resolution,
            ..ClockProbe::default()
        }
    }

    /// Takes a stamp; `true` when no more are needed. `copy`: the row is wholly
    /// like the one before it.
    pub(super) fn take(&mut self, stamp: f64, copy: bool) -> bool {
        const ROWS: u64 = 4096;
        const RUNS: usize = 8;
        self.rows += 1;
        self.copies += u64::from(copy);
        match self.runs.last_mut() {
            Some((last, count)) if *last == stamp => *count += 1,
            _ => self.runs.push((stamp, 1)),
        }
        self.rows >= ROWS && self.runs.len() >= RUNS
    }

    /// The plan; `None` where time does not move ahead.
    pub(super) fn plan(self) -> Option<ClockPlan> {
        /// Share of repeated stamps from which they are taken as rounded.
        const SHARED: f64 = 0.05;
        let stamps: Vec<f64> = self.runs.iter().map(|run| run.0).collect();
        let steps = sorted(differences(&stamps, 1).filter(|&step| step > 0.0));
        let step = quantile(&steps, 0.5)?;
        let repeats = self.rows - self.runs.len() as u64;
        let rounded = repeats as f64 >= SHARED * self.rows as f64
            || self.copies == 0 && repeats_evenly(&self.runs);
        let plan = if rounded {
            self.rounded(step)
        } else if lacks_teeth(&steps, step, self.resolution) {
            Some(ClockPlan::even(comb_period(&stamps, step)))
        } else {
            bursts(&steps, step).or_else(|| single(&stamps, step))
        };
        plan.map(|plan| ClockPlan {
            start: self.start(plan),
            ..plan
        })
    }

    /// Rows per stamp, from runs of about the usual length.
    fn rounded(&self, step: f64) -> Option<ClockPlan> {
        // The first run may have begun before the file, the last is not over.
        let inner = match self.runs.as_slice() {
            [_, inner @ .., _] if !inner.is_empty() => inner,
            all => all,
        };
        let rows = |run: &(f64, u64)| run.1 as f64;
        let usual = quantile(&sorted(inner.iter().map(rows)), 0.5)?;
        let near = inner
            .iter()
            .map(rows)
            .filter(|rows| (rows - usual).abs() <= 1.0);
        let period = step / mean(near)?;
        Some(ClockPlan {
            period,
            scatter: step,
            shared: true,
            start: 0.0,
            longest_gap: u64::MAX,
        })
    }

    /// Mean distance of the first stamps from a line through the very first.
    fn start(&self, plan: ClockPlan) -> f64 {
        const RUNS: usize = 10;
        let Some(&(origin, _)) = self.runs.first() else {
            return 0.0;
        };
        let longest = 2.0 * (plan.period + plan.scatter);
        let (mut row, mut sum, mut last) = (0.0, 0.0, origin);
        let whole = self.runs.len().saturating_sub(1).clamp(1, RUNS);
        for &(stamp, count) in self.runs.iter().take(whole) {
            if !(0.0..=longest).contains(&(stamp - last)) {
                break;
            }
            let count = count as f64;
            let middle = row + (count - 1.0) / 2.0;
            sum += count * (stamp - origin - plan.period * middle);
            row += count;
            last = stamp;
        }
        if row > 0.0 { sum / row } else { 0.0 }
    }
}

/// Whether nearly all steps are one period and the others whole multiples of it,
/// finer than the stamps' rounding could make them: samples are lost, however
/// regularly.
fn lacks_teeth(steps: &[f64], step: f64, resolution: f64) -> bool {
    const OFF: f64 = 0.02;
    const SINGLE: f64 = 0.6;
    if resolution <= 0.0 || step < 1.9 * resolution || steps.is_empty() {
        return false;
    }
    let whole = |&&one: &&f64| {
        let times = one / step;
        times > 0.5 && (times - times.round()).abs() < OFF * times
    };
    let on_comb = steps.iter().filter(whole).count() as f64;
    let single = steps
        .iter()
        .filter(|&&one| (one / step - 1.0).abs() < OFF)
        .count() as f64;
    let n = steps.len() as f64;
    // More missing than there are would be rows that come in bursts.
    let total: f64 = steps.iter().sum();
    on_comb >= 0.99 * n && single >= SINGLE * n && single < n && total < 2.0 * n * step
}

/// Whether now and then two rows share a stamp, at even distances: stamps
/// rounded to a step that is a little longer than the period.
fn repeats_evenly(runs: &[(f64, u64)]) -> bool {
    const FEWEST: usize = 4;
    let places: Vec<usize> = (0..runs.len())
        .filter(|&place| runs.get(place).is_some_and(|run| run.1 == 2))
        .collect();
    let apart = places.windows(2).map(|pair| match pair {
        [a, b] => b - a,
        _ => 0,
    });
    let (least, most) = (apart.clone().min(), apart.max());
    places.len() >= FEWEST
        && runs.iter().all(|run| run.1 <= 2)
        && matches!((least, most), (Some(least), Some(most)) if most - least <= 1)
}

/// Rows stamped on arrival: many short steps, and most of the time in long
/// ones, which are too many and too long for lost samples.
fn bursts(steps: &[f64], step: f64) -> Option<ClockPlan> {
    const MANY: f64 = 0.05;
    const LONG: f64 = 5.0;
    let total: f64 = steps.iter().sum();
    let long: Vec<f64> = steps
        .iter()
        .copied()
        .filter(|&one| one > LONG * step)
        .collect();
    if (long.len() as f64) < MANY * steps.len() as f64 || long.iter().sum::<f64>() < 0.5 * total {
        return None;
    }
    let period = total / steps.len() as f64;
    Some(ClockPlan {
        period,
        scatter: quantile(&long, 0.95)?,
        shared: true,
        start: 0.0,
        longest_gap: u64::MAX,
    })
}

/// One stamp per row.
fn single(stamps: &[f64], step: f64) -> Option<ClockPlan> {
    const LONGEST: usize = 32;
    let window = (stamps.len() / 8).clamp(1, LONGEST);
    let spans = sorted(differences(stamps, window).filter(|&span| span > 0.0));
    let scatter = scatter(stamps, window / 2);
    let spread = quantile(&spans, 0.95)? - quantile(&spans, 0.05)?;
    let plan = |period, scatter| ClockPlan {
        period,
        scatter,
        shared: false,
        start: 0.0,
        longest_gap: u64::MAX,
    };
    // The ends of a window scatter against each other by 1.4 times as much
    // (5 % to 95 %) if evenly distributed.
    const DUST: f64 = 1e-6;
    if spread <= 1.5 * scatter + DUST * step {
        let inner = |q| quantile(&spans, q);
        let (low, high) = (inner(0.05)?, inner(0.95)?);
        let usual = spans
            .iter()
            .copied()
            .filter(|span| (low..=high).contains(span));
        return Some(plan(mean(usual)? / window as f64, scatter));
    }
    // Samples are lost here and there, so that windows are too long by whole
    // periods: the even comb of times on which the stamps lie tells.
    Some(plan(comb_period(stamps, step), 0.0))
}

/// The period near `step` for which the phases of the stamps agree best: the
/// maximum of `|Σ exp(2πi·t/period)|`, searched on ever more stamps.
fn comb_period(stamps: &[f64], step: f64) -> f64 {
    /// Range searched, as a share of the frequency.
    const RANGE: f64 = 0.12;
    /// Trials in the width of a maximum.
    const FINE: f64 = 4.0;
    let origin = stamps.first().copied().unwrap_or(0.0);
    let mut frequency = 1.0 / step;
    let mut range = RANGE * frequency;
    let mut n = 256;
    loop {
        // A long gap would narrow the maximum without bound.
        let near = |&&stamp: &&f64| (stamp - origin).abs() < 4.0 * n as f64 * step;
        let times: Vec<f64> = stamps
            .iter()
            .take(n)
            .filter(near)
            .map(|stamp| stamp - origin)
            .collect();
        let longest = times.iter().copied().fold(step, f64::max);
        let width = 1.0 / (FINE * longest);
        let trials = (range / width).ceil() as i32;
        let agreement = |frequency: f64| {
            let phase = |time: &f64| (std::f64::consts::TAU * time * frequency).sin_cos();
            let (s, c) = times
                .iter()
                .map(phase)
                .fold((0.0, 0.0), |(a, b), (s, c)| (a + s, b + c));
            s.hypot(c)
        };
        frequency = (-trials..=trials)
            .map(|trial| frequency + f64::from(trial) * width)
            .map(|frequency| (agreement(frequency), frequency))
            .max_by(|a, b| a.0.total_cmp(&b.0))
            .map_or(frequency, |(_, frequency)| frequency);
        range = 2.0 * width;
        if n >= stamps.len() {
            return 1.0 / frequency;
        }
        n *= 4;
    }
}

/// Width of the stamps' distribution about their running mean, if it is even.
fn scatter(stamps: &[f64], half: usize) -> f64 {
    let window = 2 * half + 1;
    let residuals = stamps
        .windows(window)
        .filter_map(|near| Some(near.get(half)? - near.iter().sum::<f64>() / window as f64));
    let residuals = sorted(residuals);
    match (quantile(&residuals, 0.1), quantile(&residuals, 0.9)) {
        (Some(low), Some(high)) => (high - low) / 0.8,
        _ => 0.0,
    }
}

/// Differences of values `apart` places from each other.
fn differences(values: &[f64], apart: usize) -> impl Iterator<Item = f64> {
    values
        .iter()
        .zip(values.iter().skip(apart))
        .map(|(a, b)| b - a)
}

fn sorted(values: impl Iterator<Item = f64>) -> Vec<f64> {
    let mut values: Vec<f64> = values.collect();
    values.sort_unstable_by(f64::total_cmp);
    values
}

fn quantile(sorted: &[f64], q: f64) -> Option<f64> {
    let last = sorted.len().checked_sub(1)?;
    sorted.get((q * last as f64).round() as usize).copied()
}

fn mean(values: impl Iterator<Item = f64>) -> Option<f64> {
    let (sum, n) = values.fold((0.0, 0.0), |(sum, n), value| (sum + value, n + 1.0));
    (n > 0.0).then(|| sum / n)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn plan(stamps: impl Iterator<Item = f64>) -> Option<ClockPlan> {
        let mut probe = ClockProbe::default();
        for stamp in stamps {
            if probe.take(stamp, false) {
                break;
            }
        }
        probe.plan()
    }

    #[test]
    fn no_time_no_plan() {
        assert_eq!(plan([].into_iter()), None);
        assert_eq!(plan([1.0].into_iter()), None);
        assert_eq!(plan([1.0; 50].into_iter()), None);
        assert_eq!(plan((0..50).map(|i| f64::from(-i))), None);
    }

    #[test]
    fn even_stamps_give_their_step() {
        for n in [2, 3, 20, 5000] {
            let plan = plan((0..n).map(|i| 7.0 + f64::from(i) / 128.0)).unwrap();
            assert_eq!(
                (plan.period, plan.scatter, plan.shared),
                (1.0 / 128.0, 0.0, false)
            );
            assert_eq!(plan.start, 0.0);
        }
    }

    #[test]
    fn a_comb_with_missing_teeth() {
        use rand::{RngExt, SeedableRng};
        let mut random = rand::rngs::StdRng::seed_from_u64(7);
        let kept: Vec<i32> = (0..6000)
            .filter(|_| random.random::<f64>() > 0.25)
            .collect();
        let stamps = kept.into_iter().map(|n| f64::from(n) * 0.02);
        let plan = plan(stamps).unwrap();
        // The comb of 4096 rows is a 4096th of a period wide, searched in fours.
        assert!(
            (plan.period / 0.02 - 1.0).abs() < 1.0 / 16_000.0,
            "{plan:?}"
        );
    }

    #[test]
    fn stamps_rounded_down_start_half_a_step_early() {
        // 8 rows per stamp of 8 ms: the rows' middle is 3.5 ms after the first.
        let plan = plan((0..5000).map(|i| f64::from(i / 8) * 0.008)).unwrap();
        assert!(plan.shared);
        assert!((plan.period - 0.001).abs() < 1e-12, "{plan:?}");
        assert!((plan.scatter - 0.008).abs() < 1e-12, "{plan:?}");
        assert!((plan.start + 0.0035).abs() < 1e-9, "{plan:?}");
    }
}
