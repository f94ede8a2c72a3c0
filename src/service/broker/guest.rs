//! A plain client of a broker: for trying a connection, and for the two outsiders of the demo, who
//! publish readings and listen for alerts. One connection; when it ends, the guest has ended.

use crate::service::broker::inbound::turn;
use crate::service::broker::{BrokerSettings, reason};
use bytes::Bytes;
use rumqttc::v5::mqttbytes::QoS;
use rumqttc::v5::mqttbytes::v5::{Filter, Packet};
use rumqttc::v5::{AsyncClient, Event, EventLoop};
use std::time::Duration;
use tokio::sync::{mpsc, watch};
use tokio::task::JoinHandle;

/// Messages that may wait for the guest; the connection waits for it beyond that.
const MESSAGES_MAX: usize = 4096;
/// Publications that may wait for the connection; the guest waits for it beyond that.
const REQUESTS_MAX: usize = 256;
/// A connection and its subscriptions are answered in so long, or not at all.
const ANSWER_MAX: Duration = Duration::from_secs(10);

/// A message that the guest was given.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Heard {
    /// Its topic. Foreign text.
    pub topic: String,
    /// Its payload.
    pub payload: Bytes,
}

/// The answer to one subscription: the filter, and why it was refused.
pub type Answer = (String, Result<(), String>);

/// A connected guest. Dropped, its connection is cut.
#[derive(Debug)]
pub struct Guest {
    client: AsyncClient,
    messages: mpsc::Receiver<Heard>,
    acknowledged: watch::Receiver<u64>,
    published: u64,
    task: JoinHandle<()>,
}

impl Drop for Guest {
    fn drop(&mut self) {
        self.task.abort();
    }
}

impl Guest {
    /// Connects, and subscribes at QoS 1.
    ///
    /// # Arguments
    /// `link` — how to reach the broker; `role` — added to the client id; `filters` — may be empty.
    ///
    /// # Outcomes
    /// The guest and the answer to each filter, in order; or why there is no connection, in words.
    pub async fn connect(
        link: &BrokerSettings,
        role: &str,
        filters: Vec<String>,
    ) -> Result<(Guest, Vec<Answer>), String> {
        let mut options = link.options(role);
        options.set_clean_start(true);
        options.set_outgoing_inflight_upper_limit(128);
        let mut network = rumqttc::NetworkOptions::new();
        network.set_tcp_nodelay(true);
        options.set_network_options(network);
        let (client, mut events) = AsyncClient::new(options, REQUESTS_MAX);
        let answered = tokio::time::timeout(ANSWER_MAX, introduce(&client, &mut events, filters));
        let answers = answered.await.map_err(|_| {
            format!("no answer from {}:{} in {} s", link.host, link.port, ANSWER_MAX.as_secs())
        })??;
        let (told, messages) = mpsc::channel(MESSAGES_MAX);
        let (count, acknowledged) = watch::channel(0);
        let task = tokio::spawn(listen(events, told, count));
        Ok((Guest { client, messages, acknowledged, published: 0, task }, answers))
    }

    /// Publishes at QoS 1; waits while the connection has enough to do. False: the connection ended.
    pub async fn publish(&mut self, topic: String, payload: Vec<u8>) -> bool {
        self.published += 1;
        self.client.publish(topic, QoS::AtLeastOnce, false, payload).await.is_ok()
    }

    /// Waits until the broker has acknowledged all that was published. False: the connection ended.
    pub async fn settled(&mut self) -> bool {
        let published = self.published;
        self.acknowledged.wait_for(|count| *count >= published).await.is_ok()
    }

    /// The next message; None when the connection has ended.
    pub async fn next(&mut self) -> Option<Heard> {
        self.messages.recv().await
    }
}

/// From the first packet to the answers to the subscriptions.
async fn introduce(
    client: &AsyncClient,
    events: &mut EventLoop,
    filters: Vec<String>,
) -> Result<Vec<Answer>, String> {
    loop {
        match turn(events).await? {
            Event::Incoming(Packet::ConnAck(_)) if filters.is_empty() => return Ok(Vec::new()),
            Event::Incoming(Packet::ConnAck(_)) => {
                let all = filters.iter().map(|f| Filter::new(f.clone(), QoS::AtLeastOnce));
                client.try_subscribe_many(all).map_err(|error| error.to_string())?;
            }
            Event::Incoming(Packet::SubAck(answer)) => {
                let reasons = answer.return_codes.into_iter().map(reason::of_subscription);
                return Ok(filters
                    .into_iter()
                    .zip(reasons)
                    .map(|(filter, why)| (filter, why.map_or(Ok(()), Err)))
                    .collect());
            }
            _ => {}
        }
    }
}

/// Passes on what comes until the connection or the guest has ended.
async fn listen(mut events: EventLoop, told: mpsc::Sender<Heard>, count: watch::Sender<u64>) {
    while let Ok(event) = turn(&mut events).await {
        match event {
            Event::Incoming(Packet::PubAck(_)) => count.send_modify(|count| *count += 1),
            Event::Incoming(Packet::Publish(publish)) => {
                let topic = String::from_utf8_lossy(&publish.topic).into_owned();
                if told.send(Heard { topic, payload: publish.payload }).await.is_err() {
                    return;
                }
            }
            _ => {}
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::service::broker::inside::{Faults, InsideBroker};

    fn link(broker: &InsideBroker) -> BrokerSettings {
        BrokerSettings {
            host: broker.address().ip().to_string(),
            port: broker.address().port(),
            client_id: "visitor".to_owned(),
            username: None,
            password: None,
        }
    }

    #[tokio::test]
    async fn what_one_guest_publishes_another_hears() {
        let broker = InsideBroker::start("127.0.0.1:0".parse().unwrap()).unwrap();
        let link = link(&broker);
        let (mut hears, answers) =
            Guest::connect(&link, "ear", vec!["a/+".to_owned()]).await.unwrap();
        assert_eq!(answers, [("a/+".to_owned(), Ok(()))]);
        let (mut speaks, _) = Guest::connect(&link, "mouth", Vec::new()).await.unwrap();
        assert!(speaks.publish("a/b".to_owned(), b"1".to_vec()).await);
        assert!(speaks.settled().await);
        let heard = hears.next().await.unwrap();
        assert_eq!((heard.topic.as_str(), heard.payload.as_ref()), ("a/b", b"1".as_slice()));
    }

    #[tokio::test]
    async fn a_refused_subscription_and_an_absent_broker_are_told_in_words() {
        let faults = Faults { refuse_subscriptions: Some("no/#".to_owned()), ..Faults::default() };
        let broker = InsideBroker::start_with("127.0.0.1:0".parse().unwrap(), faults).unwrap();
        let link = link(&broker);
        let filters = vec!["no/entry".to_owned(), "yes".to_owned()];
        let (_guest, answers) = Guest::connect(&link, "ear", filters).await.unwrap();
        assert!(answers[0].1.as_ref().is_err_and(|why| why.contains("not")), "{answers:?}");
        assert_eq!(answers[1].1, Ok(()));
        broker.stop().await;
        let why = Guest::connect(&link, "ear", Vec::new()).await.unwrap_err();
        assert!(why.contains("refused"), "{why}");
    }
}
