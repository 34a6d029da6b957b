//! Times written in a table: what they look like and how they are read.

use super::cells::trim;
use super::dates::{DateOrder, has_zone, read_clock_time, read_date_time};
use super::numbers::{DecimalStyle, Digits, read_digits};

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
    /// A number times so many seconds: minutes, hours, days.
    Multiple { seconds: u32 },
    /// A count of samples.
    Samples { rate_hz: f64 },
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
                return Some(StampFormat::Multiple { seconds: 60 });
            }
            "h" | "hr" | "hrs" | "hour" | "hours" => {
                return Some(StampFormat::Multiple { seconds: 3600 });
            }
            "d" | "day" | "days" => return Some(StampFormat::DAYS),
            _ => return None,
        };
        Some(StampFormat::Decimal { exponent })
    }

    /// Days, as spreadsheets count them.
    pub(super) const DAYS: StampFormat = StampFormat::Multiple { seconds: 86_400 };

    /// Written local time: without a zone, so that daylight saving may move it.
    pub(super) fn is_local(self, cells: &[&[u8]]) -> bool {
        match self {
            StampFormat::ClockTime | StampFormat::DateTime { .. } => {
                !cells.iter().any(|cell| has_zone(trim(cell)))
            }
            _ => false,
        }
    }

    /// In words, for a line that says how a table was read.
    pub(super) fn words(self, first: &[u8]) -> String {
        let number = number(first).unwrap_or(0.0).abs();
        match self {
            StampFormat::Decimal { exponent } => {
                let unit = match exponent {
                    0 => "seconds",
                    3 => "milliseconds",
                    6 => "microseconds",
                    _ => "nanoseconds",
                };
                // 1e9 s after 1970 is the year 2001.
                let epoch = number / 10f64.powi(exponent as i32) > 1e9;
                format!("{unit}{}", if epoch { " since 1970" } else { "" })
            }
            StampFormat::Multiple { seconds: 60 } => "minutes".into(),
            StampFormat::Multiple { seconds: 3600 } => "hours".into(),
            StampFormat::Multiple { .. } => "days".into(),
            StampFormat::Samples { .. } => "sample numbers".into(),
            StampFormat::ClockTime => "hours, minutes and seconds".into(),
            StampFormat::DateTime { order } => super::dates::words(trim(first), order).into(),
        }
    }

    /// Worth of the last digit of a cell that is not 0, in seconds; `None` where that is not
    /// plain.
    pub(super) fn resolution(self, cell: &[u8]) -> Option<f64> {
        let cell = trim(cell);
        let mark = cell.iter().rposition(|&c| c == b'.' || c == b',');
        let digits = mark.map_or(0, |mark| {
            let rest = cell.get(mark + 1..).unwrap_or_default();
            let digits = rest.iter().take_while(|c| c.is_ascii_digit()).count();
            // Zeros that end every cell tell nothing.
            let rest = rest.get(..digits).unwrap_or_default();
            rest.iter()
                .rposition(|&c| c != b'0')
                .map_or(0, |last| last + 1)
        });
        let last = 10f64.powi(-i32::try_from(digits).ok()?);
        match self {
            StampFormat::Decimal { exponent } => {
                read_digits(cell, DecimalStyle::Either)?;
                Some(last / 10f64.powi(i32::try_from(exponent).ok()?))
            }
            StampFormat::Multiple { seconds } => Some(last * f64::from(seconds)),
            StampFormat::ClockTime | StampFormat::DateTime { .. } if digits > 0 => Some(last),
            _ => None,
        }
    }

    /// Reads one cell; `None` where it holds no such time.
    pub(super) fn read(self, bytes: &[u8]) -> Option<Stamp> {
        let bytes = trim(bytes);
        match self {
            StampFormat::Decimal { exponent } => read_decimal(bytes, exponent),
            StampFormat::Multiple { seconds } => read_multiple(bytes, seconds),
            StampFormat::Samples { rate_hz } => Stamp::from_seconds(number(bytes)? / rate_hz),
            StampFormat::ClockTime => read_clock_time(bytes),
            StampFormat::DateTime { order } => read_date_time(bytes, order),
        }
    }
}

fn number(bytes: &[u8]) -> Option<f64> {
    match super::cells::read_cell(bytes, DecimalStyle::Either) {
        super::cells::Cell::Number(number) => Some(number),
        _ => None,
    }
}

/// Digits with a decimal mark are read exactly; anything else as `f64`.
fn read_decimal(bytes: &[u8], exponent: u32) -> Option<Stamp> {
    match read_digits(bytes, DecimalStyle::Either) {
        Some(digits) => exact(digits, 1, exponent),
        None => Stamp::from_seconds(number(bytes)? / 10f64.powi(exponent.try_into().ok()?)),
    }
}

fn read_multiple(bytes: &[u8], seconds: u32) -> Option<Stamp> {
    match read_digits(bytes, DecimalStyle::Either) {
        Some(digits) => exact(digits, seconds, 0),
        None => Stamp::from_seconds(number(bytes)? * f64::from(seconds)),
    }
}

/// The digits times `factor * 10^-exponent` seconds, whole seconds split off
/// exactly.
#[inline]
fn exact(digits: Digits, factor: u32, exponent: u32) -> Option<Stamp> {
    let places = digits.decimals + exponent;
    let quick = POWERS
        .get(places as usize)
        .zip(digits.mantissa.checked_mul(factor.into()));
    let (whole, rest) = match quick {
        Some((&unit, all)) => (all / unit, (all % unit) as f64 / unit as f64),
        None => {
            let unit = 10u128.checked_pow(places)?;
            let all = u128::from(digits.mantissa) * u128::from(factor);
            let whole = u64::try_from(all / unit).ok()?;
            (whole, (all % unit) as f64 / unit as f64)
        }
    };
    let whole = i64::try_from(whole).ok().filter(|&whole| whole < 1 << 62)?;
    Some(if digits.negative {
        Stamp {
            seconds: -whole,
            rest: -rest,
        }
    } else {
        Stamp {
            seconds: whole,
            rest,
        }
    })
}

/// Powers of ten in 64 bits.
const POWERS: [u64; 20] = {
    let mut powers = [1; 20];
    let mut place = 1;
    while place < 20 {
        powers[place] = 10 * powers[place - 1];
        place += 1;
    }
    powers
};

/// Digits only, up to what an `i64` holds.
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
        if are_compact_dates(cells) {
            return StampFormat::DateTime {
                order: DateOrder::DayFirst,
            };
        }
        let first = cells.iter().find_map(|cell| number(cell)).unwrap_or(0.0);
        // 1e11 s is past the year 5000; the epoch reached 1e11 ms in 1973.
        let exponent = match first.abs() {
            n if n < 1e11 => 0,
            n if n < 1e14 => 3,
            n if n < 1e17 => 6,
            _ => 9,
        };
        let numbers = if are_serial_days(cells) {
            StampFormat::DAYS
        } else {
            StampFormat::Decimal { exponent }
        };
        // Where they fit equally, the first.
        let formats = [
            named.unwrap_or(numbers),
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

/// Days since the end of 1899, as spreadsheets count: numbers of this century
/// whose steps are a round time or rate if taken as days, but not as seconds.
fn are_serial_days(cells: &[&[u8]]) -> bool {
    const CENTURY: std::ops::Range<f64> = 36_526.0..73_051.0;
    const DAY_S: f64 = 86_400.0;
    let numbers: Vec<f64> = cells.iter().filter_map(|cell| number(cell)).collect();
    let (Some(first), Some(last)) = (numbers.first(), numbers.last()) else {
        return false;
    };
    let step = (last - first) / (numbers.len() - 1).max(1) as f64;
    /// Well below the half of the last of two digits, well above rounding.
    const ROUND: f64 = 0.002;
    step > 0.0
        && numbers.iter().all(|number| CENTURY.contains(number))
        && off_round(step * DAY_S) < ROUND
        && off_round(step) > ROUND
}

/// How far, as a share, a step or its rate is from one of at most two digits.
fn off_round(step: f64) -> f64 {
    let off = |value: f64| {
        let scale = 10f64.powf(1.0 - value.log10().floor());
        ((value * scale).round() / (value * scale) - 1.0).abs()
    };
    off(step).min(off(1.0 / step))
}

/// Dates like 20310507235908, which are numbers too. No count of units since
/// 1970 has 14 or 17 digits in our day.
fn are_compact_dates(cells: &[&[u8]]) -> bool {
    let order = DateOrder::DayFirst;
    let mut filled = cells
        .iter()
        .map(|cell| trim(cell))
        .filter(|c| !c.is_empty());
    let is_date = |cell: &[u8]| {
        let digits = cell.iter().take_while(|c| c.is_ascii_digit()).count();
        matches!(digits, 14 | 17) && read_date_time(cell, order).is_some()
    };
    filled.clone().next().is_some() && filled.all(is_date)
}
