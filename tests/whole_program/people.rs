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

#[test]
fn a_request_is_answered() {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let daemon = Daemon::listening(&site);
    let collector = Collector::on(broker.port(), "asfound/saltmarsh/#");
    let mut publisher = Publisher::new(broker.port());
    // Until the knock of the press has been found and is still open.
    let readings = history::three_instruments(4107, 450);
    let readings: Vec<_> = readings.into_iter().filter(|r| r.tag == "PT-4107").take(300).collect();
    publisher.publish(&history::messages(&readings));
    let raised = collector.wait_for("a step", |messages| {
        messages.iter().map(Message::json).find(|e| e["type"] == "asfound.alert.raised")
    });
    let alert = raised["data"]["alert"].as_str().expect("an id").to_owned();
    store::wait_for_readings(&site, 300);

    let asked = json!({"alert": alert}).to_string();
    let answer = ask(&mut publisher, &collector, "acknowledge", &asked);
    assert_eq!(answer["done"], json!(true), "{answer}");
    let event = event_of_type(&collector, "asfound.alert.acknowledged", &alert);
    assert_eq!(event["data"]["state"], "acknowledged");

    let again = ask(&mut publisher, &collector, "acknowledge", &asked);
    assert_eq!(again["done"], json!(false), "{again}");

    let asked = json!({"alert": alert, "for": "1s"}).to_string();
    let answer = ask(&mut publisher, &collector, "shelve", &asked);
    assert_eq!(answer["done"], json!(true), "{answer}");
    let event = event_of_type(&collector, "asfound.alert.unshelved", &alert);
    assert_eq!(event["data"]["state"], "acknowledged");

    let asked = json!({"alert": alert, "for": "7d"}).to_string();
    let answer = ask(&mut publisher, &collector, "shelve", &asked);
    assert_eq!(answer["done"], json!(true), "{answer}");
    let event = event_of_type(&collector, "asfound.alert.shelved", &alert);
    assert_eq!(event["data"]["state"], "shelved");

    let asked = json!({"channel": "press.PT-4107", "at": "2025-03-10T00:00:00Z",
        "as_found": 0.2, "as_left": 0.0, "note": "made up"});
    let answer = ask(&mut publisher, &collector, "calibrated", &asked.to_string());
    assert_eq!(answer["done"], json!(true), "{answer}");
    // Acknowledged before it was shelved: with the condition gone the alert is closed.
    let event = event_of_type(&collector, "asfound.alert.cleared", &alert);
    assert_eq!(event["data"]["state"], "normal");
    let standing = collector.wait_for("an empty list of standing alerts", |messages| {
        let newest = messages.iter().rfind(|m| m.topic == format!("{OWN}/standing/press.PT-4107"));
        newest.map(Message::json).filter(|list| *list == json!([]))
    });
    assert_eq!(standing, json!([]));
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn the_answer_goes_where_the_request_wants_it() {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let daemon = Daemon::listening(&site);
    let collector = Collector::on(broker.port(), "#");
    let request = Message::new(format!("{OWN}/request/dance"), "{}");
    Publisher::new(broker.port()).publish(&[request.answer_to("answers/desk-7", b"42")]);
    let answer = collector.wait_for("an answer", |messages| {
        messages.iter().find(|m| m.topic == "answers/desk-7").map(Message::json)
    });
    assert_eq!(answer["done"], json!(false));
    assert_eq!(daemon.terminate(), Some(0));
    let replies = format!("{OWN}/reply/");
    assert!(!collector.messages().iter().any(|m| m.topic.starts_with(&replies)));
}
