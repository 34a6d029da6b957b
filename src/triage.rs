//! The main job, end to end: one recording in depth.

use crate::capture::{Capture, CaptureError, OpenOptions, Spec};
use crate::evidence::reference::Reference;
use crate::evidence::{self, Evidence};
use crate::fold::{Chain, ChainError};
use crate::plan::{self, rates};
use crate::sources::Site;
use crate::spectrum::samples::{OnThreads, Passes};
use crate::suspects::{self, Cause, Finding, Inference, Scene, SourceFit, Verdict};
use crate::tones::{self, Search, Tone, ToneSet};
use std::num::NonZeroUsize;
use std::path::Path;

/// What the analyst asks for.
#[derive(Debug, Clone, Default)]
pub struct Options {
    /// How to read the recording.
    pub open: OpenOptions,
    /// 1-based channel; `None` for all.
    pub channel: Option<usize>,
    /// Tracks of sources, logged elsewhere.
    pub references: Vec<Reference>,
    /// Threads that may work on a long recording; `None` for as many as there are
    /// cores. No result depends on it.
    pub threads: Option<NonZeroUsize>,
}

/// One recording's result.
#[derive(Debug, Clone)]
pub struct Triage {
    /// The recording's name as the analyst gave it.
    pub recording: String,
    /// What was read.
    pub spec: Spec,
    /// Runs of samples missing between time stamps.
    pub gaps: u64,
    /// Value and unit of full scale where the site file tells it.
    pub full_scale: Option<(f64, String)>,
    /// Every rate the signal went through.
    pub chain: Chain,
    /// The tones.
    pub tones: ToneSet,
    /// Names of the listed sources, in the catalogue's order.
    pub sources: Vec<String>,
    /// What was assumed of the clock before, ± parts per million.
    pub clock_described_ppm: f64,
    /// What movement, phase and time stamps say.
    pub evidence: Evidence,
    /// Suspects and fitted sources.
    pub inference: Inference,
    /// The best next test for the most doubtful tone, if one is open.
    pub next: Option<plan::Test>,
}

/// Why a recording could not be triaged.
#[derive(Debug, thiserror::Error)]
pub enum TriageError {
    /// Reading failed.
    #[error(transparent)]
    Capture(#[from] CaptureError),
    /// No such channel.
    #[error("has no channel {asked}, only {has} (--channel counts from 1)")]
    NoChannel {
        /// Channels in the file.
        has: usize,
        /// The one asked for.
        asked: usize,
    },
    /// The stages of the site file are impossible.
    #[error(transparent)]
    Chain(#[from] ChainError),
}

/// Runs the whole job on one recording. `progress(done, of)` counts samples.
///
/// # Errors
/// If the recording cannot be read, or does not fit what was asked of it.
pub fn run(
    path: &Path,
    site: &Site,
    options: &Options,
    progress: &(dyn Fn(u64, u64) + Sync),
) -> Result<Triage, TriageError> {
    let capture = Capture::open(path, &options.open)?;
    let mut spec = capture.spec().clone();
    let channels = match options.channel {
        None => Vec::new(),
        Some(asked) if (1..=spec.channels.len()).contains(&asked) => vec![asked - 1],
        Some(asked) => {
            return Err(TriageError::NoChannel {
                has: spec.channels.len(),
                asked,
            });
        }
    };
    let mut chain = Chain::for_file(&site.recorder.stages_hz, spec.rate_hz)?;
    if let Some(ppm) = site.recorder.clock_ppm {
        chain = chain.with_clock_ppm(ppm)?;
    }
    let full_scale = site.recorder.full_scale.clone();
    let search = Search {
        // A WAV's samples are fractions of full scale already.
        full_scale: match &full_scale {
            Some((value, _)) if !spec.normalised => *value,
            _ => 1.0,
        },
        step: spec.step,
        channels,
        ..Search::default()
    };
    let threads = options
        .threads
        .map_or_else(|| capture.threads(), NonZeroUsize::get);
    let (tones, notes) =
        tones::mended::find_mended(&OnThreads(&capture, threads), &search, progress)?;
    spec.notes.extend(notes);
    let up_to_hz = site.recorder.front_end.bandwidth_hz;
    let evidence = evidence::gather(
        &capture,
        &tones.tones,
        &chain,
        &options.references,
        up_to_hz,
    )?;
    let scene = Scene {
        tones: &tones.tones,
        site,
        chain: &chain,
        duration_s: spec.duration_s(),
        full_scale_known: spec.normalised || full_scale.is_some(),
        evidence: Some(&evidence),
    };
    let inference = suspects::infer(&scene);
    let next = plan::next(&scene, &inference, &rates::usual(spec.rate_hz));
    Ok(Triage {
        recording: path.to_string_lossy().into_owned(),
        spec,
        gaps: capture.gaps(),
        full_scale,
        tones,
        sources: site
            .catalogue
            .sources
            .iter()
            .map(|s| s.name.clone())
            .collect(),
        clock_described_ppm: site.recorder.assumed_clock_ppm(),
        evidence,
        inference,
        next,
        chain,
    })
}

impl Triage {
    /// What inference worked on; `site` is the one it was run with.
    pub fn scene<'a>(&'a self, site: &'a Site) -> Scene<'a> {
        Scene {
            tones: &self.tones.tones,
            site,
            chain: &self.chain,
            duration_s: self.spec.duration_s(),
            full_scale_known: self.spec.normalised || self.full_scale.is_some(),
            evidence: Some(&self.evidence),
        }
    }

    /// Every tone with what is concluded of it.
    pub fn rows(&self) -> impl Iterator<Item = (&Tone, &Finding)> {
        self.inference
            .findings
            .iter()
            .filter_map(|f| Some((self.tones.tones.get(f.tone)?, f)))
    }

    /// Every listed source's name with what the recording says of it.
    pub fn fits(&self) -> impl Iterator<Item = (&str, &SourceFit)> {
        self.inference
            .fits
            .iter()
            .filter_map(|f| Some((self.sources.get(f.source)?.as_str(), f)))
    }

    /// Channels of a tone as the suspect list names them: numbers in a WAV,
    /// column names in a CSV, in file order.
    pub fn channel_names(&self, tone: &Tone) -> String {
        let mut channels: Vec<usize> = tone.channels.iter().map(|c| c.channel).collect();
        channels.sort_unstable();
        let names: Vec<&str> = channels
            .iter()
            .filter_map(|&c| Some(self.spec.channels.get(c)?.name.as_str()))
            .collect();
        names.join("+")
    }

    /// One sentence: what stands out.
    pub fn summary(&self) -> String {
        use crate::report::text::{count, hertz, percent, plain};
        let all = self.tones.tones.len();
        let with = |verdict: Verdict| {
            self.rows()
                .filter(move |(_, f)| f.verdict == verdict)
                .collect::<Vec<_>>()
        };
        let folded = with(Verdict::Folded);
        let open = with(Verdict::Open);
        if all == 0 {
            return "no tone stands out of the noise".into();
        }
        if all == 1 && open.len() == 1 {
            return "the only tone stays open; a recording at another rate would tell".into();
        }
        let mut text = match folded.len() {
            0 if open.is_empty() && all == 1 => {
                "the only tone is likely real where it shows".into()
            }
            0 if open.is_empty() => format!("all {all} tones are likely real where they show"),
            0 => format!("none of {} is clearly folded", count(all, "tone", "tones")),
            n => format!(
                "{n} of {} {} likely folded",
                count(all, "tone", "tones"),
                if n == 1 { "is" } else { "are" }
            ),
        };
        if let Some((tone, finding)) = folded
            .iter()
            .max_by(|a, b| a.0.level_dbfs.total_cmp(&b.0.level_dbfs))
        {
            text.push_str(&format!(
                "; the strongest is tone {} at {} Hz",
                tone.number,
                hertz(tone.seen_hz.0)
            ));
            if let Some(s) = finding.suspects.first()
                && s.probability > finding.unlisted_direct + finding.unlisted_folded
            {
                text.push_str(&format!(
                    ": {} {}, truly {} Hz ({})",
                    plain(&s.cause.name()),
                    s.line,
                    hertz(s.true_hz.0),
                    percent(s.probability)
                ));
            } else {
                text.push_str(", from nothing listed");
            }
        }
        if !open.is_empty() {
            text.push_str(&format!(
                "; {} open, and a recording at another rate would tell",
                count(open.len(), "stays", "stay")
            ));
        }
        text
    }
}

impl Cause {
    /// As the suspect list names it.
    pub fn name(&self) -> String {
        match self {
            Cause::Source { name, .. } => name.clone(),
            Cause::Parents(tones) => tones
                .iter()
                .map(|t| format!("tone {t}"))
                .collect::<Vec<_>>()
                .join(", "),
            Cause::Recorder => "recorder".into(),
        }
    }
}
