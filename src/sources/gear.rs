//! A gear: mesh multiples with shaft sidebands.
//!
//! The gear turns `ratio` times for each turn of the shaft it is listed `on`; its
//! teeth meet at `g = teeth·ratio·n`. Lines `kg`, k = 1..4, and `kg±jx`, j = 1..3,
//! at `k·g ± j·ratio·n`: a load that varies once a turn modulates the mesh (common
//! practice). Weights `k^-1/2`, halved with each sideband.

use super::{Kind, Source, Turning, line, signed, source};

/// Mesh multiples listed.
pub const MESH_MULTIPLES: u32 = 4;

/// Sidebands on each side of each.
pub const SIDEBANDS: i32 = 3;

/// A gear.
#[derive(Debug, Clone, PartialEq)]
pub struct Gear {
    /// Name of the source.
    pub name: String,
    /// Tooth count, ≥ 1.
    pub teeth: u32,
    /// Turns of this gear per turn of the shaft it is listed on, > 0.
    pub ratio: f64,
}

impl Gear {
    /// The source, riding on `shaft`; returned with it is how the gear's own shaft
    /// turns, for what rides on that. The description is taken as valid: the site
    /// file reader checks it.
    pub fn expand(&self, shaft: Turning) -> (Turning, Source) {
        let own = Turning {
            latent: shaft.latent,
            ratio: shaft.ratio * self.ratio,
        };
        let mut lines = Vec::new();
        for k in 1..=MESH_MULTIPLES {
            for j in -SIDEBANDS..=SIDEBANDS {
                let turns = f64::from(k) * f64::from(self.teeth) + f64::from(j);
                lines.push(line(
                    format!("{k}g{}", signed(j, "x")),
                    &[(own.latent, own.ratio * turns)],
                    f64::from(k).powf(-0.5) * 0.5_f64.powi(j.abs()),
                ));
            }
        }
        // A gear of very few teeth has sidebands at or through zero.
        lines.retain(|l| l.terms.iter().any(|&(_, a)| a > 0.0));
        (own, source(&self.name, Kind::Gear, lines))
    }
}
