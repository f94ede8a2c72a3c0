//! The mathematics of one window: slices in, values out. Knows no channel, no clock, no unit name.

pub mod choose;
pub mod confidence;
pub mod family;
pub mod fit;
pub mod forecast;
pub mod frame;
pub mod interval;
pub mod lanes;
pub mod least_squares;
pub mod outcome;
pub mod projection;
pub mod reach;
#[cfg(test)]
pub(crate) mod reference;
pub mod refine;
pub mod residual_tests;
pub mod robust;
pub mod sandwich;
pub mod serial;
pub mod structure;
pub mod tails;
pub mod workspace;
