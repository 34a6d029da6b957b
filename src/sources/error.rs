//! What can be wrong with a site file, each as one line.

use super::Kind;

/// Why a site file was not taken. Prints as one line without the file's name,
/// which the caller puts in front.
#[derive(Debug, thiserror::Error)]
pub enum SiteError {
    /// The file could not be opened or read.
    #[error("cannot be read: {source} (give the path of a site file, TOML or a plain list)")]
    Read {
        /// What the system said.
        source: std::io::Error,
    },
    /// Longer than any honest site file.
    #[error("is longer than {limit} bytes, the most a site file may have")]
    TooLong {
        /// The cap, bytes.
        limit: u64,
    },
    /// Not text.
    #[error("line {line}: is not UTF-8 text (save the file as UTF-8)")]
    NotUtf8 {
        /// From 1.
        line: usize,
    },
    /// Nothing in it.
    #[error("lists no source and describes no recorder (add a [[source]] table)")]
    Empty,
    /// Not TOML, or a list whose rows cannot be told apart.
    #[error("line {line}: {message}")]
    Syntax {
        /// From 1.
        line: usize,
        /// What the parser said, on one line.
        message: String,
    },
    /// One key (of a table) or column (of a list) is wrong.
    #[error("line {line}: key `{key}`: {problem}")]
    Key {
        /// From 1.
        line: usize,
        /// The key or column.
        key: String,
        /// What is wrong with it.
        problem: Problem,
    },
}

impl SiteError {
    pub(super) fn key(line: usize, key: &str, problem: Problem) -> Self {
        SiteError::Key {
            line,
            key: shown(key),
            problem,
        }
    }

    /// The line of the file, from 1, where one is to blame.
    pub fn line(&self) -> Option<usize> {
        match self {
            SiteError::NotUtf8 { line }
            | SiteError::Syntax { line, .. }
            | SiteError::Key { line, .. } => Some(*line),
            SiteError::Read { .. } | SiteError::TooLong { .. } | SiteError::Empty => None,
        }
    }

    /// The key or column, where one is to blame.
    pub fn key_name(&self) -> Option<&str> {
        match self {
            SiteError::Key { key, .. } => Some(key),
            _ => None,
        }
    }
}

/// What is wrong with a key. Words taken from the file are shown escaped and
/// shortened.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum Problem {
    /// No such key here.
    #[error("is not known here{}", hint(.nearest.as_deref(), "known", .known))]
    UnknownKey {
        /// The known key most like it.
        nearest: Option<String>,
        /// Every key that could stand here.
        known: Vec<&'static str>,
    },
    /// A key that must be there is not.
    #[error("is missing, {needed_by} needs it")]
    Missing {
        /// Who needs it, in words.
        needed_by: String,
    },
    /// The value is of another type.
    #[error("must be {wanted}, got {got}")]
    WrongType {
        /// In words.
        wanted: &'static str,
        /// TOML's name of the type, or the text itself.
        got: String,
    },
    /// Zero or below.
    #[error("must be positive, got {got}")]
    NotPositive {
        /// The value.
        got: f64,
    },
    /// NaN or infinite.
    #[error("must be a finite number, got {got}")]
    NotFinite {
        /// The value.
        got: f64,
    },
    /// Outside what makes sense.
    #[error("must be {wanted}, got {got}")]
    OutOfRange {
        /// The range, in words.
        wanted: String,
        /// The value.
        got: String,
    },
    /// A word that is not one of a fixed list.
    #[error("`{got}` is no known {what}{}", hint(.nearest.as_deref(), "known", .known))]
    UnknownWord {
        /// `kind`, `family`.
        what: &'static str,
        /// The word.
        got: String,
        /// The listed word most like it.
        nearest: Option<String>,
        /// The list.
        known: Vec<&'static str>,
    },
    /// A quantity whose unit is missing or not understood.
    #[error("`{got}` has no unit known here (write it as {examples})")]
    UnknownUnit {
        /// The whole text.
        got: String,
        /// What would be understood.
        examples: &'static str,
    },
    /// A reference to nothing.
    #[error("`{got}` is the name of no source in this file{}", hint(.nearest.as_deref(), "", &[]))]
    NoSuchSource {
        /// The name.
        got: String,
        /// The listed name most like it.
        nearest: Option<String>,
    },
    /// A reference to a source that cannot carry or feed this one.
    #[error("`{got}` is of kind {kind}, but this must name {wanted}")]
    WrongKind {
        /// The name.
        got: String,
        /// What it is.
        kind: Kind,
        /// What it should be, in words.
        wanted: &'static str,
    },
    /// Riding on itself, perhaps by way of others.
    #[error("`{got}` leads back to this source, which cannot ride on itself")]
    Cycle {
        /// The name.
        got: String,
    },
    /// A name used twice.
    #[error("`{got}` is already the name of the source on line {first_line} (names must differ)")]
    DuplicateName {
        /// The name.
        got: String,
        /// Where it was first.
        first_line: usize,
    },
    /// Two keys that exclude each other.
    #[error("cannot stand beside `{other}` (give one of the two)")]
    Conflict {
        /// The other key.
        other: &'static str,
    },
}

fn hint(nearest: Option<&str>, heading: &str, known: &[&'static str]) -> String {
    let mut text = match nearest {
        Some(word) => format!(", did you mean `{}`?", shown(word)),
        None => String::new(),
    };
    if !known.is_empty() {
        text.push_str(&format!(" ({heading}: {})", known.join(", ")));
    }
    text
}

/// Text of the file made fit for one line: control characters escaped, at most
/// 60 characters.
pub(super) fn shown(text: &str) -> String {
    shown_up_to(60, text)
}

/// As [`shown`], with at most `most` characters.
pub(super) fn shown_up_to(most: usize, text: &str) -> String {
    let mut out = String::new();
    for (n, c) in text.chars().enumerate() {
        if n == most {
            out.push('…');
            break;
        }
        if is_unprintable(c) {
            out.extend(c.escape_unicode());
        } else {
            out.push(c);
        }
    }
    out
}

/// Control characters, line and paragraph separators, and the marks that turn
/// the direction of what follows: none may reach a terminal.
pub(super) fn is_unprintable(c: char) -> bool {
    c.is_control()
        || matches!(c, '\u{200e}' | '\u{200f}' | '\u{2028}'..='\u{202e}' | '\u{2066}'..='\u{2069}' | '\u{feff}')
}

/// The candidate most like `word`, if any is like it: at most two edits, and no
/// more than half the word's letters (edits and swaps of neighbours, Damerau 1964).
pub(super) fn nearest<'a>(
    word: &str,
    candidates: impl IntoIterator<Item = &'a str>,
) -> Option<String> {
    let word: Vec<char> = word.to_lowercase().chars().take(100).collect();
    let most = 2.min(word.len() / 2);
    candidates
        .into_iter()
        .map(|candidate| (edits(&word, &candidate.to_lowercase()), candidate))
        .filter(|&(distance, _)| distance <= most)
        .min_by_key(|&(distance, _)| distance)
        .map(|(_, candidate)| candidate.to_owned())
}

/// Insertions, deletions, changes and swaps of neighbours that lead from one word
/// to the other.
fn edits(word: &[char], other: &str) -> usize {
    let other: Vec<char> = other.chars().take(100).collect();
    // Row i holds the distances of other[..i] from each word[..j].
    let mut rows: Vec<Vec<usize>> = vec![(0..=word.len()).collect()];
    let cell = |rows: &[Vec<usize>], i: usize, j: usize| {
        let row = rows.get(i);
        row.and_then(|row| row.get(j))
            .copied()
            .unwrap_or(usize::MAX / 2)
    };
    for (i, c) in other.iter().enumerate() {
        let mut row = vec![i + 1];
        for (j, w) in word.iter().enumerate() {
            let left = row.last().copied().unwrap_or(usize::MAX / 2);
            let mut least = (cell(&rows, i, j) + usize::from(w != c))
                .min(cell(&rows, i, j + 1) + 1)
                .min(left + 1);
            let swapped =
                i > 0 && j > 0 && word.get(j - 1) == Some(c) && other.get(i - 1) == Some(w);
            if swapped {
                least = least.min(cell(&rows, i - 1, j - 1) + 1);
            }
            row.push(least);
        }
        rows.push(row);
    }
    cell(&rows, other.len(), word.len())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn edit_distance_of_textbook_words() {
        let kitten: Vec<char> = "kitten".chars().collect();
        assert_eq!(edits(&kitten, "sitting"), 3);
        assert_eq!(edits(&kitten, "kitten"), 0);
        assert_eq!(edits(&kitten, ""), 6);
        assert_eq!(edits(&kitten, "iktten"), 1);
    }

    #[test]
    fn only_a_similar_word_is_suggested() {
        assert_eq!(nearest("order", ["orders", "hz"]), Some("orders".into()));
        assert_eq!(nearest("colour", ["orders", "hz"]), None);
        assert_eq!(nearest("q", ["hz"]), None);
    }

    #[test]
    fn shown_text_is_one_short_line() {
        assert_eq!(shown("a\nb\u{1b}[1m"), "a\\u{a}b\\u{1b}[1m");
        assert_eq!(shown(&"x".repeat(500)).chars().count(), 61);
    }
}
