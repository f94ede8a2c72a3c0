//! Beginning and end: what others see of them, wrong settings, two daemons on one store.

use crate::common::broker::{Broker, signal};
use crate::common::client::{Collector, Message, Publisher};
use crate::common::daemon::{Daemon, Site};
use crate::common::{history, store};
use serde_json::Value;

const SERVICE: &str = "asfound/saltmarsh/service";

fn readings(n: usize) -> Vec<Message> {
    history::messages(&history::three_instruments(5, n.div_ceil(3))[..n])
}

/// The service's state that a newcomer finds at the broker.
fn kept_state(broker: &Broker) -> Value {
    let newcomer = Collector::on(broker.port(), SERVICE);
    newcomer.wait_for("a retained state", |messages| {
        messages.iter().find(|m| m.retained).map(Message::json)
    })
}

/// Waits for the next state of the service after the `seen` ones that is `state`.
fn next_state(collector: &Collector, seen: &mut usize, state: &str) -> Value {
    collector.wait_for(&format!("service state {state}"), |messages| {
        let place = messages.iter().skip(*seen).position(|m| m.json()["state"] == state)?;
        *seen += place + 1;
        Some(messages[*seen - 1].json())
    })
}

#[test]
fn service_state_is_online_then_offline() {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let collector = Collector::on(broker.port(), SERVICE);
    let mut seen = 0;

    let daemon = Daemon::start(&site);
    let online = next_state(&collector, &mut seen, "online");
    assert_eq!(online["version"], env!("CARGO_PKG_VERSION"));
    let since = online["since"].as_str().expect("a time");
    since.parse::<jiff::Timestamp>().expect("RFC 3339 with offset");
    assert_eq!(kept_state(&broker), online);

    assert_eq!(daemon.terminate(), Some(0));
    let stopped = next_state(&collector, &mut seen, "offline");
    assert_eq!(stopped["why"], "stopped");
    assert_eq!(kept_state(&broker), stopped);

    let daemon = Daemon::start(&site);
    next_state(&collector, &mut seen, "online");
    daemon.kill();
    let lost = next_state(&collector, &mut seen, "offline");
    assert_eq!(lost["why"], "connection lost");
    assert_eq!(kept_state(&broker), lost);
}

#[test]
fn wrong_settings_end_with_2_and_start_nothing() {
    let wrong = "site.name = \"saltmarsh\"\nbroker.url = \"mqtt://127.0.0.1\"\n\
                 store.directory = \"store\"\nstore.diretory = \"x\"\n\
                 [[watch]]\ntopic = \"plant/#\"\nunit = \"bar\"\n";
    let site = Site::with_settings(wrong);
    let output = site.run_to_end("run", &[]);
    let said = String::from_utf8_lossy(&output.stderr);
    assert_eq!(output.status.code(), Some(2), "{said}");
    for problem in ["diretory", "plant/#"] {
        assert!(said.contains(problem), "{problem} is not named: {said}");
    }
    assert!(!site.store().exists(), "a store was made");

    std::fs::remove_file(site.config()).expect("the settings file");
    let output = site.run_to_end("run", &[]);
    assert_eq!(output.status.code(), Some(2));
    assert!(String::from_utf8_lossy(&output.stderr).contains("asfound.toml"));
}

#[test]
fn second_daemon_on_the_same_store_is_refused() {
    let broker = Broker::running();
    let site = Site::new(broker.port());
    let first = Daemon::listening(&site);
    let mut second = Daemon::start(&site);
    assert_eq!(second.code(), Some(1));
    second.log.wait_for("is in use by another process; one daemon per store");
    // The first one was not disturbed: it still listens.
    Publisher::new(broker.port()).publish(&readings(2));
    store::wait_for_readings(&site, 2);
    assert_eq!(first.terminate(), Some(0));
}

#[test]
fn sigterm_during_the_start_ends_with_0() {
    let broker = Broker::running();
    for _ in 0..20 {
        let site = Site::new(broker.port());
        let mut daemon = Daemon::start(&site);
        crate::common::broker::wait_until("a store", || site.store().exists().then_some(()));
        signal("TERM", daemon.id());
        assert_eq!(daemon.code(), Some(0));
    }
}
