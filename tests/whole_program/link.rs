//! Trouble with the broker: not there, not willing, forgetful.

use crate::common::broker::Broker;
use crate::common::client::{Collector, Message, Publisher};
use crate::common::daemon::{Daemon, Site};
use crate::common::{history, store};
use serde_json::json;

const OWN: &str = "asfound/saltmarsh";

fn readings(n: usize) -> Vec<Message> {
    history::messages(&history::three_instruments(6, n.div_ceil(3))[..n])
}

#[test]
fn absent_broker_is_waited_for() {
    let mut broker = Broker::not_started();
    let site = Site::new(broker.port());
    let daemon = Daemon::start(&site);
    let said = daemon.log.wait_for("readings: not connected");
    assert!(said.contains("nothing listens there (connection refused)"), "{said}");
    assert!(said.contains("is the broker running, is the port right?"), "{said}");
    assert!(said.contains("next attempt in "), "{said}");
    broker.start();
    daemon.log.wait_for("readings: subscribed");
    Publisher::new(broker.port()).publish(&readings(1));
    store::wait_for_readings(&site, 1);
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn without_a_broker_it_still_ends_in_order() {
    let broker = Broker::not_started();
    let site = Site::new(broker.port());
    let daemon = Daemon::start(&site);
    daemon.log.wait_for("readings: not connected");
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn a_broker_that_does_not_let_it_in_is_named_as_such() {
    let mut broker = Broker::with("allow_anonymous false");
    broker.start();
    let site = Site::new(broker.port());
    let daemon = Daemon::start(&site);
    let said = daemon.log.wait_for("readings: not connected");
    assert!(said.contains("the broker does not let this user in (not authorised)"), "{said}");
    daemon.log.wait_for("alerts: not connected: the broker does not let this user in");
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn a_broker_that_has_forgotten_the_session_is_noticed() {
    let mut broker = Broker::running();
    let site = Site::new(broker.port());
    let daemon = Daemon::listening(&site);
    let readings = readings(4);
    let mut publisher = Publisher::new(broker.port());
    publisher.publish(&readings[..2]);
    store::wait_for_readings(&site, 2);
    broker.crash();
    daemon.log.wait_for("readings: not connected");
    broker.start();
    daemon.log.wait_for("the broker has lost this subscriber's session");
    daemon.log.wait_for_count("readings: subscribed", 2);
    publisher.publish(&readings[2..]);
    store::wait_for_readings(&site, 4);
    let said = daemon.log.all().join("\n");
    assert!(said.contains("not connected: the broker closed the connection"), "{said}");
    assert!(!said.contains("serialization"), "a library's words, not ours: {said}");
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn gap_is_noticed_at_the_first_connection_after_a_restart() {
    let mut broker = Broker::running();
    let site = Site::new(broker.port());
    let daemon = Daemon::listening(&site);
    assert_eq!(daemon.terminate(), Some(0));
    broker.crash();
    broker.start();
    let daemon = Daemon::listening(&site);
    daemon.log.wait_for("the broker has lost this subscriber's session");
}

#[test]
fn what_stands_is_told_again_to_a_broker_that_has_forgotten_it() {
    let mut broker = Broker::running();
    let site = Site::new(broker.port());
    let daemon = Daemon::listening(&site);
    let readings = history::three_instruments(4107, 450);
    let readings: Vec<_> = readings.into_iter().filter(|r| r.tag == "PT-4107").take(300).collect();
    Publisher::new(broker.port()).publish(&history::messages(&readings));
    let topic = format!("{OWN}/standing/press.PT-4107");
    let stands = |messages: &[Message]| {
        let mut lists = messages.iter().filter(|m| m.topic == topic).map(Message::json);
        lists.any(|list| list != json!([])).then_some(())
    };
    Collector::on(broker.port(), "asfound/#").wait_for("a standing alert", stands);
    store::wait_for_readings(&site, 300);
    broker.crash();
    daemon.log.wait_for("readings: not connected");
    broker.start();
    daemon.log.wait_for_count("readings: subscribed", 2);
    Collector::on(broker.port(), "asfound/#").wait_for("the standing alert again", stands);
}
