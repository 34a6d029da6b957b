//! A tone's frequency and phase over time.
//!
//! The recording is cut into 2, 4, 8 … equal windows, so that the tracks of all
//! tones of a recording share one family of grids: of two tracks the finer one is
//! brought to the coarser one's windows by [`coarser`], without loss, and they can
//! be compared point by point ([`pairs`]). Windows do not overlap, and in one
//! window the estimates of frequency and of phase at its middle are independent,
//! so all of a track's numbers are.
//!
//! In a window a tone is fitted as steady (maximum likelihood: the peak of the
//! window's own spectrum). A tone that moves within it has there the mean of its
//! frequency under the weight t·(L − t), L the window's length: what least squares
//! on its phase gives.

use crate::spectrum::Band;
use crate::spectrum::fft::{Complex32, Complex64, ComplexFft};
use crate::units::SeenHz;
use std::f64::consts::{PI, TAU};

/// A tone's frequency and phase in one window of time.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct TrackPoint {
    /// Middle of the window, seconds from the start.
    pub at_s: f64,
    /// Seen frequency.
    pub seen_hz: SeenHz,
    /// Its standard deviation, Hz.
    pub sd_hz: f64,
    /// Phase at `at_s` in turns, `[0, 1)`: the tone is there cos(2π·turns).
    pub turns: f64,
    /// Its standard deviation, turns.
    pub turns_sd: f64,
}

/// Frequency and phase in window `index` of [`Follower::windows`], in bins.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Point {
    /// Which window, from 0.
    pub index: usize,
    /// Frequency, bins of the band's grid.
    pub bin: f64,
    /// Its standard deviation, bins.
    pub bin_sd: f64,
    /// Frequency and standard deviation in resolution cells of the recording: turns
    /// in the whole of it.
    pub cells: f64,
    /// See `cells`.
    pub cells_sd: f64,
    /// Phase at the window's middle, turns.
    pub turns: f64,
    /// Its standard deviation, turns.
    pub turns_sd: f64,
    /// Power of the fitted tone over the noise in the window.
    pub snr: f64,
}

/// Tone energy over noise density that a window must hold. The highest of the noise
/// cells searched beats it about exp(−SNR/2) times per cell, 6e-6.
const CLEAR: f64 = 24.0;
/// Most windows of a track.
pub const MOST_WINDOWS: usize = 256;
/// Cells of the whole recording that are cut out for each window: samples in it.
const PER_WINDOW: usize = 32;
const LEAST_PER_WINDOW: usize = 12;
/// Samples at the ends of the recording that the cut smears.
const SMEARED: f64 = 1.5;
/// A window with less than this share of the usual power is without the tone.
const PRESENT: f64 = 0.25;
/// A tone that gathers less than this share of its power in its windows moves too
/// fast to be followed.
const COHERENT: f64 = 0.6;

/// A tone back in time: a slow complex signal about it.
#[derive(Debug, Clone)]
pub struct Baseband {
    /// Bin that stands still in it.
    pub centre: i64,
    /// Bins cut out; samples over the whole grid.
    pub width: usize,
    /// The signal, scaled so that a tone of |c| has |z| = |c|.
    pub z: Vec<Complex32>,
    /// Samples of the recording, of which the signal's cover `step` each.
    pub samples: f64,
    /// See `samples`.
    pub step: f64,
}

impl Baseband {
    /// Cuts `width` bins (even) about `centre` out of what `bin` gives of each; those
    /// in the outer quarters fade out, so that nothing rings.
    pub fn cut(
        band: &Band,
        centre: i64,
        width: usize,
        bin: impl Fn(i64) -> Option<Complex32>,
    ) -> Baseband {
        let half = width as i64 / 2;
        let mut z = vec![Complex32::default(); width];
        for d in -half..half {
            let fade = (d as f64).abs() / half as f64;
            let keep = if fade <= 0.5 {
                1.0
            } else {
                (PI * (fade - 0.5)).cos().powi(2)
            };
            let value = bin(centre + d).unwrap_or_default() * keep as f32;
            if let Some(slot) = z.get_mut(d.rem_euclid(width as i64) as usize) {
                *slot = value;
            }
        }
        ComplexFft::inverse(width).process(&mut z);
        let scale = (1.0 / band.grid as f64) as f32;
        for v in &mut z {
            *v *= scale;
        }
        let step = band.grid as f64 / width as f64;
        z.truncate((band.samples as f64 / step).ceil() as usize);
        Baseband {
            centre,
            width,
            z,
            samples: band.samples as f64,
            step,
        }
    }

    /// The signal's samples in window `index` of `windows`.
    fn window(&self, index: usize, windows: usize) -> std::ops::Range<usize> {
        let edge = |i: usize| {
            let at = i as f64 * self.samples / windows as f64;
            let at = at.clamp(SMEARED * self.step, self.samples - SMEARED * self.step);
            ((at / self.step).ceil().max(0.0) as usize).min(self.z.len())
        };
        edge(index)..edge(index + 1)
    }
}

/// A steady tone fitted to a stretch of a [`Baseband`].
#[derive(Debug, Clone, Copy)]
pub struct Fitted {
    /// Cycles per sample of the baseband, −½ to ½.
    pub cycles: f64,
    /// Phase at the middle of the stretch, radians.
    pub phase: f64,
    /// |c|².
    pub power: f64,
    /// Samples in it.
    pub count: f64,
}

/// Fits the strongest frequency of `z` with `|cycles − about| ≤ within` (per sample).
pub fn fit(z: &[Complex32], about: f64, within: f64, work: &mut Work) -> Option<Fitted> {
    let m = z.len();
    if m < 4 {
        return None;
    }
    let padded = (4 * m).next_power_of_two();
    let spectrum = work.transform(z, padded);
    let first = ((about - within) * padded as f64).ceil() as i64;
    let last = ((about + within) * padded as f64).floor() as i64;
    let power_at = |i: i64| f64::from(spectrum[i.rem_euclid(padded as i64) as usize].norm_sqr());
    let peak = (first..=last).max_by(|&a, &b| power_at(a).total_cmp(&power_at(b)))?;
    let mut cycles = peak as f64 / padded as f64;
    let middle = 0.5 * (m as f64 - 1.0);
    let mut sum = Complex64::default();
    for _ in 0..4 {
        // Newton's method on the power: P' and P'' from the moments of z·exp(−iωt)
        let (mut s0, mut s1, mut s2) = (
            Complex64::default(),
            Complex64::default(),
            Complex64::default(),
        );
        for (i, v) in z.iter().enumerate() {
            let t = i as f64 - middle;
            let x = Complex64::new(v.re.into(), v.im.into())
                * Complex64::from_polar(1.0, -TAU * cycles * t);
            s0 += x;
            s1 += x * t;
            s2 += x * (t * t);
        }
        sum = s0;
        // d/dω of |S|² with dS/dω = −i·Σ t·x
        let slope = 2.0 * (s0.conj() * s1).im;
        let bend = 2.0 * (s1.norm_sqr() - (s0.conj() * s2).re);
        if bend >= 0.0 {
            break;
        }
        let step = -slope / bend / TAU;
        cycles += step.clamp(-0.3 / m as f64, 0.3 / m as f64);
        if step.abs() < 1e-7 / m as f64 {
            break;
        }
    }
    Some(Fitted {
        cycles,
        phase: sum.arg(),
        power: sum.norm_sqr() / (m * m) as f64,
        count: m as f64,
    })
}

/// Transforms of changing lengths without planning each anew.
#[derive(Default)]
pub struct Work {
    plans: std::collections::BTreeMap<usize, ComplexFft>,
    buffer: Vec<Complex32>,
}

impl Work {
    fn transform(&mut self, z: &[Complex32], padded: usize) -> &[Complex32] {
        self.buffer.clear();
        self.buffer.extend_from_slice(z);
        self.buffer.resize(padded, Complex32::default());
        self.plans
            .entry(padded)
            .or_insert_with(|| ComplexFft::forward(padded))
            .process(&mut self.buffer);
        &self.buffer
    }
}

/// What is to be followed.
#[derive(Debug, Clone, Copy)]
pub struct Target {
    /// Mean frequency, bins.
    pub bin: f64,
    /// How far from it the tone may be in any window, bins.
    pub strays: f64,
    /// Power over the noise in one cell of the whole recording while present.
    pub snr: f64,
    /// Noise power per cell.
    pub noise: f64,
    /// First and last moment present, as fractions of the recording.
    pub present: (f64, f64),
    /// Distance to the nearest thing that is not taken out of the band, bins.
    pub alone: f64,
}

/// A tone followed.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Track {
    /// Into how many windows the recording was cut; 0 where there is no track.
    pub windows: usize,
    /// Windows in which the tone is.
    pub points: Vec<Point>,
}

/// A tone that is coherent in a window moves from one to the next by less than this
/// many of their resolution cells, rms.
const COHERENT_STEP: f64 = 1.2;

impl Track {
    /// Does it jump about as the peaks of noise do, and no tone that gathers its power
    /// in each window can?
    pub fn jumps(&self) -> bool {
        let steps: Vec<f64> = self
            .points
            .windows(2)
            .filter(|w| w[1].index == w[0].index + 1)
            .map(|w| ((w[1].cells - w[0].cells) / self.windows as f64).powi(2))
            .collect();
        steps.len() >= 6 && steps.iter().sum::<f64>() > COHERENT_STEP.powi(2) * steps.len() as f64
    }
}

/// Follows `target` through the windows that are as short as its strength allows;
/// `bin` gives each bin of the transform with everything else taken out.
///
/// Empty where the tone is too weak for two windows, too near other things, or
/// moves too fast to be coherent in one window.
pub fn follow(
    band: &Band,
    target: &Target,
    bin: impl Fn(i64) -> Option<Complex32>,
    work: &mut Work,
) -> Track {
    let centre = target.bin.round();
    // Room to either end of the axis and of the band: mirror images and skirts.
    let half = band.grid as f64 / 2.0;
    let to_ends = centre.min(half - centre);
    let first = band.first_bin as f64;
    let last = first + band.bins.len() as f64;
    let at_end = |edge: f64, end: f64| {
        if edge == end {
            f64::INFINITY
        } else {
            (centre - edge).abs()
        }
    };
    let room = at_end(first, 0.0).min(at_end(last - 1.0, half.floor()));
    let duty = target.present.1 - target.present.0;
    let mut windows = MOST_WINDOWS;
    let fits = |windows: usize| {
        let w = windows as f64;
        let cut = (LEAST_PER_WINDOW as f64 * w).max(4.0 * target.strays + 4.0 * w);
        target.snr / w >= CLEAR
            && target.strays + 3.0 * w <= target.alone
            && target.strays + 3.0 * w <= to_ends
            && cut / 2.0 <= room
            && duty * w >= 2.0
    };
    while windows >= 2 && !fits(windows) {
        windows /= 2;
    }
    if windows < 2 {
        return Track::default();
    }
    // The window's resolution, in bins of the grid.
    let cell = windows as f64 * band.grid as f64 / band.samples as f64;
    let wanted = (PER_WINDOW * windows).max((6.0 * target.strays + 8.0 * cell) as usize);
    let width = crate::spectrum::fft::next_fast_len(wanted)
        .min((2.0 * room) as usize & !1)
        .min((band.grid / 2) & !1);
    let base = Baseband::cut(band, centre as i64, width, bin);
    let points = windows_of(&base, windows, target, cell, work);
    if points.len() < 2 {
        return Track::default();
    }
    Track { windows, points }
}

fn windows_of(
    base: &Baseband,
    windows: usize,
    target: &Target,
    cell: f64,
    work: &mut Work,
) -> Vec<Point> {
    let per_sample = base.width as f64;
    let about = (target.bin - base.centre as f64) / per_sample;
    let within = (target.strays + 1.5 * cell) / per_sample;
    // Per cell of the whole recording a tone of |c|² has |c|²·N²; over a window of m
    // samples of the baseband that is a share m·step/N of it.
    let snr = |f: &Fitted| f.power * base.samples * (f.count * base.step) / target.noise;
    let inside = |i: usize| {
        let w = windows as f64;
        i as f64 / w >= target.present.0 - 1e-9 && (i + 1) as f64 / w <= target.present.1 + 1e-9
    };
    let found: Vec<(usize, std::ops::Range<usize>, Fitted)> = (0..windows)
        .filter(|&i| inside(i))
        .filter_map(|i| {
            let range = base.window(i, windows);
            let fitted = fit(base.z.get(range.clone())?, about, within, work)?;
            Some((i, range, fitted))
        })
        .collect();
    let mut powers: Vec<f64> = found.iter().map(|f| f.2.power).collect();
    if powers.is_empty() {
        return Vec::new();
    }
    let mid = powers.len() / 2;
    let typical = *powers.select_nth_unstable_by(mid, f64::total_cmp).1;
    // What the windows gather coherently: little where the tone moves through
    // several of their cells while one lasts.
    let expected = target.snr * target.noise / (base.samples * base.samples);
    if typical < COHERENT * expected {
        return Vec::new();
    }
    found
        .into_iter()
        .filter_map(|(index, range, fitted)| {
            let own = snr(&fitted);
            let usual = own * typical / fitted.power;
            if own < PRESENT * CLEAR || fitted.power < PRESENT * typical {
                return None;
            }
            // The fitted power itself is uncertain by 2/√SNR: where it is no further off
            // the usual one than that, the usual one is the better estimate.
            let odd = (own / usual).ln().abs() > 3.0 * 2.0 / usual.sqrt();
            let snr = if odd { own } else { usual };
            // Cramér–Rao bounds of a complex tone (Rife & Boorstyn 1974), SNR being
            // energy over density: var(ω·m) = 6/SNR, var(φ at the middle) = 1/(2·SNR).
            let m = fitted.count;
            let bin_sd = (6.0 / snr).sqrt() / TAU / m * per_sample;
            let turns_sd = (0.5 / snr).sqrt() / TAU;
            // From the samples' middle to the window's.
            let have = (range.start as f64 + 0.5 * (m - 1.0)) * base.step;
            let want = (index as f64 + 0.5) * base.samples / windows as f64;
            let grid = base.step * per_sample;
            let still = (base.centre as f64 * (want / grid)).rem_euclid(1.0);
            let turns = still + fitted.phase / TAU + fitted.cycles * (want - have) / base.step;
            let bin = base.centre as f64 + fitted.cycles * per_sample;
            let cells = base.samples / grid;
            Some(Point {
                index,
                bin,
                bin_sd,
                cells: bin * cells,
                cells_sd: bin_sd * cells,
                turns: turns.rem_euclid(1.0),
                turns_sd,
                snr,
            })
        })
        .collect()
}

/// A track with windows twice as long: each two of them, both present, fitted
/// together. `step_s` is the length of its windows as they are.
///
/// Two windows' frequencies and phases are all that a steady tone leaves in their
/// union: the result is as precise as a fit to the samples themselves.
pub fn coarser(points: &[TrackPoint], step_s: f64) -> Vec<TrackPoint> {
    let index = |p: &TrackPoint| (p.at_s / step_s - 0.5).round() as i64;
    points
        .windows(2)
        .filter(|w| index(&w[0]) % 2 == 0 && index(&w[1]) == index(&w[0]) + 1)
        .map(|w| join(&w[0], &w[1], step_s))
        .collect()
}

fn join(a: &TrackPoint, b: &TrackPoint, step_s: f64) -> TrackPoint {
    // Whole turns between the middles as the frequencies have them.
    let gained = b.turns - a.turns;
    let expected = 0.5 * (a.seen_hz.0 + b.seen_hz.0) * step_s;
    let gained = gained + (expected - gained).round();
    // Least squares for the phase p at the joint and the frequency f:
    // a.turns = p − f·h, a.turns + gained = p + f·h, and both frequencies.
    let h = 0.5 * step_s;
    let weight = |sd: f64| 1.0 / (sd * sd).max(1e-300);
    let (wa, wb) = (weight(a.turns_sd), weight(b.turns_sd));
    let (va, vb) = (weight(a.sd_hz), weight(b.sd_hz));
    let (pp, pf, ff) = (wa + wb, (wb - wa) * h, (wa + wb) * h * h + va + vb);
    let rp = wb * gained;
    let rf = wb * gained * h + va * a.seen_hz.0 + vb * b.seen_hz.0;
    let det = pp * ff - pf * pf;
    TrackPoint {
        at_s: 0.5 * (a.at_s + b.at_s),
        seen_hz: SeenHz((pp * rf - pf * rp) / det),
        sd_hz: (pp / det).sqrt(),
        turns: (a.turns + (ff * rp - pf * rf) / det).rem_euclid(1.0),
        turns_sd: (ff / det).sqrt(),
    }
}

/// Two tracks of one recording, `(points, length of a window in s)` each, brought to
/// the coarser one's windows: the points of both in every window that both have.
pub fn pairs(a: (&[TrackPoint], f64), b: (&[TrackPoint], f64)) -> Vec<(TrackPoint, TrackPoint)> {
    let step = a.1.max(b.1);
    let to_step = |(points, mut own): (&[TrackPoint], f64)| {
        let mut points = points.to_vec();
        while own > 0.0 && own < 0.75 * step {
            points = coarser(&points, own);
            own *= 2.0;
        }
        points
    };
    let (a, b) = (to_step(a), to_step(b));
    let mut rest = b.iter().peekable();
    let mut both = Vec::new();
    for p in &a {
        while rest.next_if(|q| q.at_s < p.at_s - 0.25 * step).is_some() {}
        if let Some(&q) = rest.peek()
            && (q.at_s - p.at_s).abs() < 0.25 * step
        {
            both.push((*p, *q));
        }
    }
    both
}
