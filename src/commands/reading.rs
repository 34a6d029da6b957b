//! How a recording is read where what is found in it would be wrong: the same
//! options for every command that takes recordings.

use super::values::positive;
use clap::{Args, ValueEnum};
use foldtrace::capture::{
    DecimalSign, LayoutOptions, OpenOptions, TextEncoding, TimeChoice, TimeNotation,
};

/// Options of reading.
#[derive(Debug, Clone, Args)]
#[command(next_help_heading = "Reading")]
pub struct Reading {
    /// Sample rate, where the file does not tell it or tells it wrong; may be fractional
    #[arg(long, value_name = "HZ", allow_negative_numbers = true, value_parser = positive)]
    pub rate: Option<f64>,
    /// CSV: what stands between cells: comma, semicolon, tab, blank, bar or a character
    #[arg(long, value_name = "CHAR", value_parser = delimiter)]
    pub delimiter: Option<u8>,
    /// CSV: what stands before decimals; the other one then groups thousands
    #[arg(long, value_name = "SIGN")]
    pub decimal: Option<Decimal>,
    /// CSV: whether cells may be in double quotes
    #[arg(long, value_name = "yes|no")]
    pub quotes: Option<YesNo>,
    /// CSV: how characters are coded
    #[arg(long, value_name = "CODE")]
    pub encoding: Option<Encoding>,
    /// CSV: what comment lines start with
    #[arg(long, value_name = "TEXT")]
    pub comment: Option<String>,
    /// CSV: line with the column names, counted from 1; 0: there is none
    #[arg(long, value_name = "LINE")]
    pub names_line: Option<u64>,
    /// CSV: line with the units, counted from 1; 0: there is none
    #[arg(long, value_name = "LINE")]
    pub units_line: Option<u64>,
    /// CSV: line with the first row of samples, counted from 1
    #[arg(long, value_name = "LINE", value_parser = clap::value_parser!(u64).range(1..))]
    pub first_row: Option<u64>,
    /// CSV: time column, by name or number; none: every column is a channel
    #[arg(long, value_name = "COLUMN|none")]
    pub time: Option<String>,
    /// CSV: how times are written
    #[arg(long, value_name = "NOTATION")]
    pub time_as: Option<Notation>,
}

/// What stands before decimals.
#[derive(Debug, Clone, Copy, ValueEnum)]
pub enum Decimal {
    Point,
    Comma,
}

/// Yes or no.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub enum YesNo {
    Yes,
    No,
}

/// How characters are coded.
#[derive(Debug, Clone, Copy, ValueEnum)]
pub enum Encoding {
    #[value(name = "utf-8")]
    Utf8,
    #[value(name = "utf-16le")]
    Utf16Le,
    #[value(name = "utf-16be")]
    Utf16Be,
    #[value(name = "latin-1")]
    Latin1,
}

/// How times are written.
#[derive(Debug, Clone, Copy, ValueEnum)]
pub enum Notation {
    S,
    Ms,
    Us,
    Ns,
    Min,
    H,
    /// Days, as spreadsheets count them
    Days,
    /// Sample numbers; needs --rate
    Samples,
    /// HH:MM:SS
    Clock,
    /// Dates, day before month
    DayFirst,
    /// Dates, month before day
    MonthFirst,
}

fn delimiter(text: &str) -> Result<u8, String> {
    match text {
        "comma" => Ok(b','),
        "semicolon" => Ok(b';'),
        "tab" | "\\t" => Ok(b'\t'),
        "blank" | "space" => Ok(b' '),
        "bar" => Ok(b'|'),
        _ => match text.as_bytes() {
            [b'"' | b'\r' | b'\n'] => Err("a quote or line end cannot be a delimiter".into()),
            &[one] if one.is_ascii() => Ok(one),
            _ => Err("give comma, semicolon, tab, blank, bar or one ASCII character".into()),
        },
    }
}

impl Reading {
    /// As the library takes them.
    pub fn open_options(&self) -> OpenOptions {
        OpenOptions {
            rate_hz: self.rate,
            any_length: false,
            layout: LayoutOptions {
                encoding: self.encoding.map(|encoding| match encoding {
                    Encoding::Utf8 => TextEncoding::Utf8,
                    Encoding::Utf16Le => TextEncoding::Utf16Le,
                    Encoding::Utf16Be => TextEncoding::Utf16Be,
                    Encoding::Latin1 => TextEncoding::Latin1,
                }),
                delimiter: self.delimiter,
                decimal: self.decimal.map(|sign| match sign {
                    Decimal::Point => DecimalSign::Point,
                    Decimal::Comma => DecimalSign::Comma,
                }),
                quoted: self.quotes.map(|answer| answer == YesNo::Yes),
                comment: self.comment.clone(),
                names_line: self.names_line,
                units_line: self.units_line,
                first_row: self.first_row,
                time: self.time.as_ref().map(|column| match column.as_str() {
                    "none" => TimeChoice::Nothing,
                    _ => TimeChoice::Column(column.clone()),
                }),
                time_as: self.time_as.map(|notation| match notation {
                    Notation::S => TimeNotation::Seconds,
                    Notation::Ms => TimeNotation::Milliseconds,
                    Notation::Us => TimeNotation::Microseconds,
                    Notation::Ns => TimeNotation::Nanoseconds,
                    Notation::Min => TimeNotation::Minutes,
                    Notation::H => TimeNotation::Hours,
                    Notation::Days => TimeNotation::Days,
                    Notation::Samples => TimeNotation::Samples,
                    Notation::Clock => TimeNotation::Clock,
                    Notation::DayFirst => TimeNotation::DayFirst,
                    Notation::MonthFirst => TimeNotation::MonthFirst,
                }),
            },
        }
    }
}
