//! What enters the engine, and what became of it.

use crate::watch::time::EventTime;
use serde::{Deserialize, Serialize};

/// A reading that is already durable.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Reading {
    /// Its place in the journal; rises from reading to reading, over all channels.
    pub serial: u64,
    /// When it was taken.
    pub time: EventTime,
    /// Reading minus reference, in the channel's unit; finite.
    pub deviation: f64,
}

/// What became of a reading.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Taken {
    /// It is in the window, in the open bin, or held back for ordering.
    Accepted,
    /// A reading of that very time and value is known already.
    Duplicate,
    /// Another value for that very time is known already; the first one stays.
    Contradicts,
    /// Older than the lateness bound allows: counted, not fitted.
    Late,
    /// At or before age zero: it belongs to an earlier calibration cycle. Counted, not fitted.
    BeforeAgeZero,
    /// The engine watches as many channels as it can.
    TooManyChannels,
    /// Of another watch than its channel: another unit, perhaps, and other rules. Counted, not fitted.
    OtherWatch,
    /// The first of its channel, where nobody said when it was calibrated: age is counted from it.
    AgeZero,
}

impl Taken {
    /// All outcomes, in the order in which they are listed to people.
    pub const ALL: [Taken; 8] = [
        Taken::Accepted,
        Taken::Duplicate,
        Taken::Contradicts,
        Taken::Late,
        Taken::BeforeAgeZero,
        Taken::TooManyChannels,
        Taken::OtherWatch,
        Taken::AgeZero,
    ];

    /// Whether the reading was of use.
    pub const fn is_used(self) -> bool {
        matches!(self, Taken::Accepted | Taken::AgeZero)
    }

    /// The outcome as a code, for logs and JSON.
    pub const fn code(self) -> &'static str {
        match self {
            Taken::Accepted => "accepted",
            Taken::Duplicate => "duplicate",
            Taken::Contradicts => "contradicts",
            Taken::Late => "late",
            Taken::BeforeAgeZero => "not-after-age-zero",
            Taken::TooManyChannels => "too-many-channels",
            Taken::OtherWatch => "other-watch",
            Taken::AgeZero => "age-zero",
        }
    }

    /// The outcome in plain words.
    pub const fn words(self) -> &'static str {
        match self {
            Taken::Accepted => "accepted",
            Taken::Duplicate => "duplicate",
            Taken::Contradicts => "contradicts a reading of the same time",
            Taken::Late => "late, not fitted",
            Taken::BeforeAgeZero => "not after age zero",
            Taken::TooManyChannels => "too many channels",
            Taken::OtherWatch => "belongs to another watch",
            Taken::AgeZero => "taken for age zero",
        }
    }
}

/// How many readings came to which end.
#[derive(Clone, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct Counts([u64; Taken::ALL.len()]);

impl Counts {
    /// Counts one outcome.
    pub fn note(&mut self, taken: Taken) {
        self.0[taken as usize] += 1;
    }

    /// How many there were of one outcome.
    pub fn of(&self, taken: Taken) -> u64 {
        self.0[taken as usize]
    }

    /// Adds another tally to this one.
    pub fn add(&mut self, other: &Counts) {
        for (mine, theirs) in self.0.iter_mut().zip(other.0) {
            *mine += theirs;
        }
    }
}
