//! One file per command.

pub mod check;
