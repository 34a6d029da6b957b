//! Spectral windows against figures computed from their samples and against
//! published tables.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use foldtrace::spectrum::window::Window;
use rustfft::{FftPlanner, num_complex::Complex};

/// Rows of a reference file, each a map from its header.
fn reference(text: &str) -> Vec<std::collections::HashMap<String, String>> {
    csv::Reader::from_reader(text.as_bytes())
        .deserialize()
        .map(|row| row.unwrap())
        .collect()
}

fn window(name: &str) -> Window {
    let quoted = format!("{name:?}");
    *Window::ALL
        .iter()
        .find(|w| serde_json::to_string(w).unwrap() == quoted)
        .unwrap_or_else(|| panic!("no window {name}"))
}

/// Figures of merit measured on samples alone: noise bandwidth in bins, highest
/// sidelobe in dB, scalloping loss in dB, main-lobe half width to the first zero.
struct Measured {
    enbw_bins: f64,
    sidelobe_db: f64,
    scalloping_db: f64,
    half_width_bins: f64,
}

fn measure(samples: &[f64]) -> Measured {
    let n = samples.len();
    let pad = 256;
    let mut buffer: Vec<Complex<f64>> = samples.iter().map(|&w| Complex::new(w, 0.0)).collect();
    buffer.resize(n * pad, Complex::default());
    FftPlanner::new()
        .plan_fft_forward(n * pad)
        .process(&mut buffer);
    let magnitude: Vec<f64> = buffer[..n * pad / 2].iter().map(|c| c.norm()).collect();
    let sum: f64 = samples.iter().sum();
    let power: f64 = samples.iter().map(|w| w * w).sum();
    // Down the main lobe to where the response first rises again.
    let zero = (1..magnitude.len())
        .find(|&i| magnitude[i] > magnitude[i - 1])
        .unwrap()
        - 1;
    let sidelobe = magnitude[zero..].iter().copied().fold(0.0, f64::max);
    Measured {
        enbw_bins: n as f64 * power / (sum * sum),
        sidelobe_db: 20.0 * (sidelobe / sum).log10(),
        scalloping_db: -20.0 * (magnitude[pad / 2] / sum).log10(),
        half_width_bins: zero as f64 / pad as f64,
    }
}

/// Table I of Harris 1978 (from memory): noise bandwidth, sidelobe, scalloping
/// loss, each good to one unit of its last digit. The loss printed for Hamming, 1.78,
/// is that of the exact coefficient 25/46; for 0.54, whose noise bandwidth the
/// table prints, it is 20·log10(π/2 / (1 + 0.46/0.54/3)) = 1.75, asked for here.
const TABLE: [(Window, f64, f64, f64); 4] = [
    (Window::Rectangular, 1.00, -13.0, 3.92),
    (Window::Hann, 1.50, -32.0, 1.42),
    (Window::Hamming, 1.36, -43.0, 1.75),
    (Window::BlackmanHarris, 2.00, -92.0, 0.83),
];

fn agrees(m: &Measured, (_, enbw, sidelobe, scalloping): (Window, f64, f64, f64)) -> bool {
    (m.enbw_bins - enbw).abs() < 0.01
        && (m.sidelobe_db - sidelobe).abs() < 1.0
        && (m.scalloping_db - scalloping).abs() < 0.01
}

#[test]
fn samples_have_the_published_figures() {
    for row in TABLE {
        let m = measure(&row.0.coefficients(512));
        assert!(
            agrees(&m, row),
            "{row:?}: {} {} {}",
            m.enbw_bins,
            m.sidelobe_db,
            m.scalloping_db
        );
    }
    // The explanation of the Hamming entry, by the same measurement.
    let a0 = 25.0 / 46.0;
    let exact: Vec<f64> = (0..512)
        .map(|i| a0 - (1.0 - a0) * (f64::from(i) * std::f64::consts::TAU / 512.0).cos())
        .collect();
    let loss = measure(&exact).scalloping_db;
    assert!((loss - 1.78).abs() < 0.005, "{loss}");
    // Nuttall 1981 (from memory): the minimum four-term window has −98.17 dB.
    let nuttall = measure(&Window::Nuttall.coefficients(4096));
    assert!(
        (nuttall.sidelobe_db + 98.17).abs() < 0.01,
        "{}",
        nuttall.sidelobe_db
    );
}

#[test]
fn the_figure_checker_can_fail() {
    // A Hann window with one sample spoilt, and one taken for another.
    let mut spoilt = Window::BlackmanHarris.coefficients(512);
    spoilt[200] += 0.01;
    assert!(!agrees(&measure(&spoilt), TABLE[3]));
    assert!(!agrees(&measure(&Window::Hann.coefficients(512)), TABLE[2]));
}

#[test]
fn stated_figures_are_those_of_the_samples() {
    for w in Window::ALL {
        let samples = w.coefficients(2048);
        let m = measure(&samples);
        let gain = samples.iter().sum::<f64>() / 2048.0;
        // Exact sums: rounding of 2048 additions.
        assert!((w.enbw_bins() - m.enbw_bins).abs() < 1e-12, "{w:?}");
        assert!((w.coherent_gain() - gain).abs() < 1e-14, "{w:?}");
        // Long-window limits differ from 2048 samples by the partnerless first sample,
        // in quadrature: for Nuttall 3.6e-4/(2048·0.36) against sidelobes of 1.2e-5,
        // so 0.007 dB; a lobe's peak is met to a 128th of a bin, 0.003 dB.
        assert!(
            (w.scalloping_loss_db() - m.scalloping_db).abs() < 1e-4,
            "{w:?}"
        );
        assert!(
            (w.highest_sidelobe_db() - m.sidelobe_db).abs() < 0.015,
            "{w:?}: {} {}",
            w.highest_sidelobe_db(),
            m.sidelobe_db
        );
        assert!(
            (w.main_lobe_half_width_bins() - m.half_width_bins).abs() < 0.01,
            "{w:?}"
        );
    }
}

#[test]
fn samples_match_the_reference() {
    let rows = reference(include_str!("reference/windows.csv"));
    assert_eq!(rows.len(), 80);
    for row in &rows {
        let w = window(&row["window"]);
        let n = row["length"].parse().unwrap();
        let got = w.coefficients(n)[row["index"].parse::<usize>().unwrap()];
        let expected: f64 = row["value"].parse().unwrap();
        assert!(
            (got - expected).abs() < 4.0 * f64::EPSILON,
            "{row:?}: {got}"
        );
    }
    let rows = reference(include_str!("reference/window_figures.csv"));
    for row in &rows {
        let w = window(&row["window"]);
        let enbw: f64 = row["enbw_bins"].parse().unwrap();
        let gain: f64 = row["coherent_gain"].parse().unwrap();
        assert!((w.enbw_bins() - enbw).abs() < 1e-12, "{row:?}");
        assert!((w.coherent_gain() - gain).abs() < 1e-14, "{row:?}");
    }
}

#[test]
fn responses_match_the_reference() {
    let rows = reference(include_str!("reference/window_response.csv"));
    assert_eq!(rows.len(), 50);
    for row in &rows {
        let w = window(&row["window"]);
        let n: usize = row["length"].parse().unwrap();
        let offset: f64 = row["offset_bins"].parse().unwrap();
        let expected: f64 = row["magnitude"].parse().unwrap();
        let got = w.transform(offset, n);
        // Budget: the quadrature part of the first sample (none where the window
        // starts at 0), and the rounding of 1024 additions.
        let first = w.coefficients(n)[0];
        let quadrature = first / (n as f64 * w.coherent_gain());
        let quadrature = if w == Window::Rectangular {
            0.0
        } else {
            quadrature
        };
        let error = (got.abs() - expected).abs();
        assert!(
            error < quadrature + 1e-14,
            "{row:?}: {got}, off by {error:e}"
        );
    }
}

/// The transform by its definition, about sample `n/2`.
fn naive_transform(samples: &[f64], delta: f64) -> Complex<f64> {
    let n = samples.len() as f64;
    let sum: f64 = samples.iter().sum();
    let at: Complex<f64> = samples
        .iter()
        .enumerate()
        .map(|(i, w)| {
            let m = i as f64 - (n / 2.0).floor();
            Complex::from_polar(*w, -2.0 * std::f64::consts::PI * delta * m / n)
        })
        .sum();
    at / sum
}

#[test]
fn closed_forms_equal_the_sum_with_its_sign() {
    for w in [Window::Hann, Window::Nuttall, Window::BlackmanHarris] {
        let n = 64;
        let samples = w.coefficients(n);
        for i in -400..400 {
            let delta = f64::from(i) * 0.171;
            let slow = naive_transform(&samples, delta);
            let fast = w.transform(delta, n);
            assert!(
                (slow.re - fast).abs() < 1e-13,
                "{w:?} at {delta}: {slow} {fast}"
            );
        }
        assert_eq!(w.transform(0.0, n), 1.0);
        // Beside the poles of the kernels, at whole bins of the main lobe.
        let half = w.terms()[1] / (2.0 * w.terms()[0]);
        for delta in [1.0, 1.0 + 1e-12, -1.0 - 1e-12] {
            assert!(
                (w.transform(delta, n) - half).abs() < 1e-10,
                "{w:?} {delta}"
            );
        }
        assert!(w.transform(7.0, n).abs() < 1e-15, "{w:?}");
    }
    // And the sign is real information: a sidelobe of the Hann window is negative.
    assert!(Window::Hann.transform(2.5, 64) < 0.0);
    assert!(Window::Rectangular.transform(1.5, 64) < 0.0);
}

#[test]
fn short_windows_are_whole() {
    for w in Window::ALL {
        assert!(w.coefficients(0).is_empty());
        assert_eq!(w.coefficients(1), [1.0]);
        assert_eq!(w.coefficients(2).len(), 2);
        for n in [2, 3, 8, 1000, 4097] {
            let samples = w.coefficients(n);
            assert!(
                samples.iter().all(|v| (0.0..=1.0 + 1e-15).contains(v)),
                "{w:?} {n}"
            );
            if n % 2 == 0 {
                assert!((samples[n / 2] - 1.0).abs() < 1e-15, "{w:?} {n}");
            }
        }
    }
}

#[test]
fn a_windowed_sine_has_the_reference_power() {
    let rows = reference(include_str!("reference/sine_window.csv"));
    assert_eq!(rows.len(), 15);
    for row in &rows {
        let w = window(&row["window"]);
        let n: usize = row["length"].parse().unwrap();
        let offset: f64 = row["offset_bins"].parse().unwrap();
        let mut buffer: Vec<Complex<f64>> = w
            .coefficients(n)
            .iter()
            .enumerate()
            .map(|(i, v)| {
                let phase = 2.0 * std::f64::consts::PI * (40.0 + offset) * i as f64 / n as f64;
                Complex::new(v * (phase + 0.7).sin(), 0.0)
            })
            .collect();
        FftPlanner::new().plan_fft_forward(n).process(&mut buffer);
        let scale = 2.0 / (n as f64 * w.coherent_gain()).powi(2);
        let peak = buffer[..n / 2]
            .iter()
            .map(|c| c.norm_sqr() * scale)
            .fold(0.0, f64::max);
        let expected: f64 = row["peak_power"].parse().unwrap();
        assert!((peak / expected - 1.0).abs() < 1e-12, "{row:?}: {peak}");
        // And the response explains it: half the power, times the square of W. The
        // mirror image at −40 bins and the sidelobes decide how well.
        let predicted = 0.5 * w.transform(offset, n).powi(2);
        let leak = w.transform(80.0 + offset, n).abs() / w.transform(offset, n);
        assert!(
            (peak / predicted - 1.0).abs() < 2.5 * leak + 1e-5,
            "{row:?}: {predicted}"
        );
    }
}

/// The integers of the reference's recipe: `x → (1103515245·x + 12345) mod 2³¹` from
/// 1, each `(x >> 16) − 16384`.
fn test_noise(count: usize) -> Vec<f64> {
    let mut x: u64 = 1;
    (0..count)
        .map(|_| {
            x = (1_103_515_245 * x + 12_345) % (1 << 31);
            (x >> 16) as f64 - 16_384.0
        })
        .collect()
}

/// Welch's averaged periodogram written out plainly: one-sided density of Hann
/// segments with half overlap.
fn naive_welch(samples: &[f64], rate_hz: f64, segment: usize) -> Vec<f64> {
    let window = Window::Hann.coefficients(segment);
    let fft = FftPlanner::new().plan_fft_forward(segment);
    let mut density = vec![0.0; segment / 2 + 1];
    let starts: Vec<usize> = (0..=samples.len() - segment).step_by(segment / 2).collect();
    for &start in &starts {
        let mut buffer: Vec<Complex<f64>> = samples[start..start + segment]
            .iter()
            .zip(&window)
            .map(|(x, w)| Complex::new(x * w, 0.0))
            .collect();
        fft.process(&mut buffer);
        for (d, c) in density.iter_mut().zip(&buffer) {
            *d += c.norm_sqr();
        }
    }
    let power: f64 = window.iter().map(|w| w * w).sum();
    for (bin, d) in density.iter_mut().enumerate() {
        let sides = if bin == 0 || bin == segment / 2 {
            1.0
        } else {
            2.0
        };
        *d *= sides / (rate_hz * power * starts.len() as f64);
    }
    density
}

#[test]
fn averaged_periodograms_match_the_reference() {
    let rows = reference(include_str!("reference/welch.csv"));
    let noise = test_noise(2048);
    let tone: Vec<f64> = noise
        .iter()
        .enumerate()
        .map(|(i, x)| {
            let square = if (i / 9) % 2 == 0 { 8192.0 } else { -8192.0 };
            (x / 256.0).floor() + square
        })
        .collect();
    for (name, samples) in [("noise", noise), ("tone", tone)] {
        let density = naive_welch(&samples, 8000.0, 256);
        let expected = rows.iter().filter(|row| row["signal"] == name);
        assert_eq!(expected.clone().count(), density.len());
        let largest = density.iter().copied().fold(0.0, f64::max);
        for (row, got) in expected.zip(&density) {
            let density: f64 = row["density"].parse().unwrap();
            let power: f64 = row["power"].parse().unwrap();
            // Budget: a transform of 256 doubles, rounding relative to the largest bin
            // in amplitude.
            let budget = 1e-13 * (density * largest).sqrt();
            assert!((got - density).abs() < budget, "{name} {row:?}: {got}");
            // The two scalings differ by the noise bandwidth.
            let bandwidth_hz = Window::Hann.enbw_bins() * 8000.0 / 256.0;
            assert!(
                (power / (density * bandwidth_hz) - 1.0).abs() < 1e-12,
                "{row:?}"
            );
        }
    }
}
