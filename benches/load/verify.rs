//! What a run claims, held against the readings as they were made and against a replay of them.

use crate::journal::{Journal, Row};
use crate::link::Seen;
use crate::plant::{Plant, name};
use serde_json::Value;
use std::collections::{BTreeMap, BTreeSet, HashMap};
use std::path::Path;
use std::process::{Command, Stdio};

/// Differences that are told one by one.
const DIFFERENCES_MAX: usize = 5;

/// Claims and whether they hold.
#[derive(Debug, Default)]
pub struct Verdict {
    /// Claims that do not hold.
    pub failed: usize,
}

impl Verdict {
    /// Tells a claim and counts it when it does not hold.
    pub fn claim(&mut self, holds: bool, what: &str) {
        println!("  {}  {what}", if holds { "holds " } else { "FAILS " });
        self.failed += usize::from(!holds);
    }
}

/// Every reading is in the journal once, as it was made and in its channel's order.
pub fn journal_is_whole(plant: &Plant, rows: &[Row], verdict: &mut Verdict) {
    let total = plant.total();
    verdict.claim(
        rows.len() as u64 == total,
        &format!("rows in the journal: {}, published: {total}", rows.len()),
    );
    let names: Vec<String> = (0..plant.channels).map(name).collect();
    let mut open: HashMap<(&str, i64), f64> =
        plant.readings().map(|m| ((names[m.channel].as_str(), m.time_us), m.value)).collect();
    let (mut strange, mut out_of_order) = (0, 0);
    let mut newest: HashMap<&str, i64> = HashMap::new();
    for (channel, time, value) in rows {
        // A second row of the same reading finds nothing to take away.
        let made = open.remove(&(channel.as_str(), *time));
        strange += u64::from(made.map(f64::to_bits) != Some(value.to_bits()));
        let before = newest.insert(channel, *time);
        out_of_order += u64::from(before.is_some_and(|before| before > *time));
    }
    verdict.claim(
        strange == 0 && open.is_empty(),
        &format!(
            "each reading once and as it was made: {} missing, {strange} twice or altered",
            open.len()
        ),
    );
    verdict.claim(
        out_of_order == 0,
        &format!("each channel in its order: {out_of_order} rows older than the one before"),
    );
}

/// Every alert of the store's log was received, as it stands there; nothing else was.
pub fn alerts_came(plant: &Plant, journal: &Journal, seen: &Seen, verdict: &mut Verdict) {
    let logged: BTreeMap<String, String> = match journal.alerts() {
        Ok(alerts) => alerts.into_iter().collect(),
        Err(why) => return verdict.claim(false, &why),
    };
    let same = logged.len() == seen.events.len()
        && logged
            .iter()
            .all(|(id, text)| seen.events.get(id).is_some_and(|s| s == text.as_bytes()));
    verdict.claim(
        same && seen.wrong.is_empty(),
        &format!(
            "each alert event received once: {} in the log, {} received, {} redelivered byte for \
             byte, {} wrong",
            logged.len(),
            seen.events.len(),
            seen.repeated,
            seen.wrong.len()
        ),
    );
    for wrong in seen.wrong.iter().take(DIFFERENCES_MAX) {
        println!("          {wrong}");
    }
    let named = |text: &str| {
        let json: Value = serde_json::from_str(text).unwrap_or_default();
        json["data"]["channel"].as_str().unwrap_or_default().to_owned()
    };
    let told: BTreeSet<String> = logged.values().map(|text| named(text)).collect();
    let found = plant.knocked.iter().filter(|&&channel| told.contains(&name(channel))).count();
    verdict.claim(
        found > 0,
        &format!(
            "alerts arose: in {found} of the {} knocked channels, in {} others",
            plant.knocked.len(),
            told.len() - found
        ),
    );
}

/// The alerts that were received are those of an uninterrupted replay of the same readings.
pub fn replay_agrees(plant: &Plant, folder: &Path, seen: &Seen, verdict: &mut Verdict) {
    let expected = match replay(plant, folder) {
        Ok(expected) => expected,
        Err(why) => return verdict.claim(false, &why),
    };
    let received: BTreeMap<String, Value> =
        seen.events.iter().filter_map(|(id, text)| Some((id.clone(), body(text)?))).collect();
    let differences: Vec<String> = expected
        .iter()
        .filter_map(|(id, body)| match received.get(id) {
            None => Some(format!("{id} only in the replay: {body}")),
            Some(got) => {
                difference(got, body, "").map(|where_and_what| format!("{id}{where_and_what}"))
            }
        })
        .chain(
            received
                .iter()
                .filter(|(id, _)| !expected.contains_key(*id))
                .map(|(id, body)| format!("{id} not in the replay: {body}")),
        )
        .collect();
    verdict.claim(
        differences.is_empty(),
        &format!(
            "alert events equal those of an uninterrupted replay, time of record apart: {} there, \
             {} differences",
            expected.len(),
            differences.len()
        ),
    );
    for difference in differences.iter().take(DIFFERENCES_MAX) {
        println!("          {difference}");
    }
}

fn replay(plant: &Plant, folder: &Path) -> Result<BTreeMap<String, Value>, String> {
    let table = folder.join("readings.csv");
    std::fs::write(&table, plant.table()).map_err(|why| why.to_string())?;
    let output = Command::new(env!("CARGO_BIN_EXE_asfound"))
        .env_clear()
        .args(["replay", "--json", "--config"])
        .arg(folder.join("asfound.toml"))
        .arg(&table)
        .stdin(Stdio::null())
        .output()
        .map_err(|why| why.to_string())?;
    if !output.status.success() {
        return Err(format!("the replay failed: {}", String::from_utf8_lossy(&output.stderr)));
    }
    let lines = output.stdout.split(|byte| *byte == b'\n').filter(|line| !line.is_empty());
    lines
        .map(|line| {
            let body = body(line).ok_or("a line of the replay is not JSON")?;
            let id = body["id"].as_str().ok_or("an event of the replay has no id")?.to_owned();
            Ok((id, body))
        })
        .collect()
}

/// Where two bodies differ first: path, value received, value of the replay.
fn difference(got: &Value, expected: &Value, path: &str) -> Option<String> {
    match (got, expected) {
        (Value::Object(a), Value::Object(b)) if a.keys().eq(b.keys()) => {
            a.iter().find_map(|(key, value)| difference(value, &b[key], &format!("{path}/{key}")))
        }
        _ if got == expected => None,
        _ => Some(format!("{path}: {got}, in the replay {expected}")),
    }
}

/// An event without the time at which it was recorded.
fn body(text: &[u8]) -> Option<Value> {
    let mut event: Value = serde_json::from_slice(text).ok()?;
    event.as_object_mut()?.remove("recordedtime");
    Some(event)
}
