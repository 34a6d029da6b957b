//! What is known of the site: sources as families of lines, linear in a few
//! latent frequencies.
//!
//! Line `j` of a source lies at `f_j = Σ_l a_jl·θ_l` where `θ_l` are latents
//! (the mains frequency, a shaft's speed, a carrier) with a normal prior. Kinds
//! that ride on one another (a gear on a shaft) share the latent.
//!
//! One file per kind describes a source and expands it into lines:
//! [`mains`], [`shaft`], [`clock`], [`drive`], [`motor`], [`gear`],
//! [`bearing`], [`tone`]. [`Site::load`] reads a site file or a plain list;
//! [`Site::builtin`] stands in where there is none.
//!
//! # Site file
//! Two tables, `[recorder]` and `[[source]]`. Every source has a `name` and a
//! `kind`; the other keys, with their defaults in parentheses:
//!
//! | kind | keys |
//! |---|---|
//! | `mains` | `hz`, `tolerance` (1 %), `orders` (50) |
//! | `shaft` | `rpm` or `hz`, `tolerance` (3 %), `orders` (10), `vanes` |
//! | `clock` | `hz`, `tolerance` (100 ppm), `orders` (10), `sideband_hz`, `sideband_tolerance` (1 %), `sidebands` (3) |
//! | `drive` | `carrier_hz`, `carrier_tolerance` (3 %), `output_hz`, `output_tolerance` (5 %), `orders` (10); `tolerance` is of both |
//! | `motor` | `mains_hz` with `mains_tolerance` (1 %), or `fed_by`; `poles`; `rpm` with `tolerance` (the slip, and the supply's), or `slip`; `rotor_bars` |
//! | `gear` | `on`, `teeth`, `ratio` (1) |
//! | `bearing` | `on`, `balls`, `ball_mm`, `pitch_mm`, `angle_deg` (0), `tolerance` of each line (2 %) |
//! | `tone` | `hz`, `tolerance` (1 %) |
//!
//! `fed_by` names a mains or a drive, `on` a shaft, a motor or a gear (which then
//! carries on its own shaft). A motor on a drive may give `mains_hz` too: the
//! frequency its nameplate's `rpm` is stated for, where that is not 50 or 60 Hz.
//! Tolerances are ± with 95 %: `"1 %"`, `"100 ppm"`, `"0.5 Hz"`. A range of slip is
//! `"2..5 %"` or `[0.02, 0.05]`.
//!
//! `[recorder]` takes `clock_ppm`, `bandwidth_hz`, `aperture_s`, `stages`,
//! `full_scale`, and `antialias` with `family`, `order`, `corner_hz` and, as the
//! family needs them, `ripple_db` and `stop_db`.
//!
//! ```
//! use foldtrace::sources::Site;
//!
//! let site = Site::from_toml(
//!     r#"
//!     [[source]]
//!     name = "fan shaft"
//!     kind = "shaft"
//!     rpm = 1740
//!     vanes = 7
//!     "#,
//! )?;
//! let fan = &site.catalogue.sources[0];
//! let vane_pass = fan.lines.iter().find(|line| line.label == "7x").unwrap();
//! assert_eq!(site.catalogue.nominal_hz(vane_pass), 203.0);
//!
//! let error = Site::from_toml("[[source]]\nkind = \"shaft\"\nrmp = 1740").unwrap_err();
//! assert!(error.to_string().starts_with("line 3: key `rmp`: is not known here, did you mean `rpm`?"));
//! # Ok::<(), foldtrace::sources::SiteError>(())
//! ```
//!
//! # Weights
//! Line weights say how often a line shows, not how strong it is. Whether a line
//! clears the noise goes with the logarithm of its amplitude, so a family whose
//! amplitudes fall as 1/k shows its multiples less and less, but more slowly than
//! that; most kinds here use `k^-1/2`. This is a choice of this project, not a
//! measured law.

pub mod bearing;
pub mod builtin;
pub mod clock;
pub mod drive;
mod error;
pub mod gear;
pub mod mains;
pub mod motor;
pub mod quantity;
pub mod shaft;
mod site_file;
pub mod tone;

pub use error::{Problem, SiteError};
pub use site_file::MAX_LINES_PER_SOURCE;

use quantity::Tolerance;

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
    /// Probability that it is there at all, before the recording is looked at.
    pub presence: f64,
}

/// What an analyst writes down is there as often as not.
pub const LISTED_PRESENCE: f64 = 0.5;

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

impl Kind {
    /// Every kind, in the order of the documentation.
    pub const ALL: [Kind; 8] = [
        Kind::Mains,
        Kind::Shaft,
        Kind::Clock,
        Kind::Drive,
        Kind::Motor,
        Kind::Gear,
        Kind::Bearing,
        Kind::Tone,
    ];

    /// The word of the site file: `mains`, `shaft`, …
    pub fn as_str(self) -> &'static str {
        match self {
            Kind::Mains => "mains",
            Kind::Shaft => "shaft",
            Kind::Clock => "clock",
            Kind::Drive => "drive",
            Kind::Motor => "motor",
            Kind::Gear => "gear",
            Kind::Bearing => "bearing",
            Kind::Tone => "tone",
        }
    }
}

impl std::fmt::Display for Kind {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.pad(self.as_str())
    }
}

/// A shaft as seen by what rides on it: `ratio` turns for each turn of the latent.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Turning {
    /// The latent speed.
    pub latent: LatentId,
    /// Turns per turn of the latent, > 0.
    pub ratio: f64,
}

/// Appends a latent and returns its index.
fn push_latent(
    latents: &mut Vec<Latent>,
    name: String,
    nominal_hz: f64,
    tolerance: Tolerance,
    steadiness: Steadiness,
) -> LatentId {
    latents.push(Latent {
        name,
        nominal_hz,
        sd_hz: tolerance.sd_hz(nominal_hz),
        steadiness,
    });
    LatentId(latents.len() - 1)
}

/// A line without uncertainty of its own. Terms on one latent are joined and
/// those that cancel are dropped.
fn line(label: String, parts: &[(LatentId, f64)], weight: f64) -> Line {
    let mut terms: Vec<(LatentId, f64)> = Vec::with_capacity(parts.len());
    for &(latent, multiplier) in parts {
        match terms.iter_mut().find(|(known, _)| *known == latent) {
            Some((_, sum)) => *sum += multiplier,
            None => terms.push((latent, multiplier)),
        }
    }
    terms.retain(|&(_, multiplier)| multiplier != 0.0);
    Line {
        label,
        terms,
        extra_rel_sd: 0.0,
        weight,
    }
}

/// `+2s`, `-1s`; nothing for zero.
fn signed(n: i32, unit: &str) -> String {
    if n == 0 {
        String::new()
    } else {
        format!("{n:+}{unit}")
    }
}

/// A source of the analyst's own: no citation, excluding no other.
fn source(name: &str, kind: Kind, lines: Vec<Line>) -> Source {
    Source {
        name: name.to_owned(),
        kind,
        lines,
        citation: String::new(),
        exclusive_group: None,
        presence: LISTED_PRESENCE,
    }
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

/// ± parts per million (95 %) assumed of a clock that is not described: an ordinary
/// crystal (common practice).
const UNDESCRIBED_CLOCK_PPM: f64 = 100.0;

impl Recorder {
    /// Tolerance of the clock, ± parts per million (95 %): as described, or what is
    /// assumed of one that is not.
    pub fn assumed_clock_ppm(&self) -> f64 {
        self.clock_ppm.unwrap_or(UNDESCRIBED_CLOCK_PPM)
    }
}

/// A site: sources and recorder.
#[derive(Debug, Clone, PartialEq, Default, serde::Serialize)]
pub struct Site {
    /// The sources.
    pub catalogue: Catalogue,
    /// The recorder.
    pub recorder: Recorder,
}
