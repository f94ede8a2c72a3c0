//! The broker inside against real clients over real sockets. Every wait is for an event, with a
//! deadline; where the absence of a message matters, an answer that had to come after it proves it.

use std::net::SocketAddr;
use std::time::Duration;

use bytes::Bytes;
use rumqttc::v5::mqttbytes::QoS;
use rumqttc::v5::mqttbytes::v5::{
    ConnAck, Connect, ConnectProperties, DisconnectReasonCode, Filter, LastWill, Packet, PubAck,
    PubAckReason, Publish, RetainForwardRule, Subscribe, SubscribeReasonCode,
};
use rumqttc::v5::{AsyncClient, Event, EventLoop, MqttOptions};
use tokio::io::{AsyncReadExt, AsyncWriteExt};
use tokio::net::TcpStream;

use super::{CONNECTIONS_MAX, Faults, InsideBroker};

const DEADLINE: Duration = Duration::from_secs(20);

fn broker(faults: Faults) -> InsideBroker {
    InsideBroker::start_with("127.0.0.1:0".parse().unwrap(), faults).unwrap()
}

async fn in_time<T>(work: impl Future<Output = T>) -> T {
    tokio::time::timeout(DEADLINE, work).await.expect("within the deadline")
}

/// A client that speaks packet by packet, so that a test decides when to acknowledge.
struct Peer {
    stream: TcpStream,
    input: bytes::BytesMut,
    session_present: bool,
}

fn hello(name: &str) -> Connect {
    let mut properties = ConnectProperties::new();
    properties.session_expiry_interval = Some(600);
    Connect {
        keep_alive: 60,
        client_id: name.into(),
        clean_start: false,
        properties: Some(properties),
    }
}

impl Peer {
    async fn open(address: SocketAddr, connect: Connect, will: Option<LastWill>) -> Peer {
        let stream = in_time(TcpStream::connect(address)).await.unwrap();
        let mut peer = Peer { stream, input: bytes::BytesMut::new(), session_present: false };
        peer.send(Packet::Connect(connect, will, None)).await;
        let Some(Packet::ConnAck(ConnAck { session_present, .. })) = peer.next().await else {
            panic!("no CONNACK")
        };
        peer.session_present = session_present;
        peer
    }

    async fn send(&mut self, packet: Packet) {
        let mut output = bytes::BytesMut::new();
        packet.write(&mut output, None).unwrap();
        in_time(self.stream.write_all(&output)).await.unwrap();
    }

    /// The next packet; None: the connection is closed.
    async fn next(&mut self) -> Option<Packet> {
        loop {
            if let Ok(packet) = Packet::read(&mut self.input, None) {
                return Some(packet);
            }
            if !matches!(in_time(self.stream.read_buf(&mut self.input)).await, Ok(1..)) {
                return None;
            }
        }
    }

    async fn message(&mut self) -> Publish {
        match self.next().await {
            Some(Packet::Publish(publish)) => publish,
            other => panic!("a message was due, not {other:?}"),
        }
    }

    async fn subscribe(&mut self, filter: Filter) -> SubscribeReasonCode {
        self.send(Packet::Subscribe(Subscribe {
            pkid: 1,
            filters: vec![filter],
            properties: None,
        }))
        .await;
        match self.next().await {
            Some(Packet::SubAck(ack)) => ack.return_codes[0],
            other => panic!("SUBACK was due, not {other:?}"),
        }
    }

    /// Publishes at QoS 1 and waits for the acknowledgement.
    async fn publish(&mut self, topic: &str, payload: &str, retain: bool) {
        let mut publish = Publish::new(topic, QoS::AtLeastOnce, payload.to_owned(), None);
        (publish.pkid, publish.retain) = (7, retain);
        self.send(Packet::Publish(publish)).await;
        assert!(matches!(self.next().await, Some(Packet::PubAck(ack)) if ack.pkid == 7));
    }

    async fn acknowledge(&mut self, pkid: u16) {
        let reason = PubAckReason::Success;
        self.send(Packet::PubAck(PubAck { pkid, reason, properties: None })).await;
    }

    /// A round trip: whatever the broker wrote before its answer would have come first.
    async fn nothing_waits(&mut self) {
        for _ in 0..2 {
            self.send(Packet::PingReq(rumqttc::v5::mqttbytes::v5::PingReq)).await;
            let answer = self.next().await;
            assert!(matches!(answer, Some(Packet::PingResp(_))), "{answer:?}");
        }
    }
}

fn filter(path: &str) -> Filter {
    Filter::new(path, QoS::AtLeastOnce)
}

fn client(address: SocketAddr, name: &str) -> (AsyncClient, EventLoop) {
    let mut options = MqttOptions::new(name, address.ip().to_string(), address.port());
    options.set_keep_alive(Duration::from_secs(5));
    options.set_outgoing_inflight_upper_limit(100);
    AsyncClient::new(options, 100)
}

#[tokio::test]
async fn thousands_of_messages_pass_in_order_between_clients() {
    const MESSAGES: usize = 10_000;
    let broker = broker(Faults::default());
    let (subscriber, mut inbound) = client(broker.address(), "in");
    subscriber.subscribe("plant/+/reading", QoS::AtLeastOnce).await.unwrap();
    while !matches!(in_time(inbound.poll()).await.unwrap(), Event::Incoming(Packet::SubAck(_))) {}
    let (publisher, mut outbound) = client(broker.address(), "out");
    let pump = tokio::spawn(async move { while outbound.poll().await.is_ok() {} });
    let source = publisher.clone();
    tokio::spawn(async move {
        for i in 0..MESSAGES {
            let payload = i.to_string();
            source.publish("plant/a/reading", QoS::AtLeastOnce, false, payload).await.unwrap();
        }
    });
    for i in 0..MESSAGES {
        let payload: Bytes = loop {
            if let Event::Incoming(Packet::Publish(p)) = in_time(inbound.poll()).await.unwrap() {
                break p.payload;
            }
        };
        assert_eq!(payload, i.to_string());
    }
    assert_eq!((broker.counts().received, broker.counts().dropped), (MESSAGES as u64, 0));
    pump.abort();
}

#[tokio::test]
async fn retained_messages_follow_their_handling_and_clear() {
    let broker = broker(Faults::default());
    let mut source = Peer::open(broker.address(), hello("source"), None).await;
    source.publish("state/a", "online", true).await;
    source.publish("state/b", "gone", true).await;
    source.publish("state/b", "", true).await;
    let mut reader = Peer::open(broker.address(), hello("reader"), None).await;
    reader.subscribe(filter("state/#")).await;
    let message = reader.message().await;
    assert!(message.retain && message.topic == "state/a" && message.payload == "online");
    reader.acknowledge(message.pkid).await;
    reader.nothing_waits().await;
    for rule in [RetainForwardRule::OnNewSubscribe, RetainForwardRule::Never] {
        reader.subscribe(Filter { retain_forward_rule: rule, ..filter("state/#") }).await;
        reader.nothing_waits().await;
    }
    source.publish("state/a", "live", true).await;
    assert!(!reader.message().await.retain, "a live message is not marked as retained");
}

#[tokio::test]
async fn will_is_sent_after_a_loss_and_not_after_a_farewell() {
    let broker = broker(Faults::default());
    let mut reader = Peer::open(broker.address(), hello("reader"), None).await;
    reader.subscribe(filter("will/#")).await;
    let will = |topic: &str| LastWill::new(topic, "offline", QoS::AtLeastOnce, true, None);
    let mut polite = Peer::open(broker.address(), hello("polite"), Some(will("will/p"))).await;
    polite.stream.write_all(&[0xE0, 0]).await.unwrap();
    assert!(polite.next().await.is_none());
    let lost = Peer::open(broker.address(), hello("lost"), Some(will("will/l"))).await;
    drop(lost);
    let message = reader.message().await;
    assert_eq!((message.topic, message.payload), ("will/l".into(), "offline".into()));
    reader.nothing_waits().await;
}

#[tokio::test]
async fn unacknowledged_messages_come_again_with_dup_ids_and_order() {
    let broker = broker(Faults { cut_after_deliveries: Some(4), ..Faults::default() });
    let mut source = Peer::open(broker.address(), hello("source"), None).await;
    let mut reader = Peer::open(broker.address(), hello("reader"), None).await;
    assert!(!reader.session_present);
    reader.subscribe(filter("a/#")).await;
    for i in 0..6 {
        source.publish("a/b", &i.to_string(), false).await;
    }
    let mut first = Vec::new();
    while let Some(Packet::Publish(publish)) = reader.next().await {
        assert!(!publish.dup);
        first.push((publish.pkid, publish.payload));
    }
    assert_eq!(first.len(), 4, "the hook cuts after the fourth");
    let mut again = Peer::open(broker.address(), hello("reader"), None).await;
    assert!(again.session_present);
    for (pkid, payload) in first {
        let publish = again.message().await;
        assert_eq!((publish.dup, publish.pkid, publish.payload), (true, pkid, payload));
        again.acknowledge(pkid).await;
    }
    for i in 4..6 {
        let publish = again.message().await;
        assert_eq!((publish.dup, publish.payload), (false, i.to_string().into()));
    }
    assert_eq!(broker.counts().redelivered, 4);
}

#[tokio::test]
async fn receive_maximum_bounds_what_is_unacknowledged() {
    let broker = broker(Faults::default());
    let mut connect = hello("reader");
    connect.properties.as_mut().unwrap().receive_maximum = Some(5);
    let mut reader = Peer::open(broker.address(), connect, None).await;
    reader.subscribe(filter("#")).await;
    let mut source = Peer::open(broker.address(), hello("source"), None).await;
    for i in 0..12 {
        source.publish("a", &i.to_string(), false).await;
    }
    let mut open = Vec::new();
    for _ in 0..5 {
        open.push(reader.message().await.pkid);
    }
    reader.nothing_waits().await;
    for i in 5..12 {
        reader.acknowledge(open.remove(0)).await;
        let message = reader.message().await;
        assert_eq!(message.payload, i.to_string());
        open.push(message.pkid);
        reader.nothing_waits().await;
    }
    assert_eq!(broker.counts().unacked_max, 5);
}

#[tokio::test]
async fn packets_larger_than_a_client_takes_are_kept_from_it() {
    let broker = broker(Faults::default());
    let mut connect = hello("reader");
    connect.properties.as_mut().unwrap().max_packet_size = Some(100);
    let mut reader = Peer::open(broker.address(), connect, None).await;
    reader.subscribe(filter("#")).await;
    let mut source = Peer::open(broker.address(), hello("source"), None).await;
    source.publish("a", &"x".repeat(101), false).await;
    source.publish("a", "small", false).await;
    assert_eq!(reader.message().await.payload, "small");
    assert_eq!(broker.counts().too_large, 1);
}

#[tokio::test]
async fn second_connection_takes_the_session_over() {
    let broker = broker(Faults::default());
    let mut old = Peer::open(broker.address(), hello("same"), None).await;
    let new = Peer::open(broker.address(), hello("same"), None).await;
    assert!(new.session_present);
    match old.next().await {
        Some(Packet::Disconnect(end)) => {
            assert_eq!(end.reason_code, DisconnectReasonCode::SessionTakenOver);
        }
        other => panic!("DISCONNECT was due, not {other:?}"),
    }
    assert!(old.next().await.is_none());
}

#[tokio::test]
async fn stopped_broker_frees_its_port_and_forgets() {
    let first = broker(Faults::default());
    let address = first.address();
    let mut peer = Peer::open(address, hello("peer"), None).await;
    let watching = tokio::spawn(async move {
        match peer.next().await {
            Some(Packet::Disconnect(end)) => end.reason_code,
            other => panic!("DISCONNECT was due, not {other:?}"),
        }
    });
    in_time(first.stop()).await;
    assert_eq!(in_time(watching).await.unwrap(), DisconnectReasonCode::ServerShuttingDown);
    let second = InsideBroker::start(address).unwrap();
    let peer = Peer::open(second.address(), hello("peer"), None).await;
    assert!(!peer.session_present);
}

#[tokio::test]
async fn session_without_expiry_ends_with_its_connection() {
    let broker = broker(Faults::default());
    let connect = Connect { properties: None, ..hello("brief") };
    let mut peer = Peer::open(broker.address(), connect, None).await;
    peer.stream.write_all(&[0xE0, 0]).await.unwrap();
    assert!(peer.next().await.is_none());
    let mut peer = Peer::open(broker.address(), hello("brief"), None).await;
    assert!(!peer.session_present);
    peer.stream.write_all(&[0xE0, 0]).await.unwrap();
    assert!(peer.next().await.is_none());
    assert!(Peer::open(broker.address(), hello("brief"), None).await.session_present);
    let clean = Connect { clean_start: true, ..hello("brief") };
    assert!(!Peer::open(broker.address(), clean, None).await.session_present);
}

#[tokio::test]
async fn faults_are_committed_as_ordered() {
    let broker = broker(Faults {
        withhold_acknowledgements: 1,
        forget_sessions: 1,
        refuse_subscriptions: Some("secret/#".into()),
        ..Faults::default()
    });
    let mut peer = Peer::open(broker.address(), hello("peer"), None).await;
    let code = peer.subscribe(filter("secret/a")).await;
    assert_eq!(code, SubscribeReasonCode::NotAuthorized);
    let code = peer.subscribe(Filter::new("open/a", QoS::ExactlyOnce)).await;
    assert_eq!(code, SubscribeReasonCode::Success(QoS::AtLeastOnce));
    let code = peer.subscribe(filter("$share/group/a")).await;
    assert_eq!(code, SubscribeReasonCode::SharedSubscriptionsNotSupported);
    let mut publish = Publish::new("open/a", QoS::AtLeastOnce, "x", None);
    publish.pkid = 3;
    peer.send(Packet::Publish(publish)).await;
    assert_eq!(peer.message().await.payload, "x", "taken and passed on, not acknowledged");
    peer.nothing_waits().await;
    let peer = Peer::open(broker.address(), hello("peer"), None).await;
    assert!(!peer.session_present, "forgotten");
    assert!(Peer::open(broker.address(), hello("peer"), None).await.session_present);
}

#[tokio::test]
async fn qos2_is_refused_with_its_reason() {
    let broker = broker(Faults::default());
    let mut peer = Peer::open(broker.address(), hello("peer"), None).await;
    let mut publish = Publish::new("a", QoS::ExactlyOnce, "x", None);
    publish.pkid = 1;
    peer.send(Packet::Publish(publish)).await;
    match peer.next().await {
        Some(Packet::Disconnect(end)) => {
            assert_eq!(end.reason_code, DisconnectReasonCode::QoSNotSupported);
        }
        other => panic!("DISCONNECT was due, not {other:?}"),
    }
}

#[tokio::test]
async fn client_that_does_not_read_delays_no_other() {
    let broker = broker(Faults::default());
    let mut stuck = Peer::open(broker.address(), hello("stuck"), None).await;
    stuck.subscribe(Filter::new("#", QoS::AtMostOnce)).await;
    let mut reader = Peer::open(broker.address(), hello("reader"), None).await;
    reader.subscribe(Filter::new("#", QoS::AtMostOnce)).await;
    let mut source = Peer::open(broker.address(), hello("source"), None).await;
    // More than the sockets' buffers and the queue hold together.
    let payload = "x".repeat(512 << 10);
    for _ in 0..200 {
        source.publish("a", &payload, false).await;
        assert_eq!(reader.message().await.payload.len(), payload.len());
    }
    assert!(broker.counts().dropped > 0, "the queue of the stuck client is bounded");
    // It can still be taken over while its writer is stuck in the middle of a packet.
    assert!(Peer::open(broker.address(), hello("stuck"), None).await.session_present);
}

#[tokio::test]
async fn silent_client_is_ended_after_its_keep_alive() {
    let broker = broker(Faults::default());
    let connect = Connect { keep_alive: 1, ..hello("silent") };
    let mut peer = Peer::open(broker.address(), connect, None).await;
    match peer.next().await {
        Some(Packet::Disconnect(end)) => {
            assert_eq!(end.reason_code, DisconnectReasonCode::KeepAliveTimeout);
        }
        other => panic!("DISCONNECT was due, not {other:?}"),
    }
}

#[tokio::test]
async fn one_connection_too_many_is_closed() {
    let broker = broker(Faults::default());
    let mut peers = Vec::new();
    for i in 0..CONNECTIONS_MAX {
        peers.push(Peer::open(broker.address(), hello(&format!("peer-{i}")), None).await);
    }
    let mut extra = TcpStream::connect(broker.address()).await.unwrap();
    assert!(matches!(in_time(extra.read(&mut [0])).await, Ok(0) | Err(_)));
    assert_eq!((broker.counts().connections, broker.counts().refused), (CONNECTIONS_MAX, 1));
}
