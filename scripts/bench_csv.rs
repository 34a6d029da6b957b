//! Times reading a CSV against the bare loop that any reader built on the csv
//! crate has to pay: next record, every cell to `f64`.
//!
//! ```text
//! cargo run --release --example bench_csv [ROWS]
//! ```
//!
//! Writes a log of ROWS (default 5 million) rows of three columns to a
//! temporary folder, then times in one run, three times each and alternating,
//! the bare loop, opening (which reads all rows once: rows, rate, gaps) and one
//! pass over the samples. Prints medians, their ratios, and the peak memory of
//! the program's part where the system tells it.
#![allow(clippy::unwrap_used, clippy::expect_used)]

use foldtrace::capture::{Block, Capture, OpenOptions};
use std::io::Write;
use std::path::Path;
use std::time::Instant;

fn main() {
    let rows: u64 = std::env::args()
        .nth(1)
        .map_or(5_000_000, |rows| rows.parse().expect("ROWS is a number"));
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("log.csv");
    write_log(&path, rows);
    let bytes = std::fs::metadata(&path).unwrap().len();
    println!("{rows} rows of 3 columns, {:.0} MB", bytes as f64 / 1e6);

    let mut seconds = [Vec::new(), Vec::new(), Vec::new()];
    // The program's part goes first, so that its memory is told apart.
    let (open, pass) = time_program(&path, rows);
    let peak = peak_memory_mib();
    seconds[1].push(open);
    seconds[2].push(pass);
    seconds[0].push(time_bare_loop(&path, rows));
    for _ in 0..2 {
        let (open, pass) = time_program(&path, rows);
        seconds[1].push(open);
        seconds[2].push(pass);
        seconds[0].push(time_bare_loop(&path, rows));
    }
    let [bare, open, pass] = seconds.map(median);
    let line = |what: &str, s: f64| {
        println!(
            "{what:<28} {s:6.2} s  {:4.0} % of the bare loop's speed",
            100.0 * bare / s
        );
    };
    line("bare loop", bare);
    line("opening", open);
    line("one pass", pass);
    line("opening and one pass", open + pass);
    if let Some(peak) = peak {
        println!("peak memory {peak:.0} MiB");
    }
}

fn median(mut seconds: Vec<f64>) -> f64 {
    seconds.sort_by(f64::total_cmp);
    seconds[seconds.len() / 2]
}

/// A log as a recorder of three columns writes it: time and two channels.
fn write_log(path: &Path, rows: u64) {
    let mut file = std::io::BufWriter::new(std::fs::File::create(path).unwrap());
    writeln!(file, "time [s],accel [m/s^2],current [A]").unwrap();
    for row in 0..rows {
        let t = row as f64 / 2000.0;
        let x = (t * 311.0).sin() * 3.0 + (t * 1733.0).sin() * 0.2;
        let y = 10.0 + (t * 314.159).cos();
        writeln!(file, "{t:.4},{x:.5},{y:.4}").unwrap();
    }
    file.flush().unwrap();
}

fn time_bare_loop(path: &Path, rows: u64) -> f64 {
    let start = Instant::now();
    let mut reader = csv::ReaderBuilder::new().from_path(path).unwrap();
    let mut record = csv::ByteRecord::new();
    let (mut count, mut sum) = (0, 0.0);
    while reader.read_byte_record(&mut record).unwrap() {
        for cell in &record {
            sum += std::str::from_utf8(cell).unwrap().parse::<f64>().unwrap();
        }
        count += 1;
    }
    assert_eq!(count, rows);
    std::hint::black_box(sum);
    start.elapsed().as_secs_f64()
}

fn time_program(path: &Path, rows: u64) -> (f64, f64) {
    let start = Instant::now();
    let capture = Capture::open(path, &OpenOptions::default()).unwrap();
    let open = start.elapsed().as_secs_f64();
    assert_eq!(capture.spec().frames, rows);
    let start = Instant::now();
    let mut blocks = capture.blocks(1 << 15).unwrap();
    let mut block = Block::default();
    let mut sum = 0.0;
    while blocks.next_into(&mut block).unwrap() {
        for channel in &block.samples {
            sum += channel.iter().sum::<f32>();
        }
    }
    std::hint::black_box(sum);
    (open, start.elapsed().as_secs_f64())
}

/// Most memory that the process held so far.
fn peak_memory_mib() -> Option<f64> {
    let status = std::fs::read_to_string("/proc/self/status").ok()?;
    let line = status.lines().find(|line| line.starts_with("VmHWM:"))?;
    let kib: f64 = line.split_whitespace().nth(1)?.parse().ok()?;
    Some(kib / 1024.0)
}
