//! The whole program from outside: a real broker, the daemon as a child process, MQTT clients.

pub mod broker;
pub mod client;
mod connection;
pub mod daemon;
pub mod history;
pub mod store;
