//! What the broker keeps for one client: its subscriptions, the messages that wait for it, and those
//! it has not acknowledged yet. A session outlives its connection for as long as the client asked;
//! the unacknowledged messages then go out again in their old order, with their old packet
//! identifiers and the DUP flag (MQTT 5.0, OASIS Standard 2019, sections 4.4 and 4.6).

use std::collections::{HashSet, VecDeque};
use std::sync::Arc;

use bytes::BytesMut;
use rumqttc::v5::mqttbytes::QoS;
use rumqttc::v5::mqttbytes::v5::{DisconnectReasonCode, Filter, LastWill, Publish};
use tokio::sync::{Notify, oneshot};

use super::{Counts, INFLIGHT_MAX, OUTPUT_BATCH_BYTES, QUEUE_BYTES_MAX, QUEUE_MESSAGES_MAX};

/// One subscription of a session, with the identifier the client gave it.
pub(super) struct Subscription {
    pub filter: Filter,
    pub id: Option<usize>,
}

/// The live connection of a session.
pub(super) struct Link {
    /// Which connection this is; one that was taken over finds another number here.
    pub number: u64,
    /// Answers (acknowledgements, pings) that wait to be written.
    pub control: BytesMut,
    /// Wakes the writer: there is something to write.
    pub wake: Arc<Notify>,
    /// Wakes the reader: the answers have been taken.
    pub drained: Arc<Notify>,
    /// Ends the connection from outside.
    pub kick: oneshot::Sender<DisconnectReasonCode>,
    /// Most unacknowledged messages the client takes.
    pub receive_maximum: usize,
    /// Largest packet the client takes; bytes.
    pub packet_bytes_max: usize,
    pub will: Option<LastWill>,
    /// A fault hook asked for an end after what has been written so far.
    pub cut: bool,
}

/// State of one client identifier.
#[derive(Default)]
pub(super) struct Session {
    pub subscriptions: Vec<Subscription>,
    pub link: Option<Link>,
    /// How long the session outlives its connection; s, `u32::MAX`: for ever.
    pub expiry_s: u32,
    /// How long it has had no connection; s.
    pub idle_s: u32,
    /// A will that waits for its delay; with the remaining seconds.
    pub late_will: Option<(LastWill, u32)>,
    queue: VecDeque<Publish>,
    queue_bytes: usize,
    queued_qos0: usize,
    /// Sent, not acknowledged; in the order of the first sending.
    unacked: VecDeque<Publish>,
    ids_in_use: HashSet<u16>,
    last_id: u16,
    /// How many of `unacked`, from the front, were sent on the present connection.
    sent: usize,
}

impl Session {
    /// Gives the session a connection; what is unacknowledged is to be sent again.
    pub fn attach(&mut self, link: Link) {
        self.sent = 0;
        self.idle_s = 0;
        self.late_will = None;
        // A permit in advance: there may be something to send again.
        link.wake.notify_one();
        self.link = Some(link);
    }

    /// Puts a message in line. When the line is full, a QoS 1 message pushes out the oldest waiting
    /// QoS 0 message; failing that the new message is dropped. Each loss is counted.
    pub fn push(&mut self, publish: Publish, counts: &mut Counts) {
        if self.link.is_none() && publish.qos == QoS::AtMostOnce {
            return; // QoS 0 is for those who are there.
        }
        while self.is_full(&publish) {
            counts.dropped += 1;
            if publish.qos == QoS::AtMostOnce || self.queued_qos0 == 0 {
                return;
            }
            self.drop_oldest_qos0();
        }
        self.queue_bytes += weight(&publish);
        self.queued_qos0 += usize::from(publish.qos == QoS::AtMostOnce);
        self.queue.push_back(publish);
        if let Some(link) = &self.link {
            link.wake.notify_one();
        }
    }

    fn is_full(&self, next: &Publish) -> bool {
        self.queue.len() >= QUEUE_MESSAGES_MAX || self.queue_bytes + weight(next) > QUEUE_BYTES_MAX
    }

    fn drop_oldest_qos0(&mut self) {
        let at = self.queue.iter().position(|waiting| waiting.qos == QoS::AtMostOnce);
        let gone = at.and_then(|at| self.queue.remove(at)).expect("queued_qos0 counts one");
        self.queued_qos0 -= 1;
        self.queue_bytes -= weight(&gone);
    }

    /// Removes an acknowledged message; an identifier that is not open here is ignored.
    pub fn acknowledge(&mut self, id: u16) {
        let open = self.unacked.iter().take(self.sent).position(|publish| publish.pkid == id);
        if let Some(at) = open {
            self.unacked.remove(at);
            self.ids_in_use.remove(&id);
            self.sent -= 1;
            if let Some(link) = &self.link {
                link.wake.notify_one();
            }
        }
    }

    /// Takes what may be written now: answers first, then messages sent again, then new ones, as far
    /// as the client's window and one batch allow. `cut_after` counts down to a planned cut.
    pub fn fill(&mut self, out: &mut BytesMut, cut_after: &mut Option<u64>, counts: &mut Counts) {
        let Some(mut link) = self.link.take() else { return };
        if !link.control.is_empty() {
            out.extend_from_slice(&link.control);
            link.control.clear();
            link.drained.notify_one();
        }
        let window = link.receive_maximum.min(INFLIGHT_MAX);
        while out.len() < OUTPUT_BATCH_BYTES && !link.cut {
            let Some(publish) = self.next(window) else { break };
            let length = out.len();
            if publish.size() > link.packet_bytes_max || publish.write(out).is_err() {
                out.truncate(length);
                counts.too_large += 1;
                self.forget(&publish);
                continue;
            }
            counts.delivered += 1;
            counts.redelivered += u64::from(publish.dup);
            if publish.qos == QoS::AtLeastOnce {
                self.note_sent(publish);
                counts.unacked_max = counts.unacked_max.max(self.sent);
            }
            if let Some(left) = cut_after {
                *left = left.saturating_sub(1);
                link.cut = *left == 0;
            }
        }
        if link.cut {
            *cut_after = None;
        }
        self.link = Some(link);
    }

    /// The next message the window lets through, out of its line.
    fn next(&mut self, window: usize) -> Option<Publish> {
        if self.sent < self.unacked.len() {
            if self.sent >= window {
                return None;
            }
            return self.unacked.get(self.sent).cloned();
        }
        if self.queue.front()?.qos == QoS::AtLeastOnce && self.sent >= window {
            return None;
        }
        let mut publish = self.queue.pop_front()?;
        self.queue_bytes -= weight(&publish);
        if publish.qos == QoS::AtMostOnce {
            self.queued_qos0 -= 1;
        } else {
            publish.pkid = self.free_id();
        }
        Some(publish)
    }

    fn note_sent(&mut self, mut publish: Publish) {
        if !publish.dup {
            self.ids_in_use.insert(publish.pkid);
            publish.dup = true; // should it ever be sent again
            self.unacked.push_back(publish);
        }
        self.sent += 1;
    }

    /// Gives up a message that the client cannot take.
    fn forget(&mut self, publish: &Publish) {
        if publish.dup {
            self.unacked.remove(self.sent);
            self.ids_in_use.remove(&publish.pkid);
        }
    }

    fn free_id(&mut self) -> u16 {
        // Ends: INFLIGHT_MAX is far below the 65 535 identifiers.
        loop {
            self.last_id = self.last_id.checked_add(1).unwrap_or(1);
            if !self.ids_in_use.contains(&self.last_id) {
                return self.last_id;
            }
        }
    }
}

/// What a waiting message weighs against the byte bound.
fn weight(publish: &Publish) -> usize {
    publish.size() + size_of::<Publish>()
}

/// Returns whether a topic name matches a topic filter (MQTT 5.0, section 4.7): `+` stands for one
/// level, `#` for all that follow and for the level above; neither at the front matches a `$` topic.
pub(super) fn matches(topic: &str, filter: &str) -> bool {
    if topic.starts_with('$') && filter.starts_with(['+', '#']) {
        return false;
    }
    let mut levels = topic.split('/');
    for wanted in filter.split('/') {
        if wanted == "#" {
            return true;
        }
        match levels.next() {
            Some(level) if wanted == "+" || wanted == level => {}
            _ => return false,
        }
    }
    levels.next().is_none()
}

/// Returns whether a text may be subscribed to: wildcards fill a level, `#` only the last.
pub(super) fn is_filter(filter: &str) -> bool {
    let last = filter.split('/').count() - 1;
    !filter.is_empty()
        && !filter.contains('\0')
        && filter.split('/').enumerate().all(|(at, level)| match level {
            "#" => at == last,
            "+" => true,
            _ => !level.contains(['+', '#']),
        })
}

/// Returns whether a text may be published to.
pub(super) fn is_topic(topic: &str) -> bool {
    !topic.is_empty() && !topic.contains(['+', '#', '\0'])
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn wildcards_match_as_the_standard_says() {
        // The examples of MQTT 5.0, sections 4.7.1.2, 4.7.1.3 and 4.7.2.
        let check = |filter: &str, topic: &str, expected: bool| {
            assert_eq!(matches(topic, filter), expected, "{filter} against {topic}");
        };
        check("sport/tennis/player1/#", "sport/tennis/player1", true);
        check("sport/tennis/player1/#", "sport/tennis/player1/ranking", true);
        check("sport/tennis/player1/#", "sport/tennis/player1/score/wimbledon", true);
        check("sport/#", "sport", true);
        check("sport/tennis/+", "sport/tennis/player1", true);
        check("sport/tennis/+", "sport/tennis/player1/ranking", false);
        check("sport/+", "sport", false);
        check("sport/+", "sport/", true);
        check("+/+", "/finance", true);
        check("/+", "/finance", true);
        check("+", "/finance", false);
        check("#", "$SYS/load", false);
        check("+/monitor/Clients", "$SYS/monitor/Clients", false);
        check("$SYS/#", "$SYS/load", true);
        check("Accounts", "accounts", false);
    }

    #[test]
    fn malformed_filters_and_topics_are_known() {
        for bad in ["", "sport/tennis#", "sport/tennis/#/ranking", "sport+", "a\0b"] {
            assert!(!is_filter(bad), "{bad:?}");
        }
        for good in ["#", "+", "+/tennis/#", "/", "$SYS/#"] {
            assert!(is_filter(good), "{good:?}");
        }
        assert!(is_topic("a//b") && !is_topic("a/+") && !is_topic("#") && !is_topic(""));
    }

    fn publish(qos: QoS, payload: &str) -> Publish {
        Publish { qos, topic: "t".into(), payload: payload.to_owned().into(), ..Publish::default() }
    }

    #[test]
    fn full_queue_drops_the_oldest_qos0_and_counts() {
        let mut session = Session::default();
        let (kick, _kicked) = oneshot::channel();
        session.attach(Link {
            number: 1,
            control: BytesMut::new(),
            wake: Arc::default(),
            drained: Arc::default(),
            kick,
            receive_maximum: 10,
            packet_bytes_max: 1000,
            will: None,
            cut: false,
        });
        let mut counts = Counts::default();
        session.push(publish(QoS::AtMostOnce, "first"), &mut counts);
        for _ in 1..QUEUE_MESSAGES_MAX {
            session.push(publish(QoS::AtLeastOnce, "x"), &mut counts);
        }
        assert_eq!(counts.dropped, 0);
        session.push(publish(QoS::AtMostOnce, "late"), &mut counts);
        assert_eq!(counts.dropped, 1, "a QoS 0 newcomer finds no place");
        session.push(publish(QoS::AtLeastOnce, "pushes"), &mut counts);
        assert_eq!((counts.dropped, session.queued_qos0), (2, 0), "the QoS 0 message gave way");
        session.push(publish(QoS::AtLeastOnce, "lost"), &mut counts);
        assert_eq!((counts.dropped, session.queue.len()), (3, QUEUE_MESSAGES_MAX));
        assert_eq!(session.queue.back().unwrap().payload, "pushes");
    }
}
