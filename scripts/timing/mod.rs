//! Shared by the benches that time whole programs: children as they run, what they
//! took, and what to make of it.
#![allow(dead_code)] // each bench uses its part

use std::error::Error;
use std::path::{Path, PathBuf};
use std::process::{Command, Stdio};
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::{Duration, Instant};

pub type Result<T> = std::result::Result<T, Box<dyn Error>>;

/// How often the memory of a child is looked up.
const POLL: Duration = Duration::from_millis(20);

pub fn verdict(met: bool) -> &'static str {
    if met { "met" } else { "MISSED" }
}

pub fn median(values: &mut [f64]) -> f64 {
    values.sort_by(f64::total_cmp);
    let upper = values.len() / 2;
    let lower = (values.len() - 1) / 2;
    0.5 * (values[lower] + values[upper])
}

/// `target/release/examples/this` → `target/release/foldtrace`.
pub fn program() -> Result<PathBuf> {
    let name = format!("foldtrace{}", std::env::consts::EXE_SUFFIX);
    let this = std::env::current_exe()?;
    let path = this
        .parent()
        .and_then(Path::parent)
        .map(|folder| folder.join(name))
        .filter(|path| path.is_file());
    path.ok_or_else(|| {
        "no foldtrace here yet: run `cargo build --release`, or give --program".into()
    })
}

/// What one child took.
pub struct Run {
    pub wall_s: f64,
    /// Largest resident set; `None` where the system does not tell it.
    pub peak_mib: Option<f64>,
    /// User and system time; `None` where the system does not tell it.
    pub processor_s: Option<f64>,
}

/// Runs a child to its end. Its standard output is dropped; its standard error
/// is shown only if it fails.
pub fn run(command: &mut Command) -> Result<Run> {
    let name = command.get_program().to_string_lossy().into_owned();
    let before = children_s();
    let began = Instant::now();
    let child = command
        .stdin(Stdio::null())
        .stdout(Stdio::null())
        .stderr(Stdio::piped())
        .spawn()
        .map_err(|e| format!("{name}: cannot be started: {e}"))?;
    let pid = child.id();
    let ended = AtomicBool::new(false);
    let (output, wall_s, peak_kib) = std::thread::scope(|scope| {
        let poll = scope.spawn(|| {
            let mut peak = None;
            while !ended.load(Ordering::Relaxed) {
                // The kernel's own high-water mark, so that only what grows
                // within the last poll can be missed.
                peak = peak.max(high_water_kib(pid));
                std::thread::park_timeout(POLL);
            }
            peak
        });
        let output = child.wait_with_output();
        let wall_s = began.elapsed().as_secs_f64();
        ended.store(true, Ordering::Relaxed);
        poll.thread().unpark();
        (output, wall_s, poll.join().unwrap_or(None))
    });
    let output = output?;
    if !output.status.success() {
        let said = String::from_utf8_lossy(&output.stderr);
        return Err(format!("{name} failed ({}) {}", output.status, said.trim()).into());
    }
    Ok(Run {
        wall_s,
        peak_mib: peak_kib.map(|kib| kib as f64 / 1024.0),
        processor_s: before
            .zip(children_s())
            .map(|(before, after)| after - before),
    })
}

/// `VmHWM` of a living process, KiB. Linux only.
fn high_water_kib(pid: u32) -> Option<u64> {
    let status = std::fs::read_to_string(format!("/proc/{pid}/status")).ok()?;
    let line = status.lines().find_map(|l| l.strip_prefix("VmHWM:"))?;
    line.split_whitespace().next()?.parse().ok()
}

/// Processor time of all children waited for, s. Linux only: fields 16 and 17 of
/// `/proc/self/stat` (proc(5)), in hundredths of a second as every common kernel
/// counts them.
fn children_s() -> Option<f64> {
    let stat = std::fs::read_to_string("/proc/self/stat").ok()?;
    let after_name = stat.rsplit_once(')')?.1;
    let fields: Vec<&str> = after_name.split_whitespace().collect();
    let ticks = |i: usize| fields.get(i)?.parse::<f64>().ok();
    Some((ticks(13)? + ticks(14)?) / 100.0)
}
