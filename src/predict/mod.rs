//! The way forward: from listed sources to what a recorder would show.
//!
//! Each line's frequency is normal about its nominal value; folded, that is a normal
//! cut up by the zones ([`Line::chance_within`]). From it follow where a line will be
//! seen, the chance that it falls on another source's line or into a band that is
//! to be kept clear, and which sample rate keeps sources apart best.

mod noise;
pub mod synthesis;

use crate::fold::Chain;
use crate::frontend::Gain;
use crate::sources::Site;
use crate::units::{Sense, TrueHz};
use statrs::function::erf::erfc;

/// A line of a listed source as it would be seen.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Line {
    /// Index into the catalogue's sources.
    pub source: usize,
    /// Name of the source.
    pub name: String,
    /// `7x`, `2c-4o`.
    pub label: String,
    /// Nominal true frequency, Hz.
    pub true_hz: f64,
    /// Its standard deviation: tolerance and clock, Hz.
    pub sd_hz: f64,
    /// Where the nominal frequency is seen, Hz.
    pub seen_hz: f64,
    /// Nyquist zone, from 1.
    pub zone: u64,
    /// Upright or inverted.
    pub sense: Sense,
    /// Gain of the front end, dB; its spread is the deviation of a prior where the
    /// front end is not described.
    pub gain_db: f64,
    /// See `gain_db`.
    pub gain_sd_db: f64,
    /// How often such a line shows, in (0, 1].
    pub weight: f64,
    /// Chance that the line is there and gets through: presence × weight × share of
    /// tones that the front end leaves visible.
    pub shows: f64,
    /// Chance that a line of another source, being there, falls on it.
    pub covered: f64,
    /// The line most likely to: index, and its chance.
    pub by: Option<(usize, f64)>,
    /// Chance that it is seen in the band to be kept clear.
    pub in_band: f64,
}

/// What is foreseen at one rate.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Prediction {
    /// The rate of the file, Hz.
    pub rate_hz: f64,
    /// By rising seen frequency.
    pub lines: Vec<Line>,
    /// Two lines closer than this cannot be told apart, Hz.
    pub resolution_hz: f64,
    /// Share of the lines that show which are free of other sources' lines.
    pub clean: f64,
    /// Chance that no folded line is seen in the band to be kept clear.
    pub clear: f64,
    /// Expected number of folded lines seen at all.
    pub folded: f64,
}

/// A rate with its merits.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Rating {
    /// Hz.
    pub rate_hz: f64,
    /// See [`Prediction`].
    pub clean: f64,
    /// See [`Prediction`].
    pub clear: f64,
    /// See [`Prediction`].
    pub folded: f64,
}

impl Rating {
    /// What rates are ranked by.
    pub fn merit(&self) -> f64 {
        self.clean * self.clear
    }
}

/// Lines wider than this many zones are taken as seen anywhere alike.
const ZONES: f64 = 6.0;

/// Standard normal distribution function.
fn below(z: f64) -> f64 {
    0.5 * erfc(-z / std::f64::consts::SQRT_2)
}

impl Line {
    /// Chance that the line is seen between `low` and `high`, at a chain whose fold
    /// near it is that of `rate_hz`.
    pub fn chance_within(&self, low: f64, high: f64, rate_hz: f64) -> f64 {
        let half = rate_hz / 2.0;
        let (low, high) = (low.clamp(0.0, half), high.clamp(0.0, half));
        if high <= low {
            return 0.0;
        }
        if self.sd_hz > ZONES * half {
            return (high - low) / half;
        }
        if self.sd_hz <= 0.0 {
            return f64::from(u8::from((low..=high).contains(&self.seen_hz)));
        }
        // On the seen axis unrolled about where the nominal frequency lies.
        let sum_over = |centre: f64| {
            let (a, b) = ((low - centre) / self.sd_hz, (high - centre) / self.sd_hz);
            if a > 0.0 {
                below(-a) - below(-b)
            } else {
                below(b) - below(a)
            }
        };
        let reach = (5.0 * self.sd_hz / rate_hz).ceil() as i64 + 1;
        (-reach..=reach)
            .map(|k| {
                let shift = k as f64 * rate_hz;
                sum_over(self.seen_hz + shift) + sum_over(shift - self.seen_hz)
            })
            .sum::<f64>()
            .min(1.0)
    }

    /// Chance that two lines are seen closer than `resolution_hz`, were they
    /// independent.
    fn meets(&self, other: &Line, resolution_hz: f64, rate_hz: f64) -> f64 {
        let spread = self.sd_hz.hypot(other.sd_hz);
        let off = (self.seen_hz - other.seen_hz).abs();
        // Far apart and sure: nothing to work out.
        if off > resolution_hz + 5.0 * spread && self.seen_hz + other.seen_hz > 5.0 * spread {
            let half = rate_hz / 2.0;
            if 2.0 * half - self.seen_hz - other.seen_hz > 5.0 * spread {
                return 0.0;
            }
        }
        let both = Line {
            sd_hz: spread,
            ..self.clone()
        };
        both.chance_within(
            other.seen_hz - resolution_hz,
            other.seen_hz + resolution_hz,
            rate_hz,
        )
    }
}

/// Foresees what `chain` shows of every listed line. `keep_clear` is a band, Hz;
/// lines closer than `resolution_hz` fall on each other.
pub fn predict(
    site: &Site,
    chain: &Chain,
    keep_clear: Option<(f64, f64)>,
    resolution_hz: f64,
) -> Prediction {
    let rate_hz = chain.file_rate_hz();
    let front = site.recorder.front_end.prepared();
    let clock = site.recorder.assumed_clock_ppm() * 1e-6 / crate::units::U95;
    let catalogue = &site.catalogue;
    let mut lines: Vec<Line> = catalogue
        .sources
        .iter()
        .enumerate()
        .flat_map(|(index, source)| source.lines.iter().map(move |line| (index, source, line)))
        .map(|(index, source, line)| {
            let true_hz = catalogue.nominal_hz(line).abs();
            let seen = chain.see(TrueHz(true_hz));
            let Gain { mean_db, sd_db } = front.gain(TrueHz(true_hz), chain.converter_rate_hz());
            let through = front.share_seen(TrueHz(true_hz), chain.converter_rate_hz());
            Line {
                source: index,
                name: source.name.clone(),
                label: line.label.clone(),
                true_hz,
                sd_hz: catalogue.prior_sd_hz(line).hypot(true_hz * clock),
                seen_hz: seen.seen.0,
                zone: seen.zone,
                sense: seen.sense,
                gain_db: mean_db,
                gain_sd_db: sd_db,
                weight: line.weight,
                shows: source.presence * line.weight * through,
                covered: 0.0,
                by: None,
                in_band: 0.0,
            }
        })
        .filter(|l| l.seen_hz.is_finite())
        .collect();
    lines.sort_by(|a, b| a.seen_hz.total_cmp(&b.seen_hz));
    if let Some((low, high)) = keep_clear {
        for l in &mut lines {
            l.in_band = l.chance_within(low, high, rate_hz);
        }
    }
    cover(&mut lines, resolution_hz, rate_hz);
    let sum = |get: &dyn Fn(&Line) -> f64| lines.iter().map(get).sum::<f64>();
    let all = sum(&|l| l.shows);
    Prediction {
        rate_hz,
        resolution_hz,
        clean: if all > 0.0 {
            sum(&|l| l.shows * (1.0 - l.covered)) / all
        } else {
            1.0
        },
        clear: lines
            .iter()
            .filter(|l| l.zone > 1)
            .map(|l| 1.0 - l.shows * l.in_band)
            .product(),
        folded: lines.iter().filter(|l| l.zone > 1).map(|l| l.shows).sum(),
        lines,
    }
}

/// Chances below this are left out of the account of who covers whom.
const LEAST: f64 = 1e-4;

fn cover(lines: &mut [Line], resolution_hz: f64, rate_hz: f64) {
    let mut covered = vec![(1.0, None::<(usize, f64)>); lines.len()];
    for (i, a) in lines.iter().enumerate() {
        for (j, b) in lines.iter().enumerate().skip(i + 1) {
            if a.source == b.source {
                continue;
            }
            let p = a.meets(b, resolution_hz, rate_hz);
            if p < LEAST {
                continue;
            }
            for (own, other, shows) in [(i, j, b.shows), (j, i, a.shows)] {
                let Some((free, by)) = covered.get_mut(own) else {
                    continue;
                };
                let chance = p * shows;
                *free *= 1.0 - chance;
                if by.is_none_or(|(_, best)| chance > best) {
                    *by = Some((other, chance));
                }
            }
        }
    }
    for (l, (free, by)) in lines.iter_mut().zip(covered) {
        l.covered = 1.0 - free;
        l.by = by;
    }
}

/// The chain of the site's recorder with its file at `rate_hz`.
///
/// # Errors
/// A rate that is none.
pub fn chain_at(site: &Site, rate_hz: f64) -> Result<Chain, crate::fold::ChainError> {
    let mut stages = site.recorder.stages_hz.clone();
    stages.pop();
    stages.retain(|s| *s > rate_hz);
    stages.push(rate_hz);
    Chain::new(stages)
}

/// Rates by falling merit.
pub fn rank(
    site: &Site,
    rates_hz: &[f64],
    keep_clear: Option<(f64, f64)>,
    resolution_hz: f64,
) -> Vec<Rating> {
    let mut all: Vec<Rating> = rates_hz
        .iter()
        .filter_map(|&r| chain_at(site, r).ok())
        .map(|chain| {
            let p = predict(site, &chain, keep_clear, resolution_hz);
            Rating {
                rate_hz: p.rate_hz,
                clean: p.clean,
                clear: p.clear,
                folded: p.folded,
            }
        })
        .collect();
    all.sort_by(|a, b| {
        b.merit()
            .total_cmp(&a.merit())
            .then(a.rate_hz.total_cmp(&b.rate_hz))
    });
    all
}
