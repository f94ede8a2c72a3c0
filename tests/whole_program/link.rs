//! Trouble with the broker: not there, not willing, forgetful.

use crate::common::broker::Broker;
use crate::common::client::{Message, Publisher};
use crate::common::daemon::{Daemon, Site};
use crate::common::{history, store};

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
