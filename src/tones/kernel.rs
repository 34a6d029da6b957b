//! The spectrum of one steady real tone, exactly.

use crate::spectrum::fft::Complex64;
use std::f64::consts::PI;

/// K(d) = Σ_{n<samples} exp(−2πi·d·n/grid) and its derivative with respect to
/// `d`: what a complex exponential `d` bins away adds to a bin.
pub fn dirichlet(d: f64, samples: usize, grid: usize) -> (Complex64, Complex64) {
    let (n, m) = (samples as f64, grid as f64);
    // one turn of the grid is the same place
    let d = d - m * (d / m).round();
    let (value, slope) = if d.abs() < 1e-4 {
        // series of sin(πdN/M)/sin(πd/M) about 0, next term of order d⁴
        let curvature = (PI / m).powi(2) * (1.0 - n * n) / 6.0;
        (n * (1.0 + curvature * d * d), 2.0 * n * curvature * d)
    } else {
        let (sn, cn) = (PI * d * n / m).sin_cos();
        let (s1, c1) = (PI * d / m).sin_cos();
        (sn / s1, PI / m * (n * cn * s1 - sn * c1) / (s1 * s1))
    };
    let turn = -PI * (n - 1.0) / m;
    let phase = Complex64::from_polar(1.0, turn * d);
    (
        phase * value,
        phase * (Complex64::new(0.0, turn) * value + slope),
    )
}

/// The two real parameters' and the frequency's effect on bin `k` of a tone
/// c·exp(2πi·f·n/grid) plus its mirror, c = a + ib: (∂/∂a, ∂/∂b, ∂/∂f).
pub fn columns(
    k: f64,
    f: f64,
    c: Complex64,
    samples: usize,
    grid: usize,
    mirror: bool,
) -> [Complex64; 3] {
    let i = Complex64::new(0.0, 1.0);
    let (up, up_slope) = dirichlet(k - f, samples, grid);
    if !mirror {
        return [up, i * up, -c * up_slope];
    }
    let (down, down_slope) = dirichlet(k + f, samples, grid);
    [
        up + down,
        i * (up - down),
        c.conj() * down_slope - c * up_slope,
    ]
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn agrees_with_the_sum() {
        let (n, m) = (100, 104);
        for d in [0.0, 3e-5, 0.37, -1.0, 17.2, 51.9, 103.6] {
            let sum: Complex64 = (0..n)
                .map(|i| Complex64::from_polar(1.0, -2.0 * PI * d * f64::from(i) / f64::from(m)))
                .sum();
            let (k, _) = dirichlet(d, n as usize, m as usize);
            assert!((k - sum).norm() < 1e-9, "d {d}: {k} {sum}");
        }
    }

    #[test]
    fn slope_agrees_with_differences() {
        let (n, m) = (100, 104);
        for d in [0.0, 5e-5, 0.37, -1.3, 17.2] {
            let h = 1e-5;
            let (a, _) = dirichlet(d - h, n, m);
            let (b, _) = dirichlet(d + h, n, m);
            let (_, slope) = dirichlet(d, n, m);
            let numeric = (b - a) / (2.0 * h);
            // second-order difference: error ~ h²·(π)³·N/6 ≈ 5e-8
            assert!((slope - numeric).norm() < 1e-5, "d {d}: {slope} {numeric}");
        }
    }
}
