//! `inspect`: what a recording was taken for, and nothing else.

use super::output::{SOME_FAILED, Stop, complain, shown, to_stdout};
use super::reading::Reading;
use clap::Args;
use foldtrace::capture::{Capture, OpenOptions};
use foldtrace::report::{reading, text::plain};
use std::path::PathBuf;
use std::process::ExitCode;

/// Shown after the options.
pub const HELP: &str = "\
The line `read as` says what was taken for what. Where that is wrong, the options under Reading say \
it right; they are the same in every command.

Exit: 0 done, 1 some input could not be read, 2 wrong usage.

Example:
  foldtrace inspect sample-data/recordings/fan-logger.csv
  foldtrace inspect sample-data/recordings/fan-logger.csv --time none --rate 256";

/// Options of `inspect`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// Recordings: WAV, FLAC, or CSV logs
    #[arg(value_name = "REC", required = true)]
    pub recordings: Vec<PathBuf>,
    #[command(flatten)]
    pub reading: Reading,
}

/// Runs the command.
pub fn run(arguments: &Arguments) -> Result<ExitCode, Stop> {
    let options = OpenOptions {
        any_length: true,
        ..arguments.reading.open_options()
    };
    let mut failed = false;
    for path in &arguments.recordings {
        match Capture::open(path, &options) {
            Ok(capture) => {
                to_stdout(|out| reading::write(&path.to_string_lossy(), capture.spec(), None, out))?
            }
            Err(error) => {
                failed = true;
                complain(&format!("{}: {}", shown(path), plain(&error.to_string())));
            }
        }
    }
    Ok(ExitCode::from(if failed { SOME_FAILED } else { 0 }))
}
