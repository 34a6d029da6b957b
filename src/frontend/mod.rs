//! The analog path before the converter, as one function of frequency.
//!
//! What is described is computed; what is not is given a broad prior, because an
//! undescribed recorder may have a steep filter or none at all.

mod elliptic;
mod prototype;

pub use prototype::{FilterError, MAX_ORDER, Prototype};

use crate::units::{TrueHz, amplitude_db};

/// No gain is given below this, dB.
pub const FLOOR_DB: f64 = -300.0;

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

impl AntiAlias {
    /// Whether the numbers describe a filter.
    ///
    /// # Errors
    /// The first of them that does not, by name.
    pub fn validate(&self) -> Result<(), FilterError> {
        Prototype::new(self).map(|_| ())
    }

    /// Magnitude at `f`, dB, from [`FLOOR_DB`] to 0.
    ///
    /// # Errors
    /// As [`validate`](AntiAlias::validate).
    pub fn magnitude_db(&self, f: TrueHz) -> Result<f64, FilterError> {
        Ok(Prototype::new(self)?.magnitude_db(f))
    }
}

impl FrontEnd {
    /// Gain at `f` for a converter whose first rate is `rate_hz`; the sum of
    ///
    /// - nothing above `bandwidth_hz`: [`FLOOR_DB`], certain;
    /// - the described anti-alias filter, certain; or, where none is described,
    ///   [`undescribed_antialias`];
    /// - the described aperture `τ`, `|sin(πfτ)/(πfτ)|`, certain; or, where none is
    ///   described but the filter is, [`undescribed_aperture`] (a filter that is
    ///   unknown as well has its spread wide enough for both).
    ///
    /// A negative `f` stands for its magnitude. A filter that
    /// [`AntiAlias::validate`] refuses counts as not described.
    pub fn gain(&self, f: TrueHz, rate_hz: f64) -> Gain {
        self.prepared().gain(f, rate_hz)
    }

    /// The same with the filter worked out once, for many calls.
    pub fn prepared(&self) -> PreparedFrontEnd {
        PreparedFrontEnd {
            bandwidth_hz: self.bandwidth_hz,
            antialias: self.antialias.and_then(|a| Prototype::new(&a).ok()),
            aperture_s: self.aperture_s,
        }
    }
}

/// A [`FrontEnd`] with its filter worked out. Made by [`FrontEnd::prepared`].
#[derive(Debug, Clone, PartialEq)]
pub struct PreparedFrontEnd {
    bandwidth_hz: Option<f64>,
    antialias: Option<Prototype>,
    aperture_s: Option<f64>,
}

/// Scale on which weaker tones are more common, dB: one more e-fold of tones for
/// each step down. A judgement, not a measurement.
const RARITY_DB: f64 = 18.0;

impl PreparedFrontEnd {
    /// Share of tones at `f` that would still be seen behind the front end, in
    /// `(0, 1]`: `E exp(G/R)` for a normal gain `G`, never above 1.
    pub fn share_seen(&self, f: TrueHz, rate_hz: f64) -> f64 {
        let gain = self.gain(f, rate_hz);
        let scale = gain.sd_db / RARITY_DB;
        (gain.mean_db / RARITY_DB + 0.5 * scale * scale)
            .min(0.0)
            .exp()
    }

    /// See [`FrontEnd::gain`].
    pub fn gain(&self, f: TrueHz, rate_hz: f64) -> Gain {
        let f = TrueHz(f.0.abs());
        if self.bandwidth_hz.is_some_and(|top| f.0 > top) {
            return Gain {
                mean_db: FLOOR_DB,
                sd_db: 0.0,
            };
        }
        let filter = match &self.antialias {
            Some(prototype) => Gain {
                mean_db: prototype.magnitude_db(f),
                sd_db: 0.0,
            },
            None => undescribed_antialias(f, rate_hz),
        };
        let aperture = match (self.aperture_s, &self.antialias) {
            (Some(tau), _) => Gain {
                mean_db: aperture_db(f, tau),
                sd_db: 0.0,
            },
            (None, Some(_)) => undescribed_aperture(f, rate_hz),
            (None, None) => Gain {
                mean_db: 0.0,
                sd_db: 0.0,
            },
        };
        Gain {
            mean_db: (filter.mean_db + aperture.mean_db).max(FLOOR_DB),
            sd_db: filter.sd_db.hypot(aperture.sd_db),
        }
    }
}

/// Gain of a converter that averages over `aperture_s` seconds, `|sin(πfτ)/(πfτ)|`,
/// in dB; [`FLOOR_DB`] at its zeros. An aperture of 0 s has 0 dB.
pub fn aperture_db(f: TrueHz, aperture_s: f64) -> f64 {
    let x = (f.0 * aperture_s).abs();
    if x == 0.0 {
        return 0.0;
    }
    // Distance from the nearest zero: exact there, for any number of turns.
    let sine = (std::f64::consts::PI * (x - x.round())).sin();
    amplitude_db((sine / (std::f64::consts::PI * x)).abs()).max(FLOOR_DB)
}

/// Prior on the gain of an anti-alias filter of which nothing is known.
///
/// In the band it passes everything, within half a dB, less surely towards half
/// the rate, where a filter may have begun to fall: `0.5 + 9.5·x⁸` dB for
/// `x = 2f/rate`. Above, by `u = log₂ x` octaves, the mean falls by 10 dB per octave
/// to −40 dB, with a spread from 10 to 25 dB: no filter at all (0 dB) lies within
/// two standard deviations everywhere, a steep one (−60 dB and more) within two or
/// three from the first octave on. A judgement, not a measurement.
pub fn undescribed_antialias(f: TrueHz, rate_hz: f64) -> Gain {
    let x = 2.0 * f.0.abs() / rate_hz;
    if x <= 1.0 {
        return Gain {
            mean_db: 0.0,
            sd_db: 0.5 + 9.5 * x.powi(8),
        };
    }
    let octaves = x.log2();
    Gain {
        mean_db: (-10.0 * octaves).max(-40.0),
        sd_db: (10.0 + 7.5 * octaves).min(25.0),
    }
}

/// Prior on the gain of an aperture of which nothing is known.
///
/// Most converters sample in an instant (0 dB); a few average over the whole
/// sample period, which costs 3.9 dB at half the rate and 13 dB beyond it. Taken as
/// 0 dB with a spread of `3·x²/(1 + x²)` dB for `x = 2f/rate`. A judgement, not a
/// measurement.
pub fn undescribed_aperture(f: TrueHz, rate_hz: f64) -> Gain {
    let x2 = (2.0 * f.0 / rate_hz).powi(2).min(1e12);
    Gain {
        mean_db: 0.0,
        sd_db: 3.0 * x2 / (1.0 + x2),
    }
}
