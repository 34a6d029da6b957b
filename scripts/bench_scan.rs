//! Times `foldtrace scan` over many short recordings: two jobs against one, turn and
//! turn about, and what a recording costs beyond its own triage.
//!
//! ```text
//! cargo build --release
//! cargo run --release --example bench_scan
//! cargo run --release --example bench_scan -- --files 2000 --pairs 3
//! ```
//!
//! The overhead per file is the processor time of `scan --jobs 1` less that of a child
//! that only calls the library's triage on the same files.
#![forbid(unsafe_code)]

use clap::{Parser, Subcommand};
use foldtrace::sources::Site;
use foldtrace::triage;
use rand::{RngExt, SeedableRng, rngs::StdRng};
use std::num::NonZeroUsize;
use std::path::{Path, PathBuf};
use std::process::{Command, ExitCode};

#[path = "timing/mod.rs"]
mod timing;

use timing::{Result, median, run, verdict};

/// One job's wall time over two jobs': at least this.
const BAR_SPEEDUP: f64 = 1.85;
/// What a file costs beyond its triage: at most this.
const BAR_OVERHEAD_MS: f64 = 1.0;

const RATE_HZ: u32 = 8000;
const SITE: &str = "sample-data/orrowmere.toml";

/// Time `foldtrace scan` on recordings of 30 s at 8 kHz.
#[derive(Parser)]
struct Options {
    /// Recordings to make.
    #[arg(long, default_value_t = 200)]
    files: usize,
    /// Runs of each, alternating.
    #[arg(long, default_value_t = 3)]
    pairs: usize,
    #[command(subcommand)]
    role: Option<Role>,
}

#[derive(Subcommand)]
enum Role {
    /// Only the library's triage, on every file of FOLDER.
    Triage {
        /// Made by this program.
        folder: PathBuf,
    },
}

fn main() -> ExitCode {
    let options = Options::parse();
    let done = match &options.role {
        Some(Role::Triage { folder }) => triage_all(folder).map(|()| true),
        None => compare(&options),
    };
    match done {
        Ok(true) => ExitCode::SUCCESS,
        Ok(false) => ExitCode::FAILURE,
        Err(error) => {
            eprintln!("bench_scan: {error}");
            ExitCode::from(2)
        }
    }
}

fn compare(options: &Options) -> Result<bool> {
    if options.pairs == 0 || options.files == 0 {
        return Err("--files and --pairs must be at least 1".into());
    }
    let this = std::env::current_exe()?;
    let program = timing::program()?;
    let folder = tempfile::tempdir()?;
    let recordings = folder.path().join("recordings");
    std::fs::create_dir(&recordings)?;
    for i in 0..options.files {
        make_recording(&recordings.join(format!("{i:05}.wav")), i as u64)?;
    }
    println!("recordings {} of 30 s at {RATE_HZ} Hz", options.files);
    println!("pair       1 job      2 jobs   times    processor: scan    triage alone   ms a file");
    let (mut speedups, mut overheads) = (Vec::new(), Vec::new());
    for pair in 1..=options.pairs {
        let scan = |jobs: &str| {
            let out = folder.path().join(format!("out-{pair}-{jobs}"));
            let mut command = Command::new(&program);
            command.arg("scan").arg(&recordings).arg("--out").arg(out);
            command.args(["--site", SITE, "--jobs", jobs]);
            run(&mut command)
        };
        let one = scan("1")?;
        let two = scan("2")?;
        let alone = run(Command::new(&this).arg("triage").arg(&recordings))?;
        let speedup = one.wall_s / two.wall_s;
        print!(
            "{pair:4} {:9.2} s {:9.2} s {speedup:7.2}",
            one.wall_s, two.wall_s
        );
        speedups.push(speedup);
        if let (Some(scan), Some(alone)) = (one.processor_s, alone.processor_s) {
            let ms = 1e3 * (scan - alone) / options.files as f64;
            print!(" {scan:16.2} s {alone:13.2} s {ms:11.3}");
            overheads.push(ms);
        }
        println!();
    }
    let speedup = median(&mut speedups);
    let fast = speedup >= BAR_SPEEDUP;
    println!(
        "two jobs   median {speedup:.2} times as fast, bar {BAR_SPEEDUP}: {}",
        verdict(fast)
    );
    if overheads.is_empty() {
        println!("overhead   not measured (the system does not tell)");
        return Ok(fast);
    }
    let overhead = median(&mut overheads);
    let lean = overhead <= BAR_OVERHEAD_MS;
    println!(
        "overhead   median {overhead:.3} ms a file, bar {BAR_OVERHEAD_MS}: {}",
        verdict(lean)
    );
    Ok(fast && lean)
}

fn triage_all(folder: &Path) -> Result<()> {
    let site = Site::load(Path::new(SITE))?;
    let options = triage::Options {
        threads: Some(NonZeroUsize::MIN),
        ..triage::Options::default()
    };
    let mut files: Vec<PathBuf> = std::fs::read_dir(folder)?
        .map(|entry| entry.map(|e| e.path()))
        .collect::<std::io::Result<_>>()?;
    files.sort();
    let mut tones = 0;
    for file in files {
        tones += triage::run(&file, &site, &options, &|_, _| ())?
            .rows()
            .count();
    }
    println!("{tones}");
    Ok(())
}

/// Noise, mains multiples and a few lines of a drive, a little different in each.
fn make_recording(path: &Path, seed: u64) -> Result<()> {
    let spec = hound::WavSpec {
        channels: 1,
        sample_rate: RATE_HZ,
        bits_per_sample: 16,
        sample_format: hound::SampleFormat::Int,
    };
    let mut random = StdRng::seed_from_u64(seed);
    let mains = 50.0 + 0.05 * (random.random::<f64>() - 0.5);
    let carrier = 5020.0 + 4.0 * (random.random::<f64>() - 0.5);
    let mut lines: Vec<(f64, f64)> = [1.0, 2.0, 3.0, 5.0, 7.0, 11.0]
        .iter()
        .map(|k| (k * mains, 300.0 / k))
        .collect();
    lines.extend([(carrier - 87.6, 120.0), (carrier + 87.6, 90.0)]);
    let mut writer = hound::WavWriter::create(path, spec)?;
    for n in 0..30 * RATE_HZ {
        let t = std::f64::consts::TAU * f64::from(n) / f64::from(RATE_HZ);
        let hum: f64 = lines.iter().map(|(hz, a)| a * (hz * t).sin()).sum();
        let noise = 200.0 * (random.random::<f64>() - 0.5);
        writer.write_sample((hum + noise) as i16)?;
    }
    writer.finalize()?;
    Ok(())
}
