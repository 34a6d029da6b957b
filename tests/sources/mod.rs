//! Site files: what they expand to, and what is said when they are wrong.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod kinds;
mod mistakes;
mod reading;

use foldtrace::sources::{Line, Site, Source};

/// Every kind, and a recorder.
pub const PLANT: &str = r#"
[recorder]
clock_ppm = 100
bandwidth_hz = 400000
antialias = { family = "butterworth", order = 4, corner_hz = 2267.6 }
aperture_s = 0.0
stages = [48000, 8000]
full_scale = "50 m/s^2"

[[source]]
name = "supply mains"
kind = "mains"
hz = 50.0
tolerance = "1 %"
orders = 80

[[source]]
name = "idler gear"          # listed before what it rides on
kind = "gear"
teeth = 31
on = "pump motor"
ratio = 0.5

[[source]]
name = "pump motor"
kind = "motor"
fed_by = "pump drive"
poles = 4
rpm = 1450
rotor_bars = 28

[[source]]
name = "pump drive"
kind = "drive"
carrier_hz = 4000
carrier_tolerance = "2 %"
output_hz = 42.0
output_tolerance = "1 Hz"
orders = 3

[[source]]
name = "fan shaft"
kind = "shaft"
rpm = 1740
tolerance = "1 %"
orders = 4
vanes = 7

[[source]]
name = "fan bearing"
kind = "bearing"
on = "fan shaft"
balls = 9
ball_mm = 7.94
pitch_mm = 39.04
angle_deg = 0

[[source]]
name = "gauge converter"
kind = "clock"
hz = 62500
tolerance = "3 %"
orders = 3
sideband_hz = 130
sidebands = 2

[[source]]
name = "whistle"
kind = "tone"
hz = 3150
"#;

pub fn site(text: &str) -> Site {
    Site::from_toml(text).unwrap_or_else(|error| panic!("{error}\n{text}"))
}

pub fn source<'s>(site: &'s Site, name: &str) -> &'s Source {
    let mut all = site.catalogue.sources.iter();
    all.find(|source| source.name == name).unwrap()
}

pub fn line<'s>(site: &'s Site, name: &str, label: &str) -> &'s Line {
    let mut all = source(site, name).lines.iter();
    all.find(|line| line.label == label)
        .unwrap_or_else(|| panic!("{name} has no line {label}"))
}

pub fn hz(site: &Site, name: &str, label: &str) -> f64 {
    site.catalogue.nominal_hz(line(site, name, label))
}

pub fn u95(site: &Site, name: &str, label: &str) -> f64 {
    1.96 * site.catalogue.prior_sd_hz(line(site, name, label))
}

#[track_caller]
pub fn near(got: f64, expected: f64, within: f64) {
    assert!(
        (got - expected).abs() <= within,
        "{got}, expected {expected} ± {within}"
    );
}
