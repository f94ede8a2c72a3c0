//! An orderly stop: nothing received is lost, nothing on its way is sent twice.

use super::{Daemon, DaemonError, LINGER, Summary};
use crate::service::broker::outbound::OutboundEvent;
use crate::service::clock;
use std::time::Duration;
use tokio::sync::mpsc;

/// Unsent messages are sent for at most so long; the rest stays in the outbox for the next start.
const DRAIN: Duration = Duration::from_secs(3);
/// Messages of the outbox handed to the link at a time.
const ROWS_AT_A_TIME: i64 = 16;

impl Daemon {
    /// What was received is committed and acknowledged, every state saved, what can be published is
    /// published, and "offline" is said before the link is closed.
    pub(super) async fn stop(
        mut self,
        mut out_events: mpsc::Receiver<OutboundEvent>,
    ) -> Result<Summary, DaemonError> {
        self.notify.stopping();
        tracing::info!("stopping");
        while self.committing.is_some() || !self.waiting.is_empty() {
            if let Some((receiver, _)) = self.committing.as_mut() {
                let first = receiver.await.map_err(|_| DaemonError::StoreGone)??;
                self.on_committed(first);
            }
            self.first_waits_since = Some(clock::instant() - LINGER);
            self.start_commit();
        }
        self.inbound.stop().await;
        if let Some((saving, lines)) = self.saving.take() {
            saving.await.map_err(|_| DaemonError::StoreGone)??;
            self.print(&lines);
        }
        let lines = self.desk.lines();
        if let Some(bundle) = self.desk.bundle(true, true) {
            self.writer.save(bundle).await.map_err(|_| DaemonError::StoreGone)??;
        }
        self.print(&lines);
        self.drain(&mut out_events).await?;
        let last = self.own_state("offline", "stopped");
        self.outbound.stop(last).await;
        Ok(Summary { arrivals: self.desk.arrivals, published: self.published })
    }

    /// Publishes what is left in the outbox, as far as it goes in [`DRAIN`].
    async fn drain(
        &mut self,
        events: &mut mpsc::Receiver<OutboundEvent>,
    ) -> Result<(), DaemonError> {
        let gone = |_| DaemonError::StoreGone;
        let until = clock::instant() + DRAIN;
        let mut in_time = true;
        loop {
            let done = std::mem::take(&mut self.done);
            self.writer.sent(done).await.map_err(gone)??;
            if !(self.out_connected && in_time) {
                return Ok(());
            }
            // Only what is not on its way already: that is waited for, not sent again.
            let rows =
                self.writer.unsent_after(self.handed, ROWS_AT_A_TIME).await.map_err(gone)??;
            if rows.is_empty() && self.in_flight.is_empty() {
                return Ok(());
            }
            self.on_fetched(rows);
            match tokio::time::timeout_at(until, events.recv()).await {
                Ok(Some(event)) => self.on_outbound(event),
                _ => in_time = false,
            }
            while let Ok(event) = events.try_recv() {
                self.on_outbound(event);
            }
        }
    }
}
