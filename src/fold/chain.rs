//! A signal that went through several sample rates.

use super::stages::{Candidate, Part, Stage, inner_turns, walk};
use super::{
    Edge, LadderError, MAX_RUNGS, Rung, Seen, check_ladder, check_length, sense_of, zone_number,
};
use crate::units::{SeenHz, Sense, TrueHz};

/// The most stages a [`Chain`] takes; real recorders have two or three.
pub const MAX_STAGES: usize = 16;

/// Why rates make no chain.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum ChainError {
    /// No rate at all.
    #[error("no sample rate given: at least the rate of the file is needed")]
    Empty,
    /// More than [`MAX_STAGES`].
    #[error(
        "{stages} sample rates given, {limit} are the most: list only rates at which samples were taken or resampled"
    )]
    TooMany {
        /// How many were given.
        stages: usize,
        /// [`MAX_STAGES`].
        limit: usize,
    },
    /// One rate is zero, negative or not finite.
    #[error("stage {stage}: a sample rate of {rate_hz} Hz is no rate: it must be a number above 0")]
    Rate {
        /// Which, from 1.
        stage: usize,
        /// The rate given.
        rate_hz: f64,
    },
    /// The last described stage is not the file's rate.
    #[error(
        "the last described stage has {described_hz} samples/s, the file {file_hz}: the last stage must be the file's rate"
    )]
    NotTheFile {
        /// The last stage.
        described_hz: f64,
        /// The file.
        file_hz: f64,
    },
    /// The clock tolerance is negative or not finite.
    #[error("a clock tolerance of {clock_ppm} ppm is none: it must be 0 or more")]
    Clock {
        /// The tolerance given.
        clock_ppm: f64,
    },
}

/// Every rate a signal went through, the converter's first, the file's last.
///
/// A stage with a lower rate than the one before folds the band anew (nothing is
/// assumed of its decimation filter); one with a higher rate leaves the tone
/// where it is and adds images of it. All stages run from one clock.
///
/// **Zone of a chain.** 1 + the number of times the map from true to seen
/// frequency has turned round between 0 and `f`. Its parity is therefore always
/// the inversion. For one rate, and for any chain of whole decimation ratios, it
/// is the Nyquist zone of the file's rate, `floor(2f/r) + 1`. For an image, which
/// has no such map from 0 on, it is 1 + the half-rate segments crossed at each
/// stage + the order of the image: an image of a line of the baseband about the
/// first multiple of the old rate has zone 2.
#[derive(Debug, Clone, PartialEq)]
pub struct Chain {
    /// Never empty, at most [`MAX_STAGES`].
    stages: Vec<Stage>,
    clock_ppm_u95: Option<f64>,
}

impl Chain {
    /// A chain of the given rates, each finite and above 0.
    ///
    /// # Errors
    /// No rate, more than [`MAX_STAGES`], or a rate that is none.
    pub fn new(rates_hz: Vec<f64>) -> Result<Self, ChainError> {
        if rates_hz.is_empty() {
            return Err(ChainError::Empty);
        }
        if rates_hz.len() > MAX_STAGES {
            return Err(ChainError::TooMany {
                stages: rates_hz.len(),
                limit: MAX_STAGES,
            });
        }
        for (i, &rate_hz) in rates_hz.iter().enumerate() {
            if !(rate_hz.is_finite() && rate_hz > 0.0) {
                return Err(ChainError::Rate {
                    stage: i + 1,
                    rate_hz,
                });
            }
        }
        let mut stages: Vec<Stage> = Vec::with_capacity(rates_hz.len());
        for &rate_hz in rates_hz.iter().rev() {
            let half_hz = 0.5 * rate_hz;
            let inner_turns = inner_turns(&stages, half_hz);
            stages.insert(
                0,
                Stage {
                    rate_hz,
                    half_hz,
                    inner_turns,
                },
            );
        }
        Ok(Chain {
            stages,
            clock_ppm_u95: None,
        })
    }

    /// A converter whose samples went into the file as they were.
    ///
    /// # Errors
    /// A rate that is none.
    pub fn single(rate_hz: f64) -> Result<Self, ChainError> {
        Chain::new(vec![rate_hz])
    }

    /// The chain of a file of `file_rate_hz` whose recorder is described by
    /// `stages_hz`; an empty description means the converter ran at the file's rate.
    ///
    /// # Errors
    /// As [`Chain::new`], or if the last described stage is another rate than the
    /// file's (by more than 1 part in 10⁹).
    pub fn for_file(stages_hz: &[f64], file_rate_hz: f64) -> Result<Self, ChainError> {
        let Some(&described_hz) = stages_hz.last() else {
            return Chain::single(file_rate_hz);
        };
        let chain = Chain::new(stages_hz.to_vec())?;
        Chain::single(file_rate_hz)?;
        if (described_hz - file_rate_hz).abs() > 1e-9 * file_rate_hz {
            return Err(ChainError::NotTheFile {
                described_hz,
                file_hz: file_rate_hz,
            });
        }
        Ok(chain)
    }

    /// The same chain with a clock known to ± `clock_ppm` (95 %).
    ///
    /// # Errors
    /// A negative or non-finite tolerance.
    pub fn with_clock_ppm(mut self, clock_ppm: f64) -> Result<Self, ChainError> {
        if !(clock_ppm.is_finite() && clock_ppm >= 0.0) {
            return Err(ChainError::Clock { clock_ppm });
        }
        self.clock_ppm_u95 = Some(clock_ppm);
        Ok(self)
    }

    /// Tolerance of the clock, ± parts per million (95 %), where described.
    pub fn clock_ppm_u95(&self) -> Option<f64> {
        self.clock_ppm_u95
    }

    /// Every rate, the converter's first, Hz.
    pub fn rates_hz(&self) -> impl ExactSizeIterator<Item = f64> + '_ {
        self.stages.iter().map(|s| s.rate_hz)
    }

    /// The first rate: what the analog front end has to guard, Hz.
    pub fn converter_rate_hz(&self) -> f64 {
        self.stages.first().map_or(f64::NAN, |s| s.rate_hz)
    }

    /// The last rate: that of the file, Hz.
    pub fn file_rate_hz(&self) -> f64 {
        self.stages.last().map_or(f64::NAN, |s| s.rate_hz)
    }

    /// Where and how `f` is seen, folding once at each stage. Allocates nothing.
    ///
    /// A negative `f` stands for its magnitude. Not finite: NaN, zone 0, upright.
    pub fn see(&self, f: TrueHz) -> Seen {
        let (seen_hz, turns) = walk(&self.stages, f.0.abs(), Edge::Above);
        if seen_hz.is_finite() {
            Seen {
                seen: SeenHz(seen_hz),
                zone: zone_number(turns),
                sense: sense_of(turns),
            }
        } else {
            Seen {
                seen: SeenHz(f64::NAN),
                zone: 0,
                sense: Sense::Upright,
            }
        }
    }

    /// [`see`](Chain::see) with a clock that runs fast by the relative error
    /// `epsilon`: every true rate is `(1 + ε)` times the nominal one, the seen
    /// frequency is read off the nominal scale, so `f` is seen where a perfect
    /// clock would show `f/(1 + ε)`.
    pub fn see_with_clock(&self, f: TrueHz, epsilon: f64) -> Seen {
        self.see(TrueHz(f.0 / (1.0 + epsilon)))
    }

    /// The images of `f` that interpolating stages leave in the file, by rising
    /// seen frequency. A stage from rate `r` to `R` turns a tone at `ν` into the
    /// tone and images at `k·r ± ν` up to `R/2`, weakened by as much as its filter
    /// does; later stages fold them, and interpolate them again. Empty where no
    /// rate goes up.
    ///
    /// # Errors
    /// More than [`MAX_RUNGS`] images.
    pub fn images(&self, f: TrueHz) -> Result<Vec<Seen>, LadderError> {
        let mut parts = vec![Part {
            hz: f.0.abs(),
            crossed: 0.0,
            edge: Edge::Above,
            image: false,
        }];
        for (i, stage) in self.stages.iter().enumerate() {
            for part in &mut parts {
                part.fold(stage);
            }
            let Some(next) = self.stages.get(i + 1) else {
                break;
            };
            if next.rate_hz > stage.rate_hz {
                check_length(parts.len() as f64 * next.rate_hz / stage.rate_hz)?;
                let images: Vec<Part> = parts
                    .iter()
                    .flat_map(|p| p.images(stage, next.half_hz))
                    .collect();
                parts.extend(images);
            }
        }
        let mut seen: Vec<Seen> = parts
            .iter()
            .filter(|p| p.image && p.hz.is_finite())
            .map(|p| Seen {
                seen: SeenHz(p.hz),
                zone: zone_number(p.crossed),
                sense: sense_of(p.crossed),
            })
            .collect();
        seen.sort_by(|a, b| a.seen.0.total_cmp(&b.seen.0));
        Ok(seen)
    }

    /// Every analog frequency up to `up_to` that shows at `nu` in the file, lowest
    /// first, each once; built backwards from the file to the converter. Where a
    /// line shows there both itself and by an image, the line itself is listed.
    ///
    /// # Errors
    /// `nu` outside `[0, rate/2]` of the file, a limit that is none, or more than
    /// [`MAX_RUNGS`] rungs.
    pub fn unfold(&self, nu: SeenHz, up_to: TrueHz) -> Result<Vec<Rung>, LadderError> {
        check_ladder(nu, self.file_rate_hz(), up_to)?;
        let mut candidates = vec![Candidate {
            hz: nu.0,
            above: 0.0,
            below: 0.0,
            crossed: 0.0,
            image: false,
        }];
        for (i, stage) in self.stages.iter().enumerate().rev() {
            let before = i.checked_sub(1).and_then(|i| self.stages.get(i));
            let limit_hz = match before {
                None => up_to.0,
                // What an interpolating stage puts out fills its own band only.
                Some(b) => b.half_hz.max(stage.half_hz),
            };
            check_length(candidates.len() as f64 * limit_hz / stage.half_hz)?;
            candidates = candidates
                .iter()
                .flat_map(|c| c.unfolded(stage, limit_hz))
                .collect();
            if let Some(b) = before {
                for c in &mut candidates {
                    c.undo_image(b);
                }
            }
        }
        candidates.sort_by(|a, b| a.hz.total_cmp(&b.hz));
        Ok(self.distinct(&candidates))
    }

    /// Rungs of sorted candidates, each frequency once.
    fn distinct(&self, candidates: &[Candidate]) -> Vec<Rung> {
        let mut ladder: Vec<Rung> = Vec::with_capacity(candidates.len().min(MAX_RUNGS));
        for c in candidates {
            let turns = if c.image { c.crossed } else { c.above };
            let rung = Rung {
                true_hz: TrueHz(c.hz),
                zone: zone_number(turns),
                sense: sense_of(turns),
                image: c.image,
            };
            // Two ways to the same frequency differ by a few roundings at most.
            let tolerance = 8.0 * f64::EPSILON * c.hz.max(self.converter_rate_hz());
            match ladder.last_mut() {
                Some(last) if c.hz - last.true_hz.0 <= tolerance => {
                    if last.image && !rung.image {
                        *last = rung;
                    }
                }
                _ => ladder.push(rung),
            }
        }
        ladder
    }
}
