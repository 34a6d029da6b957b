//! The rows of what recurs: sums over the recordings that show one thing, and how they
//! are put into columns.

use super::error::ScanError;
use super::groups::{Group, Rate};
use super::recurring::Question;
use super::results::{RECURRING, RECURRING_PART};
use super::settle::Kept;
use super::tally::{Heard, Named};
use super::trend::Trend;
use crate::report::text::{decimals, with_u95};
use crate::suspects::Verdict;
use std::fs::File;
use std::io::{BufWriter, Write};

/// Columns of the list.
pub const COLUMNS: [&str; 21] = [
    "basis",
    "rates_hz",
    "recordings",
    "of",
    "first",
    "last",
    "seen_hz",
    "true_hz",
    "true_hz_u95",
    "range_hz",
    "hz_trend",
    "hz_trend_u95",
    "level_dbfs",
    "level_trend_db",
    "level_trend_u95",
    "verdict",
    "folded_probability",
    "suspect",
    "line",
    "probability",
    "by_luck",
];

/// Suspects told apart for one group.
const MOST_SUSPECTS: usize = 16;

/// Sums over the recordings that show one thing.
#[derive(Debug, Clone, Default)]
pub(super) struct Sums {
    last_recording: Option<u32>,
    first: u32,
    /// Per rate: its index, seen frequency, probability of being folded.
    seen: Vec<(u32, Trend, f64)>,
    hz: Trend,
    level: Trend,
    suspects: Vec<(Named, f64)>,
}

impl Sums {
    /// Adds a tone; of several in one recording only the first.
    pub(super) fn add(&mut self, recording: u32, rate: u32, tone: &Heard, hz: f64) {
        if self.last_recording == Some(recording) {
            return;
        }
        if self.last_recording.is_none() {
            self.first = recording;
        }
        self.last_recording = Some(recording);
        self.hz.add(recording, hz);
        self.level.add(recording, tone.level_dbfs);
        let at = self.seen.iter().position(|s| s.0 == rate);
        let at = at.unwrap_or_else(|| {
            self.seen.push((rate, Trend::default(), 0.0));
            self.seen.len() - 1
        });
        if let Some((_, seen, folded)) = self.seen.get_mut(at) {
            seen.add(recording, tone.seen_hz);
            *folded += tone.folded_probability;
        }
        for suspect in &tone.suspects {
            self.count(suspect);
        }
    }

    fn count(&mut self, suspect: &Named) {
        // `tone 3` is another tone in every recording.
        let name = if suspect.suspect.starts_with("tone ") {
            "other tones"
        } else {
            &suspect.suspect
        };
        let room = self.suspects.len() < MOST_SUSPECTS;
        let known = self
            .suspects
            .iter_mut()
            .find(|(n, _)| n.suspect == name && n.line == suspect.line);
        match known {
            Some((_, sum)) => *sum += suspect.probability,
            None if room => {
                let named = Named {
                    suspect: name.to_owned(),
                    ..suspect.clone()
                };
                self.suspects.push((named, suspect.probability));
            }
            None => {}
        }
    }

    pub(super) fn recordings(&self) -> u32 {
        self.level.count
    }

    /// Suspects with their mean probability, most probable first.
    pub(super) fn ranked(&self) -> Vec<(&Named, f64)> {
        let n = f64::from(self.recordings().max(1));
        let mut ranked: Vec<(&Named, f64)> =
            self.suspects.iter().map(|(s, sum)| (s, sum / n)).collect();
        ranked.sort_by(|a, b| b.1.total_cmp(&a.1));
        ranked
    }
}

/// A line among all lines.
pub(super) fn line_key(named: &Named) -> String {
    format!("{}\u{0}{}", named.suspect, named.line)
}

/// A row of the list.
pub(super) struct Row {
    pub(super) basis: &'static str,
    pub(super) recordings: u32,
    first: u32,
    last: u32,
    /// Per rate: index, seen frequency with its decimals.
    seen: Vec<(u32, String)>,
    true_hz: Option<(f64, f64)>,
    pub(super) hz: Trend,
    level: Trend,
    pub(super) verdicts: Vec<Verdict>,
    folded: Vec<f64>,
    pub(super) suspect: Named,
    probability: f64,
    by_luck: Option<f64>,
}

impl Row {
    fn new(basis: &'static str, sums: &Sums) -> Row {
        let mut seen = sums.seen.clone();
        seen.sort_by_key(|s| s.0);
        let folded: Vec<f64> = seen
            .iter()
            .map(|(_, t, sum)| sum / f64::from(t.count.max(1)))
            .collect();
        let (suspect, probability) = sums
            .ranked()
            .first()
            .map_or((Named::default(), 0.0), |(n, p)| ((*n).clone(), *p));
        let text = |t: &Trend| format!("{:.*}", decimals(t.range().max(1e-4)), t.mean());
        Row {
            basis,
            recordings: sums.recordings(),
            first: sums.first,
            last: sums.last_recording.unwrap_or(sums.first),
            seen: seen.iter().map(|(r, t, _)| (*r, text(t))).collect(),
            true_hz: suspect.true_hz.map(|hz| (hz, suspect.true_hz_u95)),
            hz: sums.hz,
            level: sums.level,
            verdicts: folded
                .iter()
                .map(|&p| Verdict::from_folded_probability(p))
                .collect(),
            folded,
            suspect,
            probability,
            by_luck: None,
        }
    }

    pub(super) fn seen(group: &Group, sums: &Sums) -> Row {
        Row {
            by_luck: Some(group.by_luck),
            ..Row::new("seen", sums)
        }
    }

    pub(super) fn of_line(sums: &Sums) -> Row {
        let row = Row::new("source", sums);
        let u95 = row.true_hz.map_or(0.0, |(_, u95)| u95);
        Row {
            true_hz: Some((sums.hz.mean(), u95)),
            ..row
        }
    }

    /// What the rates settle goes back into the suspects: only those at the settled
    /// true frequency are left, each in proportion to what the recordings gave it.
    pub(super) fn settled(kept: &Kept, sums: &Sums) -> Row {
        let row = Row::new("true", sums);
        let sure = kept
            .members
            .iter()
            .map(|(_, s)| s.probability)
            .fold(1.0, f64::min);
        let true_hz = sums.hz.mean();
        let near = |n: &Named| {
            let reach = n.true_hz_u95.hypot(sums.hz.range()).max(1e-4 * true_hz);
            n.true_hz.is_some_and(|hz| (hz - true_hz).abs() <= reach)
        };
        let ranked = sums.ranked();
        let there: f64 = ranked.iter().filter(|(n, _)| near(n)).map(|(_, p)| p).sum();
        // Of `unlisted` only what lies on the same rung competes: as much as the
        // recordings leave to it at most.
        let unlisted: f64 = ranked
            .iter()
            .filter(|(n, _)| n.true_hz.is_none())
            .map(|(_, p)| p)
            .sum();
        let best = ranked.iter().find(|(n, _)| near(n));
        let (suspect, probability) = match best {
            Some((n, p)) if *p >= unlisted => ((*n).clone(), sure * p / (there + unlisted)),
            _ => {
                let nobody = Named {
                    suspect: "unlisted".into(),
                    ..Named::default()
                };
                (nobody, sure * unlisted / (there + unlisted).max(1e-12))
            }
        };
        Row {
            true_hz: Some((true_hz, 0.5 * sums.hz.range())),
            verdicts: kept
                .members
                .iter()
                .map(|(_, s)| Verdict::from_folded_probability(s.folded))
                .collect(),
            folded: kept.members.iter().map(|(_, s)| s.folded).collect(),
            suspect,
            probability,
            ..row
        }
    }

    fn cells(&self, question: &Question, rates: &[Rate]) -> Vec<String> {
        let joined = |cells: Vec<String>| cells.join("+");
        let rate = |i: u32| rates.get(i as usize).copied();
        let of: u64 = self
            .seen
            .iter()
            .filter_map(|s| rate(s.0))
            .map(|r| r.recordings)
            .sum();
        let (true_hz, true_u95) = self
            .true_hz
            .map_or_else(Default::default, |(hz, u95)| with_u95(hz, u95.max(1e-4)));
        let pair = |rise: Option<(f64, f64)>| {
            rise.map_or_else(Default::default, |(rise, u95)| {
                with_u95(rise, u95.max(1e-4))
            })
        };
        let (hz_trend, hz_u95) = pair(self.hz.rise());
        let (level_trend, level_u95) = pair(self.level.rise());
        let verdict = |v: &Verdict| match v {
            Verdict::Direct => "direct".to_owned(),
            Verdict::Folded => "folded".to_owned(),
            Verdict::Open => "open".to_owned(),
        };
        vec![
            self.basis.to_owned(),
            joined(
                self.seen
                    .iter()
                    .filter_map(|s| rate(s.0))
                    .map(|r| r.rate_hz.to_string())
                    .collect(),
            ),
            self.recordings.to_string(),
            of.to_string(),
            (question.names)(self.first),
            (question.names)(self.last),
            joined(self.seen.iter().map(|s| s.1.clone()).collect()),
            true_hz,
            true_u95,
            format!("{:.4}", self.hz.range()),
            hz_trend,
            hz_u95,
            format!("{:.2}", self.level.mean()),
            level_trend,
            level_u95,
            joined(self.verdicts.iter().map(verdict).collect()),
            joined(self.folded.iter().map(|p| format!("{p:.6}")).collect()),
            self.suspect.suspect.clone(),
            self.suspect.line.clone(),
            format!("{:.6}", self.probability),
            self.by_luck.map_or_else(String::new, |l| format!("{l:.4}")),
        ]
    }
}

/// Writes the list beside its place and moves it there once it is whole.
pub(super) fn save(question: &Question, rows: &[Row], rates: &[Rate]) -> Result<(), ScanError> {
    let part = question.folder.join(RECURRING_PART);
    let place = question.folder.join(RECURRING);
    let at = || ScanError::at(&place);
    let written = (|| -> std::io::Result<()> {
        let mut out = BufWriter::new(File::create(&part)?);
        {
            let mut csv = csv::WriterBuilder::new()
                .terminator(csv::Terminator::CRLF)
                .from_writer(&mut out);
            csv.write_record(COLUMNS)?;
            for row in rows {
                csv.write_record(row.cells(question, rates))?;
            }
            csv.flush()?;
        }
        out.flush()?;
        out.get_ref().sync_data()?;
        std::fs::rename(&part, &place)
    })();
    if written.is_err() {
        // Nothing half-written stays behind; the error matters more than this one.
        let _ = std::fs::remove_file(&part);
    }
    written.map_err(at())
}
