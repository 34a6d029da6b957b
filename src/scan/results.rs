//! The result files of a scan, written so that a kill at any moment loses nothing
//! that was finished.
//!
//! `suspects.csv` and `recordings.csv` only ever grow, by all rows of one recording at
//! a time, in the order of the inputs. After each recording the *journal* gets a line
//! with the length that both have reached and a checksum of what was added. A scan that
//! goes on reads the journal, checks what it speaks of, cuts off whatever lies
//! beyond its last good line, and continues there. The journal's first line says what
//! scan it is; an operating-system lock on it keeps a second scan out.

use super::error::ScanError;
use super::identity::{Checksum, Identity};
use std::fs::{File, OpenOptions, TryLockError};
use std::io::{BufRead, BufReader, Read, Seek, SeekFrom, Write};
use std::path::{Path, PathBuf};
use std::time::{Duration, Instant};

/// Name of the journal in the output folder.
pub const JOURNAL: &str = ".scan-journal";
/// Name of the suspect list.
pub const SUSPECTS: &str = "suspects.csv";
/// Name of the list of recordings.
pub const RECORDINGS: &str = "recordings.csv";
/// Name of the list of what recurs.
pub const RECURRING: &str = "recurring.csv";
/// [`RECURRING`] while it is being written.
pub(super) const RECURRING_PART: &str = ".recurring-part";

/// How often what was written is forced to the disk: a power cut loses no more.
const SYNC_EVERY: Duration = Duration::from_secs(5);

/// A file that grows, and the length up to which it is whole.
struct Sheet {
    path: PathBuf,
    file: File,
    len: u64,
}

impl Sheet {
    fn open(path: PathBuf) -> Result<Sheet, ScanError> {
        let file = OpenOptions::new()
            .read(true)
            .write(true)
            .create(true)
            .truncate(false)
            .open(&path)
            .map_err(ScanError::at(&path))?;
        Ok(Sheet { path, file, len: 0 })
    }

    fn write(&mut self, bytes: &[u8]) -> Result<(), ScanError> {
        self.file
            .write_all(bytes)
            .map_err(ScanError::at(&self.path))
    }

    /// Cuts the file to `len` and goes on writing there.
    fn cut(&mut self, len: u64) -> Result<(), ScanError> {
        self.len = len;
        self.file
            .set_len(len)
            .and_then(|()| self.file.seek(SeekFrom::Start(len)))
            .map_err(ScanError::at(&self.path))?;
        Ok(())
    }

    fn sync(&self) -> Result<(), ScanError> {
        self.file.sync_data().map_err(ScanError::at(&self.path))
    }
}

/// The open result files of a running scan.
pub struct Results {
    journal: Sheet,
    suspects: Sheet,
    recordings: Sheet,
    synced: Instant,
}

impl Results {
    /// Opens the files in `folder`, new or where `resume` allows to go on, and tells how
    /// many recordings are done. `headers` are those of the suspect list and the list of
    /// recordings.
    ///
    /// # Errors
    /// If the folder cannot be written to, holds something else, or is in use.
    pub fn open(
        folder: &Path,
        identity: &Identity,
        resume: bool,
        headers: (&[u8], &[u8]),
    ) -> Result<(Results, usize), ScanError> {
        if folder.exists() && !folder.is_dir() {
            return Err(ScanError::NotAFolder {
                path: folder.into(),
            });
        }
        std::fs::create_dir_all(folder).map_err(ScanError::at(folder))?;
        let paths = [SUSPECTS, RECORDINGS, RECURRING].map(|name| folder.join(name));
        for path in &paths {
            if path.exists() && !path.is_file() {
                return Err(ScanError::NotAFile { path: path.clone() });
            }
        }
        let foreign = paths.iter().find(|p| p.symlink_metadata().is_ok());
        let place = folder.join(JOURNAL);
        let known = place.symlink_metadata().is_ok();
        if let (Some(path), false) = (foreign, known) {
            return Err(ScanError::Foreign { path: path.clone() });
        }
        let mut journal = Sheet::open(place)?;
        match journal.file.try_lock() {
            Ok(()) => {}
            Err(TryLockError::WouldBlock) => {
                return Err(ScanError::Running {
                    folder: folder.into(),
                });
            }
            // A file system without locks: better one scan unguarded than none.
            Err(TryLockError::Error(e)) if e.kind() == std::io::ErrorKind::Unsupported => {}
            Err(TryLockError::Error(source)) => {
                return Err(ScanError::Io {
                    path: journal.path,
                    source,
                });
            }
        }
        let first = first_line(&mut journal)?;
        if first.is_none()
            && let Some(path) = foreign
        {
            // Killed before its first line was whole, a scan has no other file yet.
            return Err(ScanError::Foreign { path: path.clone() });
        }
        if let Some(line) = &first {
            if !resume {
                return Err(ScanError::Earlier {
                    folder: folder.into(),
                });
            }
            if let Some(what) = identity.differs(line) {
                return Err(ScanError::Other {
                    folder: folder.into(),
                    what,
                });
            }
        }
        let line = identity.line();
        if first.is_none() {
            journal.cut(0)?;
            journal.write(line.as_bytes())?;
        }
        journal.len = line.len() as u64;
        let [suspects, recordings, _] = paths;
        let mut results = Results {
            journal,
            suspects: Sheet::open(suspects)?,
            recordings: Sheet::open(recordings)?,
            synced: Instant::now(),
        };
        let done = match results.recover()? {
            Some(done) => done,
            None => {
                results.cut_all()?;
                results.append(headers.0, headers.1)?;
                0
            }
        };
        Ok((results, done))
    }

    /// Adds all rows of one recording. If that fails, none is left in the files.
    ///
    /// # Errors
    /// If the disk is full or gone.
    pub fn append(&mut self, suspects: &[u8], recording: &[u8]) -> Result<(), ScanError> {
        let lengths = (
            self.suspects.len + suspects.len() as u64,
            self.recordings.len + recording.len() as u64,
        );
        let mut sum = Checksum::new();
        sum.add(suspects);
        sum.add(recording);
        let line = format!("{} {} {:016x}\n", lengths.0, lengths.1, sum.value());
        let written = self
            .suspects
            .write(suspects)
            .and_then(|()| self.recordings.write(recording))
            .and_then(|()| self.journal.write(line.as_bytes()));
        if let Err(error) = written {
            // Should even that fail, the journal still tells what is whole.
            let _ = self.cut_all();
            return Err(error);
        }
        (self.suspects.len, self.recordings.len) = lengths;
        self.journal.len += line.len() as u64;
        if self.synced.elapsed() >= SYNC_EVERY {
            self.sync()?;
        }
        Ok(())
    }

    /// Forces everything written to the disk.
    ///
    /// # Errors
    /// If the disk refuses.
    pub fn sync(&mut self) -> Result<(), ScanError> {
        // In this order, so that the journal never promises what is not there.
        self.suspects.sync()?;
        self.recordings.sync()?;
        self.journal.sync()?;
        self.synced = Instant::now();
        Ok(())
    }

    fn cut_all(&mut self) -> Result<(), ScanError> {
        self.suspects.cut(self.suspects.len)?;
        self.recordings.cut(self.recordings.len)?;
        self.journal.cut(self.journal.len)
    }

    /// Finds how far the files are whole and cuts them there; the number of recordings
    /// done, or `None` where not even the headers are.
    fn recover(&mut self) -> Result<Option<usize>, ScanError> {
        let at = ScanError::at;
        let ends = [
            file_len(&self.suspects)?,
            file_len(&self.recordings)?,
            file_len(&self.journal)?,
        ];
        let journal_path = self.journal.path.clone();
        let start = self.journal.len;
        self.journal
            .file
            .seek(SeekFrom::Start(start))
            .map_err(at(&journal_path))?;
        let mut lines = BufReader::new(&self.journal.file);
        let mut columns = [&mut self.suspects, &mut self.recordings];
        let mut readers = Vec::new();
        for sheet in &mut columns {
            sheet.file.rewind().map_err(at(&sheet.path))?;
            readers.push(BufReader::new(
                sheet.file.try_clone().map_err(at(&sheet.path))?,
            ));
        }
        let mut whole = [0, 0, start];
        let mut records = 0;
        let mut text = Vec::new();
        loop {
            text.clear();
            lines
                .read_until(b'\n', &mut text)
                .map_err(at(&journal_path))?;
            let Some((lengths, expected)) = parse(&text) else {
                break;
            };
            let mut sum = Checksum::new();
            let mut readable = true;
            for ((reader, sheet), (i, &length)) in readers
                .iter_mut()
                .zip(&columns)
                .zip(lengths.iter().enumerate())
            {
                readable = readable && length >= whole[i] && length <= ends[i];
                if readable {
                    add_bytes(reader, length - whole[i], &mut sum).map_err(at(&sheet.path))?;
                }
            }
            if !readable {
                break;
            }
            let journal_end = whole[2] + text.len() as u64;
            if sum.value() != expected {
                if journal_end < ends[2] {
                    // Not a torn end: later rows were written after this one.
                    let [suspects, _] = columns;
                    return Err(ScanError::Changed {
                        path: suspects
                            .path
                            .with_file_name("suspects.csv or recordings.csv"),
                    });
                }
                break;
            }
            whole = [lengths[0], lengths[1], journal_end];
            records += 1usize;
        }
        drop((lines, readers));
        self.suspects.len = whole[0];
        self.recordings.len = whole[1];
        self.journal.len = whole[2];
        self.cut_all()?;
        // The first record is that of the headers.
        Ok(records.checked_sub(1))
    }
}

fn file_len(sheet: &Sheet) -> Result<u64, ScanError> {
    let meta = sheet.file.metadata().map_err(ScanError::at(&sheet.path))?;
    Ok(meta.len())
}

/// The journal's first line, if it is whole.
fn first_line(journal: &mut Sheet) -> Result<Option<String>, ScanError> {
    let mut line = Vec::new();
    BufReader::new(&journal.file)
        .take(1024)
        .read_until(b'\n', &mut line)
        .map_err(ScanError::at(&journal.path))?;
    Ok(line
        .ends_with(b"\n")
        .then(|| String::from_utf8_lossy(&line).into_owned()))
}

/// A whole line of the journal: the lengths of both lists, and the checksum.
fn parse(line: &[u8]) -> Option<([u64; 2], u64)> {
    let line = std::str::from_utf8(line.strip_suffix(b"\n")?).ok()?;
    let mut words = line.split(' ');
    let suspects = words.next()?.parse().ok()?;
    let recordings = words.next()?.parse().ok()?;
    let sum = u64::from_str_radix(words.next()?, 16).ok()?;
    words
        .next()
        .is_none()
        .then_some(([suspects, recordings], sum))
}

fn add_bytes(reader: &mut impl BufRead, mut count: u64, sum: &mut Checksum) -> std::io::Result<()> {
    while count > 0 {
        let block = reader.fill_buf()?;
        let take = block
            .len()
            .min(usize::try_from(count).unwrap_or(usize::MAX));
        let Some(bytes) = block.get(..take).filter(|b| !b.is_empty()) else {
            return Err(std::io::ErrorKind::UnexpectedEof.into());
        };
        sum.add(bytes);
        reader.consume(take);
        count -= take as u64;
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;

    const HEADERS: (&[u8], &[u8]) = (b"head a\r\n", b"head b\r\n");

    fn identity() -> Identity {
        Identity {
            options: 1,
            site: 2,
            names: 3,
            recordings: 9,
        }
    }

    fn open(folder: &Path) -> Result<(Results, usize), ScanError> {
        Results::open(folder, &identity(), true, HEADERS)
    }

    fn contents(folder: &Path) -> [Vec<u8>; 3] {
        [SUSPECTS, RECORDINGS, JOURNAL].map(|n| std::fs::read(folder.join(n)).unwrap())
    }

    fn rows(i: usize) -> (String, String) {
        let suspects = format!("row of {i}\r\n").repeat(i % 3);
        (suspects, format!("recording {i}\r\n"))
    }

    fn fill(results: &mut Results, from: usize, to: usize) {
        for i in from..to {
            let (suspects, recording) = rows(i);
            results
                .append(suspects.as_bytes(), recording.as_bytes())
                .unwrap();
        }
    }

    /// Cuts every file at every length that a kill could have left, in the order of
    /// writing, and goes on from there.
    #[test]
    fn a_torn_end_is_cut_off_wherever_it_tore() {
        let whole = tempfile::tempdir().unwrap();
        let (mut results, done) = open(whole.path()).unwrap();
        assert_eq!(done, 0);
        fill(&mut results, 0, 6);
        drop(results);
        let expected = contents(whole.path());
        let torn = tempfile::tempdir().unwrap();
        // what there was before the last recording, and after
        let (mut results, _) = open(torn.path()).unwrap();
        fill(&mut results, 0, 5);
        drop(results);
        let before = contents(torn.path());
        for file in 0..3 {
            for cut in before[file].len()..expected[file].len() {
                for (i, name) in [SUSPECTS, RECORDINGS, JOURNAL].iter().enumerate() {
                    let content = match i.cmp(&file) {
                        std::cmp::Ordering::Less => &expected[i][..],
                        std::cmp::Ordering::Equal => &expected[i][..cut],
                        std::cmp::Ordering::Greater => &before[i][..],
                    };
                    std::fs::write(torn.path().join(name), content).unwrap();
                }
                let (mut results, done) = open(torn.path()).unwrap();
                assert_eq!(done, 5, "file {file} cut at {cut}");
                assert_eq!(contents(torn.path()), before);
                fill(&mut results, done, 6);
                drop(results);
                assert_eq!(contents(torn.path()), expected);
            }
        }
    }

    #[test]
    fn a_kill_before_the_first_recording_loses_nothing() {
        let whole = tempfile::tempdir().unwrap();
        drop(open(whole.path()).unwrap());
        let expected = contents(whole.path());
        for cut in 0..expected[2].len() {
            let folder = tempfile::tempdir().unwrap();
            std::fs::write(folder.path().join(JOURNAL), &expected[2][..cut]).unwrap();
            let (_, done) = open(folder.path()).unwrap();
            assert_eq!(done, 0);
            assert_eq!(contents(folder.path()), expected, "cut at {cut}");
        }
    }

    #[test]
    fn what_was_changed_is_not_gone_on_with() {
        let folder = tempfile::tempdir().unwrap();
        let (mut results, _) = open(folder.path()).unwrap();
        fill(&mut results, 0, 6);
        drop(results);
        let list = folder.path().join(SUSPECTS);
        let mut bytes = std::fs::read(&list).unwrap();
        bytes[10] ^= 1;
        std::fs::write(&list, &bytes).unwrap();
        assert!(matches!(
            open(folder.path()),
            Err(ScanError::Changed { .. })
        ));
        assert_eq!(std::fs::read(&list).unwrap(), bytes);
    }

    #[test]
    fn another_scan_is_told_by_what_differs() {
        let folder = tempfile::tempdir().unwrap();
        drop(open(folder.path()).unwrap());
        type Change = fn(&mut Identity);
        let cases: [(Change, &str); 4] = [
            (|i| i.options += 1, "options"),
            (|i| i.site += 1, "site file"),
            (|i| i.names += 1, "recordings"),
            (|i| i.recordings += 1, "recordings"),
        ];
        for (change, word) in cases {
            let mut other = identity();
            change(&mut other);
            let error = Results::open(folder.path(), &other, true, HEADERS)
                .err()
                .unwrap();
            assert!(error.to_string().contains(word), "{error}");
        }
        let again = Results::open(folder.path(), &identity(), false, HEADERS);
        assert!(matches!(again, Err(ScanError::Earlier { .. })));
    }

    #[test]
    fn only_one_scan_at_a_time() {
        let folder = tempfile::tempdir().unwrap();
        let held = open(folder.path()).unwrap();
        assert!(matches!(
            open(folder.path()),
            Err(ScanError::Running { .. })
        ));
        drop(held);
        assert!(open(folder.path()).is_ok());
    }

    #[test]
    fn nobody_elses_file_is_touched() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join(RECORDINGS);
        std::fs::write(&path, "mine").unwrap();
        assert!(matches!(
            open(folder.path()),
            Err(ScanError::Foreign { .. })
        ));
        assert_eq!(std::fs::read(&path).unwrap(), b"mine");
        assert!(!folder.path().join(JOURNAL).exists());
    }
}
