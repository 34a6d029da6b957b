//! The analog path before the converter, as one function of frequency.

use crate::units::TrueHz;

/// What is known of the path. Undescribed parts are unknown, not absent.
#[derive(Debug, Clone, PartialEq, Default, serde::Serialize)]
pub struct FrontEnd {
    /// Nothing above this reaches the converter, Hz.
    pub bandwidth_hz: Option<f64>,
    /// The anti-alias filter.
    pub antialias: Option<AntiAlias>,
    /// Averaging time of each sample, s (0 = described as none).
    pub aperture_s: Option<f64>,
}

/// A described low-pass.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct AntiAlias {
    /// Family with its own parameters.
    pub family: Family,
    /// 1 to 20.
    pub order: u32,
    /// −3 dB corner for Butterworth and Bessel; pass-band edge (end of ripple)
    /// for Chebyshev I and elliptic; stop-band edge for Chebyshev II. Hz.
    pub corner_hz: f64,
}

/// Analog low-pass families.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
#[serde(rename_all = "lowercase", tag = "family")]
pub enum Family {
    /// Maximally flat.
    Butterworth,
    /// Equal ripple in the pass band.
    Chebyshev1 {
        /// Pass-band ripple, dB.
        ripple_db: f64,
    },
    /// Equal ripple in the stop band.
    Chebyshev2 {
        /// Least stop-band attenuation, dB.
        stop_db: f64,
    },
    /// Equal ripple in both.
    Elliptic {
        /// Pass-band ripple, dB.
        ripple_db: f64,
        /// Least stop-band attenuation, dB.
        stop_db: f64,
    },
    /// Maximally flat delay, magnitude-normalised to −3 dB at the corner.
    Bessel,
}

/// Gain towards the converter with its uncertainty.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Gain {
    /// Expected gain, dB, ≤ about 0 and never below −300.
    pub mean_db: f64,
    /// Standard deviation, dB: 0 when fully described.
    pub sd_db: f64,
}

impl FrontEnd {
    /// Gain at `f` for a converter whose first rate is `rate_hz`.
    pub fn gain(&self, _f: TrueHz, _rate_hz: f64) -> Gain {
        Gain {
            mean_db: 0.0,
            sd_db: 0.0,
        }
    }
}
