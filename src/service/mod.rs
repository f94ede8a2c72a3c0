//! The outside world: files, MQTT, SQLite, systemd, clock.

pub mod broker;
pub mod intake;
pub mod settings;
pub mod shown;
pub mod store;
