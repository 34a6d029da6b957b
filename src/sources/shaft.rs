//! A turning shaft: multiples of its speed, and of its vanes.
//!
//! Lines `kx` at `k·n` for turning speed `n` (Hz). `1x` (unbalance) and `2x`
//! (misalignment) are the common ones; beyond that weights fall as `1.2/k`. With
//! `vanes` (blades, vanes, teeth or bars), the multiples `vanes·j`, j = 1..4, are
//! listed too, beyond `orders` if need be, with weights `0.9·j^-1/2` (common practice).

use super::{
    Kind, Latent, LatentId, Source, Steadiness, line, push_latent, quantity::Tolerance, source,
};

/// ±3 % where none is given: about what load does to an induction machine's speed
/// (common practice).
pub const TOLERANCE: Tolerance = Tolerance::percent(3.0);

/// Highest multiple where none is given (common practice).
pub const ORDERS: u32 = 10;

/// Vane-pass multiples listed.
pub const VANE_MULTIPLES: u32 = 4;

/// A shaft.
#[derive(Debug, Clone, PartialEq)]
pub struct Shaft {
    /// Name of the source.
    pub name: String,
    /// Turning speed, Hz (rpm / 60), > 0.
    pub hz: f64,
    /// Of the speed.
    pub tolerance: Tolerance,
    /// Highest multiple, ≥ 1.
    pub orders: u32,
    /// Blade, vane, tooth or bar count.
    pub vanes: Option<u32>,
}

impl Shaft {
    /// The source with its new latent, the speed. The description is taken as
    /// valid: the site file reader checks it.
    pub fn expand(&self, latents: &mut Vec<Latent>) -> (LatentId, Source) {
        let speed = push_latent(
            latents,
            self.name.clone(),
            self.hz,
            self.tolerance,
            Steadiness::Free,
        );
        let mut multiples: Vec<(u32, f64)> =
            (1..=self.orders).map(|k| (k, order_weight(k))).collect();
        if let Some(vanes) = self.vanes {
            for j in 1..=VANE_MULTIPLES {
                let k = vanes.saturating_mul(j);
                let passing = 0.9 * f64::from(j).powf(-0.5);
                match multiples.iter_mut().find(|(known, _)| *known == k) {
                    Some((_, weight)) => *weight = weight.max(passing),
                    None => multiples.push((k, passing)),
                }
            }
        }
        let lines = multiples
            .into_iter()
            .map(|(k, weight)| line(format!("{k}x"), &[(speed, f64::from(k))], weight))
            .collect();
        (speed, source(&self.name, Kind::Shaft, lines))
    }
}

/// Weight of the plain multiple `k` of a turning speed.
pub(super) fn order_weight(k: u32) -> f64 {
    match k {
        1 => 1.0,
        2 => 0.8,
        k => 1.2 / f64::from(k),
    }
}
