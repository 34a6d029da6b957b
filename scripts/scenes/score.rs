//! Scores inferences against the truth of simulated scenes.
#![allow(dead_code)]

use super::scenes::{Simulated, Truth};
use foldtrace::suspects::{Cause, Finding, Scene, infer};
use std::collections::BTreeMap;
use std::fmt::Write;

/// Probabilities are not believed to be smaller than this in the log loss.
const LEAST: f64 = 1e-6;

/// One tone's outcome.
#[derive(Debug, Clone)]
struct Outcome {
    kind: &'static str,
    listed: bool,
    folded: bool,
    top_right: bool,
    zone_right: bool,
    ln_truth: f64,
    folded_probability: f64,
    /// `(probability, right)` of every name given.
    claims: Vec<(f64, bool)>,
}

#[derive(Debug, Clone, Default)]
pub struct Scores(Vec<Outcome>);

/// Figures over a set of tones.
#[derive(Debug, Clone, Copy, Default)]
pub struct Figures {
    pub tones: usize,
    pub top: f64,
    pub zone: f64,
    pub log_loss: f64,
    pub ece_suspect: f64,
    pub ece_folded: f64,
    pub side: f64,
}

fn name_of(cause: &Cause) -> String {
    match cause {
        Cause::Source { name, .. } => name.clone(),
        Cause::Parents(numbers) => format!("tone {numbers:?}"),
        Cause::Recorder => "recorder".to_owned(),
    }
}

/// Probability by name, `None` being unlisted.
fn by_name(finding: &Finding) -> BTreeMap<Option<String>, f64> {
    let mut names: BTreeMap<Option<String>, f64> = BTreeMap::new();
    for s in &finding.suspects {
        *names.entry(Some(name_of(&s.cause))).or_default() += s.probability;
    }
    names.insert(None, finding.unlisted_direct + finding.unlisted_folded);
    names
}

fn judge(finding: &Finding, truth: &Truth) -> Outcome {
    let names = by_name(finding);
    let p = names.get(&truth.source).copied().unwrap_or(0.0);
    let unlisted = finding.unlisted_direct + finding.unlisted_folded;
    // The top row of the suspect list: single suspects against `unlisted`.
    let top = finding
        .suspects
        .first()
        .filter(|s| s.probability > unlisted);
    let top_name = top.map(|s| name_of(&s.cause));
    Outcome {
        kind: truth.kind,
        listed: truth.source.is_some(),
        folded: truth.zone > 1,
        top_right: top_name == truth.source,
        zone_right: top.is_some_and(|s| s.zone == truth.zone),
        ln_truth: p.max(LEAST).ln(),
        folded_probability: finding.folded_probability,
        claims: names
            .iter()
            .map(|(name, p)| (*p, *name == truth.source))
            .collect(),
    }
}

/// Expected calibration error: ten bins, mean |claimed − right| by weight.
fn ece(claims: impl Iterator<Item = (f64, bool)>) -> (f64, Vec<(usize, f64, f64)>) {
    let mut bins = vec![(0usize, 0.0, 0.0); 10];
    for (p, right) in claims {
        let bin = &mut bins[((p * 10.0) as usize).min(9)];
        bin.0 += 1;
        bin.1 += p;
        bin.2 += f64::from(u8::from(right));
    }
    let n: usize = bins.iter().map(|b| b.0).sum();
    let error = bins.iter().map(|b| (b.1 - b.2).abs()).sum::<f64>() / n.max(1) as f64;
    let table = bins
        .iter()
        .map(|b| (b.0, b.1 / b.0.max(1) as f64, b.2 / b.0.max(1) as f64))
        .collect();
    (error, table)
}

impl Scores {
    pub fn add(&mut self, seed: u64, s: &Simulated, verbose: bool) {
        let inference = infer(&Scene {
            tones: &s.tones,
            site: &s.site,
            chain: &s.chain,
            duration_s: s.duration_s,
            full_scale_known: true,
            evidence: None,
        });
        for (finding, truth) in inference.findings.iter().zip(&s.truth) {
            let outcome = judge(finding, truth);
            if verbose
                && (outcome.ln_truth < -1.0
                    || (outcome.listed && !outcome.zone_right)
                    || (outcome.folded_probability - f64::from(u8::from(outcome.folded))).abs()
                        > 0.5)
            {
                let tone = &s.tones[finding.tone];
                let names: Vec<String> = finding
                    .suspects
                    .iter()
                    .take(2)
                    .map(|x| {
                        format!(
                            "{} {} z{} {:.3} c{:.1e}",
                            name_of(&x.cause),
                            x.line,
                            x.zone,
                            x.probability,
                            x.coincidence
                        )
                    })
                    .collect();
                println!(
                    "seed {seed} rate {} T {:.0} filt {:?} tones {} | {:.4} Hz ±{:.1e} snr {:.0} w {:.1e} | truth {} {} {} z{} | {:.3} | {} | unl {:.3}",
                    s.rate_hz,
                    s.duration_s,
                    s.filter,
                    s.tones.len(),
                    tone.seen_hz.0,
                    tone.seen_hz_u95,
                    tone.snr_db,
                    tone.wander_hz,
                    truth.source.is_some(),
                    truth.kind,
                    truth.line,
                    truth.zone,
                    outcome.ln_truth.exp(),
                    names.join("; "),
                    finding.unlisted_direct + finding.unlisted_folded
                );
            }
            self.0.push(outcome);
        }
    }

    fn figures(&self, keep: impl Fn(&Outcome) -> bool) -> Figures {
        let kept: Vec<&Outcome> = self.0.iter().filter(|o| keep(o)).collect();
        let n = kept.len().max(1) as f64;
        let share = |f: &dyn Fn(&Outcome) -> bool| kept.iter().filter(|o| f(o)).count() as f64 / n;
        let listed = kept.iter().filter(|o| o.listed).count().max(1) as f64;
        Figures {
            tones: kept.len(),
            top: share(&|o| o.top_right),
            zone: kept.iter().filter(|o| o.listed && o.zone_right).count() as f64 / listed,
            log_loss: -kept.iter().map(|o| o.ln_truth).sum::<f64>() / n,
            ece_suspect: ece(kept
                .iter()
                .flat_map(|o| o.claims.iter().copied())
                .filter(|c| c.0 > 0.005))
            .0,
            ece_folded: ece(kept.iter().map(|o| (o.folded_probability, o.folded))).0,
            side: share(&|o| (o.folded_probability > 0.5) == o.folded),
        }
    }

    pub fn overall(&self) -> Figures {
        self.figures(|_| true)
    }

    pub fn folded(&self) -> Figures {
        self.figures(|o| o.folded)
    }

    pub fn report(&self) -> String {
        let mut out = String::new();
        let _ = writeln!(
            out,
            "{:<22}{:>7}{:>8}{:>8}{:>10}{:>9}{:>9}{:>8}",
            "", "tones", "top", "zone", "log loss", "ECE sus", "ECE fold", "side"
        );
        let mut line = |name: &str, f: Figures| {
            let _ = writeln!(
                out,
                "{name:<22}{:>7}{:>8.4}{:>8.4}{:>10.4}{:>9.4}{:>9.4}{:>8.4}",
                f.tones, f.top, f.zone, f.log_loss, f.ece_suspect, f.ece_folded, f.side
            );
        };
        line("all", self.overall());
        line("truly folded", self.folded());
        line("truly direct", self.figures(|o| !o.folded));
        line("listed", self.figures(|o| o.listed));
        line("not listed", self.figures(|o| !o.listed));
        for kind in ["mains", "shaft", "clock", "drive", "stray", "noise"] {
            for listed in [true, false] {
                let f = self.figures(|o| o.kind == kind && o.listed == listed);
                if f.tones > 0 {
                    line(
                        &format!("{kind}{}", if listed { "" } else { ", not listed" }),
                        f,
                    );
                }
            }
        }
        for (title, claims) in [
            (
                "suspects",
                ece(self
                    .0
                    .iter()
                    .flat_map(|o| o.claims.iter().copied())
                    .filter(|c| c.0 > 0.005))
                .1,
            ),
            (
                "folded_probability",
                ece(self.0.iter().map(|o| (o.folded_probability, o.folded))).1,
            ),
        ] {
            let _ = writeln!(out, "\n{title}: claimed, right, how many");
            for (count, claimed, right) in claims {
                let _ = writeln!(out, "  {claimed:.3}  {right:.3}  {count}");
            }
        }
        out
    }
}
