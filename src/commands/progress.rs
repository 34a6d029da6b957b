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
    template: &'static str,
}

impl Progress {
    /// Of samples in one recording.
    pub fn new() -> Self {
        Self::with("{percent:>3} % read {wide_bar} {eta} left")
    }

    /// Of recordings in a scan.
    pub fn of_recordings() -> Self {
        Self::with("{pos} of {len} recordings, {per_sec} {wide_bar} {eta} left")
    }

    fn with(template: &'static str) -> Self {
        Progress {
            started: Instant::now(),
            bar: OnceLock::new(),
            wanted: io::stderr().is_terminal(),
            template,
        }
    }

    pub fn show(&self, done: u64, of: u64) {
        self.show_from(0, done, of);
    }

    /// `before` of `done` were done when the clock started.
    pub fn show_from(&self, before: u64, done: u64, of: u64) {
        if !self.wanted || self.started.elapsed() < Duration::from_secs(1) {
            return;
        }
        let bar = self.bar.get_or_init(|| {
            let bar =
                ProgressBar::with_draw_target(Some(of), ProgressDrawTarget::stderr_with_hz(8))
                    .with_elapsed(self.started.elapsed());
            bar.set_position(before);
            bar.reset_eta();
            if let Ok(style) = ProgressStyle::with_template(self.template) {
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
