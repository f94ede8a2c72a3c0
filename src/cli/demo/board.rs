//! What the outsider has heard over MQTT, and the table that it comes to in the end.

use crate::service::line::line_of_json;
use crate::service::shown::Shown;
use crate::watch::wording::{days, with_guard};
use serde_json::Value;
use std::collections::{BTreeMap, BTreeSet};

/// Channels that are kept; the demo's site has fifteen.
const CHANNELS_MAX: usize = 1000;
/// Alert events that are shown; further ones are not.
const EVENTS_MAX: usize = 100_000;

/// The newest finding and the standing alerts of each channel.
#[derive(Debug, Default)]
pub struct Board {
    findings: BTreeMap<String, Value>,
    standing: BTreeMap<String, Vec<String>>,
    /// Ids of the alert events heard: what comes twice counts once.
    events: BTreeSet<String>,
}

/// Whether a message on the service's topic says that it is in that state.
pub fn is_state(state: &str, payload: &[u8]) -> bool {
    serde_json::from_slice::<Value>(payload).is_ok_and(|told| told["state"] == state)
}

impl Board {
    /// Takes a message; `rest` is its topic below the site's own topics. Returns the technician's line
    /// of an alert event.
    pub fn hear(&mut self, rest: &str, payload: &[u8]) -> Option<String> {
        let (what, channel) = rest.split_once('/')?;
        let value: Value = serde_json::from_slice(payload).ok()?;
        let room = self.findings.len() < CHANNELS_MAX;
        match what {
            "alert" => {
                let id = value["id"].as_str()?.to_owned();
                let new = self.events.len() < EVENTS_MAX && self.events.insert(id);
                return new.then(|| line_of_json(&value)).flatten();
            }
            "finding" if room => drop(self.findings.insert(channel.to_owned(), value)),
            "standing" if room => {
                let kinds = value.as_array().into_iter().flatten();
                let kinds = kinds.filter_map(|open| {
                    let over = open["state"] == "returned-unacknowledged";
                    Some(format!("{}{}", open["kind"].as_str()?, if over { " (over)" } else { "" }))
                });
                self.standing.insert(channel.to_owned(), kinds.collect());
            }
            _ => {}
        }
        None
    }

    /// Alert events heard.
    pub fn events(&self) -> usize {
        self.events.len()
    }

    /// One row a channel, in words; `(over)`: the condition has gone, nobody has acknowledged the alert.
    pub fn table(&self) -> String {
        let heads = [
            "channel",
            "as of",
            "error (95 %)",
            "tolerance",
            "decision",
            "curve",
            "at the next visit",
            "open alerts",
        ];
        let mut rows = vec![heads.map(str::to_owned)];
        rows.extend(self.findings.iter().map(|(channel, finding)| self.row(channel, finding)));
        let mut widths = [0; 8];
        for row in &rows {
            for (width, cell) in widths.iter_mut().zip(row) {
                *width = (*width).max(cell.chars().count());
            }
        }
        let mut text = String::new();
        for row in &rows {
            let cells: Vec<String> =
                row.iter().zip(widths).map(|(cell, width)| format!("{cell:<width$}")).collect();
            text.push_str(cells.join("  ").trim_end());
            text.push('\n');
        }
        text
    }

    fn row(&self, channel: &str, finding: &Value) -> [String; 8] {
        let standing = self.standing.get(channel).map_or(&[][..], Vec::as_slice);
        let tolerance = &finding["tolerance"];
        [
            channel.to_owned(),
            finding["at"].as_str().and_then(|at| at.get(..10)).map_or_else(none, str::to_owned),
            now(finding),
            tolerance["limit"].as_f64().map_or_else(none, |limit| format!("±{limit}")),
            tolerance["decision"].as_str().map_or_else(none, str::to_owned),
            finding["curve"]["family"].as_str().map_or_else(none, str::to_owned),
            ahead(&finding["forecast"]),
            if standing.is_empty() { none() } else { standing.join(", ") },
        ]
        .map(|cell| Shown(&cell, 60).to_string())
    }
}

fn none() -> String {
    "-".to_owned()
}

fn now(finding: &Value) -> String {
    let (now, unit) = (&finding["now"], finding["unit"].as_str().unwrap_or_default());
    match (now["deviation"].as_f64(), now["high"].as_f64()) {
        (Some(value), Some(high)) => {
            let (half, [value]) = with_guard(high - value, [value]);
            format!("{value} ± {half} {unit}")
        }
        _ => none(),
    }
}

fn ahead(forecast: &Value) -> String {
    let day = forecast["at"].as_str().and_then(|at| at.get(..10)).unwrap_or_default();
    let figure = |key: &str| forecast[key].as_f64();
    match (figure("deviation"), figure("low"), figure("high")) {
        (Some(value), Some(low), Some(high)) => {
            let (_, [value, low, high]) = with_guard((high - low) / 2.0, [value, low, high]);
            format!("{day}: {value} ({low} to {high})")
        }
        _ => match forecast["needs_days_past_newest"].as_f64() {
            Some(needs) => format!("{day}: no statement, {} is too far", days(needs)),
            None => none(),
        },
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_refused_statement_shows_no_number() {
        let mut board = Board::default();
        let finding = r#"{"unit":"bar","at":"2026-10-31T00:00:00Z","now":{"deviation":0.1,"low":0.09,"high":0.11},
            "curve":{"family":"power"},"tolerance":{"limit":0.25,"decision":"pass"},
            "forecast":{"at":"2027-09-01T08:00:00Z","needs_days_past_newest":306.0,"deviation":null}}"#;
        assert_eq!(board.hear("finding/a.b", finding.as_bytes()), None);
        board.hear(
            "standing/a.b",
            br#"[{"kind":"beyond-reach","state":"acknowledged"},
            {"kind":"step","state":"returned-unacknowledged"}]"#,
        );
        let table = board.table();
        let row = table.lines().nth(1).unwrap();
        assert_eq!(
            row,
            "a.b      2026-10-31  +0.100 ± 0.010 bar  ±0.25      pass      power  \
             2027-09-01: no statement, 306 d is too far  beyond-reach, step (over)"
        );
    }

    #[test]
    fn garbage_is_not_heard() {
        let mut board = Board::default();
        assert_eq!(board.hear("alert/x", b"\xff{"), None);
        assert_eq!(board.hear("finding", b"{}"), None);
        assert_eq!(board.events(), 0);
        assert!(!is_state("online", b"[]") && is_state("online", br#"{"state":"online"}"#));
    }
}
