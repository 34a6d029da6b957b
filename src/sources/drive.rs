//! An inverter drive: carrier multiples with output sidebands.
//!
//! Pulse-width modulation with a triangle carrier `c` and a sine output `o` gives,
//! for a phase leg, lines at `m·c + n·o` with m + n odd: around odd multiples of
//! the carrier the even sidebands, around even multiples the odd ones (the double
//! Fourier series of Holmes & Lipo, *Pulse Width Modulation for Power Converters*,
//! 2003; from memory). Listed are m = 1..orders with |n| ≤ 6, labelled `1c`,
//! `1c+2o`, `2c-4o`, and the output itself, `1o` (m = 0, n = 1). Carrier multiples
//! and sidebands with n a multiple of three cancel between phases but not towards
//! earth, which is where a recorder mostly picks them up: they stay listed.
//!
//! Weights are the amplitudes of natural sampling at modulation index M = 0.9,
//! `(4/(mπ))·|J_n(mπM/2)|` against `M` for the output, scaled to the strongest. A
//! drive's index moves with its speed, so no line is ever quite at a zero of its
//! Bessel function: no weight is below [`LEAST_WEIGHT`].

use super::{
    Kind, Latent, LatentId, Line, Source, Steadiness, clock, line, push_latent,
    quantity::Tolerance, signed, source,
};
use std::f64::consts::PI;

/// ±3 % for the carrier where none is given (common practice: a set value, held by
/// a crystal or a trimmed oscillator, but often rounded or stepped).
pub const CARRIER_TOLERANCE: Tolerance = Tolerance::percent(3.0);

/// ±5 % for the output where none is given: control moves it.
pub const OUTPUT_TOLERANCE: Tolerance = Tolerance::percent(5.0);

/// Highest multiple of the carrier where none is given.
pub const ORDERS: u32 = 10;

/// Highest sideband on each side.
pub const SIDEBANDS: i32 = 6;

/// Floor of the weights.
pub const LEAST_WEIGHT: f64 = 0.02;

const MODULATION_INDEX: f64 = 0.9;

/// A drive.
#[derive(Debug, Clone, PartialEq)]
pub struct Drive {
    /// Name of the source.
    pub name: String,
    /// Carrier (switching) frequency, Hz, > 0.
    pub carrier_hz: f64,
    /// Of the carrier.
    pub carrier_tolerance: Tolerance,
    /// Output frequency, Hz, > 0.
    pub output_hz: f64,
    /// Of the output.
    pub output_tolerance: Tolerance,
    /// Highest multiple of the carrier, ≥ 1.
    pub orders: u32,
}

impl Drive {
    /// The source with its new latents, carrier and output; the output's is
    /// returned for the motor it feeds. The description is taken as valid: the
    /// site file reader checks it.
    pub fn expand(&self, latents: &mut Vec<Latent>) -> (LatentId, Source) {
        let carrier = push_latent(
            latents,
            format!("{} carrier", self.name),
            self.carrier_hz,
            self.carrier_tolerance,
            clock::steadiness(self.carrier_hz, self.carrier_tolerance),
        );
        let output = push_latent(
            latents,
            format!("{} output", self.name),
            self.output_hz,
            self.output_tolerance,
            Steadiness::Free,
        );
        let mut lines = vec![line("1o".to_owned(), &[(output, 1.0)], MODULATION_INDEX)];
        for m in 1..=self.orders {
            for n in sidebands(m) {
                lines.push(line(
                    format!("{m}c{}", signed(n, "o")),
                    &[(carrier, f64::from(m)), (output, f64::from(n))],
                    amplitude(m, n),
                ));
            }
        }
        scale(&mut lines);
        (output, source(&self.name, Kind::Drive, lines))
    }
}

/// Lines that a drive of so many carrier multiples has.
pub(super) fn line_count(orders: u32) -> u64 {
    let pairs = u64::from(orders / 2);
    // Seven sidebands about an odd multiple, six about an even one.
    1 + 13 * pairs + 7 * u64::from(orders % 2)
}

fn sidebands(m: u32) -> impl Iterator<Item = i32> {
    (-SIDEBANDS..=SIDEBANDS).filter(move |n| (i64::from(m) + i64::from(*n)) % 2 != 0)
}

fn amplitude(m: u32, n: i32) -> f64 {
    let m = f64::from(m);
    4.0 / (m * PI) * bessel_j(n.unsigned_abs(), m * PI * MODULATION_INDEX / 2.0).abs()
}

fn scale(lines: &mut [Line]) {
    let most = lines.iter().map(|l| l.weight).fold(0.0, f64::max);
    for line in lines {
        line.weight = (line.weight / most).clamp(LEAST_WEIGHT, 1.0);
    }
}

/// Bessel function of the first kind `J_n(x)` by Bessel's integral
/// `(1/2π)∫cos(nτ − x·sin τ)dτ` over a period. The trapezoid rule converges
/// geometrically on it once it has more points than `n + |x|`, to rounding here.
fn bessel_j(n: u32, x: f64) -> f64 {
    // x is at most a few thousand: orders are capped by the site file.
    let points = (2.0 * x.abs()).ceil() as u32 + 2 * n + 40;
    let step = 2.0 * PI / f64::from(points);
    let sum: f64 = (0..points)
        .map(|i| {
            let t = f64::from(i) * step;
            (f64::from(n) * t - x * t.sin()).cos()
        })
        .sum();
    sum / f64::from(points)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Abramowitz & Stegun, *Handbook of Mathematical Functions*, table 9.1
    /// (from memory), and the first zero of J0.
    #[test]
    fn bessel_function_of_the_tables() {
        for (n, x, expected) in [
            (0, 1.0, 0.765_197_686_6),
            (1, 1.0, 0.440_050_585_7),
            (0, 2.0, 0.223_890_779_1),
            (2, 5.0, 0.046_565_116_28),
            (0, 2.404_825_557_7, 0.0),
        ] {
            assert!((bessel_j(n, x) - expected).abs() < 1e-9, "J{n}({x})");
        }
    }

    /// Identity: J0² + 2·ΣJn² = 1.
    #[test]
    fn bessel_squares_sum_to_one() {
        for x in [0.3, 1.41, 14.1, 200.0] {
            let tail: f64 = (1..400).map(|n| bessel_j(n, x).powi(2)).sum();
            assert!(
                (bessel_j(0, x).powi(2) + 2.0 * tail - 1.0).abs() < 1e-12,
                "{x}"
            );
        }
    }

    fn drive(orders: u32) -> Source {
        let drive = Drive {
            name: "fan drive".to_owned(),
            carrier_hz: 4000.0,
            carrier_tolerance: CARRIER_TOLERANCE,
            output_hz: 42.0,
            output_tolerance: OUTPUT_TOLERANCE,
            orders,
        };
        drive.expand(&mut Vec::new()).1
    }

    #[test]
    fn line_count_is_what_expands() {
        for orders in [1, 2, 3, 10, 11] {
            assert_eq!(drive(orders).lines.len() as u64, line_count(orders));
        }
    }

    /// By hand from J0(1.4) = 0.56686, J1(1.4) = 0.54195, J1(2.8) = 0.40971 and
    /// J0(2.8) = −0.18504 (Abramowitz & Stegun, table 9.1, from memory), each carried
    /// on to M = 0.9 by its derivative: 4/π·0.5594/0.9 and 2/π·0.4006/0.9.
    #[test]
    fn weights_follow_the_double_fourier_series() {
        let source = drive(2);
        let weight = |label: &str| {
            let line = source.lines.iter().find(|line| line.label == label);
            line.unwrap().weight
        };
        assert_eq!(weight("1o"), 1.0);
        assert!((weight("1c") - 0.7914).abs() < 1e-3);
        assert!((weight("2c+1o") - 0.2834).abs() < 1e-3);
        assert_eq!(weight("2c+1o"), weight("2c-1o"));
        assert_eq!(weight("1c+6o"), LEAST_WEIGHT);
    }
}
