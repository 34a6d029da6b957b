//! Times written in a table: what they look like and how they are read.

use super::cells::trim;
use super::dates::{DateOrder, read_clock_time, read_date_time};

/// A point in time, split so that a date in seconds keeps its nanoseconds.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Stamp {
    /// Whole seconds from some origin.
    pub seconds: i64,
    /// The rest, in `(-1, 1)` s.
    pub rest: f64,
}

impl Stamp {
    /// Seconds from `origin` to here.
    pub(super) fn since(self, origin: Stamp) -> f64 {
        self.seconds.wrapping_sub(origin.seconds) as f64 + (self.rest - origin.rest)
    }

    fn from_seconds(seconds: f64) -> Option<Stamp> {
        let whole = seconds.trunc();
        (whole.abs() < 9e18).then_some(Stamp {
            seconds: whole as i64,
            rest: seconds - whole,
        })
    }
}

/// How a time column is written.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum StampFormat {
    /// A number times `10^-exponent` seconds.
    Decimal { exponent: u32 },
    /// A number times so many seconds: minutes, hours.
    Multiple { seconds: f64 },
    /// Hours, minutes and seconds, of the day or elapsed.
    ClockTime,
    /// A date and a time.
    DateTime { order: DateOrder },
}

impl StampFormat {
    /// From a unit of time.
    pub(super) fn from_unit(unit: &str) -> Option<StampFormat> {
        let exponent = match unit.trim_end_matches('.').to_lowercase().as_str() {
            "s" | "sec" | "secs" | "second" | "seconds" => 0,
            "ms" | "msec" | "millis" | "millisecond" | "milliseconds" => 3,
            "us" | "µs" | "μs" | "usec" | "micros" | "microsecond" | "microseconds" => 6,
            "ns" | "nsec" | "nanos" | "nanosecond" | "nanoseconds" => 9,
            "min" | "mins" | "minute" | "minutes" => {
                return Some(StampFormat::Multiple { seconds: 60.0 });
            }
            "h" | "hr" | "hrs" | "hour" | "hours" => {
                return Some(StampFormat::Multiple { seconds: 3600.0 });
            }
            _ => return None,
        };
        Some(StampFormat::Decimal { exponent })
    }

    /// Reads one cell; `None` where it holds no such time.
    pub(super) fn read(self, bytes: &[u8]) -> Option<Stamp> {
        let bytes = trim(bytes);
        match self {
            StampFormat::Decimal { exponent } => read_decimal(bytes, exponent),
            StampFormat::Multiple { seconds } => Stamp::from_seconds(number(bytes)? * seconds),
            StampFormat::ClockTime => read_clock_time(bytes),
            StampFormat::DateTime { order } => read_date_time(bytes, order),
        }
    }
}

fn number(bytes: &[u8]) -> Option<f64> {
    match super::cells::read_cell(bytes) {
        super::cells::Cell::Number(number) => Some(number),
        _ => None,
    }
}

/// Digits with a decimal mark are read exactly; anything else as `f64`.
fn read_decimal(bytes: &[u8], exponent: u32) -> Option<Stamp> {
    read_digits(bytes, exponent)
        .or_else(|| Stamp::from_seconds(number(bytes)? / 10f64.powi(exponent.try_into().ok()?)))
}

fn read_digits(bytes: &[u8], exponent: u32) -> Option<Stamp> {
    let (negative, digits) = match bytes.strip_prefix(b"-") {
        Some(rest) => (true, rest),
        None => (false, bytes),
    };
    let mark = digits.iter().position(|&c| matches!(c, b'.' | b','));
    let (whole, fraction) = digits.split_at(mark.unwrap_or(digits.len()));
    let whole = whole_number(whole)?;
    let fraction = match fraction.get(1..) {
        // More digits than fit exactly are of no use.
        Some(fraction) => {
            let kept = fraction.get(..15).unwrap_or(fraction);
            if !fraction.iter().all(u8::is_ascii_digit) {
                return None;
            }
            whole_number(kept).unwrap_or(0) as f64 / 10f64.powi(kept.len() as i32)
        }
        None => 0.0,
    };
    let unit = 10i64.checked_pow(exponent)?;
    let (seconds, rest) = (
        whole / unit,
        ((whole % unit) as f64 + fraction) / unit as f64,
    );
    Some(if negative {
        Stamp {
            seconds: -seconds,
            rest: -rest,
        }
    } else {
        Stamp { seconds, rest }
    })
}

/// Digits only, at least one, at most what an `i64` holds.
pub(super) fn whole_number(digits: &[u8]) -> Option<i64> {
    if digits.is_empty() {
        return None;
    }
    digits.iter().try_fold(0i64, |sum, c| {
        let digit = c.is_ascii_digit().then(|| i64::from(c - b'0'))?;
        sum.checked_mul(10)?.checked_add(digit)
    })
}

impl StampFormat {
    /// The format that fits most of a column's cells; the unit of numbers may
    /// be known from the heading. Numbers without a unit are seconds, or the
    /// epoch in a smaller unit where they are too large for that.
    pub(super) fn of_cells(cells: &[&[u8]], named: Option<StampFormat>) -> StampFormat {
        let first = cells.iter().find_map(|cell| number(cell)).unwrap_or(0.0);
        // 1e11 s is past the year 5000; the epoch reached 1e11 ms in 1973.
        let exponent = match first.abs() {
            n if n < 1e11 => 0,
            n if n < 1e14 => 3,
            n if n < 1e17 => 6,
            _ => 9,
        };
        // Where they fit equally, the first.
        let formats = [
            named.unwrap_or(StampFormat::Decimal { exponent }),
            StampFormat::ClockTime,
            StampFormat::DateTime {
                order: DateOrder::DayFirst,
            },
            StampFormat::DateTime {
                order: DateOrder::MonthFirst,
            },
        ];
        let fit = |format: &StampFormat| cells.iter().filter_map(|cell| format.read(cell)).count();
        let [mut best, ..] = formats;
        for format in formats {
            if fit(&format) > fit(&best) {
                best = format;
            }
        }
        if let StampFormat::DateTime {
            order: DateOrder::DayFirst,
        } = best
        {
            // Where both orders are dates, time runs on evenly in the right one.
            let other = StampFormat::DateTime {
                order: DateOrder::MonthFirst,
            };
            if fit(&other) == fit(&best) && other.longest_step(cells) < best.longest_step(cells) {
                return other;
            }
        }
        best
    }

    /// Longest step, ahead or back, from one cell to the next, in seconds.
    fn longest_step(self, cells: &[&[u8]]) -> f64 {
        let stamps: Vec<Stamp> = cells.iter().filter_map(|cell| self.read(cell)).collect();
        let steps = stamps
            .iter()
            .zip(stamps.iter().skip(1))
            .map(|(a, b)| b.since(*a).abs());
        steps.fold(0.0, f64::max)
    }

    /// Whether a cell is a written time or date, but no number.
    pub(super) fn is_written(cell: &[u8]) -> bool {
        let cell = trim(cell);
        read_clock_time(cell).is_some()
            || read_date_time(cell, DateOrder::DayFirst).is_some()
            || read_date_time(cell, DateOrder::MonthFirst).is_some()
            || super::dates::is_date(cell)
    }

    /// What was assumed, where the cells could be read in two ways.
    pub(super) fn assumption(self, cells: &[&[u8]]) -> Option<String> {
        let StampFormat::DateTime { order } = self else {
            return None;
        };
        let (other, taken, why) = match order {
            DateOrder::DayFirst => (DateOrder::MonthFirst, "day", "month"),
            DateOrder::MonthFirst => (DateOrder::DayFirst, "month", "day"),
        };
        let other = StampFormat::DateTime { order: other };
        let differs = cells.iter().any(
            |cell| matches!((self.read(cell), other.read(cell)), (Some(a), Some(b)) if a != b),
        );
        differs.then(|| format!("dates were read {taken} first, not {why} first"))
    }
}
