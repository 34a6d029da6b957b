//! The mean frequency of a tone from its track, whether it wanders or not.
//!
//! A steady tone's best estimate weighs the middle of the recording more than its
//! ends; a wandering tone's mean is the phase gained from end to end. Between the two
//! lies every tone that strays a little. So its frequency is taken as a random walk of
//! unknown intensity q, none included: a Kalman filter over the track's phases and
//! frequencies gives the mean, its variance and the likelihood for each q, and the
//! answers are averaged with their posterior weights.
//!
//! Times are in lengths of the recording, frequencies in its resolution cells, so
//! that their product is in turns.

use super::track::{Track, TrackPoint, coarser};
use crate::units::SeenHz;

/// Prior probability that a tone does not wander at all: for where its mean is, and,
/// lower, for how sure that is: the interval is to hold for those too that do stray.
const STEADY: f64 = 0.5;
const STEADY_FOR_INTERVAL: f64 = 0.2;
/// Intensities considered, cells² per recording: from one that nothing shows to one
/// that no window would be coherent in.
const LEAST_LOG10: f64 = -3.0;
const STEPS: i32 = 22;
const STEP_LOG10: f64 = 0.5;
/// A phase predicted no better than this, in turns, cannot be told from one a whole
/// turn off.
const SURE_OF_TURNS: f64 = 0.12;

/// A mean frequency.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Mean {
    /// What it is above that of a steady tone fitted to the same track, cells.
    pub shift: f64,
    /// It is above `about` by this, cells.
    pub offset: f64,
    /// Variance beyond a steady tone's, cells².
    pub more: f64,
    /// Variance, cells².
    pub variance: f64,
    /// Posterior probability that the tone is steady.
    pub steady: f64,
}

/// Mean over `present` of a tone near `about` cells; `None` for fewer than two points.
pub fn mean(track: &Track, about: f64, present: (f64, f64)) -> Option<Mean> {
    if track.points.len() < 2 {
        return None;
    }
    let filter = |q| Filter::run(track, about, present, q);
    let still = filter(0.0)?;
    let mut ways = vec![still];
    for i in 0..STEPS {
        ways.push(filter(10f64.powf(LEAST_LOG10 + STEP_LOG10 * f64::from(i)))?);
    }
    let most = ways
        .iter()
        .fold(f64::NEG_INFINITY, |m, w| m.max(w.ln_likelihood));
    let weights = |steady: f64| -> Vec<f64> {
        let each = (1.0 - steady) / f64::from(STEPS);
        let weights: Vec<f64> = ways
            .iter()
            .enumerate()
            .map(|(i, w)| if i == 0 { steady } else { each } * (w.ln_likelihood - most).exp())
            .collect();
        let total: f64 = weights.iter().sum();
        weights.into_iter().map(|w| w / total).collect()
    };
    let average = |weights: &[f64], of: &dyn Fn(&Outcome) -> f64| {
        weights
            .iter()
            .zip(&ways)
            .map(|(p, w)| p * of(w))
            .sum::<f64>()
    };
    let likely = weights(STEADY);
    let offset = average(&likely, &|w| w.mean);
    let variance = average(&weights(STEADY_FOR_INTERVAL), &|w| {
        w.variance + (w.mean - offset).powi(2)
    });
    Some(Mean {
        shift: offset - still.mean,
        offset,
        more: (variance - still.variance).max(0.0),
        variance,
        steady: *likely.first()?,
    })
}

/// What one intensity makes of a track.
#[derive(Clone, Copy)]
struct Outcome {
    mean: f64,
    variance: f64,
    ln_likelihood: f64,
}

/// State: phase at the beginning, phase now, frequency now, each less `about`'s.
struct Filter {
    x: [f64; 3],
    p: [[f64; 3]; 3],
    q: f64,
    ln_likelihood: f64,
}

impl Filter {
    fn run(track: &Track, about: f64, present: (f64, f64), q: f64) -> Option<Outcome> {
        let h = 1.0 / track.windows as f64;
        // A window's fit sees the walk's mean within it, not its middle: the variance
        // of one about the other, of a walk pinned in the middle.
        let (f_extra, p_extra) = (q * h / 16.0, q * h.powi(3) / 1000.0);
        let point = |i: usize| -> Option<(f64, f64, f64, f64, f64)> {
            let p = track.points.get(i)?;
            let at = (p.index as f64 + 0.5) * h;
            Some((
                at,
                p.turns - (about * at).rem_euclid(1.0),
                p.turns_sd * p.turns_sd + p_extra,
                p.cells - about,
                p.cells_sd * p.cells_sd + f_extra,
            ))
        };
        let (at, phase, phase_var, f, f_var) = point(0)?;
        // Back from the first point to the beginning: the walk is one in either sense.
        let back = (at - present.0).max(0.0);
        let mut filter = Filter {
            x: [phase - f * back, phase, f],
            p: [
                [
                    phase_var + back * back * f_var + q * back.powi(3) / 3.0,
                    phase_var,
                    -back * f_var,
                ],
                [phase_var, phase_var, 0.0],
                [-back * f_var, 0.0, f_var],
            ],
            q,
            ln_likelihood: 0.0,
        };
        let mut now = at;
        for i in 1..track.points.len() {
            let (at, phase, phase_var, f, f_var) = point(i)?;
            filter.advance(at - now);
            now = at;
            // Frequency first: it helps to count the turns.
            filter.update(2, f - filter.x[2], f_var);
            if filter.p[1][1] + phase_var < SURE_OF_TURNS * SURE_OF_TURNS {
                let off = phase - filter.x[1];
                filter.update(1, off - off.round(), phase_var);
            }
            // A phase not used could have been anything: density 1 per turn.
        }
        filter.advance((present.1 - now).max(0.0));
        let length = present.1 - present.0;
        let p = &filter.p;
        (length > 0.0).then(|| Outcome {
            mean: (filter.x[1] - filter.x[0]) / length,
            variance: (p[0][0] + p[1][1] - 2.0 * p[0][1]) / (length * length),
            ln_likelihood: filter.ln_likelihood,
        })
    }

    fn advance(&mut self, dt: f64) {
        self.x[1] += dt * self.x[2];
        let p = self.p;
        self.p[0][1] = p[0][1] + dt * p[0][2];
        self.p[1][1] = p[1][1] + 2.0 * dt * p[1][2] + dt * dt * p[2][2] + self.q * dt.powi(3) / 3.0;
        self.p[1][2] = p[1][2] + dt * p[2][2] + self.q * dt * dt / 2.0;
        self.p[2][2] = p[2][2] + self.q * dt;
        self.mirror();
    }

    /// One measurement of component `c`, `off` from what was expected.
    fn update(&mut self, c: usize, off: f64, variance: f64) {
        let s = self.p[c][c] + variance;
        let gain: [f64; 3] = std::array::from_fn(|i| self.p[i][c] / s);
        let row = self.p[c];
        for ((x, p), g) in self.x.iter_mut().zip(&mut self.p).zip(gain) {
            *x += g * off;
            for (p, r) in p.iter_mut().zip(row) {
                *p -= g * r;
            }
        }
        self.mirror();
        self.ln_likelihood -= 0.5 * (off * off / s + (std::f64::consts::TAU * s).ln());
    }

    fn mirror(&mut self) {
        for i in 0..3 {
            for j in 0..i {
                self.p[i][j] = self.p[j][i];
            }
        }
    }
}

/// rms excursion of a track's frequency from its mean, cells, the noise taken out; 0
/// where it does not show.
///
/// Longer windows have less noise but even out what moves faster than they last: the
/// shortest whose noise is less than the movement decide, or else those that show it
/// most clearly.
pub fn excursion(track: &Track) -> f64 {
    let step = 1.0 / track.windows.max(1) as f64;
    let mut points: Vec<TrackPoint> = track
        .points
        .iter()
        .map(|p| TrackPoint {
            at_s: (p.index as f64 + 0.5) * step,
            seen_hz: SeenHz(p.cells),
            sd_hz: p.cells_sd,
            turns: p.turns,
            turns_sd: p.turns_sd,
        })
        .collect();
    let mut step = step;
    let mut best = (0.0, 0.0);
    while points.len() >= 4 {
        let n = points.len() as f64;
        let average = points.iter().map(|p| p.seen_hz.0).sum::<f64>() / n;
        let variance = points
            .iter()
            .map(|p| (p.seen_hz.0 - average).powi(2))
            .sum::<f64>()
            / (n - 1.0);
        let noise = points.iter().map(|p| p.sd_hz * p.sd_hz).sum::<f64>() / n;
        let clear = (variance / noise - 1.0) * n.sqrt();
        if clear > best.0 {
            best = (clear, (variance - noise).sqrt());
        }
        if variance > 2.0 * noise {
            break;
        }
        points = coarser(&points, step);
        step *= 2.0;
    }
    // by chance alone the clearest of a few levels is worth about this
    if best.0 < 4.0 { 0.0 } else { best.1 }
}
