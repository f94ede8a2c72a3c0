//! What people tell the daemon over MQTT, and what it answers.

use crate::common::broker::Broker;
use crate::common::client::{Collector, Message, Publisher};
use crate::common::daemon::{Daemon, Site};
use crate::common::{history, store};
use serde_json::{Value, json};

const OWN: &str = "asfound/saltmarsh";

/// Asks, and returns the answer: the first reply to this verb after the `known` ones.
fn ask(publisher: &mut Publisher, collector: &Collector, verb: &str, payload: &str) -> Value {
    let topic = format!("{OWN}/reply/{verb}");
    let replies = |messages: &[Message]| -> Vec<Value> {
        messages.iter().filter(|m| m.topic == topic).map(Message::json).collect()
    };
    let known = replies(&collector.messages()).len();
    publisher.publish(&[Message::new(format!("{OWN}/request/{verb}"), payload)]);
    collector.wait_for(&format!("an answer to {verb} {payload}"), |messages| {
        replies(messages).get(known).cloned()
    })
}

/// The newest event of an alert once its type is that.
fn event_of_type(collector: &Collector, kind: &str, alert: &str) -> Value {
    collector.wait_for(&format!("{kind} of {alert}"), |messages| {
        let events = messages.iter().filter(|m| m.topic.starts_with("asfound/saltmarsh/alert/"));
        events.map(Message::json).find(|e| e["type"] == kind && e["data"]["alert"] == alert)
    })
}

#[test]
fn a_request_that_cannot_be_done_is_answered_with_its_reason() {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let daemon = Daemon::listening(&site);
    let collector = Collector::on(broker.port(), "asfound/saltmarsh/#");
    let mut publisher = Publisher::new(broker.port());
    for (verb, payload, reason) in [
        ("acknowledge", "{", "the payload is not what acknowledge needs"),
        ("acknowledge", r#"{"alert":"0123456789abcdef"}"#, "no alert \"0123456789abcdef\" is open"),
        ("acknowledge", "", "the payload is not what acknowledge needs"),
        ("shelve", r#"{"alert":"x"}"#, "\"for\" is missing"),
        ("calibrated", r#"{"channel":"x","at":"2025-02-01T00:00:00"}"#, "at: "),
        ("calibrated", r#"{"channel":"x","at":"2025-02-01T00:00:00Z"}"#, "no channel \"x\""),
        ("dance", "{}", "no such request"),
    ] {
        let answer = ask(&mut publisher, &collector, verb, payload);
        assert_eq!(answer["done"], json!(false), "{verb} {payload}");
        let why = answer["why"].as_str().unwrap_or_default();
        assert!(why.contains(reason), "{verb} {payload}: {why}");
    }
    assert_eq!(daemon.terminate(), Some(0));
}
