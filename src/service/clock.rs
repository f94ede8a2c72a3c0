//! The only place that reads the clock.

use crate::watch::time::{EventTime, ShellTime};

/// The clock that the daemon goes by.
#[derive(Clone, Copy, Debug)]
pub enum Clock {
    /// The system's wall clock.
    System,
    /// As late as the newest reading seen so far: for a history that comes in faster than it happened.
    Readings(ShellTime),
}

impl Clock {
    /// A clock that follows the readings and stands at `start` before the first.
    pub fn of_readings(start: EventTime) -> Clock {
        Clock::Readings(ShellTime(start.0))
    }

    /// The time now.
    pub fn now(self) -> ShellTime {
        match self {
            Clock::System => now(),
            Clock::Readings(newest) => newest,
        }
    }

    /// A reading of that time has come.
    pub fn saw(&mut self, time: EventTime) {
        if let Clock::Readings(newest) = self {
            newest.0 = newest.0.max(time.0);
        }
    }
}

/// The system's wall clock now.
pub fn now() -> ShellTime {
    ShellTime(jiff::Timestamp::now().as_microsecond())
}

/// A moment to count a timer from; steps of the wall clock do not touch it.
pub fn instant() -> tokio::time::Instant {
    tokio::time::Instant::now()
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
