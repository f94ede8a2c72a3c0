//! Clients of the broker, packet by packet over blocking sockets: one that publishes at QoS 1 and
//! waits for every acknowledgement, one that collects what comes under a filter. Both outlive a
//! restart of the broker.

use crate::common::broker::{DEADLINE, LOOK_AGAIN};
use crate::common::connection::{Absent, Connection};
use bytes::Bytes;
use rumqttc::v5::mqttbytes::QoS;
use rumqttc::v5::mqttbytes::v5::{
    Filter, Packet, PubAck, PubAckReason, Publish, PublishProperties, Subscribe,
};
use std::collections::BTreeMap;
use std::sync::atomic::{AtomicBool, AtomicU32, Ordering};
use std::sync::{Arc, Condvar, Mutex};
use std::time::Instant;

/// Messages published without acknowledgement at a time.
const IN_FLIGHT_MAX: usize = 100;

/// A message to publish, or one that came.
#[derive(Clone, Debug, PartialEq)]
pub struct Message {
    /// Its topic.
    pub topic: String,
    /// Its payload.
    pub payload: Vec<u8>,
    /// To be kept by the broker, or kept by it from earlier.
    pub retained: bool,
    /// The payload's media type.
    pub content_type: Option<String>,
    /// Where an answer is wanted.
    pub response_topic: Option<String>,
    /// What the answer shall carry to be known by.
    pub correlation: Option<Vec<u8>>,
}

impl Message {
    /// A message that is not kept.
    pub fn new(topic: impl Into<String>, payload: impl Into<Vec<u8>>) -> Message {
        Message {
            topic: topic.into(),
            payload: payload.into(),
            retained: false,
            content_type: None,
            response_topic: None,
            correlation: None,
        }
    }

    /// Asks for an answer there, with these data.
    pub fn answer_to(self, topic: &str, correlation: &[u8]) -> Message {
        let correlation = Some(correlation.to_vec());
        Message { response_topic: Some(topic.to_owned()), correlation, ..self }
    }

    /// The same, to be kept by the broker.
    pub fn retained(self) -> Message {
        Message { retained: true, ..self }
    }

    fn packet(&self, packet_id: u16) -> Publish {
        let properties = PublishProperties {
            content_type: self.content_type.clone(),
            response_topic: self.response_topic.clone(),
            correlation_data: self.correlation.clone().map(Bytes::from),
            ..PublishProperties::default()
        };
        let payload = self.payload.clone();
        let packet = Publish::new(&self.topic, QoS::AtLeastOnce, payload, Some(properties));
        Publish { pkid: packet_id, retain: self.retained, ..packet }
    }

    /// The payload as JSON; null where it is none.
    pub fn json(&self) -> serde_json::Value {
        serde_json::from_slice(&self.payload).unwrap_or_default()
    }
}

fn client_id(kind: &str) -> String {
    static MADE: AtomicU32 = AtomicU32::new(0);
    format!("{kind}-{}", MADE.fetch_add(1, Ordering::Relaxed))
}

/// Publishes at QoS 1.
pub struct Publisher {
    port: u16,
    client_id: String,
    connection: Option<Connection>,
}

impl Publisher {
    /// A publisher with a client id of its own; it connects when it has something to publish.
    pub fn new(port: u16) -> Publisher {
        Publisher { port, client_id: client_id("publisher"), connection: None }
    }

    /// Publishes in order and returns once the broker has acknowledged every message. When the
    /// connection breaks, what is not acknowledged is sent again, in order.
    pub fn publish(&mut self, messages: &[Message]) {
        let mut done = 0;
        let mut progress = Instant::now();
        while done < messages.len() {
            let before = done;
            self.publish_some(messages, &mut done);
            if done > before {
                progress = Instant::now();
            }
            assert!(progress.elapsed() < DEADLINE, "the broker acknowledges nothing");
            if done < messages.len() {
                std::thread::sleep(LOOK_AGAIN);
            }
        }
    }

    /// Publishes from `done` on over one connection; `done` counts what is acknowledged in a row.
    fn publish_some(&mut self, messages: &[Message], done: &mut usize) {
        let mut connection = match self.connection.take() {
            Some(connection) => connection,
            None => match Connection::open(self.port, &self.client_id) {
                Some(connection) => connection,
                None => return,
            },
        };
        let mut next = *done;
        let mut open: BTreeMap<u16, usize> = BTreeMap::new();
        let start = Instant::now();
        while *done < messages.len() && start.elapsed() < DEADLINE {
            while next < messages.len() && open.len() < IN_FLIGHT_MAX {
                let packet_id = u16::try_from(next % 60_000).expect("below 60,000") + 1;
                let publish = messages[next].packet(packet_id);
                open.insert(publish.pkid, next);
                if connection.send(Packet::Publish(publish)).is_err() {
                    return;
                }
                next += 1;
            }
            match connection.receive() {
                Ok(Packet::PubAck(answer)) => {
                    open.remove(&answer.pkid);
                    *done = open.values().min().copied().unwrap_or(next);
                }
                Ok(Packet::Disconnect(_)) | Err(Absent::Gone) => return,
                Ok(_) | Err(Absent::Yet) => {}
            }
        }
        self.connection = Some(connection);
    }
}

#[derive(Default)]
struct Collected {
    messages: Mutex<Vec<Message>>,
    subscribed: AtomicBool,
    stopping: AtomicBool,
    more: Condvar,
}

/// Collects everything that comes under a filter, in order.
pub struct Collector {
    collected: Arc<Collected>,
    thread: Option<std::thread::JoinHandle<()>>,
}

impl Collector {
    /// Returns once the broker has granted the subscription.
    pub fn on(port: u16, filter: &str) -> Collector {
        let collected: Arc<Collected> = Arc::default();
        let shared = Arc::clone(&collected);
        let filter = filter.to_owned();
        let name = client_id("collector");
        let thread = std::thread::spawn(move || {
            while !shared.stopping.load(Ordering::SeqCst) {
                if let Some(connection) = Connection::open(port, &name) {
                    shared.collect(connection, &filter);
                }
                std::thread::sleep(LOOK_AGAIN);
            }
        });
        let collector = Collector { collected, thread: Some(thread) };
        collector.wait_for("the subscription is granted", |_| {
            collector.collected.subscribed.load(Ordering::SeqCst).then_some(())
        });
        collector
    }

    /// Everything that came so far.
    pub fn messages(&self) -> Vec<Message> {
        self.collected.messages.lock().expect("no holder panics").clone()
    }

    /// Returns what `find` finds among the messages, as soon as it finds something.
    pub fn wait_for<T>(&self, what: &str, mut find: impl FnMut(&[Message]) -> Option<T>) -> T {
        let start = Instant::now();
        let mut messages = self.collected.messages.lock().expect("no holder panics");
        loop {
            if let Some(found) = find(&messages) {
                return found;
            }
            let left = DEADLINE.saturating_sub(start.elapsed());
            assert!(
                !left.is_zero(),
                "not within {DEADLINE:?}: {what}; {} messages",
                messages.len()
            );
            messages = self.collected.more.wait_timeout(messages, left).expect("no panic").0;
        }
    }
}

impl Drop for Collector {
    fn drop(&mut self) {
        self.collected.stopping.store(true, Ordering::SeqCst);
        if let Some(thread) = self.thread.take() {
            drop(thread.join());
        }
    }
}

impl Collected {
    fn collect(&self, mut connection: Connection, filter: &str) {
        if !connection.session_present {
            let filters = vec![Filter::new(filter, QoS::AtLeastOnce)];
            let subscribe = Subscribe { pkid: 1, filters, properties: None };
            if connection.send(Packet::Subscribe(subscribe)).is_err() {
                return;
            }
        }
        while !self.stopping.load(Ordering::SeqCst) {
            match connection.receive() {
                Ok(Packet::SubAck(_)) => {
                    self.subscribed.store(true, Ordering::SeqCst);
                    self.more.notify_all();
                }
                Ok(Packet::Publish(publish)) => {
                    let reason = PubAckReason::Success;
                    let answer = PubAck { pkid: publish.pkid, reason, properties: None };
                    self.keep(publish);
                    if answer.pkid != 0 && connection.send(Packet::PubAck(answer)).is_err() {
                        return;
                    }
                }
                Ok(Packet::Disconnect(_)) | Err(Absent::Gone) => return,
                Ok(_) | Err(Absent::Yet) => {}
            }
        }
    }

    fn keep(&self, publish: Publish) {
        let Publish { topic, payload, retain, properties, .. } = publish;
        let properties = properties.unwrap_or_default();
        let message = Message {
            topic: String::from_utf8_lossy(&topic).into_owned(),
            payload: payload.to_vec(),
            retained: retain,
            content_type: properties.content_type,
            response_topic: properties.response_topic,
            correlation: properties.correlation_data.map(|data| data.to_vec()),
        };
        self.messages.lock().expect("no holder panics").push(message);
        self.more.notify_all();
    }
}
