//! Alerts out: one task, at most [`IN_FLIGHT_MAX`] messages on their way, each accounted for.
//!
//! What is not reported as delivered or refused when the connection ends is the caller's to send again:
//! the outbox has it.

use crate::service::broker::inbound::turn;
use crate::service::broker::{BackOff, BrokerSettings, PACKET_BYTES_MAX, reason};
use rumqttc::v5::mqttbytes::QoS;
use rumqttc::v5::mqttbytes::v5::{LastWill, Packet, PublishProperties};
use rumqttc::v5::{AsyncClient, Event};
use std::collections::{BTreeMap, VecDeque};
use std::sync::{Mutex, MutexGuard, PoisonError};
use std::time::Duration;
use tokio::sync::{Notify, mpsc};
use tokio::task::JoinHandle;

/// Messages on their way without the broker's acknowledgement.
pub const IN_FLIGHT_MAX: usize = 16;
/// Messages that may wait for the task; more are handed back.
const WAITING_MAX: usize = 64;
/// Room left in the largest packet for topic and properties.
const OVERHEAD_BYTES: usize = 1024;
/// An orderly goodbye takes at most so long.
const GOODBYE: Duration = Duration::from_secs(3);

/// A message to publish, QoS 1.
#[derive(Clone, Debug, PartialEq)]
pub struct OutMessage {
    /// The caller's name for it.
    pub token: i64,
    /// Where to.
    pub topic: String,
    /// What.
    pub payload: Vec<u8>,
    /// The broker keeps it for later subscribers.
    pub retained: bool,
    /// Content type.
    pub content_type: Option<String>,
    /// Correlation data, of a reply.
    pub correlation: Option<Vec<u8>>,
}

/// What the link reports.
#[derive(Clone, Debug, PartialEq)]
pub enum OutboundEvent {
    /// A connection stands.
    Connected,
    /// No connection: what was on its way must be sent again.
    Disconnected {
        /// Why.
        why: String,
        /// When another attempt is made.
        retry_in: Duration,
    },
    /// The broker has it.
    Delivered {
        /// Which.
        token: i64,
    },
    /// The broker will not have it, or it is too large to be sent at all.
    Refused {
        /// Which.
        token: i64,
        /// Why.
        reason: String,
    },
}

enum Order {
    Publish(OutMessage),
    Stop,
}

/// Handle to the task.
#[derive(Debug)]
pub struct OutboundHandle {
    orders: mpsc::Sender<Order>,
    task: JoinHandle<()>,
}

/// The link for alerts.
#[derive(Debug)]
pub struct Outbound;

impl Outbound {
    /// Starts the task; it connects, and connects again, until it is stopped.
    ///
    /// # Arguments
    /// `will` — topic and payload that the broker publishes, retained, when the connection breaks.
    pub fn start(
        settings: BrokerSettings,
        will: (String, Vec<u8>),
        events: mpsc::Sender<OutboundEvent>,
    ) -> OutboundHandle {
        let (orders, inbox) = mpsc::channel(WAITING_MAX);
        let link = Link { settings, will, events, inbox, stop_asked: false };
        OutboundHandle { orders, task: tokio::spawn(link.run()) }
    }
}

impl OutboundHandle {
    /// Hands a message over; it comes back when the link has enough to do or is gone.
    pub fn try_send(&self, message: OutMessage) -> Result<(), OutMessage> {
        self.orders.try_send(Order::Publish(message)).map_err(|error| match error.into_inner() {
            Order::Publish(message) => message,
            Order::Stop => unreachable!("a message was handed over"),
        })
    }

    /// Publishes a last message, waits for its acknowledgement within a bound, says goodbye.
    pub async fn stop(mut self, last: OutMessage) {
        let goodbye = async {
            drop(self.orders.send(Order::Publish(last)).await);
            drop(self.orders.send(Order::Stop).await);
            drop((&mut self.task).await);
        };
        if tokio::time::timeout(GOODBYE, goodbye).await.is_err() {
            self.task.abort();
        }
    }
}

struct Link {
    settings: BrokerSettings,
    will: (String, Vec<u8>),
    events: mpsc::Sender<OutboundEvent>,
    inbox: mpsc::Receiver<Order>,
    stop_asked: bool,
}

/// Messages of one connection; shared by its two halves, which take turns in one task.
#[derive(Default)]
struct Ledger {
    entries: Mutex<Entries>,
    /// Something changed that the sending half may wait for.
    changed: Notify,
}

#[derive(Default)]
struct Entries {
    connected: bool,
    /// Handed to the event loop, packet id not known yet, oldest first.
    handed: VecDeque<i64>,
    /// By packet id.
    on_their_way: BTreeMap<u16, i64>,
}

impl Ledger {
    fn entries(&self) -> MutexGuard<'_, Entries> {
        self.entries.lock().unwrap_or_else(PoisonError::into_inner)
    }

    fn in_flight(&self) -> usize {
        let entries = self.entries();
        entries.handed.len() + entries.on_their_way.len()
    }

    /// Waits until the connection stands and `fewer_than` messages are on their way.
    async fn room(&self, fewer_than: usize) {
        while !self.entries().connected || self.in_flight() >= fewer_than {
            self.changed.notified().await;
        }
    }
}

impl Link {
    async fn run(mut self) {
        let mut back_off = BackOff::new();
        loop {
            let why = self.one_connection(&mut back_off).await;
            if self.stop_asked || self.events.is_closed() {
                return;
            }
            let retry_in = back_off.next();
            if !self.tell(OutboundEvent::Disconnected { why, retry_in }).await {
                return;
            }
            tokio::time::sleep(retry_in).await;
            // What was handed over for the old connection is sent again by its owner.
            while let Ok(order) = self.inbox.try_recv() {
                self.stop_asked |= matches!(order, Order::Stop);
            }
            if self.stop_asked {
                return;
            }
        }
    }

    /// One client and one event loop for one TCP connection. Returns why it ended.
    ///
    /// The half that turns the event loop is never interrupted by the half that sends: a turn dropped
    /// in the middle of a write would lose what it had not written yet, without a word.
    async fn one_connection(&mut self, back_off: &mut BackOff) -> String {
        let Link { settings, will, events: told, inbox, stop_asked } = self;
        let mut options = settings.options("out");
        options.set_clean_start(true);
        options.set_outgoing_inflight_upper_limit(32);
        let (topic, payload) = will.clone();
        options.set_last_will(LastWill::new(topic, payload, QoS::AtLeastOnce, true, None));
        let mut network = rumqttc::NetworkOptions::new();
        network.set_tcp_nodelay(true);
        options.set_network_options(network);
        let (client, mut events) = AsyncClient::new(options, WAITING_MAX);
        let ledger = Ledger::default();
        let turning = async {
            loop {
                match turn(&mut events).await {
                    Err(why) => return why,
                    Ok(Event::Incoming(Packet::ConnAck(_))) => {
                        back_off.connected();
                        ledger.entries().connected = true;
                        tell(told, OutboundEvent::Connected).await;
                    }
                    Ok(Event::Outgoing(rumqttc::Outgoing::Disconnect)) => {
                        return "stopped".to_owned();
                    }
                    Ok(event) => account(told, &ledger, event).await,
                }
                ledger.changed.notify_one();
            }
        };
        let sending = async {
            loop {
                ledger.room(IN_FLIGHT_MAX).await;
                match inbox.recv().await {
                    Some(Order::Publish(message)) => {
                        publish(told, &client, &ledger, message).await;
                    }
                    Some(Order::Stop) | None => break,
                }
            }
            *stop_asked = true;
            ledger.room(1).await;
            drop(client.try_disconnect());
            std::future::pending::<String>().await
        };
        tokio::select! {
            why = turning => why,
            why = sending => why,
        }
    }

    async fn tell(&self, event: OutboundEvent) -> bool {
        tell(&self.events, event).await
    }
}

async fn publish(
    told: &mpsc::Sender<OutboundEvent>,
    client: &AsyncClient,
    ledger: &Ledger,
    message: OutMessage,
) {
    let OutMessage { token, topic, payload, retained, content_type, correlation } = message;
    let most = PACKET_BYTES_MAX as usize - OVERHEAD_BYTES;
    if payload.len() > most {
        let reason = format!("{} bytes; at most {most} are sent", payload.len());
        tell(told, OutboundEvent::Refused { token, reason }).await;
        return;
    }
    let correlation_data = correlation.map(Into::into);
    let properties =
        PublishProperties { content_type, correlation_data, ..PublishProperties::default() };
    ledger.entries().handed.push_back(token);
    let handed =
        client.try_publish_with_properties(topic, QoS::AtLeastOnce, retained, payload, properties);
    if let Err(error) = handed {
        ledger.entries().handed.pop_back();
        let reason = error.to_string();
        tell(told, OutboundEvent::Refused { token, reason }).await;
    }
}

/// Keeps the books: which packet id a message got, and what became of it.
async fn account(told: &mpsc::Sender<OutboundEvent>, ledger: &Ledger, event: Event) {
    match event {
        Event::Outgoing(rumqttc::Outgoing::Publish(packet_id)) => {
            let mut entries = ledger.entries();
            if let Some(token) = entries.handed.pop_front() {
                entries.on_their_way.insert(packet_id, token);
            }
        }
        Event::Incoming(Packet::PubAck(answer)) => {
            let token = ledger.entries().on_their_way.remove(&answer.pkid);
            if let Some(token) = token {
                let event = match reason::of_publication(answer.reason) {
                    None => OutboundEvent::Delivered { token },
                    Some(reason) => OutboundEvent::Refused { token, reason },
                };
                tell(told, event).await;
            }
        }
        _ => {}
    }
}

async fn tell(told: &mpsc::Sender<OutboundEvent>, event: OutboundEvent) -> bool {
    told.send(event).await.is_ok()
}
