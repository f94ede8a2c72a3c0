//! What is taken once, what is refused and why, and that the log shows nothing raw.

use crate::common::broker::Broker;
use crate::common::client::{Message, Publisher};
use crate::common::daemon::{Daemon, Site};
use crate::common::store;

const TOPIC: &str = "plant/press/PT-1/deviation";
const CHANNEL: &str = "press.PT-1";

/// The k-th reading, an hour after the one before.
fn reading(k: u32) -> Message {
    Message::new(TOPIC, format!(r#"{{"v":0.{k}25,"ts":"2025-02-01T{k:02}:00:00Z"}}"#))
}

/// The values in the journal are those of these readings, in this order.
fn check_journal(site: &Site, readings: &[u32]) {
    let values: Vec<f64> = store::readings_of(site, CHANNEL).iter().map(|(_, v)| *v).collect();
    let expected: Vec<f64> = readings.iter().map(|&k| f64::from(k) / 10.0 + 0.025).collect();
    assert_eq!(values.len(), expected.len(), "{values:?}");
    for (value, expected) in values.iter().zip(&expected) {
        assert!((value - expected).abs() < 1e-12, "{values:?}");
    }
    assert_eq!(store::readings(site), readings.len() as i64, "readings of all channels");
}

/// Ends the daemon in order; returns the last line of its log: the counts.
fn end(daemon: Daemon) -> String {
    let log = std::sync::Arc::clone(&daemon.log);
    assert_eq!(daemon.terminate(), Some(0));
    log.wait_for("stopped; nothing received was lost")
}

#[test]
fn garbage_is_refused_with_its_reason_and_loses_nothing() {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let daemon = Daemon::listening(&site);
    let garbage: [(&str, &str, &[u8]); 12] = [
        ("not-json", TOPIC, b"{\"v\":1.5,"),
        ("not-json", TOPIC, b"{\"v\":NaN,\"ts\":\"2025-02-01T00:00:00Z\"}"),
        ("not-json", TOPIC, b"\x1b[2J\r\nWARN forged\x07\x00\xe2\x80\xae"),
        ("bad-quality", TOPIC, b"{\"v\":null,\"ts\":\"2025-02-01T00:00:00Z\"}"),
        ("number-in-text", TOPIC, b"{\"v\":\"1.5\",\"ts\":\"2025-02-01T00:00:00Z\"}"),
        ("missing-pointer", TOPIC, b"{\"ts\":\"2025-02-01T00:00:00Z\"}"),
        ("empty", TOPIC, b""),
        ("not-utf8", TOPIC, b"\xff\xfe\x00"),
        ("bad-time", TOPIC, b"{\"v\":1.5,\"ts\":\"2025-02-01T00:00:00\"}"),
        ("from-the-future", TOPIC, b"{\"v\":1.5,\"ts\":\"2099-01-01T00:00:00Z\"}"),
        (
            "no-matching-watch",
            "plant//PT-1/deviation",
            b"{\"v\":1.5,\"ts\":\"2025-02-01T00:00:00Z\"}",
        ),
        ("empty", "plant/press/\u{202e}1-TP/deviation", b" "),
    ];
    let mut publisher = Publisher::new(broker.port());
    publisher.publish(&[reading(1)]);
    for (_, topic, payload) in garbage {
        publisher.publish(&[Message::new(topic, payload)]);
    }
    // These the broker keeps from us: too large for us, and under no filter of ours.
    publisher.publish(&[Message::new(TOPIC, vec![b' '; 100_000])]);
    publisher.publish(&[Message::new("plant/press/PT-1", "1.5"), reading(2)]);
    store::wait_for_readings(&site, 2);
    check_journal(&site, &[1, 2]);

    for (reason, _, _) in garbage {
        daemon.log.wait_for(&format!("reason=\"{reason}\""));
    }
    let log = std::sync::Arc::clone(&daemon.log);
    let counts = end(daemon);
    for part in ["received=14", "stored=2", "duplicates=0", &format!("refused={}", garbage.len())] {
        assert!(counts.contains(part), "{part}: {counts}");
    }
    for line in log.all() {
        let raw = |c: char| c.is_control() || c == '\u{202e}';
        assert!(!line.contains(raw), "{line:?}");
        assert!(!line.starts_with("WARN forged"), "{line:?}");
    }
    let shown = log.wait_for("forged");
    assert!(shown.contains(r"\u{1b}[2J\r\nWARN forged\u{7}"), "{shown}");
    let shown = log.wait_for("1-TP");
    assert!(shown.contains(r"plant/press/\u{202e}1-TP/deviation"), "{shown}");
}

#[test]
fn a_reading_that_comes_twice_is_counted_not_journaled_twice() {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let daemon = Daemon::listening(&site);
    let mut publisher = Publisher::new(broker.port());
    publisher.publish(&[reading(1), reading(1), reading(2), reading(1), reading(3)]);
    store::wait_for_readings(&site, 3);
    check_journal(&site, &[1, 2, 3]);
    let counts = end(daemon);
    assert!(counts.contains("received=5 stored=3 duplicates=2"), "{counts}");

    // What was taken before a restart is known after it.
    let daemon = Daemon::listening(&site);
    publisher.publish(&[reading(3), reading(4)]);
    store::wait_for_readings(&site, 4);
    check_journal(&site, &[1, 2, 3, 4]);
    let counts = end(daemon);
    assert!(counts.contains("received=2 stored=1 duplicates=1"), "{counts}");
}

#[test]
fn retained_reading_is_not_taken_twice() {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let daemon = Daemon::listening(&site);
    let mut publisher = Publisher::new(broker.port());
    publisher.publish(&[reading(1).retained()]);
    store::wait_for_readings(&site, 1);
    daemon.kill();
    let daemon = Daemon::listening(&site);
    publisher.publish(&[reading(2)]);
    store::wait_for_readings(&site, 2);
    check_journal(&site, &[1, 2]);
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn readings_sent_while_it_is_away_are_taken_when_it_is_back() {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let daemon = Daemon::listening(&site);
    let mut publisher = Publisher::new(broker.port());
    publisher.publish(&[reading(1)]);
    store::wait_for_readings(&site, 1);
    assert_eq!(daemon.terminate(), Some(0));
    publisher.publish(&[reading(2), reading(3)]);
    let daemon = Daemon::start(&site);
    store::wait_for_readings(&site, 3);
    check_journal(&site, &[1, 2, 3]);
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn readings_without_a_time_of_their_own_are_taken_once_each_though_it_was_killed() {
    let broker = Broker::running();
    let site = Site::with_payload(broker.port(), r#"{ format = "number" }"#);
    // Each value twice in a row: equal readings are still two readings.
    let messages: Vec<Message> =
        (0..600).map(|k| Message::new(TOPIC, format!("{}", k / 2))).collect();
    let mut publisher = Publisher::new(broker.port());
    let daemon = Daemon::listening(&site);
    let daemon = std::thread::scope(|threads| {
        threads.spawn(|| publisher.publish(&messages));
        store::wait_for_readings(&site, 50);
        daemon.kill();
        Daemon::listening(&site)
    });
    store::wait_for_readings(&site, messages.len() as i64);
    let counts = end(daemon);
    println!("{counts}");
    let journal = store::readings_of(&site, CHANNEL);
    let values: Vec<String> = journal.iter().map(|(_, value)| value.to_string()).collect();
    let sent: Vec<String> = (0..600).map(|k| (k / 2).to_string()).collect();
    assert_eq!(values, sent);
}

/// Sends readings while nothing can be committed; returns once the daemon has them and has had the
/// time of three further messages to do something wrong with them.
fn send_what_cannot_be_committed(publisher: &mut Publisher, daemon: &Daemon, readings: &[Message]) {
    publisher.publish(readings);
    for (reason, payload) in [("empty", ""), ("not-json", "{"), ("bad-quality", r#"{"v":null}"#)] {
        publisher.publish(&[Message::new(TOPIC, payload)]);
        daemon.log.wait_for(&format!("reason=\"{reason}\""));
    }
}

#[test]
fn nothing_is_acknowledged_before_it_is_committed() {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let daemon = Daemon::listening(&site);
    let mut publisher = Publisher::new(broker.port());
    publisher.publish(&[reading(1)]);
    store::wait_for_readings(&site, 1);
    let held = store::hold(&site);
    send_what_cannot_be_committed(&mut publisher, &daemon, &[reading(2), reading(3)]);
    daemon.kill();
    drop(held);
    check_journal(&site, &[1]);
    let daemon = Daemon::listening(&site);
    store::wait_for_readings(&site, 3);
    check_journal(&site, &[1, 2, 3]);
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn store_that_cannot_be_written_ends_it_with_1_and_loses_nothing() {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let mut daemon = Daemon::listening(&site);
    let held = store::hold(&site);
    let mut publisher = Publisher::new(broker.port());
    send_what_cannot_be_committed(&mut publisher, &daemon, &[reading(1), reading(2)]);
    assert_eq!(daemon.code(), Some(1));
    daemon.log.wait_for("nothing was acknowledged after this");
    drop(held);
    let daemon = Daemon::listening(&site);
    store::wait_for_readings(&site, 2);
    check_journal(&site, &[1, 2]);
    assert_eq!(daemon.terminate(), Some(0));
}

#[test]
fn a_channel_takes_readings_of_one_watch_only() {
    let broker = Broker::running();
    let watch = |topic: &str, unit: &str| {
        format!(
            "[[watch]]\ntopic = \"{topic}\"\nchannel = \"{{tag}}\"\nunit = \"{unit}\"\n\
             payload = {{ format = \"json\", value = \"/v\", time = \"/ts\" }}\n"
        )
    };
    let site = Site::with_settings(&format!(
        "site.name = \"saltmarsh\"\nbroker.url = \"mqtt://127.0.0.1:{}\"\n\
         store.directory = \"store\"\n{}{}",
        broker.port(),
        watch("p/{tag}/pressure", "bar"),
        watch("p/{tag}/temperature", "K"),
    ));
    let reading = |quantity: &str, value: f64, hour: u32| {
        let payload = format!(r#"{{"v":{value},"ts":"2025-02-01T{hour:02}:00:00Z"}}"#);
        Message::new(format!("p/T1/{quantity}"), payload)
    };
    let mut publisher = Publisher::new(broker.port());
    // Within one commit, by a daemon that knows the channel already, and after a restart.
    for (round, known) in [(1, 0), (2, 2), (3, 4)] {
        let daemon = Daemon::listening(&site);
        daemon.log.wait_for("can give the same name");
        publisher.publish(&[
            reading("pressure", 4.0, 2 * round),
            reading("temperature", 290.0, 2 * round),
            reading("pressure", 4.1, 2 * round + 1),
        ]);
        daemon.log.wait_for("channel \"T1\" belongs to the watch of \"p/{tag}/pressure\"");
        store::wait_for_readings(&site, known + 2);
        let counts = end(daemon);
        assert!(counts.contains("stored=2") && counts.contains("refused=1"), "{counts}");
    }
    let values: Vec<f64> = store::readings_of(&site, "T1").iter().map(|(_, v)| *v).collect();
    assert_eq!(values, [4.0, 4.1, 4.0, 4.1, 4.0, 4.1]);
}
