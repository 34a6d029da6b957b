//! Where results and complaints go, and what ends a run.

use foldtrace::report::text::plain;
use std::fmt::Display;
use std::io::{self, IsTerminal, Write};
use std::path::Path;

/// Exit code: some input could not be read, some output not written.
pub const SOME_FAILED: u8 = 1;
/// Exit code: wrong usage or site file.
pub const WRONG_USAGE: u8 = 2;

/// Prints one line on stderr.
pub fn complain(what: &dyn Display) {
    // With stderr closed there is nobody to complain to.
    let _ = writeln!(io::stderr(), "foldtrace: {what}");
}

/// Something that ends the run, with its exit code.
pub struct Stop(pub u8, pub String);

/// Wrong usage: exit code 2.
pub fn usage(what: impl Display) -> Stop {
    Stop(WRONG_USAGE, what.to_string())
}

/// Hands stdout to `write`; a reader that went away (`| head`) is no error.
pub fn to_stdout(write: impl FnOnce(&mut dyn Write) -> io::Result<()>) -> Result<(), Stop> {
    let mut out = io::BufWriter::new(anstream::stdout().lock());
    match write(&mut out).and_then(|()| out.flush()) {
        Err(e) if e.kind() != io::ErrorKind::BrokenPipe => {
            Err(Stop(SOME_FAILED, format!("stdout: {e}")))
        }
        _ => Ok(()),
    }
}

/// Writes a file beside its target and moves it there once it is whole.
pub fn to_file(
    path: &Path,
    write: impl FnOnce(&mut dyn Write) -> io::Result<()>,
) -> Result<(), Stop> {
    let failed = |e: io::Error| Stop(SOME_FAILED, format!("{}: {e}", shown(path)));
    // A device or pipe cannot be replaced: write into it.
    if path.exists() && !path.is_file() {
        let mut file = io::BufWriter::new(std::fs::File::create(path).map_err(failed)?);
        return write(&mut file).and_then(|()| file.flush()).map_err(failed);
    }
    let folder = match path.parent() {
        Some(p) if !p.as_os_str().is_empty() => p,
        _ => Path::new("."),
    };
    if !folder.is_dir() {
        return Err(Stop(
            SOME_FAILED,
            format!("{}: there is no such folder to write into", shown(path)),
        ));
    }
    let mut file = tempfile::Builder::new()
        .permissions_from_umask()
        .tempfile_in(folder)
        .map_err(failed)?;
    let mut buffered = io::BufWriter::new(file.as_file_mut());
    write(&mut buffered)
        .and_then(|()| buffered.flush())
        .map_err(failed)?;
    drop(buffered);
    file.persist(path).map_err(|e| failed(e.error))?;
    Ok(())
}

trait PermissionsFromUmask {
    fn permissions_from_umask(&mut self) -> &mut Self;
}

impl PermissionsFromUmask for tempfile::Builder<'_, '_> {
    /// Temporary files are private by default; a result should be as readable as
    /// any file the user makes.
    #[cfg(unix)]
    fn permissions_from_umask(&mut self) -> &mut Self {
        use std::os::unix::fs::PermissionsExt;
        self.permissions(std::fs::Permissions::from_mode(0o666))
    }
    #[cfg(not(unix))]
    fn permissions_from_umask(&mut self) -> &mut Self {
        self
    }
}

/// A path as a message shows it: control characters escaped.
pub fn shown(path: &Path) -> String {
    plain(&path.to_string_lossy())
}

/// Columns of the terminal that stdout is, if it is one.
pub fn terminal_width() -> Option<usize> {
    io::stdout()
        .is_terminal()
        .then(terminal_size::terminal_size)
        .flatten()
        .map(|(w, _)| usize::from(w.0))
}

/// `-` stands for stdout.
pub fn is_stdout(path: Option<&Path>) -> bool {
    path == Some(Path::new("-"))
}

/// Refuses an export that would replace what is read, or another export.
pub fn spare<'a>(
    inputs: impl IntoIterator<Item = &'a Path>,
    exports: &[&Path],
) -> Result<(), Stop> {
    let files: Vec<&Path> = exports
        .iter()
        .copied()
        .filter(|p| !is_stdout(Some(p)))
        .collect();
    // Files that do not exist yet cannot be the same one; two names for one file
    // to come can only be caught by their text.
    let same = |a: &Path, b: &Path| a == b || same_file::is_same_file(a, b).unwrap_or(false);
    for (i, a) in files.iter().enumerate() {
        if files.iter().skip(i + 1).any(|b| same(a, b)) {
            return Err(usage(format!("{}: both exports would go there", shown(a))));
        }
    }
    for input in inputs {
        if let Some(export) = files.iter().find(|e| same(e, input)) {
            return Err(usage(format!(
                "{}: is an input; exporting there would destroy it (give another file)",
                shown(export)
            )));
        }
    }
    Ok(())
}
