//! The only place that reads the clock.

use crate::watch::time::ShellTime;

/// The system's wall clock now.
pub fn now() -> ShellTime {
    ShellTime(jiff::Timestamp::now().as_microsecond())
}

/// A running stopwatch, for measuring how long something took; steps of the wall clock do not touch it.
#[derive(Clone, Copy, Debug)]
pub struct Stopwatch(std::time::Instant);

impl Stopwatch {
    /// Starts now.
    pub fn start() -> Stopwatch {
        Stopwatch(std::time::Instant::now())
    }

    /// Time since the start.
    pub fn elapsed(&self) -> std::time::Duration {
        self.0.elapsed()
    }
}
