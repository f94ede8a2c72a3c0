//! asfound keeps watch over instrument drift.
//!
//! Four floors; imports go down only: [`cli`] → [`service`] → [`watch`] → [`drift`].

#![forbid(unsafe_code)]

pub mod cli;
pub mod drift;
pub mod service;
pub mod watch;
