//! Which files a scan reads: those named, and all that look like recordings in the
//! folders named.

use super::error::ScanError;
use super::results::JOURNAL;
use crate::capture;
use std::collections::HashSet;
use std::ffi::OsStr;
use std::fs;
use std::io::Read;
use std::path::{Path, PathBuf};

/// One recording to read.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Input {
    /// As the analyst named it, or the folder as named with the path inside it.
    pub path: PathBuf,
    /// Why there is nothing to read, where that is known already: a folder that
    /// cannot be listed.
    pub problem: Option<String>,
}

/// Everything a scan reads.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct Inputs {
    /// In the order of the results.
    pub recordings: Vec<Input>,
    /// Files and folders passed over: hidden, not a recording, or seen already.
    pub skipped: u64,
}

/// Names of recordings that are taken for one whatever is inside.
const RECORDINGS: [&str; 7] = ["wav", "wave", "bwf", "rf64", "flac", "csv", "tsv"];
/// Names under which a log may hide: taken if rows of numbers are inside.
const LOGS: [&str; 5] = ["txt", "log", "dat", "asc", "prn"];
/// Bytes of a log that are looked at.
const HEAD: u64 = 4096;

/// Lists the recordings of `paths`: files as they are named, folders with all that
/// is below them, sorted by name. The output folder `out`, and the folders of other
/// scans, are passed over; each folder is entered once, whatever links lead there.
///
/// # Errors
/// If one of `paths` is the output folder.
pub fn collect(paths: &[PathBuf], out: &Path) -> Result<Inputs, ScanError> {
    let mut walk = Walk {
        inputs: Inputs::default(),
        entered: HashSet::new(),
        out: fs::canonicalize(out).ok(),
    };
    for path in paths {
        if !path.is_dir() {
            // What is wrong with it, if anything, is found when it is opened.
            walk.take(path.clone(), None);
            continue;
        }
        if walk.out.is_some() && fs::canonicalize(path).ok() == walk.out {
            return Err(ScanError::AmongRecordings { path: out.into() });
        }
        walk.folder(path);
    }
    Ok(walk.inputs)
}

struct Walk {
    inputs: Inputs,
    /// Real paths of the folders entered.
    entered: HashSet<PathBuf>,
    out: Option<PathBuf>,
}

impl Walk {
    fn take(&mut self, path: PathBuf, problem: Option<String>) {
        self.inputs.recordings.push(Input { path, problem });
    }

    fn folder(&mut self, folder: &Path) {
        let names = match names(folder) {
            Ok(names) => names,
            Err(error) => {
                self.take(
                    folder.to_owned(),
                    Some(format!("the folder cannot be listed: {error}")),
                );
                return;
            }
        };
        let real = fs::canonicalize(folder).unwrap_or_else(|_| folder.to_owned());
        let results = self.out.as_ref() == Some(&real) || names.iter().any(|n| n == JOURNAL);
        if results || !self.entered.insert(real) {
            self.inputs.skipped += 1;
            return;
        }
        for name in names {
            let path = folder.join(&name);
            let hidden = name.as_encoded_bytes().first() == Some(&b'.');
            match fs::metadata(&path) {
                _ if hidden => self.inputs.skipped += 1,
                Ok(meta) if meta.is_dir() => self.folder(&path),
                Ok(meta) if meta.is_file() && is_recording(&path) => self.take(path, None),
                // A dangling link or an unreadable file is a failure worth telling
                // where a recording was meant.
                Err(_) if has_extension(&path, &RECORDINGS) => self.take(path, None),
                _ => self.inputs.skipped += 1,
            }
        }
    }
}

/// Names in a folder, sorted.
fn names(folder: &Path) -> std::io::Result<Vec<std::ffi::OsString>> {
    let mut names = fs::read_dir(folder)?
        .map(|entry| entry.map(|e| e.file_name()))
        .collect::<std::io::Result<Vec<_>>>()?;
    names.sort();
    Ok(names)
}

fn has_extension(path: &Path, known: &[&str]) -> bool {
    path.extension()
        .is_some_and(|e| known.iter().any(|k| e.eq_ignore_ascii_case(k)))
}

/// Is this file of a folder meant as a recording?
fn is_recording(path: &Path) -> bool {
    if has_extension(path, &RECORDINGS) {
        return true;
    }
    let log = has_extension(path, &LOGS) || path.extension().is_none_or(OsStr::is_empty);
    capture::begins_as_wave(path).unwrap_or(false) || (log && holds_numbers(path))
}

/// Are most lines at the start of a file rows of numbers?
fn holds_numbers(path: &Path) -> bool {
    let mut head = Vec::new();
    let read = fs::File::open(path).and_then(|file| file.take(HEAD).read_to_end(&mut head));
    let Ok(text) = read.map(|_| String::from_utf8_lossy(&head)) else {
        return false;
    };
    // The last line may be cut off.
    let whole = text.rsplit_once('\n').map_or("", |(lines, _)| lines);
    let (mut rows, mut others) = (0, 0);
    for line in whole.lines().filter(|l| !l.trim().is_empty()) {
        let mut cells = line
            .split([',', ';', '\t', ' '])
            .filter(|cell| !cell.is_empty());
        if cells.all(|cell| cell.bytes().any(|b| b.is_ascii_digit()) && is_numeric(cell)) {
            rows += 1;
        } else {
            others += 1;
        }
    }
    rows >= 2 && rows > others
}

/// A number, a date or a time of day: digits and what stands between them.
fn is_numeric(cell: &str) -> bool {
    cell.bytes()
        .all(|b| b.is_ascii_digit() || b"+-.:/eETZ\"".contains(&b))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn listed(inputs: &Inputs, root: &Path) -> Vec<String> {
        inputs
            .recordings
            .iter()
            .map(|i| {
                let inside = i.path.strip_prefix(root).unwrap();
                inside.to_string_lossy().replace('\\', "/")
            })
            .collect()
    }

    #[test]
    fn folders_are_walked_in_order_and_the_rest_is_counted() {
        let folder = tempfile::tempdir().unwrap();
        let root = folder.path();
        for sub in ["b", ".hidden", "a.d", "out", "old"] {
            fs::create_dir(root.join(sub)).unwrap();
        }
        for (name, content) in [
            ("z.wav", "x"),
            ("a.CSV", "x"),
            ("b/2.csv", "x"),
            ("b/10.csv", "x"),
            ("a.d/log.txt", "time level\n1 2\n2 3\n3 4\n"),
            ("a.d/plain", "RIFF\0\0\0\0WAVEfmt "),
            ("notes.txt", "three pumps\n2 fans\nrun at 50 Hz\n"),
            ("picture.jpg", "\u{1}"),
            (".hidden/x.wav", "x"),
            (".x.wav", "x"),
            ("out/suspects.csv", "x"),
            ("old/suspects.csv", "x"),
        ] {
            fs::write(root.join(name), content).unwrap();
        }
        fs::write(root.join("old").join(JOURNAL), "").unwrap();
        let inputs = collect(&[root.to_owned()], &root.join("out")).unwrap();
        assert_eq!(
            listed(&inputs, root),
            [
                "a.CSV",
                "a.d/log.txt",
                "a.d/plain",
                "b/10.csv",
                "b/2.csv",
                "z.wav"
            ]
        );
        // .hidden, .x.wav, notes.txt, picture.jpg, out, old
        assert_eq!(inputs.skipped, 6);
        let refused = collect(&[root.join("out")], &root.join("out"));
        assert!(matches!(refused, Err(ScanError::AmongRecordings { .. })));
    }

    #[cfg(unix)]
    #[test]
    fn links_may_go_in_circles() {
        let folder = tempfile::tempdir().unwrap();
        let root = folder.path();
        fs::create_dir(root.join("sub")).unwrap();
        fs::write(root.join("sub/a.wav"), "x").unwrap();
        std::os::unix::fs::symlink(root, root.join("sub/up")).unwrap();
        std::os::unix::fs::symlink("self", root.join("self")).unwrap();
        std::os::unix::fs::symlink("absent", root.join("gone.wav")).unwrap();
        let inputs = collect(&[root.to_owned()], Path::new("elsewhere")).unwrap();
        assert_eq!(listed(&inputs, root), ["gone.wav", "sub/a.wav"]);
        assert_eq!(inputs.skipped, 2);
    }
}
