//! Topic and payload → reading: pure functions of bytes. Nothing here knows the broker or the clock.
//!
//! A message that is no reading is a [`Refusal`]: an outcome with data, counted and acknowledged.

pub mod csv;
pub mod pattern;
pub mod payload;
pub mod pointer;
pub mod refusal;
pub mod route;

pub use pattern::{ChannelTemplate, TopicPattern, topic_level};
pub use payload::PayloadFormat;
pub use pointer::Pointer;
pub use refusal::{Excerpt, Refusal, RowFault};
pub use route::{Decoded, Reference, Route, Router, decode};
