//! Dates and clock times as people and loggers write them.

use super::stamps::{Stamp, whole_number};

/// Seconds in a day.
pub(super) const DAY_S: i64 = 86_400;

/// Which of two numbers in a date like 05/07/2031 is the day.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum DateOrder {
    DayFirst,
    MonthFirst,
}

/// Reads a date with a time: `2031-05-07T23:59:08.25+02:00`,
/// `07.05.2031 23:59:08,25`, `5/7/2031 11:59:08 PM`, `07-May-2031 23:59`.
/// Seconds count from 1970-01-01 UTC, or local time where no zone is given.
pub(super) fn read_date_time(bytes: &[u8], order: DateOrder) -> Option<Stamp> {
    let (days, rest) = read_date(bytes, order)?;
    let time = match rest {
        [b'T' | b't' | b' ' | b'_' | b',' | b'-' | b':', rest @ ..] => {
            let rest = rest.trim_ascii_start();
            read_time(rest, 24).or_else(|| read_compact_time(rest))?
        }
        // 20310507235908
        rest => read_compact_time(rest)?,
    };
    let seconds = days.checked_mul(DAY_S)?.checked_add(time.seconds)?;
    Some(Stamp {
        seconds,
        rest: time.rest,
    })
}

/// Whether a time ends in a zone.
pub(super) fn has_zone(bytes: &[u8]) -> bool {
    let Some(time) = bytes.iter().rposition(|&c| c == b':' || c == b'T') else {
        return false;
    };
    let end = bytes.get(time..).unwrap_or_default();
    // The colon may be that within the zone.
    let before = bytes.get(time.saturating_sub(3)..time).unwrap_or_default();
    end.iter().any(|c| b"Z+-Cz".contains(c)) || before.starts_with(b"+") || before.starts_with(b"-")
}

/// What the order of a date is called.
pub(super) fn words(bytes: &[u8], order: DateOrder) -> &'static str {
    let year_first = leading_digits(bytes).is_some_and(|(first, _)| first.len() >= 4);
    match order {
        _ if year_first => "date with the year first",
        DateOrder::DayFirst => "day-first date",
        DateOrder::MonthFirst => "month-first date",
    }
}

/// Reads `23:59:08.25`, `11:59:08 PM`, `23:59:08Z`, or an elapsed time whose
/// hours go on past 24.
pub(super) fn read_clock_time(bytes: &[u8]) -> Option<Stamp> {
    read_time(bytes, 1_000_000)
}

/// Whether a cell holds a date alone, to be left out beside a clock time.
pub(super) fn is_date(bytes: &[u8]) -> bool {
    read_date(bytes, DateOrder::DayFirst)
        .or_else(|| read_date(bytes, DateOrder::MonthFirst))
        .is_some_and(|(_, rest)| rest.is_empty())
}

/// Days since 1970-01-01, and what follows the date.
fn read_date(bytes: &[u8], order: DateOrder) -> Option<(i64, &[u8])> {
    let Some((first, rest)) = leading_digits(bytes) else {
        return read_named_date(bytes);
    };
    // 20310507, and so on to 20310507235908
    if let 8 | 14 | 17 = first.len() {
        let (first, rest) = bytes.split_at_checked(8)?;
        let year = whole_number(first.get(..4)?)?;
        let month = whole_number(first.get(4..6)?)?;
        return Some((days(year, month, whole_number(first.get(6..)?)?)?, rest));
    }
    let (&mark, rest) = rest
        .split_first()
        .filter(|(mark, _)| b"-/. ".contains(mark))?;
    let blanks = rest.trim_ascii_start();
    let (second, rest) = leading_digits(rest).or_else(|| leading_letters(blanks))?;
    // "7. May 2031"
    let named = second.first().is_some_and(u8::is_ascii_alphabetic);
    let rest = match rest {
        [b' ', rest @ ..] if named => rest,
        rest => rest.strip_prefix(&[mark])?,
    };
    let (third, rest) = leading_digits(rest)?;
    let numbers = (
        whole_number(first)?,
        month_or_number(second)?,
        whole_number(third)?,
    );
    let named = !second.iter().all(u8::is_ascii_digit);
    let (year, month, day) = match numbers {
        (year, month, day) if first.len() == 4 => (year, month, day),
        (day, month, year) if named || mark == b'.' || order == DateOrder::DayFirst => {
            (year, month, day)
        }
        (month, day, year) => (year, month, day),
    };
    let year = match (first.len(), third.len()) {
        (4, 1..=2) | (1..=2, 4) => year,
        (1..=2, 2) => 2000 + year,
        _ => return None,
    };
    Some((days(year, month, day)?, rest))
}

/// `May 7, 2031 23:59`, or `Wed May  7 2031`.
fn read_named_date(bytes: &[u8]) -> Option<(i64, &[u8])> {
    let blanks = |rest: &[u8]| rest.iter().take_while(|c| b" ,.-".contains(c)).count();
    let (mut name, mut rest) = leading_letters(bytes)?;
    if month_or_number(name).is_none() {
        (name, rest) = leading_letters(bytes.get(name.len() + blanks(rest)..)?)?;
    }
    let month = month_or_number(name)?;
    let (day, rest) = leading_digits(rest.get(blanks(rest)..)?)?;
    let (year, rest) = leading_digits(rest.get(blanks(rest)..)?).filter(|(y, _)| y.len() == 4)?;
    Some((days(whole_number(year)?, month, whole_number(day)?)?, rest))
}

fn leading_digits(bytes: &[u8]) -> Option<(&[u8], &[u8])> {
    let n = bytes.iter().take_while(|c| c.is_ascii_digit()).count();
    (n > 0).then(|| bytes.split_at(n))
}

fn leading_letters(bytes: &[u8]) -> Option<(&[u8], &[u8])> {
    let n = bytes.iter().take_while(|c| c.is_ascii_alphabetic()).count();
    (n >= 3).then(|| bytes.split_at(n))
}

fn month_or_number(bytes: &[u8]) -> Option<i64> {
    const MONTHS: &[u8; 36] = b"janfebmaraprmayjunjulaugsepoctnovdec";
    if bytes.first()?.is_ascii_digit() {
        return whole_number(bytes);
    }
    let name = bytes.get(..3)?.to_ascii_lowercase();
    let english = match name.as_slice() {
        // As German loggers write them.
        b"mai" => b"may",
        b"okt" => b"oct",
        b"dez" => b"dec",
        b"mrz" => b"mar",
        name => name,
    };
    let place = MONTHS.chunks_exact(3).position(|month| month == english)?;
    i64::try_from(place + 1).ok()
}

/// Days from 1970-01-01 in the Gregorian calendar, by counting years from
/// March on, so that the leap day comes last (H. Hinnant, "chrono-Compatible
/// Low-Level Date Algorithms").
fn days(year: i64, month: i64, day: i64) -> Option<i64> {
    let leap = year % 4 == 0 && (year % 100 != 0 || year % 400 == 0);
    let longest = match month {
        2 => 28 + i64::from(leap),
        4 | 6 | 9 | 11 => 30,
        1..=12 => 31,
        _ => return None,
    };
    if !(1..=longest).contains(&day) || !(1..=9999).contains(&year) {
        return None;
    }
    let year = if month > 2 { year } else { year - 1 };
    let from_march = (month + 9) % 12;
    let day_of_year = (153 * from_march + 2) / 5 + day - 1;
    Some(year * 365 + year / 4 - year / 100 + year / 400 + day_of_year - 719_468)
}

/// `235908` or `235908.25`, or with the milliseconds right behind.
fn read_compact_time(bytes: &[u8]) -> Option<Stamp> {
    let (digits, rest) = leading_digits(bytes)?;
    let (whole, millis) = match digits.len() {
        6 => (digits, None),
        9 => digits
            .split_at_checked(6)
            .map(|(whole, ms)| (whole, Some(ms)))?,
        _ => return None,
    };
    let (fraction, zone) = match (millis, rest) {
        (Some(millis), rest) => (millis, rest),
        (None, [b'.' | b',', rest @ ..]) => leading_digits(rest)?,
        (None, rest) => (&b""[..], rest),
    };
    let two = |from: usize| whole.get(from..from + 2);
    let mark = if fraction.is_empty() { &b""[..] } else { b"." };
    let colons = [two(0)?, b":", two(2)?, b":", two(4)?, mark, fraction, zone].concat();
    read_time(&colons, 24)
}

/// Hours below `hours`, minutes, perhaps seconds, AM or PM, and zone.
fn read_time(bytes: &[u8], hours: i64) -> Option<Stamp> {
    let (hour, rest) = leading_digits(bytes)?;
    let (minute, rest) = leading_digits(rest.strip_prefix(b":")?)?;
    let (short, (second, rest)) = match rest.strip_prefix(b":") {
        Some(rest) => (false, leading_digits(rest)?),
        None => (true, (&b"0"[..], rest)),
    };
    let (fraction, rest) = match rest {
        // A colon before milliseconds is seen, too.
        [b'.' | b',' | b':', rest @ ..] => {
            let (digits, rest) = leading_digits(rest)?;
            (Some(digits), rest)
        }
        _ => (None, rest),
    };
    // Two numbers with a fraction are minutes and seconds.
    let (hour, minute, second) = match (short, fraction.is_some()) {
        (true, true) => (&b"0"[..], hour, minute),
        _ => (hour, minute, second),
    };
    let fraction = fraction.unwrap_or(b"0");
    let mut hour = whole_number(hour).filter(|&hour| hour < hours)?;
    let minute = whole_number(minute).filter(|&minute| minute < 60)?;
    // 60 is a leap second.
    let second = whole_number(second).filter(|&second| second <= 60)?;
    let kept = fraction.get(..15).unwrap_or(fraction);
    let rest_s = whole_number(kept)? as f64 / 10f64.powi(i32::try_from(kept.len()).ok()?);
    let mut zone = rest.trim_ascii();
    for (mark, add) in [("am", 0), ("pm", 12)] {
        let (half, after) = zone.split_at(zone.len().min(2));
        if half.eq_ignore_ascii_case(mark.as_bytes()) {
            hour = (1..=12).contains(&hour).then_some(hour % 12 + add)?;
            zone = after.trim_ascii();
            break;
        }
    }
    let seconds = (hour * 60 + minute) * 60 + second - read_zone(zone)?;
    Some(Stamp {
        seconds,
        rest: rest_s,
    })
}

/// Seconds ahead of UTC: nothing, `Z`, `UTC`, `+02:00`, `-0530` or `+02`.
fn read_zone(zone: &[u8]) -> Option<i64> {
    let (sign, digits) = match zone {
        [] | b"Z" | b"z" | b"UTC" | b"GMT" => return Some(0),
        [b'+', digits @ ..] => (1, digits),
        [b'-', digits @ ..] => (-1, digits),
        b"CET" | b"MEZ" => return Some(3600),
        b"CEST" | b"MESZ" => return Some(7200),
        // An abbreviation moves all stamps alike, unless it changes.
        [_, _, _] | [_, _, _, _] if zone.iter().all(u8::is_ascii_uppercase) => return Some(0),
        _ => return None,
    };
    let (hours, minutes) = digits.split_at_checked(2)?;
    let minutes = match minutes.strip_prefix(b":").unwrap_or(minutes) {
        [] => 0,
        two @ [_, _] => whole_number(two)?,
        _ => return None,
    };
    Some(sign * (whole_number(hours)? * 60 + minutes) * 60)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn seconds(text: &str, order: DateOrder) -> Option<f64> {
        read_date_time(text.as_bytes(), order).map(|stamp| stamp.seconds as f64 + stamp.rest)
    }

    #[test]
    fn days_agree_with_counting_one_by_one() {
        let mut counted = days(1900, 1, 1).unwrap();
        // Worked by hand: 70 years with 17 leap days before 1970.
        assert_eq!(counted, -(70 * 365 + 17));
        for year in 1900..2101 {
            for month in 1..=12 {
                for day in 1..=31 {
                    if let Some(found) = days(year, month, day) {
                        assert_eq!(found, counted, "{year}-{month}-{day}");
                        counted += 1;
                    }
                }
            }
        }
        assert_eq!(days(2031, 2, 29), None);
        assert_eq!(days(2000, 13, 1), None);
        assert_eq!(days(2000, 0, 1), None);
    }

    #[test]
    fn clock_times() {
        for (text, expected) in [
            ("00:00:00", 0.0),
            ("23:59:08.5", 86_348.5),
            ("23:59:08,5", 86_348.5),
            ("100:00:01", 360_001.0),
            ("12:30", 45_000.0),
            ("01:30.25", 90.25),
            ("12:00:00 AM", 0.0),
            ("12:00:01pm", 43_201.0),
        ] {
            let stamp = read_clock_time(text.as_bytes()).unwrap();
            assert_eq!(stamp.seconds as f64 + stamp.rest, expected, "{text}");
        }
        for text in [
            "",
            "12",
            "12:",
            ":12",
            "12:60",
            "1:2:3:4:5",
            "13:00 PM",
            "a:b",
            "12:00x",
        ] {
            assert_eq!(read_clock_time(text.as_bytes()), None, "{text}");
        }
    }

    #[test]
    fn one_moment_in_many_hands() {
        // 2031-05-07 is 22406 days after 1970-01-01: 61 years, 15 leap days, 126 days.
        let moment = (22_406 * DAY_S + 86_348) as f64 + 0.25;
        for text in [
            "2031-05-07T23:59:08.25",
            "2031-05-07 23:59:08,250",
            "2031/05/07 23:59:08.25Z",
            "2031-05-08T01:59:08.25+02:00",
            "2031-05-07T18:29:08.25-0530",
            "20310507T23:59:08.25",
            "07.05.2031 23:59:08.25",
            "7.5.31 23:59:08.25",
            "07/05/2031 11:59:08.25 PM",
            "07-May-2031 23:59:08.25",
            "07-05-2031 23:59:08:25",
        ] {
            assert_eq!(seconds(text, DateOrder::DayFirst), Some(moment), "{text}");
        }
        assert_eq!(
            seconds("5/7/2031 23:59:08.25", DateOrder::MonthFirst),
            Some(moment)
        );
        assert_eq!(
            seconds("5/7/2031 12:00:00 AM", DateOrder::MonthFirst),
            Some(22_406.0 * 86_400.0)
        );
        for text in [
            "",
            "2031",
            "2031-05",
            "2031-05-07",
            "2031-13-07 10:00",
            "2031-05-07 24:00",
            "1.5",
            "2031-05-07 10:60",
            "2031-05-07 10:00:61",
            "10:00:00",
            "07/05/203 10:00",
            "a-b-c d:e",
            "2031-05-07 13:00 PM",
            "2031-05-07 10:00 Mars",
            "2031-05-07 10:00+02:999999999999999999",
            "99999999 10:00",
        ] {
            assert_eq!(seconds(text, DateOrder::DayFirst), None, "{text}");
        }
    }
}
