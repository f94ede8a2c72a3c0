//! The technician's line: one event, one line, no control characters.

use crate::service::envelope::sentence;
use crate::service::shown::Shown;
use crate::watch::alert::{AlertEvent, Transition};
use crate::watch::time::EventTime;
use crate::watch::wording::minute;
use serde_json::Value;

/// Characters shown of a channel's name.
const NAME_CHARS_MAX: usize = 60;

/// Writes an event as one line: when, which channel, what happened, which kind, what to do.
pub fn line(channel: &str, event: &AlertEvent) -> String {
    let claim = &event.episode.claim;
    let mut text = sentence(event);
    if matches!(event.transition, Transition::Raised | Transition::Revised) {
        for item in &claim.words.check_first {
            text.push(' ');
            text.push_str(item);
        }
    }
    written(&minute(event.time), channel, event.transition.name(), claim.kind.name(), &text)
}

/// Writes an event that came over MQTT, as JSON, as the same line. None: it is no alert event.
pub fn line_of_json(event: &Value) -> Option<String> {
    let data = event.get("data")?;
    let text_of = |value: &Value, key: &str| value.get(key)?.as_str().map(str::to_owned);
    let what = text_of(event, "type")?;
    let what = what.strip_prefix("asfound.alert.")?;
    let time: jiff::Timestamp = text_of(event, "time")?.parse().ok()?;
    let mut text = text_of(data, "says")?;
    if matches!(what, "raised" | "revised") {
        for item in data.get("do")?.as_array()? {
            text.push(' ');
            text.push_str(item.as_str()?);
        }
    }
    let when = minute(EventTime(time.as_microsecond()));
    let (channel, kind) = (text_of(event, "subject")?, text_of(data, "kind")?);
    Some(written(&when, &channel, what, &kind, &text))
}

fn written(when: &str, channel: &str, what: &str, kind: &str, text: &str) -> String {
    let name = Shown(channel, NAME_CHARS_MAX).to_string();
    // Units come from the settings file, all of it may come over the wire: text, never commands.
    let (what, kind, text) = (Shown(what, 20), Shown(kind, 20), Shown(text, usize::MAX));
    format!("{when}  {name:<15} {:<8} {:<15} {text}", what.to_string(), kind.to_string())
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::service::envelope::{Surroundings, alert_event};
    use crate::watch::alert::{AlertBook, Claim, Evidence, Kind, Owner};
    use crate::watch::time::ShellTime;
    use crate::watch::wording;

    fn check(channel: &str) -> String {
        let owner = Owner { site: "saltmarsh", channel };
        let at = EventTime(1_780_441_200_000_000);
        let claim = Claim {
            kind: Kind::Step,
            evidence: Evidence::default(),
            words: wording::step(0.31, "bar", at),
        };
        let event = AlertBook::default().raise(owner, claim, at).unwrap();
        let around = Surroundings { site: "saltmarsh", channel, unit: "bar", finding: None };
        let json = alert_event(&around, &event, ShellTime(at.0));
        let over_mqtt = line_of_json(&serde_json::from_str(&json).unwrap()).unwrap();
        assert_eq!(over_mqtt, line(channel, &event), "the same line at both ends");
        over_mqtt
    }

    #[test]
    fn a_raised_step_reads_as_one_line() {
        assert_eq!(
            check("press.PT-4107"),
            "2026-06-02 23:00Z  press.PT-4107   raised   step            Residuals jumped by +0.310 \
             bar at about 2026-06-02 23:00Z; the curve no longer describes this instrument. Check \
             for an adjustment, a knock or a swapped part. If it was calibrated, record that."
        );
    }

    #[test]
    fn a_hostile_name_cannot_make_a_second_line() {
        let text = check("x\n2026-01-01 forged\u{1b}[2J");
        assert!(!text.contains('\n') && !text.contains('\u{1b}'), "{text}");
    }
}
