//! A recording made from a site file: every line at the true sample instants.

use super::noise::Noise;
use crate::fold::Chain;
use crate::sources::{LatentId, Site};
use crate::units::TrueHz;
use std::io::{self, Write};

/// How the recording is made.
#[derive(Debug, Clone, PartialEq)]
pub struct Settings {
    /// Length, s.
    pub seconds: f64,
    /// Relative error of the clock, parts per million: the true rate is higher by it.
    pub clock_error_ppm: f64,
    /// Level of all noise together, dBFS (0 = a full-scale sine).
    pub noise_dbfs: f64,
    /// Level of the strongest line before the front end, dBFS; all are lowered where
    /// the sum would clip.
    pub level_dbfs: f64,
    /// 16 or 24.
    pub bits: u32,
    /// Of phases, noise and `vary`.
    pub seed: u64,
    /// Draws every latent within its tolerance instead of taking it as listed.
    pub vary: bool,
}

impl Default for Settings {
    fn default() -> Self {
        Settings {
            seconds: 60.0,
            clock_error_ppm: 0.0,
            noise_dbfs: -60.0,
            level_dbfs: -30.0,
            bits: 16,
            seed: 1,
            vary: false,
        }
    }
}

/// Why a recording cannot be made.
#[derive(Debug, thiserror::Error)]
pub enum SynthesisError {
    /// A WAV's header holds whole rates below 2³².
    #[error("a WAV file holds whole sample rates only, not {rate_hz} Hz: choose one for --wav")]
    Rate {
        /// The rate asked for.
        rate_hz: f64,
    },
    /// A WAV's header holds 4 GiB.
    #[error("{seconds} s at {rate_hz} Hz are more than a WAV file can hold: shorten --seconds")]
    Length {
        /// The length asked for.
        seconds: f64,
        /// The rate asked for.
        rate_hz: f64,
    },
}

/// One line as it is written.
struct Voice {
    /// Turns per sample, on the true instants.
    step: f64,
    start: f64,
    amplitude: f64,
}

/// A recording ready to be written.
pub struct Synthesis {
    voices: Vec<Voice>,
    frames: u64,
    rate: u32,
    bits: u32,
    noise: Noise,
    /// Standard deviation of the noise.
    sigma: f64,
}

/// Lines this far below the quantising step of 24 bits leave no trace, dBFS.
const LEAST_DBFS: f64 = -170.0;
/// Peak that the sum of all lines may reach.
const HEADROOM: f64 = 0.9;
/// Samples between exact phases.
const BLOCK: u64 = 4096;

impl Synthesis {
    /// Puts the lines together.
    ///
    /// # Errors
    /// A rate or length that a WAV cannot hold.
    pub fn new(site: &Site, chain: &Chain, settings: &Settings) -> Result<Self, SynthesisError> {
        let rate_hz = chain.file_rate_hz();
        if rate_hz.fract() != 0.0 || !(1.0..=f64::from(u32::MAX)).contains(&rate_hz) {
            return Err(SynthesisError::Rate { rate_hz });
        }
        let frames = (settings.seconds * rate_hz).round();
        let bytes = frames * f64::from(settings.bits / 8);
        if bytes > f64::from(u32::MAX - 64) {
            return Err(SynthesisError::Length {
                seconds: settings.seconds,
                rate_hz,
            });
        }
        let mut noise = Noise::new(settings.seed);
        let catalogue = &site.catalogue;
        let latents: Vec<f64> = catalogue
            .latents
            .iter()
            .map(|l| {
                let off = if settings.vary { noise.normal() } else { 0.0 };
                l.nominal_hz + l.sd_hz * off
            })
            .collect();
        let front = site.recorder.front_end.prepared();
        let epsilon = settings.clock_error_ppm * 1e-6;
        let mut voices = Vec::new();
        for line in catalogue.sources.iter().flat_map(|s| &s.lines) {
            let f: f64 = line
                .terms
                .iter()
                .map(|&(LatentId(l), a)| a * latents.get(l).copied().unwrap_or(0.0))
                .sum::<f64>()
                .abs();
            let start = noise.uniform();
            let level = settings.level_dbfs
                + 20.0 * line.weight.log10()
                + front.gain(TrueHz(f), chain.converter_rate_hz()).mean_db;
            if level < LEAST_DBFS {
                continue;
            }
            // Where it is seen, at the same instants, is where it truly is: the
            // samples are the same, and the phase stays exact for any frequency.
            let seen = chain.see_with_clock(TrueHz(f), epsilon);
            voices.push(Voice {
                step: seen.seen.0 / rate_hz,
                start,
                amplitude: 10f64.powf(level / 20.0),
            });
        }
        let peak: f64 = voices.iter().map(|v| v.amplitude).sum();
        if peak > HEADROOM {
            for v in &mut voices {
                v.amplitude *= HEADROOM / peak;
            }
        }
        Ok(Synthesis {
            voices,
            frames: frames as u64,
            rate: rate_hz as u32,
            bits: settings.bits,
            noise,
            sigma: 10f64.powf(settings.noise_dbfs / 20.0) / 2f64.sqrt(),
        })
    }

    /// Lines in it.
    pub fn lines(&self) -> usize {
        self.voices.len()
    }

    /// Writes the WAV file, in blocks.
    ///
    /// # Errors
    /// Those of `out`.
    pub fn write(mut self, out: &mut dyn Write) -> io::Result<()> {
        let bytes = self.bits / 8;
        let data = self.frames * u64::from(bytes);
        let padded = data + data % 2;
        // Lengths were checked to fit.
        let size = |n: u64| u32::try_from(n).unwrap_or(u32::MAX).to_le_bytes();
        out.write_all(b"RIFF")?;
        out.write_all(&size(36 + padded))?;
        out.write_all(b"WAVEfmt ")?;
        out.write_all(&16_u32.to_le_bytes())?;
        out.write_all(&1_u16.to_le_bytes())?;
        out.write_all(&1_u16.to_le_bytes())?;
        out.write_all(&self.rate.to_le_bytes())?;
        out.write_all(&self.rate.saturating_mul(bytes).to_le_bytes())?;
        out.write_all(&(bytes as u16).to_le_bytes())?;
        out.write_all(&(self.bits as u16).to_le_bytes())?;
        out.write_all(b"data")?;
        out.write_all(&size(data))?;
        let scale = 2f64.powi(self.bits as i32 - 1);
        let mut done = 0;
        let mut block = Vec::new();
        while done < self.frames {
            let count = BLOCK.min(self.frames - done);
            block.clear();
            block.extend((0..count).map(|_| 0.0));
            self.add_lines(done, &mut block);
            for x in &block {
                let noisy = x + self.sigma * self.noise.normal();
                // Rounding is the converter's; its own noise is dither enough.
                let value = (noisy * scale).round().clamp(-scale, scale - 1.0) as i32;
                out.write_all(value.to_le_bytes().get(..bytes as usize).unwrap_or(&[]))?;
            }
            done += count;
        }
        if data % 2 == 1 {
            out.write_all(&[0])?;
        }
        Ok(())
    }

    fn add_lines(&self, first: u64, block: &mut [f64]) {
        for v in &self.voices {
            let turns = (v.step * first as f64).fract() + v.start;
            let (mut im, mut re) = (std::f64::consts::TAU * turns).sin_cos();
            let (sin, cos) = (std::f64::consts::TAU * v.step).sin_cos();
            for x in block.iter_mut() {
                *x += v.amplitude * re;
                (re, im) = (re * cos - im * sin, re * sin + im * cos);
            }
        }
    }
}
