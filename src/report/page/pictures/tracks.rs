//! Tones over time, those of one source together: lines of one source wander by the
//! same share of their true frequency, whichever zone they are seen in.

use super::{Px, Tick, ticks};
use crate::evidence::reference::Reference;
use crate::report::page::triage::ToneView;
use crate::report::text::{hertz, plain};
use crate::tones::TrackPoint;
use crate::triage::Triage;
use crate::units::U95;
use askama::Template;
use std::collections::BTreeMap;

const WIDTH: f64 = 540.0;
const HEIGHT: f64 = 230.0;
const LEFT: f64 = 62.0;
const RIGHT: f64 = 524.0;
const TOP: f64 = 14.0;
const BOTTOM: f64 = 188.0;
/// Points this many times less certain than the best do not widen the picture.
const UNCERTAIN: f64 = 4.0;

/// Fills `tracks.svg`.
#[derive(Template)]
#[template(config = "src/report/page/askama.toml", path = "pictures/tracks.svg")]
pub(in crate::report::page) struct TrackPicture {
    width: Px,
    height: Px,
    left: Px,
    right: Px,
    top: Px,
    bottom: Px,
    zero: Px,
    id: String,
    title: String,
    description: String,
    unit: &'static str,
    together: String,
    /// The reference logged elsewhere.
    logged: String,
    tones: Vec<Line>,
    times: Vec<Tick>,
    shares: Vec<Tick>,
}

struct Line {
    anchor: String,
    title: String,
    points: String,
    /// 95 % intervals, where they are not wider than the picture is worth.
    whiskers: String,
    dots: Vec<(Px, Px)>,
    faint: bool,
}

/// Points of a track that get whiskers at most, and of a reference at most.
const CLEAR: usize = 48;
const MOST_LOGGED: usize = 600;

/// A moment of a track: seconds, share of the true frequency, its standard deviation.
type Share = (f64, f64, f64);

/// A tone with its track.
type Followed<'a> = (&'a ToneView, Vec<Share>);

/// A track as shares of the tone's true frequency (of its seen one, where no source is
/// known), upright whatever the zone.
fn shares(tone: &ToneView) -> Vec<Share> {
    let (scale, sign) = match tone.true_line {
        Some((true_hz, inverted)) => (true_hz, if inverted { -1.0 } else { 1.0 }),
        None => (tone.hz, 1.0),
    };
    if scale.is_nan() || scale <= 0.0 {
        return Vec::new();
    }
    let share = |p: &TrackPoint| {
        let off = sign * (p.seen_hz.0 - tone.hz) / scale;
        (p.at_s, off, p.sd_hz / scale)
    };
    let all = tone.track.iter().map(share);
    all.filter(|p| p.0.is_finite() && p.1.is_finite() && p.2.is_finite() && p.2 > 0.0)
        .collect()
}

/// Between the two points about `at_s`; nothing outside the track.
fn at(track: &[Share], at_s: f64) -> Option<(f64, f64)> {
    let i = track.partition_point(|p| p.0 < at_s);
    let after = track.get(i)?;
    if after.0 == at_s {
        return Some((after.1, after.2));
    }
    let before = track.get(i.checked_sub(1)?)?;
    let w = (at_s - before.0) / (after.0 - before.0);
    Some((before.1 + w * (after.1 - before.1), before.2.max(after.2)))
}

/// What the tones say together, at the times of the most certain one: their mean,
/// weighted by one over variance.
fn together(tracks: &[Followed]) -> Vec<(f64, f64)> {
    let sd = |t: &[Share]| t.iter().map(|p| p.2).fold(f64::INFINITY, f64::min);
    let Some((_, best)) = tracks.iter().min_by(|a, b| sd(&a.1).total_cmp(&sd(&b.1))) else {
        return Vec::new();
    };
    best.iter()
        .map(|&(t, ..)| {
            let (mut sum, mut weight) = (0.0, 0.0);
            for (value, sd) in tracks.iter().filter_map(|(_, track)| at(track, t)) {
                sum += value / (sd * sd);
                weight += 1.0 / (sd * sd);
            }
            (t, sum / weight)
        })
        .collect()
}

/// A picture for each source whose tones wander, in the order of their letters, the
/// tones of no source last.
pub(in crate::report::page) fn by_source(
    tones: &[ToneView],
    result: &Triage,
    references: &[Reference],
    prefix: &str,
) -> Vec<TrackPicture> {
    // Without a source last; by letter, then name.
    type Key = (bool, String, String);
    let mut groups: BTreeMap<Key, Vec<Followed>> = BTreeMap::new();
    for tone in tones {
        let track = shares(tone);
        if tone.wanders() && track.len() >= 2 {
            let (letter, name) = match &tone.source {
                Some((letter, name)) => (letter.clone(), name.clone()),
                None => (String::new(), "no source in particular".into()),
            };
            let key = (tone.source.is_none(), letter, name);
            groups.entry(key).or_default().push((tone, track));
        }
    }
    groups
        .into_iter()
        .enumerate()
        .map(|(i, ((alone, _, name), tracks))| {
            let id = format!("{prefix}track-{}", i + 1);
            let logged = logged(&name, result, references);
            TrackPicture::new(id, name, !alone, &tracks, &logged, result.spec.duration_s())
        })
        .collect()
}

/// The reference of a source on the recording's time, as shares of its mean.
fn logged(name: &str, result: &Triage, references: &[Reference]) -> Vec<(f64, f64)> {
    let named = |source: &str| plain(source) == name;
    let beside = result.evidence.references.iter();
    let Some(beside) = beside.clone().find(|b| named(&b.source)) else {
        return Vec::new();
    };
    let Some(reference) = references.iter().find(|r| named(&r.source)) else {
        return Vec::new();
    };
    let series = &reference.series;
    let all = series.at_s.iter().zip(&series.hz).map(|(at_s, hz)| {
        let share = (hz - beside.mean_hz) / beside.mean_hz;
        (at_s + beside.offset_s, share)
    });
    let during: Vec<(f64, f64)> = all
        .filter(|p| (0.0..=result.spec.duration_s()).contains(&p.0) && p.1.is_finite())
        .collect();
    let step = during.len().div_ceil(MOST_LOGGED).max(1);
    during.into_iter().step_by(step).collect()
}

impl TrackPicture {
    /// The source, or that there is none.
    pub(in crate::report::page) fn title(&self) -> &str {
        &self.title
    }

    fn new(
        id: String,
        name: String,
        has_source: bool,
        tracks: &[Followed],
        logged: &[(f64, f64)],
        duration_s: f64,
    ) -> Self {
        let points = || tracks.iter().flat_map(|(_, t)| t);
        let best = points().map(|p| p.2).fold(f64::INFINITY, f64::min);
        let reach = points()
            .filter(|p| p.2 <= UNCERTAIN * best)
            .map(|p| p.1.abs() + U95 * p.2)
            .chain(logged.iter().map(|p| p.1.abs()))
            .fold(0.0, f64::max)
            .max(1e-12);
        let (unit, scale) = if reach > 2e-3 {
            ("%", 100.0)
        } else {
            ("ppm", 1e6)
        };
        let middle = 0.5 * (TOP + BOTTOM);
        let half = 0.5 * (BOTTOM - TOP);
        let x = |t: f64| LEFT + (RIGHT - LEFT) * (t / duration_s).clamp(0.0, 1.0);
        // Points of uncertain tracks may lie far outside: the picture clips them.
        let y = |share: f64| middle - half * (share / reach).clamp(-9.0, 9.0);
        let lines = tracks
            .iter()
            .map(|(tone, track)| {
                let sure: f64 = track.iter().map(|p| p.2).fold(f64::INFINITY, f64::min);
                // Hundreds of points speak for themselves.
                let faint = (tracks.len() > 4 && sure > 2.0 * best) || track.len() > CLEAR;
                let whisker = |&(t, share, sd): &Share| {
                    let (x, reach) = (Px(x(t)), U95 * sd);
                    format!("M{x} {}V{}", Px(y(share - reach)), Px(y(share + reach)))
                };
                Line {
                    anchor: tone.anchor.clone(),
                    title: format!(
                        "tone {}: {} Hz, {}, wanders {} Hz rms",
                        tone.number,
                        hertz(tone.hz),
                        tone.lead,
                        tone.wander
                    ),
                    points: super::path(track.iter().map(|p| (x(p.0), y(p.1)))),
                    whiskers: if faint {
                        String::new()
                    } else {
                        track.iter().map(whisker).collect()
                    },
                    dots: track.iter().map(|p| (Px(x(p.0)), Px(y(p.1)))).collect(),
                    faint,
                }
            })
            .collect::<Vec<_>>();
        let count = lines.len();
        TrackPicture {
            width: Px(WIDTH),
            height: Px(HEIGHT),
            left: Px(LEFT),
            right: Px(RIGHT),
            top: Px(TOP),
            bottom: Px(BOTTOM),
            zero: Px(middle),
            description: format!(
                "Deviation from the mean, in {unit} of the {} frequency, over {} s; {}.",
                if has_source { "true" } else { "seen" },
                hertz(duration_s),
                crate::report::text::count(count, "tone", "tones")
            ),
            id,
            title: name,
            unit,
            together: if count > 1 && has_source {
                super::path(together(tracks).into_iter().map(|(t, s)| (x(t), y(s))))
            } else {
                String::new()
            },
            logged: super::path(logged.iter().map(|&(t, s)| (x(t), y(s)))),
            tones: lines,
            times: ticks(0.0, duration_s, 6)
                .into_iter()
                .map(|t| Tick {
                    at: Px(x(t)),
                    text: hertz(t),
                })
                .collect(),
            shares: ticks(-reach * scale, reach * scale, 5)
                .into_iter()
                .map(|s| Tick {
                    at: Px(y(s / scale)),
                    text: share_text(s),
                })
                .collect(),
        }
    }
}

fn share_text(share: f64) -> String {
    let text = hertz(share);
    match text.strip_prefix('-') {
        Some(size) => format!("−{size}"),
        None if share == 0.0 => text,
        None => format!("+{text}"),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_track_is_read_between_its_points_only() {
        let track = [(1.0, 0.0, 0.1), (3.0, 2.0, 0.2)];
        assert_eq!(at(&track, 2.0), Some((1.0, 0.2)));
        assert_eq!(at(&track, 1.0), Some((0.0, 0.1)));
        assert_eq!(at(&track, 3.0), Some((2.0, 0.2)));
        assert_eq!(at(&track, 0.9), None);
        assert_eq!(at(&track, 3.1), None);
    }

    #[test]
    fn shares_carry_their_sign() {
        assert_eq!(share_text(-20.0), "−20");
        assert_eq!(share_text(0.5), "+0.5");
        assert_eq!(share_text(0.0), "0");
    }
}
