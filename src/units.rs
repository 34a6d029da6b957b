//! Frequencies of two worlds, kept apart by type where stages meet.

use serde::Serialize;

/// A frequency in the analog world, in hertz, before any sampling. Range ≥ 0.
#[derive(Debug, Clone, Copy, PartialEq, PartialOrd, Serialize)]
#[serde(transparent)]
pub struct TrueHz(pub f64);

/// A frequency as it shows in the recording, in hertz, in `[0, rate/2]`.
#[derive(Debug, Clone, Copy, Default, PartialEq, PartialOrd, Serialize)]
#[serde(transparent)]
pub struct SeenHz(pub f64);

/// Whether a rising true frequency is seen to rise or to fall.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Sense {
    /// Odd Nyquist zone: the spectrum keeps its direction.
    Upright,
    /// Even Nyquist zone: the spectrum is inverted and phase conjugated.
    Inverted,
}

impl Sense {
    /// +1 for upright, −1 for inverted: the slope of seen against true frequency.
    pub fn sign(self) -> f64 {
        match self {
            Sense::Upright => 1.0,
            Sense::Inverted => -1.0,
        }
    }

    /// `true` in an even zone.
    pub fn is_inverted(self) -> bool {
        self == Sense::Inverted
    }
}

/// Half-width of a 95 % interval of a normal distribution, in standard deviations.
pub const U95: f64 = 1.959_963_984_540_054;

/// Decibels of a power ratio; minus infinity for zero.
pub fn power_db(ratio: f64) -> f64 {
    10.0 * ratio.log10()
}

/// Decibels of an amplitude ratio; minus infinity for zero.
pub fn amplitude_db(ratio: f64) -> f64 {
    20.0 * ratio.log10()
}
