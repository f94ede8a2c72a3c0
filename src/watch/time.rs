//! Two kinds of time that must not be mixed, and their spelling.
//!
//! [`EventTime`] is when a reading was taken, as the payload says. [`ShellTime`] is when the shell
//! handed something to the engine. Both count microseconds since 1970-01-01T00:00:00Z.

use serde::{Deserialize, Serialize};
use std::fmt;

/// Microseconds in one day.
pub const DAY_US: i64 = 86_400_000_000;

/// When a reading was taken, by its own account; µs since the Unix epoch, UTC.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
pub struct EventTime(pub i64);

/// When the shell handed something over; µs since the Unix epoch, UTC.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
pub struct ShellTime(pub i64);

/// A length of time, µs; never negative where a setting gives it.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
pub struct Span(pub i64);

impl Span {
    /// The length in days.
    #[expect(clippy::cast_precision_loss, reason = "spans are far below 2^53 µs (285 years)")]
    pub fn days(self) -> f64 {
        self.0 as f64 / DAY_US as f64
    }

    /// A span of so many days, rounded to the microsecond and held within ±300 years.
    #[expect(clippy::cast_possible_truncation, reason = "clamped just before")]
    pub fn from_days(days: f64) -> Span {
        Span((days.clamp(-110_000.0, 110_000.0) * DAY_US as f64).round() as i64)
    }
}

impl EventTime {
    /// Days from `origin` to `self`; negative when earlier.
    pub fn days_since(self, origin: EventTime) -> f64 {
        Span(self.0.saturating_sub(origin.0)).days()
    }

    /// The time `span` later.
    pub fn plus(self, span: Span) -> EventTime {
        EventTime(self.0.saturating_add(span.0))
    }
}

impl ShellTime {
    /// The time `span` later.
    pub fn plus(self, span: Span) -> ShellTime {
        ShellTime(self.0.saturating_add(span.0))
    }
}

fn rfc3339(us: i64) -> String {
    // Out of jiff's range (years −9999…9999) cannot come from accepted input; say so rather than fail.
    jiff::Timestamp::from_microsecond(us).map_or_else(|_| format!("{us} us"), |t| t.to_string())
}

impl fmt::Display for EventTime {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&rfc3339(self.0))
    }
}

impl fmt::Display for ShellTime {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&rfc3339(self.0))
    }
}
