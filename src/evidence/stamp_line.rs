//! What the time stamps of a table are: an even line, jitter about it, and rounding.

use crate::capture::{Capture, CaptureError, StampedBlock};
use crate::units::power_db;
use std::f64::consts::{PI, SQRT_2};

/// Rows over which the stamps are compared with a straight line.
const WINDOW: usize = 64;
/// Rows averaged for the drift of the values.
const DRIFT_ROWS: usize = 16;
/// Steps between stamps from which their rounding is found.
const STEPS: usize = 4096;
/// Rows asked for at a time.
const BLOCK_ROWS: usize = 4096;
/// Difference of log-likelihoods from which the wrong of two wins in 5 %: 2·1.645².
const NEEDED: f64 = 2.0 * 1.645 * 1.645;
/// Fewest rows for a claim.
const LEAST_ROWS: f64 = 256.0;

/// A recording whose rows have times of their own, to be passed over repeatedly.
pub trait StampedPasses {
    /// What can go wrong while reading.
    type Error;

    /// Number of channels.
    fn channels(&self) -> usize;

    /// Calls `take` with all rows, block by block, until it says `false`; `false`
    /// where rows have no stamps.
    ///
    /// # Errors
    /// If the recording can no longer be read.
    fn for_each_stamped(
        &self,
        take: &mut dyn FnMut(&StampedBlock) -> bool,
    ) -> Result<bool, Self::Error>;

    /// The first stamp on the file's own scale, s; `None` where there is none.
    ///
    /// # Errors
    /// If the recording can no longer be read.
    fn origin_s(&self) -> Result<Option<f64>, Self::Error> {
        Ok(None)
    }
}

impl StampedPasses for Capture {
    type Error = CaptureError;

    fn channels(&self) -> usize {
        self.spec().channels.len()
    }

    fn for_each_stamped(
        &self,
        take: &mut dyn FnMut(&StampedBlock) -> bool,
    ) -> Result<bool, CaptureError> {
        let Some(mut pass) = self.stamped_blocks(BLOCK_ROWS)? else {
            return Ok(false);
        };
        let mut block = StampedBlock::default();
        while pass.next_into(&mut block)? && take(&block) {}
        Ok(true)
    }

    fn origin_s(&self) -> Result<Option<f64>, CaptureError> {
        let Some(mut pass) = self.stamped_blocks(1)? else {
            return Ok(None);
        };
        pass.next_into(&mut StampedBlock::default())?;
        Ok(pass.origin_s())
    }
}

/// One block of stamped rows in memory: simulated recordings and tests.
impl StampedPasses for StampedBlock {
    type Error = std::convert::Infallible;

    fn channels(&self) -> usize {
        self.samples.len()
    }

    fn for_each_stamped(
        &self,
        take: &mut dyn FnMut(&StampedBlock) -> bool,
    ) -> Result<bool, Self::Error> {
        take(self);
        Ok(!self.frames.is_empty())
    }
}

/// The stamps of a file as one even line and what departs from it.
#[derive(Debug, Clone)]
pub(super) struct StampLine {
    /// Rows with a stamp.
    pub rows: f64,
    /// Samples per second on the stamps' time scale.
    pub rate_hz: f64,
    /// From the first stamp to the last, s.
    pub duration_s: f64,
    /// Step of rounded stamps, s; 0 where none shows.
    pub rounding_s: f64,
    /// rms deviation from straight lines over some ten rows, s.
    pub scatter_s: f64,
    /// What of it rounding does not explain, s; 0 where nothing certain is left.
    pub jitter_s: f64,
    /// Time of frame 0 on the even line, s.
    start_s: f64,
    /// Mean frame and mean stamp of successive windows.
    windows: Vec<(f64, f64)>,
    /// Mean value of successive runs of rows, by channel.
    means: Vec<Vec<f32>>,
    /// Rows per mean.
    mean_rows: usize,
}

impl StampLine {
    /// Passes over the stamps once; `None` without any, or too few.
    pub fn survey<P: StampedPasses>(recording: &P) -> Result<Option<StampLine>, P::Error> {
        let mut survey = Survey::new(recording.channels());
        let stamped = recording.for_each_stamped(&mut |block| {
            survey.take(block);
            true
        })?;
        Ok(stamped.then(|| survey.finish()).flatten())
    }

    /// Makes the drift of the values, which is taken out of them, so slow that it
    /// holds nothing of a tone of `cycles` per sample; none for very slow tones.
    pub fn slow_drift(&mut self, cycles: f64) {
        /// Periods of the tone that a mean must span.
        const PERIODS: f64 = 8.0;
        let wanted = (PERIODS / cycles.max(1e-12) / self.mean_rows as f64).ceil();
        let have = self.means.first().map_or(0, Vec::len);
        if wanted * 4.0 > have as f64 {
            // One mean for all: a constant.
            self.mean_rows = self.mean_rows.saturating_mul(have.max(1));
            for means in &mut self.means {
                *means = vec![mean(means)];
            }
            return;
        }
        let join = (wanted as usize).max(1);
        self.mean_rows *= join;
        for means in &mut self.means {
            *means = means.chunks_exact(join).map(mean).collect();
        }
    }

    /// Time of a frame, had sampling been even, s.
    pub fn even(&self, frame: u64) -> f64 {
        self.start_s + frame as f64 / self.rate_hz
    }

    /// Follows the rows in order.
    pub fn cursor(&self) -> Cursor<'_> {
        Cursor { line: self, at: 0 }
    }

    /// How far apart rungs must be to be told apart with 95 % probability by a tone
    /// of power ratio `snr` to the noise in a resolution cell, Hz along the signed
    /// frequency axis, on which the rungs are ±ν + k·rate: whole rates apart. With D
    /// the expected difference of the log-likelihoods the wrong one wins with
    /// probability Q(√(D/2)), and D = snr·(1 − exp(−(2πΔfσ)²)).
    pub fn resolves_hz(&self, snr: f64) -> f64 {
        if snr <= NEEDED || self.jitter_s <= 0.0 {
            return f64::INFINITY;
        }
        (-(1.0 - NEEDED / snr).ln()).sqrt() / (2.0 * PI * self.jitter_s)
    }

    /// The power ratio from which a tone shows which of two neighbouring rungs is
    /// true: the inverse of [`Self::resolves_hz`] at one rate.
    pub fn tells_from(&self) -> f64 {
        let kept = (-(2.0 * PI * self.rate_hz * self.jitter_s).powi(2)).exp();
        NEEDED / (1.0 - kept)
    }

    /// In plain words: how far the jitter breaks the folding, or why not.
    pub fn statement(&self) -> String {
        let period = 1.0 / self.rate_hz;
        if self.rounding_s >= 0.9 * period {
            return format!(
                "time stamps come in steps of {}, no finer than the sample period: they tell nothing about folding",
                seconds(self.rounding_s)
            );
        }
        if self.jitter_s <= 0.0 {
            return if self.rounding_s > 0.0 && self.scatter_s > 0.0 {
                format!(
                    "time stamps are rounded to {} and even beyond that: they tell nothing about folding",
                    seconds(self.rounding_s)
                )
            } else {
                "time stamps are even: they tell nothing about folding".into()
            };
        }
        let beyond = if self.rounding_s > 0.1 * self.jitter_s {
            format!(" beyond their rounding to {}", seconds(self.rounding_s))
        } else {
            String::new()
        };
        format!(
            "time stamps jitter by {}{beyond}: a tone {:.0} dB or more over the noise shows which of its rungs is true, if samples were taken when the stamps say",
            seconds(self.jitter_s),
            power_db(self.tells_from()).ceil()
        )
    }
}

fn mean(values: &[f32]) -> f32 {
    let sum: f64 = values.iter().map(|&v| f64::from(v)).sum();
    (sum / values.len().max(1) as f64) as f32
}

/// A short time with its unit.
fn seconds(s: f64) -> String {
    match s {
        s if s >= 1.0 => format!("{s:.3} s"),
        s if s >= 1e-3 => format!("{:.3} ms", s * 1e3),
        s if s >= 1e-6 => format!("{:.3} µs", s * 1e6),
        s => format!("{:.3} ns", s * 1e9),
    }
}

/// Walks along a [`StampLine`] with the rows.
pub(super) struct Cursor<'a> {
    line: &'a StampLine,
    at: usize,
}

impl Cursor<'_> {
    /// Most probable instant of a row's sample, s: its stamp, or, where stamps are
    /// rounded, the mean of what the jitter allows within the rounding.
    pub fn instant(&mut self, frame: u64, stamp: f64) -> f64 {
        let line = self.line;
        if line.rounding_s <= 0.0 {
            return stamp;
        }
        let middle = self.smooth(frame as f64);
        let half = 0.5 * line.rounding_s;
        let (low, high) = (stamp - half, stamp + half);
        let scaled = |t: f64| (t - middle) / line.jitter_s.max(1e-30);
        let (a, b) = (scaled(low), scaled(high));
        let density = |x: f64| (-0.5 * x * x).exp() / (2.0 * PI).sqrt();
        let below = |x: f64| 0.5 * statrs::function::erf::erfc(-x / SQRT_2);
        let inside = below(b) - below(a);
        if inside < 1e-9 {
            return middle.clamp(low, high);
        }
        (middle + line.jitter_s * (density(a) - density(b)) / inside).clamp(low, high)
    }

    /// The running mean of the stamps at a frame.
    fn smooth(&mut self, frame: f64) -> f64 {
        let windows = &self.line.windows;
        while self.at + 2 < windows.len() && windows.get(self.at + 1).is_some_and(|w| w.0 < frame) {
            self.at += 1;
        }
        match (windows.get(self.at), windows.get(self.at + 1)) {
            (Some(&(f0, t0)), Some(&(f1, t1))) if f1 > f0 => {
                t0 + (t1 - t0) * (frame - f0) / (f1 - f0)
            }
            _ => self.line.even(frame as u64),
        }
    }

    /// Drift of a channel's values at a row.
    pub fn drift(&self, channel: usize, row: u64) -> f64 {
        let Some(means) = self.line.means.get(channel) else {
            return 0.0;
        };
        let last = means.len().saturating_sub(1);
        let at = ((row as f64 + 0.5) / self.line.mean_rows as f64 - 0.5).clamp(0.0, last as f64);
        let i = (at as usize).min(last.saturating_sub(1));
        let value = |i: usize| means.get(i).map_or(0.0, |&m| f64::from(m));
        if last == 0 {
            return value(0);
        }
        value(i) + (value(i + 1) - value(i)) * (at - i as f64)
    }
}

/// Collects what a [`StampLine`] needs.
struct Survey {
    rows: f64,
    steps: Vec<f64>,
    last: Option<f64>,
    buffer: Vec<(f64, f64)>,
    windows: Vec<(f64, f64)>,
    /// Σ squared residuals about the windows' own lines, and degrees of freedom.
    residual: (f64, f64),
    sums: Vec<(f64, f64)>,
    in_mean: usize,
    means: Vec<Vec<f32>>,
}

impl Survey {
    fn new(channels: usize) -> Survey {
        Survey {
            rows: 0.0,
            steps: Vec::new(),
            last: None,
            buffer: Vec::with_capacity(WINDOW),
            windows: Vec::new(),
            residual: (0.0, 0.0),
            sums: vec![(0.0, 0.0); channels],
            in_mean: 0,
            means: vec![Vec::new(); channels],
        }
    }

    fn take(&mut self, block: &StampedBlock) {
        for (i, (&frame, &time)) in block.frames.iter().zip(&block.times_s).enumerate() {
            self.rows += 1.0;
            if let Some(last) = self.last.replace(time)
                && self.steps.len() < STEPS
            {
                self.steps.push((time - last).abs());
            }
            self.buffer.push((frame as f64, time));
            if self.buffer.len() == WINDOW {
                self.close_window();
            }
            for (sum, samples) in self.sums.iter_mut().zip(&block.samples) {
                if let Some(&value) = samples.get(i).filter(|v| v.is_finite()) {
                    sum.0 += 1.0;
                    sum.1 += f64::from(value);
                }
            }
            self.in_mean += 1;
            if self.in_mean == DRIFT_ROWS {
                self.close_mean();
            }
        }
    }

    fn close_mean(&mut self) {
        self.in_mean = 0;
        for (means, sum) in self.means.iter_mut().zip(&mut self.sums) {
            let before = means.last().copied().unwrap_or(0.0);
            let (n, total) = std::mem::take(sum);
            means.push(if n > 0.0 { (total / n) as f32 } else { before });
        }
    }

    fn close_window(&mut self) {
        let (slope, middle, squares) = line(&self.buffer);
        if slope.is_finite() {
            self.residual.0 += squares;
            self.residual.1 += self.buffer.len() as f64 - 2.0;
        }
        self.windows.push(middle);
        self.buffer.clear();
    }

    fn finish(self) -> Option<StampLine> {
        if self.rows < LEAST_ROWS {
            return None;
        }
        let (slope, (frame, time), _) = line(&self.windows);
        if !(slope.is_finite() && slope > 0.0) {
            return None;
        }
        let variance = self.residual.0 / self.residual.1.max(1.0);
        let rounding_s = common_step(&self.steps, slope);
        let of_rounding = rounding_s * rounding_s / 12.0;
        // Three standard errors of the variance, and a little for rounding errors
        // that are not evenly spread.
        let unsure = variance * 3.0 * (2.0 / self.residual.1.max(1.0)).sqrt() + 0.1 * of_rounding;
        let beyond = variance - of_rounding;
        // Below a billionth of the period a stamp is as good as exact.
        let certain = beyond > unsure && variance.sqrt() > 1e-9 * slope && rounding_s < 0.9 * slope;
        Some(StampLine {
            rows: self.rows,
            rate_hz: 1.0 / slope,
            duration_s: self.last.unwrap_or(0.0),
            rounding_s,
            scatter_s: variance.sqrt(),
            jitter_s: if certain { beyond.sqrt() } else { 0.0 },
            start_s: time - slope * frame,
            windows: self.windows,
            means: self.means,
            mean_rows: DRIFT_ROWS,
        })
    }
}

/// Least-squares line: slope, centre, and the squares left over.
fn line(points: &[(f64, f64)]) -> (f64, (f64, f64), f64) {
    let n = points.len().max(1) as f64;
    let (x, y) = points
        .iter()
        .fold((0.0, 0.0), |(x, y), p| (x + p.0, y + p.1));
    let (x, y) = (x / n, y / n);
    let (xx, xy, yy) = points.iter().fold((0.0, 0.0, 0.0), |(xx, xy, yy), p| {
        let (dx, dy) = (p.0 - x, p.1 - y);
        (xx + dx * dx, xy + dx * dy, yy + dy * dy)
    });
    let slope = xy / xx;
    (slope, (x, y), (yy - slope * xy).max(0.0))
}

/// The step of which all differences are whole multiples (Euclid's algorithm with a
/// tolerance); 0 where it is below a ten-thousandth of the period.
fn common_step(steps: &[f64], period: f64) -> f64 {
    let least = 1e-4 * period;
    let mut step = 0.0f64;
    for &next in steps.iter().filter(|&&s| s > least) {
        let (mut a, mut b) = (next.max(step), next.min(step));
        while b > 0.3 * least {
            let rest = a - b * (a / b).round();
            // Stamps in doubles, and in decimals cut to some digits, are off by a
            // few parts in a thousand of any step that matters.
            (a, b) = if rest.abs() < 1e-3 * b + 1e-6 * period {
                (b, 0.0)
            } else {
                (b, rest.abs())
            };
        }
        step = a;
        if step < least {
            return 0.0;
        }
    }
    step
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::{RngExt, SeedableRng, rngs::StdRng};

    fn survey(times: &[f64]) -> StampLine {
        let block = StampedBlock {
            frames: (0..times.len() as u64).collect(),
            times_s: times.to_vec(),
            samples: vec![vec![0.0; times.len()]],
        };
        StampLine::survey(&block).unwrap().unwrap()
    }

    fn jittered(n: usize, period: f64, sd: f64, step: f64) -> Vec<f64> {
        let mut rng = StdRng::seed_from_u64(11);
        let normal = rand_distr::Normal::new(0.0, sd).unwrap();
        let first = rng.random::<f64>() * period;
        (0..n)
            .map(|i| {
                let t = i as f64 * period + rand_distr::Distribution::sample(&normal, &mut rng);
                let t = t + first;
                if step > 0.0 {
                    (t / step).floor() * step
                } else {
                    t
                }
            })
            .collect()
    }

    #[test]
    fn jitter_is_what_rounding_leaves() {
        // Relative error of an rms from n values: 1/√(2n); 4000 values, 4 sd: 4.5 %,
        // more where a rounding of its size is subtracted.
        for (sd, step, slack) in [(5e-4, 0.0, 0.05), (5e-4, 1e-3, 0.12), (5e-4, 1e-4, 0.05)] {
            let line = survey(&jittered(4000, 0.01, sd, step));
            assert!((line.jitter_s / sd - 1.0).abs() < slack, "{line:?}");
            assert!((line.rounding_s - step).abs() < 1e-9, "{}", line.rounding_s);
            assert!((line.rate_hz - 100.0).abs() < 1e-2);
        }
    }

    #[test]
    fn rounding_alone_is_no_jitter() {
        // Periods that do and do not fit the step, and steps up to the period.
        for (period, step) in [
            (0.01, 0.01),
            (0.0123, 0.001),
            (0.0125, 0.005),
            (0.013, 0.002),
            (0.0107, 0.01),
            (0.01, 0.0),
        ] {
            let line = survey(&jittered(4000, period, 0.0, step));
            assert_eq!(line.jitter_s, 0.0, "{period} {step}: {line:?}");
            assert!(line.statement().contains("nothing"), "{}", line.statement());
        }
    }
}
