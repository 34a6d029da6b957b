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
/// Rows from one use of the fit to the next.
const REFITTED: u64 = 64;
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
    /// The best so far, and the line's gain at it.
    period: f64,
    gain: f64,
    /// Stamp of the last row, where it fits those before it.
    accepted: Option<f64>,
    fit: Fit,
    course: Course,
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
    /// Jumps ahead too long for a gap.
    pub set_ahead: u64,
    /// Sum of squared deviations from the followed line, in periods, and rows.
    jitter: f64,
    rows: u64,
}

impl Clock {
    pub(super) fn new(plan: ClockPlan) -> Clock {
        let mut clock = Clock {
            plan,
            line: 0.0,
            last: 0.0,
            offset: 0.0,
            previous_offset: None,
            frame: 0,
            started: false,
            period: plan.period,
            gain: GAIN,
            accepted: None,
            fit: Fit::default(),
            course: Course::default(),
            counts: Counts::default(),
        };
        clock.set_period();
        clock
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
            if !self.plan.shared {
                self.fit.add(0.0, stamp);
            }
            self.accepted = Some(stamp);
            return Advance::Frame { missing: 0 };
        }
        let rate = 1.0 / self.period;
        // In periods: half of the scatter each way, and what the line sways.
        let scatter = self.plan.scatter * rate;
        let sway = 0.55 * scatter + 0.25;
        let (latest, earliest) = (sway.max(LATE), -sway.max(EARLY));
        let late = |time: f64| (time - self.line) * rate - 1.0;
        let step = (stamp - self.last) * rate;
        let stands = stamp == self.last;
        let repeats = stands && !self.plan.shared;
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
            // Beyond 2^64 `as` stops there.
            missing = deviation.round().max(1.0) as u64;
            if missing > self.plan.longest_gap {
                self.counts.set_ahead += 1;
                self.step(1, 0.0);
                self.previous_offset = Some(self.offset);
                self.offset = self.line - stamp;
                return Advance::Frame { missing: 0 };
            }
            self.counts.gaps += 1;
            self.counts.missing = self.counts.missing.saturating_add(missing);
        }
        let rest = deviation - missing as f64;
        self.counts.jitter += rest * rest;
        self.counts.rows += 1;
        self.step(missing.saturating_add(1), rest);
        // After the clock was set back, times no longer tell how far apart rows are.
        self.accepted = (self.offset == 0.0).then_some(stamp);
        // Of rows that share a stamp, the first is the one it is nearest to.
        if stands {
            return Advance::Frame { missing };
        }
        self.fit.add(self.frame as f64, stamp + self.offset);
        self.course.add(self.frame as f64, stamp + self.offset);
        if self.counts.rows.is_multiple_of(REFITTED) {
            self.set_period();
        }
        Advance::Frame { missing }
    }

    /// Stamp of the row taken last; `None` if it had none, or one out of line.
    pub(super) fn accepted(&self) -> Option<f64> {
        self.accepted
    }

    /// Moves the line on by `frames` and towards a row that is `late` periods
    /// behind it.
    fn step(&mut self, frames: u64, late: f64) {
        self.line += self.period * (frames as f64 + self.gain * late);
        self.frame = self.frame.saturating_add(frames);
    }

    /// Takes over the best period so far. The fit is held near the plan, lest a
    /// bad stamp among the first bends it.
    fn set_period(&mut self) {
        const NEAR: f64 = 0.05;
        let plan = self.plan.period;
        self.period = match self.fit.slope() {
            Some(slope) if self.fit.n >= FITTED && (slope / plan - 1.0).abs() < NEAR => slope,
            _ => plan,
        };
        self.gain = GAIN / (1.0 + self.plan.scatter / self.period);
    }

    /// Samples per second by least squares over all stamps, and the half-width
    /// of its 95 % interval; rounded to a whole number where the stamps do not
    /// tell the two apart.
    pub(super) fn rate_hz(&self) -> (f64, f64) {
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
            (whole, u95)
        } else {
            (rate, u95)
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
                scatter / self.period
            ));
        } else if rms > NOTABLE {
            notes.push(format!(
                "time stamps scatter by {:.0} % of the sample period (rms): taken as evenly spaced",
                100.0 * rms
            ));
        }
        if let Some((drift_ppm, u95_ppm)) = self.course.drift() {
            notes.push(format!(
                "the rate drifts: the second half of the time stamps is {:.0} ± {u95_ppm:.0} ppm {} than the first",
                drift_ppm.abs(),
                if drift_ppm > 0.0 { "slower" } else { "faster" },
            ));
        }
    }
}

/// The way of the stamps in few points, each the mean of equally many, however
/// many come: where there are too many, pairs are joined.
#[derive(Debug, Clone, Default)]
struct Course {
    points: Vec<(f64, f64)>,
    /// Stamps per point.
    stride: u32,
    /// Sum of those that are no point yet.
    sum: (f64, f64),
    summed: u32,
}

impl Course {
    const MOST: usize = 512;

    fn add(&mut self, frame: f64, time: f64) {
        self.stride = self.stride.max(1);
        self.sum = (self.sum.0 + frame, self.sum.1 + time);
        self.summed += 1;
        if self.summed < self.stride {
            return;
        }
        let n = f64::from(self.summed);
        self.points.push((self.sum.0 / n, self.sum.1 / n));
        (self.sum, self.summed) = ((0.0, 0.0), 0);
        if self.points.len() >= Course::MOST {
            self.points = self
                .points
                .chunks_exact(2)
                .filter_map(|pair| match pair {
                    [a, b] => Some(((a.0 + b.0) / 2.0, (a.1 + b.1) / 2.0)),
                    _ => None,
                })
                .collect();
            self.stride = self.stride.saturating_mul(2);
        }
    }

    /// By how many ppm the period of the second half exceeds that of the first,
    /// with the half-width of its 95 % interval, where it clearly does.
    fn drift(&self) -> Option<(f64, f64)> {
        /// Points in each half that make an error bar worth something.
        const FEWEST: usize = 32;
        let half = self.points.len() / 2;
        if half < FEWEST {
            return None;
        }
        let (first, second) = self.points.split_at(half);
        let line = |points: &[(f64, f64)]| {
            let mut fit = Fit::default();
            points
                .iter()
                .for_each(|&(frame, time)| fit.add(frame, time));
            fit
        };
        let (first, second) = (line(first), line(second));
        let (a, b) = (first.slope()?, second.slope()?);
        let ppm = 1e6 * (b - a) / a;
        let u95 = 1e6 * crate::units::U95 * first.slope_error().hypot(second.slope_error()) / a;
        // Rounded stamps wander to and fro in step with the rounding, which is
        // no white error: half as much again, and at least a part per million.
        (ppm.abs() > (3.0 * u95).max(1.0)).then_some((ppm, u95))
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
        let share = 1.0 / self.n;
        self.mean_x += dx * share;
        self.mean_y += dy * share;
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
