//! Times `foldtrace triage` on an hour of 48 kHz mono against the bare loop
//! that nothing on this recording could beat on one thread: decode, window,
//! transform, accumulate.
//!
//! ```text
//! cargo build --release
//! cargo run --release --example bench_hour
//! cargo run --release --example bench_hour -- --hours 0.1 --pairs 5
//! ```
//!
//! Both run as child processes of this one, turn and turn about, on the same
//! file, which has been read once before so that neither pays for the disk.
#![forbid(unsafe_code)]

use std::fs::File;
use std::io::{BufWriter, Read, Write};
use std::path::{Path, PathBuf};
use std::process::{Command, ExitCode, Stdio};
use std::time::Instant;

use clap::{Parser, Subcommand};

#[path = "timing/mod.rs"]
mod timing;

use timing::{Result, median, run, verdict};

/// Wall time of the program over that of the bare loop: at most this.
const BAR_RATIO: f64 = 0.8;
/// Peak memory of the program: at most this.
const BAR_MIB: f64 = 64.0;
/// SciPy's wall time over that of the program: at least this.
const BAR_SCIPY: f64 = 12.0;

const RATE_HZ: u32 = 48_000;
/// Segment of the bare loop, samples; successive segments overlap by half.
const SEGMENT: usize = 65_536;
/// Segment of the program's own averaging, which SciPy is given too.
const PROGRAM_SEGMENT: &str = "262144";

/// Time `foldtrace triage` against a bare transform loop.
#[derive(Parser)]
struct Options {
    /// Hours of recording to make.
    #[arg(long, default_value_t = 1.0)]
    hours: f64,
    /// Runs of each, alternating.
    #[arg(long, default_value_t = 3)]
    pairs: usize,
    /// The program to time [default: foldtrace, beside the examples folder].
    #[arg(long)]
    program: Option<PathBuf>,
    /// A Python with NumPy and SciPy: times its `welch` and `find_peaks` on the file too,
    /// once, without the start of the interpreter.
    #[arg(long, value_name = "PYTHON")]
    scipy: Option<PathBuf>,
    /// Keep the recording and say where it is.
    #[arg(long)]
    keep: bool,
    #[command(subcommand)]
    role: Option<Role>,
}

#[derive(Subcommand)]
enum Role {
    /// Only the bare loop, on FILE.
    Bare {
        /// A 16-bit mono WAV.
        file: PathBuf,
    },
}

fn main() -> ExitCode {
    let options = Options::parse();
    let done = match &options.role {
        Some(Role::Bare { file }) => bare(file).map(|power| {
            // Printed so that no part of the loop can be optimised away.
            println!("{power:e}");
            true
        }),
        None => compare(&options),
    };
    match done {
        Ok(true) => ExitCode::SUCCESS,
        Ok(false) => ExitCode::FAILURE,
        Err(error) => {
            eprintln!("bench_hour: {error}");
            ExitCode::from(2)
        }
    }
}

/// Makes the recording, runs the pairs, prints the outcome. True: both bars met.
fn compare(options: &Options) -> Result<bool> {
    if options.pairs == 0 {
        return Err("--pairs must be at least 1".into());
    }
    let this = std::env::current_exe()?;
    let program = match &options.program {
        Some(path) => path.clone(),
        None => timing::program()?,
    };

    let began = Instant::now();
    let mut file = tempfile::Builder::new()
        .prefix("bench-hour-")
        .suffix(".wav")
        .tempfile()?;
    make_recording(file.as_file_mut(), options.hours)?;
    println!(
        "recording  {} h of {RATE_HZ} Hz mono, 16 bit, {:.1} MB, made in {:.1} s",
        options.hours,
        file.as_file().metadata()?.len() as f64 / 1e6,
        began.elapsed().as_secs_f64()
    );
    read_through(file.path())?;

    println!("pair    bare loop       program   ratio    program's peak");
    let mut ratios = Vec::with_capacity(options.pairs);
    let mut times = Vec::with_capacity(options.pairs);
    let mut peaks = Vec::with_capacity(options.pairs);
    for pair in 1..=options.pairs {
        let a = run(Command::new(&this).arg("bare").arg(file.path()))?;
        let b = run(Command::new(&program).arg("triage").arg(file.path()))?;
        let ratio = b.wall_s / a.wall_s;
        println!(
            "{pair:4} {:10.3} s {:11.3} s {ratio:7.2} {:>17}",
            a.wall_s,
            b.wall_s,
            mib(b.peak_mib)
        );
        ratios.push(ratio);
        times.push(b.wall_s);
        peaks.extend(b.peak_mib);
    }
    let scipy = options.scipy.as_deref();
    let scipy_s = scipy
        .map(|python| scipy_s(python, file.path()))
        .transpose()?;
    if options.keep {
        let (_, path) = file.keep()?;
        println!("recording kept: {}", path.display());
    }

    let ratio = median(&mut ratios);
    // No reading at all (not Linux, or a child gone within one poll) is not a pass.
    let peak = peaks.iter().copied().reduce(f64::max);
    let (fast, small) = (ratio <= BAR_RATIO, peak.is_some_and(|p| p <= BAR_MIB));
    println!(
        "time       median ratio {ratio:.2}, bar {BAR_RATIO}: {}",
        verdict(fast)
    );
    println!(
        "memory     peak {}, bar {BAR_MIB} MiB: {}",
        mib(peak),
        verdict(small)
    );
    let mut ahead = true;
    if let Some(scipy_s) = scipy_s {
        let times = scipy_s / median(&mut times);
        ahead = times >= BAR_SCIPY;
        println!(
            "SciPy      {scipy_s:.1} s, {times:.1} times as long, bar {BAR_SCIPY}: {}",
            verdict(ahead)
        );
    }
    Ok(fast && small && ahead)
}

/// Seconds that SciPy takes for the same segments of the same file, and its peaks.
fn scipy_s(python: &Path, file: &Path) -> Result<f64> {
    let output = Command::new(python)
        .arg("scripts/welch_scipy.py")
        .args([file.as_os_str(), PROGRAM_SEGMENT.as_ref()])
        .stderr(Stdio::inherit())
        .output()?;
    let text = String::from_utf8_lossy(&output.stdout);
    let seconds = text.split_whitespace().next().and_then(|s| s.parse().ok());
    seconds.ok_or_else(|| format!("{}: SciPy gave no time", python.display()).into())
}

fn mib(peak: Option<f64>) -> String {
    peak.map_or("not measured".to_owned(), |p| format!("{p:.1} MiB"))
}

/// Half-overlapped Hann segments, power accumulated per bin; returns the sum.
fn bare(path: &Path) -> Result<f64> {
    let mut reader = hound::WavReader::open(path)?;
    let transform = realfft::RealFftPlanner::<f32>::new().plan_fft_forward(SEGMENT);
    let mut input = transform.make_input_vec();
    let mut spectrum = transform.make_output_vec();
    let mut scratch = transform.make_scratch_vec();
    let window: Vec<f32> = (0..SEGMENT)
        .map(|n| (0.5 - 0.5 * (std::f64::consts::TAU * n as f64 / SEGMENT as f64).cos()) as f32)
        .collect();
    let mut power = vec![0.0_f32; spectrum.len()];
    let mut held: Vec<f32> = Vec::with_capacity(SEGMENT);
    for sample in reader.samples::<i16>() {
        held.push(f32::from(sample?) / 32768.0);
        if held.len() < SEGMENT {
            continue;
        }
        for ((x, &s), &w) in input.iter_mut().zip(&held).zip(&window) {
            *x = s * w;
        }
        transform.process_with_scratch(&mut input, &mut spectrum, &mut scratch)?;
        for (p, bin) in power.iter_mut().zip(&spectrum) {
            *p += bin.norm_sqr();
        }
        held.copy_within(SEGMENT / 2.., 0);
        held.truncate(SEGMENT / 2);
    }
    Ok(power.iter().map(|&p| f64::from(p)).sum())
}

/// Brings the file into the page cache.
fn read_through(path: &Path) -> Result<()> {
    let mut file = File::open(path)?;
    let mut block = vec![0; 1 << 20];
    while file.read(&mut block)? > 0 {}
    Ok(())
}

/// Noise at −46 dBFS rms with tones some 20 to 60 dB above it in one cell of
/// the hour, as a 16-bit mono WAV.
fn make_recording(file: &mut File, hours: f64) -> Result<()> {
    let frames = (hours * 3600.0 * f64::from(RATE_HZ)).round();
    // The header counts bytes in 32 bits.
    if !(1.0..=2_147_483_000.0).contains(&frames) {
        return Err("--hours must be more than 0 and at most 12.4".into());
    }
    let frames = frames as u32;
    let data_bytes = 2 * frames;
    let mut out = BufWriter::with_capacity(1 << 20, file);
    out.write_all(b"RIFF")?;
    out.write_all(&(36 + data_bytes).to_le_bytes())?;
    out.write_all(b"WAVEfmt ")?;
    out.write_all(&16_u32.to_le_bytes())?;
    out.write_all(&1_u16.to_le_bytes())?; // integer samples
    out.write_all(&1_u16.to_le_bytes())?; // one channel
    out.write_all(&RATE_HZ.to_le_bytes())?;
    out.write_all(&(2 * RATE_HZ).to_le_bytes())?;
    out.write_all(&2_u16.to_le_bytes())?;
    out.write_all(&16_u16.to_le_bytes())?;
    out.write_all(b"data")?;
    out.write_all(&data_bytes.to_le_bytes())?;

    const TABLE_BITS: u32 = 12;
    let sine: Vec<f32> = (0..1_u32 << TABLE_BITS)
        .map(|i| {
            (std::f64::consts::TAU * f64::from(i) / f64::from(1_u32 << TABLE_BITS)).sin() as f32
        })
        .collect();
    // (Hz, amplitude in steps of the converter). Phase is a fraction of a turn in 32 bits.
    let tones = [
        (49.98, 60.0_f32),
        (99.96, 110.0),
        (149.94, 25.0),
        (299.88, 40.0),
        (1733.2, 8.0),
        (2963.7, 15.0),
        (7411.3, 5.0),
        (15_903.1, 12.0),
    ];
    let mut oscillators: Vec<(u32, u32, f32)> = tones
        .iter()
        .map(|&(hz, amplitude)| {
            let step = hz / f64::from(RATE_HZ) * 4_294_967_296.0;
            (0, step.round() as u32, amplitude)
        })
        .collect();
    // xorshift64 (Marsaglia 2003); the four 16-bit quarters of a draw, added,
    // are bell-shaped enough for noise.
    let mut state = 0x9e37_79b9_7f4a_7c15_u64;
    const NOISE_RMS: f32 = 164.0;
    let scale = NOISE_RMS / (65_536.0 / 3.0_f32.sqrt());
    let mut block = Vec::with_capacity(1 << 16);
    for frame in 0..frames {
        state ^= state << 13;
        state ^= state >> 7;
        state ^= state << 17;
        let quarters =
            (state & 0xffff) + ((state >> 16) & 0xffff) + ((state >> 32) & 0xffff) + (state >> 48);
        let mut x = (quarters as f32 - 131_070.0) * scale;
        for (phase, step, amplitude) in &mut oscillators {
            x += *amplitude * sine[(*phase >> (32 - TABLE_BITS)) as usize];
            *phase = phase.wrapping_add(*step);
        }
        block.extend_from_slice(&(x.round() as i16).to_le_bytes());
        if block.len() >= 1 << 16 || frame + 1 == frames {
            out.write_all(&block)?;
            block.clear();
        }
    }
    out.flush()?;
    Ok(())
}
