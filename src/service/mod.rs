//! The outside world: files, MQTT, SQLite, systemd, clock.

pub mod broker;
pub mod clock;
pub mod daemon;
pub mod desk;
pub mod envelope;
pub mod flood;
pub mod intake;
pub mod line;
pub mod notify;
pub mod outbox;
pub mod recall;
pub mod recover;
pub mod request;
pub mod settings;
pub mod shown;
pub mod store;
