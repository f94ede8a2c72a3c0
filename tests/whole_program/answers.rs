//! Where answers to requests go: where the request wants them, unless that would do harm.

use crate::common::broker::Broker;
use crate::common::client::{Collector, Message, Publisher};
use crate::common::daemon::{Daemon, Site};

const OWN: &str = "asfound/saltmarsh";

fn request(answer_topic: &str) -> Message {
    Message::new(format!("{OWN}/request/dance"), "{}").answer_to(answer_topic, b"42")
}

/// A request that wants its answer there, then one of the usual kind: that one is answered.
fn check_still_answers(answer_topic: &str) {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let daemon = Daemon::listening(&site);
    let collector = Collector::on(broker.port(), "#");
    let mut publisher = Publisher::new(broker.port());
    publisher.publish(&[request(answer_topic)]);
    publisher.publish(&[Message::new(format!("{OWN}/request/acknowledge"), "{}")]);
    collector.wait_for("an answer to the second request", |messages| {
        messages.iter().any(|m| m.topic == format!("{OWN}/reply/acknowledge")).then_some(())
    });
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn an_empty_answer_topic_does_not_silence_the_watch() {
    check_still_answers("");
}

#[test]
fn an_answer_topic_of_300_levels_does_not_silence_the_watch() {
    check_still_answers(&"y/".repeat(300));
}

/// A request that wants its answer there, then one of the usual kind: both are answered on topics of
/// this service's own.
fn check_not_answered_on(answer_topic: &str) {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let daemon = Daemon::listening(&site);
    let collector = Collector::on(broker.port(), "#");
    let mut publisher = Publisher::new(broker.port());
    publisher.publish(&[request(answer_topic)]);
    publisher.publish(&[Message::new(format!("{OWN}/request/acknowledge"), "{}")]);
    collector.wait_for("an answer to the second request", |messages| {
        messages.iter().any(|m| m.topic == format!("{OWN}/reply/acknowledge")).then_some(())
    });
    let messages = collector.messages();
    assert!(!messages.iter().any(|m| m.topic == answer_topic), "{messages:#?}");
    assert!(messages.iter().any(|m| m.topic == format!("{OWN}/reply/dance")), "{messages:#?}");
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn no_answer_is_published_under_an_input_filter() {
    check_not_answered_on("plant/press/PT-1/deviation");
}

#[test]
fn no_answer_is_published_on_another_sites_topics() {
    check_not_answered_on("asfound/northpier/request/calibrated");
}

#[test]
fn the_answer_carries_the_correlation_data() {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let _daemon = Daemon::listening(&site);
    let collector = Collector::on(broker.port(), "#");
    Publisher::new(broker.port()).publish(&[request("answers/desk-7")]);
    let answer = collector.wait_for("an answer", |messages| {
        messages.iter().find(|m| m.topic == "answers/desk-7").cloned()
    });
    assert_eq!(answer.correlation.as_deref(), Some(b"42".as_slice()));
}
