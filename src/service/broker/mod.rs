//! (being built)
pub mod inside;
