//! Sample rates that could be used next.

/// Rates that recorders commonly offer, Hz (common practice).
const USUAL: [f64; 48] = [
    25.0, 50.0, 64.0, 80.0, 100.0, 128.0, 160.0, 200.0, 250.0, 256.0, 400.0, 500.0, 512.0, 800.0,
    1000.0, 1024.0, 1280.0, 1600.0, 2000.0, 2048.0, 2560.0, 3200.0, 4000.0, 4096.0, 5120.0, 6400.0,
    8000.0, 10_000.0, 10_240.0, 11_025.0, 12_000.0, 12_800.0, 16_000.0, 20_000.0, 20_480.0,
    22_050.0, 24_000.0, 25_600.0, 32_000.0, 40_000.0, 44_100.0, 48_000.0, 51_200.0, 64_000.0,
    88_200.0, 96_000.0, 102_400.0, 192_000.0,
];

/// Usual rates from half to six times `rate_hz`, without it.
pub fn usual(rate_hz: f64) -> Vec<f64> {
    USUAL
        .into_iter()
        .filter(|r| (0.5 * rate_hz..=6.0 * rate_hz).contains(r))
        .filter(|r| (r / rate_hz - 1.0).abs() > 1e-4)
        .collect()
}
