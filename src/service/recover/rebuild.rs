//! States made anew from the journal: what is needed besides its rows, and where what follows from
//! them was published before.

use super::Recovering;
use crate::service::store::{Store, StoreError};
use crate::watch::channel::Channel;
use crate::watch::engine::Action;
use crate::watch::time::{EventTime, ShellTime, Span};
use serde_json::Value;
use std::collections::{BTreeSet, VecDeque};

/// A channel whose state is made anew.
pub(super) struct Rebuild {
    /// What follows from rows up to this one was saved, and published, with the state that was there.
    pub upto: i64,
    /// When it was found silent, as the alert log has it, oldest first: whether the service listened
    /// then is not in the journal.
    silences: VecDeque<Silence>,
}

/// When a silence was told, and the newest reading then.
struct Silence {
    told: ShellTime,
    newest: Option<EventTime>,
}

impl Rebuild {
    pub(super) fn upto(upto: i64) -> Rebuild {
        Rebuild { upto, silences: VecDeque::new() }
    }

    /// Whether the next silence of the log was found before a row received at `got`: it was told
    /// before, or it is due by then for the reading that it names (what is due is found before a row
    /// and told after it). Each is said once.
    pub(super) fn silent_before(
        &mut self,
        got: ShellTime,
        known: Option<&Channel>,
        silent_after: Span,
    ) -> bool {
        let due = |silence: &Silence| {
            known.is_some_and(|known| {
                known.window.newest_reading() == silence.newest
                    && known.last_arrival.plus(silent_after) <= got
            })
        };
        let found = self.silences.front().is_some_and(|s| s.told < got || due(s));
        found && self.silences.pop_front().is_some()
    }
}

/// Reads from the store what the rows to come do not say.
pub(super) fn prepare(recovering: &mut Recovering<'_>, store: &Store) -> Result<(), StoreError> {
    if recovering.rebuilds.is_empty() {
        return Ok(());
    }
    let mut begun = BTreeSet::new();
    for (channel, action) in store.actions()? {
        if recovering.rebuilds.contains_key(&channel)
            && let Ok(Action::Reconfigured { was, .. }) = serde_json::from_str(&action)
            && begun.insert(channel.clone())
        {
            recovering.recovered.engine.begins_on(channel, was);
        }
    }
    for (_, channel, _, event) in store.alerts()? {
        if let Some(rebuild) = recovering.rebuilds.get_mut(&channel) {
            rebuild.silences.extend(silence_found(&event));
        }
    }
    for rebuild in recovering.rebuilds.values_mut() {
        rebuild.silences.make_contiguous().sort_by_key(|silence| silence.told);
    }
    Ok(())
}

/// The silence that an event of the log tells, if it does.
fn silence_found(event: &str) -> Option<Silence> {
    let event: Value = serde_json::from_str(event).ok()?;
    let time = |value: &Value| value.as_str()?.parse::<jiff::Timestamp>().ok();
    let raised = event["type"] == "asfound.alert.raised" && event["data"]["kind"] == "silent";
    let told = ShellTime(time(&event["recordedtime"])?.as_microsecond());
    let newest = time(&event["data"]["evidence"]["at"]).map(|at| EventTime(at.as_microsecond()));
    raised.then_some(Silence { told, newest })
}
