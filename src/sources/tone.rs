//! A single line, `1x`, of whatever cause.

use super::{Kind, Latent, Source, Steadiness, line, push_latent, quantity::Tolerance, source};

/// ±1 % where none is given: of a bare frequency nothing more is known.
pub const TOLERANCE: Tolerance = Tolerance::percent(1.0);

/// One line.
#[derive(Debug, Clone, PartialEq)]
pub struct Tone {
    /// Name of the source.
    pub name: String,
    /// Frequency, Hz, > 0.
    pub hz: f64,
    /// Of the frequency.
    pub tolerance: Tolerance,
}

impl Tone {
    /// The source with its new latent. It may wander within its tolerance. The
    /// description is taken as valid: the site file reader checks it.
    pub fn expand(&self, latents: &mut Vec<Latent>) -> Source {
        let latent = push_latent(
            latents,
            self.name.clone(),
            self.hz,
            self.tolerance,
            Steadiness::Free,
        );
        let lines = vec![line("1x".to_owned(), &[(latent, 1.0)], 1.0)];
        source(&self.name, Kind::Tone, lines)
    }
}
