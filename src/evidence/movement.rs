//! Do two frequencies move together, and at which ratio?
//!
//! Two tracks on common windows are compared as a pair of noisy signals, both with
//! errors. Term k of their cosine series is taken as normal with variance c/kᵖ + v:
//! a wander whose spectrum falls by some power p, and the tracks' own noise v. That
//! whitens slow wanders, two of which look alike by chance far more often than white
//! noise of as many points would. Rivals: both tracks are one movement, seen at a
//! ratio; or each has its own.

use crate::tones::Tone;
use crate::tones::track::{coarser, pairs};
use serde::Serialize;
use std::f64::consts::PI;

/// Fewest common points.
pub(super) const LEAST_POINTS: usize = 6;
/// Points at most; more are averaged.
const MOST_POINTS: usize = 512;
/// Powers of the wander's spectrum that are tried: flat to that of a phase whose
/// frequency walks at random, and steeper.
const POWERS: std::ops::RangeInclusive<i32> = 0..=6;
/// A point this many robust standard deviations from its neighbours is a jump.
const JUMP: f64 = 6.0;

/// Frequency through time.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Series {
    /// Middles of windows, s, rising.
    pub at_s: Vec<f64>,
    /// Frequency, Hz.
    pub hz: Vec<f64>,
    /// Standard deviation, Hz; 0 where unknown or nil.
    pub sd_hz: Vec<f64>,
}

impl Series {
    /// A tone's track with windows at least `step_s` long, joined without loss as long
    /// as enough of them are left.
    pub fn at_least(tone: &Tone, step_s: f64) -> Series {
        let (mut points, mut own) = (tone.track.clone(), tone.track_step_s);
        while own > 0.0 && own < 0.9 * step_s && points.len() >= 4 * LEAST_POINTS {
            points = coarser(&points, own);
            own *= 2.0;
        }
        let mut series = Series::default();
        for p in &points {
            series.push(p.at_s, p.seen_hz.0, p.sd_hz);
        }
        series
    }

    /// Adds a point.
    pub fn push(&mut self, at_s: f64, hz: f64, sd_hz: f64) {
        self.at_s.push(at_s);
        self.hz.push(hz);
        self.sd_hz.push(sd_hz);
    }

    /// Typical distance of points, s.
    pub fn step_s(&self) -> f64 {
        let mut steps: Vec<f64> = self
            .at_s
            .windows(2)
            .map(|w| match w {
                [a, b] => b - a,
                _ => 0.0,
            })
            .collect();
        steps.sort_unstable_by(f64::total_cmp);
        steps.get(steps.len() / 2).copied().unwrap_or(f64::INFINITY)
    }

    /// The same with every time later by `offset_s`.
    pub fn shifted(&self, offset_s: f64) -> Series {
        Series {
            at_s: self.at_s.iter().map(|t| t + offset_s).collect(),
            ..self.clone()
        }
    }

    /// Each `many` successive points averaged into one.
    fn joined(&self, many: usize) -> Series {
        let mut series = Series::default();
        let chunks = self.at_s.chunks_exact(many).zip(self.hz.chunks_exact(many));
        for ((at, hz), sd) in chunks.zip(self.sd_hz.chunks_exact(many)) {
            let n = many as f64;
            let mean = |v: &[f64]| v.iter().sum::<f64>() / n;
            let var: f64 = sd.iter().map(|s| s * s).sum();
            series.push(mean(at), mean(hz), var.sqrt() / n);
        }
        series
    }

    /// The point nearest to a time, within `reach_s`.
    fn nearest(&self, at_s: f64, reach_s: f64) -> Option<(f64, f64)> {
        let right = self.at_s.partition_point(|&t| t < at_s);
        let off = |i: usize| self.at_s.get(i).map_or(f64::INFINITY, |t| (t - at_s).abs());
        let i = match right.checked_sub(1) {
            Some(left) if off(left) < off(right) => left,
            _ => right,
        };
        (off(i) <= reach_s).then_some((*self.hz.get(i)?, *self.sd_hz.get(i)?))
    }

    /// Straight between points; `None` outside, or in a gap of more than `widest_s`.
    fn between(&self, at_s: f64, widest_s: f64) -> Option<f64> {
        let right = self.at_s.partition_point(|&t| t < at_s).max(1);
        let left = right - 1;
        let (t0, t1) = (*self.at_s.get(left)?, *self.at_s.get(right)?);
        let u = (at_s - t0) / (t1 - t0).max(1e-300);
        let inside = (-1e-6..=1.0 + 1e-6).contains(&u) && t1 - t0 <= widest_s;
        inside.then_some(())?;
        Some(self.hz.get(left)? * (1.0 - u) + self.hz.get(right)? * u)
    }

    /// Mean over a window under the weight t·(L − t), with its sd: what a fit of a
    /// steady tone to that window finds of a moving one ([`crate::tones::track`]).
    fn window_mean(&self, middle_s: f64, length_s: f64, step_s: f64) -> Option<(f64, f64)> {
        let start = middle_s - 0.5 * length_s;
        let from = self.at_s.partition_point(|&t| t < start);
        let to = self.at_s.partition_point(|&t| t < start + length_s);
        let points = to.saturating_sub(from).max(1) as f64;
        let parts = (2.0 * points).clamp(16.0, 1024.0) as usize;
        let (mut sum, mut weights) = (0.0, 0.0);
        for i in 0..parts {
            let u = (i as f64 + 0.5) / parts as f64;
            let w = u * (1.0 - u);
            // The very ends may lie outside; they weigh next to nothing.
            if let Some(hz) = self.between(start + u * length_s, 3.0 * step_s) {
                sum += w * hz;
                weights += w;
            }
        }
        // Σw is parts/6; under this weight 5 of 6 points count.
        let known = weights * 6.0 / parts as f64;
        let var: f64 = self
            .sd_hz
            .get(from..to)
            .filter(|s| !s.is_empty())
            .map_or(self.sd_hz.first().map_or(0.0, |s| s * s), |s| {
                s.iter().map(|s| s * s).sum::<f64>() / s.len() as f64
            });
        (known > 0.9).then(|| (sum / weights, (var / (points * 5.0 / 6.0).max(1.0)).sqrt()))
    }
}

/// How one frequency follows another.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Following {
    /// Slope of the first against the second: signed ratio of their orders.
    pub slope: f64,
    /// Its standard deviation.
    pub sd: f64,
    /// ln p(both tracks | one movement, at `slope`) − ln p(both | independent), each at
    /// its best wander. At another slope b it is less by (b − slope)²/(2·sd²). Means
    /// are taken out: nearness in frequency does not count.
    pub ln_ratio: f64,
    /// Common points it rests on.
    pub points: usize,
    /// Points left out as jumps.
    pub jumps: usize,
}

/// Compares the tracks of two tones of one recording, the finer one brought to the
/// coarser one's windows without loss.
pub fn compare_tones(first: &Tone, second: &Tone) -> Option<Following> {
    let both = pairs(
        (&first.track, first.track_step_s),
        (&second.track, second.track_step_s),
    );
    let (mut a, mut b) = (Series::default(), Series::default());
    for (p, q) in &both {
        a.push(p.at_s, p.seen_hz.0, p.sd_hz);
        b.push(q.at_s, q.seen_hz.0, q.sd_hz);
    }
    compare(&a, &b)
}

/// Compares two tracks; `None` where they hardly overlap or neither moves.
pub fn compare(first: &Series, second: &Series) -> Option<Following> {
    let common = Common::new(first, second)?;
    let (y, x) = (cosine_terms(&common.y), cosine_terms(&common.x));
    let n = y.len() as f64;
    let (vy, vx) = (common.vy, common.vx);
    let of = |a: &[f64], b: &[f64]| a.iter().zip(b).map(|(a, b)| a * b).sum::<f64>();
    let (syy, sxx, sxy) = (of(&y, &y), of(&x, &x), of(&x, &y));
    if sxx <= 0.0 || syy <= 0.0 {
        return None;
    }
    let alone = best_alone(&x, vx) + best_alone(&y, vy);
    // One movement. Starts from the slope by moments and from either regression.
    let sure = (sxx - n * vx).max(0.1 * sxx);
    let mut best: Option<(f64, [f64; 3], f64)> = None;
    for slope in [sxy / sure, syy / sxy] {
        if !slope.is_finite() || slope == 0.0 {
            continue;
        }
        for power in POWERS {
            let weight: f64 = (1..=x.len()).map(|k| (k as f64).powi(-power)).sum();
            let start = [slope, (sure / weight).ln(), 0.0];
            let steps = [0.3 * slope.abs(), 1.0, 0.7];
            let value = |p: &[f64; 3]| together(&y, &x, vy, vx, power, p);
            let (at, value) = climb(start, steps, &value);
            if best.as_ref().is_none_or(|b| value > b.0) {
                best = Some((value, at, f64::from(power)));
            }
        }
    }
    let (value, at, power) = best?;
    let slope = at[0];
    let step = 1e-3 * slope.abs().max(1e-12);
    let along = |d: f64| together(&y, &x, vy, vx, power as i32, &[slope + d, at[1], at[2]]);
    let mut h = step;
    let mut bend = (along(h) - 2.0 * value + along(-h)) / (h * h);
    // A step over which the likelihood changes by about a half.
    for _ in 0..3 {
        if bend < 0.0 {
            h = (-1.0 / bend).sqrt();
            bend = (along(h) - 2.0 * value + along(-h)) / (h * h);
        }
    }
    let sd = if bend < 0.0 {
        (-1.0 / bend).sqrt()
    } else {
        slope.abs()
    };
    Some(Following {
        slope,
        sd,
        // The excess noise (λ) is one freedom the rival does not need.
        ln_ratio: value - at[2].abs() - alone,
        points: common.y.len(),
        jumps: common.jumps,
    })
}

/// ln p(both | one movement at the ratio `slope`) − ln p(both | independent) of two
/// evenly spaced signals with their noise variances.
pub(super) fn at_ratio(first: (&[f64], f64), second: (&[f64], f64), slope: f64) -> Option<f64> {
    let (y, x) = (cosine_terms(first.0), cosine_terms(second.0));
    let square = |v: &[f64]| v.iter().map(|a| a * a).sum::<f64>();
    if y.len() != x.len() || square(&y) <= 0.0 || square(&x) <= 0.0 {
        return None;
    }
    let floor = |v: f64, terms: &[f64]| v.max(1e-12 * square(terms) / terms.len() as f64);
    let (vy, vx) = (floor(first.1, &y), floor(second.1, &x));
    let mut best = f64::NEG_INFINITY;
    for power in POWERS {
        let weight: f64 = (1..=x.len()).map(|k| (k as f64).powi(-power)).sum();
        let start = [slope, (square(&x) / weight).ln(), 0.0];
        let (at, value) = climb(start, [0.0, 1.0, 0.7], &|p| {
            together(&y, &x, vy, vx, power, p)
        });
        best = best.max(value - at[2].abs());
    }
    Some(best - best_alone(&x, vx) - best_alone(&y, vy))
}

/// Two tracks on the same windows, means and jumps taken out.
pub(super) fn common_points(first: &Series, second: &Series) -> Option<(Vec<f64>, Vec<f64>)> {
    Common::new(first, second).map(|c| (c.y, c.x))
}

/// Frequency and sd of both tracks in one window.
type Pair = ((f64, f64), (f64, f64));

/// Two tracks on the same windows, means taken out.
struct Common {
    y: Vec<f64>,
    x: Vec<f64>,
    /// Mean noise variance of each.
    vy: f64,
    vx: f64,
    jumps: usize,
}

impl Common {
    fn new(first: &Series, second: &Series) -> Option<Common> {
        let thin = |s: &Series| match s.hz.len().div_ceil(MOST_POINTS) {
            0 | 1 => s.clone(),
            many => s.joined(many),
        };
        let (first, second) = (thin(first), thin(second));
        let (a, b) = (first.step_s(), second.step_s());
        if !(a.is_finite() && b.is_finite() && a > 0.0 && b > 0.0) {
            return None;
        }
        // At the points of the coarser, over its windows.
        let (coarse, fine) = if a >= b {
            (&first, &second)
        } else {
            (&second, &first)
        };
        let (long, short) = (a.max(b), a.min(b));
        let mut pairs = Vec::with_capacity(coarse.hz.len());
        for ((&t, &hz), &sd) in coarse.at_s.iter().zip(&coarse.hz).zip(&coarse.sd_hz) {
            let other = if long < 1.1 * short {
                fine.nearest(t, 0.02 * long)
                    .or_else(|| fine.window_mean(t, long, short))
            } else {
                fine.window_mean(t, long, short)
            };
            if let Some(other) = other {
                let here = (hz, sd);
                pairs.push(if a >= b { (here, other) } else { (other, here) });
            }
        }
        let before = pairs.len();
        let jumps_y = jumps(&pairs.iter().map(|p| p.0).collect::<Vec<_>>());
        let jumps_x = jumps(&pairs.iter().map(|p| p.1).collect::<Vec<_>>());
        let mut either = jumps_y.iter().zip(&jumps_x).map(|(a, b)| *a || *b);
        pairs.retain(|_| !either.next().unwrap_or(false));
        if pairs.len() < LEAST_POINTS {
            return None;
        }
        let n = pairs.len() as f64;
        let centre = |v: Vec<f64>| -> Vec<f64> {
            let mean = v.iter().sum::<f64>() / n;
            v.iter().map(|a| a - mean).collect()
        };
        let y = centre(pairs.iter().map(|p| p.0.0).collect());
        let x = centre(pairs.iter().map(|p| p.1.0).collect());
        let square = |v: &[f64]| v.iter().map(|a| a * a).sum::<f64>() / n;
        let noise =
            |sd: &dyn Fn(&Pair) -> f64| pairs.iter().map(|p| sd(p).powi(2)).sum::<f64>() / n;
        // Even a track said to be exact is so to a millionth of its movement only.
        let vy = noise(&|p| p.0.1).max(1e-12 * square(&y));
        let vx = noise(&|p| p.1.1).max(1e-12 * square(&x));
        Some(Common {
            jumps: before - pairs.len(),
            y,
            x,
            vy,
            vx,
        })
    }
}

/// Which points lie off their neighbours.
fn jumps(points: &[(f64, f64)]) -> Vec<bool> {
    let off: Vec<f64> = (0..points.len())
        .map(|i| {
            let mut near: Vec<f64> = points
                .iter()
                .skip(i.saturating_sub(2))
                .take(if i < 2 { i + 3 } else { 5 })
                .map(|p| p.0)
                .collect();
            near.sort_unstable_by(f64::total_cmp);
            let middle = near.get(near.len() / 2).copied().unwrap_or(0.0);
            points.get(i).map_or(0.0, |p| (p.0 - middle).abs())
        })
        .collect();
    let mut sorted: Vec<f64> = off.iter().copied().filter(|d| *d > 0.0).collect();
    sorted.sort_unstable_by(f64::total_cmp);
    let usual = 1.4826 * sorted.get(sorted.len() / 2).copied().unwrap_or(0.0);
    off.iter()
        .zip(points)
        .map(|(d, p)| *d > JUMP * usual.max(p.1))
        .collect()
}

/// Orthonormal cosine series without the mean.
fn cosine_terms(values: &[f64]) -> Vec<f64> {
    let n = values.len();
    let scale = (2.0 / n as f64).sqrt();
    (1..n)
        .map(|k| {
            let turn = PI * k as f64 / n as f64;
            let sum: f64 = values
                .iter()
                .enumerate()
                .map(|(i, v)| v * (turn * (i as f64 + 0.5)).cos())
                .sum();
            scale * sum
        })
        .collect()
}

/// Largest log-likelihood of terms that wander on their own.
fn best_alone(terms: &[f64], noise: f64) -> f64 {
    let squares: f64 = terms.iter().map(|t| t * t).sum();
    let mut best = f64::NEG_INFINITY;
    for power in POWERS {
        let weight: f64 = (1..=terms.len()).map(|k| (k as f64).powi(-power)).sum();
        let value = |p: &[f64; 3]| {
            let strength = p[1].exp();
            let mut sum = 0.0;
            for (k, t) in terms.iter().enumerate() {
                let v = strength * ((k + 1) as f64).powi(-power) + noise;
                sum -= 0.5 * (v.ln() + t * t / v);
            }
            sum
        };
        let start = [0.0, (squares / weight).max(1e-300).ln(), 0.0];
        best = best.max(climb(start, [0.0, 1.0, 0.0], &value).1);
    }
    best
}

/// Log-likelihood of two sets of terms as one movement: `p` = slope, ln strength,
/// ln of the factor by which the noise of the first exceeds what its track says.
fn together(y: &[f64], x: &[f64], vy: f64, vx: f64, power: i32, p: &[f64; 3]) -> f64 {
    let [slope, strength, excess] = *p;
    let strength = strength.exp();
    // An excess below 1 is none.
    let vy = vy * excess.max(0.0).exp();
    let mut sum = 0.0;
    for (k, (y, x)) in y.iter().zip(x).enumerate() {
        let s = strength * ((k + 1) as f64).powi(-power);
        let (a, b, c) = (s + vx, slope * s, slope * slope * s + vy);
        // The determinant without the cancelling squares.
        let det = s * vy + vx * slope * slope * s + vx * vy;
        sum -= 0.5 * (det.ln() + (c * x * x - 2.0 * b * x * y + a * y * y) / det);
    }
    sum
}

/// Greatest value near `start`: the simplex of Nelder & Mead (1965). Coordinates whose
/// step is 0 stay.
fn climb(start: [f64; 3], steps: [f64; 3], value: &dyn Fn(&[f64; 3]) -> f64) -> ([f64; 3], f64) {
    let score = |p: &[f64; 3]| {
        let v = value(p);
        if v.is_finite() { v } else { f64::NEG_INFINITY }
    };
    let mut points = vec![(start, score(&start))];
    for (i, step) in steps.iter().enumerate() {
        if *step != 0.0 {
            let mut p = start;
            if let Some(c) = p.get_mut(i) {
                *c += step;
            }
            points.push((p, score(&p)));
        }
    }
    let free = points.len() - 1;
    for _ in 0..150 * free {
        points.sort_by(|a, b| b.1.total_cmp(&a.1));
        let (Some(&best), Some(&worst)) = (points.first(), points.last()) else {
            break;
        };
        if best.1 - worst.1 < 1e-6 {
            break;
        }
        let mut centre = [0.0; 3];
        for (p, _) in points.iter().take(free) {
            for (c, v) in centre.iter_mut().zip(p) {
                *c += v / free as f64;
            }
        }
        let along = |f: f64| {
            let mut p = [0.0; 3];
            for ((p, c), w) in p.iter_mut().zip(&centre).zip(&worst.0) {
                *p = c + f * (c - w);
            }
            (p, score(&p))
        };
        let reflected = along(1.0);
        let next = if reflected.1 > best.1 {
            let further = along(2.0);
            if further.1 > reflected.1 {
                further
            } else {
                reflected
            }
        } else if free < 2 && reflected.1 > worst.1
            || points.get(free - 1).is_some_and(|p| reflected.1 > p.1)
        {
            reflected
        } else {
            along(-0.5)
        };
        if next.1 > worst.1 {
            if let Some(last) = points.last_mut() {
                *last = next;
            }
        } else {
            for (p, v) in points.iter_mut().skip(1) {
                for (c, b) in p.iter_mut().zip(&best.0) {
                    *c = 0.5 * (*c + b);
                }
                *v = score(p);
            }
        }
    }
    points.sort_by(|a, b| b.1.total_cmp(&a.1));
    points
        .first()
        .copied()
        .unwrap_or((start, f64::NEG_INFINITY))
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::{SeedableRng, rngs::StdRng};
    use rand_distr::{Distribution, StandardNormal};

    /// A random walk and what follows it, each with noise.
    fn pair(rng: &mut StdRng, slope: Option<f64>, noise: f64) -> (Series, Series) {
        let mut normal = || -> f64 { StandardNormal.sample(rng) };
        let (mut w, mut u) = (0.0, 0.0);
        let (mut y, mut x) = (Series::default(), Series::default());
        for i in 0..60 {
            w += normal();
            u += normal();
            let t = f64::from(i);
            x.push(t, 50.0 + w + 0.3 * normal(), 0.3);
            let follows = slope.map_or(5.0 * u, |b| b * w);
            y.push(t, 120.0 + follows + noise * normal(), noise);
        }
        (y, x)
    }

    #[test]
    fn the_ratio_and_its_sign_come_out() {
        let mut rng = StdRng::seed_from_u64(3);
        let mut squares = 0.0;
        for slope in [7.0, -7.0, 0.5, -31.0] {
            for _ in 0..10 {
                let (y, x) = pair(&mut rng, Some(slope), 0.3);
                let f = compare(&y, &x).unwrap();
                assert!(f.ln_ratio > 8.0, "{slope}: {f:?}");
                squares += ((f.slope - slope) / f.sd).powi(2);
            }
        }
        // Mean of 40 squares of unit variates: 1 ± 0.22 each standard error.
        assert!((0.3..2.0).contains(&(squares / 40.0)), "{squares}");
    }

    #[test]
    fn two_random_walks_do_not_move_together() {
        let mut rng = StdRng::seed_from_u64(4);
        let claims = (0..200)
            .filter(|_| {
                let (y, x) = pair(&mut rng, None, 0.3);
                compare(&y, &x).is_some_and(|f| f.ln_ratio > 4.0)
            })
            .count();
        // Odds of 55 should come by chance in 2 %: 4 ± 2 of 200.
        assert!(claims <= 10, "{claims}");
    }

    #[test]
    fn a_jump_is_left_out() {
        let mut rng = StdRng::seed_from_u64(5);
        let (mut y, x) = pair(&mut rng, Some(3.0), 0.3);
        y.hz[20] += 500.0;
        y.hz[41] -= 900.0;
        let f = compare(&y, &x).unwrap();
        assert_eq!(f.jumps, 2);
        assert!(
            (f.slope - 3.0).abs() < 5.0 * f.sd && f.ln_ratio > 8.0,
            "{f:?}"
        );
    }
}
