//! Alert events as they travel: CloudEvents 1.0, structured JSON.
//!
//! `time` is when the condition holds from, on the readings' axis; `recordedtime` is when the event was
//! made. Equal `source` and `id` mean the same event: a repeated delivery is byte for byte the same.

use crate::watch::alert::{AlertEvent, Episode, Evidence, State, Transition};
use crate::watch::finding::{CurveFound, Finding, WindowFound, as_text, as_text_or_null};
use crate::watch::time::{EventTime, ShellTime};
use crate::watch::wording;
use serde::Serialize;

/// The media type of an alert event.
pub const CONTENT_TYPE: &str = "application/cloudevents+json; charset=utf-8";

/// What an event is told about, besides itself.
#[derive(Clone, Copy, Debug)]
pub struct Surroundings<'a> {
    /// The site's name.
    pub site: &'a str,
    /// The channel's name.
    pub channel: &'a str,
    /// The channel's unit.
    pub unit: &'a str,
    /// The finding at that moment.
    pub finding: Option<&'a Finding>,
}

#[derive(Serialize)]
struct Envelope<'a> {
    specversion: &'static str,
    id: &'a str,
    source: String,
    r#type: String,
    subject: &'a str,
    #[serde(serialize_with = "as_text")]
    time: EventTime,
    recordedtime: String,
    datacontenttype: &'static str,
    data: Data<'a>,
}

#[derive(Serialize)]
struct Data<'a> {
    alert: &'a str,
    channel: &'a str,
    kind: &'static str,
    state: State,
    suggested_status: Option<&'static str>,
    #[serde(serialize_with = "as_text")]
    since: EventTime,
    unit: &'a str,
    says: String,
    r#do: &'a [String],
    evidence: EvidenceShown,
    curve: Option<&'a CurveFound>,
    window: Option<&'a WindowFound>,
    cautions: [&'static str; 3],
}

#[derive(Serialize)]
struct EvidenceShown {
    statistic: Option<f64>,
    p: Option<f64>,
    size: Option<f64>,
    #[serde(serialize_with = "as_text_or_null")]
    at: Option<EventTime>,
}

impl From<Evidence> for EvidenceShown {
    fn from(e: Evidence) -> Self {
        let finite = |v: Option<f64>| v.filter(|v| v.is_finite());
        EvidenceShown {
            statistic: finite(e.statistic),
            p: finite(e.p),
            size: finite(e.size),
            at: e.at,
        }
    }
}

/// The one sentence of an event: what was found, or what became of it.
pub fn sentence(event: &AlertEvent) -> String {
    let claim = &event.episode.claim;
    let ending = event.episode.ending;
    match event.transition {
        Transition::Raised | Transition::Revised => claim.words.says.clone(),
        Transition::Returned => {
            format!("{} Nobody has acknowledged this alert yet.", wording::gone(claim.kind, ending))
        }
        Transition::Cleared if event.episode.state == State::Normal => {
            format!("{} Closed.", wording::gone(claim.kind, ending))
        }
        Transition::Cleared => wording::gone(claim.kind, ending).to_owned(),
        Transition::Acknowledged => "Acknowledged; the condition still holds.".to_owned(),
        Transition::Shelved => match event.episode.shelf {
            Some((until, _)) => format!("Put aside until {until}."),
            None => "Put aside.".to_owned(),
        },
        Transition::Unshelved => "No longer put aside; the condition still holds.".to_owned(),
    }
}

/// An alert event as one JSON text.
pub fn alert_event(around: &Surroundings<'_>, event: &AlertEvent, recorded: ShellTime) -> String {
    let claim = &event.episode.claim;
    let envelope = Envelope {
        specversion: "1.0",
        id: &event.id,
        source: format!("/asfound/{}", around.site),
        r#type: format!("asfound.alert.{}", event.transition.name()),
        subject: around.channel,
        time: event.time,
        recordedtime: recorded.to_string(),
        datacontenttype: "application/json",
        data: Data {
            alert: &event.episode.alert,
            channel: around.channel,
            kind: claim.kind.name(),
            state: event.episode.state,
            suggested_status: claim.kind.suggested_status(),
            since: event.episode.since,
            unit: around.unit,
            says: sentence(event),
            r#do: &claim.words.check_first,
            evidence: claim.evidence.into(),
            curve: around.finding.and_then(|finding| finding.curve.as_ref()),
            window: around.finding.map(|finding| &finding.window),
            cautions: wording::CAUTIONS,
        },
    };
    serde_json::to_string(&envelope).expect("plain structs of text and finite numbers")
}

/// The alerts that stand now, as one JSON text; an empty list when there is none.
pub fn standing(open: &[Episode]) -> String {
    #[derive(Serialize)]
    struct Standing<'a> {
        alert: &'a str,
        kind: &'static str,
        state: State,
        suggested_status: Option<&'static str>,
        #[serde(serialize_with = "as_text")]
        since: EventTime,
        says: &'a str,
        r#do: &'a [String],
    }
    let list: Vec<Standing<'_>> = open
        .iter()
        .map(|episode| Standing {
            alert: &episode.alert,
            kind: episode.claim.kind.name(),
            state: episode.state,
            suggested_status: episode.claim.kind.suggested_status(),
            since: episode.since,
            says: &episode.claim.words.says,
            r#do: &episode.claim.words.check_first,
        })
        .collect();
    serde_json::to_string(&list).expect("plain structs of text")
}

/// A finding as one JSON text.
pub fn finding(finding: &Finding) -> String {
    serde_json::to_string(finding).expect("plain structs of text and numbers")
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::watch::alert::{AlertBook, Claim, Kind, Owner};

    #[test]
    fn an_event_has_the_attributes_that_cloudevents_requires() {
        let owner = Owner { site: "saltmarsh", channel: "press.PT-4107" };
        let at = EventTime(1_780_441_200_000_000);
        let words = wording::step(0.31, "bar", at);
        let evidence = Evidence {
            statistic: Some(f64::INFINITY),
            p: Some(1e-9),
            size: Some(0.31),
            at: Some(at),
        };
        let claim = Claim { kind: Kind::Step, evidence, words };
        let event = AlertBook::default().raise(owner, claim, at).unwrap();
        let around = Surroundings {
            site: "saltmarsh",
            channel: "press.PT-4107",
            unit: "bar",
            finding: None,
        };
        let text = alert_event(&around, &event, ShellTime(at.0 + 1));
        let json: serde_json::Value = serde_json::from_str(&text).unwrap();
        assert_eq!(json["specversion"], "1.0");
        assert_eq!(json["type"], "asfound.alert.raised");
        assert_eq!(json["source"], "/asfound/saltmarsh");
        assert_eq!(json["time"], "2026-06-02T23:00:00Z");
        assert_eq!(json["data"]["state"], "unacknowledged");
        assert_eq!(json["data"]["suggested_status"], "S");
        assert_eq!(json["data"]["evidence"]["statistic"], serde_json::Value::Null);
        assert_eq!(json["data"]["do"][0], "Check for an adjustment, a knock or a swapped part.");
    }
}
