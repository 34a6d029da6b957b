//! Tones as sets of places on the analog axis, and what is common to all recordings.

use super::Capture;
use crate::candidates::{self, Who, is_free};
use crate::frontend::PreparedFrontEnd;
use crate::sources::Kind;
use crate::suspects::Cause;
use crate::units::{TrueHz, U95};
use std::collections::BTreeMap;

/// A line of a listed source, or the recorder, as all recordings name it.
#[derive(Debug, Clone)]
pub(super) struct Key {
    pub name: String,
    pub line: String,
    /// Nominal frequency, its standard deviation, and how often it shows; of listed
    /// lines only.
    pub prior: Option<(f64, f64, f64)>,
    /// May move between two recordings.
    pub free: bool,
    pub mains: bool,
    /// Listed lines expected this close by chance, in the recording where fewest.
    pub coincidence: f64,
}

impl Key {
    pub fn is_recorder(&self) -> bool {
        self.prior.is_none()
    }
}

/// A place on the analog axis where a tone may be.
#[derive(Debug, Clone)]
pub(super) struct Rung {
    /// On the scale of the first recording's clock, Hz.
    pub hz: f64,
    pub var: f64,
    /// Probability that the tone is there and nothing listed made it.
    pub unlisted: f64,
    /// `(key, probability)`.
    pub listed: Vec<(usize, f64)>,
}

impl Rung {
    pub fn mass(&self) -> f64 {
        self.unlisted + self.listed.iter().map(|l| l.1).sum::<f64>()
    }
}

/// A product of other tones, as part of the unlisted share of a tone.
#[derive(Debug, Clone)]
pub(super) struct Product {
    /// Indices into the tones of the recording it was found in.
    pub tones: Vec<usize>,
    pub label: String,
    pub hz: f64,
    pub probability: f64,
}

/// One physical tone, as far as it has been put together.
#[derive(Debug, Clone)]
pub(super) struct Track {
    /// Tone of each recording, where seen.
    pub members: Vec<Option<usize>>,
    pub rungs: Vec<Rung>,
    pub products: Vec<Product>,
    /// Density of anything at its first sighting, per Hz.
    pub density: f64,
    pub association: f64,
    /// Recorder artefact found by comparison: probability and words.
    pub artefact: (f64, String),
}

/// What is known of one recording.
pub(super) struct Known<'a> {
    pub capture: &'a Capture<'a>,
    pub front: PreparedFrontEnd,
    pub rate_hz: f64,
    /// Standard deviation of its clock's relative error.
    pub clock_sd: f64,
    /// Typical noise in one cell, dBFS.
    pub noise_dbfs: f64,
    pub tracks: Vec<Track>,
}

/// All recordings.
pub(super) struct Place<'a> {
    pub known: Vec<Known<'a>>,
    pub keys: Vec<Key>,
    /// Half the lowest rate, Hz.
    half: f64,
    /// Highest analog frequency looked at, Hz.
    top: f64,
    /// Integral of the shape of the analog density.
    mass: f64,
}

/// Lowest analog frequency over half the rate.
const LOWEST: f64 = 1.0 / 200.0;
/// Part of the direct tones that is spread evenly over the band.
const EVEN: f64 = 0.5;

impl<'a> Place<'a> {
    pub fn new(captures: &'a [Capture<'a>]) -> Self {
        let half = captures
            .iter()
            .map(|c| c.scene.chain.file_rate_hz() / 2.0)
            .fold(f64::INFINITY, f64::min);
        let top = captures
            .iter()
            .map(|c| candidates::top_hz(&c.scene))
            .fold(0.0, f64::max);
        let mut place = Place {
            known: Vec::new(),
            keys: Vec::new(),
            half,
            top,
            mass: LOWEST.recip().ln() + (top / half).max(1.0).ln(),
        };
        let mut index: BTreeMap<(String, String), usize> = BTreeMap::new();
        for (c, capture) in captures.iter().enumerate() {
            let known = place.know(c, captures.len(), capture, top, &mut index);
            place.known.push(known);
        }
        place
    }

    fn know(
        &mut self,
        c: usize,
        of: usize,
        capture: &'a Capture<'a>,
        top: f64,
        index: &mut BTreeMap<(String, String), usize>,
    ) -> Known<'a> {
        let scene = &capture.scene;
        let front = scene.site.recorder.front_end.prepared();
        let rate_hz = scene.chain.file_rate_hz();
        let unlisted: f64 = capture
            .inference
            .findings
            .iter()
            .map(|f| f.unlisted_direct + f.unlisted_folded)
            .sum();
        let expected = (1.0 + unlisted) / 1.3;
        let mut noise: Vec<f64> = scene
            .tones
            .iter()
            .map(|t| t.level_dbfs - t.snr_db)
            .filter(|n| n.is_finite())
            .collect();
        noise.sort_by(f64::total_cmp);
        let tracks = candidates::of(scene, capture.inference, top)
            .into_iter()
            .map(|outlook| {
                let mut rungs: Vec<Rung> = Vec::new();
                let mut products = Vec::new();
                // What nothing listed makes at each rung, before looking.
                let mut strays: Vec<(usize, f64)> = Vec::new();
                let finding = capture
                    .inference
                    .findings
                    .iter()
                    .find(|f| f.tone == outlook.tone);
                for candidate in &outlook.candidates {
                    let hz = candidate.recorder_hz;
                    let near = rungs
                        .iter()
                        .position(|r| (r.hz - hz).abs() < 1e-9 * hz.max(1.0));
                    let at = near.unwrap_or(rungs.len());
                    if near.is_none() {
                        rungs.push(Rung {
                            hz,
                            var: outlook.var,
                            unlisted: 0.0,
                            listed: Vec::new(),
                        });
                    }
                    let Some(rung) = rungs.get_mut(at) else {
                        continue;
                    };
                    let p = candidate.probability;
                    match &candidate.who {
                        Who::Unlisted => {
                            rung.unlisted += p;
                            let rate = scene.chain.converter_rate_hz();
                            let density = self.density(hz) * front.share_seen(TrueHz(hz), rate);
                            strays.push((at, expected * density));
                        }
                        Who::Parents { tones, label } => {
                            // Whatever made it, it is there: for the comparison
                            // it is an unlisted tone.
                            rung.unlisted += p;
                            products.push(Product {
                                tones: tones.clone(),
                                label: label.clone(),
                                hz,
                                probability: p,
                            });
                        }
                        who => {
                            if let Some(key) = self.key(who, capture, finding, index) {
                                rung.listed.push((key, p));
                            }
                        }
                    }
                }
                // No tone is expected more surely than it is measured, however well a
                // family fits: that bounds the density, and `unlisted` from below.
                let most = 0.4 / outlook.var.sqrt();
                for &(at, stray) in &strays {
                    if let Some(r) = rungs.get_mut(at) {
                        r.unlisted = r.unlisted.max(stray / most);
                    }
                }
                let prior: f64 = strays.iter().map(|s| s.1).sum();
                let own: f64 = rungs.iter().map(|r| r.unlisted).sum();
                let mut members = vec![None; of];
                if let Some(m) = members.get_mut(c) {
                    *m = Some(outlook.tone);
                }
                Track {
                    members,
                    rungs,
                    products,
                    density: (prior / own.max(1e-300)).clamp(1e-300, most),
                    association: 1.0,
                    artefact: (0.0, String::new()),
                }
            })
            .collect();
        Known {
            capture,
            front,
            rate_hz,
            clock_sd: (scene.site.recorder.assumed_clock_ppm() * 1e-6 / U95).max(1e-12),
            noise_dbfs: noise.get(noise.len() / 2).copied().unwrap_or(-100.0),
            tracks,
        }
    }

    fn key(
        &mut self,
        who: &Who,
        capture: &Capture,
        finding: Option<&crate::suspects::Finding>,
        index: &mut BTreeMap<(String, String), usize>,
    ) -> Option<usize> {
        let catalogue = &capture.scene.site.catalogue;
        let chance = |source: usize, line: usize| {
            finding
                .and_then(|f| {
                    f.suspects.iter().find(|s| {
                        matches!(s.cause, Cause::Source { source: a, line: b, .. } if a == source && b == line)
                    })
                })
                .map_or(f64::INFINITY, |s| s.coincidence)
        };
        let key = match who {
            Who::Listed { source: s, line: l } => {
                let (source, line) = who.listed(catalogue)?;
                Key {
                    name: source.name.clone(),
                    line: line.label.clone(),
                    prior: Some((
                        catalogue.nominal_hz(line).abs(),
                        catalogue.prior_sd_hz(line).max(1e-9),
                        source.presence * line.weight,
                    )),
                    free: is_free(catalogue, line),
                    mains: source.kind == Kind::Mains,
                    coincidence: chance(*s, *l),
                }
            }
            Who::Recorder { label } => Key {
                name: "recorder".into(),
                line: label.clone(),
                prior: None,
                free: false,
                mains: false,
                coincidence: finding
                    .and_then(|f| {
                        f.suspects
                            .iter()
                            .find(|s| s.cause == Cause::Recorder && s.line == *label)
                    })
                    .map_or(0.0, |s| s.coincidence),
            },
            _ => return None,
        };
        let name = (key.name.clone(), key.line.clone());
        if let Some(&known) = index.get(&name) {
            if let Some(k) = self.keys.get_mut(known) {
                k.coincidence = k.coincidence.min(key.coincidence);
            }
            return Some(known);
        }
        index.insert(name, self.keys.len());
        self.keys.push(key);
        Some(self.keys.len() - 1)
    }

    /// Density of unlisted analog tones per Hz and expected tone, before any front end:
    /// as `suspects` takes it for one recording.
    pub fn density(&self, f: f64) -> f64 {
        let h = self.half;
        if f > h {
            return candidates::folded_density(f, h, self.top) / self.mass;
        }
        let low = LOWEST * h;
        let spread = 1.0 / ((f + low) * ((h + low) / low).ln());
        (EVEN / h + (1.0 - EVEN) * spread) * LOWEST.recip().ln() / self.mass
    }

    /// Expected density of line `key` at `f` over that of unlisted tones, before
    /// looking.
    pub fn prior_odds(&self, key: usize, f: f64) -> f64 {
        match self.keys.get(key).and_then(|k| k.prior) {
            None => 1.0,
            Some((nominal, sd, often)) => {
                let z = (f - nominal) / sd;
                let density = (-0.5 * z * z).exp() / (sd * (2.0 * std::f64::consts::PI).sqrt());
                (often * density / self.density(f)).max(1e-12)
            }
        }
    }

    /// Chance, were it always there, that a tone seen in `from` with `level_dbfs`
    /// is seen in recording `to` if it truly is at `f`.
    pub fn visible(&self, from: usize, to: usize, level_dbfs: f64, f: f64) -> f64 {
        let (Some(a), Some(b)) = (self.known.get(from), self.known.get(to)) else {
            return 0.0;
        };
        let gain = |k: &Known| {
            k.front
                .gain(TrueHz(f), k.capture.scene.chain.converter_rate_hz())
        };
        let (ga, gb) = (gain(a), gain(b));
        let snr = level_dbfs - b.noise_dbfs;
        candidates::chance_seen(snr, ga, gb)
    }

    /// Level of a track at its first sighting, and that sighting.
    pub fn first(&self, track: &Track) -> Option<(usize, &crate::tones::Tone)> {
        track.members.iter().enumerate().find_map(|(c, m)| {
            let tone = self.known.get(c)?.capture.scene.tones.get((*m)?)?;
            Some((c, tone))
        })
    }

    /// Probability that the mains made it.
    pub fn mains_share(&self, track: &Track) -> f64 {
        self.share(track, |k| k.mains)
    }

    /// Probability over all keys that `which` holds for.
    pub fn share(&self, track: &Track, which: impl Fn(&Key) -> bool) -> f64 {
        track
            .rungs
            .iter()
            .flat_map(|r| &r.listed)
            .filter(|l| self.keys.get(l.0).is_some_and(&which))
            .map(|l| l.1)
            .sum()
    }
}
