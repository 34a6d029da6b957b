//! Each stage of the main job by itself, on simulated recordings:
//!
//! ```text
//! cargo bench --bench stages
//! cargo bench --bench stages -- decode
//! ```
#![forbid(unsafe_code)]
#![allow(missing_docs, clippy::unwrap_used)]

use criterion::{Criterion, Throughput, criterion_group, criterion_main};
use foldtrace::capture::{Block, Capture, OpenOptions};
use foldtrace::fold::Chain;
use foldtrace::sources::Site;
use foldtrace::spectrum::samples::{InMemory, OnThreads};
use foldtrace::spectrum::{welch, whole};
use foldtrace::suspects::{self, Scene};
use foldtrace::tones::{self, Search, detect};
use rand::{RngExt, SeedableRng, rngs::StdRng};
use std::hint::black_box;
use std::io::Write;
use std::path::Path;

const RATE_HZ: f64 = 8000.0;

/// Noise and a dozen steady tones, below ± 1.
fn samples(seconds: f64) -> Vec<f32> {
    let mut random = StdRng::seed_from_u64(1);
    let tones: Vec<(f64, f64)> = (1..=12)
        .map(|k| (49.98 * f64::from(k * k), 0.1 / f64::from(k)))
        .collect();
    (0..(seconds * RATE_HZ) as usize)
        .map(|n| {
            let t = std::f64::consts::TAU * n as f64 / RATE_HZ;
            let hum: f64 = tones.iter().map(|(hz, a)| a * (hz * t).sin()).sum();
            (hum + 0.01 * (random.random::<f64>() - 0.5)) as f32
        })
        .collect()
}

fn wav(path: &Path, samples: &[f32]) {
    let spec = hound::WavSpec {
        channels: 1,
        sample_rate: RATE_HZ as u32,
        bits_per_sample: 16,
        sample_format: hound::SampleFormat::Int,
    };
    let mut writer = hound::WavWriter::create(path, spec).unwrap();
    for s in samples {
        writer.write_sample((s * 32_767.0) as i16).unwrap();
    }
    writer.finalize().unwrap();
}

fn decode(c: &mut Criterion) {
    let folder = tempfile::tempdir().unwrap();
    let samples = samples(60.0);
    let (as_wav, as_csv) = (folder.path().join("a.wav"), folder.path().join("a.csv"));
    wav(&as_wav, &samples);
    let mut text = std::io::BufWriter::new(std::fs::File::create(&as_csv).unwrap());
    writeln!(text, "time [s],level").unwrap();
    for (n, s) in samples.iter().enumerate() {
        writeln!(text, "{:.6},{s:.5}", n as f64 / RATE_HZ).unwrap();
    }
    drop(text);
    let mut group = c.benchmark_group("decode");
    group.throughput(Throughput::Elements(samples.len() as u64));
    for (name, path) in [("16-bit WAV", &as_wav), ("CSV", &as_csv)] {
        let capture = Capture::open(path, &OpenOptions::default()).unwrap();
        group.bench_function(name, |b| {
            b.iter(|| {
                let mut pass = capture.blocks(1 << 15).unwrap();
                let mut block = Block::default();
                while pass.next_into(&mut block).unwrap() {
                    black_box(&block);
                }
            });
        });
    }
    group.bench_function("hound, sample by sample", |b| {
        b.iter(|| {
            let mut reader = hound::WavReader::open(&as_wav).unwrap();
            for s in reader.samples::<i16>() {
                black_box(f32::from(s.unwrap()) / 32_768.0);
            }
        });
    });
    group.finish();
}

fn spectrum(c: &mut Criterion) {
    let recording = InMemory {
        rate_hz: RATE_HZ,
        channels: vec![samples(300.0)],
    };
    let frames = recording.channels[0].len();
    let mut group = c.benchmark_group("spectrum");
    group.sample_size(10);
    group.throughput(Throughput::Elements(frames as u64));
    for threads in [1, 2] {
        group.bench_function(format!("averaged, {threads} thread(s)"), |b| {
            b.iter(|| {
                let recording = OnThreads(&recording, threads);
                welch::average(&recording, 1 << 18, &|_| ()).unwrap()
            });
        });
    }
    group.bench_function("whole", |b| {
        let samples = &recording.channels[0][..240_000];
        b.iter(|| whole::transform(samples.to_vec(), 240_000, RATE_HZ, None));
    });
    group.finish();
}

fn detection(c: &mut Criterion) {
    let band = whole::transform(samples(30.0), 240_000, RATE_HZ, None);
    c.bench_function("detection, 30 s", |b| {
        b.iter(|| detect::detect(&band, 0.01, &[]))
    });
}

fn inference(c: &mut Criterion) {
    let recording = InMemory {
        rate_hz: RATE_HZ,
        channels: vec![samples(30.0)],
    };
    let found = tones::find(&recording, &Search::default(), &|_, _| ()).unwrap();
    let chain = Chain::single(RATE_HZ).unwrap();
    let mut group = c.benchmark_group("inference");
    group.sample_size(10);
    for (name, site) in [
        ("built-in list", Site::builtin()),
        (
            "site file",
            Site::load(Path::new("sample-data/orrowmere.toml")).unwrap(),
        ),
    ] {
        group.bench_function(name, |b| {
            b.iter(|| {
                suspects::infer(&Scene {
                    tones: &found.tones,
                    site: &site,
                    chain: &chain,
                    duration_s: 30.0,
                    full_scale_known: true,
                    evidence: None,
                })
            });
        });
    }
    group.finish();
}

criterion_group!(stages, decode, spectrum, detection, inference);
criterion_main!(stages);
