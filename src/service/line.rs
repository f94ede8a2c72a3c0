//! The technician's line: one event, one line, no control characters.

use crate::service::envelope::sentence;
use crate::service::shown::Shown;
use crate::watch::alert::{AlertEvent, Transition};
use crate::watch::wording::minute;

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
    let name = Shown(channel, NAME_CHARS_MAX).to_string();
    let when = minute(event.time);
    let (what, kind) = (event.transition.name(), claim.kind.name());
    // Units come from the settings file; they too are shown as text, never as commands.
    let text = Shown(&text, usize::MAX);
    format!("{when}  {name:<15} {what:<8} {kind:<15} {text}")
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::watch::alert::{AlertBook, Claim, Evidence, Kind, Owner};
    use crate::watch::time::EventTime;
    use crate::watch::wording;

    fn check(channel: &str) -> String {
        let owner = Owner { site: "saltmarsh", channel };
        let at = EventTime(1_780_441_200_000_000);
        let claim = Claim {
            kind: Kind::Step,
            evidence: Evidence::default(),
            words: wording::step(0.31, "bar", at),
        };
        line(channel, &AlertBook::default().raise(owner, claim, at).unwrap())
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
