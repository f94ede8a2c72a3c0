//! The watch over channels: a deterministic state machine; `now` is an argument.

pub mod settings;
pub mod time;
