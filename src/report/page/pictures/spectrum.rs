//! The spectrum with its tones marked and their first suspects named.

use super::{Axis, LEFT, Px, RIGHT, Tick, WIDTH, glyph, path, spread, ticks, verdict_word};
use crate::report::page::triage::ToneView;
use crate::report::text::{hertz, plain};
use crate::spectrum::display::Spectrum;
use crate::triage::Triage;
use askama::Template;

/// Channels drawn at most; the other ones are named.
const PANELS: usize = 8;
/// Room that a label takes along the axis, and each of its letters above it (those of
/// a wide typeface).
const LABEL_GAP: f64 = 13.0;
const LETTER: f64 = 7.2;
/// From the labels down to the topmost level.
const LEADERS: f64 = 22.0;
/// Longest name in a label, characters.
const NAME: usize = 30;

/// Fills `spectrum.svg`.
#[derive(Template)]
#[template(config = "src/report/page/askama.toml", path = "pictures/spectrum.svg")]
pub(in crate::report::page) struct SpectrumPicture {
    /// Distinguishes the ids of several pictures in a page.
    prefix: String,
    /// Where the picture stands alone: its own style, no links.
    pub(super) style: Option<String>,
    pub(super) width: Px,
    pub(super) height: Px,
    left: Px,
    right: Px,
    labels: Px,
    bottom: Px,
    title: String,
    description: String,
    panels: Vec<Panel>,
    marks: Vec<Mark>,
    ticks: Vec<Tick>,
    /// Tones without a label, and channels without a panel, in words.
    pub(in crate::report::page) left_out: Vec<String>,
    /// The band in which noise is shown, Hz, in words.
    pub(in crate::report::page) noise_band: String,
}

struct Panel {
    name: Option<String>,
    top: Px,
    bottom: Px,
    height: Px,
    ground: String,
    trace: String,
    levels: Vec<Tick>,
    /// For the script: 0 Hz to `top_hz`, and each column's loudest level, dBFS.
    top_hz: f64,
    tops: String,
}

struct Mark {
    anchor: String,
    class: &'static str,
    glyph: &'static str,
    title: String,
    label: Option<Label>,
    heads: Vec<Head>,
}

struct Label {
    x: Px,
    leader: String,
    text: String,
}

struct Head {
    x: Px,
    y: Px,
    foot: Px,
}

/// What a panel's level axis spans, dBFS.
fn range(spectrum: &Spectrum, loudest: f64) -> (f64, f64) {
    let top = ((spectrum.top_dbfs().max(loudest) + 3.0) / 10.0).ceil() * 10.0;
    let ground = ((spectrum.ground_dbfs() - 4.0) / 10.0).floor() * 10.0;
    (ground.clamp(top - 160.0, top - 20.0), top)
}

fn short(text: &str) -> String {
    if text.chars().count() <= NAME {
        return text.to_owned();
    }
    let kept: String = text.chars().take(NAME - 1).collect();
    format!("{}…", kept.trim_end())
}

fn label(tone: &ToneView) -> String {
    format!("{} {}", tone.number, short(&tone.lead))
}

impl SpectrumPicture {
    pub(in crate::report::page) fn new(result: &Triage, tones: &[ToneView], prefix: &str) -> Self {
        let axis = Axis {
            top_hz: result.spec.rate_hz / 2.0,
        };
        let spectra = &result.tones.spectra;
        let drawn = spectra.get(..spectra.len().min(PANELS)).unwrap_or_default();
        let several = spectra.len() > 1;
        let (panel_height, between) = if several { (130.0, 16.0) } else { (250.0, 0.0) };
        let longest = tones.iter().map(|t| label(t).chars().count()).max();
        let labels = longest.map_or(0.0, |n| 20.0 + LETTER * n as f64);
        let first_top = labels + if tones.is_empty() { 12.0 } else { LEADERS };
        let mut left_out = Vec::new();
        let mut marks = marks(tones, axis, labels, &mut left_out);
        let mut panels = Vec::new();
        for (i, spectrum) in drawn.iter().enumerate() {
            let top = first_top + i as f64 * (panel_height + between);
            let bottom = top + panel_height;
            let in_channel = |tone: &ToneView| {
                let level = tone.levels.iter().find(|l| l.0 == spectrum.channel);
                level.map(|l| l.1)
            };
            let loudest = tones.iter().filter_map(in_channel).fold(-300.0, f64::max);
            let (low_db, high_db) = range(spectrum, loudest);
            let y = |db: f64| {
                let up = (db.clamp(low_db, high_db) - low_db) / (high_db - low_db);
                bottom - panel_height * up
            };
            for (mark, tone) in marks.iter_mut().zip(tones) {
                if let Some(level) = in_channel(tone) {
                    mark.heads.push(Head {
                        x: Px(axis.x(tone.hz)),
                        y: Px(y(level)),
                        foot: Px(top),
                    });
                }
            }
            let count = spectrum.columns.len().max(1) as f64;
            let x = |i: usize| axis.x(axis.top_hz * (i as f64 + 0.5) / count);
            let columns = || spectrum.columns.iter().enumerate();
            let middle = columns().map(|(i, c)| (x(i), y(f64::from(c.middle_dbfs))));
            let ends = [(WIDTH - RIGHT, bottom), (LEFT, bottom)];
            panels.push(Panel {
                name: several.then(|| {
                    let channel = result.spec.channels.get(spectrum.channel);
                    format!(
                        "channel {}",
                        channel.map_or(String::new(), |c| plain(&c.name))
                    )
                }),
                top: Px(top),
                bottom: Px(bottom),
                height: Px(panel_height),
                ground: path(middle.chain(ends)) + "Z",
                trace: path(columns().map(|(i, c)| (x(i), y(f64::from(c.top_dbfs))))),
                levels: ticks(low_db, high_db, if several { 4 } else { 7 })
                    .into_iter()
                    .map(|db| Tick {
                        at: Px(y(db)),
                        text: crate::report::page::signed(db, 0),
                    })
                    .collect(),
                top_hz: axis.top_hz,
                tops: columns()
                    .map(|(_, c)| format!("{:.0}", c.top_dbfs))
                    .collect::<Vec<_>>()
                    .join(" "),
            });
        }
        if spectra.len() > drawn.len() {
            left_out.push(format!(
                "The first {PANELS} of {} channels are drawn.",
                spectra.len()
            ));
        }
        let count = drawn.len().max(1) as f64;
        let bottom = first_top + count * panel_height + (count - 1.0) * between;
        SpectrumPicture {
            prefix: prefix.to_owned(),
            style: None,
            width: Px(WIDTH),
            height: Px(bottom + 44.0),
            left: Px(LEFT),
            right: Px(WIDTH - RIGHT),
            labels: Px(labels),
            bottom: Px(bottom),
            title: format!("Spectrum of {}", plain(&result.recording)),
            description: format!(
                "Level in dBFS against seen frequency from 0 to {} Hz, with {} tones marked.",
                hertz(axis.top_hz),
                tones.len()
            ),
            panels,
            marks,
            ticks: axis.ticks(),
            left_out,
            noise_band: drawn.first().map_or(String::new(), |s| hertz(s.noise_hz)),
        }
    }
}

/// A mark for each tone, without its heads; labels for as many as fit, the strongest
/// first.
fn marks(tones: &[ToneView], axis: Axis, labels: f64, left_out: &mut Vec<String>) -> Vec<Mark> {
    let (low, high) = (LEFT + 6.0, WIDTH - RIGHT);
    let room = ((high - low) / LABEL_GAP) as usize;
    let mut by_level: Vec<usize> = (0..tones.len()).collect();
    let level = |i: usize| tones.get(i).map_or(f64::NEG_INFINITY, |t| t.level_dbfs);
    by_level.sort_by(|&a, &b| level(b).total_cmp(&level(a)));
    by_level.truncate(room);
    by_level.sort_unstable();
    if by_level.len() < tones.len() {
        left_out.push(format!(
            "The {} strongest of {} tones are named; all are marked.",
            by_level.len(),
            tones.len()
        ));
    }
    let places: Vec<f64> = by_level
        .iter()
        .filter_map(|&i| Some(axis.x(tones.get(i)?.hz)))
        .collect();
    let mut placed = by_level
        .iter()
        .zip(spread(&places, LABEL_GAP, low, high))
        .peekable();
    tones
        .iter()
        .enumerate()
        .map(|(i, tone)| {
            let label = placed
                .next_if(|&(&labelled, _)| labelled == i)
                .map(|(_, x)| Label {
                    x: Px(x + 4.0),
                    leader: path([
                        (x, labels - 4.0),
                        (axis.x(tone.hz), labels + 14.0),
                        (axis.x(tone.hz), labels + LEADERS),
                    ]),
                    text: label(tone),
                });
            Mark {
                anchor: tone.anchor.clone(),
                class: verdict_word(tone.verdict),
                glyph: glyph(tone.verdict),
                title: tone.sentence.clone(),
                label,
                heads: Vec::new(),
            }
        })
        .collect()
}
