//! Sampling arithmetic: where an analog line is seen, and every analog line a
//! seen tone could be. Pure functions; nothing here reads a file.
//!
//! A sampler of rate `r` cannot tell `f` from `k·r ± f`, so it shows every line
//! at its distance from the nearest multiple of the rate. The analog axis falls
//! into Nyquist zones of half the rate each; in every second one the spectrum is
//! seen inverted. [`fold`], [`zone`] and [`unfold`] are that for one rate,
//! [`Chain`] for a signal that went through several.
//!
//! **On a fold.** A line exactly at `k·r/2` is counted with the zone above it,
//! as if it were about to rise: at `r/2` zone 2, inverted; at `r` zone 3, upright.
//!
//! **Precision.** A fold is exact: no rounding is added to that of `f` and of the
//! rate themselves. Zones are exact below 2⁵³.

mod chain;
mod stages;

pub use chain::{Chain, ChainError, MAX_STAGES};

use crate::units::{SeenHz, Sense, TrueHz};

/// The longest ladder that is built in memory. [`rungs`] has no such limit.
pub const MAX_RUNGS: usize = 1_000_000;

/// How an analog line shows after sampling.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Seen {
    /// Where it shows, in `[0, rate/2]`; NaN if the true frequency is not finite.
    pub seen: SeenHz,
    /// Nyquist zone from 1; even exactly if `sense` is inverted. 0 if not finite.
    pub zone: u64,
    /// Whether a rising line is seen to rise.
    pub sense: Sense,
}

/// One analog frequency that shows at the frequency asked for.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Rung {
    /// Where the line would be in the analog world.
    pub true_hz: TrueHz,
    /// Nyquist zone from 1; even exactly if `sense` is inverted.
    pub zone: u64,
    /// Whether a rising line is seen to rise.
    pub sense: Sense,
    /// Seen only as an image left behind by an interpolating stage.
    pub image: bool,
}

/// Why a ladder cannot be built.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum LadderError {
    /// The rate is zero, negative or not finite.
    #[error("a sample rate of {rate_hz} Hz is no rate: it must be a number above 0")]
    Rate {
        /// The rate given.
        rate_hz: f64,
    },
    /// No tone can be seen there.
    #[error(
        "{seen_hz} Hz cannot be seen at {rate_hz} samples/s: give a frequency from 0 to half the rate ({} Hz)",
        rate_hz / 2.0
    )]
    Seen {
        /// The frequency given.
        seen_hz: f64,
        /// The rate of the file.
        rate_hz: f64,
    },
    /// The upper end is negative or not finite.
    #[error("a ladder up to {up_to_hz} Hz has no end: give a limit of 0 Hz or more")]
    UpTo {
        /// The limit given.
        up_to_hz: f64,
    },
    /// Too many rungs for memory.
    #[error(
        "the ladder would have about {rungs:.0} rungs and {limit} are the most: lower the upper frequency"
    )]
    TooLong {
        /// Roughly how many it would have.
        rungs: f64,
        /// [`MAX_RUNGS`].
        limit: usize,
    },
}

/// Which side of a fold a line exactly on it is counted to.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Edge {
    /// With the segment above: the line is about to rise.
    Above,
    /// With the segment below: the line has come down to the fold.
    Below,
}

impl Edge {
    fn flipped(self) -> Self {
        match self {
            Edge::Above => Edge::Below,
            Edge::Below => Edge::Above,
        }
    }
}

/// From here on doubles do not hold every whole number.
const TWO_POW_53: f64 = 9_007_199_254_740_992.0;

/// `x = k·rate + r` with `|r| ≤ rate/2`, exactly.
///
/// The fused multiply-add makes the remainder exact; the division may still have
/// picked the neighbour of the nearest multiple when `x` is within rounding of
/// halfway, which the two corrections mend (exactly, by Sterbenz' lemma). Beyond
/// 2⁵³ multiples `k` is rounded, `r` still exact.
fn nearest_multiple(x: f64, rate_hz: f64) -> (f64, f64) {
    let half = 0.5 * rate_hz;
    let k = (x / rate_hz).round();
    let r = if k.abs() < TWO_POW_53 {
        (-k).mul_add(rate_hz, x)
    } else {
        x % rate_hz
    };
    if r > half {
        (k + 1.0, r - rate_hz)
    } else if r < -half {
        (k - 1.0, r + rate_hz)
    } else {
        (k, r)
    }
}

/// Index (from 0) of the half-rate segment that holds `k·rate + r ≥ 0`.
fn segment(k: f64, r: f64, half: f64, edge: Edge) -> f64 {
    let twice = 2.0 * k;
    match edge {
        Edge::Above if r >= half => twice + 1.0,
        Edge::Above if r >= 0.0 => twice,
        Edge::Above => twice - 1.0,
        Edge::Below if r > 0.0 => twice,
        Edge::Below if r > -half => (twice - 1.0).max(0.0),
        Edge::Below => twice - 2.0,
    }
}

/// Parity of a whole number ≥ 0, without the slow remainder of floats. Beyond 2⁵³
/// every double is even.
fn is_odd(whole: f64) -> bool {
    whole < TWO_POW_53 && whole as u64 & 1 == 1
}

/// Whether a count of reflections inverts the spectrum.
fn sense_of(turns: f64) -> Sense {
    if is_odd(turns) {
        Sense::Inverted
    } else {
        Sense::Upright
    }
}

/// Where `f` is seen at one sample rate: `| f − r·round(f/r) |`, in `[0, r/2]`.
///
/// A negative `f` stands for its magnitude (a real signal has both). NaN if `f`
/// is not finite or `rate_hz` is not a number above 0.
pub fn fold(f: TrueHz, rate_hz: f64) -> SeenHz {
    if rate_hz <= 0.0 {
        return SeenHz(f64::NAN);
    }
    SeenHz(nearest_multiple(f.0, rate_hz).1.abs())
}

/// Nyquist zone of `f`: `floor(2f/r) + 1`, so 1 is baseband. 0 where [`fold`] is NaN.
pub fn zone(f: TrueHz, rate_hz: f64) -> u64 {
    let (k, r) = nearest_multiple(f.0.abs(), rate_hz);
    if r.is_nan() || rate_hz <= 0.0 {
        return 0;
    }
    zone_number(segment(k, r, 0.5 * rate_hz, Edge::Above))
}

/// Added as an integer, so that parity and [`sense_of`] agree however large.
fn zone_number(turns: f64) -> u64 {
    (turns as u64).saturating_add(1)
}

/// Cycles per sample of a seen tone, `ν/r`, in `[0, 0.5]`.
pub fn cycles_per_sample(seen: SeenHz, rate_hz: f64) -> f64 {
    seen.0 / rate_hz
}

/// Angular frequency of a seen tone in units of π radians per sample, `2ν/r`,
/// in `[0, 1]`.
pub fn pi_radians_per_sample(seen: SeenHz, rate_hz: f64) -> f64 {
    2.0 * seen.0 / rate_hz
}

/// The ladder of one rate, lowest rung first, one at a time.
///
/// Yields `k·r ± ν` up to the limit (inclusive); each frequency once, also when
/// `ν` is 0 or `r/2` and the two signs meet. Made by [`rungs`].
#[derive(Debug, Clone)]
pub struct Rungs {
    seen_hz: f64,
    rate_hz: f64,
    up_to_hz: f64,
    /// Half-rate segment of the next rung, kept as a float: exact below 2⁵³.
    segment: f64,
    last_hz: f64,
}

impl Iterator for Rungs {
    type Item = Rung;

    fn next(&mut self) -> Option<Rung> {
        let at_top = self.seen_hz >= 0.5 * self.rate_hz;
        let at_edge = at_top || self.seen_hz == 0.0;
        loop {
            let rises = !is_odd(self.segment);
            let hz = if rises {
                (0.5 * self.segment).mul_add(self.rate_hz, self.seen_hz)
            } else {
                (0.5 * (self.segment + 1.0)).mul_add(self.rate_hz, -self.seen_hz)
            };
            if hz > self.up_to_hz {
                return None;
            }
            let turns = if at_top {
                self.segment + 1.0
            } else {
                self.segment
            };
            self.segment += if at_edge { 2.0 } else { 1.0 };
            // Far up, neighbours closer than the spacing of doubles coincide.
            if hz != self.last_hz {
                self.last_hz = hz;
                return Some(Rung {
                    true_hz: TrueHz(hz),
                    zone: zone_number(turns),
                    sense: sense_of(turns),
                    image: false,
                });
            }
        }
    }
}

/// Every analog frequency up to `up_to` that one sample rate shows at `nu`,
/// lazily and without a limit on their number.
///
/// # Errors
/// `nu` outside `[0, rate/2]`, a rate that is no rate, a limit that is no limit.
pub fn rungs(nu: SeenHz, rate_hz: f64, up_to: TrueHz) -> Result<Rungs, LadderError> {
    check_ladder(nu, rate_hz, up_to)?;
    Ok(Rungs {
        seen_hz: nu.0,
        rate_hz,
        up_to_hz: up_to.0,
        segment: 0.0,
        last_hz: -1.0,
    })
}

/// [`rungs`] collected, in rising order.
///
/// # Errors
/// As [`rungs`]; also if there would be more than [`MAX_RUNGS`].
pub fn unfold(nu: SeenHz, rate_hz: f64, up_to: TrueHz) -> Result<Vec<Rung>, LadderError> {
    let ladder = rungs(nu, rate_hz, up_to)?;
    check_length(2.0 * up_to.0 / rate_hz)?;
    Ok(ladder.collect())
}

fn check_ladder(nu: SeenHz, rate_hz: f64, up_to: TrueHz) -> Result<(), LadderError> {
    if !(rate_hz.is_finite() && rate_hz > 0.0) {
        return Err(LadderError::Rate { rate_hz });
    }
    if !(0.0..=0.5 * rate_hz).contains(&nu.0) {
        return Err(LadderError::Seen {
            seen_hz: nu.0,
            rate_hz,
        });
    }
    if !(up_to.0.is_finite() && up_to.0 >= 0.0) {
        return Err(LadderError::UpTo { up_to_hz: up_to.0 });
    }
    Ok(())
}

fn check_length(rungs: f64) -> Result<(), LadderError> {
    if rungs > MAX_RUNGS as f64 {
        return Err(LadderError::TooLong {
            rungs,
            limit: MAX_RUNGS,
        });
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn bad_input_is_named() {
        assert_eq!(Chain::new(vec![]), Err(ChainError::Empty));
        let err = Chain::new(vec![8000.0, 0.0]).unwrap_err();
        assert_eq!(
            err,
            ChainError::Rate {
                stage: 2,
                rate_hz: 0.0
            }
        );
        assert!(
            err.to_string()
                .starts_with("stage 2: a sample rate of 0 Hz"),
            "{err}"
        );
        assert!(matches!(
            Chain::new(vec![f64::NAN]),
            Err(ChainError::Rate { stage: 1, .. })
        ));
        assert!(matches!(
            Chain::new(vec![1.0; MAX_STAGES + 1]),
            Err(ChainError::TooMany { .. })
        ));
        assert!(Chain::single(8000.0).unwrap().with_clock_ppm(-1.0).is_err());
        assert!(Chain::for_file(&[], 8000.0).is_ok());
        assert!(Chain::for_file(&[48_000.0, 8000.0], 8000.0).is_ok());
        assert!(matches!(
            Chain::for_file(&[48_000.0, 8000.0], 48_000.0),
            Err(ChainError::NotTheFile { .. })
        ));

        let ladder = |nu, rate, up| {
            unfold(SeenHz(nu), rate, TrueHz(up))
                .unwrap_err()
                .to_string()
        };
        assert!(ladder(5000.0, 8000.0, 1e4).contains("(4000 Hz)"));
        assert!(ladder(-1.0, 8000.0, 1e4).contains("cannot be seen"));
        assert!(ladder(f64::NAN, 8000.0, 1e4).contains("cannot be seen"));
        assert!(ladder(1.0, 0.0, 1e4).contains("above 0"));
        assert!(ladder(1.0, 8000.0, f64::INFINITY).contains("no end"));
    }

    #[test]
    fn what_is_not_finite_stays_so() {
        let chain = Chain::new(vec![48_000.0, 8000.0]).unwrap();
        for f in [f64::NAN, f64::INFINITY, f64::NEG_INFINITY] {
            assert!(fold(TrueHz(f), 8000.0).0.is_nan());
            assert_eq!(zone(TrueHz(f), 8000.0), 0);
            let seen = chain.see(TrueHz(f));
            assert!(seen.seen.0.is_nan() && seen.zone == 0, "{seen:?}");
            assert!(chain.images(TrueHz(f)).unwrap().is_empty());
        }
        for rate in [0.0, -1.0, f64::NAN, f64::INFINITY] {
            assert!(fold(TrueHz(10.0), rate).0.is_nan(), "{rate}");
            assert_eq!(zone(TrueHz(10.0), rate), 0, "{rate}");
        }
        // Huge but finite stays in the band.
        let seen = chain.see(TrueHz(f64::MAX)).seen.0;
        assert!((0.0..=4000.0).contains(&seen), "{seen}");
    }
}
