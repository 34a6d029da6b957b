//! The averaged spectrum against SciPy's `signal.welch`, whose values are stored
//! in `tests/reference/welch.csv` (made by `scripts/reference_values.py`).

use foldtrace::spectrum::samples::InMemory;
use foldtrace::spectrum::welch;

/// The test signals, made again exactly: see `lcg` and `welch` in the script.
fn signals() -> [(&'static str, Vec<f32>); 2] {
    let mut x: u64 = 1;
    let noise: Vec<i64> = (0..2048)
        .map(|_| {
            x = (1_103_515_245 * x + 12_345) % (1 << 31);
            (x >> 16) as i64 - 16_384
        })
        .collect();
    let tone = noise
        .iter()
        .enumerate()
        .map(|(i, v)| (v.div_euclid(256) + if (i / 9) % 2 == 0 { 8192 } else { -8192 }) as f32)
        .collect();
    [
        ("noise", noise.iter().map(|&v| v as f32).collect()),
        ("tone", tone),
    ]
}

/// Largest error relative to the mean density.
fn worst_error(samples: Vec<f32>, name: &str) -> f64 {
    let recording = InMemory {
        rate_hz: 8000.0,
        channels: vec![samples],
    };
    let averaged = welch::average(&recording, 256, &|_| ()).unwrap();
    assert_eq!(averaged.count, 15);
    let density = averaged.density(0);
    let mut reference = csv::Reader::from_path("tests/reference/welch.csv").unwrap();
    let expected: Vec<f64> = reference
        .records()
        .map(Result::unwrap)
        .filter(|r| &r[0] == name)
        .map(|r| r[2].parse().unwrap())
        .collect();
    assert_eq!(expected.len(), density.len());
    let mean = expected.iter().sum::<f64>() / expected.len() as f64;
    density
        .iter()
        .zip(&expected)
        .map(|(a, b)| (a - b).abs() / mean)
        .fold(0.0, f64::max)
}

#[test]
fn averaged_spectrum_agrees_with_scipy() {
    for (name, samples) in signals() {
        // f32 transforms of 256 samples: relative error of a bin's amplitude about
        // 1e-7·√log2(256), its square twice that; a strong line's bins carry
        // hundreds of times the mean.
        let error = worst_error(samples, name);
        assert!(error < 1e-4, "{name}: {error}");
    }
}

#[test]
fn the_comparison_can_fail() {
    let [_, (_, mut samples)] = signals();
    samples.iter_mut().for_each(|v| *v *= 1.001);
    assert!(worst_error(samples, "tone") > 1e-4);
}
