//! The store: one SQLite file with the journal of readings and actions (ground state), the channels'
//! derived state, the outbox and the log of alert events. The only place that knows SQL.
//!
//! A reading is durable when [`Store::append`] has returned: WAL with `synchronous=FULL`, both read
//! back, the directory synced once after the file was made. One process has the store open at a time.

mod probe;
mod schema;
mod writer;

pub use probe::probe;
pub use writer::{Writer, WriterGone};

use rusqlite::{Connection, OptionalExtension, params};
use std::collections::{BTreeMap, BTreeSet};
use std::fs::File;
use std::path::{Path, PathBuf};

/// Name of the database file in the store's directory.
pub const FILE_NAME: &str = "asfound.sqlite";
const LOCK_NAME: &str = "asfound.lock";

/// The most unsent messages kept. Retained ones replace each other by topic and do not pile up;
/// when alert events reach this number, the oldest unsent events stay and newer ones are kept only
/// in the alert log (and counted), so that what began the trouble is still told.
pub const OUTBOX_ROWS_MAX: i64 = 100_000;

/// Why the store cannot do what was asked.
#[derive(Debug, thiserror::Error)]
pub enum StoreError {
    /// The directory cannot be made, opened or synced.
    #[error("store directory {path}: {source}")]
    Directory {
        /// The directory.
        path: PathBuf,
        /// What the system said.
        source: std::io::Error,
    },
    /// Another process has it open.
    #[error("store {path} is in use by another process; one daemon per store")]
    InUse {
        /// The directory.
        path: PathBuf,
    },
    /// SQLite did not take the settings that make a commit durable.
    #[error(
        "store is not durable: journal mode {mode} (wal needed), synchronous {synchronous} (2 needed)"
    )]
    NotDurable {
        /// The mode that SQLite reports.
        mode: String,
        /// The level that SQLite reports.
        synchronous: i64,
    },
    /// Written by another version of the program.
    #[error("store has schema version {found}, this program knows {known}; nothing was changed")]
    OtherVersion {
        /// Version in the file.
        found: i64,
        /// Version of this program.
        known: i64,
    },
    /// SQLite said no.
    #[error("store: {0}")]
    Sqlite(#[from] rusqlite::Error),
}

/// One row for the journal.
#[derive(Clone, Debug, PartialEq)]
pub struct NewRow {
    /// The channel's name.
    pub channel: String,
    /// The topic pattern of its watch; kept from the channel's first row.
    pub watch: String,
    /// Event time, µs.
    pub time: i64,
    /// Deviation; 0 for an action.
    pub value: f64,
    /// When it was received, µs.
    pub got: i64,
    /// Hash of the message it came in.
    pub message: i64,
    /// A person's action as JSON; None for a reading.
    pub action: Option<String>,
}

/// One row of the journal, read back.
#[derive(Clone, Debug, PartialEq)]
pub struct Row {
    /// Its place in the journal.
    pub id: i64,
    /// What it holds.
    pub row: NewRow,
}

/// The state of one channel, read back and checked.
#[derive(Clone, Debug, PartialEq)]
pub struct SavedState {
    /// The channel's name.
    pub channel: String,
    /// The topic pattern of its watch.
    pub watch: String,
    /// The last journal row that is in it.
    pub upto: i64,
    /// The state; None: it does not match its checksum.
    pub data: Option<Vec<u8>>,
}

/// A message to publish.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct NewMessage {
    /// Where to.
    pub topic: String,
    /// What.
    pub payload: Vec<u8>,
    /// Retained: replaces an unsent one of the same topic.
    pub retained: bool,
    /// MQTT content type.
    pub content_type: Option<String>,
    /// MQTT correlation data, of a reply.
    pub correlation: Option<Vec<u8>>,
    /// The alert event that it is, by its id in the alert log. One that the log had before is not
    /// published again.
    pub event_id: Option<String>,
}

/// What is saved together, in one transaction: state, and what followed from it.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Bundle {
    /// (channel, journal row included last, state bytes).
    pub states: Vec<(String, i64, Vec<u8>)>,
    /// Messages that follow from these states.
    pub messages: Vec<NewMessage>,
    /// Alert events for the log: (id, channel, time µs, event as JSON).
    pub alerts: Vec<(String, String, i64, String)>,
    /// Journal rows above this are not in every state yet.
    pub replay_from: Option<i64>,
}

/// The open store; held by one thread.
#[derive(Debug)]
pub struct Store {
    connection: Connection,
    channels: BTreeMap<String, i64>,
    _lock: File,
}

impl Store {
    /// Opens the store in `directory`, making both where absent.
    pub fn open(directory: &Path) -> Result<Store, StoreError> {
        let trouble = |source| StoreError::Directory { path: directory.to_owned(), source };
        std::fs::create_dir_all(directory).map_err(trouble)?;
        let lock = File::options()
            .create(true)
            .truncate(false)
            .write(true)
            .open(directory.join(LOCK_NAME))
            .map_err(trouble)?;
        match lock.try_lock() {
            Ok(()) => {}
            Err(std::fs::TryLockError::WouldBlock) => {
                return Err(StoreError::InUse { path: directory.to_owned() });
            }
            Err(std::fs::TryLockError::Error(source)) => return Err(trouble(source)),
        }
        let mut connection = Connection::open(directory.join(FILE_NAME))?;
        schema::prepare(&mut connection)?;
        // SQLite ignores a failed sync of the directory; without it the files' names may be lost.
        File::open(directory).and_then(|d| d.sync_all()).map_err(trouble)?;
        let channels = connection
            .prepare("SELECT name, id FROM channel")?
            .query_map([], |row| Ok((row.get(0)?, row.get(1)?)))?
            .collect::<Result<_, _>>()?;
        Ok(Store { connection, channels, _lock: lock })
    }

    /// Appends rows in one transaction; they are durable when this returns their first id (the
    /// others follow one by one).
    pub fn append(&mut self, rows: &[NewRow]) -> Result<i64, StoreError> {
        let transaction =
            self.connection.transaction_with_behavior(rusqlite::TransactionBehavior::Immediate)?;
        let mut made = Vec::new();
        let last: i64 =
            transaction
                .query_row("SELECT coalesce(max(id), 0) FROM journal", [], |row| row.get(0))?;
        {
            let mut insert = transaction.prepare_cached(
                "INSERT INTO journal (id, channel, time, value, got, message, action)
                 VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7)",
            )?;
            for (id, row) in (last + 1..).zip(rows) {
                let channel = match self.channels.get(&row.channel) {
                    Some(&channel) => channel,
                    None => match made.iter().find(|(name, _)| *name == row.channel) {
                        Some(&(_, channel)) => channel,
                        None => {
                            let channel = add_channel(&transaction, &row.channel, &row.watch)?;
                            made.push((row.channel.clone(), channel));
                            channel
                        }
                    },
                };
                let NewRow { time, value, got, message, action, .. } = row;
                insert.execute(params![id, channel, time, value, got, message, action])?;
            }
        }
        transaction.commit()?;
        self.channels.extend(made);
        Ok(last + 1)
    }

    /// Saves a bundle in one transaction. Returns how many messages did not fit into the outbox.
    pub fn save(&mut self, bundle: &Bundle) -> Result<u64, StoreError> {
        let transaction =
            self.connection.transaction_with_behavior(rusqlite::TransactionBehavior::Immediate)?;
        for (name, upto, data) in &bundle.states {
            // A channel has a row since its first reading; one without has no reading to lose.
            let Some(channel) = self.channels.get(name) else { continue };
            transaction
                .prepare_cached(
                    "INSERT OR REPLACE INTO state (channel, upto, crc, data)
                     VALUES (?1, ?2, ?3, ?4)",
                )?
                .execute(params![channel, upto, checksum(*upto, data), data])?;
        }
        let mut known = BTreeSet::new();
        for (id, channel, time, event) in &bundle.alerts {
            let added = transaction
                .prepare_cached(
                    "INSERT OR IGNORE INTO alert (id, channel, time, event)
                     VALUES (?1, ?2, ?3, ?4)",
                )?
                .execute(params![id, channel, time, event])?;
            if added == 0 {
                known.insert(id.as_str());
            }
        }
        let mut unkept = 0;
        let mut held: i64 =
            transaction.query_row("SELECT count(*) FROM outbox", [], |row| row.get(0))?;
        for message in &bundle.messages {
            if message.event_id.as_deref().is_some_and(|id| known.contains(id)) {
                continue;
            }
            if message.retained {
                held -= i64::try_from(
                    transaction
                        .prepare_cached("DELETE FROM outbox WHERE retained AND topic = ?1")?
                        .execute([&message.topic])?,
                )
                .unwrap_or(0);
            } else if held >= OUTBOX_ROWS_MAX {
                unkept += 1;
                continue;
            }
            held += 1;
            transaction
                .prepare_cached(
                    "INSERT INTO outbox (topic, payload, retained, content_type, correlation)
                     VALUES (?1, ?2, ?3, ?4, ?5)",
                )?
                .execute(params![
                    message.topic,
                    message.payload,
                    message.retained,
                    message.content_type,
                    message.correlation
                ])?;
        }
        if let Some(from) = bundle.replay_from {
            transaction.execute(
                "INSERT OR REPLACE INTO fact (name, value) VALUES ('replay_from', ?1)",
                [from],
            )?;
        }
        transaction.commit()?;
        Ok(unkept)
    }

    /// The states of all channels that have one, whether or not they are sound.
    pub fn states(&self) -> Result<Vec<SavedState>, StoreError> {
        let mut query = self.connection.prepare(
            "SELECT c.name, c.watch, s.upto, s.crc, s.data FROM state s JOIN channel c ON c.id = s.channel
             ORDER BY c.id",
        )?;
        let rows = query.query_map([], |row| {
            let state = SavedState {
                channel: row.get(0)?,
                watch: row.get(1)?,
                upto: row.get(2)?,
                data: row.get(4)?,
            };
            let crc: i64 = row.get(3)?;
            let data = state.data.filter(|data| crc == checksum(state.upto, data));
            Ok(SavedState { data, ..state })
        })?;
        Ok(rows.collect::<Result<_, _>>()?)
    }

    /// The actions in the journal, in order: (channel, action as JSON).
    pub fn actions(&self) -> Result<Vec<(String, String)>, StoreError> {
        let mut query = self.connection.prepare(
            "SELECT c.name, j.action FROM journal j JOIN channel c ON c.id = j.channel
             WHERE j.action IS NOT NULL ORDER BY j.id",
        )?;
        let rows = query.query_map([], |row| Ok((row.get(0)?, row.get(1)?)))?;
        Ok(rows.collect::<Result<_, _>>()?)
    }

    /// These channels belong to the watch of another topic pattern now: (channel, pattern).
    pub fn note_watches(&mut self, moved: &[(String, String)]) -> Result<(), StoreError> {
        let transaction =
            self.connection.transaction_with_behavior(rusqlite::TransactionBehavior::Immediate)?;
        for (name, watch) in moved {
            transaction
                .prepare_cached("UPDATE channel SET watch = ?2 WHERE name = ?1")?
                .execute([name, watch])?;
        }
        Ok(transaction.commit()?)
    }

    /// Up to which journal row every state is complete.
    pub fn replay_from(&self) -> Result<i64, StoreError> {
        Ok(self.fact("replay_from")?.unwrap_or(0))
    }

    /// Whether a broker has ever granted the subscriptions, and so should have a session of ours.
    pub fn subscribed_before(&self) -> Result<bool, StoreError> {
        Ok(self.fact("subscribed")?.is_some())
    }

    /// Notes that a broker has granted the subscriptions.
    pub fn note_subscribed(&mut self) -> Result<(), StoreError> {
        self.connection
            .execute("INSERT OR IGNORE INTO fact (name, value) VALUES ('subscribed', 1)", [])?;
        Ok(())
    }

    fn fact(&self, name: &str) -> Result<Option<i64>, StoreError> {
        Ok(self
            .connection
            .query_row("SELECT value FROM fact WHERE name = ?1", [name], |row| row.get(0))
            .optional()?)
    }

    /// At most `rows_max` journal rows after row `after`, in order.
    pub fn journal_after(&self, after: i64, rows_max: i64) -> Result<Vec<Row>, StoreError> {
        let mut query = self.connection.prepare_cached(
            "SELECT j.id, c.name, c.watch, j.time, j.value, j.got, j.message, j.action
             FROM journal j JOIN channel c ON c.id = j.channel
             WHERE j.id > ?1 ORDER BY j.id LIMIT ?2",
        )?;
        let rows = query.query_map([after, rows_max], |row| {
            Ok(Row {
                id: row.get(0)?,
                row: NewRow {
                    channel: row.get(1)?,
                    watch: row.get(2)?,
                    time: row.get(3)?,
                    value: row.get(4)?,
                    got: row.get(5)?,
                    message: row.get(6)?,
                    action: row.get(7)?,
                },
            })
        })?;
        Ok(rows.collect::<Result<_, _>>()?)
    }

    /// The id of the newest journal row; 0 in an empty journal.
    pub fn newest_row(&self) -> Result<i64, StoreError> {
        Ok(self
            .connection
            .query_row("SELECT coalesce(max(id), 0) FROM journal", [], |row| row.get(0))?)
    }

    /// At most `rows_max` unsent messages after outbox row `after`, oldest first.
    pub fn unsent_after(
        &self,
        after: i64,
        rows_max: i64,
    ) -> Result<Vec<(i64, NewMessage)>, StoreError> {
        let mut query = self.connection.prepare_cached(
            "SELECT id, topic, payload, retained, content_type, correlation FROM outbox
             WHERE id > ?1 ORDER BY id LIMIT ?2",
        )?;
        let rows = query.query_map([after, rows_max], |row| {
            Ok((
                row.get(0)?,
                NewMessage {
                    topic: row.get(1)?,
                    payload: row.get(2)?,
                    retained: row.get(3)?,
                    content_type: row.get(4)?,
                    correlation: row.get(5)?,
                    event_id: None,
                },
            ))
        })?;
        Ok(rows.collect::<Result<_, _>>()?)
    }

    /// The broker has taken these messages.
    pub fn sent(&mut self, ids: &[i64]) -> Result<(), StoreError> {
        let transaction =
            self.connection.transaction_with_behavior(rusqlite::TransactionBehavior::Immediate)?;
        for id in ids {
            transaction.prepare_cached("DELETE FROM outbox WHERE id = ?1")?.execute([id])?;
        }
        Ok(transaction.commit()?)
    }

    /// All alert events, oldest first: (id, channel, time µs, event as JSON).
    pub fn alerts(&self) -> Result<Vec<(String, String, i64, String)>, StoreError> {
        let mut query = self
            .connection
            .prepare("SELECT id, channel, time, event FROM alert ORDER BY time, rowid")?;
        let rows = query.query_map([], |r| Ok((r.get(0)?, r.get(1)?, r.get(2)?, r.get(3)?)))?;
        Ok(rows.collect::<Result<_, _>>()?)
    }
}

fn add_channel(
    transaction: &rusqlite::Transaction<'_>,
    name: &str,
    watch: &str,
) -> rusqlite::Result<i64> {
    transaction
        .prepare_cached("INSERT INTO channel (name, watch) VALUES (?1, ?2)")?
        .insert([name, watch])
}

/// CRC-32 over the row number and the bytes: SQLite itself does not notice flipped data bits.
fn checksum(upto: i64, data: &[u8]) -> i64 {
    let mut hasher = crc32fast::Hasher::new();
    hasher.update(&upto.to_le_bytes());
    hasher.update(data);
    i64::from(hasher.finalize())
}

#[cfg(test)]
mod tests {
    use super::*;

    fn row(channel: &str, time: i64, value: f64) -> NewRow {
        NewRow {
            channel: channel.to_owned(),
            watch: "w".to_owned(),
            time,
            value,
            got: time,
            message: 0,
            action: None,
        }
    }

    fn message(topic: &str, payload: &str, retained: bool) -> NewMessage {
        NewMessage {
            topic: topic.to_owned(),
            payload: payload.as_bytes().to_vec(),
            retained,
            content_type: None,
            correlation: None,
            event_id: None,
        }
    }

    #[test]
    fn rows_are_there_after_reopening_in_order() {
        let dir = tempfile::tempdir().unwrap();
        let mut store = Store::open(dir.path()).unwrap();
        assert_eq!(store.append(&[row("a", 1, 0.1), row("b", 2, 0.2)]).unwrap(), 1);
        assert_eq!(store.append(&[row("a", 3, 0.3)]).unwrap(), 3);
        drop(store);
        let store = Store::open(dir.path()).unwrap();
        let rows = store.journal_after(0, 10).unwrap();
        let seen: Vec<_> =
            rows.iter().map(|r| (r.id, r.row.channel.as_str(), r.row.value)).collect();
        assert_eq!(seen, [(1, "a", 0.1), (2, "b", 0.2), (3, "a", 0.3)]);
    }

    #[test]
    fn second_process_is_refused() {
        let dir = tempfile::tempdir().unwrap();
        let _first = Store::open(dir.path()).unwrap();
        assert!(matches!(Store::open(dir.path()), Err(StoreError::InUse { .. })));
    }

    #[test]
    fn newer_store_is_refused_and_left_alone() {
        let dir = tempfile::tempdir().unwrap();
        drop(Store::open(dir.path()).unwrap());
        let file = dir.path().join(FILE_NAME);
        Connection::open(&file).unwrap().pragma_update(None, "user_version", 99).unwrap();
        let refused = Store::open(dir.path()).unwrap_err().to_string();
        assert_eq!(
            refused,
            "store has schema version 99, this program knows 1; nothing was changed"
        );
    }

    #[test]
    fn retained_message_replaces_the_unsent_one_of_its_topic() {
        let dir = tempfile::tempdir().unwrap();
        let mut store = Store::open(dir.path()).unwrap();
        let messages =
            vec![message("f", "1", true), message("e", "x", false), message("f", "2", true)];
        store.save(&Bundle { messages, ..Bundle::default() }).unwrap();
        let unsent = store.unsent_after(0, 10).unwrap();
        let payloads: Vec<_> = unsent.iter().map(|(_, m)| m.payload.as_slice()).collect();
        assert_eq!(payloads, [b"x".as_slice(), b"2"]);
        store.sent(&[unsent[0].0]).unwrap();
        assert_eq!(store.unsent_after(0, 10).unwrap().len(), 1);
    }

    #[test]
    fn an_event_that_the_alert_log_has_is_not_published_again() {
        let dir = tempfile::tempdir().unwrap();
        let mut store = Store::open(dir.path()).unwrap();
        let event = |id: &str| {
            let message = NewMessage { event_id: Some(id.to_owned()), ..message("e", id, false) };
            (message, (id.to_owned(), "a".to_owned(), 1, "{}".to_owned()))
        };
        let bundle = |ids: &[&str]| {
            let (messages, alerts) = ids.iter().map(|id| event(id)).unzip();
            Bundle { messages, alerts, ..Bundle::default() }
        };
        store.save(&bundle(&["a-1"])).unwrap();
        store.save(&bundle(&["a-1", "a-2"])).unwrap();
        let unsent = store.unsent_after(0, 10).unwrap();
        let payloads: Vec<_> = unsent.iter().map(|(_, m)| m.payload.as_slice()).collect();
        assert_eq!(payloads, [b"a-1".as_slice(), b"a-2"]);
        assert_eq!(store.alerts().unwrap().len(), 2);
    }

    #[test]
    fn flipped_bit_in_a_state_is_named_not_served() {
        let dir = tempfile::tempdir().unwrap();
        let mut store = Store::open(dir.path()).unwrap();
        store.append(&[row("a", 1, 0.1)]).unwrap();
        let states = vec![("a".to_owned(), 7, vec![1, 2, 3])];
        store.save(&Bundle { states, ..Bundle::default() }).unwrap();
        assert_eq!(store.states().unwrap()[0].data, Some(vec![1, 2, 3]));
        for damage in ["data = x'010202'", "data = x'010203', upto = 8"] {
            store.connection.execute(&format!("UPDATE state SET {damage}"), []).unwrap();
            assert_eq!(store.states().unwrap()[0].data, None, "{damage}");
        }
    }
}
