//! Evidence from time: what the movement, the phase and the exact instants of a
//! recording say about which line a tone is, beyond where it is seen.
//!
//! Everything here is a likelihood, of data that the frequency of a tone does not
//! use, so that inference can multiply it in:
//!
//! | what | says | module |
//! |---|---|---|
//! | rungs | on which rung of its ladder a tone is, by the jitter of the stamps | [`timestamps`] |
//! | ties by phase | that a tone turns n times while a visible one turns once | [`phase`] |
//! | ties by movement | at which ratio a tone's track follows another's | [`movement`] |
//! | ties to a reference | at which order a tone follows a log that the user gave | [`mod@reference`] |
//! | sampling | whether the rate itself changed within the file | [`sampling`] |
//!
//! **What may be multiplied with what.** Rungs are independent of ties. Ties of one
//! tone to several others are not independent of each other: they use the same
//! movement of the tone. Multiply at most one tie per tone on the way to an anchor
//! (a tone whose source is settled, or a reference), the one with the greatest
//! [`Tie::ln_ratio`]; of two tones tied to each other count the tie once. Where a pair
//! is tied by phase it is not listed by movement again.

pub mod baseband;
pub mod lomb_scargle;
pub mod movement;
pub mod phase;
pub mod reference;
pub mod sampling;
mod stamp_line;
pub mod timestamps;

use crate::fold::Chain;
use crate::spectrum::samples::{InMemory, Passes};
use crate::tones::Tone;
use crate::units::U95;
use movement::Following;
use phase::PhaseLock;
use reference::{Beside, Reference};
use sampling::Sampling;
use serde::Serialize;
pub use stamp_line::StampedPasses;
use timestamps::{StampEvidence, Target};

/// Multiples of the file's rate up to which rungs are tested where nothing tells how
/// far the analog band reaches.
const RUNGS_UP_TO: f64 = 50.0;
/// Tracks compared in pairs at most, the liveliest: cost grows with their square.
const MOST_TRACKS: usize = 24;
/// A phase lock from here on replaces the comparison of tracks.
const BY_PHASE: f64 = 3.0;

/// What a tone is tied to.
#[derive(Debug, Clone, PartialEq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Anchor {
    /// Another tone, by its index.
    Tone(usize),
    /// A reference track of the source of this name.
    Reference(String),
}

/// From what a tie is known.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Basis {
    /// Tracks of frequency.
    Movement,
    /// Phase, turn by turn.
    Phase,
}

/// A tone moves with something.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Tie {
    /// Index of the tone.
    pub tone: usize,
    /// With what.
    pub to: Anchor,
    /// By what.
    pub by: Basis,
    /// Slope of the tone's seen frequency against that of the anchor: s·a/(s'·a') for
    /// lines of orders a and a' with senses s and s' (+1 upright, −1 inverted) as seen;
    /// against a reference, whose frequency is analog and of order 1, s·a.
    pub multiplier: f64,
    /// Standard deviation of `multiplier`; 0 where it is a whole number by its nature
    /// (phase).
    pub sd: f64,
    /// ln p(movement of both | tied at `multiplier`) − ln p(movement of both |
    /// independent). Nearness in frequency does not count in either. Negative: evidence
    /// against this tie.
    pub ln_ratio: f64,
}

impl Tie {
    /// ln p(movement | the ratio is `multiplier`) − ln p(movement | independent).
    /// `None` where this tie says nothing of that ratio: another whole number than that
    /// of a phase lock.
    pub fn ln_likelihood(&self, multiplier: f64) -> Option<f64> {
        let off = multiplier - self.multiplier;
        if self.sd > 0.0 {
            Some(self.ln_ratio - 0.5 * (off / self.sd).powi(2))
        } else {
            (off.abs() < 1e-6 * self.multiplier.abs().max(1.0)).then_some(self.ln_ratio)
        }
    }
}

/// All evidence from time of one recording.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Evidence {
    /// Rungs by time stamps; `None` for a recording without stamps.
    pub stamps: Option<StampEvidence>,
    /// Rate changes and drift within the file; `None` without stamps.
    pub sampling: Option<Sampling>,
    /// What moves with what.
    pub ties: Vec<Tie>,
    /// Lines locked in phase to a tone that do not stand out as tones themselves.
    pub hidden_lines: Vec<PhaseLock>,
    /// References with the offset of their clocks.
    pub references: Vec<Beside>,
}

impl Evidence {
    /// Log-likelihood of a tone being at `true_hz` rather than at the best rung of its
    /// ladder, by time stamps: ≤ 0, and 0 where they say nothing. A tone's rungs are
    /// half a rate apart on average; the nearest one counts.
    pub fn ln_rung(&self, tone: usize, true_hz: f64) -> f64 {
        let tones = self.stamps.as_ref().map_or(&[][..], |s| &s.tones);
        let Some(tested) = tones.iter().find(|t| t.tone == tone) else {
            return 0.0;
        };
        // Beyond the ladder that was tested nothing is known.
        match tested.rungs.last() {
            Some(last) if true_hz <= last.true_hz.0 * (1.0 + 1e-3) => {}
            _ => return 0.0,
        }
        tested
            .rungs
            .iter()
            .min_by(|a, b| {
                let off = |r: &timestamps::RungLikelihood| (r.true_hz.0 - true_hz).abs();
                off(a).total_cmp(&off(b))
            })
            .map_or(0.0, |r| r.ln_likelihood)
    }

    /// Every tie of a tone, the strongest first.
    pub fn ties_of(&self, tone: usize) -> Vec<&Tie> {
        let mut ties: Vec<&Tie> = self.ties.iter().filter(|t| t.tone == tone).collect();
        ties.sort_by(|a, b| b.ln_ratio.total_cmp(&a.ln_ratio));
        ties
    }
}

/// Gathers all evidence from time. `up_to_hz` is how far the analog band reaches,
/// where that is known.
///
/// # Errors
/// The recording's own.
pub fn gather<P>(
    recording: &P,
    tones: &[Tone],
    chain: &Chain,
    references: &[Reference],
    up_to_hz: Option<f64>,
) -> Result<Evidence, <P as Passes>::Error>
where
    P: Passes + StampedPasses<Error = <P as Passes>::Error>,
{
    let rate_hz = recording.rate_hz();
    let duration_s = recording.frames() as f64 / rate_hz;
    // What was resampled has no instants of its own any more.
    let targets: Vec<Target> = if chain.rates_hz().len() == 1 {
        tones
            .iter()
            .enumerate()
            .map(|(i, t)| target(i, t, rate_hz))
            .collect()
    } else {
        Vec::new()
    };
    let up_to_hz = up_to_hz.unwrap_or(RUNGS_UP_TO * rate_hz);
    let stamps = timestamps::test(recording, &targets, up_to_hz)?;
    let sampling = sampling::survey(recording)?;
    let locks = phase::locks(recording, tones)?;
    let followed = followed(tones);
    let mut ties: Vec<Tie> = locks.iter().filter_map(phase_tie).collect();
    let by_phase: Vec<(usize, usize)> = locks
        .iter()
        .filter(|l| l.ln_ratio > BY_PHASE)
        .filter_map(|l| Some((l.tone?, l.base)))
        .collect();
    for (i, &(a, strong)) in followed.iter().enumerate() {
        for &(b, weak) in followed.iter().skip(i + 1) {
            if by_phase.contains(&(a, b)) || by_phase.contains(&(b, a)) {
                continue;
            }
            // The weaker follows the stronger, whose track is the better abscissa.
            if let Some(f) = movement::compare_tones(weak, strong) {
                ties.push(movement_tie(b, Anchor::Tone(a), &f));
            }
        }
    }
    let origin_s = if references.is_empty() {
        None
    } else {
        recording.origin_s()?
    };
    let references: Vec<Beside> = references
        .iter()
        .filter_map(|r| reference::beside(r, &followed, origin_s, duration_s))
        .collect();
    for beside in &references {
        for (tone, f) in &beside.follows {
            let anchor = Anchor::Reference(beside.source.clone());
            ties.push(movement_tie(*tone, anchor, f));
        }
    }
    Ok(Evidence {
        stamps,
        sampling,
        ties,
        hidden_lines: locks.into_iter().filter(|l| l.tone.is_none()).collect(),
        references,
    })
}

fn target(index: usize, tone: &Tone, rate_hz: f64) -> Target {
    Target {
        tone: index,
        channel: phase::channel(tone),
        cycles: (tone.seen_hz.0 / rate_hz).clamp(0.0, 0.5),
        cycles_u95: tone.seen_hz_u95 / rate_hz,
        wander_hz: tone.wander_hz,
    }
}

/// Tones with a track worth comparing, the strongest first.
fn followed(tones: &[Tone]) -> Vec<(usize, &Tone)> {
    let mut order: Vec<(usize, &Tone)> = tones
        .iter()
        .enumerate()
        .filter(|(_, t)| t.track.len() >= movement::LEAST_POINTS)
        .collect();
    order.sort_by(|a, b| b.1.snr_db.total_cmp(&a.1.snr_db));
    order.truncate(MOST_TRACKS);
    order
}

fn phase_tie(lock: &PhaseLock) -> Option<Tie> {
    Some(Tie {
        tone: lock.tone?,
        to: Anchor::Tone(lock.base),
        by: Basis::Phase,
        multiplier: lock.multiplier,
        sd: 0.0,
        ln_ratio: lock.ln_ratio,
    })
}

fn movement_tie(tone: usize, to: Anchor, f: &Following) -> Tie {
    Tie {
        tone,
        to,
        by: Basis::Movement,
        multiplier: f.slope,
        sd: f.sd,
        ln_ratio: f.ln_ratio,
    }
}

/// Evenly sampled memory has no stamps.
impl StampedPasses for InMemory {
    type Error = std::convert::Infallible;

    fn channels(&self) -> usize {
        self.channels.len()
    }

    fn for_each_stamped(
        &self,
        _: &mut dyn FnMut(&crate::capture::StampedBlock) -> bool,
    ) -> Result<bool, Self::Error> {
        Ok(false)
    }
}

impl Tie {
    /// Half-width of the 95 % interval of the multiplier.
    pub fn multiplier_u95(&self) -> f64 {
        U95 * self.sd
    }
}
