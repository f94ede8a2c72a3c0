//! What the broker inside knows: sessions, retained messages, faults still to commit. Every method
//! is short, does no I/O and never waits; the callers hold the one lock around it.

use std::collections::{BTreeMap, HashMap};

use bytes::{Bytes, BytesMut};
use rumqttc::v5::mqttbytes::QoS;
use rumqttc::v5::mqttbytes::v5::{
    ConnAck, ConnAckProperties, Connect, ConnectReturnCode, Disconnect, DisconnectReasonCode,
    Filter, LastWill, Packet, PingResp, PubAck, PubAckReason, Publish, PublishProperties,
    RetainForwardRule, SubAck, Subscribe, SubscribeReasonCode, UnsubAck, UnsubAckReason,
    Unsubscribe,
};

use super::connection::{End, answer};
use super::session::{Link, Session, Subscription, is_filter, is_topic, matches};
use super::{
    CONNECTIONS_MAX, Counts, Faults, PACKET_BYTES_MAX, RETAINED_MAX, SESSIONS_MAX,
    SUBSCRIPTIONS_MAX,
};

/// A connection that has been let in.
pub(super) struct Who {
    client: String,
    number: u64,
}

/// The answer to CONNECT.
pub(super) enum Admission {
    Welcome(Who),
    Refused(ConnectReturnCode),
}

/// What the writer does after it has written what it was given.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Fill {
    /// Waits to be woken.
    Idle,
    /// Asks again.
    More,
    /// Ends the connection.
    Cut,
}

/// All state of one broker.
pub(super) struct State {
    pub counts: Counts,
    sessions: HashMap<String, Session>,
    retained: BTreeMap<String, Publish>,
    faults: Faults,
}

impl State {
    pub fn new(faults: Faults) -> State {
        State {
            counts: Counts::default(),
            sessions: HashMap::new(),
            retained: BTreeMap::new(),
            faults,
        }
    }

    /// Counts a new connection in, if there is room.
    pub fn admit(&mut self) -> bool {
        let room = self.counts.connections < CONNECTIONS_MAX;
        self.counts.connections += usize::from(room);
        self.counts.refused += u64::from(!room);
        room
    }

    /// Opens or resumes the session of a client and puts the CONNACK in line.
    pub fn connect(&mut self, connect: Connect, mut link: Link) -> Admission {
        if link.receive_maximum == 0 || link.packet_bytes_max == 0 {
            return self.refuse(ConnectReturnCode::ProtocolError);
        }
        if let Some(will) = &link.will {
            if will.qos == QoS::ExactlyOnce {
                return self.refuse(ConnectReturnCode::QoSNotSupported);
            }
            if !std::str::from_utf8(&will.topic).is_ok_and(is_topic) {
                return self.refuse(ConnectReturnCode::TopicNameInvalid);
            }
        }
        let assigned = connect.client_id.is_empty().then(|| format!("inside-{}", link.number));
        let client = assigned.clone().unwrap_or(connect.client_id);
        if self.sessions.len() >= SESSIONS_MAX && !self.sessions.contains_key(&client) {
            return self.refuse(ConnectReturnCode::QuotaExceeded);
        }
        self.take_over(&client);
        let known = self.sessions.contains_key(&client);
        let forget = known && !connect.clean_start && self.faults.forget_sessions > 0;
        self.faults.forget_sessions -= u32::from(forget);
        if known && (connect.clean_start || forget) {
            self.end_session(&client);
        }
        let session_present = known && !connect.clean_start && !forget;
        let properties = connect.properties.as_ref();
        let who = Who { client: client.clone(), number: link.number };
        answer(&mut link.control, welcome(session_present, assigned));
        let session = self.sessions.entry(client).or_default();
        session.expiry_s = properties.and_then(|p| p.session_expiry_interval).unwrap_or(0);
        session.attach(link);
        Admission::Welcome(who)
    }

    fn refuse(&mut self, code: ConnectReturnCode) -> Admission {
        self.counts.refused += 1;
        Admission::Refused(code)
    }

    /// Ends the connection a session has, if any; its will is sent.
    fn take_over(&mut self, client: &str) {
        let Some(session) = self.sessions.get_mut(client) else { return };
        let Some(mut link) = session.link.take() else { return };
        let will = link.will.take();
        // An error: the old connection is ending by itself.
        let _ = link.kick.send(DisconnectReasonCode::SessionTakenOver);
        match will.map(|will| (delay_s(&will), will)) {
            Some((0, will)) => self.send_will(client, will),
            // Sent if the session ends, not if it is resumed.
            Some((delay, will)) => session.late_will = Some((will, delay)),
            None => {}
        }
    }

    /// Takes the connection off its session; the session stays if the client asked for it.
    pub fn disconnect(&mut self, who: &Who, end: End) {
        let Some(session) = self.session(who) else { return };
        let will = session.link.take().and_then(|link| link.will);
        let mut with_will = true;
        if let End::Left { with_will: wanted, expiry_s } = end {
            with_will = wanted;
            // A session that was to end with its connection cannot be prolonged (3.14.2.2.2).
            let changed = expiry_s.filter(|_| session.expiry_s != 0);
            session.expiry_s = changed.unwrap_or(session.expiry_s);
        }
        let session_ends = session.expiry_s == 0;
        if let Some(will) = will.filter(|_| with_will) {
            match delay_s(&will) {
                0 => self.send_will(&who.client, will),
                delay => session.late_will = Some((will, delay)),
            }
        }
        if session_ends {
            self.end_session(&who.client);
        }
    }

    /// Removes a session; a will that still waits for its delay is sent now (3.1.3.2.2).
    fn end_session(&mut self, client: &str) {
        let gone = self.sessions.remove(client);
        if let Some((will, _)) = gone.and_then(|session| session.late_will) {
            self.send_will(client, will);
        }
    }

    /// Lets one second pass for sessions without a connection.
    pub fn tick(&mut self) {
        let mut wills = Vec::new();
        let mut ended = Vec::new();
        for (client, session) in self.sessions.iter_mut().filter(|(_, s)| s.link.is_none()) {
            session.idle_s = session.idle_s.saturating_add(1);
            if session.expiry_s != u32::MAX && session.idle_s >= session.expiry_s {
                ended.push(client.clone());
            } else if let Some((will, left)) = session.late_will.take() {
                match left.saturating_sub(1) {
                    0 => wills.push((client.clone(), will)),
                    left => session.late_will = Some((will, left)),
                }
            }
        }
        for (client, will) in wills {
            self.send_will(&client, will);
        }
        for client in ended {
            self.end_session(&client);
        }
    }

    fn session(&mut self, who: &Who) -> Option<&mut Session> {
        let session = self.sessions.get_mut(&who.client)?;
        let own = session.link.as_ref().is_some_and(|link| link.number == who.number);
        own.then_some(session)
    }

    /// Returns how many bytes of answers the client has not taken yet.
    pub fn control_bytes(&mut self, who: &Who) -> usize {
        let link = self.session(who).and_then(|session| session.link.as_ref());
        link.map_or(0, |link| link.control.len())
    }

    /// Appends what may be written to a client now.
    pub fn fill(&mut self, who: &Who, output: &mut BytesMut) -> Fill {
        let mut counts = self.counts;
        let mut cut_after = self.faults.cut_after_deliveries;
        let Some(session) = self.session(who) else { return Fill::Idle };
        session.fill(output, &mut cut_after, &mut counts);
        let cut = session.link.as_ref().is_some_and(|link| link.cut);
        self.counts = counts;
        self.faults.cut_after_deliveries = cut_after;
        match cut {
            true => Fill::Cut,
            false if output.is_empty() => Fill::Idle,
            false => Fill::More,
        }
    }

    /// Works through packets of one client in order; an error ends its connection.
    pub fn packets(&mut self, who: &Who, packets: impl Iterator<Item = Packet>) -> Result<(), End> {
        for packet in packets {
            if self.session(who).is_none() {
                return Ok(()); // Taken over; the kick is on its way.
            }
            match packet {
                Packet::Publish(publish) => self.publish(who, publish)?,
                Packet::PubAck(ack) => {
                    self.session(who).into_iter().for_each(|s| s.acknowledge(ack.pkid));
                }
                Packet::Subscribe(subscribe) => self.subscribe(who, subscribe)?,
                Packet::Unsubscribe(unsubscribe) => self.unsubscribe(who, unsubscribe),
                Packet::PingReq(_) => self.reply(who, Packet::PingResp(PingResp)),
                Packet::Disconnect(disconnect) => return Err(left(&disconnect)),
                _ => return Err(End::Ended(DisconnectReasonCode::ProtocolError)),
            }
        }
        Ok(())
    }

    fn reply(&mut self, who: &Who, packet: Packet) {
        if let Some(link) = self.session(who).and_then(|session| session.link.as_mut()) {
            answer(&mut link.control, packet);
            link.wake.notify_one();
        }
    }

    fn publish(&mut self, who: &Who, mut publish: Publish) -> Result<(), End> {
        let ended = |reason| Err(End::Ended(reason));
        if publish.qos == QoS::ExactlyOnce {
            return ended(DisconnectReasonCode::QoSNotSupported);
        }
        if publish.properties.as_ref().is_some_and(|p| p.topic_alias.is_some()) {
            return ended(DisconnectReasonCode::TopicAliasInvalid);
        }
        let Ok(topic) = String::from_utf8(publish.topic.to_vec()) else {
            return ended(DisconnectReasonCode::TopicNameInvalid);
        };
        if !is_topic(&topic) {
            return ended(DisconnectReasonCode::TopicNameInvalid);
        }
        // Both are slices of the read buffer, which would stay as long as the smallest of them.
        publish.topic = Bytes::copy_from_slice(&publish.topic);
        publish.payload = Bytes::copy_from_slice(&publish.payload);
        let (qos, id) = (publish.qos, publish.pkid);
        self.accept(&who.client, &topic, publish);
        if qos == QoS::AtLeastOnce {
            if self.faults.withhold_acknowledgements > 0 {
                self.faults.withhold_acknowledgements -= 1;
            } else {
                let reason = PubAckReason::Success;
                self.reply(who, Packet::PubAck(PubAck { pkid: id, reason, properties: None }));
            }
        }
        Ok(())
    }

    /// Retains a message if it asks for it, and passes it on.
    fn accept(&mut self, from: &str, topic: &str, mut publish: Publish) {
        self.counts.received += 1;
        publish.dup = false;
        publish.pkid = 0;
        if publish.retain {
            if publish.payload.is_empty() {
                self.retained.remove(topic);
            } else if self.retained.len() < RETAINED_MAX || self.retained.contains_key(topic) {
                self.retained.insert(topic.to_owned(), publish.clone());
            } else {
                self.counts.dropped += 1;
            }
        }
        for (client, session) in &mut self.sessions {
            let wanting = session.subscriptions.iter().filter(|subscription| {
                let own = subscription.filter.nolocal && client == from;
                !own && matches(topic, &subscription.filter.path)
            });
            if let Some(copy) = copy_for(&publish, wanting) {
                session.push(copy, &mut self.counts);
            }
        }
    }

    fn send_will(&mut self, client: &str, will: LastWill) {
        let topic = String::from_utf8_lossy(&will.topic).into_owned();
        let properties = will.properties.map(|p| PublishProperties {
            payload_format_indicator: p.payload_format_indicator,
            message_expiry_interval: p.message_expiry_interval,
            response_topic: p.response_topic,
            correlation_data: p.correlation_data,
            user_properties: p.user_properties,
            content_type: p.content_type,
            ..PublishProperties::default()
        });
        let publish = Publish {
            qos: will.qos,
            retain: will.retain,
            topic: will.topic,
            payload: will.message,
            properties,
            ..Publish::default()
        };
        self.accept(client, &topic, publish);
    }

    fn subscribe(&mut self, who: &Who, subscribe: Subscribe) -> Result<(), End> {
        let id = subscribe.properties.as_ref().and_then(|properties| properties.id);
        if subscribe.filters.is_empty() || id == Some(0) {
            return Err(End::Ended(DisconnectReasonCode::ProtocolError));
        }
        let mut return_codes = Vec::with_capacity(subscribe.filters.len());
        let mut retained = Vec::new();
        for filter in subscribe.filters {
            let code = self.add_subscription(who, filter, id, &mut retained);
            return_codes.push(code);
        }
        let ack = SubAck { pkid: subscribe.pkid, return_codes, properties: None };
        self.reply(who, Packet::SubAck(ack));
        let mut counts = self.counts;
        if let Some(session) = self.session(who) {
            retained.into_iter().for_each(|publish| session.push(publish, &mut counts));
        }
        self.counts = counts;
        Ok(())
    }

    /// Adds or replaces one subscription; the retained messages it asks for are appended.
    fn add_subscription(
        &mut self,
        who: &Who,
        mut filter: Filter,
        id: Option<usize>,
        retained: &mut Vec<Publish>,
    ) -> SubscribeReasonCode {
        if filter.path.starts_with("$share/") {
            return SubscribeReasonCode::SharedSubscriptionsNotSupported;
        }
        if !is_filter(&filter.path) {
            return SubscribeReasonCode::TopicFilterInvalid;
        }
        let refused = self.faults.refuse_subscriptions.as_deref();
        if refused.is_some_and(|refused| matches(&filter.path, refused)) {
            return SubscribeReasonCode::NotAuthorized;
        }
        if filter.qos == QoS::ExactlyOnce {
            filter.qos = QoS::AtLeastOnce; // granted less than asked for, said in the SUBACK
        }
        let Some(session) = self.session(who) else { return SubscribeReasonCode::Unspecified };
        let old = session.subscriptions.iter().position(|s| s.filter.path == filter.path);
        if old.is_none() && session.subscriptions.len() >= SUBSCRIPTIONS_MAX {
            return SubscribeReasonCode::QuotaExceeded;
        }
        let subscription = Subscription { filter: filter.clone(), id };
        match old {
            Some(at) => session.subscriptions[at] = subscription,
            None => session.subscriptions.push(subscription),
        }
        let send = match filter.retain_forward_rule {
            RetainForwardRule::OnEverySubscribe => true,
            RetainForwardRule::OnNewSubscribe => old.is_none(),
            RetainForwardRule::Never => false,
        };
        if send {
            let subscription = Subscription { filter: filter.clone(), id };
            let wanted = self.retained.iter().filter(|(topic, _)| matches(topic, &filter.path));
            retained.extend(wanted.filter_map(|(_, publish)| {
                let copy = copy_for(publish, std::iter::once(&subscription));
                copy.map(|copy| Publish { retain: true, ..copy })
            }));
        }
        SubscribeReasonCode::Success(filter.qos)
    }

    fn unsubscribe(&mut self, who: &Who, unsubscribe: Unsubscribe) {
        let Some(session) = self.session(who) else { return };
        let mut reasons = Vec::with_capacity(unsubscribe.filters.len());
        for path in &unsubscribe.filters {
            let before = session.subscriptions.len();
            session.subscriptions.retain(|subscription| subscription.filter.path != *path);
            reasons.push(match before - session.subscriptions.len() {
                0 => UnsubAckReason::NoSubscriptionExisted,
                _ => UnsubAckReason::Success,
            });
        }
        let ack = UnsubAck { pkid: unsubscribe.pkid, reasons, properties: None };
        self.reply(who, Packet::UnsubAck(ack));
    }
}

/// One copy for all matching subscriptions of a session: the best QoS of them, all identifiers.
fn copy_for<'a>(
    publish: &Publish,
    wanting: impl Iterator<Item = &'a Subscription>,
) -> Option<Publish> {
    let (mut copy, mut qos, mut keep_retain) = (None, QoS::AtMostOnce, false);
    for Subscription { filter, id } in wanting {
        let copy = copy.get_or_insert_with(|| publish.clone());
        keep_retain |= filter.preserve_retain;
        if filter.qos == QoS::AtLeastOnce {
            qos = publish.qos;
        }
        if let Some(id) = id {
            let properties = copy.properties.get_or_insert_default();
            properties.subscription_identifiers.push(*id);
        }
    }
    copy.map(|copy| Publish { qos, retain: publish.retain && keep_retain, ..copy })
}

fn delay_s(will: &LastWill) -> u32 {
    will.properties.as_ref().and_then(|properties| properties.delay_interval).unwrap_or(0)
}

fn left(disconnect: &Disconnect) -> End {
    End::Left {
        with_will: disconnect.reason_code != DisconnectReasonCode::NormalDisconnection,
        expiry_s: disconnect.properties.as_ref().and_then(|p| p.session_expiry_interval),
    }
}

fn welcome(session_present: bool, assigned_client_identifier: Option<String>) -> Packet {
    let properties = ConnAckProperties {
        session_expiry_interval: None,
        receive_max: None,
        max_qos: Some(1),
        retain_available: None,
        max_packet_size: Some(PACKET_BYTES_MAX),
        assigned_client_identifier,
        topic_alias_max: None,
        reason_string: None,
        user_properties: Vec::new(),
        wildcard_subscription_available: None,
        subscription_identifiers_available: None,
        shared_subscription_available: Some(0),
        server_keep_alive: None,
        response_information: None,
        server_reference: None,
        authentication_method: None,
        authentication_data: None,
    };
    let code = ConnectReturnCode::Success;
    Packet::ConnAck(ConnAck { session_present, code, properties: Some(properties) })
}
