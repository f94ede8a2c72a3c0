//! Live, replayed, killed or cut off: the same readings come to the same alerts.

use crate::common::broker::Broker;
use crate::common::client::{Collector, Message, Publisher};
use crate::common::daemon::{Daemon, Site};
use crate::common::{history, store};
use serde_json::Value;
use std::collections::BTreeMap;

const READINGS_EACH: usize = 450;

/// What `asfound replay --json` says of the readings, without the moment of recording.
fn replayed(site: &Site, readings: &[history::Reading]) -> Vec<Value> {
    let table = site.file("readings.csv", &history::csv(readings));
    let output = site.run_to_end("replay", &["--json".as_ref(), &table]);
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let text = String::from_utf8(output.stdout).expect("UTF-8");
    let events = text.lines().map(|line| serde_json::from_str(line).expect("JSON"));
    events.map(without_recording).collect()
}

fn without_recording(mut event: Value) -> Value {
    let recorded = event.as_object_mut().expect("an object").remove("recordedtime");
    assert!(recorded.is_some_and(|time| time.is_string()), "{event}");
    event
}

fn is_alert(message: &Message) -> bool {
    message.topic.starts_with("asfound/saltmarsh/alert/")
}

fn alerts(messages: &[Message]) -> Vec<Value> {
    messages.iter().filter(|m| is_alert(m)).map(|m| without_recording(m.json())).collect()
}

fn id(event: &Value) -> String {
    event["id"].as_str().expect("an id").to_owned()
}

/// The same events, whatever their order; one that came twice came with the same body.
fn check_alike(received: &[Value], expected: &[Value]) {
    let bodies: BTreeMap<String, &Value> =
        expected.iter().map(|event| (id(event), event)).collect();
    let mut missing: Vec<String> = bodies.keys().cloned().collect();
    for event in received {
        let id = id(event);
        let Some(expected) = bodies.get(&id) else { panic!("unexpected: {event:#}") };
        assert_eq!(format!("{event:#}"), format!("{expected:#}"));
        missing.retain(|other| *other != id);
    }
    assert_eq!(missing, Vec::<String>::new(), "never came");
}

/// SIGTERM, exit code 0, and everything published before the farewell has come.
fn end_in_order(daemon: Daemon, collector: &Collector) {
    assert_eq!(daemon.terminate(), Some(0));
    collector.wait_for("the farewell", |messages| {
        let mut said = messages.iter().filter(|m| m.topic == "asfound/saltmarsh/service");
        said.any(|m| m.json()["why"] == "stopped").then_some(())
    });
}

#[test]
fn live_and_replay_give_the_same_alert_events() {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let readings = history::three_instruments(4107, READINGS_EACH);
    let expected = replayed(&site, &readings);
    assert!(expected.iter().any(|e| e["data"]["kind"] == "step"), "no knock found: {expected:#?}");

    let collector = Collector::on(broker.port(), "asfound/saltmarsh/#");
    let daemon = Daemon::listening(&site);
    Publisher::new(broker.port()).publish(&history::messages(&readings));
    collector.wait_for("all alert events", |messages| {
        (messages.iter().filter(|m| is_alert(m)).count() >= expected.len()).then_some(())
    });
    end_in_order(daemon, &collector);
    let received = alerts(&collector.messages());
    check_alike(&received, &expected);
    assert_eq!(
        received.iter().map(id).collect::<Vec<_>>(),
        expected.iter().map(id).collect::<Vec<_>>()
    );
}
