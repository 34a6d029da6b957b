//! The generalised Lomb–Scargle periodogram: how much of the variance of unevenly
//! sampled values one sine and a constant explain.
//!
//! Zechmeister & Kürster 2009 (A&A 496, 577), eqs. 4–15, equal weights. The sums it
//! is made of are kept apart, block by block in time, so that they can be gathered
//! in one pass and turned to a neighbouring frequency afterwards.

use crate::spectrum::fft::Complex64;

/// Everything the periodogram needs of some samples at one frequency.
#[derive(Debug, Clone, Copy, Default, PartialEq)]
pub struct Sums {
    /// Number of samples.
    pub n: f64,
    /// Σ x.
    pub x: f64,
    /// Σ x².
    pub xx: f64,
    /// Σ exp(iθ), θ = 2πft.
    pub e: Complex64,
    /// Σ exp(2iθ).
    pub e2: Complex64,
    /// Σ x·exp(iθ).
    pub xe: Complex64,
}

impl Sums {
    /// Adds the sample `x` taken where the wave is at `e` = exp(iθ).
    pub fn add(&mut self, x: f64, e: Complex64) {
        self.n += 1.0;
        self.x += x;
        self.xx += x * x;
        self.e += e;
        self.e2 += e * e;
        self.xe += e * x;
    }

    /// Adds other samples' sums at the same frequency.
    pub fn merge(&mut self, other: &Sums) {
        self.n += other.n;
        self.x += other.x;
        self.xx += other.xx;
        self.e += other.e;
        self.e2 += other.e2;
        self.xe += other.xe;
    }

    /// The sums as they would be with every θ larger by the argument of `turn`
    /// (|turn| = 1).
    pub fn turned(&self, turn: Complex64) -> Sums {
        Sums {
            e: self.e * turn,
            e2: self.e2 * turn * turn,
            xe: self.xe * turn,
            ..*self
        }
    }

    /// Sum of squares about the mean.
    pub fn variance_sum(&self) -> f64 {
        if self.n > 0.0 {
            (self.xx - self.x * self.x / self.n).max(0.0)
        } else {
            0.0
        }
    }

    /// Sum of squares that `a·cos θ + b·sin θ + c` explains beyond a constant; twice
    /// the log-likelihood gained, in units of the noise variance. And `(a, b, c)`.
    /// 0 where the samples do not determine the three.
    pub fn fit(&self) -> (f64, [f64; 3]) {
        let none = (0.0, [0.0; 3]);
        if self.n < 3.0 {
            return none;
        }
        let (y, c, s) = (self.x / self.n, self.e.re / self.n, self.e.im / self.n);
        let yc = self.xe.re / self.n - y * c;
        let ys = self.xe.im / self.n - y * s;
        let cc = 0.5 * (1.0 + self.e2.re / self.n) - c * c;
        let ss = 0.5 * (1.0 - self.e2.re / self.n) - s * s;
        let cs = 0.5 * self.e2.im / self.n - c * s;
        let d = cc * ss - cs * cs;
        // Nearly dependent columns: the sine cannot be told from a constant.
        if d <= 1e-9 {
            return none;
        }
        let a = (yc * ss - ys * cs) / d;
        let b = (ys * cc - yc * cs) / d;
        let explained = self.n * (a * yc + b * ys);
        (explained.max(0.0), [a, b, y - a * c - b * s])
    }

    /// The generalised periodogram, the share of the variance explained, 0 to 1.
    pub fn power(&self) -> f64 {
        let all = self.variance_sum();
        if all > 0.0 {
            (self.fit().0 / all).min(1.0)
        } else {
            0.0
        }
    }
}

/// The generalised Lomb–Scargle power of `values` taken at `times_s`, at `hz`: the
/// share of their variance that a sine of that frequency and a constant explain.
pub fn periodogram(times_s: &[f64], values: &[f64], hz: f64) -> f64 {
    let mut sums = Sums::default();
    let origin = times_s.first().copied().unwrap_or(0.0);
    for (&t, &x) in times_s.iter().zip(values) {
        sums.add(x, unit(hz * (t - origin)));
    }
    sums.power()
}

/// exp(2πi·turns), with whole turns taken off first.
pub fn unit(turns: f64) -> Complex64 {
    Complex64::from_polar(1.0, std::f64::consts::TAU * (turns - turns.round()))
}

#[cfg(test)]
mod tests {
    use super::*;

    /// A sine on a constant is explained wholly, and its parts are found.
    #[test]
    fn a_sine_is_explained() {
        let times: Vec<f64> = (0..50)
            .map(|i| f64::from(i) + 0.3 * f64::from(i * i % 7))
            .collect();
        let mut sums = Sums::default();
        for &t in &times {
            let e = unit(0.83 * t);
            sums.add(3.0 * e.re - 2.0 * e.im + 5.0, e);
        }
        let (_, [a, b, c]) = sums.fit();
        assert!((a - 3.0).abs() < 1e-9 && (b + 2.0).abs() < 1e-9 && (c - 5.0).abs() < 1e-9);
        assert!((sums.power() - 1.0).abs() < 1e-12);
        assert_eq!(Sums::default().power(), 0.0);
    }

    /// Turning block sums about a block's middle is shifting the frequency.
    #[test]
    fn turning_shifts_the_frequency() {
        let value = |t: f64| (2.1 * t).sin() + 0.3 * (17.0 * t).cos();
        let sums = |hz: f64, shift: f64| {
            let mut all = Sums::default();
            for block in 0..20 {
                let mut sums = Sums::default();
                for i in 0..10 {
                    let t = f64::from(block * 10 + i) * 0.11;
                    sums.add(value(t), unit(hz * t));
                }
                let middle = (f64::from(block) * 10.0 + 4.5) * 0.11;
                all.merge(&sums.turned(unit(shift * middle)));
            }
            all.power()
        };
        // Within a block of 1.1 s a shift of 0.01 Hz turns by 0.03 rad at the ends.
        assert!((sums(0.32, 0.01) - sums(0.33, 0.0)).abs() < 2e-3);
    }
}
