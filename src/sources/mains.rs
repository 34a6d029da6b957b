//! Supply mains: multiples of the supply frequency.
//!
//! Lines `kx` at `k·f`. Weights `k^-1/2`; odd multiples of three are held back
//! (they circulate in delta windings), even multiples more so, since a supply
//! whose half waves are alike makes none. `2x` is as common as `1x`: pull between
//! iron parts, and with it hum and flicker, comes twice a period (common practice).

use super::{
    Kind, Latent, LatentId, Source, Steadiness, line, push_latent, quantity::Tolerance, source,
};

/// ±1 % where none is given: EN 50160 asks of an interconnected 50 Hz supply that
/// the 10 s mean lies within 50 Hz ± 1 % for 99.5 % of a year (from memory), so as
/// a 95 % statement this is on the wide side.
pub const TOLERANCE: Tolerance = Tolerance::percent(1.0);

/// Highest multiple where none is given: power quality meters report up to the
/// 50th (IEC 61000-4-30, from memory).
pub const ORDERS: u32 = 50;

/// A supply.
#[derive(Debug, Clone, PartialEq)]
pub struct Mains {
    /// Name of the source.
    pub name: String,
    /// Supply frequency, Hz, > 0.
    pub hz: f64,
    /// Of the supply frequency.
    pub tolerance: Tolerance,
    /// Highest multiple, ≥ 1.
    pub orders: u32,
}

impl Mains {
    /// The source with its new latent, the supply frequency. The description is
    /// taken as valid: the site file reader checks it.
    pub fn expand(&self, latents: &mut Vec<Latent>) -> (LatentId, Source) {
        let supply = push_latent(
            latents,
            self.name.clone(),
            self.hz,
            self.tolerance,
            Steadiness::Free,
        );
        let lines = (1..=self.orders)
            .map(|k| line(format!("{k}x"), &[(supply, f64::from(k))], weight(k)))
            .collect();
        (supply, source(&self.name, Kind::Mains, lines))
    }
}

fn weight(k: u32) -> f64 {
    let falling = f64::from(k).powf(-0.5);
    match k {
        1 | 2 => 1.0,
        k if k % 2 == 0 => 0.3 * falling,
        k if k % 3 == 0 => 0.7 * falling,
        _ => falling,
    }
}
