//! Calibration of the suspects over simulated scenes: what is said to be 80 %
//! probable should be right 80 % of the time.
//!
//!     cargo run --release --example calibration -- [FIRST_SEED [SCENES [recorded]]]
//!
//! Tuning used seeds below 100000; the default report starts at 100000.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

#[path = "scenes/mod.rs"]
mod scenes;
#[path = "scenes/score.rs"]
mod score;

fn main() {
    let mut args = std::env::args().skip(1);
    let first: u64 = args.next().map_or(100_000, |a| a.parse().expect("a seed"));
    let count: u64 = args.next().map_or(400, |a| a.parse().expect("a count"));
    let started = std::time::Instant::now();
    let mut all = score::Scores::default();
    let verbose = std::env::var_os("CALIBRATION_MISSES").is_some();
    // `recorded` has samples made and the program's own detector run on them.
    let recorded = args.next().is_some_and(|a| a == "recorded");
    for seed in first..first + count {
        let scene = if recorded {
            scenes::record(seed, 480_000.0)
        } else {
            Some(scenes::simulate(seed))
        };
        if let Some(scene) = scene {
            all.add(seed, &scene, verbose);
        }
    }
    print!("{}", all.report());
    eprintln!("{count} scenes in {:.1} s", started.elapsed().as_secs_f64());
}
