//! What the user says about a recording, going before what is found in it.

use super::dates::DateOrder;
use super::stamps::StampFormat;

/// What the user says about a recording.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct OpenOptions {
    /// Sample rate in hertz; goes before what the file says. Need not be whole.
    pub rate_hz: Option<f64>,
    /// Takes recordings that are too short for a spectrum, too.
    pub any_length: bool,
    /// How a text is laid out; what is `None` is found out.
    pub layout: LayoutOptions,
}

/// How the text of a table is laid out, where what is found would be wrong.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct LayoutOptions {
    /// How characters are coded.
    pub encoding: Option<TextEncoding>,
    /// The character between cells; a blank stands for runs of blanks and tabs.
    pub delimiter: Option<u8>,
    /// The character before decimals; the other one then groups thousands.
    pub decimal: Option<DecimalSign>,
    /// Whether cells may be in double quotes.
    pub quoted: Option<bool>,
    /// What a line starts with that is a comment.
    pub comment: Option<String>,
    /// Line with the column names, from 1; 0 where there is none.
    pub names_line: Option<u64>,
    /// Line with the units, from 1; 0 where there is none.
    pub units_line: Option<u64>,
    /// Line with the first row of samples, from 1.
    pub first_row: Option<u64>,
    /// The column of time stamps.
    pub time: Option<TimeChoice>,
    /// How the time stamps are written.
    pub time_as: Option<TimeNotation>,
}

/// How characters are coded.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum TextEncoding {
    /// ASCII and UTF-8; bytes that are not are taken as Latin-1.
    Utf8,
    /// UTF-16, little end first.
    Utf16Le,
    /// UTF-16, big end first.
    Utf16Be,
    /// ISO 8859-1.
    Latin1,
}

/// The character before decimals.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum DecimalSign {
    /// `1.5`
    Point,
    /// `1,5`
    Comma,
}

/// Which column holds the time.
#[derive(Debug, Clone, PartialEq)]
pub enum TimeChoice {
    /// None does: all are channels.
    Nothing,
    /// The column of this number, from 1, or else of this name.
    Column(String),
}

/// How time stamps are written.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum TimeNotation {
    /// Numbers in seconds.
    Seconds,
    /// Numbers in milliseconds.
    Milliseconds,
    /// Numbers in microseconds.
    Microseconds,
    /// Numbers in nanoseconds.
    Nanoseconds,
    /// Numbers in minutes.
    Minutes,
    /// Numbers in hours.
    Hours,
    /// Numbers in days, as spreadsheets count them.
    Days,
    /// Numbers that count the samples; the rate must then be given.
    Samples,
    /// Hours, minutes and seconds.
    Clock,
    /// A date with the day before the month.
    DayFirst,
    /// A date with the month before the day.
    MonthFirst,
}

impl TimeNotation {
    /// `None` for a count of samples, which only a rate makes a time.
    pub(super) fn format(self, rate_hz: Option<f64>) -> Option<StampFormat> {
        Some(match self {
            TimeNotation::Seconds => StampFormat::Decimal { exponent: 0 },
            TimeNotation::Milliseconds => StampFormat::Decimal { exponent: 3 },
            TimeNotation::Microseconds => StampFormat::Decimal { exponent: 6 },
            TimeNotation::Nanoseconds => StampFormat::Decimal { exponent: 9 },
            TimeNotation::Minutes => StampFormat::Multiple { seconds: 60 },
            TimeNotation::Hours => StampFormat::Multiple { seconds: 3600 },
            TimeNotation::Days => StampFormat::DAYS,
            TimeNotation::Samples => StampFormat::Samples { rate_hz: rate_hz? },
            TimeNotation::Clock => StampFormat::ClockTime,
            TimeNotation::DayFirst => StampFormat::DateTime {
                order: DateOrder::DayFirst,
            },
            TimeNotation::MonthFirst => StampFormat::DateTime {
                order: DateOrder::MonthFirst,
            },
        })
    }
}
