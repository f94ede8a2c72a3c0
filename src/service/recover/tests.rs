//! Lives of one store, one after the other, without a broker: what a start makes of what it finds.

use super::*;
use crate::drift::structure::simulate::noise;
use crate::service::clock::Clock;
use crate::service::desk::{Arrival, Desk, Put};
use crate::service::settings::Environment;
use crate::service::store::{Bundle, FILE_NAME};
use crate::watch::channel::{Cycle, KnownFrom};
use crate::watch::time::DAY_US;
use std::path::Path;

/// 2026-01-01T00:00:00Z.
const START: i64 = 1_767_225_600_000_000;
const STEP_US: i64 = DAY_US / 4;
const CHANNEL: &str = "press.PT-1";

const WATCH: &str = r#"
[[watch]]
topic = "plant/{area}/{tag}/deviation"
payload = { format = "json", value = "/v", time = "/ts" }
unit = "bar"
tolerance = 4.0
window = { span = "90d", points = 360 }
refit_every = "1d"
look_ahead = "20d"
silent_after = "3d"
"#;

fn settings(watches: &str) -> Settings {
    let text = format!(
        "site.name = \"saltmarsh\"\nbroker.url = \"mqtt://127.0.0.1\"\n\
         alerts.false_alerts_per_year = 0.5\n{watches}"
    );
    Settings::read(&text, Path::new("a.toml"), &Environment::default())
        .unwrap_or_else(|problems| panic!("{problems}"))
}

/// A daemon without links: a desk over the store of a folder.
struct Life {
    store: Store,
    desk: Desk,
    said: Vec<String>,
}

impl Life {
    /// A start on what is in the folder; the clock stands at the newest reading from `day` on.
    fn begin(folder: &Path, watches: &str, day: i64) -> Life {
        let settings = settings(watches);
        let router = Router::new(&settings);
        let mut store = Store::open(folder).unwrap();
        let clock = Clock::of_readings(EventTime(START + day * DAY_US));
        let mut recovered = recover(&store, &settings, &router, clock.now()).unwrap();
        let said = settle(&mut store, &mut recovered, &router, clock.now()).unwrap();
        let newest = store.newest_row().unwrap();
        let mut desk = Desk::new(settings, clock, router, recovered, newest);
        desk.collect();
        Life { store, desk, said }
    }

    /// Takes messages as one commit, and saves what is urgent.
    fn take(&mut self, messages: &[(String, String)]) {
        let mut entries = Vec::new();
        for (topic, payload) in messages {
            let arrival = Arrival {
                topic,
                payload: payload.as_bytes(),
                duplicate: false,
                retained: false,
                packet_id: 1,
                response_topic: None,
                correlation: None,
            };
            match self.desk.receive(&arrival) {
                (Put::Journal(entry), None) => entries.push(*entry),
                (Put::Nothing, None) => {}
                (_, Some(refusal)) => panic!("{refusal}"),
            }
        }
        let rows: Vec<_> = entries.iter().map(|entry| entry.row.clone()).collect();
        let first = self.store.append(&rows).unwrap();
        self.desk.committed(first, entries);
        self.save(false);
    }

    fn readings(&mut self, from: usize, values: &[f64]) {
        for (i, value) in values.iter().enumerate() {
            let time = EventTime(START + (from + i) as i64 * STEP_US);
            let payload = format!(r#"{{"v":{value},"ts":"{time}"}}"#);
            self.take(&[("plant/press/PT-1/deviation".to_owned(), payload)]);
        }
    }

    fn request(&mut self, verb: &str, payload: &str) {
        self.take(&[(format!("asfound/saltmarsh/request/{verb}"), payload.to_owned())]);
    }

    fn save(&mut self, everything: bool) {
        if let Some(bundle) = self.desk.bundle(everything, everything) {
            self.store.save(&bundle).unwrap();
        }
    }

    fn channel(&self) -> Channel {
        self.desk.engine().observe(CHANNEL).unwrap().clone()
    }

    /// Everything waiting to be published that is no retained message: (topic, payload).
    fn events(&self) -> Vec<(String, String)> {
        let unsent = self.store.unsent_after(0, 10_000).unwrap();
        let text = |bytes| String::from_utf8(bytes).unwrap();
        let events = unsent.into_iter().filter(|(_, message)| !message.retained);
        events.map(|(_, message)| (message.topic, text(message.payload))).collect()
    }

    /// An orderly stop: all states are saved.
    fn end(mut self) -> (Channel, Vec<(String, String)>) {
        self.save(true);
        (self.channel(), self.events())
    }
}

/// A logarithmic drift that jumps at reading `jump`.
fn values(n: usize, seed: u64, jump: usize) -> Vec<f64> {
    println!("seed {seed}");
    let age = |i: usize| (i as f64 + 1.0) / 4.0;
    let noise = noise(seed, n, 0.3);
    let drift = noise.iter().enumerate().map(|(i, e)| 0.5 * age(i).ln() + 0.02 * e);
    drift.enumerate().map(|(i, v)| if i >= jump { v + 0.15 } else { v }).collect()
}

/// A life with two jumps, a silence between, and an alert acknowledged and put aside.
fn eventful(folder: &Path) -> (Channel, Vec<(String, String)>) {
    let mut life = Life::begin(folder, WATCH, 0);
    life.readings(0, &values(400, 31, 300));
    let alert = life.channel().alerts.open()[0].alert.clone();
    life.request("acknowledge", &format!(r#"{{"alert":"{alert}"}}"#));
    life.request("shelve", &format!(r#"{{"alert":"{alert}","for":"2d"}}"#));
    let after = values(900, 31, 300)[400..].to_vec();
    life.readings(440, &after);
    let knocked: Vec<f64> = values(60, 32, 0).iter().map(|v| v + 3.0).collect();
    life.readings(440 + after.len(), &knocked);
    life.end()
}

/// What of the events is an alert's: its kind and what happened.
fn kinds(events: &[(String, String)]) -> Vec<String> {
    let alerts = events.iter().filter(|(topic, _)| topic.contains("/alert/"));
    alerts
        .map(|(_, payload)| {
            let event: serde_json::Value = serde_json::from_str(payload).unwrap();
            let what = event["type"].as_str().unwrap().rsplit('.').next().unwrap().to_owned();
            format!("{what} {}", event["data"]["kind"].as_str().unwrap())
        })
        .collect()
}

/// Damages the saved state and starts again: what is rebuilt is what was saved, nothing is told twice.
fn check_rebuilt(damage: impl FnOnce(&Path, &Channel), why: &str) {
    let folder = tempfile::tempdir().unwrap();
    let (saved, told) = eventful(folder.path());
    let what = kinds(&told);
    for needed in ["raised", "acknowledged", "shelved", "unshelved", "raised silent"] {
        assert!(what.iter().any(|event| event.starts_with(needed)), "{needed}: {what:#?}");
    }
    let silence = what.iter().position(|event| event == "raised silent").unwrap();
    let later = &what[silence + 1..];
    assert!(later.iter().any(|event| event.starts_with("raised")), "none after it: {what:#?}");
    damage(folder.path(), &saved);
    // Long after: a service that begins to listen now has heard no silence of then.
    let life = Life::begin(folder.path(), WATCH, 400);
    assert_eq!(life.said.len(), 1, "{:#?}", life.said);
    assert!(life.said[0].contains(why) && life.said[0].contains(CHANNEL), "{:#?}", life.said);
    let log = life.store.alerts().unwrap();
    let (rebuilt, told_by_now) = life.end();
    assert_eq!(rebuilt, saved);
    assert!(told_by_now == told, "told twice, or lost: {:#?}", kinds(&told_by_now));
    let again = Life::begin(folder.path(), WATCH, 400);
    assert_eq!(again.store.alerts().unwrap(), log);
    assert!(again.said.is_empty(), "rebuilt once: {:#?}", again.said);
    assert_eq!(again.channel(), saved);
}

/// Saves other bytes in the place of the newest state, with the checksum that belongs to them.
fn save_bytes(folder: &Path, bytes: Vec<u8>) {
    let mut store = Store::open(folder).unwrap();
    let states = vec![(CHANNEL.to_owned(), store.newest_row().unwrap(), bytes)];
    store.save(&Bundle { states, ..Bundle::default() }).unwrap();
}

#[test]
fn a_damaged_state_is_rebuilt_and_nothing_is_told_twice() {
    let damage = |folder: &Path, _: &Channel| {
        let file = rusqlite::Connection::open(folder.join(FILE_NAME)).unwrap();
        file.execute("UPDATE state SET data = zeroblob(100)", []).unwrap();
    };
    check_rebuilt(damage, "does not match its checksum");
}

#[test]
fn a_state_of_another_version_is_rebuilt_and_nothing_is_told_twice() {
    let damage = |folder: &Path, saved: &Channel| {
        // As it was before states had a version.
        save_bytes(folder, postcard::to_stdvec(saved).unwrap());
    };
    check_rebuilt(damage, "was written by another version");
}

#[test]
fn a_state_that_cannot_be_read_is_rebuilt_and_nothing_is_told_twice() {
    let damage = |folder: &Path, _: &Channel| save_bytes(folder, vec![STATE_VERSION, 1, 2, 3]);
    check_rebuilt(damage, "cannot be read");
}

#[test]
fn events_that_were_not_saved_are_told_after_a_rebuild() {
    let folder = tempfile::tempdir().unwrap();
    let mut life = Life::begin(folder.path(), WATCH, 0);
    let all = values(400, 31, 300);
    life.readings(0, &all[..290]);
    life.save(true);
    let old = life.store.states().unwrap().remove(0);
    let known = life.events().len();
    life.readings(290, &all[290..]);
    let (channel, told) = life.end();
    assert!(told.len() > known, "the jump was not seen");
    // As a crash before the jump was seen would leave it, with a state that cannot be used.
    let file = rusqlite::Connection::open(folder.path().join(FILE_NAME)).unwrap();
    file.execute("DELETE FROM alert", []).unwrap();
    file.execute("DELETE FROM outbox", []).unwrap();
    drop(file);
    let mut store = Store::open(folder.path()).unwrap();
    let states = vec![(old.channel, old.upto, vec![0])];
    store.save(&Bundle { states, ..Bundle::default() }).unwrap();
    drop(store);
    let (rebuilt, told_again) = Life::begin(folder.path(), WATCH, 0).end();
    assert_eq!(rebuilt, channel);
    assert_eq!(kinds(&told_again), kinds(&told[known..]));
}

fn with_line(line: &str) -> String {
    format!("{WATCH}{line}\n")
}

#[test]
fn another_unit_begins_the_window_anew_once_and_a_rebuild_knows_it() {
    let folder = tempfile::tempdir().unwrap();
    let mut life = Life::begin(folder.path(), WATCH, 0);
    life.readings(0, &values(120, 33, 999));
    let (before, _) = life.end();
    assert!(before.refit.is_some());

    let mbar =
        WATCH.replace("unit = \"bar\"\ntolerance = 4.0", "unit = \"mbar\"\ntolerance = 4000");
    let life = Life::begin(folder.path(), &mbar, 30);
    assert_eq!(life.said.len(), 1, "{:#?}", life.said);
    let json = r#"payload = { format = "json", value = "/v", time = "/ts" }"#;
    assert_eq!(
        life.said[0],
        format!(
            "watch[1] has changed: readings were measured as (unit = \"bar\"; {json}), now as \
             (unit = \"mbar\"; {json}); windows begin anew, and alerts on the readings before are \
             lowered: 1 channel (press.PT-1)"
        )
    );
    // Killed before anything is saved: the journal has the change.
    drop(life);
    let mut life = Life::begin(folder.path(), &mbar, 30);
    assert!(life.said.is_empty(), "{:#?}", life.said);
    assert!(life.channel().window.points().is_empty());
    let thousandfold: Vec<f64> = values(180, 33, 999)[120..].iter().map(|v| 1000.0 * v).collect();
    life.readings(120, &thousandfold);
    assert_eq!(life.channel().window.points().len(), 60);
    assert!(life.channel().window.points().iter().all(|p| p.mean > 500.0));
    let rows = life.store.newest_row().unwrap();
    let (saved, _) = life.end();

    let life = Life::begin(folder.path(), &mbar, 45);
    assert_eq!((life.store.newest_row().unwrap(), life.said.len()), (rows, 0), "{:?}", life.said);
    assert_eq!(life.channel(), saved);
    drop(life);
    save_bytes(folder.path(), vec![0]);
    let life = Life::begin(folder.path(), &mbar, 45);
    assert_eq!(life.channel().window, saved.window);
    assert_eq!(life.channel().refit, saved.refit);
    assert_eq!(life.channel().basis, saved.basis);
}

#[test]
fn another_calibrated_holds_until_a_mark_says_otherwise() {
    let folder = tempfile::tempdir().unwrap();
    let mut life = Life::begin(folder.path(), WATCH, 0);
    life.readings(0, &values(120, 34, 999));
    life.end();
    let cycle = |life: &Life| life.channel().cycle.unwrap();
    let day = |d: i64| EventTime(START + d * DAY_US);

    let mut life = Life::begin(folder.path(), &with_line("calibrated = 2026-01-21T00:00:00Z"), 30);
    assert!(life.said[0].contains("calibrated was not set, now 2026-01-21T00:00:00Z; a new cycle"));
    assert_eq!(cycle(&life), Cycle { age_zero: day(20), known_from: KnownFrom::Setting });
    assert_eq!(life.channel().window.points().len(), 39);
    life.request("calibrated", r#"{"channel":"press.PT-1","at":"2026-01-26T00:00:00Z"}"#);
    assert_eq!(cycle(&life), Cycle { age_zero: day(25), known_from: KnownFrom::Mark });
    life.end();

    let life = Life::begin(folder.path(), &with_line("calibrated = 2026-01-28T00:00:00Z"), 30);
    let stays = "age zero stays at the calibration mark of 2026-01-26T00:00:00Z";
    assert!(life.said[0].contains(stays), "{:#?}", life.said);
    assert_eq!(cycle(&life), Cycle { age_zero: day(25), known_from: KnownFrom::Mark });
    life.end();

    let life = Life::begin(folder.path(), &with_line("calibrated = 2026-01-28T00:00:00Z"), 30);
    assert!(life.said.is_empty(), "{:#?}", life.said);
}

#[test]
fn an_older_mark_in_the_same_commit_is_answered_not_done() {
    let folder = tempfile::tempdir().unwrap();
    let mut life = Life::begin(folder.path(), WATCH, 0);
    life.readings(0, &values(120, 35, 999));
    let mark = |day: &str| {
        let payload = format!(r#"{{"channel":"press.PT-1","at":"2026-01-{day}T00:00:00Z"}}"#);
        ("asfound/saltmarsh/request/calibrated".to_owned(), payload)
    };
    life.take(&[mark("21"), mark("11")]);
    let (channel, told) = life.end();
    assert_eq!(channel.cycle.unwrap().age_zero, EventTime(START + 20 * DAY_US));
    let replies: Vec<_> = told.iter().filter(|(topic, _)| topic.contains("/reply/")).collect();
    assert_eq!(replies.len(), 2);
    assert!(replies[0].1.contains("\"done\":true"));
    assert!(replies[1].1.contains("\"done\":false") && replies[1].1.contains("\"not done: "));
}

#[test]
fn a_watch_put_before_another_takes_over_its_channels() {
    let folder = tempfile::tempdir().unwrap();
    let general = WATCH
        .replace("{area}/{tag}/deviation", "{area}/{tag}")
        .replace("payload", "channel = \"{area}.{tag}\"\npayload");
    let send = |life: &mut Life, day: i64| {
        let time = EventTime(START + day * DAY_US);
        let payload = format!(r#"{{"v":0.1,"ts":"{time}"}}"#);
        life.take(&[("plant/press/PT-1".to_owned(), payload)]);
    };
    let mut life = Life::begin(folder.path(), &general, 0);
    send(&mut life, 0);
    send(&mut life, 1);
    life.end();
    let special = general
        .replace("plant/{area}/{tag}", "plant/press/{tag}")
        .replace("{area}.{tag}", "press.{tag}")
        .replace("tolerance = 4.0", "tolerance = 1.0");
    for start in 0..2 {
        let mut life = Life::begin(folder.path(), &format!("{special}{general}"), 2);
        assert_eq!(life.desk.engine().watch_of(CHANNEL), Some(0));
        assert_eq!(life.said.len(), 1 - start, "{:#?}", life.said);
        send(&mut life, 2 + start as i64);
        assert_eq!(life.channel().window.points().len(), 2 + start);
        life.end();
    }
}
