//! A TOML table with its line numbers, and typed access to its keys.

use super::Lines;
use crate::sources::error::{Problem, SiteError, is_unprintable, nearest, shown, shown_up_to};
use crate::sources::quantity::{MAX_HZ, MIN_HZ, Tolerance, parse_tolerance};
use toml::Spanned;
use toml::de::{DeInteger, DeTable, DeValue};

/// Parses a document.
pub(super) fn parse<'t>(text: &'t str, lines: &Lines) -> Result<Spanned<DeTable<'t>>, SiteError> {
    DeTable::parse(text).map_err(|error| {
        let said = shown_up_to(200, error.message());
        let looks_like_a_list = super::list::heading(text)
            .is_some_and(|heading| heading.contains([',', ';', '\t']) && !heading.contains('='));
        let hint = if looks_like_a_list {
            " (a plain list starts with the heading name,hz,tolerance,orders)"
        } else {
            ""
        };
        SiteError::Syntax {
            line: error.span().map_or(1, |span| lines.at(span.start)),
            message: format!("is not TOML: {said}{hint}"),
        }
    })
}

/// A table of the document.
pub(super) struct Table<'a> {
    lines: &'a Lines,
    entries: &'a DeTable<'a>,
    /// Line of its heading, from 1.
    pub(super) line: usize,
}

/// A key's value with its line.
pub(super) struct At<T> {
    pub(super) value: T,
    pub(super) line: usize,
}

impl<'a> Table<'a> {
    pub(super) fn root(lines: &'a Lines, entries: &'a DeTable<'a>) -> Self {
        Table {
            lines,
            entries,
            line: 1,
        }
    }

    fn get(&self, key: &str) -> Option<At<&'a DeValue<'a>>> {
        self.entries
            .iter()
            .find(|(known, _)| known.get_ref() == key)
            .map(|(known, value)| At {
                value: value.get_ref(),
                line: self.line_of(known.span().start),
            })
    }

    fn line_of(&self, offset: usize) -> usize {
        self.lines.at(offset)
    }

    pub(super) fn has(&self, key: &str) -> bool {
        self.get(key).is_some()
    }

    /// Line of a key; of the table where it has no such key.
    pub(super) fn line_of_key(&self, key: &str) -> usize {
        self.get(key).map_or(self.line, |at| at.line)
    }

    pub(super) fn error(&self, key: &str, problem: Problem) -> SiteError {
        SiteError::key(self.line_of_key(key), key, problem)
    }

    pub(super) fn missing(&self, key: &str, needed_by: &str) -> SiteError {
        let needed_by = needed_by.to_owned();
        SiteError::key(self.line, key, Problem::Missing { needed_by })
    }

    /// Refuses any key that is not listed, the first in the file.
    pub(super) fn allow(&self, known: &[&'static str]) -> Result<(), SiteError> {
        let first_unknown = self
            .entries
            .keys()
            .filter(|key| !known.contains(&key.get_ref().as_ref()))
            .min_by_key(|key| key.span().start);
        match first_unknown {
            None => Ok(()),
            Some(key) => Err(SiteError::key(
                self.line_of(key.span().start),
                key.get_ref(),
                Problem::UnknownKey {
                    nearest: nearest(key.get_ref(), known.iter().copied()),
                    known: known.to_vec(),
                },
            )),
        }
    }

    fn wrong_type(&self, key: &str, wanted: &'static str, got: &DeValue<'_>) -> SiteError {
        let got = match got {
            DeValue::String(text) => format!("the text `{}`", shown(text)),
            DeValue::Integer(number) => shown(&number.to_string()),
            DeValue::Float(number) => shown(number.as_str()),
            DeValue::Array(_) => "a list".to_owned(),
            DeValue::Table(_) => "a table".to_owned(),
            DeValue::Boolean(truth) => truth.to_string(),
            DeValue::Datetime(_) => "a date or time".to_owned(),
        };
        self.error(key, Problem::WrongType { wanted, got })
    }

    /// A table under this one.
    pub(super) fn table(&self, key: &str) -> Result<Option<Table<'a>>, SiteError> {
        match self.get(key) {
            None => Ok(None),
            Some(At {
                value: DeValue::Table(entries),
                line,
            }) => Ok(Some(Table {
                lines: self.lines,
                entries,
                line,
            })),
            Some(at) => Err(self.wrong_type(key, "one table", at.value)),
        }
    }

    /// A list of tables under this one.
    pub(super) fn tables(&self, key: &str) -> Result<Option<Vec<Table<'a>>>, SiteError> {
        const WANTED: &str = "a list of tables, each headed with double brackets";
        let Some(at) = self.get(key) else {
            return Ok(None);
        };
        let DeValue::Array(list) = at.value else {
            return Err(self.wrong_type(key, WANTED, at.value));
        };
        list.iter()
            .map(|item| match item.get_ref() {
                DeValue::Table(entries) => Ok(Table {
                    lines: self.lines,
                    entries,
                    line: self.line_of(item.span().start),
                }),
                other => Err(self.wrong_type(key, WANTED, other)),
            })
            .collect::<Result<Vec<_>, _>>()
            .map(Some)
    }

    /// Text that is not blank and holds nothing unprintable, trimmed.
    pub(super) fn text(&self, key: &str) -> Result<Option<&'a str>, SiteError> {
        match self.get(key) {
            None => Ok(None),
            Some(At {
                value: DeValue::String(text),
                ..
            }) => match printable(text) {
                Ok(text) => Ok(Some(text)),
                Err(problem) => Err(self.error(key, problem)),
            },
            Some(at) => Err(self.wrong_type(key, "text in quotes", at.value)),
        }
    }

    pub(super) fn finite(&self, key: &str) -> Result<Option<f64>, SiteError> {
        match self.get(key) {
            None => Ok(None),
            Some(at) => self.finite_value(key, at.value).map(Some),
        }
    }

    fn finite_value(&self, key: &str, value: &DeValue<'_>) -> Result<f64, SiteError> {
        let number = match value {
            DeValue::Integer(number) => integer(number).map(|n| n as f64),
            DeValue::Float(number) => number.as_str().parse().ok(),
            _ => None,
        };
        match number {
            None => Err(self.wrong_type(key, "a number", value)),
            Some(number) if number.is_finite() => Ok(number),
            Some(got) => Err(self.error(key, Problem::NotFinite { got })),
        }
    }

    /// A number above zero.
    pub(super) fn positive(&self, key: &str) -> Result<Option<f64>, SiteError> {
        match self.finite(key)? {
            Some(got) if got <= 0.0 => Err(self.error(key, Problem::NotPositive { got })),
            number => Ok(number),
        }
    }

    /// A number above zero and within `low..=high`.
    pub(super) fn between(&self, key: &str, low: f64, high: f64) -> Result<Option<f64>, SiteError> {
        match self.positive(key)? {
            Some(got) if !(low..=high).contains(&got) => {
                Err(self.error(key, out_of_range(low, high, &got.to_string())))
            }
            number => Ok(number),
        }
    }

    /// A frequency, Hz.
    pub(super) fn hz(&self, key: &str) -> Result<Option<f64>, SiteError> {
        self.between(key, MIN_HZ, MAX_HZ)
    }

    /// A whole number from `low` (≥ 1) to `high`.
    pub(super) fn whole(&self, key: &str, low: u32, high: u32) -> Result<Option<u32>, SiteError> {
        let Some(at) = self.get(key) else {
            return Ok(None);
        };
        let DeValue::Integer(number) = at.value else {
            // NaN and infinity are said as such, everything else as not whole.
            if at.value.is_float() {
                self.finite(key)?;
            }
            return Err(self.wrong_type(key, "a whole number", at.value));
        };
        match integer(number) {
            Some(n) if n <= 0 => Err(self.error(key, Problem::NotPositive { got: n as f64 })),
            Some(n) if (i128::from(low)..=i128::from(high)).contains(&n) => {
                Ok(u32::try_from(n).ok())
            }
            _ => Err(self.error(
                key,
                out_of_range(f64::from(low), f64::from(high), &number.to_string()),
            )),
        }
    }

    /// Numbers above zero in a list.
    pub(super) fn numbers(&self, key: &str) -> Result<Option<Vec<f64>>, SiteError> {
        let Some(at) = self.get(key) else {
            return Ok(None);
        };
        let DeValue::Array(list) = at.value else {
            return Err(self.wrong_type(key, "a list of numbers", at.value));
        };
        list.iter()
            .map(|item| self.finite_value(key, item.get_ref()))
            .collect::<Result<Vec<_>, _>>()
            .map(Some)
    }

    /// A tolerance of a frequency of `nominal_hz`.
    pub(super) fn tolerance(
        &self,
        key: &str,
        nominal_hz: f64,
    ) -> Result<Option<Tolerance>, SiteError> {
        match self.get(key) {
            None => Ok(None),
            Some(At {
                value: DeValue::String(text),
                ..
            }) => tolerance_of(text, nominal_hz)
                .map(Some)
                .map_err(|problem| self.error(key, problem)),
            Some(at) => Err(self.wrong_type(
                key,
                "text with a unit, such as \"1 %\", \"100 ppm\" or \"0.5 Hz\"",
                at.value,
            )),
        }
    }
}

/// A tolerance that is below the frequency it is of.
pub(super) fn tolerance_of(text: &str, nominal_hz: f64) -> Result<Tolerance, Problem> {
    let tolerance = parse_tolerance(text)?;
    if (1e-12..1.0).contains(&tolerance.relative(nominal_hz)) {
        Ok(tolerance)
    } else {
        Err(Problem::OutOfRange {
            wanted: format!("below the frequency itself ({nominal_hz} Hz) and not next to nothing"),
            got: shown(text),
        })
    }
}

/// Trimmed text, if it is neither blank nor unprintable.
pub(super) fn printable(text: &str) -> Result<&str, Problem> {
    const LONGEST: usize = 200;
    let trimmed = text.trim();
    let fits = !trimmed.is_empty()
        && trimmed.chars().count() <= LONGEST
        && !trimmed.chars().any(is_unprintable);
    if fits {
        Ok(trimmed)
    } else {
        Err(Problem::OutOfRange {
            wanted: format!("1 to {LONGEST} printable characters"),
            got: format!("`{}`", shown(text)),
        })
    }
}

pub(super) fn out_of_range(low: f64, high: f64, got: &str) -> Problem {
    Problem::OutOfRange {
        wanted: format!("from {low} to {high}"),
        got: shown(got),
    }
}

/// `None` if it does not fit.
fn integer(number: &DeInteger<'_>) -> Option<i128> {
    i128::from_str_radix(number.as_str(), number.radix()).ok()
}
