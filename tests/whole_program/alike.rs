//! Live, replayed, killed or cut off from the broker: the same readings come to the same alerts.

use crate::common::broker::{Broker, wait_until};
use crate::common::client::{Collector, Message, Publisher};
use crate::common::daemon::{Daemon, Site};
use crate::common::{history, store};
use serde_json::Value;
use std::collections::{BTreeMap, BTreeSet};

const READINGS_EACH: usize = 450;

/// What `asfound replay --json` says of the readings: alert events without the moment of recording,
/// and the last finding of each channel.
fn replayed(site: &Site, readings: &[history::Reading]) -> (Vec<Value>, BTreeMap<String, Value>) {
    let table = site.file("readings.csv", &history::csv(readings));
    let output = site.run_to_end("replay", &["--json".as_ref(), "--findings".as_ref(), &table]);
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let text = String::from_utf8(output.stdout).expect("UTF-8");
    let (mut events, mut findings) = (Vec::new(), BTreeMap::new());
    for line in text.lines() {
        let mut line: Value = serde_json::from_str(line).expect("JSON");
        match line.get_mut("finding").map(Value::take) {
            Some(finding) => {
                let channel = finding["channel"].as_str().expect("a name").to_owned();
                findings.insert(channel, finding);
            }
            None => events.push(without_recording(line)),
        }
    }
    (events, findings)
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

/// A site with a running broker, somebody who listens to all the daemon says, and a history with
/// what its replay says.
struct Scene {
    broker: Broker,
    site: Site,
    collector: Collector,
    publisher: Publisher,
    messages: Vec<Message>,
    expected: Vec<Value>,
    findings: BTreeMap<String, Value>,
}

impl Scene {
    fn new(seed: u64) -> Scene {
        let broker = Broker::running();
        let site = Site::new(broker.port());
        let collector = Collector::on(broker.port(), "asfound/saltmarsh/#");
        let publisher = Publisher::new(broker.port());
        let readings = history::three_instruments(seed, READINGS_EACH);
        let (expected, findings) = replayed(&site, &readings);
        let found = |channel: &str| expected.iter().any(|e| e["data"]["channel"] == channel);
        assert!(found("press.PT-4107") && found("kiln.PT-7"), "a knock was not found");
        let messages = history::messages(&readings);
        Scene { broker, site, collector, publisher, messages, expected, findings }
    }

    /// Waits until every reading is worked off and everything said of them has come, and compares.
    /// Returns the events in the order in which they came.
    fn check(&self) -> Vec<Value> {
        let Scene { site, collector, messages, expected, .. } = self;
        store::wait_for_readings(site, messages.len() as i64);
        let ids: BTreeSet<String> = expected.iter().map(id).collect();
        collector.wait_for("all alert events", |messages| {
            let came: BTreeSet<String> = alerts(messages).iter().map(id).collect();
            came.is_superset(&ids).then_some(())
        });
        for (channel, finding) in &self.findings {
            let topic = format!("asfound/saltmarsh/finding/{channel}");
            collector.wait_for("the last finding", |messages| {
                let mut findings = messages.iter().filter(|m| m.topic == topic);
                findings.any(|m| m.json() == *finding).then_some(())
            });
        }
        wait_until("the outbox is empty", || (store::unsent(site) == 0).then_some(()));
        let received = alerts(&collector.messages());
        check_alike(&received, expected);
        assert_eq!(store::readings(site), messages.len() as i64, "readings in the journal");
        self.check_log();
        received
    }

    /// The log of alerts in the store and what was published are the same to the byte.
    fn check_log(&self) {
        let log: BTreeMap<String, String> = store::alert_log(&self.site).into_iter().collect();
        for message in self.collector.messages().iter().filter(|m| is_alert(m)) {
            let logged = log.get(&id(&message.json())).map(String::as_bytes);
            assert_eq!(logged, Some(message.payload.as_slice()));
            let media_type = message.content_type.as_deref().unwrap_or_default();
            assert!(media_type.starts_with("application/cloudevents+json"), "{media_type}");
        }
        assert_eq!(log.len(), self.expected.len(), "events in the alert log");
    }

    /// What a newcomer finds at the broker: a finding for each channel, and what stands.
    fn check_kept(&self) {
        let newcomer = Collector::on(self.broker.port(), "asfound/saltmarsh/#");
        let kept = |messages: &[Message], topic: &str| -> Option<Value> {
            let topic = format!("asfound/saltmarsh/{topic}");
            messages.iter().find(|m| m.retained && m.topic == topic).map(Message::json)
        };
        assert_eq!(self.findings.len(), 3, "channels with a finding");
        for (channel, expected) in &self.findings {
            let finding = newcomer.wait_for("a retained finding", |messages| {
                kept(messages, &format!("finding/{channel}"))
            });
            assert_eq!(finding, *expected);
        }
        for channel in ["press.PT-4107", "kiln.PT-7"] {
            let standing = newcomer.wait_for("a retained list", |messages| {
                kept(messages, &format!("standing/{channel}"))
            });
            let last = self.expected.iter().rfind(|e| e["data"]["channel"] == channel);
            let (last, standing) = (&last.expect("an event")["data"], &standing[0]);
            assert_eq!(standing["alert"], last["alert"]);
            assert_eq!(standing["state"], last["state"]);
        }
        assert!(!newcomer.messages().iter().any(is_alert), "an alert event is retained");
    }
}

#[test]
fn live_and_replay_give_the_same_alert_events() {
    let mut scene = Scene::new(4107);
    let daemon = Daemon::listening(&scene.site);
    scene.publisher.publish(&scene.messages);
    let received: Vec<String> = scene.check().iter().map(id).collect();
    let expected: Vec<String> = scene.expected.iter().map(id).collect();
    assert_eq!(received, expected, "in the same order, none twice");
    scene.check_kept();
    let said = daemon.out.all();
    assert_eq!(said.len(), expected.len(), "a line for each event: {said:#?}");
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn killed_in_the_middle_it_ends_where_an_uninterrupted_run_ends() {
    let mut scene = Scene::new(17);
    let Scene { site, publisher, messages, .. } = &mut scene;
    let mut published = 0;
    let mut in_the_middle = 0;
    let mut daemon = Daemon::listening(site);
    for part in messages.chunks(messages.len().div_ceil(4)) {
        let enough = published + 20;
        published += part.len() as i64;
        daemon = std::thread::scope(|threads| {
            threads.spawn(|| publisher.publish(part));
            // Some are worked off, some on their way, some wait at the broker, some still come.
            store::wait_for_readings(site, enough);
            daemon.kill();
            let taken = store::readings(site);
            let daemon = Daemon::listening(site);
            let recovered = daemon.log.wait_for("recovered from the store");
            println!("killed with {taken} of {published} in the journal; {recovered}");
            let all_worked_off = recovered.contains("rows_replayed=0 ");
            in_the_middle += usize::from(taken < published || !all_worked_off);
            daemon
        });
    }
    assert!(in_the_middle > 0, "the daemon was never killed while it had something to do");
    scene.check();
    scene.check_kept();
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn broker_restart_loses_nothing() {
    let mut scene = Scene::new(23);
    let daemon = Daemon::listening(&scene.site);
    let half = scene.messages.len() / 2;
    scene.publisher.publish(&scene.messages[..half]);
    store::wait_for_readings(&scene.site, half as i64 / 2);
    scene.broker.stop();
    daemon.log.wait_for("readings: not connected");
    scene.broker.start();
    scene.publisher.publish(&scene.messages[half..]);
    scene.check();
    scene.check_kept();
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn broker_and_daemon_both_gone_lose_nothing() {
    let mut scene = Scene::new(29);
    let daemon = Daemon::listening(&scene.site);
    let half = scene.messages.len() / 2;
    scene.publisher.publish(&scene.messages[..half]);
    store::wait_for_readings(&scene.site, half as i64 / 2);
    scene.broker.stop();
    daemon.kill();
    // What it had to say waits in the store; it recovers without the broker.
    let daemon = Daemon::start(&scene.site);
    daemon.log.wait_for("alerts: not connected");
    scene.broker.start();
    scene.publisher.publish(&scene.messages[half..]);
    scene.check();
    scene.check_kept();
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn stopped_in_order_it_goes_on_without_working_anything_off_twice() {
    let mut scene = Scene::new(31);
    let Scene { site, publisher, messages, .. } = &mut scene;
    let mut published = 0;
    for part in messages.chunks(messages.len().div_ceil(3)) {
        let daemon = Daemon::listening(site);
        let recovered = daemon.log.wait_for("recovered from the store");
        assert!(recovered.contains("rows_replayed=0 "), "{recovered}");
        publisher.publish(part);
        store::wait_for_readings(site, published + 20);
        published += part.len() as i64;
        assert_eq!(daemon.terminate(), Some(0));
        println!("stopped with {} of {published} in the journal", store::readings(site));
    }
    let daemon = Daemon::listening(site);
    scene.check();
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn damaged_states_are_rebuilt_at_the_start_and_no_alert_is_sent_again() {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let collector = Collector::on(broker.port(), "asfound/saltmarsh/#");
    let mut publisher = Publisher::new(broker.port());
    let readings = history::three_instruments(4108, READINGS_EACH);
    let (expected, _) = replayed(&site, &readings);
    let messages = history::messages(&readings);
    let (early, late) = messages.split_at(900);

    let daemon = Daemon::listening(&site);
    publisher.publish(early);
    store::wait_for_readings(&site, 900);
    assert_eq!(daemon.terminate(), Some(0));
    assert!(!store::alert_log(&site).is_empty(), "nothing was raised that could be sent twice");
    store::damage_states(&site);

    let daemon = Daemon::listening(&site);
    let said = daemon.log.wait_for("the saved state does not match its checksum");
    assert!(said.contains("rebuilt from the journal: 3 channels"), "{said}");
    publisher.publish(late);
    store::wait_for_readings(&site, readings.len() as i64);
    assert_eq!(daemon.terminate(), Some(0));
    let received = alerts(&collector.messages());
    check_alike(&received, &expected);
    let ids: BTreeSet<String> = received.iter().map(id).collect();
    assert_eq!(ids.len(), received.len(), "an alert event was sent twice");
}
