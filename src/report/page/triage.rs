//! The page of `triage`: recordings in depth.

use super::assumed::{Assumption, assumptions};
use super::letters::Letters;
use super::next::{Planned, steps};
use super::pictures::{FoldedPicture, SpectrumPicture, TrackPicture, by_source, glyph};
use super::record::moment;
use super::verdicts::{Sentence, Tally, sentences, tally};
use super::{Frame, Record, signed};
use crate::evidence::reference::Reference;
use crate::fold::Chain;
use crate::report::reading::duration;
use crate::report::table::{
    self, EXPLAINS_SOMETHING, WORTH_A_LINE, latent_word, luck, unlisted_words,
};
use crate::report::text::{count, hertz, percent, plain, with_u95};
use crate::sources::Site;
use crate::suspects::{Cause, Finding, SourceFit, Suspect, Verdict};
use crate::tones::{Tone, TrackPoint};
use crate::triage::Triage;
use crate::units::U95;
use askama::Template;
use std::io;

/// A recording that could not be read, and why.
#[derive(Debug, Clone)]
pub struct Failed {
    /// As the analyst named it.
    pub recording: String,
    /// The complaint.
    pub why: String,
}

/// What a page of `triage` is about.
#[derive(Debug, Clone, Copy)]
pub struct Subject<'a> {
    /// The recordings that could be read.
    pub results: &'a [Triage],
    /// The other ones.
    pub failed: &'a [Failed],
    /// What they were held against.
    pub site: &'a Site,
    /// What the site goes by.
    pub site_name: &'a str,
    /// Suspects listed for each tone at most.
    pub top: usize,
    /// For each of `results`, the test that would settle most; fewer where there is none.
    pub planned: &'a [Option<Planned>],
    /// Tracks of sources that were logged elsewhere.
    pub references: &'a [Reference],
}

/// Writes the page.
///
/// # Errors
/// If `out` cannot be written.
pub fn write_triage(subject: &Subject, record: &Record, out: &mut dyn io::Write) -> io::Result<()> {
    let letters = Letters::of(&subject.results.iter().collect::<Vec<_>>());
    let recordings: Vec<Recording> = subject
        .results
        .iter()
        .enumerate()
        .map(|(i, result)| recording(subject, result, &letters, i))
        .collect();
    let title = match subject.results {
        [only] => base_name(&only.recording),
        many => count(many.len(), "recording", "recordings"),
    };
    let page = Page {
        title,
        recordings,
        failed: subject
            .failed
            .iter()
            .map(|f| (plain(&f.recording), plain(&f.why)))
            .collect(),
        made: moment(record.made),
        record,
        frame: Frame::new(),
    };
    super::write(&page, out)
}

/// The last part of a path, safe to show.
fn base_name(path: &str) -> String {
    let last = path.rsplit(['/', '\\']).find(|part| !part.is_empty());
    plain(last.unwrap_or(path))
}

#[derive(Template)]
#[template(config = "src/report/page/askama.toml", path = "triage.html")]
struct Page<'a> {
    title: String,
    recordings: Vec<Recording<'a>>,
    failed: Vec<(String, String)>,
    made: String,
    record: &'a Record,
    frame: Frame,
}

/// Everything the page shows of one recording.
struct Recording<'a> {
    prefix: String,
    name: String,
    facts: String,
    summary: String,
    tally: [Tally; 3],
    sentences: Vec<Sentence>,
    spectrum: SpectrumPicture,
    folded: Option<FoldedPicture>,
    tracks: Vec<TrackPicture>,
    several_channels: bool,
    tones: Vec<ToneView>,
    left_out: Option<String>,
    sources: Vec<SourceView>,
    legend: Vec<(String, String)>,
    clock: Option<String>,
    from_time: Vec<String>,
    assumptions: Vec<Assumption>,
    planned: Option<&'a Planned>,
    next: Vec<String>,
}

/// A tone as the page and the pictures show it.
pub(super) struct ToneView {
    pub(super) number: usize,
    pub(super) anchor: String,
    pub(super) hz: f64,
    pub(super) level_dbfs: f64,
    pub(super) levels: Vec<(usize, f64)>,
    pub(super) track: Vec<TrackPoint>,
    pub(super) verdict: Verdict,
    pub(super) folded_probability: f64,
    pub(super) folded: String,
    pub(super) suspects: Vec<SuspectView>,
    /// Cause and line of the first in line, or `unlisted`.
    pub(super) lead: String,
    /// Letter and name of the cause, where it is more likely than not.
    pub(super) source: Option<(String, String)>,
    /// Where that one's line truly is, and whether it is seen inverted.
    pub(super) true_line: Option<(f64, bool)>,
    /// Everything in a sentence, for pointing at.
    pub(super) sentence: String,
    pub(super) wander: String,
    wander_hz: f64,
    seen: String,
    u95: String,
    level: String,
    snr: String,
    snr_db: f64,
    channels: String,
    present: Option<String>,
    rests_on: String,
}

/// One suspect, or `unlisted`.
pub(super) struct SuspectView {
    pub(super) letter: String,
    name: String,
    pub(super) line: String,
    pub(super) probability: f64,
    pub(super) chance: String,
    bar: String,
    pub(super) true_hz: Option<String>,
    u95: String,
    pub(super) zone: Option<String>,
    luck: String,
    words: String,
    /// Zone and true frequency, for the folded axis.
    pub(super) place: Option<(u64, f64)>,
    pub(super) sentence: String,
}

impl ToneView {
    /// The suspects with their chances.
    pub(super) fn candidates(&self) -> String {
        let each: Vec<String> = self
            .suspects
            .iter()
            .map(|s| format!("{} ({})", s.label(), s.chance))
            .collect();
        each.join(", ")
    }

    pub(super) fn wanders(&self) -> bool {
        self.wander_hz > 0.0
    }

    fn glyph(&self) -> &'static str {
        glyph(self.verdict)
    }

    fn word(&self) -> &'static str {
        super::pictures::verdict_word(self.verdict)
    }

    /// What the filter looks through.
    fn words(&self) -> String {
        let suspects = self.suspects.iter().map(|s| s.label().to_lowercase());
        let mut all: Vec<String> = suspects.collect();
        all.push(format!("tone {}", self.number));
        all.push(self.seen.clone());
        all.push(self.word().into());
        all.join(" · ")
    }
}

impl SuspectView {
    fn label(&self) -> String {
        if self.line.is_empty() {
            self.name.clone()
        } else {
            format!("{} {}", self.name, self.line)
        }
    }
}

/// A listed source with what the recording says of it.
struct SourceView {
    letter: String,
    name: String,
    kind: String,
    there: String,
    present_probability: f64,
    explained: String,
    tones_explained: f64,
    latents: Vec<LatentView>,
    tones: Vec<(String, usize)>,
}

struct LatentView {
    name: String,
    fitted: String,
    listed: String,
}

fn recording<'a>(
    subject: &Subject<'a>,
    result: &Triage,
    letters: &Letters,
    index: usize,
) -> Recording<'a> {
    let prefix = if index == 0 {
        String::new()
    } else {
        format!("r{}-", index + 1)
    };
    let spec = &result.spec;
    let site = subject.site;
    let tones = tone_views(result, letters, subject.top, &prefix);
    let folded = Chain::for_file(&site.recorder.stages_hz, spec.rate_hz)
        .ok()
        .and_then(|chain| FoldedPicture::new(spec.rate_hz, &chain, &tones, &prefix));
    Recording {
        name: plain(&result.recording),
        facts: format!(
            "{}, {} Hz, {}, {}, resolves {} Hz",
            plain(&spec.format),
            hertz(spec.rate_hz),
            count(spec.channels.len(), "channel", "channels"),
            duration(spec.duration_s()),
            hertz(result.tones.cell_hz)
        ),
        summary: result.summary(),
        tally: tally(&tones),
        sentences: sentences(&tones),
        spectrum: SpectrumPicture::new(result, &tones, &prefix),
        folded,
        tracks: by_source(&tones, result, subject.references, &prefix),
        from_time: table::from_time(result),
        several_channels: spec.channels.len() > 1,
        left_out: (result.tones.left_out > 0).then(|| {
            let more = count(result.tones.left_out, "weaker tone", "weaker tones");
            format!("{more} beyond these were left out.")
        }),
        sources: result
            .inference
            .fits
            .iter()
            .filter(|f| f.tones_explained >= EXPLAINS_SOMETHING)
            .filter_map(|fit| source(site, result, fit, letters, &tones))
            .collect(),
        clock: table::clock(result).map(|c| {
            format!(
                "The recorder's clock, fitted with them: {}.",
                c.replace('-', "−")
            )
        }),
        legend: legend(site, letters, &tones),
        assumptions: assumptions(subject, result),
        planned: subject.planned.get(index).and_then(Option::as_ref),
        next: steps(&tones),
        tones,
        prefix,
    }
}

/// What the letters in the pictures of these tones stand for.
fn legend(site: &Site, letters: &Letters, tones: &[ToneView]) -> Vec<(String, String)> {
    let used = |letter: &str| {
        let mut suspects = tones.iter().flat_map(|t| &t.suspects);
        suspects.any(|s| s.letter == letter)
    };
    let sources = site.catalogue.sources.iter().enumerate();
    let listed = sources.map(|(i, source)| (letters.source(i), plain(&source.name)));
    let others = [
        ("h", "harmonic or mixture of seen tones"),
        ("r", "the recorder itself"),
    ]
    .map(|(letter, name)| (letter, name.to_owned()));
    listed
        .chain(others)
        .filter(|(letter, _)| !letter.is_empty() && used(letter))
        .map(|(letter, name)| (letter.to_owned(), name))
        .collect()
}

/// All tones, each with its `top` suspects.
pub(super) fn tone_views(
    result: &Triage,
    letters: &Letters,
    top: usize,
    prefix: &str,
) -> Vec<ToneView> {
    result
        .rows()
        .map(|(tone, finding)| tone_view(result, tone, finding, letters, top, prefix))
        .collect()
}

fn tone_view(
    result: &Triage,
    tone: &Tone,
    finding: &Finding,
    letters: &Letters,
    top: usize,
    prefix: &str,
) -> ToneView {
    let unlisted = finding.unlisted_direct + finding.unlisted_folded;
    let mut suspects: Vec<SuspectView> = finding
        .suspects
        .iter()
        .take(top)
        .filter(|s| s.probability >= WORTH_A_LINE)
        .map(|s| suspect(s, letters))
        .collect();
    if unlisted >= WORTH_A_LINE || suspects.is_empty() {
        suspects.push(nothing_listed(finding, unlisted));
    }
    suspects.sort_by(|a, b| b.probability.total_cmp(&a.probability));
    let lead = suspects.first().map_or(String::new(), SuspectView::label);
    let likely = finding
        .suspects
        .first()
        .filter(|s| s.probability > 0.5 && s.probability > unlisted);
    let source = likely.map(|s| {
        let name = match &s.cause {
            Cause::Source { name, .. } => plain(name),
            Cause::Parents(_) => "Harmonics and mixtures of seen tones".into(),
            Cause::Recorder => "The recorder itself".into(),
        };
        (letters.cause(&s.cause).to_owned(), name)
    });
    let (seen, u95) = with_u95(tone.seen_hz.0, tone.seen_hz_u95);
    let level = signed(tone.level_dbfs, 1);
    let wander = wander(tone);
    let whole = tone.from_s <= 0.0 && tone.to_s >= result.spec.duration_s() * (1.0 - 1e-9);
    let present = (!whole).then(|| format!("{} to {} s", hertz(tone.from_s), hertz(tone.to_s)));
    let first = suspects
        .first()
        .map_or(String::new(), |s| s.sentence.clone());
    let number = tone.number;
    let verdict = finding.verdict;
    let word = super::pictures::verdict_word(verdict);
    ToneView {
        number,
        anchor: format!("{prefix}tone-{number}"),
        hz: tone.seen_hz.0,
        level_dbfs: tone.level_dbfs,
        levels: tone
            .channels
            .iter()
            .map(|c| (c.channel, c.level_dbfs))
            .collect(),
        track: tone.track.clone(),
        verdict,
        folded_probability: finding.folded_probability,
        folded: percent(finding.folded_probability),
        lead,
        source,
        true_line: likely.map(|s| (s.true_hz.0, s.sense.is_inverted())),
        sentence: format!(
            "tone {number}: {word}, seen at {seen} ± {u95} Hz, {level} dBFS; {first}"
        ),
        suspects,
        wander,
        wander_hz: tone.wander_hz,
        seen,
        u95,
        level,
        snr: signed(tone.snr_db, 0),
        snr_db: tone.snr_db,
        channels: plain(&result.channel_names(tone)),
        present,
        rests_on: finding
            .grounds
            .iter()
            .map(|&g| table::ground_word(g))
            .collect::<Vec<_>>()
            .join(", "),
    }
}

/// Two digits; nothing for a steady tone.
fn wander(tone: &Tone) -> String {
    if tone.wander_hz > 0.0 {
        with_u95(tone.wander_hz, tone.wander_hz).0
    } else {
        String::new()
    }
}

/// Length of a chance's bar, of 64.
fn bar(probability: f64) -> String {
    format!("{:.1}", 64.0 * probability.clamp(0.0, 1.0))
}

fn suspect(s: &Suspect, letters: &Letters) -> SuspectView {
    let (true_hz, u95) = with_u95(s.true_hz.0, s.true_hz_u95);
    let name = plain(&s.cause.name());
    let line = plain(&s.line);
    let chance = percent(s.probability);
    let zone = format!(
        "zone {}{}",
        s.zone,
        if s.sense.is_inverted() {
            ", inverted"
        } else {
            ""
        }
    );
    SuspectView {
        letter: letters.cause(&s.cause).to_owned(),
        sentence: format!(
            "{name} {line} ({chance}), truly at {true_hz} ± {u95} Hz, {zone}; {} lines as close by luck",
            luck(s.coincidence)
        ),
        name,
        line,
        probability: s.probability,
        chance,
        bar: bar(s.probability),
        true_hz: Some(true_hz),
        u95,
        zone: Some(zone),
        luck: luck(s.coincidence),
        words: String::new(),
        place: Some((s.zone, s.true_hz.0)),
    }
}

fn nothing_listed(finding: &Finding, unlisted: f64) -> SuspectView {
    let chance = percent(unlisted);
    let words = unlisted_words(finding);
    SuspectView {
        letter: "?".into(),
        name: "unlisted".into(),
        line: String::new(),
        probability: unlisted,
        sentence: format!("nothing listed ({chance}), {words}"),
        chance,
        bar: bar(unlisted),
        true_hz: None,
        u95: String::new(),
        zone: None,
        luck: String::new(),
        words,
        place: None,
    }
}

fn source(
    site: &Site,
    result: &Triage,
    fit: &SourceFit,
    letters: &Letters,
    tones: &[ToneView],
) -> Option<SourceView> {
    let listed = site.catalogue.sources.get(fit.source)?;
    let letter = letters.source(fit.source).to_owned();
    let latents = fit
        .latents
        .iter()
        .map(|(name, hz, u95)| {
            let (fitted, u95) = with_u95(*hz, *u95);
            let terms = listed.lines.iter().flat_map(|l| &l.terms);
            let prior = terms
                .filter_map(|(id, _)| site.catalogue.latents.get(id.0))
                .find(|l| l.name == *name);
            LatentView {
                name: match latent_word(name, &listed.name).as_str() {
                    "at" => String::new(),
                    word => word.to_owned(),
                },
                fitted: format!("{fitted} ± {u95} Hz"),
                listed: prior.map_or(String::new(), |l| {
                    let percent = 100.0 * U95 * l.sd_hz / l.nominal_hz;
                    format!("{} Hz ± {} %", hertz(l.nominal_hz), short(percent))
                }),
            }
        })
        .collect();
    // The row's own index: a name may be given twice in lists from elsewhere.
    let name = result.sources.get(fit.source)?;
    Some(SourceView {
        tones: tones
            .iter()
            .filter(|t| t.source.as_ref().is_some_and(|(l, _)| *l == letter))
            .map(|t| (t.anchor.clone(), t.number))
            .collect(),
        letter,
        name: plain(name),
        kind: listed.kind.to_string(),
        there: percent(fit.present_probability),
        present_probability: fit.present_probability,
        explained: format!("{:.1}", fit.tones_explained),
        tones_explained: fit.tones_explained,
        latents,
    })
}

/// Two significant digits.
fn short(value: f64) -> String {
    let rounded: f64 = format!("{value:.1e}").parse().unwrap_or(value);
    hertz(rounded)
}
