//! The link to the broker: the only place that knows MQTT.
//!
//! Two connections with two client ids: readings come in over one (`{client_id}-in`, a session that
//! the broker keeps, acknowledged by hand), alerts go out over the other (`{client_id}-out`). One
//! client and one event loop live exactly as long as one TCP connection: nothing of an old connection
//! can be acknowledged or sent on a new one. What must survive a connection is kept elsewhere: readings
//! by the broker's session, alerts by the outbox.

pub mod guest;
pub mod inbound;
pub mod inside;
pub mod outbound;
mod reason;

use crate::service::clock::Stopwatch;
use crate::service::settings::{BrokerSection, Secret};
use rumqttc::v5::MqttOptions;
use std::time::Duration;

/// Seconds between pings; a dead peer is noticed after at most twice that.
pub const KEEP_ALIVE_S: u64 = 15;
/// How long the broker keeps the readings' session while this service is away, seconds.
pub const SESSION_EXPIRY_S: u32 = 7 * 86_400;
/// Readings on their way without acknowledgement; enough for 20,000 a second at 100 ms a commit.
pub const RECEIVE_MAXIMUM: u16 = 4000;
/// The largest message that is taken; the broker is told and drops larger ones for us.
pub const PACKET_BYTES_MAX: u32 = 64 * 1024;
/// Seconds until an attempt to connect is given up.
const CONNECT_TIMEOUT_S: u64 = 5;
/// One turn of the link takes at most so long, or the connection counts as dead.
const TURN_MAX: Duration = Duration::from_secs(2 * KEEP_ALIVE_S + 10);
/// First and longest wait before another attempt.
const BACK_OFF: (Duration, Duration) = (Duration::from_millis(200), Duration::from_secs(30));
/// A connection that held so long was a good one: the wait starts small again.
const STABLE_AFTER: Duration = Duration::from_secs(10);

/// How to reach the broker.
#[derive(Clone, Debug)]
pub struct BrokerSettings {
    /// Host name or address.
    pub host: String,
    /// TCP port.
    pub port: u16,
    /// Client id; `-in` and `-out` are added.
    pub client_id: String,
    /// User name, if any.
    pub username: Option<String>,
    /// Password, if any.
    pub password: Option<Secret>,
}

impl BrokerSettings {
    /// How to reach the broker of these settings.
    pub fn of(section: &BrokerSection) -> BrokerSettings {
        BrokerSettings {
            host: section.host.clone(),
            port: section.port,
            client_id: section.client_id.clone(),
            username: section.username.clone(),
            password: section.password.clone(),
        }
    }

    fn options(&self, suffix: &str) -> MqttOptions {
        let id = format!("{}-{suffix}", self.client_id);
        let mut options = MqttOptions::new(id, &self.host, self.port);
        options.set_keep_alive(Duration::from_secs(KEEP_ALIVE_S));
        options.set_connection_timeout(CONNECT_TIMEOUT_S);
        options.set_max_packet_size(Some(PACKET_BYTES_MAX));
        if let Some(username) = &self.username {
            let password = self.password.as_ref().map_or("", Secret::expose);
            options.set_credentials(username, password);
        }
        options
    }
}

/// Growing waits with jitter, so that many clients do not come back at the same moment.
#[derive(Debug)]
struct BackOff {
    wait: Duration,
    connected: Option<Stopwatch>,
}

impl BackOff {
    fn new() -> BackOff {
        BackOff { wait: BACK_OFF.0, connected: None }
    }

    fn connected(&mut self) {
        self.connected = Some(Stopwatch::start());
    }

    /// How long to wait now: between half and all of a wait that doubles each time.
    fn next(&mut self) -> Duration {
        if self.connected.take().is_some_and(|held| held.elapsed() >= STABLE_AFTER) {
            self.wait = BACK_OFF.0;
        }
        let wait = self.wait.mul_f64(0.5 + 0.5 * fastrand::f64());
        self.wait = (self.wait * 2).min(BACK_OFF.1);
        wait
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn waits_grow_to_their_limit_and_never_vanish() {
        let mut back_off = BackOff::new();
        let waits: Vec<Duration> = (0..20).map(|_| back_off.next()).collect();
        assert!(waits.iter().all(|w| *w >= BACK_OFF.0 / 2 && *w <= BACK_OFF.1));
        assert!(waits[19] >= BACK_OFF.1 / 2 && waits[0] <= BACK_OFF.0);
    }
}
