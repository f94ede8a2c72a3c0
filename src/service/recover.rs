//! From the store back to an engine that continues as if it had never stopped.
//!
//! Saved states first, then the journal after them, row by row, through the same engine. What follows
//! from those rows was never published: state, alert and message are saved in one transaction. A state
//! that cannot be used is made anew from the whole journal, which has everything; what was published
//! when it was saved is not published again.

mod rebuild;
mod settle;
#[cfg(test)]
mod tests;

pub use settle::settle;

use crate::service::intake::Router;
use crate::service::recall::{REMEMBERED_MAX, Recall, key_of_reading};
use crate::service::settings::Settings;
use crate::service::store::{NewRow, Row, SavedState, Store, StoreError};
use crate::watch::channel::Channel;
use crate::watch::engine::{Action, Effect, Engine};
use crate::watch::reading::{Reading, Taken};
use crate::watch::time::{EventTime, ShellTime};
use rebuild::Rebuild;
use std::collections::{BTreeMap, BTreeSet};

/// Journal rows read at a time.
const ROWS_AT_A_TIME: i64 = 10_000;

/// The version of a state's bytes, their first byte. To be raised with every change of a stored type
/// (fields and variants are known by their order): states of another version are rebuilt.
const STATE_VERSION: u8 = 0xA3;

/// What was recovered.
#[derive(Debug)]
pub struct Recovered {
    /// The engine.
    pub engine: Engine,
    /// What followed from the rows replayed, still to be told.
    pub effects: Vec<Effect>,
    /// What was journaled lately.
    pub recall: Recall,
    /// The journal row up to which each channel's state is saved; absent: not saved yet.
    pub unsaved: BTreeMap<String, i64>,
    /// A broker should have a session of ours.
    pub subscribed_before: bool,
    /// Rows replayed.
    pub replayed: u64,
    /// Channels of which no watch speaks any more.
    pub unwatched: Vec<String>,
    /// Channels whose state was rebuilt, and why.
    pub rebuilt: Vec<(String, &'static str)>,
    /// Channels that belong to the watch of another topic pattern now: (channel, that pattern).
    pub moved: Vec<(String, String)>,
}

/// The bytes of a channel's state.
pub fn state_bytes(channel: &Channel) -> Vec<u8> {
    postcard::to_extend(channel, vec![STATE_VERSION]).expect("plain data serialises to memory")
}

/// The channel that a state is, or why it cannot be used.
fn channel_of(state: &SavedState) -> Result<Channel, &'static str> {
    let bytes = state.data.as_deref().ok_or("does not match its checksum")?;
    match bytes.split_first() {
        Some((&STATE_VERSION, bytes)) => postcard::from_bytes(bytes)
            .ok()
            .filter(|channel: &Channel| channel.name == state.channel)
            .ok_or("cannot be read"),
        _ => Err("was written by another version of the program"),
    }
}

/// Makes the engine that the store describes.
pub fn recover(
    store: &Store,
    settings: &Settings,
    router: &Router,
    now: ShellTime,
) -> Result<Recovered, StoreError> {
    let newest = store.newest_row()?;
    let states = store.states()?;
    let seen = states.iter().map(|state| state.watch.clone()).collect();
    let mut recovering = Recovering {
        recovered: Recovered {
            engine: Engine::new(settings.site.clone(), now),
            effects: Vec::new(),
            recall: Recall::default(),
            unsaved: BTreeMap::new(),
            subscribed_before: store.subscribed_before()?,
            replayed: 0,
            unwatched: Vec::new(),
            rebuilt: Vec::new(),
            moved: Vec::new(),
        },
        router,
        seen,
        watches: BTreeMap::new(),
        saved: BTreeMap::new(),
        rebuilds: BTreeMap::new(),
    };
    for state in states {
        recovering.restore(state, newest);
    }
    rebuild::prepare(&mut recovering, store)?;
    let remember_from = newest - i64::try_from(REMEMBERED_MAX).unwrap_or(i64::MAX);
    let first = if recovering.rebuilds.is_empty() { store.replay_from()? } else { 0 };
    let mut after = first.min(remember_from).max(0);
    loop {
        let rows = store.journal_after(after, ROWS_AT_A_TIME)?;
        let Some(last) = rows.last() else { break };
        after = last.id;
        for row in &rows {
            recovering.row(row);
        }
    }
    Ok(recovering.finish())
}

/// A recovery under way.
struct Recovering<'a> {
    recovered: Recovered,
    router: &'a Router,
    /// The topic patterns under which any channel was seen.
    seen: BTreeSet<String>,
    /// The watch of each channel met so far, index into the settings.
    watches: BTreeMap<String, Option<usize>>,
    /// The journal row up to which each sound state goes.
    saved: BTreeMap<String, i64>,
    /// The channels whose states are made anew.
    rebuilds: BTreeMap<String, Rebuild>,
}

impl Recovering<'_> {
    fn restore(&mut self, state: SavedState, newest: i64) {
        let Some(watch) = self.watch_of(&state.channel, &state.watch) else {
            self.recovered.unwatched.push(state.channel);
            return;
        };
        match channel_of(&state) {
            Ok(channel) => {
                self.recovered.engine.restore(channel, watch);
                self.saved.insert(state.channel, state.upto);
            }
            Err(why) => {
                self.recovered.rebuilt.push((state.channel.clone(), why));
                self.rebuilds.insert(state.channel, Rebuild::upto(state.upto.min(newest)));
            }
        }
    }

    fn watch_of(&mut self, channel: &str, pattern: &str) -> Option<usize> {
        if let Some(&watch) = self.watches.get(channel) {
            return watch;
        }
        let watch = self.router.watch_of_known(channel, pattern, &self.seen);
        if let Some(watch) = watch {
            let present = self.router.route_of(watch).pattern.as_str();
            if present != pattern {
                self.recovered.moved.push((channel.to_owned(), present.to_owned()));
            }
        }
        self.watches.insert(channel.to_owned(), watch);
        watch
    }

    fn row(&mut self, row: &Row) {
        let (id, row) = (row.id, &row.row);
        self.recovered.remember(row);
        if id <= self.saved.get(&row.channel).copied().unwrap_or(0) {
            return;
        }
        let Some(watch) = self.watch_of(&row.channel, &row.watch) else { return };
        let recovered = &mut self.recovered;
        let got = ShellTime(row.got);
        while let Some(due) = recovered.engine.next_due().filter(|due| *due <= got) {
            recovered.engine.tick(due);
        }
        silences_again(&mut recovered.engine, &mut self.rebuilds, &row.channel, got);
        recovered.unsaved.entry(row.channel.clone()).or_insert(id);
        recovered.replayed += 1;
        apply(&mut recovered.engine, id, watch, &row.channel, row, got);
        self.keep_effects(id);
    }

    /// Keeps what followed from journal row `id`, but for what was published before.
    fn keep_effects(&mut self, id: i64) {
        let rebuilds = &self.rebuilds;
        let news = |effect: &Effect| {
            let channel = match effect {
                Effect::Finding(finding) => &finding.channel,
                Effect::Alert { channel, .. } | Effect::Standing { channel, .. } => channel,
                // For auditing by `replay` only.
                Effect::Looked { .. } => return false,
            };
            rebuilds.get(channel).is_none_or(|rebuild| id > rebuild.upto)
        };
        let effects = self.recovered.engine.effects().into_iter();
        self.recovered.effects.extend(effects.filter(news));
    }

    /// What stands in the channels made anew is told again: retained messages, no events.
    fn finish(mut self) -> Recovered {
        for channel in self.rebuilds.keys().cloned().collect::<Vec<_>>() {
            let engine = &mut self.recovered.engine;
            silences_again(engine, &mut self.rebuilds, &channel, ShellTime(i64::MAX));
        }
        self.keep_effects(0);
        let recovered = &mut self.recovered;
        for (channel, finding) in recovered.engine.overview() {
            if !self.rebuilds.contains_key(&channel.name) {
                continue;
            }
            let open = channel.alerts.open().to_vec();
            recovered.effects.push(Effect::Standing { channel: channel.name.clone(), open });
            recovered.effects.extend(finding.map(|finding| Effect::Finding(Box::new(finding))));
        }
        self.recovered
    }
}

/// Finds a channel that is made anew silent where the log of alerts has it before that time.
fn silences_again(
    engine: &mut Engine,
    rebuilds: &mut BTreeMap<String, Rebuild>,
    channel: &str,
    got: ShellTime,
) {
    let Some(rebuild) = rebuilds.get_mut(channel) else { return };
    let Some(watch) = engine.watch_of(channel) else { return };
    let silent_after = engine.settings().watches[watch].silent_after;
    while rebuild.silent_before(got, engine.observe(channel), silent_after) {
        engine.was_silent(channel);
    }
}

impl Recovered {
    fn remember(&mut self, row: &NewRow) {
        let key = match (&row.action, row.message) {
            (Some(_), _) => return,
            (None, 0) => key_of_reading(&row.channel, row.time, row.value),
            (None, message) => message,
        };
        self.recall.remember(key);
    }
}

/// What a journal row did to the engine.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Applied {
    /// A reading, and what became of it.
    Reading(Taken),
    /// Something a person asked for; whether it changed anything.
    Action(bool),
}

/// Gives one journal row to the engine.
pub fn apply(
    engine: &mut Engine,
    id: i64,
    watch: usize,
    channel: &str,
    row: &NewRow,
    got: ShellTime,
) -> Applied {
    let serial = u64::try_from(id).unwrap_or(0);
    match &row.action {
        None => {
            let reading = Reading { serial, time: EventTime(row.time), deviation: row.value };
            Applied::Reading(engine.take(channel, watch, &reading, got))
        }
        // Only actions that could be read were journaled; one of a later version says nothing here.
        Some(text) => Applied::Action(
            serde_json::from_str::<Action>(text)
                .is_ok_and(|action| engine.act(channel, &action, serial, got)),
        ),
    }
}
