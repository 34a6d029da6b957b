//! How far the work is, for whoever watches.

use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};
use std::io::{self, IsTerminal};
use std::sync::OnceLock;
use std::time::{Duration, Instant};

/// A bar on stderr, only on a terminal and only once the work has taken a second.
pub struct Progress {
    started: Instant,
    bar: OnceLock<ProgressBar>,
    wanted: bool,
}

impl Progress {
    pub fn new() -> Self {
        Progress {
            started: Instant::now(),
            bar: OnceLock::new(),
            wanted: io::stderr().is_terminal(),
        }
    }

    pub fn show(&self, done: u64, of: u64) {
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

    pub fn clear(&self) {
        if let Some(bar) = self.bar.get() {
            bar.finish_and_clear();
        }
    }
}
