//! Raw file and environment → checked [`Settings`], with all problems reported at once.

pub mod duration;
pub mod time;
