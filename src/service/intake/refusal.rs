//! Why a message or a row is not a reading. A refusal is an outcome: counted under its code, shown
//! with an excerpt, and the message acknowledged, because sending it again would not improve it.

use crate::service::settings::time::TimeFault;
use crate::service::shown::{Shown, shown_bytes};
use std::fmt;

/// Characters of a payload that a refusal keeps.
pub const REFUSAL_CHARS_MAX: usize = 40;

/// A short, harmless copy of foreign text: escaped and capped when it is made.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Excerpt(String);

impl Excerpt {
    /// Of text.
    pub fn of(text: &str) -> Excerpt {
        Excerpt(Shown(text, REFUSAL_CHARS_MAX).to_string())
    }

    /// Of bytes that need not be text.
    pub fn of_bytes(bytes: &[u8]) -> Excerpt {
        Excerpt(shown_bytes(bytes, REFUSAL_CHARS_MAX))
    }
}

impl fmt::Display for Excerpt {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "\"{}\"", self.0)
    }
}

/// Why something that arrived is not a reading.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum Refusal {
    /// No watch's topic, or no watch's channel template, fits.
    #[error("no watch covers {name}")]
    NoMatchingWatch {
        /// The topic or channel.
        name: Excerpt,
    },
    /// The captures make a name that is too long.
    #[error("the channel's name has {bytes} bytes; at most {most} are allowed")]
    ChannelTooLong {
        /// Its length.
        bytes: usize,
        /// The limit.
        most: usize,
    },
    /// Retained by the broker and without a time of its own: it may be of any age.
    #[error("retained by the broker and without a time of its own; its age cannot be known")]
    Retained,
    /// Nothing but blanks.
    #[error("the payload is empty; a number is needed")]
    Empty,
    /// Larger than the format allows.
    #[error("{bytes} bytes; at most {most} are read")]
    TooLong {
        /// Its length.
        bytes: usize,
        /// The limit.
        most: usize,
    },
    /// Not text.
    #[error("{excerpt} is not UTF-8 from byte {at} on")]
    NotUtf8 {
        /// The first wrong byte, from 0.
        at: usize,
        /// Its beginning.
        excerpt: Excerpt,
    },
    /// Not a JSON document.
    #[error("{excerpt} is not JSON at line {line}, column {column}")]
    NotJson {
        /// Where, from 1.
        line: usize,
        /// Where, from 1.
        column: usize,
        /// Its beginning.
        excerpt: Excerpt,
    },
    /// JSON nested deeper than is read.
    #[error("the JSON is nested deeper than {most} levels")]
    TooDeep {
        /// The limit.
        most: usize,
    },
    /// The document has nothing there.
    #[error("the JSON has nothing at {pointer}")]
    MissingPointer {
        /// The pointer of the settings.
        pointer: String,
    },
    /// Neither a number nor a known word for a missing one.
    #[error("{excerpt} is not a number; one JSON number such as 0.125 is needed")]
    NotANumber {
        /// What was found.
        excerpt: Excerpt,
    },
    /// A number inside a JSON string.
    #[error("{excerpt} is a number inside a text; send it without quotation marks")]
    NumberInText {
        /// What was found.
        excerpt: Excerpt,
    },
    /// The sender says that there is no valid value: null, NaN, infinite, or a quality that is not good.
    #[error("the sender marks the value as not valid: {excerpt}")]
    BadQuality {
        /// What was found.
        excerpt: Excerpt,
    },
    /// A number beyond what a double holds.
    #[error("{excerpt} is beyond the range of a double, 1.8e308")]
    OutOfRange {
        /// What was found.
        excerpt: Excerpt,
    },
    /// Value minus reference is beyond what a double holds.
    #[error("{value} minus the reference {reference} is beyond the range of a double")]
    DeviationNotFinite {
        /// The value.
        value: f64,
        /// The reference.
        reference: f64,
    },
    /// No instrument is off by so much; one such reading would take the curve from the whole window.
    #[error("a deviation of {deviation:e} is taken for a fault; at most {most:e} is accepted")]
    DeviationTooLarge {
        /// The deviation.
        deviation: f64,
        /// The largest accepted.
        most: f64,
    },
    /// The watch takes its reference from each reading, and this one has none.
    #[error("no reference; this watch needs one with each reading")]
    NoReference,
    /// The time cannot be read.
    #[error(
        "the time {excerpt} is not accepted: {fault}; needed: RFC 3339 with offset, or s, ms, µs or ns since 1970"
    )]
    BadTime {
        /// What was found.
        excerpt: Excerpt,
        /// What is wrong.
        fault: TimeFault,
    },
    /// A time before 1978 or after 2099: a clock that is not set, or a unit mistaken.
    #[error("the time {excerpt} is outside 1978 to 2100 in s, ms, µs and ns")]
    TimeImplausible {
        /// What was found.
        excerpt: Excerpt,
    },
    /// Later than the time of receipt by more than clocks may differ.
    #[error(
        "the reading's time is {days:.1} d after its receipt; at most 1 d is allowed: check the sender's clock and this one's"
    )]
    FromTheFuture {
        /// How much later, days.
        days: f64,
    },
    /// A row of a table that is not one.
    #[error("not a row of the table: {fault}")]
    BadRow {
        /// What is wrong.
        fault: RowFault,
    },
}

/// What is wrong with a row.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
pub enum RowFault {
    /// Fewer or more fields than the header.
    #[error("{found} fields where the header has {needed}")]
    Fields {
        /// Number of fields.
        found: usize,
        /// Number of columns.
        needed: usize,
    },
    /// A quotation mark that is not closed on its line.
    #[error("a quotation mark is not closed on its line")]
    Quotation,
}

impl Refusal {
    /// The code under which it is counted; fixed words, free of foreign text.
    pub const fn code(&self) -> &'static str {
        match self {
            Refusal::NoMatchingWatch { .. } => "no-matching-watch",
            Refusal::ChannelTooLong { .. } => "channel-too-long",
            Refusal::Retained => "retained",
            Refusal::Empty => "empty",
            Refusal::TooLong { .. } => "too-long",
            Refusal::NotUtf8 { .. } => "not-utf8",
            Refusal::NotJson { .. } => "not-json",
            Refusal::TooDeep { .. } => "too-deep",
            Refusal::MissingPointer { .. } => "missing-pointer",
            Refusal::NotANumber { .. } => "not-a-number",
            Refusal::NumberInText { .. } => "number-in-text",
            Refusal::BadQuality { .. } => "bad-quality",
            Refusal::OutOfRange { .. } => "out-of-range",
            Refusal::DeviationNotFinite { .. } => "deviation-not-finite",
            Refusal::DeviationTooLarge { .. } => "deviation-too-large",
            Refusal::NoReference => "no-reference",
            Refusal::BadTime { .. } => "bad-time",
            Refusal::FromTheFuture { .. } => "from-the-future",
            Refusal::TimeImplausible { .. } => "time-implausible",
            Refusal::BadRow { .. } => "bad-row",
        }
    }
}
