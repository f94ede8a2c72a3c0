//! Tables, their version, and the settings that make a commit durable.

use crate::service::store::StoreError;
use rusqlite::Connection;

/// The schema version that this program writes; kept in SQLite's `user_version`.
pub const SCHEMA_VERSION: i64 = 1;

/// WAL pages after which SQLite copies the log back into the file (4 KiB each): bounds the log.
const CHECKPOINT_PAGES: i64 = 1000;

const TABLES: &str = "
-- watch: the topic pattern of the watch to which the channel belongs.
CREATE TABLE channel (
  id INTEGER PRIMARY KEY, name TEXT NOT NULL UNIQUE, watch TEXT NOT NULL);
-- Ground state, append-only: readings (channel, time, value) and people's actions (action).
-- message: hash of the MQTT message, to know a redelivery of a reading without its own time.
CREATE TABLE journal (
  id INTEGER PRIMARY KEY, channel INTEGER NOT NULL, time INTEGER NOT NULL, value REAL NOT NULL,
  got INTEGER NOT NULL, message INTEGER NOT NULL, action TEXT);
-- Derived state of one channel after journal row `upto`; crc is CRC-32 over upto and data.
CREATE TABLE state (
  channel INTEGER PRIMARY KEY, upto INTEGER NOT NULL, crc INTEGER NOT NULL, data BLOB NOT NULL);
-- What is still to be published, oldest first. AUTOINCREMENT: a number is never used again, so that
-- what comes after the last one handed over is new, and an acknowledgement names one message only.
CREATE TABLE outbox (
  id INTEGER PRIMARY KEY AUTOINCREMENT, topic TEXT NOT NULL, payload BLOB NOT NULL,
  retained INTEGER NOT NULL, content_type TEXT, correlation BLOB);
CREATE INDEX outbox_topic ON outbox (topic) WHERE retained;
-- Every alert event ever made, for the log of alerts.
CREATE TABLE alert (
  id TEXT PRIMARY KEY, channel TEXT NOT NULL, time INTEGER NOT NULL, event TEXT NOT NULL);
CREATE TABLE fact (name TEXT PRIMARY KEY, value INTEGER NOT NULL);
";

/// Makes commits durable, and checks that SQLite really took the settings: it can silently stay in
/// another journal mode after an input/output error.
pub fn prepare(connection: &mut Connection) -> Result<(), StoreError> {
    let mode: String = connection.query_row("PRAGMA journal_mode=WAL", [], |row| row.get(0))?;
    connection.execute_batch("PRAGMA synchronous=FULL")?;
    let synchronous: i64 = connection.query_row("PRAGMA synchronous", [], |row| row.get(0))?;
    if !mode.eq_ignore_ascii_case("wal") || synchronous != 2 {
        return Err(StoreError::NotDurable { mode, synchronous });
    }
    connection.pragma_update(None, "wal_autocheckpoint", CHECKPOINT_PAGES)?;
    migrate(connection)
}

fn migrate(connection: &mut Connection) -> Result<(), StoreError> {
    let found: i64 = connection.query_row("PRAGMA user_version", [], |row| row.get(0))?;
    match found {
        SCHEMA_VERSION => Ok(()),
        0 => {
            let transaction = connection.transaction()?;
            transaction.execute_batch(TABLES)?;
            transaction.pragma_update(None, "user_version", SCHEMA_VERSION)?;
            Ok(transaction.commit()?)
        }
        found => Err(StoreError::OtherVersion { found, known: SCHEMA_VERSION }),
    }
}
