//! What goes out: the outbox, message by message, and the service's own state.

use super::{Daemon, SERVICE_TOKEN};
use crate::service::broker::outbound::{OutMessage, OutboundEvent};
use crate::service::shown::Shown;
use crate::service::store::NewMessage;
use crate::watch::time::ShellTime;

impl Daemon {
    pub(super) fn on_outbound(&mut self, event: OutboundEvent) {
        match event {
            OutboundEvent::Connected => {
                tracing::info!("alerts: connected");
                self.out_connected = true;
                self.handed = 0;
                self.in_flight.clear();
                self.more_in_outbox = true;
                self.state_told = None;
            }
            OutboundEvent::Disconnected { why, retry_in } => {
                self.out_connected = false;
                self.in_flight.clear();
                tracing::warn!(
                    "alerts: not connected: {}; next attempt in {:.1} s",
                    Shown(&why, 300),
                    retry_in.as_secs_f64()
                );
            }
            OutboundEvent::Delivered { token } => {
                self.published += u64::from(token != SERVICE_TOKEN);
                self.done_with(token);
            }
            OutboundEvent::Refused { token, reason } => {
                tracing::error!(token, "a message was refused: {}", Shown(&reason, 200));
                self.done_with(token);
            }
        }
    }

    fn done_with(&mut self, token: i64) {
        if token != SERVICE_TOKEN {
            self.in_flight.remove(&token);
            self.done.push(token);
            self.more_in_outbox = true;
        }
    }

    /// Rows of the outbox, oldest first: handed to the link as far as it takes them.
    pub(super) fn on_fetched(&mut self, rows: Vec<(i64, NewMessage)>) {
        self.fetching = None;
        self.more_in_outbox = !rows.is_empty();
        for (id, message) in rows {
            if !self.out_connected {
                return;
            }
            let NewMessage { topic, payload, retained, content_type, correlation, .. } = message;
            let message =
                OutMessage { token: id, topic, payload, retained, content_type, correlation };
            if self.outbound.try_send(message).is_err() {
                // The link is full; it goes on when something is delivered.
                return;
            }
            self.handed = id;
            self.in_flight.insert(id);
        }
    }

    /// Publishes the service's own state when it has changed.
    pub(super) fn tell_state(&mut self) {
        let (state, why) = match (self.in_connected, self.subscribed) {
            (true, Some(true)) => ("online", "readings and alerts connected"),
            (true, Some(false)) => ("degraded", "not all subscriptions are granted"),
            (false, _) if self.in_lost => ("degraded", "the readings' connection is down"),
            // Not known yet: the broker has still to answer.
            _ => return,
        };
        if !self.out_connected || self.state_told.as_deref() == Some(why) {
            return;
        }
        let message = self.own_state(state, why);
        if self.outbound.try_send(message).is_ok() {
            self.state_told = Some(why.to_owned());
        }
    }

    /// The service's own state as a message.
    pub(super) fn own_state(&self, state: &str, why: &str) -> OutMessage {
        OutMessage {
            token: SERVICE_TOKEN,
            topic: self.desk.service_topic(),
            payload: service_state(state, why, self.desk.now()),
            retained: true,
            content_type: Some("application/json".to_owned()),
            correlation: None,
        }
    }
}

/// The service's own state as JSON.
pub(super) fn service_state(state: &str, why: &str, since: ShellTime) -> Vec<u8> {
    serde_json::json!({
        "state": state,
        "since": since.to_string(),
        "why": why,
        "version": env!("CARGO_PKG_VERSION"),
    })
    .to_string()
    .into_bytes()
}
