//! A look into the daemon's store while the daemon has it open: read only, as anybody may. And a
//! hand on it, for a disk that does not answer.

use crate::common::broker::wait_until;
use crate::common::daemon::Site;
use rusqlite::{Connection, OpenFlags};

fn open(site: &Site) -> rusqlite::Result<Connection> {
    let file = site.store().join("asfound.sqlite");
    Connection::open_with_flags(file, OpenFlags::SQLITE_OPEN_READ_ONLY)
}

fn count(site: &Site, query: &str) -> rusqlite::Result<i64> {
    open(site)?.query_row(query, [], |row| row.get(0))
}

/// Readings in the journal; 0 where there is no store yet.
pub fn readings(site: &Site) -> i64 {
    count(site, "SELECT count(*) FROM journal WHERE action IS NULL").unwrap_or(0)
}

/// Returns once so many readings are in the journal.
pub fn wait_for_readings(site: &Site, least: i64) {
    wait_until(&format!("{least} readings in the journal"), || {
        (readings(site) >= least).then_some(())
    });
}

/// (time µs, value) of the readings of a channel, in the order of the journal.
pub fn readings_of(site: &Site, channel: &str) -> Vec<(i64, f64)> {
    let store = open(site).expect("the store");
    let mut query = store
        .prepare(
            "SELECT j.time, j.value FROM journal j JOIN channel c ON c.id = j.channel
             WHERE c.name = ?1 AND j.action IS NULL ORDER BY j.id",
        )
        .expect("the journal's columns");
    let rows = query.query_map([channel], |row| Ok((row.get(0)?, row.get(1)?))).expect("rows");
    rows.collect::<Result<_, _>>().expect("rows")
}

/// The alert log: (id, event as it was published), in the order in which the events were made.
pub fn alert_log(site: &Site) -> Vec<(String, String)> {
    let store = open(site).expect("the store");
    let mut query = store.prepare("SELECT id, event FROM alert ORDER BY rowid").expect("the log");
    let rows = query.query_map([], |row| Ok((row.get(0)?, row.get(1)?))).expect("rows");
    rows.collect::<Result<_, _>>().expect("rows")
}

/// Messages that the broker has not taken yet.
pub fn unsent(site: &Site) -> i64 {
    count(site, "SELECT count(*) FROM outbox").expect("the outbox")
}

/// Damages every saved state, as a disk might; no daemon has the store open.
pub fn damage_states(site: &Site) {
    let store = Connection::open(site.store().join("asfound.sqlite")).expect("the store");
    let damaged = store.execute("UPDATE state SET data = zeroblob(length(data))", []);
    assert!(damaged.expect("the states") > 0, "no state was saved");
}

/// While it lives, the daemon can commit nothing.
pub struct Held {
    _store: Connection,
}

/// Takes the store's one place for a writer.
pub fn hold(site: &Site) -> Held {
    let store = Connection::open(site.store().join("asfound.sqlite")).expect("the store");
    store.execute_batch("BEGIN IMMEDIATE").expect("no other writer for a moment");
    Held { _store: store }
}
