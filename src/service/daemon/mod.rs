//! The loop: one closed event enum, one task. Everything that waits is here; nothing that computes.
//!
//! A message is put down, committed, then acknowledged; committed rows go through the engine; what
//! follows is saved and published from the outbox. At most one commit runs at a time; the next one
//! starts when it has ended and something waits 2 ms or fills a batch.

mod publish;
mod stop;

use crate::service::broker::BrokerSettings;
use crate::service::broker::inbound::{AckToken, Delivery, Inbound, InboundEvent, InboundHandle};
use crate::service::broker::outbound::{Outbound, OutboundEvent, OutboundHandle};
use crate::service::clock::{self, Stopwatch};
use crate::service::desk::{Arrival, Arrivals, Desk, Entry, Put};
use crate::service::flood::Flood;
use crate::service::notify::Notify;
use crate::service::shown::Shown;
use crate::service::store::{NewMessage, StoreError, Writer};
use publish::service_state;
use std::collections::BTreeSet;
use std::time::Duration;
use tokio::sync::{mpsc, oneshot};
use tokio::time::Instant;

/// A commit waits at most so long for company.
const LINGER: Duration = Duration::from_millis(2);
/// A commit starts at once when so many messages wait.
const BATCH_MAX: usize = 512;
/// Messages waiting for a commit before no further one is taken from the link (back-pressure).
const WAITING_MAX: usize = 4096;
/// Capacity of the channels from the links.
const EVENTS_MAX: usize = 8192;
/// The pulse: silence, shelves, watchdog, and states that are behind are seen to so often.
const PULSE: Duration = Duration::from_secs(1);
/// Pulses from one routine saving of states to the next.
const PULSES_PER_ROUTINE: u32 = 5;
/// Pulses without an answer of the store, one being due, after which the watchdog is told nothing.
const PULSES_STOOD_MAX: u32 = 10;
/// Messages of the outbox handed to the link at a time.
const PUMP_MAX: i64 = 64;
/// A turn of the loop longer than this is told in the log.
const LONG_TURN: Duration = Duration::from_millis(250);
/// The token of the service's own state: no row of the outbox has it.
const SERVICE_TOKEN: i64 = 0;

/// Why the daemon ended otherwise than asked.
#[derive(Debug, thiserror::Error)]
pub enum DaemonError {
    /// The store failed: nothing was acknowledged after that.
    #[error("{0}; nothing was acknowledged after this")]
    Store(#[from] StoreError),
    /// The store's thread is gone.
    #[error("the store's thread has ended; nothing was acknowledged after this")]
    StoreGone,
}

/// What the daemon did, for the last line.
#[derive(Clone, Debug, Default)]
pub struct Summary {
    /// What arrived.
    pub arrivals: Arrivals,
    /// Messages that the broker has taken.
    pub published: u64,
}

/// Everything that can happen.
enum Event {
    In(InboundEvent),
    Out(OutboundEvent),
    Committed(Result<i64, StoreError>),
    Saved(Result<u64, StoreError>),
    Fetched(Result<Vec<(i64, NewMessage)>, StoreError>),
    CommitDue,
    Pulse,
    Stop,
    StoreGone,
}

/// An answer of the store that is still to come.
type Answer<T> = oneshot::Receiver<Result<T, StoreError>>;
/// Messages put down, in order of arrival; a token without entry adds nothing.
type Batch = Vec<(AckToken, Option<Entry>)>;
/// Rows of the outbox.
type Rows = Vec<(i64, NewMessage)>;

/// Where the technician's lines go.
pub type LineSink = Box<dyn FnMut(&str) + Send>;

/// The daemon at work.
struct Daemon {
    desk: Desk,
    writer: Writer,
    inbound: InboundHandle,
    outbound: OutboundHandle,
    lines: LineSink,
    notify: Notify,
    flood: Flood,
    waiting: Batch,
    first_waits_since: Option<Instant>,
    committing: Option<(Answer<i64>, Batch)>,
    /// With the lines that may be printed once it is saved what they tell.
    saving: Option<(Answer<u64>, Vec<String>)>,
    fetching: Option<Answer<Rows>>,
    /// The newest outbox row handed to the link on this connection.
    handed: i64,
    /// Handed over, not yet taken by the broker.
    in_flight: BTreeSet<i64>,
    /// Taken by the broker, still to be struck out of the outbox.
    done: Vec<i64>,
    more_in_outbox: bool,
    out_connected: bool,
    in_connected: bool,
    /// The readings' connection has been missing at least once.
    in_lost: bool,
    /// Whether all subscriptions are granted; not known before the broker has answered.
    subscribed: Option<bool>,
    state_told: Option<String>,
    pulses: u32,
    /// Answers of the store; the same at the last pulse; pulses since one came while one was due.
    answers: u64,
    answers_at_pulse: u64,
    pulses_stood: u32,
    published: u64,
}

/// Runs the daemon until `stop` ends.
///
/// # Arguments
/// `desk` — over what was recovered; `writer` — owns the store; `link` — how to reach the broker;
/// `lines` — takes the technician's lines; `stop` — ends when the daemon shall stop.
pub async fn run(
    desk: Desk,
    writer: Writer,
    link: BrokerSettings,
    lines: LineSink,
    stop: impl Future<Output = ()>,
) -> Result<Summary, DaemonError> {
    let (in_sender, mut in_events) = mpsc::channel(EVENTS_MAX);
    let (out_sender, mut out_events) = mpsc::channel(EVENTS_MAX);
    let will = (desk.service_topic(), service_state("offline", "connection lost", desk.now()));
    let inbound = Inbound::start(link.clone(), desk.filters(), desk.subscribed_before(), in_sender);
    let outbound = Outbound::start(link, will, out_sender);
    let mut daemon = Daemon {
        desk,
        writer,
        inbound,
        outbound,
        lines,
        notify: Notify::from_environment(),
        flood: Flood::default(),
        waiting: Vec::new(),
        first_waits_since: None,
        committing: None,
        saving: None,
        fetching: None,
        handed: 0,
        in_flight: BTreeSet::new(),
        done: Vec::new(),
        more_in_outbox: true,
        out_connected: false,
        in_connected: false,
        in_lost: false,
        subscribed: None,
        state_told: None,
        pulses: 0,
        answers: 0,
        answers_at_pulse: 0,
        pulses_stood: 0,
        published: 0,
    };
    daemon.desk.collect();
    daemon.after_turn();
    let mut pulse = tokio::time::interval(PULSE);
    pulse.set_missed_tick_behavior(tokio::time::MissedTickBehavior::Delay);
    tokio::pin!(stop);
    loop {
        let event = daemon.next(&mut in_events, &mut out_events, &mut pulse, &mut stop).await;
        let turn = Stopwatch::start();
        if matches!(event, Event::Stop) {
            break;
        }
        daemon.handle(event)?;
        // What has queued up behind the first message belongs to the same batch.
        while daemon.waiting.len() < BATCH_MAX
            && let Ok(event) = in_events.try_recv()
        {
            daemon.handle(Event::In(event))?;
        }
        while let Ok(event) = out_events.try_recv() {
            daemon.handle(Event::Out(event))?;
        }
        daemon.after_turn();
        if turn.elapsed() > LONG_TURN {
            tracing::warn!(ms = turn.elapsed().as_millis(), "a turn of the loop took long");
        }
    }
    daemon.stop(out_events).await
}

impl Daemon {
    async fn next(
        &mut self,
        in_events: &mut mpsc::Receiver<InboundEvent>,
        out_events: &mut mpsc::Receiver<OutboundEvent>,
        pulse: &mut tokio::time::Interval,
        stop: &mut (impl Future<Output = ()> + Unpin),
    ) -> Event {
        let commit_at = match (&self.committing, self.first_waits_since) {
            (None, Some(since)) => since + LINGER,
            _ => clock::instant() + Duration::from_secs(3600),
        };
        let room = self.waiting.len() < WAITING_MAX;
        tokio::select! {
            biased;
            () = stop => Event::Stop,
            answer = answer_of(self.committing.as_mut().map(|(r, _)| r)) => match answer {
                Some(result) => Event::Committed(result),
                None => Event::StoreGone,
            },
            answer = answer_of(self.saving.as_mut().map(|(r, _)| r)) => match answer {
                Some(result) => Event::Saved(result),
                None => Event::StoreGone,
            },
            answer = answer_of(self.fetching.as_mut()) => match answer {
                Some(result) => Event::Fetched(result),
                None => Event::StoreGone,
            },
            _ = pulse.tick() => Event::Pulse,
            () = tokio::time::sleep_until(commit_at) => Event::CommitDue,
            Some(event) = out_events.recv() => Event::Out(event),
            Some(event) = in_events.recv(), if room => Event::In(event),
        }
    }

    fn handle(&mut self, event: Event) -> Result<(), DaemonError> {
        if matches!(event, Event::Committed(_) | Event::Saved(_) | Event::Fetched(_)) {
            self.answers += 1;
        }
        match event {
            Event::In(event) => self.on_inbound(event),
            Event::Out(event) => self.on_outbound(event),
            Event::Committed(result) => self.on_committed(result?),
            Event::Saved(result) => {
                let lines = self.saving.take().map_or_else(Vec::new, |(_, lines)| lines);
                let unkept = result?;
                self.print(&lines);
                if unkept > 0 {
                    tracing::error!(
                        unkept,
                        "the outbox is full: alert events kept in the log only"
                    );
                }
                self.more_in_outbox = true;
            }
            Event::Fetched(result) => self.on_fetched(result?),
            Event::Pulse => self.on_pulse(),
            Event::CommitDue | Event::Stop => {}
            Event::StoreGone => return Err(DaemonError::StoreGone),
        }
        Ok(())
    }

    fn on_inbound(&mut self, event: InboundEvent) {
        match event {
            InboundEvent::Message(delivery) => self.on_message(&delivery),
            InboundEvent::Connected { session_present, .. } => {
                self.in_connected = true;
                self.subscribed = None;
                tracing::info!(session_present, "readings: connected");
            }
            InboundEvent::Subscribed { granted, refused } => {
                for (filter, reason) in &refused {
                    tracing::error!(
                        "readings: subscription to {} refused: {}",
                        Shown(filter, 120),
                        Shown(reason, 200)
                    );
                }
                tracing::info!(granted, refused = refused.len(), "readings: subscribed");
                self.subscribed = Some(granted > 0 && refused.is_empty());
                if granted > 0 {
                    // Not waited for: at worst one gap is not noticed after a crash this instant.
                    drop(self.writer.note_subscribed());
                    self.notify.ready();
                }
            }
            InboundEvent::Disconnected { why, retry_in } => {
                self.in_connected = false;
                self.in_lost = true;
                tracing::warn!(
                    "readings: not connected: {}; next attempt in {:.1} s",
                    Shown(&why, 300),
                    retry_in.as_secs_f64()
                );
            }
            InboundEvent::PossibleGap => {
                tracing::warn!(
                    "the broker has lost this subscriber's session: readings sent meanwhile may be \
                     missing"
                );
                // What it had retained for newcomers is most likely lost as well.
                self.desk.tell_all_again();
            }
        }
    }

    fn on_message(&mut self, delivery: &Delivery) {
        let arrival = Arrival {
            topic: &delivery.topic,
            payload: &delivery.payload,
            duplicate: delivery.duplicate,
            retained: delivery.retained,
            packet_id: delivery.packet_id(),
            response_topic: delivery.response_topic.as_deref(),
            correlation: delivery.correlation.as_deref(),
        };
        let (put, refusal) = self.desk.receive(&arrival);
        if let Some(refusal) = refusal
            && let Some(suppressed) = self.flood.admit(refusal.code())
        {
            let topic = Shown(&delivery.topic, 120);
            tracing::warn!(reason = refusal.code(), suppressed, "refused {topic}: {refusal}");
        }
        let entry = match put {
            Put::Journal(entry) => Some(*entry),
            Put::Nothing => None,
        };
        self.waiting.push((delivery.token, entry));
        self.first_waits_since.get_or_insert_with(clock::instant);
    }

    fn on_committed(&mut self, first: i64) {
        let Some((_, batch)) = self.committing.take() else { return };
        let mut tokens = Vec::with_capacity(batch.len());
        let mut entries = Vec::with_capacity(batch.len());
        for (token, entry) in batch {
            tokens.push(token);
            entries.extend(entry);
        }
        self.inbound.acknowledge(tokens);
        self.desk.committed(first, entries);
        for (channel, taken) in self.desk.unfitted() {
            if let Some(suppressed) = self.flood.admit(taken.code()) {
                let channel = Shown(&channel, 80);
                let why = taken.words();
                tracing::warn!(reason = taken.code(), suppressed, "not fitted: {channel}: {why}");
            }
        }
    }

    /// The technician's lines of alert events that are safely in the store.
    fn print(&mut self, lines: &[String]) {
        for line in lines {
            (self.lines)(line);
        }
    }

    fn on_pulse(&mut self) {
        self.desk.tick();
        self.pulses = self.pulses.wrapping_add(1);
        self.tell_state();
        self.flood.pulse();
        // Progress, not mere life: a store that no longer answers lets the watchdog run out.
        let asked = self.committing.is_some() || self.saving.is_some() || self.fetching.is_some();
        let stands = asked && self.answers == self.answers_at_pulse;
        self.pulses_stood = if stands { self.pulses_stood + 1 } else { 0 };
        self.answers_at_pulse = self.answers;
        if self.pulses_stood < PULSES_STOOD_MAX {
            let journaled = self.desk.arrivals.journaled;
            self.notify.alive(journaled, self.desk.engine().overview_count());
        }
    }

    /// Starts what can be started after each event.
    fn after_turn(&mut self) {
        self.start_commit();
        if self.saving.is_none() {
            let routine = self.pulses >= PULSES_PER_ROUTINE;
            if routine {
                self.pulses = 0;
            }
            let lines = self.desk.lines();
            if let Some(bundle) = self.desk.bundle(routine, false) {
                self.saving = Some((self.writer.save(bundle), lines));
            }
        }
        if !self.done.is_empty() {
            // Should the store fail here, the messages are sent again with the same ids: no harm.
            drop(self.writer.sent(std::mem::take(&mut self.done)));
        }
        if self.out_connected && self.more_in_outbox && self.fetching.is_none() {
            self.more_in_outbox = false;
            self.fetching = Some(self.writer.unsent_after(self.handed, PUMP_MAX));
        }
    }

    fn start_commit(&mut self) {
        let due = self.first_waits_since.is_some_and(|since| since.elapsed() >= LINGER);
        if self.committing.is_some() || !(due || self.waiting.len() >= BATCH_MAX) {
            return;
        }
        // Not more at once: refits follow the commit in the same turn, and turns shall stay short.
        let rest = self.waiting.split_off(BATCH_MAX.min(self.waiting.len()));
        let batch = std::mem::replace(&mut self.waiting, rest);
        if self.waiting.is_empty() {
            self.first_waits_since = None;
        }
        if batch.iter().all(|(_, entry)| entry.is_none()) {
            self.inbound.acknowledge(batch.into_iter().map(|(token, _)| token).collect());
            return;
        }
        let rows = batch.iter().filter_map(|(_, e)| e.as_ref()).map(|e| e.row.clone()).collect();
        self.committing = Some((self.writer.append(rows), batch));
    }
}

/// The answer of an order that may not have been given; pending for ever without one.
async fn answer_of<T>(receiver: Option<&mut oneshot::Receiver<T>>) -> Option<T> {
    match receiver {
        Some(receiver) => receiver.await.ok(),
        None => std::future::pending().await,
    }
}
