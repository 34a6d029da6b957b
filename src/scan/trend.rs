//! A quantity over the recordings: mean, range, and the straight line through it.

use crate::units::U95;
use statrs::distribution::{ContinuousCDF, StudentsT};

/// Running sums, by least squares around the first value.
#[derive(Debug, Clone, Copy, Default, PartialEq)]
pub struct Trend {
    /// How many values.
    pub count: u32,
    first: (f64, f64),
    last_x: f64,
    low: f64,
    high: f64,
    sx: f64,
    sy: f64,
    sxx: f64,
    sxy: f64,
    syy: f64,
}

impl Trend {
    /// Adds the value at one recording; recordings come in rising order.
    pub fn add(&mut self, recording: u32, value: f64) {
        let x = f64::from(recording);
        if self.count == 0 {
            self.first = (x, value);
            (self.low, self.high) = (value, value);
        }
        self.count += 1;
        self.last_x = x;
        self.low = self.low.min(value);
        self.high = self.high.max(value);
        let (x, y) = (x - self.first.0, value - self.first.1);
        self.sx += x;
        self.sy += y;
        self.sxx += x * x;
        self.sxy += x * y;
        self.syy += y * y;
    }

    /// Mean of the values.
    pub fn mean(&self) -> f64 {
        self.first.1 + self.sy / f64::from(self.count.max(1))
    }

    /// Largest less smallest value.
    pub fn range(&self) -> f64 {
        self.high - self.low
    }

    /// What the fitted line rises from the first recording to the last, and ±, 95 %,
    /// by the scatter about the line. Fewer than three values tell no scatter.
    pub fn rise(&self) -> Option<(f64, f64)> {
        if self.count < 3 {
            return None;
        }
        let n = f64::from(self.count);
        let sxx = self.sxx - self.sx * self.sx / n;
        let sxy = self.sxy - self.sx * self.sy / n;
        let syy = self.syy - self.sy * self.sy / n;
        if sxx <= 0.0 {
            return None;
        }
        let slope = sxy / sxx;
        let variance = ((syy - slope * sxy) / (n - 2.0)).max(0.0);
        let student = StudentsT::new(0.0, 1.0, n - 2.0).map_or(U95, |t| t.inverse_cdf(0.975));
        let span = self.last_x - self.first.0;
        Some((slope * span, student * (variance / sxx).sqrt() * span))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_line_is_found_with_its_uncertainty() {
        let mut trend = Trend::default();
        // residuals of ±0.1 alternate: about the line 5000 + 0.5·x
        for x in 0..20u32 {
            let off = if x % 2 == 0 { 0.1 } else { -0.1 };
            trend.add(10 + x, 5000.0 + 0.5 * f64::from(x) + off);
        }
        let (rise, u95) = trend.rise().unwrap();
        // by hand: slope −0.1·Σ(±)(x − 9.5)/Σ(x − 9.5)² off by 1/665, over a span of 19
        assert!((rise - 19.0 * (0.5 - 1.0 / 665.0)).abs() < 1e-9, "{rise}");
        // t(18; 97.5 %) = 2.1009 (common tables), variance ≈ 20·0.01/18, Σ = 665
        let variance: f64 = (0.2 - 1.0 / 665.0) / 18.0;
        let by_hand = 19.0 * 2.1009 * (variance / 665.0).sqrt();
        assert!((u95 - by_hand).abs() < 1e-3, "{u95} {by_hand}");
        assert!((trend.mean() - 5004.75).abs() < 1e-9);
        let two = {
            let mut t = Trend::default();
            t.add(0, 1.0);
            t.add(5, 2.0);
            t
        };
        assert_eq!(two.rise(), None);
    }
}
