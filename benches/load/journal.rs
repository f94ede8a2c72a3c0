//! The daemon's store, looked at from outside while the daemon writes it.

use rusqlite::{Connection, OpenFlags};
use std::fs;
use std::path::{Path, PathBuf};
use std::time::Duration;

/// A store that is only read.
#[derive(Clone, Debug)]
pub struct Journal {
    file: PathBuf,
}

/// One row of the journal: channel, event time µs, deviation.
pub type Row = (String, i64, f64);

impl Journal {
    /// The store below the daemon's folder; it need not be there yet.
    pub fn new(folder: &Path) -> Journal {
        Journal { file: folder.join("store").join("asfound.sqlite") }
    }

    fn query<T>(&self, ask: impl FnOnce(&Connection) -> rusqlite::Result<T>) -> Result<T, String> {
        let flags = OpenFlags::SQLITE_OPEN_READ_ONLY | OpenFlags::SQLITE_OPEN_NO_MUTEX;
        let asked = Connection::open_with_flags(&self.file, flags).and_then(|connection| {
            connection.busy_timeout(Duration::from_secs(5))?;
            ask(&connection)
        });
        asked.map_err(|why| format!("{}: {why}", self.file.display()))
    }

    fn count(&self, sql: &str) -> Result<u64, String> {
        let count: i64 = self.query(|c| c.query_row(sql, [], |row| row.get(0)))?;
        Ok(u64::try_from(count).expect("row numbers and counts are not negative"))
    }

    /// The number of the newest row: rows are numbered from 1 without gaps.
    pub fn newest(&self) -> Result<u64, String> {
        self.count("SELECT coalesce(max(id), 0) FROM journal")
    }

    /// Messages that wait for publication.
    pub fn unsent(&self) -> Result<u64, String> {
        self.count("SELECT count(*) FROM outbox")
    }

    /// All readings in the order in which they were journaled.
    pub fn rows(&self) -> Result<Vec<Row>, String> {
        self.query(|c| {
            c.prepare(
                "SELECT c.name, j.time, j.value FROM journal j JOIN channel c ON c.id = j.channel
                 ORDER BY j.id",
            )?
            .query_map([], |row| Ok((row.get(0)?, row.get(1)?, row.get(2)?)))?
            .collect()
        })
    }

    /// The log of alert events: id and text.
    pub fn alerts(&self) -> Result<Vec<(String, String)>, String> {
        self.query(|c| {
            c.prepare("SELECT id, event FROM alert")?
                .query_map([], |row| Ok((row.get(0)?, row.get(1)?)))?
                .collect()
        })
    }

    /// Transactions so far, since the daemon opened the store: the counter at offset 8 of the
    /// index of the write-ahead log (sqlite.org/walformat.html, 2.1). None: no such file now.
    pub fn transactions(&self) -> Option<u32> {
        let index = fs::read(self.beside("-shm")).ok()?;
        Some(u32::from_ne_bytes(index.get(8..12)?.try_into().ok()?))
    }

    /// Size of the store on disk, bytes, the write-ahead log included.
    pub fn bytes(&self) -> u64 {
        let size = |path: &Path| fs::metadata(path).map_or(0, |found| found.len());
        size(&self.file) + size(&self.beside("-wal"))
    }

    fn beside(&self, ending: &str) -> PathBuf {
        let mut name = self.file.clone().into_os_string();
        name.push(ending);
        PathBuf::from(name)
    }
}
