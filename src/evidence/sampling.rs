//! Sampling that changes within one file: a logger that switches its rate, a clock
//! that drifts. Each stretch with a rate of its own folds the band anew, like another
//! recording of the same scene.

use super::stamp_line::StampedPasses;
use crate::units::U95;
use serde::Serialize;

/// Rows whose median step is one reading of the rate.
const WINDOW: usize = 64;
/// Readings in a row that a new rate must last.
const LASTING: usize = 4;
/// Relative change of the step that is another rate; a median over [`WINDOW`] rows of
/// stamps that jitter by a fifth of the period strays by less.
const ANOTHER: f64 = 0.08;
/// A drift below this is of no matter for any tone, parts per million.
const LEAST_PPM: f64 = 1.0;

/// A stretch of the file with one rate.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Stretch {
    /// First stamp, s from the file's first.
    pub from_s: f64,
    /// Last stamp.
    pub to_s: f64,
    /// Samples per second by the stamps.
    pub rate_hz: f64,
}

/// What the stamps say of the rate through the file.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Sampling {
    /// Stretches with rates of their own, one after another; one where nothing changes.
    pub stretches: Vec<Stretch>,
    /// How much faster the last third of the only stretch was sampled than the first,
    /// parts per million; 0 where not certain.
    pub drift_ppm: f64,
    /// ±, 95 %, parts per million.
    pub drift_ppm_u95: f64,
    /// In plain words, where something changes.
    pub statement: Option<String>,
}

/// Follows the stamps once; `None` without stamps, or too few.
///
/// # Errors
/// The recording's own.
pub fn survey<P: StampedPasses>(recording: &P) -> Result<Option<Sampling>, P::Error> {
    let mut readings: Vec<Reading> = Vec::new();
    let mut times: Vec<f64> = Vec::with_capacity(WINDOW + 1);
    let mut frame = 0;
    let stamped = recording.for_each_stamped(&mut |block| {
        for (&n, &t) in block.frames.iter().zip(&block.times_s) {
            if times.is_empty() {
                frame = n;
            }
            times.push(t);
            if times.len() > WINDOW {
                readings.push(Reading::of(&times, frame));
                // The last stamp of a window is the first of the next.
                times.drain(..WINDOW);
                frame = n;
            }
        }
        true
    })?;
    if !stamped || readings.len() < 2 * LASTING {
        return Ok(None);
    }
    Ok(Some(judge(&readings)))
}

/// One window of rows.
#[derive(Debug, Clone, Copy)]
struct Reading {
    from_s: f64,
    to_s: f64,
    /// Median step: gaps and jitter do not count.
    step_s: f64,
    first_frame: f64,
}

impl Reading {
    fn of(times: &[f64], frame: u64) -> Reading {
        let mut steps: Vec<f64> = times
            .windows(2)
            .map(|w| match w {
                [a, b] => b - a,
                _ => 0.0,
            })
            .collect();
        steps.sort_unstable_by(f64::total_cmp);
        // Rounded steps alternate: the mean of the middle half is finer than a median.
        let quarter = steps.len() / 4;
        let middle = steps
            .get(quarter..steps.len() - quarter)
            .unwrap_or_default();
        Reading {
            from_s: times.first().copied().unwrap_or(0.0),
            to_s: times.last().copied().unwrap_or(0.0),
            step_s: middle.iter().sum::<f64>() / middle.len().max(1) as f64,
            first_frame: frame as f64,
        }
    }
}

fn judge(readings: &[Reading]) -> Sampling {
    let mut stretches: Vec<Vec<Reading>> = vec![Vec::new()];
    for (i, &reading) in readings.iter().enumerate() {
        let here = stretches.last().map_or(&[][..], Vec::as_slice);
        let usual = typical(here);
        let ahead = readings.get(i..(i + LASTING).min(readings.len()));
        let changed = here.len() >= LASTING
            && ahead.is_some_and(|a| {
                a.len() == LASTING
                    && a.iter().all(|r| differs(r.step_s, usual))
                    && a.iter().all(|r| !differs(r.step_s, typical(a)))
            });
        if changed {
            stretches.push(Vec::new());
        }
        if let Some(last) = stretches.last_mut() {
            last.push(reading);
        }
    }
    let described: Vec<Stretch> = stretches.iter().filter_map(|s| stretch(s)).collect();
    let mut sampling = Sampling {
        stretches: described,
        drift_ppm: 0.0,
        drift_ppm_u95: 0.0,
        statement: None,
    };
    if let [_, _, ..] = sampling.stretches.as_slice() {
        let rates: Vec<String> = sampling
            .stretches
            .iter()
            .map(|s| {
                format!(
                    "{:.6} Hz from {:.1} s to {:.1} s",
                    s.rate_hz, s.from_s, s.to_s
                )
            })
            .collect();
        sampling.statement = Some(format!(
            "the sample rate changes within the file: {}; cut it there and reconcile the parts, which tells apart what folds",
            rates.join(", then ")
        ));
    } else if let Some((ppm, u95)) = drift(readings) {
        sampling.drift_ppm = ppm;
        sampling.drift_ppm_u95 = u95;
        sampling.statement = Some(format!(
            "the sample clock drifts by {ppm:.1} ± {u95:.1} ppm from the first third of the file to the last, by its own stamps"
        ));
    }
    sampling
}

fn differs(a: f64, b: f64) -> bool {
    (a / b - 1.0).abs() > ANOTHER
}

fn typical(readings: &[Reading]) -> f64 {
    let mut steps: Vec<f64> = readings.iter().map(|r| r.step_s).collect();
    steps.sort_unstable_by(f64::total_cmp);
    steps.get(steps.len() / 2).copied().unwrap_or(f64::NAN)
}

fn stretch(readings: &[Reading]) -> Option<Stretch> {
    let (first, last) = (readings.first()?, readings.last()?);
    let usual = typical(readings);
    // Over all windows without a gap in them: mean step, which jitter leaves alone.
    let whole: Vec<f64> = readings
        .iter()
        .map(|r| (r.to_s - r.from_s) / WINDOW as f64)
        .filter(|&s| !differs(s, usual))
        .collect();
    let step = if whole.is_empty() {
        usual
    } else {
        whole.iter().sum::<f64>() / whole.len() as f64
    };
    (step > 0.0).then(|| Stretch {
        from_s: first.from_s,
        to_s: last.to_s,
        rate_hz: 1.0 / step,
    })
}

/// Change of the rate between the outer thirds, ppm, with its 95 % half-width, where
/// it is certain: lines through the stamps of each third against the frames.
fn drift(readings: &[Reading]) -> Option<(f64, f64)> {
    let third = readings.len() / 3;
    let (a, sd_a) = slope(readings.get(..third)?)?;
    let (b, sd_b) = slope(readings.get(readings.len() - third..)?)?;
    let ppm = 1e6 * (a / b - 1.0);
    let u95 = 1e6 * U95 * (sd_a * sd_a + sd_b * sd_b).sqrt() / a;
    // Twice the interval: the errors of neighbouring stamps may hang together.
    (ppm.abs() > 2.0 * u95 && ppm.abs() > LEAST_PPM).then_some((ppm, u95))
}

/// Seconds per frame and its standard error.
fn slope(readings: &[Reading]) -> Option<(f64, f64)> {
    let n = readings.len() as f64;
    if n < 6.0 {
        return None;
    }
    let x = readings.iter().map(|r| r.first_frame).sum::<f64>() / n;
    let y = readings.iter().map(|r| r.from_s).sum::<f64>() / n;
    let (xx, xy, yy) = readings.iter().fold((0.0, 0.0, 0.0), |(xx, xy, yy), r| {
        let (dx, dy) = (r.first_frame - x, r.from_s - y);
        (xx + dx * dx, xy + dx * dy, yy + dy * dy)
    });
    let b = xy / xx;
    let left = (yy - b * xy).max(0.0);
    (b.is_finite() && b > 0.0).then(|| (b, (left / (n - 2.0) / xx).sqrt()))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::capture::StampedBlock;

    fn block(steps: impl Iterator<Item = f64>) -> StampedBlock {
        let mut t = 0.0;
        let mut block = StampedBlock {
            samples: vec![Vec::new()],
            ..StampedBlock::default()
        };
        for (i, step) in steps.enumerate() {
            block.frames.push(i as u64);
            block.times_s.push(t);
            block.samples[0].push(0.0);
            t += step;
        }
        block
    }

    /// Deterministic jitter within ± a tenth of the step.
    fn jitter(i: u32) -> f64 {
        f64::from(i.wrapping_mul(2_654_435_761) >> 16) / 65_536.0 * 0.2 - 0.1
    }

    #[test]
    fn a_switched_rate_is_seen() {
        let steps = (0..6000u32).map(|i| {
            let step = if i < 2500 { 0.01 } else { 0.013 };
            step * (1.0 + jitter(i + 1) - jitter(i))
        });
        let sampling = survey(&block(steps)).unwrap().unwrap();
        assert_eq!(sampling.stretches.len(), 2, "{sampling:?}");
        assert!((sampling.stretches[0].rate_hz - 100.0).abs() < 0.1);
        assert!((sampling.stretches[1].rate_hz - 1.0 / 0.013).abs() < 0.1);
        // The change is at 25 s, the windows are 0.64 s long.
        assert!((sampling.stretches[1].from_s - 25.0).abs() < 1.3);
        assert!(sampling.statement.unwrap().contains("changes"));
    }

    #[test]
    fn an_even_clock_is_left_alone_and_a_drift_is_measured() {
        let even = (0..6000u32).map(|i| 0.01 * (1.0 + jitter(i + 1) - jitter(i)));
        let sampling = survey(&block(even)).unwrap().unwrap();
        assert_eq!((sampling.stretches.len(), sampling.statement), (1, None));
        // Rate rises by 600 ppm over the file: 400 from third to third.
        let drifting = (0..60_000u32).map(|i| {
            0.01 * (1.0 - 6e-4 * f64::from(i) / 60_000.0 + 0.01 * (jitter(i + 1) - jitter(i)))
        });
        let sampling = survey(&block(drifting)).unwrap().unwrap();
        assert!((sampling.drift_ppm - 400.0).abs() < 5.0, "{sampling:?}");
    }
}
