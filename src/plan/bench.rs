//! What each test would show under each candidate.

use super::prospect::told_apart;
use super::shown::{low_pass, placed, seen_or_gone, unchanged};
use super::{Shown, Shows, What, is_recorder, of_tone};
use crate::candidates::{Candidate, Outlook, Who, chance_seen, is_free};
use crate::fold::Chain;
use crate::frontend::PreparedFrontEnd;
use crate::report::text::{hertz, plain};
use crate::sources::{Catalogue, Kind, LatentId, Source};
use crate::suspects::{Finding, Inference, Scene};
use crate::units::{TrueHz, U95};
use std::collections::BTreeSet;

/// An open tone made ready.
pub(super) struct Prepared {
    pub outlook: Outlook,
    /// Names of the candidates.
    pub names: Vec<String>,
    pub nu: f64,
    pub snr_db: f64,
    pub wander_hz: f64,
}

/// What all tests need to know.
pub(super) struct Bench<'a> {
    scene: &'a Scene<'a>,
    inference: &'a Inference,
    front: PreparedFrontEnd,
    /// Where the other tones truly are, as far as known, on the recorder's scale.
    others: Vec<(usize, f64)>,
    /// Relative error between the clocks of two recordings once the tones that are
    /// sure have been compared.
    clock_sd: f64,
    prepared: &'a [Prepared],
}

/// A changed speed: by this much, and how well it will be known.
const SPEED_PERCENT: f64 = 5.0;
const SPEED_KNOWN: f64 = 0.05;
/// A longer recording: this many times.
const LONGER: f64 = 4.0;
/// Share of tones that a test shows as foreseen; the rest is gone, or not known again.
const FORESEEN: f64 = 0.98;
/// The same for another recording, where the tone must be told from all others.
const KNOWN_AGAIN: f64 = 0.93;
/// Relative: two recordings minutes apart have clocks and steady sources alike to this.
const STEADY: f64 = 2e-6;
/// A source this improbable for every open tone is not worth touching.
const WORTH_TOUCHING: f64 = 0.02;

impl Prepared {
    pub fn new(scene: &Scene, finding: &Finding, outlook: Outlook) -> Self {
        let catalogue = &scene.site.catalogue;
        let names = outlook
            .candidates
            .iter()
            .map(|c| name(catalogue, c))
            .collect();
        let tone = scene.tones.get(finding.tone);
        Prepared {
            nu: tone.map_or(0.0, |t| t.seen_hz.0),
            snr_db: tone.map_or(20.0, |t| t.snr_db),
            wander_hz: tone.map_or(0.0, |t| t.wander_hz.max(0.0)),
            outlook,
            names,
        }
    }
}

fn name(catalogue: &Catalogue, c: &Candidate) -> String {
    match &c.who {
        Who::Listed { .. } => c.who.listed(catalogue).map_or(String::new(), |(s, l)| {
            format!("{} {}", plain(&s.name), plain(&l.label))
        }),
        Who::Parents { tones, label } => {
            let names: Vec<String> = tones.iter().map(|t| format!("tone {t}")).collect();
            format!("{} {label}", names.join(", "))
        }
        Who::Recorder { label } => format!("the recorder's {label}"),
        Who::Unlisted if c.zone == 1 => "something unlisted that is real there".into(),
        Who::Unlisted => format!("something unlisted at {} Hz", hertz(c.recorder_hz)),
    }
}

/// Latents of a source's lines.
fn latents(source: &Source) -> BTreeSet<usize> {
    source
        .lines
        .iter()
        .flat_map(|l| l.terms.iter().map(|t| t.0.0))
        .collect()
}

/// The latent that a person changes when changing a source's speed, and what follows it.
fn speed_latents(catalogue: &Catalogue, source: &Source) -> BTreeSet<usize> {
    let Some(own) = latents(source).into_iter().next_back() else {
        return BTreeSet::new();
    };
    let mut moved = BTreeSet::from([own]);
    for s in &catalogue.sources {
        let uses = latents(s);
        if s.kind == Kind::Motor && uses.contains(&own) {
            moved.extend(uses.into_iter().next_back());
        }
    }
    moved
}

/// What a source alone owns: latents that no source before it uses. What rides on it
/// stops with it.
fn owned(catalogue: &Catalogue, index: usize) -> BTreeSet<usize> {
    let before: BTreeSet<usize> = catalogue
        .sources
        .iter()
        .take(index)
        .flat_map(latents)
        .collect();
    catalogue
        .sources
        .get(index)
        .map(latents)
        .unwrap_or_default()
        .difference(&before)
        .copied()
        .collect()
}

impl<'a> Bench<'a> {
    pub fn new(scene: &'a Scene<'a>, inference: &'a Inference, prepared: &'a [Prepared]) -> Self {
        let clock = scene.site.recorder.assumed_clock_ppm() * 1e-6 / U95 * 2f64.sqrt();
        let mut precision = clock.max(1e-12).powi(-2);
        let mut others = Vec::new();
        for f in &inference.findings {
            let Some(tone) = scene.tones.get(f.tone) else {
                continue;
            };
            let best = f.suspects.first().filter(|s| s.probability >= 0.5);
            let at = best
                .and_then(|s| {
                    s.places
                        .iter()
                        .max_by(|a, b| a.probability.total_cmp(&b.probability))
                })
                .map_or(tone.seen_hz.0, |p| p.recorder_hz);
            others.push((f.tone, at));
            if best.is_some_and(|s| s.probability >= 0.9) && tone.wander_hz <= 0.0 {
                let sd = (tone.seen_hz_u95 / U95 / at.max(1e-9)).hypot(STEADY);
                precision += 0.5 * sd.powi(-2);
            }
        }
        Bench {
            scene,
            inference,
            front: scene.site.recorder.front_end.prepared(),
            others,
            clock_sd: precision.sqrt().recip(),
            prepared,
        }
    }

    /// Tests worth a look.
    pub fn possible(&self, rates_hz: &[f64]) -> Vec<What> {
        let own = self.scene.chain.file_rate_hz();
        let mut all: Vec<What> = rates_hz
            .iter()
            .filter(|r| (**r / own - 1.0).abs() > 1e-4)
            .map(|&r| What::Rate(r))
            .collect();
        if let Some(p) = self.prepared.first() {
            // Between where the tone is seen and the lowest place it could fold from.
            let corner = (p.nu * (own - p.nu).max(p.nu)).sqrt();
            if corner > 0.0 && self.scene.chain.rates_hz().len() == 1 {
                all.push(What::LowPass(two_digits(corner)));
            }
        }
        all.push(What::Longer(LONGER));
        let catalogue = &self.scene.site.catalogue;
        for (i, source) in catalogue.sources.iter().enumerate() {
            if !self.matters(i) {
                continue;
            }
            let source_name = source.name.clone();
            if matches!(source.kind, Kind::Shaft | Kind::Motor | Kind::Drive) {
                all.push(What::Speed {
                    source: source_name.clone(),
                    percent: SPEED_PERCENT,
                });
            }
            // The mains cannot be switched off, nor a bearing or gear without its shaft.
            if !matches!(source.kind, Kind::Mains | Kind::Gear | Kind::Bearing) {
                all.push(What::Off {
                    source: source_name.clone(),
                });
            }
            if self.prepared.iter().any(|p| p.wander_hz > 0.0)
                && source.lines.iter().any(|l| is_free(catalogue, l))
            {
                all.push(What::Reference {
                    source: source_name,
                });
            }
        }
        all
    }

    fn matters(&self, source: usize) -> bool {
        self.prepared.iter().any(|p| {
            p.outlook
                .candidates
                .iter()
                .filter(|c| matches!(c.who, Who::Listed { source: s, .. } if s == source))
                .map(|c| c.probability)
                .sum::<f64>()
                >= WORTH_TOUCHING
        })
    }

    fn index(&self, source: &str) -> Option<usize> {
        let all = &self.scene.site.catalogue.sources;
        all.iter().position(|s| s.name == source)
    }

    /// What a test shows of a tone under each of its candidates.
    pub fn show(&self, what: &What, p: &Prepared) -> Shown {
        match what {
            What::Rate(rate) => self.at_rate(*rate, p),
            What::LowPass(corner) => low_pass(*corner, p),
            What::Speed { source, percent } => self.speed(source, *percent, p),
            What::Off { source } => self.off(source, p),
            What::Longer(times) => self.longer(*times, p),
            What::Reference { source } => self.reference(source, p),
        }
    }

    /// The sampling chain with another rate of the file.
    fn chain_at(&self, rate_hz: f64) -> Option<Chain> {
        let mut stages: Vec<f64> = self.scene.chain.rates_hz().collect();
        stages.pop();
        stages.retain(|s| *s > rate_hz);
        stages.push(rate_hz);
        Chain::new(stages).ok()
    }

    fn at_rate(&self, rate_hz: f64, p: &Prepared) -> Shown {
        let Some(chain) = self.chain_at(rate_hz) else {
            return unchanged(p);
        };
        let own = self.scene.chain.converter_rate_hz();
        let cell = 1.0 / self.scene.duration_s.max(1e-9);
        let covering: Vec<f64> = self
            .others
            .iter()
            .filter(|o| o.0 != p.outlook.tone && of_tone(self.prepared, o.0).is_none())
            .map(|o| chain.see(TrueHz(o.1)).seen.0)
            .collect();
        let seen: Vec<(f64, f64)> = p
            .outlook
            .candidates
            .iter()
            .map(|c| {
                let hz = if is_recorder(&c.who) {
                    c.recorder_hz * rate_hz / self.scene.chain.file_rate_hz()
                } else {
                    chain.see(TrueHz(c.recorder_hz)).seen.0
                };
                let moved = c.recorder_hz * self.clock_sd.hypot(STEADY);
                let sd = (2.0 * p.outlook.var).sqrt().hypot(moved);
                (hz, sd.hypot(0.5 * p.wander_hz).max(0.3 * cell))
            })
            .collect();
        let numbers = told_apart(&seen);
        let gone = numbers.iter().max().map_or(0, |n| n + 1);
        let mut shows = vec![Shows::Gone; gone + 1];
        let mut best = vec![-1.0; gone + 1];
        let outcomes = p
            .outlook
            .candidates
            .iter()
            .zip(&seen)
            .zip(&numbers)
            .map(|((c, &(hz, sd)), &n)| {
                if let (Some(b), Some(s)) = (best.get_mut(n), shows.get_mut(n))
                    && c.probability > *b
                {
                    *b = c.probability;
                    let same = (hz - p.nu).abs() < 2.5 * sd;
                    *s = if same { Shows::Same } else { Shows::At(hz) };
                }
                let covered = covering
                    .iter()
                    .any(|o| (o - hz).abs() < (2.5 * sd).max(1.5 * cell));
                let f = TrueHz(c.recorder_hz);
                let (from, to) = (
                    self.front.gain(f, own),
                    self.front.gain(f, chain.converter_rate_hz()),
                );
                let found = KNOWN_AGAIN * chance_seen(p.snr_db, from, to);
                seen_or_gone(if covered { 1.0 } else { 1.0 - found }, n, gone)
            })
            .collect();
        Shown { outcomes, shows }
    }

    fn speed(&self, source: &str, percent: f64, p: &Prepared) -> Shown {
        let catalogue = &self.scene.site.catalogue;
        let Some(index) = self.index(source) else {
            return unchanged(p);
        };
        let moved = catalogue
            .sources
            .get(index)
            .map(|s| speed_latents(catalogue, s))
            .unwrap_or_default();
        let seen: Vec<(f64, f64)> = p
            .outlook
            .candidates
            .iter()
            .map(|c| {
                let by: f64 = c.who.listed(catalogue).map_or(0.0, |(_, line)| {
                    line.terms
                        .iter()
                        .filter(|t| moved.contains(&t.0.0))
                        .map(|&(LatentId(l), a)| {
                            let nominal = catalogue.latents.get(l).map_or(0.0, |l| l.nominal_hz);
                            a * nominal * percent / 100.0
                        })
                        .sum()
                });
                if by == 0.0 {
                    return (p.nu, p.outlook.var.sqrt().hypot(p.wander_hz));
                }
                let hz = self
                    .scene
                    .chain
                    .see(TrueHz((c.recorder_hz + by).abs()))
                    .seen
                    .0;
                (hz, (SPEED_KNOWN * by).abs().hypot(p.outlook.var.sqrt()))
            })
            .collect();
        placed(p, &seen, FORESEEN)
    }

    fn off(&self, source: &str, p: &Prepared) -> Shown {
        let catalogue = &self.scene.site.catalogue;
        let Some(index) = self.index(source) else {
            return unchanged(p);
        };
        let stopped = owned(catalogue, index);
        let outcomes = p
            .outlook
            .candidates
            .iter()
            .map(|c| {
                let its = c.who.listed(catalogue).is_some_and(|(_, line)| {
                    matches!(c.who, Who::Listed { source: s, .. } if s == index)
                        || line.terms.iter().any(|t| stopped.contains(&t.0.0))
                });
                seen_or_gone(1.0 - FORESEEN, usize::from(its), usize::from(!its))
            })
            .collect();
        Shown {
            outcomes,
            shows: vec![Shows::Same, Shows::Gone],
        }
    }

    /// A longer recording narrows where the tone is and where its source says it
    /// should be: one that is only near by chance then strays.
    fn longer(&self, times: f64, p: &Prepared) -> Shown {
        let catalogue = &self.scene.site.catalogue;
        let sharper = if p.wander_hz > 0.0 {
            times.sqrt()
        } else {
            times.powf(1.5)
        };
        let clock = self.inference.clock.ppm_u95 * 1e-6;
        let narrowing = |c: &Candidate| -> f64 {
            let Some((_, line)) = c.who.listed(catalogue) else {
                return 1.0;
            };
            let Who::Listed { source, .. } = c.who else {
                return 1.0;
            };
            let Some(fit) = self.inference.fits.iter().find(|f| f.source == source) else {
                return 1.0;
            };
            let var: f64 = line
                .terms
                .iter()
                .map(|&(LatentId(l), a)| {
                    let latent = catalogue.latents.get(l);
                    let name = latent.map_or("", |l| l.name.as_str());
                    let fitted = fit.latents.iter().find(|x| x.0 == name);
                    let (hz, u95) = fitted.map_or((0.0, f64::INFINITY), |x| (x.1, x.2));
                    // A clock error moves source and tone alike.
                    let own = (u95 * u95 - (hz * clock).powi(2)).max(0.0);
                    a * a * own / (U95 * U95)
                })
                .sum();
            let prior = catalogue.prior_sd_hz(line).powi(2);
            let now = p.outlook.var + var;
            // Known only from its listing: nothing more to be learned.
            if var > 0.25 * prior {
                return 1.0;
            }
            let then = now / (sharper * sharper) + (line.extra_rel_sd * c.recorder_hz).powi(2);
            (then / now).sqrt().min(1.0)
        };
        let ratios: Vec<f64> = p.outlook.candidates.iter().map(narrowing).collect();
        // What one listed line predicts another may predict as well: only chance
        // neighbours are told from them.
        let chance = ratios.iter().copied().fold(1.0, f64::min);
        let outcomes = ratios
            .iter()
            .map(|r| {
                if *r < 1.0 {
                    vec![(0, 1.0)]
                } else {
                    vec![(0, chance), (1, 1.0 - chance)]
                }
            })
            .collect();
        Shown {
            outcomes,
            shows: vec![Shows::Fits, Shows::Strays],
        }
    }

    /// The slope of the tone's wander against a log of the source's own frequency.
    fn reference(&self, source: &str, p: &Prepared) -> Shown {
        let catalogue = &self.scene.site.catalogue;
        let (Some(index), true) = (self.index(source), p.wander_hz > 0.0) else {
            return unchanged(p);
        };
        let speed = catalogue
            .sources
            .get(index)
            .and_then(|s| latents(s).into_iter().next_back());
        let blur = (3.0 * p.outlook.var.sqrt() / p.wander_hz).clamp(0.03, 1.0);
        let seen: Vec<(f64, f64)> = p
            .outlook
            .candidates
            .iter()
            .map(|c| {
                let slope: f64 = c.who.listed(catalogue).map_or(0.0, |(_, line)| {
                    line.terms
                        .iter()
                        .filter(|t| Some(t.0.0) == speed)
                        .map(|t| t.1)
                        .sum::<f64>()
                        * c.sense.sign()
                });
                (slope, (blur * slope).abs().max(blur))
            })
            .collect();
        let numbers = told_apart(&seen);
        let count = numbers.iter().max().map_or(0, |n| n + 1);
        let mut shows = vec![Shows::Same; count];
        for (n, s) in numbers.iter().zip(&seen) {
            if let Some(show) = shows.get_mut(*n)
                && s.0 != 0.0
            {
                *show = Shows::Follows(s.0);
            }
        }
        Shown {
            outcomes: numbers.into_iter().map(|n| vec![(n, 1.0)]).collect(),
            shows,
        }
    }
}

/// A corner as one would order it.
fn two_digits(hz: f64) -> f64 {
    format!("{hz:.1e}").parse().unwrap_or(hz)
}
