//! What makes a page a record: the program, how it was called, and what it read.

use crate::report::text::plain;
use sha2::{Digest, Sha256};
use std::ffi::OsStr;
use std::fs::File;
use std::io::{self, Read};
use std::path::Path;
use std::time::{SystemTime, UNIX_EPOCH};

/// How a result came about.
#[derive(Debug, Clone)]
pub struct Record {
    /// As it could be typed again; see [`command_line`].
    pub command_line: String,
    /// When.
    pub made: SystemTime,
    /// All that was read.
    pub inputs: Vec<Input>,
}

/// A file that was read.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Input {
    /// `recording`, `site file`.
    pub role: &'static str,
    /// As the analyst named it.
    pub name: String,
    /// Its length, or why it could not be read.
    pub content: Result<Content, String>,
}

/// What identifies a file's content.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Content {
    /// Length in bytes.
    pub bytes: u64,
    /// SHA-256 (FIPS 180-4) in hexadecimal.
    pub sha256: String,
}

impl Input {
    /// Reads a file through once.
    pub fn read(role: &'static str, path: &Path) -> Self {
        Input {
            role,
            name: path.to_string_lossy().into_owned(),
            content: content(path).map_err(|e| e.to_string()),
        }
    }

    pub(super) fn shown(&self) -> String {
        plain(&self.name)
    }

    pub(super) fn digest(&self) -> String {
        match &self.content {
            Ok(content) => content.sha256.clone(),
            Err(why) => format!("could not be read: {}", plain(why)),
        }
    }

    pub(super) fn bytes(&self) -> String {
        self.content
            .as_ref()
            .map_or_else(|_| String::new(), |c| grouped(c.bytes))
    }
}

fn content(path: &Path) -> io::Result<Content> {
    let mut file = File::open(path)?;
    let mut hasher = Sha256::new();
    let mut buffer = vec![0; 1 << 16];
    let mut bytes = 0;
    loop {
        let n = file.read(&mut buffer)?;
        let Some(read) = buffer.get(..n).filter(|r| !r.is_empty()) else {
            break;
        };
        hasher.update(read);
        bytes += n as u64;
    }
    let sha256 = hasher
        .finalize()
        .iter()
        .map(|b| format!("{b:02x}"))
        .collect();
    Ok(Content { bytes, sha256 })
}

/// 1 200 044, with thin spaces.
fn grouped(n: u64) -> String {
    let digits = n.to_string();
    let mut out = String::new();
    for (i, c) in digits.chars().enumerate() {
        if i > 0 && (digits.len() - i).is_multiple_of(3) {
            out.push('\u{202f}');
        }
        out.push(c);
    }
    out
}

/// Arguments as a POSIX shell takes them, control characters escaped.
pub fn command_line<'a>(arguments: impl IntoIterator<Item = &'a OsStr>) -> String {
    let quoted: Vec<String> = arguments
        .into_iter()
        .map(|argument| {
            let text = plain(&argument.to_string_lossy());
            let simple = |c: char| c.is_ascii_alphanumeric() || "-_./,:=+@%".contains(c);
            if !text.is_empty() && text.chars().all(simple) {
                text
            } else {
                format!("'{}'", text.replace('\'', "'\\''"))
            }
        })
        .collect();
    quoted.join(" ")
}

/// 2026-12-01 16:20 UTC.
pub(super) fn moment(at: SystemTime) -> String {
    let seconds = at.duration_since(UNIX_EPOCH).map_or(0, |d| d.as_secs());
    let (days, rest) = (seconds / 86_400, seconds % 86_400);
    let (year, month, day) = date(days);
    let (hour, minute) = (rest / 3600, rest % 3600 / 60);
    format!("{year:04}-{month:02}-{day:02} {hour:02}:{minute:02} UTC")
}

/// Year, month and day of the Gregorian calendar, `days` after 1970-01-01: the year
/// starts in March, so that the leap day is its last.
fn date(days: u64) -> (u64, u64, u64) {
    /// From 0000-03-01 to 1970-01-01.
    const TO_1970: u64 = 719_468;
    let z = days + TO_1970;
    let (era, of_era) = (z / 146_097, z % 146_097);
    let year = (of_era - of_era / 1460 + of_era / 36_524 - of_era / 146_096) / 365;
    let of_year = of_era - (365 * year + year / 4 - year / 100);
    let march = (5 * of_year + 2) / 153;
    let day = of_year - (153 * march + 2) / 5 + 1;
    let month = if march < 10 { march + 3 } else { march - 9 };
    (era * 400 + year + u64::from(month < 3), month, day)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_digest_is_that_of_the_standard() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("abc");
        std::fs::write(&path, "abc").unwrap();
        let content = content(&path).unwrap();
        assert_eq!(content.bytes, 3);
        // FIPS 180-4, the example of one block
        assert_eq!(
            content.sha256,
            "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
        );
        assert!(
            Input::read("recording", &folder.path().join("no"))
                .content
                .is_err()
        );
    }

    #[test]
    fn a_command_can_be_typed_again() {
        let line = ["foldtrace", "triage", "a b.wav", "it's", "x\u{1b}[2J", ""];
        assert_eq!(
            command_line(line.map(OsStr::new)),
            r"foldtrace triage 'a b.wav' 'it'\''s' 'x\u{1b}[2J' ''"
        );
    }

    #[test]
    fn dates_agree_with_counting_one_by_one() {
        let (mut year, mut month, mut day) = (1970, 1, 1);
        for days in 0..60_000 {
            assert_eq!(date(days), (year, month, day), "{days}");
            let leap = year % 4 == 0 && (year % 100 != 0 || year % 400 == 0);
            let length = match month {
                2 if leap => 29,
                2 => 28,
                4 | 6 | 9 | 11 => 30,
                _ => 31,
            };
            day += 1;
            if day > length {
                (day, month) = (1, month + 1);
            }
            if month > 12 {
                (month, year) = (1, year + 1);
            }
        }
        assert_eq!(grouped(1_200_044), "1\u{202f}200\u{202f}044");
    }
}
