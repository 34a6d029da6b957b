//! What comes back: tones of one source's line, tones seen at one frequency, and tones
//! that keep their true frequency at different sample rates.
//!
//! Three passes over the finished lists: which tones lie together, what is said of each
//! group and each line, and, where rates differ, the statistics of what is settled.

use super::error::ScanError;
use super::groups::{Group, Groups, Rate, groups, rate_index};
use super::results::{RECURRING, RECURRING_PART};
use super::settle::{Claim, Kept, Prior, settle};
use super::sorted::{Digest, Sorter};
use super::tally::{Heard, Named, Recording, for_each_recording};
use super::trend::Trend;
use crate::fold::Rung;
use crate::report::suspect_list::defuse;
use crate::report::text::{decimals, with_u95};
use crate::sources::Site;
use crate::suspects::Verdict;
use std::collections::{BTreeMap, HashSet};
use std::fs::File;
use std::io::{BufWriter, Write};
use std::path::Path;

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

/// A crystal's drift with temperature, relative (±20 ppm, common practice): tones of
/// one source need not lie closer.
const DRIFT: f64 = 20e-6;
/// A suspect counts as a tone's source from here on.
const LIKELY: f64 = 0.5;
/// Suspects told apart for one group.
const MOST_SUSPECTS: usize = 16;

/// What the scan as a whole shows.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Overview {
    /// Recordings read.
    pub read: u64,
    /// Recordings that failed.
    pub failed: u64,
    /// Tones, and those folded, and those open.
    pub tones: u64,
    /// See `tones`.
    pub folded: u64,
    /// See `tones`.
    pub open: u64,
    /// Listed sources by the number of recordings in which one is the most probable
    /// cause of a tone, most first.
    pub sources: Vec<(String, u64)>,
    /// Rows of the list by what they rest on.
    pub by_source: usize,
    /// See `by_source`.
    pub by_seen: usize,
    /// See `by_source`.
    pub by_true: usize,
    /// Of `by_true`, those folded in some recording.
    pub true_folded: usize,
}

/// Sums over the recordings that show one thing.
#[derive(Debug, Clone, Default)]
struct Sums {
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
    fn add(&mut self, recording: u32, rate: u32, tone: &Heard, hz: f64) {
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

    fn recordings(&self) -> u32 {
        self.level.count
    }

    /// Suspects with their mean probability, most probable first.
    fn ranked(&self) -> Vec<(&Named, f64)> {
        let n = f64::from(self.recordings().max(1));
        let mut ranked: Vec<(&Named, f64)> =
            self.suspects.iter().map(|(s, sum)| (s, sum / n)).collect();
        ranked.sort_by(|a, b| b.1.total_cmp(&a.1));
        ranked
    }
}

/// What is wanted of the finished lists.
pub struct Question<'a> {
    /// The output folder.
    pub folder: &'a Path,
    /// What is known of the place.
    pub site: &'a Site,
    /// Names of the recordings, in order, as the lists show them.
    pub names: &'a dyn Fn(u32) -> String,
}

/// Reads the finished lists, writes what recurs, and sums up.
///
/// # Errors
/// If a file cannot be read or written.
pub fn write(question: &Question) -> Result<Overview, ScanError> {
    let folder = question.folder;
    let mut overview = Overview::default();
    let (mut rates, tones) = first_pass(question, &mut overview)?;
    let groups = groups(tones, &rates).map_err(ScanError::at(folder))?;
    let second = second_pass(question, &groups, &mut rates)?;
    overview.sources = second.named;
    let claims: Vec<Vec<Claim>> = second.groups.iter().map(claims).collect();
    let kept = settle(
        &groups.kept,
        &rates,
        &Prior {
            clock_ppm: question.site.recorder.assumed_clock_ppm(),
            bandwidth_hz: question.site.recorder.front_end.bandwidth_hz,
            claims: &claims,
        },
    );
    let settled = third_pass(question, &groups, &kept, &mut rates)?;
    let mut rows = Vec::new();
    let mut covered = HashSet::new();
    for (kept, sums) in kept.iter().zip(&settled) {
        let row = Row::settled(kept, sums);
        overview.true_folded += usize::from(row.verdicts.contains(&Verdict::Folded));
        covered.extend(kept.members.iter().map(|(i, _)| *i));
        rows.push(row);
    }
    overview.by_true = rows.len();
    for (key, sums) in &second.lines {
        // Told already, with more to it.
        let told = rows.iter().any(|r| {
            r.basis == "true"
                && r.recordings == sums.recordings()
                && key.as_str() == line_key(&r.suspect)
        });
        if sums.recordings() > 1 && !told {
            rows.push(Row::of_line(sums));
            overview.by_source += 1;
        }
    }
    let limit = groups.highest_chance();
    for (i, (group, sums)) in groups.kept.iter().zip(&second.groups).enumerate() {
        let recurs = group.recordings > 1 && group.chance <= limit;
        let told = covered.contains(&i) || is_one_line(sums, &second.lines);
        if recurs && !told {
            rows.push(Row::seen(group, sums));
            overview.by_seen += 1;
        }
    }
    rows.sort_by(|a, b| {
        let order = |r: &Row| {
            ["true", "source", "seen"]
                .iter()
                .position(|&o| o == r.basis)
        };
        order(a)
            .cmp(&order(b))
            .then(b.recordings.cmp(&a.recordings))
            .then(a.hz.mean().total_cmp(&b.hz.mean()))
    });
    save(question, &rows, &rates)?;
    Ok(overview)
}

fn first_pass(
    question: &Question,
    overview: &mut Overview,
) -> Result<(Vec<Rate>, Sorter), ScanError> {
    let mut rates = Vec::new();
    let mut tones = Sorter::new(question.folder);
    overview.failed = for_each_recording(question.folder, |recording, heard| {
        overview.read += 1;
        let rate = rate_index(&mut rates, recording.rate_hz);
        if let Some(r) = rates.get_mut(rate) {
            r.recordings += 1;
            r.tones += heard.len() as u64;
        }
        for tone in heard {
            overview.tones += 1;
            match Verdict::from_folded_probability(tone.folded_probability) {
                Verdict::Folded => overview.folded += 1,
                Verdict::Open => overview.open += 1,
                Verdict::Direct => {}
            }
            tones.push(Digest {
                rate: rate as u32,
                recording: recording.index,
                seen_hz: tone.seen_hz,
                reach_hz: reach(recording, tone),
                folded: tone.folded_probability,
                level_dbfs: tone.level_dbfs,
            })?;
        }
        Ok(())
    })?;
    Ok((rates, tones))
}

/// How far from here the same tone may show in another recording, ±, 95 %.
fn reach(recording: &Recording, tone: &Heard) -> f64 {
    let cell = recording.rate_hz / recording.samples.max(1) as f64;
    // A tone may stray by less than can be told from steady.
    let measured = tone.seen_hz_u95.max(0.5 * cell);
    measured.hypot(tone.wander_hz).hypot(DRIFT * tone.seen_hz)
}

struct Second {
    /// One for each group.
    groups: Vec<Sums>,
    /// One for each line of a listed source that is a tone's likely cause.
    lines: BTreeMap<String, Sums>,
    named: Vec<(String, u64)>,
}

/// A line among all lines.
fn line_key(named: &Named) -> String {
    format!("{}\u{0}{}", named.suspect, named.line)
}

fn second_pass(
    question: &Question,
    groups: &Groups,
    rates: &mut Vec<Rate>,
) -> Result<Second, ScanError> {
    let listed: HashSet<String> = question
        .site
        .catalogue
        .sources
        .iter()
        .map(|s| defuse(&s.name))
        .collect();
    let mut second = Second {
        groups: vec![Sums::default(); groups.kept.len()],
        lines: BTreeMap::new(),
        named: Vec::new(),
    };
    let mut named: BTreeMap<String, u64> = BTreeMap::new();
    for_each_recording(question.folder, |recording, heard| {
        let rate = rate_index(rates, recording.rate_hz) as u32;
        let mut here = HashSet::new();
        for tone in heard {
            let group = groups.find(rate, tone.seen_hz);
            if let Some(sums) = group.and_then(|g| second.groups.get_mut(g)) {
                sums.add(recording.index, rate, tone, tone.seen_hz);
            }
            let Some(best) = tone.suspects.first() else {
                continue;
            };
            if !listed.contains(&best.suspect) {
                continue;
            }
            if here.insert(best.suspect.as_str()) {
                *named.entry(best.suspect.clone()).or_default() += 1;
            }
            if let Some(hz) = best.true_hz
                && best.probability >= LIKELY
            {
                let sums = second.lines.entry(line_key(best)).or_default();
                sums.add(recording.index, rate, tone, hz);
            }
        }
        Ok(())
    })?;
    second.named = named.into_iter().collect();
    second
        .named
        .sort_by(|a, b| b.1.cmp(&a.1).then_with(|| a.0.cmp(&b.0)));
    Ok(second)
}

/// What the recordings of a group say of listed true frequencies.
fn claims(sums: &Sums) -> Vec<Claim> {
    sums.ranked()
        .into_iter()
        .filter_map(|(named, probability)| {
            Some(Claim {
                true_hz: named.true_hz?,
                probability,
            })
        })
        .collect()
}

/// The true frequency on a rung that a tone seen at `seen_hz` has.
fn on_rung(rung: &Rung, rate_hz: f64, seen_hz: f64) -> f64 {
    let multiple = (rung.zone / 2) as f64 * rate_hz;
    multiple + rung.sense.sign() * seen_hz
}

fn third_pass(
    question: &Question,
    groups: &Groups,
    kept: &[Kept],
    rates: &mut Vec<Rate>,
) -> Result<Vec<Sums>, ScanError> {
    let mut all = vec![Sums::default(); kept.len()];
    if kept.is_empty() {
        return Ok(all);
    }
    let of: BTreeMap<usize, (usize, Rung)> = kept
        .iter()
        .enumerate()
        .flat_map(|(k, set)| set.members.iter().map(move |(g, s)| (*g, (k, s.rung))))
        .collect();
    for_each_recording(question.folder, |recording, heard| {
        let rate = rate_index(rates, recording.rate_hz) as u32;
        for tone in heard {
            let group = groups.find(rate, tone.seen_hz);
            if let Some((k, rung)) = group.and_then(|g| of.get(&g))
                && let Some(sums) = all.get_mut(*k)
            {
                let hz = on_rung(rung, recording.rate_hz, tone.seen_hz);
                sums.add(recording.index, rate, tone, hz);
            }
        }
        Ok(())
    })?;
    Ok(all)
}

/// Do all tones of a group go to one line that has a row of its own?
fn is_one_line(sums: &Sums, lines: &BTreeMap<String, Sums>) -> bool {
    sums.ranked().first().is_some_and(|(named, p)| {
        *p >= LIKELY
            && lines
                .get(&line_key(named))
                .is_some_and(|line| line.recordings() >= sums.recordings())
    })
}

/// A row of the list.
struct Row {
    basis: &'static str,
    recordings: u32,
    first: u32,
    last: u32,
    /// Per rate: index, seen frequency with its decimals.
    seen: Vec<(u32, String)>,
    true_hz: Option<(f64, f64)>,
    hz: Trend,
    level: Trend,
    verdicts: Vec<Verdict>,
    folded: Vec<f64>,
    suspect: Named,
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

    fn seen(group: &Group, sums: &Sums) -> Row {
        Row {
            by_luck: Some(group.by_luck),
            ..Row::new("seen", sums)
        }
    }

    fn of_line(sums: &Sums) -> Row {
        let row = Row::new("source", sums);
        let u95 = row.true_hz.map_or(0.0, |(_, u95)| u95);
        Row {
            true_hz: Some((sums.hz.mean(), u95)),
            ..row
        }
    }

    /// What the rates settle goes back into the suspects: only those at the settled
    /// true frequency are left, each in proportion to what the recordings gave it.
    fn settled(kept: &Kept, sums: &Sums) -> Row {
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
fn save(question: &Question, rows: &[Row], rates: &[Rate]) -> Result<(), ScanError> {
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
