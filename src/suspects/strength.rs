//! How strong a source is, and with it which of its lines should show.
//!
//! A source's strength is unknown: it is one of a few classes, each a level over
//! the noise at which its best line is *seen*, and a rate at which the others fall
//! off. A line of weight `w` that the front end passes by `A` dB better or worse
//! than the best one has the expected SNR
//!
//! ```text
//! L = level + slope·20·log10(w) + A,
//! ```
//!
//! the true one spreads about it with [`SPREAD_DB`], and the line shows if that
//! clears the detector's threshold. So a missing line counts as much as it was
//! expected, and a tone much stronger than the line it would be is doubted. What
//! the front end does to the whole family decides how probable each class is: a
//! filter nobody described weakens all lines of a clock far above the band alike,
//! it does not make them differ. This is this project's own model; its constants
//! are broad on purpose.

use crate::frontend::Gain;
use statrs::function::erf::erfc;

/// Classes of strength: `(SNR of the strongest line, dB; slope)`.
pub(super) const CLASSES: usize = 24;

/// The first is a family too weak to be seen at all.
const LEVELS_DB: [f64; 8] = [-40.0, 8.0, 20.0, 32.0, 44.0, 56.0, 70.0, 86.0];
const SLOPES: [f64; 3] = [0.7, 1.8, 3.5];
/// Analog strengths (SNR of the best line before the front end) are spread evenly
/// between these, dB.
const STRENGTHS_DB: (f64, f64) = (5.0, 100.0);

/// Standard deviation of a line's level about the expected one, dB.
const SPREAD_DB: f64 = 8.0;

/// The share of lines that show although the level would let them is at most this:
/// real families have holes.
const MOST_SHOWN: f64 = 0.9;

/// A value per class.
pub(super) type PerClass = [f64; CLASSES];

/// Steps of the tables, dB.
const STEP_DB: f64 = 0.25;
const REACH_DB: f64 = 150.0;

/// Precomputed densities.
#[derive(Debug, Clone)]
pub(super) struct Strengths {
    threshold_db: f64,
    /// Density of a level `x` dB above the expected one, per dB.
    density: Vec<f64>,
    /// Chance that a level is more than `x` dB above the expected one.
    above: Vec<f64>,
}

fn normal(x: f64, sd: f64) -> f64 {
    (-0.5 * (x / sd).powi(2)).exp() / (sd * (2.0 * std::f64::consts::PI).sqrt())
}

fn normal_above(x: f64, sd: f64) -> f64 {
    0.5 * erfc(x / (sd * std::f64::consts::SQRT_2))
}

fn slot(x: f64) -> usize {
    ((x + REACH_DB) / STEP_DB).clamp(0.0, 2.0 * REACH_DB / STEP_DB) as usize
}

impl Strengths {
    /// For a detector that finds a tone from `threshold_db` of SNR on.
    pub fn new(threshold_db: f64) -> Strengths {
        let points = slot(REACH_DB) + 1;
        let x = |i: usize| (i as f64 + 0.5) * STEP_DB - REACH_DB;
        // A tenth of all lines is anywhere: resonances and nulls.
        let mixed =
            |f: fn(f64, f64) -> f64, x: f64| 0.9 * f(x, SPREAD_DB) + 0.1 * f(x, 2.5 * SPREAD_DB);
        Strengths {
            threshold_db,
            density: (0..points).map(|i| mixed(normal, x(i))).collect(),
            above: (0..points).map(|i| mixed(normal_above, x(i))).collect(),
        }
    }

    /// Expected SNR of a line per class, dB.
    fn expected(line: &Faintness, class: usize) -> f64 {
        Self::level(class, line.weight_db) + line.gain_db
    }

    /// Prior probability of each class where the front end passes the best line with
    /// `gain`.
    pub fn class_prior(gain: Gain) -> PerClass {
        let (low, high) = STRENGTHS_DB;
        // Share of strengths even in [low, high], weakened by a normal gain, that
        // come out below x: mean of the normal's distribution function.
        let below = |x: f64| {
            let steps = 48;
            (0..steps)
                .map(|i| {
                    let strength = low + (high - low) * (f64::from(i) + 0.5) / f64::from(steps);
                    normal_above(strength + gain.mean_db - x, gain.sd_db.max(0.5))
                })
                .sum::<f64>()
                / f64::from(steps)
        };
        let mut prior = [0.0; CLASSES];
        let mut before = 0.0;
        for (i, level) in LEVELS_DB.iter().enumerate() {
            let upto = match LEVELS_DB.get(i + 1) {
                // Between a family just seen and one not seen: where it is lost.
                Some(_) if i == 0 => below(2.0),
                Some(next) => below(0.5 * (level + next)),
                None => 1.0,
            };
            for slot in prior.iter_mut().skip(i * SLOPES.len()).take(SLOPES.len()) {
                *slot = ((upto - before) / SLOPES.len() as f64).max(1e-9);
            }
            before = upto;
        }
        prior
    }

    /// Chance, per class, that a line shows.
    pub fn shown(&self, line: &Faintness) -> PerClass {
        std::array::from_fn(|c| {
            let need = self.threshold_db - Self::expected(line, c);
            let above = self.above.get(slot(need * line.narrowing)).copied();
            line.most_shown * above.unwrap_or(0.0)
        })
    }

    /// Per class: density (per dB) of the line showing at `snr_db`, over the chance
    /// of it not showing at all.
    pub fn odds(&self, line: &Faintness, snr_db: f64) -> PerClass {
        let scale = line.most_shown * line.narrowing;
        // Position in the table, for a class of level 0 and slope 0.
        let at = (snr_db - line.gain_db) * line.narrowing;
        std::array::from_fn(|c| {
            let below = line.narrowing * Self::level(c, line.weight_db);
            let density = self.density.get(slot(at - below)).copied().unwrap_or(0.0);
            scale * density * line.per_hidden.get(c).copied().unwrap_or(1.0)
        })
    }

    /// Fills in what [`Strengths::odds`] needs of a line.
    pub fn prepare(&self, mut line: Faintness) -> Faintness {
        let shown = self.shown(&line);
        line.per_hidden = shown.map(|s| 1.0 / (1.0 - s));
        line
    }

    fn level(class: usize, weight_db: f64) -> f64 {
        let (level, slope) = (
            LEVELS_DB.get(class / SLOPES.len()).copied().unwrap_or(0.0),
            SLOPES.get(class % SLOPES.len()).copied().unwrap_or(1.0),
        );
        level + slope * weight_db
    }

    /// Density (per dB) of the SNR of a tone that nothing listed made.
    pub fn background(&self, snr_db: f64) -> f64 {
        let x = (snr_db - self.threshold_db).max(0.0);
        0.7 * (-x / 18.0).exp() / 18.0 + 0.3 * (-x / 45.0).exp() / 45.0
    }
}

/// An analog level this far above full scale is more than the input bears, dB, and
/// how sharply.
const HEADROOM_DB: f64 = 12.0;
const HEADROOM_SD_DB: f64 = 3.0;
/// Nothing is quite impossible.
const LEAST_BEARABLE: f64 = 1e-9;

/// Probability that the input bears the analog level that a line seen at
/// `level_dbfs` must have before a front end of `gain`; 1 where levels say nothing.
pub(super) fn bearable(level_dbfs: Option<f64>, gain: Gain) -> f64 {
    let Some(level) = level_dbfs else { return 1.0 };
    // A front end that is not well known may be the most lenient of its kind: how
    // probable that is, the classes of strength already say.
    let lenient = gain.mean_db + 2.0 * gain.sd_db;
    let over = (level - lenient.min(0.0) - HEADROOM_DB) / HEADROOM_SD_DB;
    if over < -4.0 {
        1.0
    } else {
        normal_above(over, 1.0).max(LEAST_BEARABLE)
    }
}

/// What decides whether a line shows.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Faintness {
    /// `20·log10` of the line's weight, ≤ 0.
    weight_db: f64,
    /// Expected gain of the front end against the family's best line, dB.
    gain_db: f64,
    /// [`SPREAD_DB`] over the spread with the gain's uncertainty, in (0, 1].
    narrowing: f64,
    /// Rarer lines are absent for reasons other than their level.
    most_shown: f64,
    /// One over the chance of not showing, per class.
    per_hidden: PerClass,
}

impl Faintness {
    /// A line of `weight` behind `gain`, in a family whose best line has `best`.
    pub fn new(weight: f64, gain: Gain, best: Gain) -> Faintness {
        Faintness {
            weight_db: Self::weight_db(weight),
            gain_db: gain.mean_db - best.mean_db,
            // One front end: its uncertainty is shared, only the rest is the line's.
            narrowing: SPREAD_DB / SPREAD_DB.hypot(gain.sd_db - best.sd_db),
            most_shown: MOST_SHOWN * 10f64.powf(Self::weight_db(weight) / 40.0).max(0.3),
            per_hidden: [1.0; CLASSES],
        }
    }

    pub fn weight_db(weight: f64) -> f64 {
        20.0 * weight.clamp(1e-6, 1.0).log10()
    }

    /// Orders lines by how likely they show.
    pub fn better(&self, other: &Faintness) -> std::cmp::Ordering {
        let level = |f: &Faintness| f.weight_db + f.gain_db;
        level(self).total_cmp(&level(other))
    }

    /// A line `by_db` fainter.
    pub fn fainter(&self, by_db: f64) -> Faintness {
        Faintness {
            gain_db: self.gain_db - by_db,
            ..*self
        }
    }
}
