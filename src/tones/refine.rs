//! Steady tones fitted together by least squares on the transform of the whole
//! recording: the maximum-likelihood estimate in locally white noise.
//!
//! Each tone is refitted in turn with all others taken out, until nothing
//! moves, so neighbours' leakage does not bias it. Its mirror image below 0 and
//! above half the rate is part of the model, so a tone next to either end has
//! the honest, wider interval that the overlap leaves it.

use super::kernel::{columns, dirichlet};
use crate::spectrum::Band;
use crate::spectrum::fft::{Complex32, Complex64};

/// Bins on either side that enter a fit. Leaving out the rest costs 0.8 % of
/// the information on frequency (Σ_{|k|>B} 1/k² against π²/3).
const REACH: i64 = 128;
/// Bins on either side whose median is a line's noise.
pub const NOISE_REACH: i64 = 96;
/// A tone's skirts are taken out as far as they exceed this share of the noise.
const SKIRT: f64 = 0.02;
const CYCLES: usize = 6;
/// Plain noise above this many times the Hann view's is leakage, not noise; the
/// Hann view costs more than this in precision.
const LEAKY: f64 = 1.5;

/// Which view of the transform a tone is fitted in.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum View {
    /// As it is: the most precise.
    Plain,
    /// Hann-windowed: where the leakage of steep noise or of a strong unsteady
    /// neighbour stands above the noise proper.
    Hann,
}

/// A steady tone in bins of the band's grid.
#[derive(Debug, Clone)]
pub struct Line {
    /// Where it was first seen, bins.
    pub peak: f64,
    /// Frequency, bins.
    pub bin: f64,
    /// Standard deviation of `bin`.
    pub bin_sd: f64,
    /// Complex amplitude: the tone is 2·|c|·cos(…).
    pub c: Complex64,
    /// Noise power per cell, E|X|².
    pub noise: f64,
    /// How it is fitted.
    pub view: View,
    /// How far its mean may be from where a steady one fits best, standard deviation,
    /// bins, by what is left of it.
    pub strayed: f64,
    /// Mean of |residual|² over noise in the cells around it once it is taken
    /// out: about 1 for a steady tone.
    pub leftover: f64,
}

impl Line {
    /// Tone power over noise power in one cell.
    pub fn snr(&self, samples: usize) -> f64 {
        (self.c.norm() * samples as f64).powi(2) / self.noise
    }
}

/// What is left of a band when lines are taken out.
pub struct Residual {
    band: Band,
}

impl Residual {
    /// Nothing taken out yet.
    pub fn new(band: &Band) -> Self {
        Residual { band: band.clone() }
    }

    /// The band as it stands, for good.
    pub fn into_band(self) -> Band {
        self.band
    }

    /// The band as it stands.
    pub fn band(&self) -> &Band {
        &self.band
    }

    fn range(&self, centre: f64, reach: i64) -> std::ops::Range<i64> {
        let first = self.band.first_bin as i64;
        let end = first + self.band.bins.len() as i64;
        let centre = centre.round() as i64;
        (centre - reach).max(first)..(centre + reach + 1).min(end)
    }

    /// Is the mirror image close enough to matter?
    fn mirror_matters(&self, bin: f64, reach: i64) -> bool {
        let half = self.band.grid as f64 / 2.0;
        bin.min(half - bin) < reach as f64
    }

    /// Adds `sign` times the line over all bins where it matters.
    pub fn add(&mut self, line: &Line, sign: f64) {
        let (n, m) = (self.band.samples, self.band.grid);
        // skirt power ≈ |c|²(M/πd)², d in bins
        let reach = (line.c.norm() * m as f64
            / (std::f64::consts::PI * (SKIRT * line.noise).sqrt()))
        .clamp(16.0, 50_000.0) as i64;
        let mirror = self.mirror_matters(line.bin, reach);
        let first = self.band.first_bin as i64;
        for k in self.range(line.bin, reach) {
            let mut z = line.c * dirichlet(k as f64 - line.bin, n, m).0;
            if mirror {
                z += line.c.conj() * dirichlet(k as f64 + line.bin, n, m).0;
            }
            let z = z * sign;
            self.band.bins[(k - first) as usize] += Complex32::new(z.re as f32, z.im as f32);
        }
    }

    /// Bin `k` with `line`, which is at present taken out, back in it; not its mirror
    /// image.
    pub fn with(&self, line: &Line, k: i64) -> Option<Complex32> {
        let (n, m) = (self.band.samples, self.band.grid);
        let z = line.c * dirichlet(k as f64 - line.bin, n, m).0;
        Some(self.band.get(k)? + Complex32::new(z.re as f32, z.im as f32))
    }

    /// Median-based noise power around `bin` in the chosen view.
    fn noise(&self, bin: f64, view: View) -> Option<f64> {
        let mut powers: Vec<f64> = self
            .range(bin, NOISE_REACH)
            .filter_map(|k| self.value(k, view))
            .map(|z| z.norm_sqr())
            .collect();
        if powers.is_empty() {
            return None;
        }
        let mid = powers.len() / 2;
        let median = *powers.select_nth_unstable_by(mid, f64::total_cmp).1;
        let least = f64::from(self.band.least_noise).max(f64::MIN_POSITIVE);
        Some((median / std::f64::consts::LN_2).max(least))
    }

    fn value(&self, k: i64, view: View) -> Option<Complex64> {
        let z = |k| {
            self.band
                .get(k)
                .map(|z| Complex64::new(z.re.into(), z.im.into()))
        };
        match view {
            View::Plain => z(k),
            View::Hann => Some((z(k)? * 2.0 - z(k - 1)? - z(k + 1)?) / 6f64.sqrt()),
        }
    }

    fn columns(&self, k: i64, line: &Line, mirror: bool) -> [Complex64; 3] {
        let (n, m) = (self.band.samples, self.band.grid);
        let at = |k: i64| columns(k as f64, line.bin, line.c, n, m, mirror);
        match line.view {
            View::Plain => at(k),
            View::Hann => {
                let (here, before, after) = (at(k), at(k - 1), at(k + 1));
                std::array::from_fn(|j| (here[j] * 2.0 - before[j] - after[j]) / 6f64.sqrt())
            }
        }
    }

    /// Fits a line that is *not* at present taken out; updates all but `view`.
    pub fn fit(&self, line: &mut Line) {
        let reach = match line.view {
            View::Plain => REACH,
            // a Hann window holds all but 1e-5 of its information in these
            View::Hann => 12,
        };
        let range = self.range(line.bin, reach);
        let mirror = self.mirror_matters(line.bin, 4 * reach);
        for step in 0..6 {
            let mut normal = [[0.0; 3]; 3];
            let mut right = [0.0; 3];
            for k in range.clone() {
                let Some(z) = self.value(k, line.view) else {
                    continue;
                };
                let cols = self.columns(k, line, mirror);
                // the model is linear in (a, b): its present value is a·∂a + b·∂b
                let rest = z - cols[0] * line.c.re - cols[1] * line.c.im;
                for i in 0..3 {
                    right[i] += (cols[i].conj() * rest).re;
                    for j in 0..3 {
                        normal[i][j] += (cols[i].conj() * cols[j]).re;
                    }
                }
            }
            if step == 0 || line.c.norm_sqr() == 0.0 {
                // amplitude first: the frequency's column is meaningless without
                let det = normal[0][0] * normal[1][1] - normal[0][1] * normal[1][0];
                if det > 0.0 {
                    line.c.re += (right[0] * normal[1][1] - right[1] * normal[0][1]) / det;
                    line.c.im += (right[1] * normal[0][0] - right[0] * normal[1][0]) / det;
                }
                continue;
            }
            let Some(inverse) = invert(&normal) else {
                return;
            };
            let delta: [f64; 3] =
                std::array::from_fn(|i| (0..3).map(|j| inverse[i][j] * right[j]).sum());
            line.c += Complex64::new(delta[0], delta[1]);
            line.bin += delta[2].clamp(-0.3, 0.3);
            // A real tone shows in [0, grid/2]; a cell and a half is as far as a peak
            // errs, however often it is refitted.
            line.bin = line
                .bin
                .clamp(line.peak - 1.5, line.peak + 1.5)
                .clamp(0.0, self.band.grid as f64 / 2.0);
            line.bin_sd = (0.5 * line.noise * inverse[2][2]).sqrt() * view_factor(line.view);
            if delta[2].abs() < 1e-3 * line.bin_sd {
                break;
            }
        }
    }
}

/// Least squares on Hann-windowed bins counts each cell's noise as independent,
/// which it is not. Weighted by w², w the Hann window, the frequency's variance
/// is Σw⁴t²/(Σw²t²)² per noise power; the fit believes 1.5·… of the windowed
/// noise to be white: Σw²/N·1/Σw²t². The square root of the quotient corrects.
fn view_factor(view: View) -> f64 {
    match view {
        View::Plain => 1.0,
        View::Hann => {
            let (mut w2, mut w2t2, mut w4t2) = (0.0, 0.0, 0.0);
            let steps = 400;
            for i in 0..steps {
                let t = (f64::from(i) + 0.5) / f64::from(steps) - 0.5;
                let w = (std::f64::consts::PI * t).cos().powi(2);
                w2 += w * w;
                w2t2 += w * w * t * t;
                w4t2 += w.powi(4) * t * t;
            }
            let n = f64::from(steps);
            // windowed noise per cell relative to plain is (Σw²/n)/(3/8) = 1 by
            // the view's scaling; columns carry the same scaling
            (w4t2 / w2t2 / (w2 / n)).sqrt()
        }
    }
}

fn invert(a: &[[f64; 3]; 3]) -> Option<[[f64; 3]; 3]> {
    let minor = |r: usize, c: usize| {
        let (r1, r2) = ((r + 1) % 3, (r + 2) % 3);
        let (c1, c2) = ((c + 1) % 3, (c + 2) % 3);
        a[r1][c1] * a[r2][c2] - a[r1][c2] * a[r2][c1]
    };
    let det: f64 = (0..3).map(|c| a[0][c] * minor(0, c)).sum();
    (det.is_finite() && det > 0.0)
        .then(|| std::array::from_fn(|i| std::array::from_fn(|j| minor(j, i) / det)))
}

/// Fits all lines jointly, strongest first; returns what is left of the band.
pub fn refine(band: &Band, lines: &mut [Line]) -> Residual {
    let mut residual = Residual::new(band);
    let mut order: Vec<usize> = (0..lines.len()).collect();
    order.sort_by(|&a, &b| {
        lines[b]
            .c
            .norm_sqr()
            .total_cmp(&lines[a].c.norm_sqr())
            .then(a.cmp(&b))
    });
    for cycle in 0..CYCLES {
        let mut moved = 0.0f64;
        for &i in &order {
            if cycle > 0 {
                residual.add(&lines[i], 1.0);
            } else {
                lines[i].c = Complex64::default();
            }
            let before = lines[i].bin;
            residual.fit(&mut lines[i]);
            residual.add(&lines[i], -1.0);
            let line = &mut lines[i];
            let noise = |view| residual.noise(line.bin, view);
            if let (Some(plain), Some(hann)) = (noise(View::Plain), noise(View::Hann)) {
                // The more precise view as soon as nothing leaks into it.
                (line.view, line.noise) = if plain < LEAKY * hann {
                    (View::Plain, plain)
                } else {
                    (View::Hann, hann)
                };
            }
            moved = moved.max((lines[i].bin - before).abs() / lines[i].bin_sd.max(1e-12));
        }
        if cycle > 0 && moved < 0.02 {
            break;
        }
    }
    for line in lines.iter_mut() {
        // A fitted SNR is one too high on average, and near the threshold the peak's
        // own curvature is uncertain: to first order in 1/SNR, both together.
        let snr = line.snr(band.samples);
        line.bin_sd *= snr / (snr - 1.0).max(0.5 * snr);
        let around: Vec<f64> = residual
            .range(line.bin, 8)
            .filter_map(|k| residual.value(k, line.view))
            .map(|z| z.norm_sqr())
            .collect();
        line.leftover = around.iter().sum::<f64>() / (around.len().max(1) as f64 * line.noise);
        // More left than noise explains: the tone strayed a little, and its mean is
        // not where a steady one fits best. What is left is the square of the
        // phase it strayed by; about a third of that may pass for frequency.
        let strayed = (line.leftover - 1.5).max(0.0) * around.len() as f64
            / line.snr(band.samples).max(1e-300);
        line.strayed = 0.3 * strayed.sqrt();
    }
    residual
}
