//! What ends a scan before its recordings are done.

use crate::report::text::plain;
use std::io;
use std::path::{Path, PathBuf};
use thiserror::Error;

/// Why a scan cannot begin or go on. Prints as one line that begins with the file
/// or folder it is about; names are escaped.
#[derive(Debug, Error)]
#[non_exhaustive]
pub enum ScanError {
    /// The operating system refused.
    #[error("{}: {source}", shown(path))]
    Io {
        /// Which file or folder.
        path: PathBuf,
        /// What it said.
        source: io::Error,
    },
    /// The results cannot go there.
    #[error(
        "{}: is not a folder (give one to write the results into)",
        shown(path)
    )]
    NotAFolder {
        /// As given.
        path: PathBuf,
    },
    /// A device or link stands where a result would go.
    #[error(
        "{}: is not a regular file, so no results can be kept there (give another folder)",
        shown(path)
    )]
    NotAFile {
        /// Which.
        path: PathBuf,
    },
    /// A file of that name which is not a scan's.
    #[error(
        "{}: is there already, and not from a scan that could go on (give another folder)",
        shown(path)
    )]
    Foreign {
        /// Which.
        path: PathBuf,
    },
    /// An earlier scan's results are there.
    #[error(
        "{}: holds the results of an earlier scan (add --resume to go on with it, or give another folder)",
        shown(folder)
    )]
    Earlier {
        /// The output folder.
        folder: PathBuf,
    },
    /// Someone else is writing there.
    #[error(
        "{}: another scan is writing there (wait for it, or give another folder)",
        shown(folder)
    )]
    Running {
        /// The output folder.
        folder: PathBuf,
    },
    /// The scan in the folder is not the one asked for.
    #[error(
        "{}: the scan begun there {what} (repeat what it was begun with, or give another folder)",
        shown(folder)
    )]
    Other {
        /// The output folder.
        folder: PathBuf,
        /// What differs: "had another site file".
        what: &'static str,
    },
    /// A result was edited or replaced.
    #[error(
        "{}: was changed since the scan wrote it, so the scan cannot go on (give another folder)",
        shown(path)
    )]
    Changed {
        /// Which.
        path: PathBuf,
    },
    /// The output folder is one to be scanned.
    #[error(
        "{}: results among the recordings would be scanned as recordings (give another folder)",
        shown(path)
    )]
    AmongRecordings {
        /// The output folder.
        path: PathBuf,
    },
    /// No recording at all.
    #[error(
        "{}: no recording there ({skipped} other files skipped; give a folder with WAV or CSV files)",
        shown(path)
    )]
    Nothing {
        /// The first path given.
        path: PathBuf,
        /// Files passed over.
        skipped: u64,
    },
}

impl ScanError {
    /// Whether the command was wrong, rather than a file or the system.
    pub fn is_usage(&self) -> bool {
        matches!(
            self,
            ScanError::Earlier { .. }
                | ScanError::Foreign { .. }
                | ScanError::Other { .. }
                | ScanError::AmongRecordings { .. }
        )
    }

    pub(super) fn at(path: &Path) -> impl FnOnce(io::Error) -> ScanError + '_ {
        move |source| ScanError::Io {
            path: path.to_owned(),
            source,
        }
    }
}

fn shown(path: &Path) -> String {
    plain(&path.to_string_lossy())
}
