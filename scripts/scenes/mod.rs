//! Simulated scenes for tests and for the calibration report: what a recording
//! would have shown, tone by tone, with the truth of each.
//!
//! Shared by the integration tests and `scripts/calibration.rs`. Everything that a
//! scene's statistics hang on (how levels fall, how much is missing, how far things
//! wander, what filter there is) is itself drawn anew for each scene, so that
//! nothing can be tuned to one way of making them.
#![allow(dead_code)] // each user takes what it needs

use foldtrace::fold::Chain;
use foldtrace::frontend::{AntiAlias, Family, FrontEnd};
use foldtrace::sources::{LatentId, Site, Source};
use foldtrace::tones::{ChannelLevel, Tone};
use foldtrace::units::{SeenHz, TrueHz, U95};
use rand::rngs::StdRng;
use rand::{RngExt, SeedableRng};
use rand_distr::{Distribution, Normal, Poisson};
use std::fmt::Write;

/// Who truly made a tone.
#[derive(Debug, Clone, PartialEq)]
pub struct Truth {
    /// Name of the source; `None` for one that is not listed.
    pub source: Option<String>,
    /// What kind it is, listed or not.
    pub kind: &'static str,
    pub line: String,
    pub true_hz: f64,
    pub zone: u64,
}

/// A scene: what is known, what was seen, and what is true.
pub struct Simulated {
    pub site: Site,
    pub site_toml: String,
    pub chain: Chain,
    pub rate_hz: f64,
    pub duration_s: f64,
    pub tones: Vec<Tone>,
    pub truth: Vec<Truth>,
    pub clock_ppm: f64,
    /// A filter stands before the converter; it is described.
    pub filter: (bool, bool),
}

/// A source of the scene before it is listed.
struct Plan {
    name: String,
    kind: &'static str,
    toml: String,
    /// Relative wander of each latent.
    wander: Vec<f64>,
    /// Deviation of each latent from its listed value, in standard deviations.
    deviation: Vec<f64>,
    present: bool,
    listed: bool,
}

fn normal(rng: &mut StdRng, sd: f64) -> f64 {
    Normal::new(0.0, sd).map_or(0.0, |n| n.sample(rng))
}

fn log_uniform(rng: &mut StdRng, low: f64, high: f64) -> f64 {
    (rng.random_range(low.ln()..high.ln())).exp()
}

fn plans(rng: &mut StdRng) -> Vec<Plan> {
    let mut plans = Vec::new();
    let listed_share = rng.random_range(0.7..1.0);
    let mut add = |rng: &mut StdRng, name: &str, kind, toml: String, wander: Vec<f64>| {
        let deviation = wander.iter().map(|_| normal(rng, 1.0)).collect();
        plans.push(Plan {
            name: name.to_owned(),
            kind,
            toml,
            wander,
            deviation,
            present: rng.random_bool(0.5),
            listed: rng.random_bool(listed_share),
        });
    };
    let steady = |rng: &mut StdRng, low, high| {
        if rng.random_bool(0.3) {
            0.0
        } else {
            log_uniform(rng, low, high)
        }
    };
    let hz = if rng.random_bool(0.6) { 50 } else { 60 };
    let w = steady(rng, 3e-5, 6e-4);
    add(
        rng,
        "supply mains",
        "mains",
        format!("hz = {hz}.0\ntolerance = \"1 %\"\norders = 80\n"),
        vec![w],
    );
    for name in ["pump shaft", "fan shaft"] {
        let rpm = rng.random_range(500.0..3600.0_f64).round();
        let vanes = rng.random_range(3..13);
        let tolerance = [1.0, 2.0, 3.0, 5.0][rng.random_range(0..4)];
        let w = steady(rng, 1e-4, 1e-2);
        add(
            rng,
            name,
            "shaft",
            format!(
                "rpm = {rpm:.0}\ntolerance = \"{tolerance} %\"\norders = 10\nvanes = {vanes}\n"
            ),
            vec![w],
        );
    }
    let hz = log_uniform(rng, 8e3, 2e6).round();
    add(
        rng,
        "logic clock",
        "clock",
        format!("hz = {hz:.0}.0\ntolerance = \"100 ppm\"\norders = 10\n"),
        vec![0.0],
    );
    let hz = log_uniform(rng, 2e4, 5e5).round();
    let w = steady(rng, 1e-6, 1e-3);
    add(
        rng,
        "power converter",
        "clock",
        format!("hz = {hz:.0}.0\ntolerance = \"3 %\"\norders = 8\n"),
        vec![w],
    );
    let carrier = (log_uniform(rng, 2e3, 16e3) / 100.0).round() * 100.0;
    let output = rng.random_range(15.0..65.0_f64);
    let ct = [0.5, 1.0, 3.0][rng.random_range(0..3)];
    let (wc, wo) = (steady(rng, 1e-7, 1e-4), steady(rng, 1e-5, 3e-3));
    let orders = rng.random_range(2..9);
    add(
        rng,
        "lift drive",
        "drive",
        format!(
            "carrier_hz = {carrier:.1}\ncarrier_tolerance = \"{ct} %\"\noutput_hz = {output:.2}\noutput_tolerance = \"5 %\"\norders = {orders}\n"
        ),
        vec![wc, wo],
    );
    plans
}

/// How one source's lines come out, drawn per source.
struct Spectrum {
    strongest_dbfs: f64,
    slope: f64,
    jitter_db: f64,
    holes: f64,
    /// Extra attenuation of even multiples, dB.
    even_db: f64,
}

struct Partial {
    truth: Truth,
    /// `(latent, multiplier)`, indices into [`Raw::latents`].
    terms: Vec<(usize, f64)>,
    seen_hz: f64,
    level_dbfs: f64,
    wander_hz: f64,
}

/// A scene's lines before anything has looked at them.
struct Raw {
    seen: Simulated,
    partials: Vec<Partial>,
    /// `(Hz, relative wander)`.
    latents: Vec<(f64, f64)>,
    noise_dbfs: f64,
    epsilon: f64,
    /// The analog path as it is, described or not.
    front: foldtrace::frontend::PreparedFrontEnd,
}

/// Draws a scene, seen as a detector at the Cramér–Rao bound would see it.
pub fn simulate(seed: u64) -> Simulated {
    let mut rng = StdRng::seed_from_u64(seed);
    let raw = draw(&mut rng);
    let mut seen = raw.seen;
    let cell = 1.0 / seen.duration_s;
    let half = seen.rate_hz / 2.0;
    let noise_cell_dbfs = raw.noise_dbfs - 10.0 * (half / cell).log10();
    (seen.tones, seen.truth) = observe(raw.partials, cell, half, noise_cell_dbfs, &mut rng);
    seen
}

/// A scene seen once more: at which rate, what was seen, and what is true.
pub type Again = (Chain, Vec<Tone>, Vec<Truth>);

/// The same scene seen at its own rate and, by the same recorder a little later, at
/// each of the rates that `again` names once it has seen the first.
pub fn simulate_again(
    seed: u64,
    again: impl FnOnce(&Simulated) -> Vec<f64>,
) -> (Simulated, Vec<Again>) {
    let mut rng = StdRng::seed_from_u64(seed);
    let raw = draw(&mut rng);
    let (noise_dbfs, epsilon, front) = (raw.noise_dbfs, raw.epsilon, raw.front);
    let mut seen = raw.seen;
    let cell = 1.0 / seen.duration_s;
    let levels: Vec<f64> = raw
        .partials
        .iter()
        .map(|p| p.level_dbfs - front.gain(TrueHz(p.truth.true_hz), seen.rate_hz).mean_db)
        .collect();
    let lines: Vec<Partial> = raw.partials.iter().map(Partial::copy).collect();
    let noise = |rate_hz: f64| noise_dbfs - 10.0 * (rate_hz / 2.0 / cell).log10();
    let half = seen.rate_hz / 2.0;
    let own = noise(seen.rate_hz);
    (seen.tones, seen.truth) = observe(raw.partials, cell, half, own, &mut rng);
    let others = again(&seen)
        .into_iter()
        .map(|rate_hz| {
            let chain = Chain::single(rate_hz).expect("a rate above 0");
            let partials = lines
                .iter()
                .zip(&levels)
                .map(|(p, level)| {
                    let mut p = p.copy();
                    let shown = chain.see_with_clock(TrueHz(p.truth.true_hz), epsilon);
                    (p.seen_hz, p.truth.zone) = (shown.seen.0, shown.zone);
                    p.level_dbfs = level + front.gain(TrueHz(p.truth.true_hz), rate_hz).mean_db;
                    p
                })
                .collect();
            let (tones, truth) = observe(partials, cell, rate_hz / 2.0, noise(rate_hz), &mut rng);
            (chain, tones, truth)
        })
        .collect();
    (seen, others)
}

impl Partial {
    fn copy(&self) -> Partial {
        Partial {
            truth: self.truth.clone(),
            terms: self.terms.clone(),
            ..*self
        }
    }
}

/// Draws a scene, evaluates its lines at the true sample instants, adds noise and
/// has the program's own detector find the tones. `None` where that would be more
/// than `most` samples a minute.
pub fn record(seed: u64, most: f64) -> Option<Simulated> {
    let mut rng = StdRng::seed_from_u64(seed);
    let raw = draw(&mut rng);
    let mut seen = raw.seen;
    if seen.rate_hz * 60.0 > most {
        return None;
    }
    seen.duration_s = seen.duration_s.min(most / seen.rate_hz);
    let frames = (seen.duration_s * seen.rate_hz).floor() as usize;
    let true_rate = seen.rate_hz * (1.0 + raw.epsilon);
    // Turns of each latent at each sample: a smooth random walk about its mean.
    let turns: Vec<Vec<f64>> = raw
        .latents
        .iter()
        .map(|&(hz, wander)| {
            let memory = (-1.0 / (log_uniform(&mut rng, 1.0, 20.0) * true_rate)).exp();
            let (mut state, mut smooth, mut phase) = (normal(&mut rng, 1.0), 0.0, 0.0);
            (0..frames)
                .map(|_| {
                    let now = phase;
                    if wander > 0.0 {
                        state = memory * state + normal(&mut rng, (1.0 - memory * memory).sqrt());
                        smooth += (state - smooth) * (1.0 - memory) * 4.0;
                    }
                    phase += hz * (1.0 + wander * smooth) / true_rate;
                    now
                })
                .collect()
        })
        .collect();
    let sigma = 10f64.powf(raw.noise_dbfs / 20.0) / 2f64.sqrt();
    let mut samples: Vec<f64> = (0..frames).map(|_| normal(&mut rng, sigma)).collect();
    for p in &raw.partials {
        let amplitude = 10f64.powf(p.level_dbfs / 20.0);
        if amplitude < 0.01 * sigma / (frames as f64).sqrt() {
            continue;
        }
        let start: f64 = rng.random();
        for (n, x) in samples.iter_mut().enumerate() {
            let turns: f64 = p.terms.iter().map(|&(l, a)| a * turns[l][n]).sum();
            *x += amplitude * (std::f64::consts::TAU * (turns + start).fract()).cos();
        }
    }
    let recording = foldtrace::spectrum::samples::InMemory {
        rate_hz: seen.rate_hz,
        channels: vec![samples.iter().map(|x| *x as f32).collect()],
    };
    let search = foldtrace::tones::Search::default();
    let set = foldtrace::tones::find(&recording, &search, &|_, _| ()).expect("samples in memory");
    seen.truth = set
        .tones
        .iter()
        .map(|t| {
            // The strongest line about there.
            let reach = (2.0 * set.cell_hz)
                .max(3.0 * t.seen_hz_u95)
                .max(4.0 * t.wander_hz);
            raw.partials
                .iter()
                .filter(|p| (p.seen_hz - t.seen_hz.0).abs() < reach)
                .max_by(|a, b| a.level_dbfs.total_cmp(&b.level_dbfs))
                .map_or(
                    Truth {
                        source: None,
                        kind: "noise",
                        line: String::new(),
                        true_hz: t.seen_hz.0,
                        zone: 1,
                    },
                    |p| p.truth.clone(),
                )
        })
        .collect();
    seen.tones = set.tones;
    Some(seen)
}

fn draw(rng: &mut StdRng) -> Raw {
    const RATES: [f64; 16] = [
        25.0, 50.0, 100.0, 128.0, 250.0, 500.0, 800.0, 1000.0, 1600.0, 2000.0, 4000.0, 6400.0,
        8000.0, 16000.0, 22050.0, 44100.0,
    ];
    let rate_hz = RATES[rng.random_range(0..RATES.len())];
    let duration_s = log_uniform(rng, 60.0, 600.0);
    let chain = Chain::single(rate_hz).expect("a rate above 0");
    let clock_ppm = normal(rng, 40.0);
    let epsilon = clock_ppm * 1e-6;
    let half = rate_hz / 2.0;

    let has_filter = rng.random_bool(0.5);
    let filter = AntiAlias {
        family: Family::Butterworth,
        order: rng.random_range(1..9),
        corner_hz: rate_hz * rng.random_range(0.25..0.5),
    };
    let described = has_filter && rng.random_bool(0.6);
    let bandwidth_hz = log_uniform(rng, 5e4, 2e6);
    let true_front = FrontEnd {
        bandwidth_hz: Some(bandwidth_hz),
        // "Described as none": an aperture of zero and a corner out of the way.
        antialias: Some(if has_filter {
            filter
        } else {
            AntiAlias {
                corner_hz: 1e9,
                order: 1,
                ..filter
            }
        }),
        aperture_s: Some(0.0),
    }
    .prepared();

    let plans = plans(rng);
    let mut toml = String::from("[recorder]\n");
    if rng.random_bool(0.7) {
        toml.push_str("clock_ppm = 100\n");
    }
    if rng.random_bool(0.5) {
        let _ = writeln!(toml, "bandwidth_hz = {bandwidth_hz:.1}");
    }
    if described {
        let _ = writeln!(
            toml,
            "antialias = {{ family = \"butterworth\", order = {}, corner_hz = {} }}\naperture_s = 0.0",
            filter.order, filter.corner_hz
        );
    }
    let head = toml.clone();
    let entry = |p: &Plan| {
        format!(
            "\n[[source]]\nname = \"{}\"\nkind = \"{}\"\n{}",
            p.name, p.kind, p.toml
        )
    };
    for p in plans.iter().filter(|p| p.listed) {
        toml.push_str(&entry(p));
    }
    let none_listed = !plans.iter().any(|p| p.listed);
    if none_listed {
        toml.push_str(
            "\n[[source]]\nname = \"spare\"\nkind = \"tone\"\nhz = 1234.5\ntolerance = \"1 Hz\"\n",
        );
    }
    let site = Site::from_toml(&toml).expect("a valid site");

    let noise_dbfs = rng.random_range(-80.0..-45.0_f64);
    let mut all_latents: Vec<(f64, f64)> = Vec::new();
    let mut partials: Vec<Partial> = Vec::new();
    for p in plans.iter().filter(|p| p.present) {
        let whole = Site::from_toml(&format!("{head}{}", entry(p))).expect("a valid source");
        let Some(source) = whole.catalogue.sources.first() else {
            continue;
        };
        let latents: Vec<f64> = whole
            .catalogue
            .latents
            .iter()
            .zip(&p.deviation)
            .map(|(l, d)| l.nominal_hz + l.sd_hz * d.clamp(-2.5, 2.5))
            .collect();
        let spectrum = Spectrum {
            strongest_dbfs: rng.random_range(-60.0..-8.0),
            slope: rng.random_range(0.8..3.0),
            jitter_db: rng.random_range(2.0..8.0),
            holes: rng.random_range(0.0..0.3),
            even_db: rng.random_range(0.0..20.0),
        };
        partials.extend(lines_of(
            source,
            p,
            &latents,
            all_latents.len(),
            &spectrum,
            &true_front,
            &chain,
            epsilon,
            rng,
        ));
        all_latents.extend(latents.iter().copied().zip(p.wander.iter().copied()));
    }
    for _ in 0..rng.random_range(0..4) {
        let folded = rng.random_bool(0.5);
        let f = if folded {
            half * log_uniform(rng, 1.0, 40.0)
        } else {
            half * rng.random_range(0.005..1.0)
        };
        let seen = chain.see_with_clock(TrueHz(f), epsilon);
        let wander = if rng.random_bool(0.5) {
            0.0
        } else {
            f * log_uniform(rng, 1e-6, 1e-3)
        };
        partials.push(Partial {
            truth: Truth {
                source: None,
                kind: "stray",
                line: String::new(),
                true_hz: f,
                zone: seen.zone,
            },
            terms: vec![(all_latents.len(), 1.0)],
            seen_hz: seen.seen.0,
            level_dbfs: rng.random_range(-70.0..-10.0)
                + true_front.gain(TrueHz(f), rate_hz).mean_db,
            wander_hz: wander,
        });
        all_latents.push((f, wander / f));
    }
    Raw {
        seen: Simulated {
            site,
            site_toml: toml,
            chain,
            rate_hz,
            duration_s,
            tones: Vec::new(),
            truth: Vec::new(),
            clock_ppm,
            filter: (has_filter, described),
        },
        partials,
        latents: all_latents,
        noise_dbfs,
        epsilon,
        front: true_front,
    }
}

#[allow(clippy::too_many_arguments)]
fn lines_of(
    source: &Source,
    plan: &Plan,
    latents: &[f64],
    first_latent: usize,
    spectrum: &Spectrum,
    front: &foldtrace::frontend::PreparedFrontEnd,
    chain: &Chain,
    epsilon: f64,
    rng: &mut StdRng,
) -> Vec<Partial> {
    source
        .lines
        .iter()
        .filter_map(|line| {
            let f: f64 = line
                .terms
                .iter()
                .map(|&(LatentId(l), a)| a * latents[l])
                .sum();
            let f = f.abs();
            let wander = line
                .terms
                .iter()
                .map(|&(LatentId(l), a)| (a * latents[l] * plan.wander[l]).powi(2))
                .sum::<f64>()
                .sqrt();
            if rng.random_bool(spectrum.holes) {
                return None;
            }
            let even = plan.kind != "drive" && line.terms.iter().all(|t| t.1 % 2.0 == 0.0);
            let level_dbfs = spectrum.strongest_dbfs + spectrum.slope * 20.0 * line.weight.log10()
                - if even { spectrum.even_db } else { 0.0 }
                + normal(rng, spectrum.jitter_db)
                + front.gain(TrueHz(f), chain.file_rate_hz()).mean_db;
            let seen = chain.see_with_clock(TrueHz(f), epsilon);
            Some(Partial {
                truth: Truth {
                    source: plan.listed.then(|| plan.name.clone()),
                    kind: plan.kind,
                    line: line.label.clone(),
                    true_hz: f,
                    zone: seen.zone,
                },
                terms: line
                    .terms
                    .iter()
                    .map(|&(LatentId(l), a)| (first_latent + l, a))
                    .collect(),
                seen_hz: seen.seen.0,
                level_dbfs,
                wander_hz: wander,
            })
        })
        .collect()
}

/// What a detector would have made of the lines.
fn observe(
    mut partials: Vec<Partial>,
    cell: f64,
    half: f64,
    noise_cell_dbfs: f64,
    rng: &mut StdRng,
) -> (Vec<Tone>, Vec<Truth>) {
    let mean_error = rng.random_range(0.0..0.04);
    let honesty = rng.random_range(0.85..1.2);
    partials.sort_by(|a, b| b.level_dbfs.total_cmp(&a.level_dbfs));
    let mut found: Vec<(Tone, Truth)> = Vec::new();
    let mut taken: Vec<(f64, f64)> = Vec::new();
    let false_alarms = Poisson::new(0.03).map_or(0.0, |p| p.sample(rng)) as usize;
    for _ in 0..false_alarms {
        let nu = rng.random_range(0.0..half);
        partials.push(Partial {
            truth: Truth {
                source: None,
                kind: "noise",
                line: String::new(),
                true_hz: nu,
                zone: 1,
            },
            terms: Vec::new(),
            seen_hz: nu,
            level_dbfs: noise_cell_dbfs + 13.5,
            wander_hz: 0.0,
        });
    }
    for p in partials {
        let snr_db = p.level_dbfs - noise_cell_dbfs;
        let cells = 1.0 + 4.0 * p.wander_hz / cell;
        let threshold = 12.5 + 5.0 * cells.log10() + normal(rng, 0.5);
        if snr_db < threshold || p.wander_hz > 0.1 * half {
            continue;
        }
        let width = (1.2 * cell).max(2.5 * p.wander_hz);
        if taken
            .iter()
            .any(|&(nu, w)| (nu - p.seen_hz).abs() < w.max(width))
            || p.seen_hz < 1.5 * cell
            || p.seen_hz > half - 1.5 * cell
        {
            // Merged into the stronger one, or lost at the edge of the band.
            continue;
        }
        taken.push((p.seen_hz, width));
        // Cramér–Rao bound with `snr` in one cell: sd = √3/(2π·T·√snr).
        let crlb = 3f64.sqrt() / std::f64::consts::TAU * cell / 10f64.powf(snr_db / 20.0);
        let sd = crlb.max(3e-4 * cell) * cells.powf(1.0);
        let visible = p.wander_hz > 0.4 * cell;
        let error = normal(rng, sd) + normal(rng, mean_error * p.wander_hz);
        let seen = (p.seen_hz + error).abs();
        let seen = if seen > half { 2.0 * half - seen } else { seen };
        let measured = p.wander_hz * (1.0 + normal(rng, 0.12)).max(0.3);
        found.push((
            Tone {
                number: 0,
                seen_hz: SeenHz(seen),
                seen_hz_u95: U95 * sd * honesty,
                level_dbfs: p.level_dbfs,
                snr_db: snr_db + normal(rng, 0.3),
                from_s: 0.0,
                to_s: 1.0 / cell,
                duty: 1.0,
                wander_hz: if visible { measured } else { 0.0 },
                channels: vec![ChannelLevel {
                    channel: 0,
                    level_dbfs: p.level_dbfs,
                    snr_db,
                }],
                ..Tone::default()
            },
            p.truth,
        ));
    }
    found.sort_by(|a, b| a.0.seen_hz.0.total_cmp(&b.0.seen_hz.0));
    for (i, f) in found.iter_mut().enumerate() {
        f.0.number = i + 1;
    }
    found.into_iter().unzip()
}
