//! From the store back to an engine that continues as if it had never stopped.
//!
//! Saved states first, then the journal after them, row by row, through the same engine. What follows
//! from those rows was never published: state, alert and message are saved in one transaction.

use crate::service::intake::Router;
use crate::service::recall::{REMEMBERED_MAX, Recall, key_of_reading};
use crate::service::settings::Settings;
use crate::service::store::{Row, Store, StoreError};
use crate::watch::channel::Channel;
use crate::watch::engine::{Action, Engine};
use crate::watch::reading::{Reading, Taken};
use crate::watch::time::{EventTime, ShellTime};
use std::collections::BTreeMap;

/// Journal rows read at a time.
const ROWS_AT_A_TIME: i64 = 10_000;

/// Why an engine cannot be made from the store.
#[derive(Debug, thiserror::Error)]
pub enum RecoverError {
    /// The store.
    #[error(transparent)]
    Store(#[from] StoreError),
    /// A state of another version of the program.
    #[error(
        "the state of channel {channel} cannot be read ({why}); it was written by another version"
    )]
    State {
        /// The channel.
        channel: String,
        /// What is wrong.
        why: postcard::Error,
    },
}

/// What was recovered.
#[derive(Debug)]
pub struct Recovered {
    /// The engine, with effects of the replayed rows waiting.
    pub engine: Engine,
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
}

/// The bytes of a channel's state.
pub fn state_bytes(channel: &Channel) -> Vec<u8> {
    postcard::to_stdvec(channel).expect("plain data serialises to memory")
}

/// Makes the engine that the store describes.
pub fn recover(
    store: &Store,
    settings: &Settings,
    router: &Router,
    now: ShellTime,
) -> Result<Recovered, RecoverError> {
    let mut engine = Engine::new(settings.site.clone(), now);
    let mut saved: BTreeMap<String, i64> = BTreeMap::new();
    let mut unwatched = Vec::new();
    for state in store.states()? {
        let Some(watch) = watch_index(settings, router, &state.watch, &state.channel) else {
            unwatched.push(state.channel);
            continue;
        };
        let channel = postcard::from_bytes(&state.data)
            .map_err(|why| RecoverError::State { channel: state.channel.clone(), why })?;
        engine.restore(channel, watch);
        saved.insert(state.channel, state.upto);
    }
    let newest = store.newest_row()?;
    let mut recovered = Recovered {
        engine,
        recall: Recall::default(),
        unsaved: BTreeMap::new(),
        subscribed_before: store.subscribed_before()?,
        replayed: 0,
        unwatched,
    };
    let remember_from = newest - i64::try_from(REMEMBERED_MAX).unwrap_or(i64::MAX);
    let mut after = store.replay_from()?.min(remember_from).max(0);
    loop {
        let rows = store.journal_after(after, ROWS_AT_A_TIME)?;
        let Some(last) = rows.last() else { break };
        after = last.id;
        for row in &rows {
            recovered.remember(row);
            if row.id > saved.get(&row.row.channel).copied().unwrap_or(0) {
                recovered.replay(row, settings, router);
            }
        }
    }
    Ok(recovered)
}

impl Recovered {
    fn remember(&mut self, row: &Row) {
        let key = match (&row.row.action, row.row.message) {
            (Some(_), _) => return,
            (None, 0) => key_of_reading(&row.row.channel, row.row.time, row.row.value),
            (None, message) => message,
        };
        self.recall.remember(key);
    }

    fn replay(&mut self, row: &Row, settings: &Settings, router: &Router) {
        let (id, row) = (row.id, &row.row);
        let Some(watch) = watch_index(settings, router, &row.watch, &row.channel) else {
            return;
        };
        self.unsaved.entry(row.channel.clone()).or_insert(id);
        self.replayed += 1;
        apply(&mut self.engine, id, watch, &row.channel, row, ShellTime(row.got));
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
    row: &crate::service::store::NewRow,
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

/// The watch of a channel: the one with that topic pattern, else the first whose names fit.
pub fn watch_index(
    settings: &Settings,
    router: &Router,
    pattern: &str,
    channel: &str,
) -> Option<usize> {
    settings
        .routes
        .iter()
        .position(|route| route.pattern.as_str() == pattern)
        .or_else(|| router.watch_for_channel(channel))
}
