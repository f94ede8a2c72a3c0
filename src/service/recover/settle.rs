//! What a start with other settings changes: journaled, so that the next start comes to the same.

use super::{Recovered, apply};
use crate::service::intake::Router;
use crate::service::shown::Shown;
use crate::service::store::{NewRow, Store, StoreError};
use crate::watch::channel::KnownFrom;
use crate::watch::engine::Action;
use crate::watch::settings::Basis;
use crate::watch::time::{EventTime, ShellTime};
use std::collections::BTreeMap;

/// Channels named in one line; further ones are counted.
const NAMED_MAX: usize = 10;

/// Holds the channels against the settings: a channel that another watch has now is noted there, and
/// one whose points rest on other settings begins anew, by an action in the journal.
///
/// Returns what to say of it, one sentence without full stop each.
pub fn settle(
    store: &mut Store,
    recovered: &mut Recovered,
    router: &Router,
    now: ShellTime,
) -> Result<Vec<String>, StoreError> {
    let mut said = recovered_words(recovered);
    if !recovered.moved.is_empty() {
        store.note_watches(&recovered.moved)?;
    }
    let changes = recovered.engine.unlike_the_settings();
    if changes.is_empty() {
        return Ok(said);
    }
    let mut alike: BTreeMap<(usize, String), Vec<String>> = BTreeMap::new();
    let mut rows = Vec::with_capacity(changes.len());
    for (channel, watch, was, is) in &changes {
        let by_mark = recovered.engine.observe(channel).and_then(|known| known.cycle);
        let by_mark = by_mark.filter(|cycle| cycle.known_from == KnownFrom::Mark);
        for words in change_words(was, is, by_mark.map(|cycle| cycle.age_zero)) {
            alike.entry((*watch, words)).or_default().push(channel.clone());
        }
        let action = Action::Reconfigured { was: was.clone(), is: is.clone() };
        rows.push(NewRow {
            channel: channel.clone(),
            watch: router.route_of(*watch).pattern.as_str().to_owned(),
            time: 0,
            value: 0.0,
            got: now.0,
            message: 0,
            action: Some(serde_json::to_string(&action).expect("plain data serialises to memory")),
        });
    }
    let first = store.append(&rows)?;
    for ((id, row), (_, watch, _, _)) in (first..).zip(&rows).zip(&changes) {
        recovered.unsaved.entry(row.channel.clone()).or_insert(id);
        apply(&mut recovered.engine, id, *watch, &row.channel, row, now);
    }
    recovered.effects.extend(recovered.engine.effects());
    for ((watch, words), channels) in alike {
        said.push(format!("watch[{}] has changed: {words}: {}", watch + 1, named(&channels)));
    }
    Ok(said)
}

/// What the recovery itself found.
fn recovered_words(recovered: &Recovered) -> Vec<String> {
    let mut rebuilt: BTreeMap<&str, Vec<String>> = BTreeMap::new();
    for (channel, why) in &recovered.rebuilt {
        rebuilt.entry(why).or_default().push(channel.clone());
    }
    let mut moved: BTreeMap<&str, Vec<String>> = BTreeMap::new();
    for (channel, pattern) in &recovered.moved {
        moved.entry(pattern).or_default().push(channel.clone());
    }
    let rebuilt = rebuilt.into_iter().map(|(why, channels)| {
        format!("the saved state {why}, and was rebuilt from the journal: {}", named(&channels))
    });
    let moved = moved.into_iter().map(|(pattern, channels)| {
        let pattern = Shown(pattern, 120);
        format!("the watch of {pattern} has these channels from now on: {}", named(&channels))
    });
    rebuilt.chain(moved).collect()
}

/// What has changed for a channel: was, is, what follows.
fn change_words(was: &Basis, is: &Basis, marked: Option<EventTime>) -> Vec<String> {
    let mut words = Vec::new();
    if was.measured_as != is.measured_as {
        words.push(format!(
            "readings were measured as ({}), now as ({}); windows begin anew, and alerts on the \
             readings before are lowered",
            Shown(&was.measured_as, 300),
            Shown(&is.measured_as, 300)
        ));
    }
    if was.calibrated != is.calibrated {
        let shown = |time: Option<EventTime>| {
            time.map_or_else(|| "not set".to_owned(), |time| time.to_string())
        };
        let follows = match (is.calibrated, marked) {
            (_, Some(mark)) => format!("age zero stays at the calibration mark of {mark}"),
            (Some(_), None) => "a new cycle begins there".to_owned(),
            (None, None) => "age zero stays where it was".to_owned(),
        };
        let (was, is) = (shown(was.calibrated), shown(is.calibrated));
        words.push(format!("calibrated was {was}, now {is}; {follows}"));
    }
    words
}

/// Names, escaped, as many as one line bears.
fn named(channels: &[String]) -> String {
    let shown: Vec<String> =
        channels.iter().take(NAMED_MAX).map(|name| Shown(name, 60).to_string()).collect();
    let further = channels.len() - shown.len();
    let further = if further > 0 { format!(" and {further} more") } else { String::new() };
    let channel = if channels.len() == 1 { "channel" } else { "channels" };
    format!("{} {channel} ({}{further})", channels.len(), shown.join(", "))
}
