//! An oscillator or switching clock: multiples, perhaps with sidebands.
//!
//! Lines `kx` at `k·f`, and with a `sideband_hz` of `s` the lines `kx±js` at
//! `k·f ± j·s`, each side `sidebands` of them (a converter whose clock is dithered
//! or loaded in rhythm). The odd multiples of a square wave fall as 1/k in
//! amplitude and its even ones vanish only at exactly half duty: weights are
//! `k^-1/2`, times 0.7 for even k, times `0.5^j` for sidebands.

use super::{
    Kind, Latent, Source, Steadiness, line, push_latent, quantity::Tolerance, signed, source,
};

/// ±100 ppm where none is given: an ordinary crystal with its temperature and
/// ageing (common practice). An oscillator without a crystal needs its own.
pub const TOLERANCE: Tolerance = Tolerance::ppm(100.0);

/// ±1 % for the sideband spacing where none is given.
pub const SIDEBAND_TOLERANCE: Tolerance = Tolerance::percent(1.0);

/// Highest multiple where none is given.
pub const ORDERS: u32 = 10;

/// Sidebands on each side where a spacing but no count is given.
pub const SIDEBANDS: u32 = 3;

/// A clock held tighter than this (as a fraction) is taken to be crystal-locked:
/// oscillators without a crystal are not made to 1000 ppm (common practice).
pub const QUARTZ: f64 = 1000e-6;

/// A clock.
#[derive(Debug, Clone, PartialEq)]
pub struct Clock {
    /// Name of the source.
    pub name: String,
    /// Clock frequency, Hz, > 0.
    pub hz: f64,
    /// Of the clock frequency.
    pub tolerance: Tolerance,
    /// Whether it may wander.
    pub steadiness: Steadiness,
    /// Highest multiple, ≥ 1.
    pub orders: u32,
    /// What modulates it.
    pub sidebands: Option<Sidebands>,
}

/// Sidebands of a clock.
#[derive(Debug, Clone, PartialEq)]
pub struct Sidebands {
    /// Spacing, Hz, > 0.
    pub hz: f64,
    /// Of the spacing.
    pub tolerance: Tolerance,
    /// How many on each side, ≥ 1.
    pub count: u32,
}

/// Crystal-locked when the tolerance is at most [`QUARTZ`], otherwise free.
pub fn steadiness(hz: f64, tolerance: Tolerance) -> Steadiness {
    // A hair of room, so that "1000 ppm" is in whatever its rounding.
    if tolerance.relative(hz) <= QUARTZ * (1.0 + 1e-9) {
        Steadiness::Quartz
    } else {
        Steadiness::Free
    }
}

impl Clock {
    /// The source with its new latents: the clock and, if any, the sideband
    /// spacing. The description is taken as valid: the site file reader checks it.
    pub fn expand(&self, latents: &mut Vec<Latent>) -> Source {
        let clock = push_latent(
            latents,
            self.name.clone(),
            self.hz,
            self.tolerance,
            self.steadiness,
        );
        let spacing = self.sidebands.as_ref().map(|sidebands| {
            let latent = push_latent(
                latents,
                format!("{} sideband", self.name),
                sidebands.hz,
                sidebands.tolerance,
                Steadiness::Free,
            );
            (latent, i32::try_from(sidebands.count).unwrap_or(i32::MAX))
        });
        let mut lines = Vec::new();
        for k in 1..=self.orders {
            let multiple = f64::from(k);
            let weight = multiple.powf(-0.5) * if k % 2 == 0 { 0.7 } else { 1.0 };
            lines.push(line(format!("{k}x"), &[(clock, multiple)], weight));
            let Some((spacing, count)) = spacing else {
                continue;
            };
            for j in (1..=count).flat_map(|j| [-j, j]) {
                // 1e-6: far below any line that matters, yet never zero.
                let weight = (weight * 0.5_f64.powi(j.abs())).max(1e-6);
                lines.push(line(
                    format!("{k}x{}", signed(j, "s")),
                    &[(clock, multiple), (spacing, f64::from(j))],
                    weight,
                ));
            }
        }
        source(&self.name, Kind::Clock, lines)
    }
}
