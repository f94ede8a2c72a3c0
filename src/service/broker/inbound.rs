//! Readings in: one task, a session that the broker keeps, acknowledgement by hand.

use crate::service::broker::{
    BackOff, BrokerSettings, RECEIVE_MAXIMUM, SESSION_EXPIRY_S, TURN_MAX, reason,
};
use bytes::Bytes;
use rumqttc::v5::mqttbytes::QoS;
use rumqttc::v5::mqttbytes::v5::{Filter, Packet, Publish, RetainForwardRule, SubAck};
use rumqttc::v5::{AsyncClient, Event, EventLoop};
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Arc, Mutex, PoisonError};
use std::time::Duration;
use tokio::sync::mpsc;
use tokio::task::JoinHandle;

/// Requests that may wait for the event loop: more acknowledgements than there are packet ids cannot
/// be outstanding, so this is never full.
const REQUESTS_MAX: usize = 70_000;
/// An orderly goodbye takes at most so long.
const GOODBYE: Duration = Duration::from_secs(3);

/// Which delivery to acknowledge, on which connection.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct AckToken {
    epoch: u64,
    packet_id: u16,
}

/// A message from the broker.
#[derive(Clone, Debug)]
pub struct Delivery {
    /// To acknowledge it.
    pub token: AckToken,
    /// Its topic, bytes that are not UTF-8 replaced. Foreign text.
    pub topic: String,
    /// Its payload.
    pub payload: Bytes,
    /// Marked as delivered before.
    pub duplicate: bool,
    /// Kept by the broker from earlier.
    pub retained: bool,
    /// Where a reply goes. Foreign text.
    pub response_topic: Option<String>,
    /// What the reply must carry, so that the asker knows it again.
    pub correlation: Option<Bytes>,
}

impl Delivery {
    /// Its packet id on this connection; 0 without acknowledgement.
    pub fn packet_id(&self) -> u16 {
        self.token.packet_id
    }
}

/// What the link reports.
#[derive(Clone, Debug)]
pub enum InboundEvent {
    /// A connection stands.
    Connected {
        /// The broker still has our session.
        session_present: bool,
    },
    /// The broker has answered the subscriptions.
    Subscribed {
        /// How many were granted.
        granted: usize,
        /// Those that were not, with the reason.
        refused: Vec<(String, String)>,
    },
    /// No connection.
    Disconnected {
        /// Why.
        why: String,
        /// When another attempt is made.
        retry_in: Duration,
    },
    /// A message.
    Message(Delivery),
    /// The broker has lost our session: what was sent meanwhile may be missing.
    PossibleGap,
}

/// The connection that exists now, if any.
type Current = Arc<Mutex<Option<(u64, AsyncClient)>>>;

/// Handle to the task.
#[derive(Debug)]
pub struct InboundHandle {
    current: Current,
    stopping: Arc<AtomicBool>,
    task: JoinHandle<()>,
}

/// The link for readings.
#[derive(Debug)]
pub struct Inbound;

impl Inbound {
    /// Starts the task; it connects, and connects again, until it is stopped.
    ///
    /// # Arguments
    /// `filters` — to subscribe to, at QoS 1, without what the broker has kept; `been_connected` — the
    /// broker should have a session of ours, from an earlier start; `events` — takes what happens; its
    /// capacity should exceed [`RECEIVE_MAXIMUM`], so that the task never waits.
    pub fn start(
        settings: BrokerSettings,
        filters: Vec<String>,
        been_connected: bool,
        events: mpsc::Sender<InboundEvent>,
    ) -> InboundHandle {
        let current: Current = Arc::default();
        let stopping = Arc::new(AtomicBool::new(false));
        let link = Link {
            settings,
            filters,
            events,
            current: Arc::clone(&current),
            stopping: Arc::clone(&stopping),
            epoch: 0,
            been_connected,
        };
        InboundHandle { current, stopping, task: tokio::spawn(link.run()) }
    }
}

impl InboundHandle {
    /// Acknowledges deliveries, in the order of their arrival. Those of a connection that is gone are
    /// dropped: the broker delivers them again.
    pub fn acknowledge(&self, tokens: Vec<AckToken>) {
        let current = self.current.lock().unwrap_or_else(PoisonError::into_inner);
        let Some((epoch, client)) = current.as_ref() else { return };
        for token in tokens {
            if token.epoch == *epoch && token.packet_id != 0 {
                let mut publish = Publish::new("", QoS::AtLeastOnce, Bytes::new(), None);
                publish.pkid = token.packet_id;
                if client.try_ack(&publish).is_err() {
                    // Only when the event loop is gone; then the broker delivers again.
                    return;
                }
            }
        }
    }

    /// Takes nothing more in, sends the waiting acknowledgements, says goodbye.
    pub async fn stop(&mut self) {
        self.stopping.store(true, Ordering::SeqCst);
        {
            let current = self.current.lock().unwrap_or_else(PoisonError::into_inner);
            match current.as_ref() {
                // Behind the acknowledgements in the same queue: they go out first.
                Some((_, client)) if client.try_disconnect().is_ok() => {}
                _ => self.task.abort(),
            }
        }
        if tokio::time::timeout(GOODBYE, &mut self.task).await.is_err() {
            self.task.abort();
        }
    }
}

struct Link {
    settings: BrokerSettings,
    filters: Vec<String>,
    events: mpsc::Sender<InboundEvent>,
    current: Current,
    stopping: Arc<AtomicBool>,
    epoch: u64,
    been_connected: bool,
}

impl Link {
    async fn run(mut self) {
        let mut back_off = BackOff::new();
        loop {
            self.epoch += 1;
            let why = self.one_connection(&mut back_off).await;
            self.set_current(None);
            if self.stopping.load(Ordering::SeqCst) || self.events.is_closed() {
                return;
            }
            let retry_in = back_off.next();
            if !self.tell(InboundEvent::Disconnected { why, retry_in }).await {
                return;
            }
            tokio::time::sleep(retry_in).await;
        }
    }

    /// One client and one event loop for one TCP connection. Returns why it ended.
    async fn one_connection(&mut self, back_off: &mut BackOff) -> String {
        let mut options = self.settings.options("in");
        options.set_clean_start(false);
        options.set_session_expiry_interval(Some(SESSION_EXPIRY_S));
        options.set_receive_maximum(Some(RECEIVE_MAXIMUM));
        options.set_manual_acks(true);
        options.set_outgoing_inflight_upper_limit(32);
        let (client, mut events) = AsyncClient::new(options, REQUESTS_MAX);
        loop {
            let event = match turn(&mut events).await {
                Ok(event) => event,
                Err(why) => return why,
            };
            match event {
                Event::Incoming(Packet::ConnAck(answer)) => {
                    back_off.connected();
                    self.set_current(Some((self.epoch, client.clone())));
                    let filters = self.filters.iter().map(|filter| {
                        let mut filter = Filter::new(filter, QoS::AtLeastOnce);
                        filter.retain_forward_rule = RetainForwardRule::Never;
                        filter
                    });
                    if client.try_subscribe_many(filters).is_err() {
                        return "the subscriptions could not be sent".to_owned();
                    }
                    let session_present = answer.session_present;
                    self.tell(InboundEvent::Connected { session_present }).await;
                    if self.been_connected && !session_present {
                        self.tell(InboundEvent::PossibleGap).await;
                    }
                    self.been_connected = true;
                }
                Event::Incoming(Packet::SubAck(answer)) => self.subscribed(&answer).await,
                Event::Incoming(Packet::Publish(publish)) => {
                    // At a stop nothing more is taken in; unacknowledged, it comes again.
                    let delivery = self.delivery(publish);
                    if !self.stopping.load(Ordering::SeqCst)
                        && !self.tell(InboundEvent::Message(delivery)).await
                    {
                        return "nobody listens".to_owned();
                    }
                }
                Event::Outgoing(rumqttc::Outgoing::Disconnect) => return "stopped".to_owned(),
                _ => {}
            }
        }
    }

    async fn subscribed(&self, answer: &SubAck) {
        let mut granted = 0;
        let mut refused = Vec::new();
        for (filter, code) in self.filters.iter().zip(&answer.return_codes) {
            match reason::of_subscription(*code) {
                None => granted += 1,
                Some(why) => refused.push((filter.clone(), why)),
            }
        }
        self.tell(InboundEvent::Subscribed { granted, refused }).await;
    }

    fn delivery(&self, publish: Publish) -> Delivery {
        let Publish { dup, retain, topic, pkid, payload, properties, .. } = publish;
        let properties = properties.unwrap_or_default();
        Delivery {
            token: AckToken { epoch: self.epoch, packet_id: pkid },
            topic: String::from_utf8_lossy(&topic).into_owned(),
            payload,
            duplicate: dup,
            retained: retain,
            response_topic: properties.response_topic,
            correlation: properties.correlation_data,
        }
    }

    fn set_current(&self, current: Option<(u64, AsyncClient)>) {
        *self.current.lock().unwrap_or_else(PoisonError::into_inner) = current;
    }

    /// False: nobody listens any more.
    async fn tell(&self, event: InboundEvent) -> bool {
        self.events.send(event).await.is_ok()
    }
}

/// One turn of an event loop, never longer than a dead peer takes to be noticed.
pub(super) async fn turn(events: &mut EventLoop) -> Result<Event, String> {
    match tokio::time::timeout(TURN_MAX, events.poll()).await {
        Ok(Ok(event)) => Ok(event),
        Ok(Err(error)) => Err(reason::of_connection(&error)),
        Err(_) => Err("the broker stopped reading".to_owned()),
    }
}
