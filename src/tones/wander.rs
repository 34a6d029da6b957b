//! Tones that move: is a broadened patch of spectrum one tone, and if so where
//! is it, when, and how far does it stray?
//!
//! The patch goes back to a slow complex signal z(t). A tone, however it
//! wanders, keeps its amplitude: |z|² hardly varies. Noise shaped by a resonance
//! looks the same in a spectrum, but its |z|² is exponentially distributed. The
//! second moment of |z|² tells them apart.

use crate::spectrum::Band;
use crate::spectrum::fft::{Complex32, Complex64, ComplexFft};
use statrs::function::erf::erfc;
use statrs::function::gamma::ln_gamma;

/// Chance at which a patch of Gaussian noise would be called a tone, given that it
/// stood out of the floor.
const NOISE_CALLED_TONE: f64 = 5e-4;

/// A tone that wanders or comes and goes.
#[derive(Debug, Clone)]
pub struct Wanderer {
    /// Mean frequency while present, bins of the band's grid.
    pub bin: f64,
    /// Standard deviation of that mean, bins.
    pub bin_sd: f64,
    /// rms excursion from the mean, bins.
    pub wander: f64,
    /// |c|·samples while present: as [`super::refine::Line`]'s.
    pub strength: f64,
    /// Noise power per cell.
    pub noise: f64,
    /// First and last moment present, as fractions of the recording.
    pub present: (f64, f64),
    /// Share of the time between those that it is on.
    pub duty: f64,
    /// Stretches in which a tone that goes on and off is on, as fractions of the
    /// recording; empty for others.
    pub on: Vec<(f64, f64)>,
    /// Furthest excursion from the mean, bins.
    pub strays: f64,
    /// Cells it occupies.
    pub cells: std::ops::Range<usize>,
}

/// Chance that the mean square over the square mean of `n` exponential variates
/// is at most `t`.
///
/// The shares of n exponentials are uniform on a simplex; `t` bounds them to a
/// ball about its centre of radius √((t−1)/n), whose volume over the simplex's
/// is an upper bound, sharp for small t. For large n the statistic is normal
/// about 2 with standard deviation 2/√n (delta method on the moments 1, 2, 6,
/// 24 of the exponential).
pub fn steadiness_of_noise(n: f64, t: f64) -> f64 {
    if n < 2.0 {
        return 1.0;
    }
    let radius2 = ((t - 1.0).max(0.0) / n).max(1e-300);
    let ball = ln_gamma(n) - 0.5 * n.ln() + 0.5 * (n - 1.0) * std::f64::consts::PI.ln()
        - ln_gamma(0.5 * (n + 1.0))
        + 0.5 * (n - 1.0) * radius2.ln();
    let normal = 0.5 * erfc((2.0 - t) * n.sqrt() / 2.0 / std::f64::consts::SQRT_2);
    if n < 40.0 {
        ball.min(0.0).exp()
    } else {
        ball.min(0.0).exp().min(normal)
    }
}

/// The patch as a signal in time: `cells` of the band, critically sampled.
pub(super) struct Patch {
    pub(super) first: usize,
    /// Cells, and samples over the whole grid.
    pub(super) width: usize,
    pub(super) z: Vec<Complex32>,
    power: f64,
    pub(super) noise: f64,
}

impl Patch {
    pub(super) fn cut(band: &Band, cells: std::ops::Range<usize>, noise: f64) -> Patch {
        let mut z = band.bins[cells.clone()].to_vec();
        let power = z.iter().map(|z| f64::from(z.norm_sqr())).sum();
        let noise = noise * z.len() as f64;
        ComplexFft::inverse(z.len()).process(&mut z);
        // Only the part of the grid that holds samples.
        let keep = (z.len() * band.samples).div_ceil(band.grid);
        z.truncate(keep);
        Patch {
            first: band.first_bin + cells.start,
            width: cells.len(),
            z,
            power,
            noise,
        }
    }

    /// Runs of samples during which the tone is on: all of it unless the power
    /// clearly falls to little.
    fn on(&self, smooth: usize) -> (usize, usize) {
        let n = self.z.len();
        let smooth = smooth.clamp(1, n);
        let mut sums = Vec::with_capacity(n);
        let mut sum: f64 = self.z[..smooth]
            .iter()
            .map(|z| f64::from(z.norm_sqr()))
            .sum();
        for i in 0..=n - smooth {
            sums.push(sum);
            if i + smooth < n {
                sum += f64::from(self.z[i + smooth].norm_sqr()) - f64::from(self.z[i].norm_sqr());
            }
        }
        let mut sorted = sums.clone();
        sorted.sort_by(f64::total_cmp);
        let high = sorted[sorted.len() - 1 - sorted.len() / 20];
        let off = self.noise * smooth as f64 / 1.0;
        let level = off + 0.3 * (high - off).max(0.0);
        let on = |&s: &f64| s > level;
        match (sums.iter().position(on), sums.iter().rposition(on)) {
            (Some(a), Some(b)) if b >= a => {
                // centre of the first and last window that is on
                let from = if a == 0 {
                    0
                } else {
                    (a + smooth / 2).min(n - 1)
                };
                let to = if b + smooth >= n {
                    n
                } else {
                    b + smooth / 2 + 1
                };
                (from, to.max(from + 1))
            }
            _ => (0, n),
        }
    }
}

/// A patch no wider than this many cells (participation ratio) is a line, however
/// it came about: what rings that long rings on through the whole recording.
const LINE_CELLS: f64 = 3.0;
/// A tone present for a smaller share of the recording must prove itself steady.
const LEAST_DUTY: f64 = 0.15;
/// Cells at the ends of the patch's signal spoilt by cutting it out of the band.
const SPOILT: usize = 3;

/// Judges the cells `core` of `band` (indices into its bins) standing on a floor
/// of `noise` per cell: one tone, or `None` for noise shaped like a hump or
/// several things at once.
pub fn judge(band: &Band, core: std::ops::Range<usize>, noise: f64) -> Option<Wanderer> {
    let power = |k: &Complex32| f64::from(k.norm_sqr());
    let excess: f64 = band.bins[core.clone()]
        .iter()
        .map(|z| power(z) - noise)
        .sum();
    if excess <= 0.0 {
        return None;
    }
    // Wide enough that the cut hardly shows, not so wide that noise does.
    let most = (0.008 * excess / noise).min(64.0) as usize;
    let pad = (core.len() / 4).max(6).max(most);
    let cells = core.start.saturating_sub(pad)..(core.end + pad).min(band.bins.len());
    if cells.len() < 12 {
        return None;
    }
    let patch = Patch::cut(band, cells.clone(), noise);
    let tone_power = patch.power - patch.noise;
    if tone_power <= 0.0 {
        return None;
    }
    let (sum, sum2) = band.bins[core.clone()]
        .iter()
        .map(|z| (power(z) - noise).max(0.0))
        .fold((0.0, 0.0), |(s, s2), p| (s + p, s2 + p * p));
    let participation = sum * sum / sum2;
    // Windows in which the tone stands 15 dB above the noise show it go on and off.
    let smooth = (30.0 * patch.noise / tone_power).ceil() as usize;
    let (mut from, mut to) = patch.on(smooth);
    // The ends are spoilt by the cut: on from there is on from the start.
    let edge = SPOILT.max(patch.z.len() / 20);
    if from <= edge {
        from = 0;
    }
    if to + edge >= patch.z.len() {
        to = patch.z.len();
    }
    let on = &patch.z[from..to];
    let duty = on.len() as f64 / patch.z.len() as f64;
    // What is on for part of the time is as broad as that time makes it; but one
    // short ring of a struck structure is no tone.
    let own_cells = if duty < LEAST_DUTY {
        participation
    } else {
        participation * duty
    };
    if own_cells > LINE_CELLS {
        let inner = &on[SPOILT.min(on.len() / 8)..on.len() - SPOILT.min(on.len() / 8)];
        let (m2, m4) = inner.iter().fold((0.0, 0.0), |(a, b), z| {
            let p = power(z);
            (a + p, b + p * p)
        });
        let steadiness = m4 * inner.len() as f64 / (m2 * m2);
        // Independent samples, were it Gaussian noise of this shape: exponential
        // cells have E p² = 2 (E p)², hence twice the participation.
        let occupied = (2.0 * participation).min(cells.len() as f64);
        let worth = occupied * duty;
        let mean_power = m2 / inner.len() as f64;
        // A tone with share s of the power in Gaussian noise has a steadiness of
        // 2 − s², noise alone 2; half-way is as far as an amplitude-modulated or
        // disturbed tone may be.
        let share = ((mean_power - patch.noise) / mean_power).clamp(0.0, 1.0);
        // Narrow humps are rare, and of wide ones steadiness alone says enough.
        let chance = NOISE_CALLED_TONE * (20.0 / participation).powi(2).clamp(1.0, 30.0);
        if 2.0 - steadiness < 0.5 * share * share || steadiness_of_noise(worth, steadiness) > chance
        {
            return None;
        }
    }
    // Followed in a wider cut: its windows reject the noise, and more samples show
    // the movement.
    let pad = core.len().clamp(32, 256);
    let wide = core.start.saturating_sub(pad)..(core.end + pad).min(band.bins.len());
    let finer = Patch::cut(band, wide, noise);
    let scale = finer.z.len() as f64 / patch.z.len() as f64;
    let at = |i: usize| ((i as f64 * scale).round() as usize).min(finer.z.len());
    let track = track(&finer, at(from), at(to), tone_power / duty)?;
    let samples_share = band.samples as f64 / band.grid as f64;
    Some(Wanderer {
        bin: track.mean,
        bin_sd: track.mean_sd,
        wander: track.wander,
        strength: (tone_power * samples_share / duty).sqrt(),
        noise,
        present: (
            from as f64 / patch.z.len() as f64,
            to as f64 / patch.z.len() as f64,
        ),
        duty: 1.0,
        on: Vec::new(),
        strays: track.strays,
        cells: band.first_bin + core.start..band.first_bin + core.end,
    })
}

/// Turns of doubt between two windows up to which they can be counted.
const SURE_OF_TURNS: f64 = 0.12;

/// A tone followed through time.
struct Track {
    strays: f64,
    mean: f64,
    mean_sd: f64,
    wander: f64,
}

/// Frequency over time: windows as short as the noise allows, or as long as the
/// tone stays coherent in one.
fn track(patch: &Patch, from: usize, to: usize, tone_power: f64) -> Option<Track> {
    // The cut spoils a few samples at the very ends.
    let spoilt = SPOILT.min((to - from) / 8);
    let start = from + if from < spoilt { spoilt } else { 0 };
    let end = to
        - if to + spoilt > patch.z.len() {
            spoilt
        } else {
            0
        };
    let z = &patch.z[start..end];
    // tone over noise power per sample
    let eta = tone_power / patch.noise.max(1e-30 * tone_power);
    let mut best: Option<(f64, Vec<Window>)> = None;
    let mut windows = 1;
    while z.len() / windows >= 8 && windows <= 4096 {
        let m = z.len() / windows;
        let found = follow(z, windows)?;
        // the largest of m noise cells adds this much by chance
        let by_chance = patch.noise * ((m as f64).ln() + 0.6) / m as f64;
        let coherent = found.iter().map(|w| w.power).sum::<f64>() / windows as f64 - by_chance;
        let clear = eta * m as f64 >= 30.0;
        if best.as_ref().is_none_or(|(c, _)| clear || coherent > *c) {
            best = Some((coherent, found));
        }
        if !clear && coherent > 0.85 * tone_power {
            break;
        }
        windows *= 2;
    }
    let (coherent, found) = best?;
    if coherent < 0.3 * tone_power {
        return None;
    }
    let k = found.len() as f64;
    let m = (z.len() / found.len()) as f64;
    // Cramér–Rao bounds of one complex tone (Rife & Boorstyn 1974): var(ω) =
    // 6/(η·m³), var(φ at the middle) = 1/(2·η·m).
    let sd = (6.0 / (eta * m.powi(3))).sqrt() / std::f64::consts::TAU;
    let phase_sd = (0.5 / (eta * m)).sqrt() / std::f64::consts::TAU;
    let average = found.iter().map(|w| w.cycles).sum::<f64>() / k;
    let variance = found
        .iter()
        .map(|w| (w.cycles - average).powi(2))
        .sum::<f64>()
        / k;
    let step = found
        .windows(2)
        .map(|w| (w[1].cycles - w[0].cycles).powi(2))
        .sum::<f64>()
        / (k - 1.0).max(1.0);
    // How far the tone moves from window to window, beyond the noise.
    let moved = (step - 2.0 * sd * sd).max(0.0);
    let length = (to - from) as f64;
    // Between two middles the frequency is known to this many turns.
    let doubt = m * (moved / 12.0 + sd * sd / 2.0).sqrt();
    let (mean, mean_sd) = if doubt < SURE_OF_TURNS {
        // The phase gained from the first window's middle to the last one's is
        // exact up to whole turns, which the windows' own frequencies settle; what
        // lies outside the middles goes with the outer windows' frequencies.
        let turns: f64 = found
            .windows(2)
            .map(|w| {
                let (a, b) = (&w[0], &w[1]);
                let expected = 0.5 * (a.cycles + b.cycles) * (b.middle - a.middle);
                let gained = b.phase - a.phase;
                gained + (expected - gained).round()
            })
            .sum();
        let first = &found[0];
        let last = &found[found.len() - 1];
        let before = (start - from) as f64 + first.middle + 0.5;
        let after = (to - start) as f64 - 0.5 - last.middle;
        // What the tone may have done out there: half a window's mean strays from
        // the whole window's by about half the movement from window to window.
        let ends = (before * before + after * after) * (sd * sd + moved / 4.0);
        (
            (first.cycles * before + turns + last.cycles * after) / length,
            (2.0 * phase_sd * phase_sd + ends).sqrt() / length,
        )
    } else {
        // Too lively to count turns: the windows' frequencies averaged. Each is
        // where the tone was longest, which may be half its movement off the mean.
        (average, ((sd * sd + moved / 4.0) / k).sqrt())
    };
    let width = patch.width as f64;
    Some(Track {
        mean: patch.first as f64 + mean * width,
        mean_sd: mean_sd * width,
        wander: (variance - sd * sd).max(0.0).sqrt() * width,
        strays: found
            .iter()
            .map(|w| (w.cycles - mean).abs() * width)
            .fold(0.0, f64::max),
    })
}

/// The strongest frequency in one window.
struct Window {
    /// Middle of the window, samples from the start.
    middle: f64,
    /// Frequency, cycles per sample, 0 to 1.
    cycles: f64,
    /// Phase at the middle, turns.
    phase: f64,
    /// Squared amplitude.
    power: f64,
}

/// Splits `z` into `windows` and finds the strongest frequency in each.
fn follow(z: &[Complex32], windows: usize) -> Option<Vec<Window>> {
    let m = z.len() / windows;
    let padded = (8 * m).next_power_of_two();
    let mut fft = ComplexFft::forward(padded);
    let mut work = vec![Complex32::default(); padded];
    (0..windows)
        .map(|w| {
            let start = w * z.len() / windows;
            work.fill(Complex32::default());
            work[..m].copy_from_slice(&z[start..start + m]);
            fft.process(&mut work);
            let ln = |i: usize| f64::from(work[i % padded].norm_sqr()).max(1e-300).ln();
            let (peak, _) = work
                .iter()
                .enumerate()
                .max_by(|a, b| a.1.norm_sqr().total_cmp(&b.1.norm_sqr()))?;
            let (left, centre, right) = (ln(peak + padded - 1), ln(peak), ln(peak + 1));
            let bend = left - 2.0 * centre + right;
            let shift = if bend < 0.0 {
                0.5 * (left - right) / bend
            } else {
                0.0
            };
            let cycles = (peak as f64 + shift) / padded as f64;
            let middle = 0.5 * (m as f64 - 1.0);
            let mut sum = Complex64::default();
            for (i, v) in z[start..start + m].iter().enumerate() {
                let turn = -std::f64::consts::TAU * cycles * (i as f64 - middle);
                sum += Complex64::new(v.re.into(), v.im.into()) * Complex64::from_polar(1.0, turn);
            }
            Some(Window {
                middle: start as f64 + middle,
                cycles,
                phase: sum.arg() / std::f64::consts::TAU,
                power: sum.norm_sqr() / (m * m) as f64,
            })
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::{RngExt, SeedableRng, rngs::StdRng};

    /// Share of draws of `n` exponentials with mean square over square mean ≤ t.
    fn counted(n: usize, t: f64, draws: usize) -> f64 {
        let mut rng = StdRng::seed_from_u64(7);
        let hits = (0..draws)
            .filter(|_| {
                let (a, b) = (0..n).fold((0.0, 0.0), |(a, b), _| {
                    let e = -(1.0 - rng.random::<f64>()).ln();
                    (a + e, b + e * e)
                });
                b * n as f64 / (a * a) <= t
            })
            .count();
        hits as f64 / draws as f64
    }

    #[test]
    fn noise_is_seldom_as_steady_as_claimed() {
        for (n, t) in [(4, 1.15), (6, 1.2), (10, 1.3), (200, 1.75)] {
            let share = counted(n, t, 20_000);
            let bound = steadiness_of_noise(n as f64, t);
            // four standard errors of the count
            let slack = 4.0 * (bound / 20_000.0).sqrt();
            assert!(
                share <= bound + slack,
                "n {n} t {t}: {share} against {bound}"
            );
            assert!(bound < 0.2, "n {n} t {t}: a bound of {bound} says nothing");
        }
    }
}
