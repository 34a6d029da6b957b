//! An induction motor on a supply.
//!
//! Two latents: the shaft's speed `n` and the supply `f`, the latter shared with
//! the mains or drive that feeds it. Its slip shows as the pole-pass frequency
//! `p = poles × slip speed = 2f − poles·n`, which is linear in the two. Labels:
//! `x` shaft, `f` supply, `p` pole pass, `b` bar pass (`rotor_bars·n`). Lines:
//!
//! - `1x`…`6x`, as of any shaft;
//! - `2f`, the pull between stator and rotor;
//! - `1x±jp`, `2x±jp`, `3x±jp`, j = 1, 2, and `2f±1p`: rotor faults in vibration
//!   (common practice); `1f±1p`, the same in the current, at `f(1 ± 2·slip)`
//!   (Nandi, Toliyat & Li, IEEE Transactions on Energy Conversion 20, 2005; from memory);
//! - with `rotor_bars`, `1b`, `1b±2f` and their doubles, the form of vibration
//!   (common practice), and `1b±1f` and its double, the rotor slot harmonics of the
//!   current (the same survey, for the supply's fundamental).
//!
//! Weights are a choice of this project: the shaft's as in [`super::shaft`], 0.9 for
//! `2f`, 0.3 and less for sidebands, 0.5 and less for bars.

use super::{
    Kind, Latent, LatentId, Source, Steadiness, line, push_latent, quantity::Tolerance, shaft,
    signed, source,
};
use crate::units::U95;

/// Of a supply of the motor's own, where none is given: as [`super::mains::TOLERANCE`].
pub const SUPPLY_TOLERANCE: Tolerance = super::mains::TOLERANCE;

/// Shaft multiples listed.
pub const SHAFT_MULTIPLES: u32 = 6;

/// A motor.
#[derive(Debug, Clone, PartialEq)]
pub struct Motor {
    /// Name of the source.
    pub name: String,
    /// Pole count, even, ≥ 2.
    pub poles: u32,
    /// What is known of its speed.
    pub speed: Speed,
    /// Rotor bar count.
    pub rotor_bars: Option<u32>,
}

/// What is known of a motor's speed.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Speed {
    /// The nameplate: full-load speed at a frequency.
    Nameplate {
        /// Revolutions per minute, > 0.
        rpm: f64,
        /// Supply frequency it is stated for, Hz.
        at_hz: f64,
        /// Of the speed. `None`: anywhere from synchronous speed to twice the
        /// nameplate's slip, and with the supply.
        tolerance: Option<Tolerance>,
    },
    /// A range of slip (as a fraction of synchronous speed) that holds 95 %.
    Slip {
        /// ≥ 0.
        low: f64,
        /// Above `low`, below 1.
        high: f64,
    },
}

/// Speed of the field, Hz: `2f/poles`, that is 120 f/poles in rpm (common practice).
pub fn synchronous_hz(supply_hz: f64, poles: u32) -> f64 {
    2.0 * supply_hz / f64::from(poles)
}

/// The frequency that a nameplate's `rpm` is stated for, on a motor fed by a drive:
/// 50 or 60 Hz if either fits with a slip from 0 to 12 %, otherwise the drive's own
/// output if that fits. `None` if nothing does.
pub fn nameplate_hz(rpm: f64, poles: u32, output_hz: f64) -> Option<f64> {
    [50.0, 60.0, output_hz]
        .into_iter()
        .find(|&hz| (0.0..=0.12).contains(&(1.0 - rpm / 60.0 / synchronous_hz(hz, poles))))
}

impl Motor {
    /// A supply latent for a motor that no listed source feeds.
    pub fn own_supply(&self, hz: f64, tolerance: Tolerance, latents: &mut Vec<Latent>) -> LatentId {
        let name = format!("{} supply", self.name);
        push_latent(latents, name, hz, tolerance, Steadiness::Free)
    }

    /// The source with its new latent, the shaft's speed, on the supply latent
    /// `supply` of nominal `supply_hz` and prior `supply_sd_hz`. The description is
    /// taken as valid: the site file reader checks it.
    pub fn expand(&self, latents: &mut Vec<Latent>, supply: LatentId) -> (LatentId, Source) {
        let (supply_hz, supply_sd_hz) = latents
            .get(supply.0)
            .map_or((0.0, 0.0), |latent| (latent.nominal_hz, latent.sd_hz));
        let (nominal_hz, sd_hz) = self.shaft_prior(supply_hz, supply_sd_hz);
        let speed = push_latent(
            latents,
            format!("{} shaft", self.name),
            nominal_hz,
            Tolerance::Hz(sd_hz * U95),
            Steadiness::Free,
        );
        let lines = self
            .forms()
            .into_iter()
            .map(|form| {
                let poles = f64::from(self.poles);
                let p = f64::from(form.p);
                let x = f64::from(form.x) + f64::from(form.b) * f64::from(self.bars());
                line(
                    form.label(),
                    &[
                        (speed, x - p * poles),
                        (supply, f64::from(form.f) + 2.0 * p),
                    ],
                    form.weight,
                )
            })
            .collect();
        (speed, source(&self.name, Kind::Motor, lines))
    }

    fn bars(&self) -> u32 {
        self.rotor_bars.unwrap_or(0)
    }

    /// Mean and standard deviation of the shaft's speed, Hz.
    fn shaft_prior(&self, supply_hz: f64, supply_sd_hz: f64) -> (f64, f64) {
        let per_hz = synchronous_hz(1.0, self.poles);
        match self.speed {
            Speed::Slip { low, high } => {
                let slip = (low + high) / 2.0;
                let slip_sd = (high - low) / 2.0 / U95;
                let from_supply = per_hz * (1.0 - slip) * supply_sd_hz;
                let from_slip = per_hz * supply_hz * slip_sd;
                (
                    per_hz * supply_hz * (1.0 - slip),
                    from_supply.hypot(from_slip),
                )
            }
            Speed::Nameplate {
                rpm,
                at_hz,
                tolerance,
            } => {
                // At a given torque the rotor lags the field by a fixed number of
                // hertz, whatever the supply; a drive near standstill gives less torque.
                let slip_hz = (at_hz - rpm / 60.0 / per_hz).min(0.2 * supply_hz);
                let nominal_hz = per_hz * (supply_hz - slip_hz);
                let sd_hz = match tolerance {
                    Some(tolerance) => tolerance.sd_hz(nominal_hz),
                    None => {
                        let load = (per_hz * slip_hz.abs()).max(0.005 * nominal_hz) / U95;
                        load.hypot(per_hz * supply_sd_hz)
                    }
                };
                (nominal_hz, sd_hz)
            }
        }
    }

    fn forms(&self) -> Vec<Form> {
        let mut forms = Vec::new();
        for x in 1..=SHAFT_MULTIPLES {
            forms.push(Form {
                x: i32::try_from(x).unwrap_or(0),
                weight: shaft::order_weight(x),
                ..Form::default()
            });
        }
        forms.push(Form {
            f: 2,
            weight: 0.9,
            ..Form::default()
        });
        for x in 1..=3 {
            for p in [-1_i32, 1, -2, 2] {
                let weight = 0.3 / f64::from(x) / f64::from(p.abs());
                forms.push(Form {
                    x,
                    p,
                    weight,
                    ..Form::default()
                });
            }
        }
        for p in [-1, 1] {
            forms.push(Form {
                f: 1,
                p,
                weight: 0.3,
                ..Form::default()
            });
            forms.push(Form {
                f: 2,
                p,
                weight: 0.2,
                ..Form::default()
            });
        }
        if self.rotor_bars.is_some() {
            for (b, share) in [(1, 1.0), (2, 0.5)] {
                for (f, weight) in [(0, 0.5), (-2, 0.4), (2, 0.4), (-1, 0.25), (1, 0.25)] {
                    forms.push(Form {
                        b,
                        f,
                        weight: share * weight,
                        ..Form::default()
                    });
                }
            }
        }
        forms
    }
}

/// One line as a sum of bar pass, shaft, supply and pole pass.
#[derive(Debug, Clone, Copy, Default)]
struct Form {
    b: i32,
    x: i32,
    f: i32,
    p: i32,
    weight: f64,
}

impl Form {
    fn label(self) -> String {
        let mut label = String::new();
        for (count, unit) in [(self.b, "b"), (self.x, "x"), (self.f, "f"), (self.p, "p")] {
            match count {
                0 => {}
                _ if label.is_empty() => label = format!("{count}{unit}"),
                _ => label.push_str(&signed(count, unit)),
            }
        }
        label
    }
}
