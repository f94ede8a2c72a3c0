//! The watch over channels: a deterministic state machine; `now` is an argument.
//!
//! The road of a reading through this floor: [`reading`] → [`engine`] → [`channel`] → [`window`]
//! → (when due) a curve, its residuals examined, how far it may be trusted → [`finding`] → [`alert`],
//! worded by [`wording`].

pub mod alert;
pub mod budget;
pub mod channel;
pub mod engine;
pub mod finding;
pub mod incident;
pub mod judge;
pub mod limits;
pub mod reading;
pub mod report;
pub mod said;
pub mod settings;
pub mod time;
pub mod weights;
pub mod whitening;
pub mod window;
pub mod wording;
