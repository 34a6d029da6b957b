//! Phase lock: does a tone turn n times while another turns once?
//!
//! The phase of a visible line, the base, is followed and smoothed. A line of order
//! n of the same source turns by n times that phase at every sample, wherever it
//! folds: turning the tone's band back by it leaves a line at one frequency exactly,
//! while anything independent of the base is spread by n times the base's wander.
//!
//! With P the power in that one cell and E the energy of all C cells of the band, P/E
//! of Gaussian noise, or of anything spread evenly, exceeds x with probability
//! (1 − x)^(C−1): T = −(C−1)·ln(1 − P/E) is exponential under independence, and is
//! the log-likelihood gained when a line is there. A steady tone, or one that moves on
//! a path of its own, is not evenly spread; so the same T is taken along rival paths:
//! none, and the base's path shifted in time, reversed and turned upside down, which
//! have its statistics and not its moments. They are given every frequency that the
//! tone's uncertainty allows; the lock has to be at its own. Where a tone's own turns
//! can be counted, its phase and the base's are compared as two movements instead
//! ([`super::movement`]).

use super::baseband::{Baseband, PhaseTrack, Request, bands};
use super::movement;
use super::timestamps::ln_sum_exp;
use crate::fold::fold;
use crate::spectrum::Band;
use crate::spectrum::fft::{Complex32, Complex64, ComplexFft};
use crate::spectrum::samples::Passes;
use crate::tones::Tone;
use crate::units::{SeenHz, Sense, TrueHz, U95};
use serde::Serialize;
use std::f64::consts::TAU;

/// Highest order tested.
pub const HIGHEST_ORDER: u32 = 80;
/// Bases at most, the strongest.
const MOST_BASES: usize = 8;
/// Half-width of a base's band, Hz, at most.
const WIDEST_BASE_HZ: f64 = 1.0;
/// Cells of a tested band at most: more only cost time.
const MOST_CELLS: f64 = 16_384.0;
/// The base's phase times the order may be this uncertain, rad.
const SHARP_RAD: f64 = 1.0;
/// The order times the base's rms phase must exceed this, rad: below it every path is
/// the same.
const TELLING_RAD: f64 = 0.3;
/// ln of the prior's width over the strength of a line: any power ratio from 1 to 10⁶
/// (14 nats) is as likely as another, of which a given one takes about a seventh.
const OCCAM: f64 = 2.0;
/// Chance, over all orders tested in a recording, at which a line without a tone is
/// still listed.
const HIDDEN_CHANCE: f64 = 1e-5;
/// A line found to turn with a base.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct PhaseLock {
    /// Index of the tone; `None` for a line too spread out to stand out by itself.
    pub tone: Option<usize>,
    /// Index of the base tone.
    pub base: usize,
    /// Turns of the line for each turn of the base, as orders of the analog base.
    pub order: u32,
    /// Where the line is seen, Hz.
    pub seen_hz: SeenHz,
    /// Whether the line rises with the base as seen, or falls.
    pub sense: Sense,
    /// ± order: the slope of the line's seen frequency against the base's.
    pub multiplier: f64,
    /// ln p(band | order) − ln p(band | independent), given a mean frequency that
    /// fits both within the tone's uncertainty: movement only. The exact place within
    /// that uncertainty counts, the nearness of the tone to the line's place does not.
    pub ln_ratio: f64,
    /// Chance that something spread evenly over the band is as coherent: exp(−T).
    pub p_value: f64,
    /// Power of the line over the noise left in a resolution cell, dB.
    pub snr_db: f64,
}

/// A tone whose phase is followed.
struct Base {
    tone: usize,
    channel: usize,
    track: PhaseTrack,
}

/// A pair to test.
struct Pair {
    base: usize,
    tone: Option<usize>,
    order: u32,
    sense: Sense,
    seen_hz: f64,
    /// Frequencies that the tone's own uncertainty allows, ± Hz.
    reach_hz: f64,
    request: Request,
}

/// Tests every tone, and every order of every base, for phase lock. Only what could
/// matter is listed: pairs whose frequencies fit, and lines without a tone that
/// come by chance once in 10⁵ recordings.
///
/// # Errors
/// The recording's own.
pub fn locks<P: Passes>(recording: &P, tones: &[Tone]) -> Result<Vec<PhaseLock>, P::Error> {
    let rate_hz = recording.rate_hz();
    let duration_s = recording.frames() as f64 / rate_hz;
    let cell_hz = 1.0 / duration_s.max(1e-9);
    let bases = bases(recording, tones, cell_hz)?;
    let mut pairs = Vec::new();
    for (b, base) in bases.iter().enumerate() {
        pairs.extend(pairs_of(b, base, tones, rate_hz, cell_hz));
    }
    let requests: Vec<Request> = pairs.iter().map(|p| p.request).collect();
    let cut = bands(recording, &requests)?;
    let mut locks = Vec::new();
    for (pair, band) in pairs.iter().zip(&cut) {
        let (Some(base), Some(band)) = (bases.get(pair.base), band) else {
            continue;
        };
        let own = pair.tone.and_then(|i| tones.get(i));
        if let Some(lock) = test(pair, base, band, own) {
            locks.push(lock);
        }
    }
    let tested = pairs.iter().filter(|p| p.tone.is_none()).count().max(1) as f64;
    locks.retain(|l| l.tone.is_some() || (l.p_value * tested < HIDDEN_CHANCE && l.ln_ratio > 0.0));
    Ok(locks)
}

/// Channel in which a tone is strongest.
pub(super) fn channel(tone: &Tone) -> usize {
    tone.channels.first().map_or(0, |c| c.channel)
}

fn ratio(db: f64) -> f64 {
    10f64.powf(db / 10.0)
}

/// The strongest tones whose phase can be followed and says something.
fn bases<P: Passes>(recording: &P, tones: &[Tone], cell_hz: f64) -> Result<Vec<Base>, P::Error> {
    let mut order: Vec<usize> = (0..tones.len()).collect();
    let strength = |i: &usize| tones.get(*i).map_or(0.0, |t| t.snr_db);
    order.sort_by(|a, b| strength(b).total_cmp(&strength(a)));
    order.truncate(2 * MOST_BASES);
    let half = recording.rate_hz() / 2.0;
    let wanted: Vec<(usize, f64, Request)> = order
        .iter()
        .filter_map(|&i| {
            let tone = tones.get(i)?;
            let (half_width, request) = band_of(tone, tones, cell_hz, half)?;
            Some((i, half_width, request))
        })
        .collect();
    let requests: Vec<Request> = wanted.iter().map(|w| w.2).collect();
    let cut = bands(recording, &requests)?;
    let mut bases = Vec::new();
    for ((i, _, request), band) in wanted.iter().zip(&cut) {
        let (Some(tone), Some(band)) = (tones.get(*i), band) else {
            continue;
        };
        if let Some(track) = follow(tone, request, &Baseband::tapered(band), cell_hz) {
            bases.push(Base {
                tone: *i,
                channel: request.channel,
                track,
            });
        }
        if bases.len() == MOST_BASES {
            break;
        }
    }
    Ok(bases)
}

/// The band in which a tone's phase is followed: room for its wander, more as far as
/// the noise allows and no other tone comes near.
fn band_of(tone: &Tone, tones: &[Tone], cell_hz: f64, half: f64) -> Option<(f64, Request)> {
    let nu = tone.seen_hz.0;
    let least = 6.0 * tone.wander_hz + 16.0 * cell_hz;
    // 20 dB over the noise in the band.
    let noise_allows = ratio(tone.snr_db) * cell_hz / 200.0;
    let nearest = tones
        .iter()
        .map(|t| (t.seen_hz.0 - nu).abs())
        .filter(|d| *d > 0.0)
        .fold(f64::INFINITY, f64::min);
    let half_width = noise_allows.min(WIDEST_BASE_HZ).max(least);
    let half_width = half_width
        .min(0.6 * nearest)
        .min(nu - cell_hz)
        .min(half - nu);
    (half_width > 4.0 * cell_hz).then_some((
        half_width,
        Request {
            channel: channel(tone),
            low_hz: nu - half_width,
            high_hz: nu + half_width,
        },
    ))
}

fn follow(tone: &Tone, request: &Request, signal: &Baseband, cell_hz: f64) -> Option<PhaseTrack> {
    let cells = (request.high_hz - request.low_hz) / cell_hz;
    PhaseTrack::follow(signal, tone.seen_hz.0, cells / ratio(tone.snr_db))
}

fn pairs_of(b: usize, base: &Base, tones: &[Tone], rate_hz: f64, cell_hz: f64) -> Vec<Pair> {
    let half = rate_hz / 2.0;
    // Of the base's phase, what is more than noise.
    let noise = base.track.sd_turns;
    let moved = rms(&base.track.turns).powi(2) - noise * noise;
    let rms_rad = TAU * moved.max(0.0).sqrt();
    // Error of the base's mean, from the smoothed phase at both ends.
    let base_sd = base.track.sd_turns / base.track.duration_s().max(1e-9);
    let mut pairs = Vec::new();
    for order in 2..=HIGHEST_ORDER {
        let n = f64::from(order);
        if n * base.track.sd_turns * TAU > SHARP_RAD || n * rms_rad < TELLING_RAD {
            continue;
        }
        // In terms of the base as seen: whatever rung the base itself is on, whole
        // multiples of its true and of its seen frequency differ by whole rates.
        let line = n * base.track.mean_hz;
        let seen_hz = fold(TrueHz(line), rate_hz).0;
        let rises = (line / rate_hz - (line / rate_hz).floor()) < 0.5;
        let sense = if rises {
            Sense::Upright
        } else {
            Sense::Inverted
        };
        let spread = n * base.track.wander_hz;
        let mut partner = false;
        let mut pair = |tone: Option<usize>, reach_hz: f64, own_spread: f64| {
            // No stronger tone in the band: its energy is not this line's.
            let clear_hz = tones
                .iter()
                .enumerate()
                .filter(|(j, t)| {
                    Some(*j) != tone
                        && tone
                            .and_then(|i| tones.get(i))
                            .is_none_or(|own| t.snr_db > own.snr_db)
                })
                .map(|(_, t)| (t.seen_hz.0 - seen_hz).abs() - 3.0 * t.wander_hz)
                .fold(f64::INFINITY, f64::min);
            let half_width = (3.0 * spread + 3.0 * own_spread + reach_hz)
                .max(32.0 * cell_hz)
                .min(0.5 * MOST_CELLS * cell_hz)
                .min(0.7 * clear_hz);
            let low_hz = (seen_hz - half_width).max(2.0 * cell_hz);
            let high_hz = (seen_hz + half_width).min(half - cell_hz);
            if high_hz - low_hz < 32.0 * cell_hz {
                return;
            }
            let channel = tone
                .and_then(|i| tones.get(i))
                .map_or(base.channel, channel);
            pairs.push(Pair {
                base: b,
                tone,
                order,
                sense,
                seen_hz,
                reach_hz,
                request: Request {
                    channel,
                    low_hz,
                    high_hz,
                },
            });
        };
        for (i, tone) in tones.iter().enumerate() {
            if i == base.tone {
                continue;
            }
            // A spread line may have been found by one of its splinters only.
            let reach = 3.0 * tone.seen_hz_u95 / U95
                + tone.wander_hz
                + 1.5 * spread
                + 2.0 * cell_hz
                + 3.0 * n * base_sd;
            if (tone.seen_hz.0 - seen_hz).abs() <= reach {
                partner = true;
                pair(Some(i), reach, tone.wander_hz);
            }
        }
        if !partner {
            pair(None, 1.5 * spread + 2.0 * cell_hz, 0.0);
        }
    }
    pairs
}

fn rms(values: &[f64]) -> f64 {
    (values.iter().map(|v| v * v).sum::<f64>() / values.len().max(1) as f64).sqrt()
}

/// T of a power against a band's energy over so many cells.
fn gain(power: f64, energy: f64, cells: f64) -> f64 {
    -(cells - 1.0) * (1.0 - (power / energy).min(1.0 - 1e-12)).ln()
}

/// Log-likelihood ratio of a line of unknown strength to none, from T.
fn ln_line(t: f64) -> f64 {
    if t > 1.0 {
        t - 1.0 - t.ln() - OCCAM
    } else {
        -OCCAM
    }
}

fn test(pair: &Pair, base: &Base, band: &Band, tone: Option<&Tone>) -> Option<PhaseLock> {
    let signal = Baseband::new(band);
    let n = signal.z.len();
    let cells = n as f64;
    let energy: f64 = signal.z.iter().map(|z| z.norm_sqr()).sum();
    if n < 24 || energy <= 0.0 {
        return None;
    }
    let order = f64::from(pair.order) * pair.sense.sign();
    let spin = pair.seen_hz - signal.reference_hz;
    let along = |path: &dyn Fn(f64) -> f64| -> Vec<Complex64> {
        signal
            .z
            .iter()
            .enumerate()
            .map(|(i, z)| {
                let t = signal.at_s(i);
                let turns = spin * t + path(t);
                z * Complex64::from_polar(1.0, -TAU * (turns - turns.round()))
            })
            .collect()
    };
    let length = base.track.duration_s();
    let locked = along(&|t| order * base.track.at(t));
    let sum: Complex64 = locked.iter().sum();
    let power = sum.norm_sqr() / cells;
    let t0 = gain(power, energy, cells);
    // Rival paths, at every frequency within the tone's reach.
    let mut spectrum = Spectrum::new(n, signal.step_s, pair.reach_hz);
    let mut rivals = Vec::new();
    let mut add = |path: &dyn Fn(f64) -> f64, cost: f64| {
        let gains: Vec<f64> = spectrum
            .powers(&along(path))
            .map(|p| ln_line(gain(p, energy, cells)) - cost)
            .collect();
        let mean = ln_sum_exp(gains.iter().copied()) - (gains.len().max(1) as f64).ln();
        rivals.push(mean);
    };
    add(&|_| 0.0, 0.0);
    for fifth in 1..=4 {
        let shift = f64::from(fifth) / 5.0 * length;
        let late = |t: f64| base.track.at((t + shift) % length);
        let back = |t: f64| base.track.at((length - t + shift) % length);
        add(&|t| order * late(t), 0.0);
        add(&|t| -order * late(t), 0.0);
        add(&|t| order * back(t), 0.0);
        add(&|t| -order * back(t), 0.0);
    }
    let shared = (rivals.len() as f64).ln();
    let independent = ln_sum_exp(rivals.iter().copied()) - shared;
    // Half for anything spread evenly, whose gain is 0.
    let independent = ln_sum_exp([0.0, independent].into_iter()) - 2f64.ln();
    // A tone so strong that its own turns can be counted is compared turn by turn: the
    // base may then be the noisier of the two.
    let counted = tone.and_then(|tone| {
        let smooth = Baseband::tapered(band);
        let own = PhaseTrack::follow(&smooth, tone.seen_hz.0, cells / ratio(tone.snr_db))?;
        turn_by_turn(&own, &base.track, order)
    });
    let ln_ratio = counted.unwrap_or(ln_line(t0) - independent);
    let rest = (energy - power) / (cells - 1.0);
    Some(PhaseLock {
        tone: pair.tone,
        base: base.tone,
        order: pair.order,
        seen_hz: SeenHz(pair.seen_hz),
        sense: pair.sense,
        multiplier: order,
        ln_ratio,
        p_value: (-t0).exp(),
        snr_db: crate::units::power_db((power / rest - 1.0).max(1e-3)),
    })
}

/// Windows in which two phases are compared, at most.
const MOST_WINDOWS: usize = 256;

/// Log-likelihood ratio of two counted phases being one movement at a given ratio to
/// each having its own; lines taken out, so that frequency does not count.
fn turn_by_turn(own: &PhaseTrack, base: &PhaseTrack, order: f64) -> Option<f64> {
    let windows = own.samples().min(base.samples()) / 2;
    let windows = windows.min(MOST_WINDOWS);
    let from = own.margin_s().max(base.margin_s());
    let to = own.duration_s().min(base.duration_s()) - from;
    let (y, vy) = own.windows(windows, from, to)?;
    let (x, vx) = base.windows(windows, from, to)?;
    movement::at_ratio((&y, vy), (&x, vx), order)
}

/// Power in half cells about 0.
struct Spectrum {
    fft: ComplexFft,
    work: Vec<Complex32>,
    n: usize,
    reach: usize,
}

impl Spectrum {
    fn new(n: usize, step_s: f64, reach_hz: f64) -> Spectrum {
        let half_cell = 1.0 / (2.0 * n as f64 * step_s);
        Spectrum {
            fft: ComplexFft::forward(2 * n),
            work: vec![Complex32::default(); 2 * n],
            n,
            reach: ((reach_hz / half_cell).ceil() as usize).min(n - 1),
        }
    }

    fn powers(&mut self, signal: &[Complex64]) -> impl Iterator<Item = f64> + '_ {
        // Single precision has its range; the signal is scaled to unit power first.
        let scale = rms_of(signal).max(1e-300);
        self.work.fill(Complex32::default());
        for (w, z) in self.work.iter_mut().zip(signal) {
            *w = Complex32::new((z.re / scale) as f32, (z.im / scale) as f32);
        }
        self.fft.process(&mut self.work);
        let unit = scale * scale / self.n as f64;
        let (low, high) = (self.work.len() - self.reach, self.reach + 1);
        let below = self.work.iter().skip(low);
        let above = self.work.iter().take(high);
        above
            .chain(below)
            .map(move |x| f64::from(x.norm_sqr()) * unit)
    }
}

fn rms_of(signal: &[Complex64]) -> f64 {
    (signal.iter().map(|z| z.norm_sqr()).sum::<f64>() / signal.len().max(1) as f64).sqrt()
}
