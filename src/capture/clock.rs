//! From time stamps to frame numbers and a sample rate.
//!
//! Stamps jitter, are rounded, repeat, step back and leave gaps. A
//! [`ClockPlan`], found from the first rows, says what a sample period is; a
//! [`Clock`] then follows the stamps row by row, so that every pass over the
//! file decides alike without holding a stamp.

use super::clock_plan::ClockPlan;

/// How far a row may be late, in periods, before samples are missing.
const LATE: f64 = 0.6;
/// A step of more periods than this is a gap.
const GAP_STEP: f64 = 1.5;
/// How early a row must be, in periods, to be out of order.
const EARLY: f64 = 0.75;
/// Share of a row's deviation that the followed time line takes over.
const GAIN: f64 = 0.1;
/// Rows after which the fitted period is better than the planned one.
const FITTED: f64 = 256.0;

/// What to do with a row.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Advance {
    /// It is a frame, after so many missing ones.
    Frame { missing: u64 },
    /// It repeats the row before.
    Drop,
}

/// Follows the stamps of one pass.
#[derive(Debug, Clone)]
pub(super) struct Clock {
    plan: ClockPlan,
    /// Time of the last frame on the followed line.
    line: f64,
    last: f64,
    /// Added to stamps since time was set back.
    offset: f64,
    /// The offset before, as long as one bad stamp may have changed it.
    previous_offset: Option<f64>,
    frame: u64,
    started: bool,
    /// Stamp of the last row, where it fits those before it.
    accepted: Option<f64>,
    fit: Fit,
    pub counts: Counts,
}

/// What happened on the way.
#[derive(Debug, Clone, Copy, Default, PartialEq)]
pub(super) struct Counts {
    pub gaps: u64,
    pub missing: u64,
    pub repeated: u64,
    pub back: u64,
    pub unstamped: u64,
    /// Sum of squared deviations from the followed line, in periods, and rows.
    jitter: f64,
    rows: u64,
}

impl Clock {
    pub(super) fn new(plan: ClockPlan) -> Clock {
        Clock {
            plan,
            line: 0.0,
            last: 0.0,
            offset: 0.0,
            previous_offset: None,
            frame: 0,
            started: false,
            accepted: None,
            fit: Fit::default(),
            counts: Counts::default(),
        }
    }

    /// Takes the stamp of the next row, in seconds; `None` if it has none.
    pub(super) fn take(&mut self, stamp: Option<f64>) -> Advance {
        self.accepted = None;
        let Some(stamp) = stamp else {
            self.counts.unstamped += 1;
            if self.started {
                self.step(1, 0.0);
            }
            // Before the first stamp there is no time line to stand on.
            return if self.started {
                Advance::Frame { missing: 0 }
            } else {
                Advance::Drop
            };
        };
        if !self.started {
            self.started = true;
            self.line = stamp + self.plan.start;
            self.last = stamp;
            self.fit.add(0.0, stamp);
            self.accepted = Some(stamp);
            return Advance::Frame { missing: 0 };
        }
        let period = self.period();
        // In periods: half of the scatter each way, and what the line sways.
        let scatter = self.plan.scatter / period;
        let sway = 0.55 * scatter + 0.25;
        let (latest, earliest) = (sway.max(LATE), -sway.max(EARLY));
        let late = |time: f64| (time - self.line) / period - 1.0;
        let step = (stamp - self.last) / period;
        let repeats = stamp == self.last && !self.plan.shared;
        self.last = stamp;

        if let Some(offset) = self.previous_offset.take() {
            // One bad stamp only: time goes on as before it.
            if late(stamp + offset).abs() < latest {
                self.offset = offset;
            }
        }
        let deviation = late(stamp + self.offset);
        if deviation < earliest {
            if repeats {
                self.counts.repeated += 1;
                return Advance::Drop;
            }
            self.counts.back += 1;
            self.step(1, 0.0);
            self.previous_offset = Some(self.offset);
            self.offset = self.line - stamp;
            return Advance::Frame { missing: 0 };
        }
        let mut missing = 0;
        if deviation > latest && step > GAP_STEP * scatter.max(1.0) {
            // Rounded down by `as` only beyond 2^64, which is refused anyway.
            missing = deviation.round().max(1.0) as u64;
            self.counts.gaps += 1;
            self.counts.missing = self.counts.missing.saturating_add(missing);
        }
        let rest = deviation - missing as f64;
        self.counts.jitter += rest * rest;
        self.counts.rows += 1;
        self.step(missing.saturating_add(1), rest);
        self.fit.add(self.frame as f64, stamp + self.offset);
        // After the clock was set back, times no longer tell how far apart rows are.
        self.accepted = (self.offset == 0.0).then_some(stamp);
        Advance::Frame { missing }
    }

    /// Stamp of the row taken last; `None` if it had none, or one out of line.
    pub(super) fn accepted(&self) -> Option<f64> {
        self.accepted
    }

    /// Moves the line on by `frames` and towards a row that is `late` periods
    /// behind it.
    fn step(&mut self, frames: u64, late: f64) {
        let period = self.period();
        let gain = GAIN / (1.0 + self.plan.scatter / period);
        self.line += period * (frames as f64 + gain * late);
        self.frame = self.frame.saturating_add(frames);
    }

    /// Best period so far. The fit is held near the plan, lest a bad stamp
    /// among the first bends it.
    fn period(&self) -> f64 {
        const NEAR: f64 = 0.05;
        let plan = self.plan.period;
        match self.fit.slope() {
            Some(slope) if self.fit.n >= FITTED && (slope / plan - 1.0).abs() < NEAR => slope,
            _ => plan,
        }
    }

    /// Samples per second by least squares over all stamps; rounded to a whole
    /// number where the stamps do not tell the two apart (95 %).
    pub(super) fn rate_hz(&self) -> f64 {
        let slope = self
            .fit
            .slope()
            .filter(|&slope| slope > 0.0)
            .unwrap_or(self.plan.period);
        let rate = 1.0 / slope;
        let whole = rate.round();
        let u95 = crate::units::U95 * self.fit.slope_error() / slope * rate;
        // Stamps are often rounded alike, so that the fit is better than its
        // scatter; a part in 10^9 is below any clock.
        if whole > 0.0 && (rate - whole).abs() <= u95.max(1e-9 * rate) {
            whole
        } else {
            rate
        }
    }

    /// Says how exact the stamps are, where that is notable.
    pub(super) fn note(&self, notes: &mut Vec<String>) {
        const NOTABLE: f64 = 0.05;
        let ClockPlan {
            scatter, shared, ..
        } = self.plan;
        let rms = (self.counts.jitter / self.counts.rows.max(1) as f64).sqrt();
        if shared {
            notes.push(format!(
                "time stamps come in steps of {scatter:.3} s, about {:.1} samples each: taken as evenly spaced",
                scatter / self.period()
            ));
        } else if rms > NOTABLE {
            notes.push(format!(
                "time stamps scatter by {:.0} % of the sample period (rms): taken as evenly spaced",
                100.0 * rms
            ));
        }
    }
}

/// Least-squares line through points that come one by one, by updated means
/// and centred sums (Welford 1962), which lose no digits over long files.
#[derive(Debug, Clone, Copy, Default)]
struct Fit {
    n: f64,
    mean_x: f64,
    mean_y: f64,
    xx: f64,
    xy: f64,
    yy: f64,
}

impl Fit {
    fn add(&mut self, x: f64, y: f64) {
        self.n += 1.0;
        let (dx, dy) = (x - self.mean_x, y - self.mean_y);
        self.mean_x += dx / self.n;
        self.mean_y += dy / self.n;
        let rest_x = x - self.mean_x;
        let rest_y = y - self.mean_y;
        self.xx += dx * rest_x;
        self.xy += dx * rest_y;
        self.yy += dy * rest_y;
    }

    fn slope(&self) -> Option<f64> {
        (self.xx > 0.0).then(|| self.xy / self.xx)
    }

    /// Standard error of the slope.
    fn slope_error(&self) -> f64 {
        if self.n < 3.0 || self.xx <= 0.0 {
            return 0.0;
        }
        let residual = (self.yy - self.xy * self.xy / self.xx).max(0.0);
        (residual / (self.n - 2.0) / self.xx).sqrt()
    }
}
