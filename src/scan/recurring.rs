//! What comes back: tones of one source's line, tones seen at one frequency, and tones
//! that keep their true frequency at different sample rates.
//!
//! Three passes over the finished lists: which tones lie together, what is said of each
//! group and each line, and, where rates differ, the statistics of what is settled.

use super::error::ScanError;
use super::groups::{Groups, Rate, groups, rate_index};
use super::rows::{Row, Sums, line_key, save};
use super::settle::{Claim, Kept, Prior, settle};
use super::sorted::{Digest, Sorter};
use super::tally::{Heard, Recording, for_each_recording};
use crate::fold::Rung;
use crate::report::suspect_list::defuse;
use crate::sources::Site;
use crate::suspects::Verdict;
use std::collections::{BTreeMap, HashSet};
use std::path::Path;

/// A crystal's drift with temperature, relative (±20 ppm, common practice): tones of
/// one source need not lie closer.
const DRIFT: f64 = 20e-6;
/// A suspect counts as a tone's source from here on.
const LIKELY: f64 = 0.5;
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
