//! Tones of different recordings that show at the same frequency.

use super::sorted::{Digest, Sorter};
use statrs::function::gamma::gamma_lr;
use std::io;

/// Tones of one sample rate that lie together.
#[derive(Debug, Clone, PartialEq)]
pub struct Group {
    /// Index of the sample rate.
    pub rate: u32,
    /// Lowest and highest seen frequency, Hz. Groups of a rate do not overlap.
    pub low_hz: f64,
    /// See `low_hz`.
    pub high_hz: f64,
    /// Mean seen frequency, Hz.
    pub mean_hz: f64,
    /// ±, 95 %, of one tone's seen frequency, Hz.
    pub reach_hz: f64,
    /// In how many recordings.
    pub recordings: u32,
    /// Recordings expected to have a tone this close by pure chance.
    pub by_luck: f64,
    /// Chance of as many as there are, if only luck were at work.
    pub chance: f64,
    /// Mean probability that it is folded.
    pub folded: f64,
    /// Level of the strongest, dBFS.
    pub level_dbfs: f64,
}

/// What there is of one sample rate.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Rate {
    /// Hz.
    pub rate_hz: f64,
    /// Recordings read.
    pub recordings: u64,
    /// Tones in them.
    pub tones: u64,
}

/// Measured rates this close, relative, are one: CSV logs tell theirs by their time
/// stamps.
const SAME_RATE: f64 = 2e-4;

/// Index of a rate, added if new.
pub fn rate_index(rates: &mut Vec<Rate>, rate_hz: f64) -> usize {
    let known = rates
        .iter()
        .position(|r| (r.rate_hz - rate_hz).abs() <= SAME_RATE * r.rate_hz);
    known.unwrap_or_else(|| {
        rates.push(Rate {
            rate_hz,
            recordings: 0,
            tones: 0,
        });
        rates.len() - 1
    })
}

/// Two measurements of one tone differ by less than this many 95 % half-widths of
/// their difference, but for 3 in 1000.
const TOGETHER: f64 = 1.5;

/// Groups held at most; the rarest and weakest go first.
const MOST_GROUPS: usize = 40_000;

/// All groups, also of one tone only, by rate and frequency.
#[derive(Debug, Clone, Default)]
pub struct Groups {
    /// The most frequent, and of those the strongest.
    pub kept: Vec<Group>,
    /// How many there were.
    pub total: usize,
}

/// Finds the groups of all tones.
///
/// # Errors
/// If temporary files fail.
pub fn groups(tones: Sorter, rates: &[Rate]) -> io::Result<Groups> {
    let mut found = Groups::default();
    let mut open: Vec<Digest> = Vec::new();
    let (mut sum, mut reach) = (0.0, 0.0);
    tones.drain(|tone| {
        let n = open.len() as f64;
        let together = open.first().is_some_and(|first| {
            first.rate == tone.rate
                && tone.seen_hz - sum / n <= TOGETHER * (reach / n).hypot(tone.reach_hz)
        });
        if !together {
            found.close(&mut open, rates);
            (sum, reach) = (0.0, 0.0);
        }
        sum += tone.seen_hz;
        reach += tone.reach_hz;
        open.push(tone);
        Ok(())
    })?;
    found.close(&mut open, rates);
    found.thin();
    found
        .kept
        .sort_by(|a, b| a.rate.cmp(&b.rate).then(a.low_hz.total_cmp(&b.low_hz)));
    Ok(found)
}

impl Groups {
    fn close(&mut self, open: &mut Vec<Digest>, rates: &[Rate]) {
        let (Some(&first), Some(&last)) = (open.first(), open.last()) else {
            return;
        };
        let n = open.len() as f64;
        let mean = |of: fn(&Digest) -> f64| open.iter().map(of).sum::<f64>() / n;
        let (mean_hz, reach_hz, folded) = (
            mean(|d| d.seen_hz),
            mean(|d| d.reach_hz),
            mean(|d| d.folded),
        );
        let level_dbfs = open
            .iter()
            .map(|d| d.level_dbfs)
            .fold(f64::NEG_INFINITY, f64::max);
        let mut recordings: Vec<u32> = open.drain(..).map(|d| d.recording).collect();
        recordings.sort_unstable();
        recordings.dedup();
        let recordings = recordings.len() as u32;
        let by_luck = rates.get(first.rate as usize).map_or(0.0, |r| {
            // In every other recording, tones spread evenly over the band.
            let window = 2.0 * TOGETHER * std::f64::consts::SQRT_2 * reach_hz;
            let others = 1.0 - 1.0 / r.recordings.max(1) as f64;
            others * r.tones as f64 * window / (0.5 * r.rate_hz)
        });
        self.total += 1;
        self.kept.push(Group {
            rate: first.rate,
            low_hz: first.seen_hz,
            high_hz: last.seen_hz,
            mean_hz,
            reach_hz,
            recordings,
            by_luck,
            chance: poisson_tail(recordings.saturating_sub(1), by_luck),
            folded,
            level_dbfs,
        });
        if self.kept.len() >= 2 * MOST_GROUPS {
            self.thin();
        }
    }

    fn thin(&mut self) {
        self.kept.sort_by(|a, b| {
            b.recordings
                .cmp(&a.recordings)
                .then(b.level_dbfs.total_cmp(&a.level_dbfs))
                .then(a.rate.cmp(&b.rate))
                .then(a.low_hz.total_cmp(&b.low_hz))
        });
        self.kept.truncate(MOST_GROUPS);
    }

    /// The largest chance at which a group still counts as recurring, such that of
    /// those that do one in twenty is luck (Benjamini and Hochberg 1995).
    pub fn highest_chance(&self) -> f64 {
        const FALSE_SHARE: f64 = 0.05;
        let mut chances: Vec<f64> = self
            .kept
            .iter()
            .filter(|g| g.recordings > 1)
            .map(|g| g.chance)
            .collect();
        chances.sort_by(f64::total_cmp);
        let total = self.total.max(1) as f64;
        chances
            .iter()
            .enumerate()
            .rev()
            .find(|&(i, &p)| p <= FALSE_SHARE * (i + 1) as f64 / total)
            .map_or(0.0, |(_, &p)| p)
    }

    /// The group that a tone belongs to.
    pub fn find(&self, rate: u32, seen_hz: f64) -> Option<usize> {
        let after = self
            .kept
            .partition_point(|g| (g.rate, g.low_hz) <= (rate, seen_hz));
        let at = after.checked_sub(1)?;
        let group = self.kept.get(at)?;
        (group.rate == rate && seen_hz <= group.high_hz).then_some(at)
    }
}

/// Probability of `least` or more events where `mean` are expected: P(N ≥ k) is the
/// regularised lower incomplete gamma function at (k, mean).
pub fn poisson_tail(least: u32, mean: f64) -> f64 {
    if least == 0 {
        1.0
    } else if mean <= 0.0 {
        0.0
    } else {
        gamma_lr(f64::from(least), mean)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::{RngExt, SeedableRng, rngs::StdRng};

    #[test]
    fn the_tail_is_the_sum_it_stands_for() {
        for mean in [0.01f64, 0.7, 3.0] {
            let mut term = (-mean).exp();
            let mut below = 0.0;
            for k in 0..8u32 {
                assert!((poisson_tail(k, mean) - (1.0 - below)).abs() < 1e-12);
                below += term;
                term *= mean / f64::from(k + 1);
            }
        }
    }

    /// 200 recordings of 40 tones: three that come back among 37 anywhere.
    #[test]
    fn luck_does_not_recur() {
        let folder = tempfile::tempdir().unwrap();
        let mut random = StdRng::seed_from_u64(11);
        let rates = [Rate {
            rate_hz: 8000.0,
            recordings: 200,
            tones: 200 * 40,
        }];
        let mut sorter = Sorter::new(folder.path());
        let truth = [(100.0, 200u32), (1234.5, 40), (3999.0, 12)];
        for recording in 0..200 {
            let mut put = |seen_hz: f64| {
                let digest = Digest {
                    rate: 0,
                    recording,
                    seen_hz,
                    reach_hz: 0.02,
                    folded: 0.5,
                    level_dbfs: -50.0,
                };
                sorter.push(digest).unwrap();
            };
            for &(hz, times) in &truth {
                if recording < times {
                    put(hz + 0.01 * (random.random::<f64>() - 0.5));
                }
            }
            for _ in 0..37 {
                put(4000.0 * random.random::<f64>());
            }
        }
        let found = groups(sorter, &rates).unwrap();
        let limit = found.highest_chance();
        let recurring: Vec<&Group> = found
            .kept
            .iter()
            .filter(|g| g.recordings > 1 && g.chance <= limit)
            .collect();
        // one in twenty may be luck: of 3, none or one
        assert!((3..=4).contains(&recurring.len()), "{recurring:?}");
        for (hz, times) in truth {
            let at = found.find(0, hz).expect("a group there");
            let n = found.kept[at].recordings;
            assert!((times..times + 4).contains(&n), "{hz} Hz: {n}");
        }
        // and by luck alone pairs are common
        assert!(found.kept.iter().filter(|g| g.recordings == 2).count() > 100);
    }
}
