//! What each command does with the library, and where its output goes.

use crate::cli::{Channel, Command, Fold, Rates, Sources, Triage, Unfold};
use foldtrace::fold::Chain;
use foldtrace::report::ladder::{self, WriteError};
use foldtrace::report::{json, sources_table, suspect_list, table, text::plain};
use foldtrace::sources::Site;
use foldtrace::triage;
use foldtrace::units::{SeenHz, TrueHz};
use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};
use std::fmt::Display;
use std::io::{self, IsTerminal, Write};
use std::path::Path;
use std::process::ExitCode;
use std::sync::OnceLock;
use std::time::{Duration, Instant};

/// Exit code: some input could not be read, some output not written.
const SOME_FAILED: u8 = 1;
/// Exit code: wrong usage or site file.
pub const WRONG_USAGE: u8 = 2;

/// Prints one line on stderr.
pub fn complain(what: &dyn Display) {
    // With stderr closed there is nobody to complain to.
    let _ = writeln!(io::stderr(), "foldtrace: {what}");
}

/// The gist of a usage error without the pages around it.
pub fn one_line(error: &clap::Error) -> String {
    let all = error.to_string();
    let gist: Vec<&str> = all
        .lines()
        .take_while(|l| !l.starts_with("Usage:") && !l.starts_with("For more"))
        .map(str::trim)
        .filter(|l| !l.is_empty())
        .collect();
    let gist = gist.join(" ");
    let gist = gist.strip_prefix("error: ").unwrap_or(&gist);
    format!("{} (see foldtrace --help)", plain(gist))
}

/// Something that ends the run, with its exit code.
struct Stop(u8, String);

fn usage(what: impl Display) -> Stop {
    Stop(WRONG_USAGE, what.to_string())
}

/// Runs one command.
pub fn run(command: Command) -> ExitCode {
    let done = match command {
        Command::Triage(arguments) => run_triage(&arguments),
        Command::Fold(arguments) => run_fold(&arguments),
        Command::Unfold(arguments) => run_unfold(&arguments),
        Command::Sources(arguments) => run_sources(&arguments),
    };
    match done {
        Ok(code) => code,
        Err(Stop(code, what)) => {
            complain(&what);
            ExitCode::from(code)
        }
    }
}

/// Hands stdout to `write`; a reader that went away (`| head`) is no error.
fn to_stdout(write: impl FnOnce(&mut dyn Write) -> io::Result<()>) -> Result<(), Stop> {
    let mut out = io::BufWriter::new(anstream::stdout().lock());
    match write(&mut out).and_then(|()| out.flush()) {
        Err(e) if e.kind() != io::ErrorKind::BrokenPipe => {
            Err(Stop(SOME_FAILED, format!("stdout: {e}")))
        }
        _ => Ok(()),
    }
}

/// A ladder that asks for too much is wrong usage, not a failing stdout.
fn to_stdout_or_usage(
    write: impl FnOnce(&mut dyn Write) -> Result<(), WriteError>,
) -> Result<ExitCode, Stop> {
    let mut refused = None;
    to_stdout(|out| match write(out) {
        Ok(()) => Ok(()),
        Err(WriteError::Io(error)) => Err(error),
        Err(WriteError::Ladder(error)) => {
            refused = Some(usage(error));
            Ok(())
        }
    })?;
    refused.map_or(Ok(ExitCode::SUCCESS), Err)
}

/// Writes a file beside its target and moves it there once it is whole.
fn to_file(path: &Path, write: impl FnOnce(&mut dyn Write) -> io::Result<()>) -> Result<(), Stop> {
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

fn shown(path: &Path) -> String {
    plain(&path.to_string_lossy())
}

fn load_site(path: Option<&Path>) -> Result<(Site, String), Stop> {
    match path {
        None => Ok((
            Site::builtin(),
            "built-in list (give --site to name your own)".into(),
        )),
        Some(path) => {
            let site = Site::load(path).map_err(|e| usage(format!("{}: {e}", shown(path))))?;
            Ok((site, path.to_string_lossy().into_owned()))
        }
    }
}

fn is_stdout(path: Option<&Path>) -> bool {
    path == Some(Path::new("-"))
}

fn run_triage(arguments: &Triage) -> Result<ExitCode, Stop> {
    let (suspects, json) = (arguments.suspects.as_deref(), arguments.json.as_deref());
    if is_stdout(suspects) && is_stdout(json) {
        return Err(usage("--suspects - and --json - cannot share stdout"));
    }
    let with_table = !is_stdout(suspects) && !is_stdout(json);
    spare_inputs(arguments)?;
    let (site, site_name) = load_site(arguments.site.as_deref())?;
    let options = triage::Options {
        rate_hz: arguments.rate,
        channel: match arguments.channel {
            Channel::All => None,
            Channel::One(n) => Some(n.get()),
        },
    };
    let top = arguments.top.get();
    let width = io::stdout()
        .is_terminal()
        .then(terminal_size::terminal_size)
        .flatten()
        .map(|(w, _)| usize::from(w.0));
    let mut results = Vec::new();
    let mut failed = false;
    for (i, path) in arguments.recordings.iter().enumerate() {
        let progress = Progress::new();
        let done = triage::run(path, &site, &options, &|done, of| progress.show(done, of));
        progress.clear();
        match done {
            Ok(result) => {
                if with_table {
                    to_stdout(|out| {
                        if i > 0 {
                            writeln!(out)?;
                        }
                        table::write(&result, &site_name, top, width, out)
                    })?;
                }
                if suspects.is_some() || json.is_some() {
                    results.push(result);
                }
            }
            Err(error) => {
                failed = true;
                complain(&format!("{}: {}", shown(path), plain(&error.to_string())));
            }
        }
    }
    let write_list =
        |out: &mut dyn Write| suspect_list::write(&results, top, out).map_err(io::Error::from);
    let write_json = |out: &mut dyn Write| json::write(&results, top, out);
    match suspects {
        Some(_) if is_stdout(suspects) => to_stdout(write_list)?,
        Some(path) => to_file(path, write_list)?,
        None => {}
    }
    match json {
        Some(_) if is_stdout(json) => to_stdout(write_json)?,
        Some(path) => to_file(path, write_json)?,
        None => {}
    }
    Ok(ExitCode::from(if failed { SOME_FAILED } else { 0 }))
}

/// Refuses an export that would replace what is read, or another export.
fn spare_inputs(arguments: &Triage) -> Result<(), Stop> {
    let exports: Vec<&Path> = [arguments.suspects.as_deref(), arguments.json.as_deref()]
        .into_iter()
        .flatten()
        .filter(|p| !is_stdout(Some(p)))
        .collect();
    // Files that do not exist yet cannot be the same one; two names for one file
    // to come can only be caught by their text.
    let same = |a: &Path, b: &Path| a == b || same_file::is_same_file(a, b).unwrap_or(false);
    if let [a, b] = exports.as_slice()
        && same(a, b)
    {
        return Err(usage(format!("{}: both exports would go there", shown(a))));
    }
    let inputs = arguments.recordings.iter().chain(&arguments.site);
    for input in inputs {
        if let Some(export) = exports.iter().find(|e| same(e, input)) {
            return Err(usage(format!(
                "{}: is an input; exporting there would destroy it (give another file)",
                shown(export)
            )));
        }
    }
    Ok(())
}

/// The converter's rate first, the file's last.
fn chain(rates: &Rates) -> Result<Chain, Stop> {
    let mut all = rates.stage.clone();
    if all.last() != Some(&rates.rate) {
        all.push(rates.rate);
    }
    Chain::new(all).map_err(usage)
}

fn run_fold(arguments: &Fold) -> Result<ExitCode, Stop> {
    let chain = chain(&arguments.rates)?;
    let lines: Vec<TrueHz> = arguments.hz.iter().map(|&f| TrueHz(f)).collect();
    to_stdout_or_usage(|out| ladder::write_fold(&lines, &chain, out))
}

fn run_unfold(arguments: &Unfold) -> Result<ExitCode, Stop> {
    let chain = chain(&arguments.rates)?;
    let half = arguments.rates.rate / 2.0;
    if let Some(f) = arguments.hz.iter().find(|&&f| f > half) {
        return Err(usage(format!(
            "a tone cannot be seen at {f} Hz: half of --rate is {half} Hz"
        )));
    }
    let seen: Vec<SeenHz> = arguments.hz.iter().map(|&f| SeenHz(f)).collect();
    to_stdout_or_usage(|out| ladder::write_unfold(&seen, &chain, TrueHz(arguments.up_to), out))
}

fn run_sources(arguments: &Sources) -> Result<ExitCode, Stop> {
    let (site, _) = load_site(arguments.site.as_deref())?;
    to_stdout(|out| sources_table::write(&site, out))?;
    Ok(ExitCode::SUCCESS)
}

/// A bar on stderr, only on a terminal and only once the work has taken a second.
struct Progress {
    started: Instant,
    bar: OnceLock<ProgressBar>,
    wanted: bool,
}

impl Progress {
    fn new() -> Self {
        Progress {
            started: Instant::now(),
            bar: OnceLock::new(),
            wanted: io::stderr().is_terminal(),
        }
    }

    fn show(&self, done: u64, of: u64) {
        if !self.wanted || self.started.elapsed() < Duration::from_secs(1) {
            return;
        }
        let bar = self.bar.get_or_init(|| {
            let bar =
                ProgressBar::with_draw_target(Some(of), ProgressDrawTarget::stderr_with_hz(8));
            if let Ok(style) =
                ProgressStyle::with_template("{percent:>3} % read {wide_bar} {eta} left")
            {
                bar.set_style(style);
            }
            bar
        });
        bar.set_position(done);
    }

    fn clear(&self) {
        if let Some(bar) = self.bar.get() {
            bar.finish_and_clear();
        }
    }
}
