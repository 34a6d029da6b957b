//! Writes a recording's samples to stdout as plain numbers, for scripts that
//! compare them with another reader's.
//!
//! ```text
//! cargo run --example dump_samples -- FILE > samples
//! ```
//!
//! Sample rate and number of channels as two 64-bit floats, then all samples as
//! 32-bit floats, frame after frame; little end first, NaN where one is missing.

use foldtrace::capture::{Block, Capture, CaptureError, OpenOptions};
use std::io::Write;
use std::path::Path;
use std::process::ExitCode;

fn main() -> ExitCode {
    let Some(path) = std::env::args_os().nth(1) else {
        eprintln!("dump_samples: give a file");
        return ExitCode::from(2);
    };
    match dump(Path::new(&path)) {
        Ok(()) => ExitCode::SUCCESS,
        Err(error) => {
            eprintln!("{}: {error}", path.display());
            ExitCode::FAILURE
        }
    }
}

fn dump(path: &Path) -> Result<(), CaptureError> {
    let options = OpenOptions {
        any_length: true,
        ..OpenOptions::default()
    };
    let capture = Capture::open(path, &options)?;
    let spec = capture.spec();
    let mut out = std::io::BufWriter::new(std::io::stdout().lock());
    out.write_all(&spec.rate_hz.to_le_bytes())?;
    out.write_all(&(spec.channels.len() as f64).to_le_bytes())?;
    let mut blocks = capture.blocks(1 << 12)?;
    let mut block = Block::default();
    while blocks.next_into(&mut block)? {
        for frame in 0..block.frames() {
            for channel in &block.samples {
                let sample = channel.get(frame).copied().unwrap_or(f32::NAN);
                out.write_all(&sample.to_le_bytes())?;
            }
        }
    }
    out.flush()?;
    Ok(())
}
