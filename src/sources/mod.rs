//! What is known of the site: sources as families of lines, linear in a few
//! latent frequencies.
//!
//! Line `j` of a source lies at `f_j = Σ_l a_jl·θ_l` where `θ_l` are latents
//! (the mains frequency, a shaft's speed, a carrier) with a normal prior. Kinds
//! that ride on one another (a gear on a shaft) share the latent.

/// Index of a latent in [`Catalogue::latents`].
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, serde::Serialize)]
pub struct LatentId(pub usize);

/// How a latent frequency can move during a recording.
#[derive(Debug, Clone, Copy, PartialEq, Eq, serde::Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Steadiness {
    /// Locked to a crystal: a tone that wanders is not one of its lines.
    Quartz,
    /// May wander within its tolerance.
    Free,
}

/// One unknown frequency with its prior.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Latent {
    /// What it is, in words: `supply mains`, `pump shaft`, `drive carrier`.
    pub name: String,
    /// Centre of the prior, Hz.
    pub nominal_hz: f64,
    /// Standard deviation of the prior, Hz: the tolerance (±, 95 %) over 1.96.
    pub sd_hz: f64,
    /// How it may move.
    pub steadiness: Steadiness,
}

/// One frequency that a source makes.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Line {
    /// `7x`, `2c-4o`, `3x+1s`.
    pub label: String,
    /// `(latent, multiplier)`: the line lies at the sum of multiplier × latent.
    pub terms: Vec<(LatentId, f64)>,
    /// Uncertainty of the line beyond its latents (bearing slip), as a fraction
    /// of its frequency, one standard deviation.
    pub extra_rel_sd: f64,
    /// Prior weight: how often such a line shows, relative to the source's
    /// strongest, in (0, 1].
    pub weight: f64,
}

/// A physical cause: a family of lines.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Source {
    /// From the site file.
    pub name: String,
    /// `mains`, `shaft`, `clock`, …
    pub kind: Kind,
    /// Its lines, in no particular order.
    pub lines: Vec<Line>,
    /// Where a built-in value comes from: a published source, "common practice"
    /// or "from memory". Empty for the analyst's own.
    pub citation: String,
    /// Sources of one non-empty group exclude each other (mains at 50 or 60 Hz).
    pub exclusive_group: Option<String>,
}

/// The kinds of source.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, serde::Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Kind {
    /// Supply mains and its multiples.
    Mains,
    /// A turning shaft.
    Shaft,
    /// An oscillator, crystal or not.
    Clock,
    /// An inverter drive.
    Drive,
    /// An induction motor.
    Motor,
    /// A gear pair.
    Gear,
    /// A rolling bearing.
    Bearing,
    /// A single line.
    Tone,
}

/// Everything listed, ready for inference.
#[derive(Debug, Clone, PartialEq, Default, serde::Serialize)]
pub struct Catalogue {
    /// Every latent; sources refer to them by index.
    pub latents: Vec<Latent>,
    /// In the order listed.
    pub sources: Vec<Source>,
}

impl Catalogue {
    /// Nominal frequency of a line, Hz (may be negative for difference lines:
    /// a real signal shows the magnitude).
    pub fn nominal_hz(&self, line: &Line) -> f64 {
        line.terms
            .iter()
            .map(|&(LatentId(l), a)| a * self.latents[l].nominal_hz)
            .sum()
    }

    /// Prior standard deviation of a line, Hz.
    pub fn prior_sd_hz(&self, line: &Line) -> f64 {
        let latents: f64 = line
            .terms
            .iter()
            .map(|&(LatentId(l), a)| (a * self.latents[l].sd_hz).powi(2))
            .sum();
        (latents + (line.extra_rel_sd * self.nominal_hz(line)).powi(2)).sqrt()
    }
}

/// What the site file says of the recorder. `None` is "not described", which
/// means unknown, never absent.
#[derive(Debug, Clone, PartialEq, Default, serde::Serialize)]
pub struct Recorder {
    /// ±, 95 %, parts per million.
    pub clock_ppm: Option<f64>,
    /// The analog path before the converter.
    pub front_end: crate::frontend::FrontEnd,
    /// Every rate the signal went through, last = the file's. Empty: only the file's.
    pub stages_hz: Vec<f64>,
    /// Value and unit of full scale: (50.0, "m/s^2").
    pub full_scale: Option<(f64, String)>,
}

/// A site: sources and recorder.
#[derive(Debug, Clone, PartialEq, Default, serde::Serialize)]
pub struct Site {
    /// The sources.
    pub catalogue: Catalogue,
    /// The recorder.
    pub recorder: Recorder,
}
