//! What people tell the daemon over MQTT: `request/{verb}` with a JSON payload.

use crate::service::intake::Excerpt;
use crate::service::settings::duration::read_span;
use crate::service::settings::time::read_time;
use crate::watch::channel::KnownFrom;
use crate::watch::engine::{Action, Engine};
use crate::watch::time::{EventTime, ShellTime};
use serde::Deserialize;

/// A calibration may lie ahead of this clock by so much: clocks differ.
const AHEAD_MAX_US: i64 = 3_600_000_000;

/// The largest request, bytes.
const REQUEST_BYTES_MAX: usize = 4096;

/// Why a request is not done.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum RequestFault {
    /// No such verb.
    #[error("no such request: {verb}; known: calibrated, acknowledge, shelve")]
    Verb {
        /// What was asked.
        verb: Excerpt,
    },
    /// Not the JSON that the verb needs.
    #[error("the payload is not what {verb} needs: {why}; needed: {needed}")]
    Payload {
        /// The verb.
        verb: &'static str,
        /// What is wrong.
        why: Excerpt,
        /// What is needed.
        needed: &'static str,
    },
    /// No such channel.
    #[error("no channel {channel} is known here")]
    Channel {
        /// What was asked.
        channel: Excerpt,
    },
    /// Age zero is later already.
    #[error(
        "{channel} is on record as calibrated at {on_record} by {how}; an older mark does not move age zero back"
    )]
    OlderMark {
        /// The channel.
        channel: Excerpt,
        /// Its age zero.
        on_record: EventTime,
        /// How that is known.
        how: &'static str,
    },
    /// No such alert.
    #[error("no alert {alert} is open")]
    Alert {
        /// What was asked.
        alert: Excerpt,
    },
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct Calibrated {
    channel: String,
    at: String,
    #[serde(default)]
    as_found: Option<f64>,
    #[serde(default)]
    as_left: Option<f64>,
    #[serde(default)]
    note: Option<String>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct OfAlert {
    alert: String,
    #[serde(default, rename = "for")]
    duration: Option<String>,
}

const CALIBRATED: &str = r#"{"channel":"…","at":"RFC 3339 time","as_found":0.1,"as_left":0.0,"note":"…"}, the last three optional"#;
const ACKNOWLEDGE: &str = r#"{"alert":"its id"}"#;
const SHELVE: &str = r#"{"alert":"its id","for":"7d"}"#;

/// Reads a request: which channel, and what to do.
///
/// # Arguments
/// `verb` — the last level of the topic; `payload` — JSON; `engine` — knows channels and alerts;
/// `now` — from when the time on the shelf counts.
pub fn read(
    verb: &str,
    payload: &[u8],
    engine: &Engine,
    now: ShellTime,
) -> Result<(String, Action), RequestFault> {
    match verb {
        "calibrated" => calibrated(payload, engine, now),
        "acknowledge" => {
            let asked: OfAlert = json("acknowledge", payload, ACKNOWLEDGE)?;
            let channel = channel_of(&asked.alert, engine)?;
            Ok((channel, Action::Acknowledge { alert: asked.alert }))
        }
        "shelve" => {
            let wrong = |why: &str| fault("shelve", why, SHELVE);
            let asked: OfAlert = json("shelve", payload, SHELVE)?;
            let duration = asked.duration.ok_or_else(|| wrong("\"for\" is missing"))?;
            let span = read_span(&duration).map_err(|why| wrong(&why.to_string()))?;
            let channel = channel_of(&asked.alert, engine)?;
            Ok((channel, Action::Shelve { alert: asked.alert, until: now.plus(span) }))
        }
        other => Err(RequestFault::Verb { verb: Excerpt::of(other) }),
    }
}

fn calibrated(
    payload: &[u8],
    engine: &Engine,
    now: ShellTime,
) -> Result<(String, Action), RequestFault> {
    let asked: Calibrated = json("calibrated", payload, CALIBRATED)?;
    let at = read_time(&asked.at)
        .map_err(|why| fault("calibrated", &format!("at: {why}"), CALIBRATED))?;
    let Some(known) = engine.observe(&asked.channel) else {
        return Err(RequestFault::Channel { channel: Excerpt::of(&asked.channel) });
    };
    if let Some(cycle) = known.calibrated_later_than(at) {
        return Err(RequestFault::OlderMark {
            channel: Excerpt::of(&asked.channel),
            on_record: cycle.age_zero,
            how: if cycle.known_from == KnownFrom::Mark { "a mark" } else { "the settings" },
        });
    }
    if at.0 > now.0.saturating_add(AHEAD_MAX_US) {
        return Err(fault("calibrated", "at: a time that is still to come", CALIBRATED));
    }
    let Calibrated { channel, as_found, as_left, note, .. } = asked;
    let note = note.map(|text| text.chars().take(500).collect());
    Ok((channel, Action::Calibrated { at, as_found, as_left, note }))
}

fn json<'p, T: Deserialize<'p>>(
    verb: &'static str,
    payload: &'p [u8],
    needed: &'static str,
) -> Result<T, RequestFault> {
    if payload.len() > REQUEST_BYTES_MAX {
        return Err(fault(verb, "more than 4096 bytes", needed));
    }
    serde_json::from_slice(payload).map_err(|why| fault(verb, &why.to_string(), needed))
}

fn fault(verb: &'static str, why: &str, needed: &'static str) -> RequestFault {
    RequestFault::Payload { verb, why: Excerpt::of(why), needed }
}

fn channel_of(alert: &str, engine: &Engine) -> Result<String, RequestFault> {
    engine
        .channel_of_alert(alert)
        .map(str::to_owned)
        .ok_or_else(|| RequestFault::Alert { alert: Excerpt::of(alert) })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::watch::reading::Reading;
    use crate::watch::settings::tests::watch_settings;
    use crate::watch::settings::{SiteSettings, WatchSettings};
    use crate::watch::time::DAY_US;

    fn check(verb: &str, payload: &str) -> String {
        let site = SiteSettings {
            site: "saltmarsh".to_owned(),
            false_alerts_per_year: 1.0,
            watches: Vec::new(),
        };
        let engine = Engine::new(site, ShellTime(0));
        read(verb, payload.as_bytes(), &engine, ShellTime(0)).unwrap_err().to_string()
    }

    #[test]
    fn a_request_that_cannot_be_done_says_what_is_needed() {
        assert_eq!(
            check("dance", "{}"),
            "no such request: \"dance\"; known: calibrated, acknowledge, shelve"
        );
        assert!(check("acknowledge", "{}").contains(r#"needed: {"alert":"its id"}"#));
        assert_eq!(check("acknowledge", r#"{"alert":"x"}"#), "no alert \"x\" is open");
        let naive = r#"{"channel":"a","at":"2026-03-01T08:00:00"}"#;
        assert!(check("calibrated", naive).contains("at: "), "{}", check("calibrated", naive));
        let unknown = r#"{"channel":"a","at":"2026-03-01T08:00:00Z"}"#;
        assert_eq!(check("calibrated", unknown), "no channel \"a\" is known here");
    }

    #[test]
    fn a_mark_older_than_the_one_on_record_is_refused_with_its_date() {
        let age_zero = EventTime(1_772_352_000_000_000);
        let rules = WatchSettings { calibrated: Some(age_zero), ..watch_settings() };
        let site = SiteSettings {
            site: "saltmarsh".to_owned(),
            false_alerts_per_year: 1.0,
            watches: vec![rules],
        };
        let now = ShellTime(age_zero.0 + DAY_US);
        let mut engine = Engine::new(site, now);
        let reading = Reading { serial: 1, time: EventTime(now.0), deviation: 0.1 };
        engine.take("a", 0, &reading, now);
        let mut ask = |at: &str| {
            let payload = format!(r#"{{"channel":"a","at":"{at}"}}"#);
            let (channel, action) = read("calibrated", payload.as_bytes(), &engine, now)?;
            Ok::<_, RequestFault>(engine.act(&channel, &action, 2, now))
        };
        assert_eq!(
            ask("2026-02-28T00:00:00Z").unwrap_err().to_string(),
            "\"a\" is on record as calibrated at 2026-03-01T08:00:00Z by the settings; an older mark \
             does not move age zero back"
        );
        assert_eq!(ask("2026-03-01T09:00:00Z"), Ok(true));
        let why = ask("2026-03-01T08:30:00Z").unwrap_err().to_string();
        assert!(why.contains("calibrated at 2026-03-01T09:00:00Z by a mark"), "{why}");
    }
}
