//! A way in for the fuzzer, below the readers; no part of the program.

use super::clock::{Advance, Clock};
use super::clock_plan::ClockProbe;
use super::stamps::{Stamp, StampFormat};

/// Reads each line as a time stamp, then follows the stamps as a clock does.
pub fn time_stamps(data: &[u8]) {
    let cells: Vec<&[u8]> = data.split(|&byte| byte == b'\n').collect();
    for cell in &cells {
        StampFormat::is_written(cell);
    }
    let format = StampFormat::of_cells(&cells, None);
    let _ = format.assumption(&cells);
    let stamps: Vec<Option<Stamp>> = cells.iter().map(|cell| format.read(cell)).collect();
    let Some(&origin) = stamps.iter().flatten().next() else {
        return;
    };
    let since = |stamp: &Option<Stamp>| stamp.map(|stamp| stamp.since(origin));
    let mut probe = ClockProbe::default();
    for seconds in stamps.iter().filter_map(since) {
        assert!(seconds.is_finite());
        probe.take(seconds, false);
    }
    let Some(plan) = probe.plan() else {
        return;
    };
    assert!(plan.period > 0.0 && plan.period.is_finite(), "{plan:?}");
    let mut clock = Clock::new(plan);
    let mut frames = 0u64;
    for stamp in &stamps {
        if let Advance::Frame { missing } = clock.take(since(stamp)) {
            frames = frames.saturating_add(missing).saturating_add(1);
        }
    }
    assert!(frames >= 1);
    let (rate_hz, _) = clock.rate_hz();
    assert!(rate_hz.is_finite() && rate_hz > 0.0, "{rate_hz}");
    clock.note(&mut Vec::new());
}
