//! What was found, in plain sentences: one for each cause that leads for some tones,
//! and one for each tone that stays open.

use super::pictures::{glyph, verdict_word};
use super::triage::ToneView;
use crate::report::text::{count, hertz};
use crate::suspects::Verdict;

/// Sentences about open tones at most.
const MOST_OPEN: usize = 5;

/// Sentences about one cause, or about what has none.
pub(super) struct Sentence {
    pub(super) letter: String,
    /// The cause.
    pub(super) name: String,
    /// What is said of its tones.
    pub(super) words: String,
    /// Its tones: anchor and number.
    pub(super) tones: Vec<(String, usize)>,
    /// For the style.
    pub(super) class: &'static str,
}

/// Loudest cause first; the open tones after them.
pub(super) fn sentences(tones: &[ToneView]) -> Vec<Sentence> {
    let settled = |t: &&ToneView| t.verdict != Verdict::Open;
    let mut groups: Vec<((String, String), Vec<&ToneView>)> = Vec::new();
    for tone in tones.iter().filter(settled) {
        let key = tone
            .source
            .clone()
            .unwrap_or_else(|| (String::new(), "Nothing listed".into()));
        match groups.iter_mut().find(|(k, _)| *k == key) {
            Some((_, members)) => members.push(tone),
            None => groups.push((key, vec![tone])),
        }
    }
    let loudest = |members: &[&ToneView]| {
        let level = members.iter().map(|t| t.level_dbfs);
        level.fold(f64::NEG_INFINITY, f64::max)
    };
    groups.sort_by(|a, b| loudest(&b.1).total_cmp(&loudest(&a.1)));
    let of_causes = groups
        .into_iter()
        .map(|((letter, name), members)| of_cause(letter, name, &members));
    of_causes.chain(open_ones(tones)).collect()
}

/// One sentence for each open tone if they are few; otherwise for the loudest, and one
/// for the rest.
fn open_ones(tones: &[ToneView]) -> Vec<Sentence> {
    let mut open: Vec<&ToneView> = tones
        .iter()
        .filter(|t| t.verdict == Verdict::Open)
        .collect();
    let link = |t: &ToneView| (t.anchor.clone(), t.number);
    let mut rest = Vec::new();
    if open.len() > MOST_OPEN {
        open.sort_by(|a, b| b.level_dbfs.total_cmp(&a.level_dbfs));
        rest = open.split_off(MOST_OPEN - 1);
        open.sort_by_key(|t| t.number);
        rest.sort_by_key(|t| t.number);
    }
    let mut sentences: Vec<Sentence> = open
        .into_iter()
        .map(|tone| Sentence {
            letter: String::new(),
            name: format!("Tone {} stays open", tone.number),
            words: format!(
                "seen at {} Hz, {} folded. First in line: {}.",
                hertz(tone.hz),
                tone.folded,
                tone.candidates()
            ),
            tones: vec![link(tone)],
            class: "open",
        })
        .collect();
    if !rest.is_empty() {
        sentences.push(Sentence {
            letter: String::new(),
            name: format!("{} more tones stay open", rest.len()),
            words: "none of them as loud as those above.".into(),
            tones: rest.into_iter().map(link).collect(),
            class: "open",
        });
    }
    sentences
}

fn of_cause(letter: String, name: String, members: &[&ToneView]) -> Sentence {
    let folded = members
        .iter()
        .filter(|t| t.verdict == Verdict::Folded)
        .count();
    let n = members.len();
    let which = match (n, folded) {
        (1, 0) => "1 tone, real where it shows".into(),
        (1, _) => "1 tone, folded".into(),
        (_, 0) => format!("{n} tones, all real where they show"),
        (_, k) if k == n => format!("{n} tones, all folded"),
        _ => format!(
            "{n} tones, {folded} folded and {} real where they show",
            n - folded
        ),
    };
    let strongest = members
        .iter()
        .max_by(|a, b| a.level_dbfs.total_cmp(&b.level_dbfs));
    let mut words = format!("{which}.");
    if let Some(tone) = strongest {
        let intro = if n == 1 {
            "Seen"
        } else {
            "The strongest is seen"
        };
        words.push_str(&format!(" {intro} at {} Hz", hertz(tone.hz)));
        let lead = tone.suspects.first().filter(|s| s.place.is_some());
        match lead {
            Some(s) if tone.verdict == Verdict::Folded => words.push_str(&format!(
                " and truly at {} Hz ({}, {}, {}).",
                s.true_hz.as_deref().unwrap_or_default(),
                s.line,
                s.zone.as_deref().unwrap_or_default(),
                s.chance
            )),
            Some(s) => words.push_str(&format!(" ({}, {}).", s.line, s.chance)),
            None => words.push('.'),
        }
    }
    Sentence {
        letter,
        name,
        words,
        tones: members
            .iter()
            .map(|t| (t.anchor.clone(), t.number))
            .collect(),
        class: if folded > 0 { "folded" } else { "direct" },
    }
}

/// How many tones got a verdict.
pub(super) struct Tally {
    pub(super) word: &'static str,
    pub(super) glyph: &'static str,
    pub(super) number: String,
    pub(super) meaning: &'static str,
}

/// Of each verdict, those first that ask for something.
pub(super) fn tally(tones: &[ToneView]) -> [Tally; 3] {
    let of = |v: Verdict| tones.iter().filter(|t| t.verdict == v).count();
    [
        (Verdict::Folded, "folded: truly higher than it shows"),
        (Verdict::Direct, "direct: real where it shows"),
        (Verdict::Open, "open: not settled by this recording"),
    ]
    .map(|(v, meaning)| Tally {
        word: verdict_word(v),
        glyph: glyph(v),
        number: count(of(v), "tone", "tones"),
        meaning,
    })
}
