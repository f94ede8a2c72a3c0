//! Trying a store without touching what is in it.

use super::{FILE_NAME, LOCK_NAME, NewRow, Store, StoreError, schema};
use rusqlite::{Connection, OpenFlags};
use std::fs::File;
use std::path::{Path, PathBuf};

/// Tries whether a store in `directory` would be durable, and looks at the one that is there.
///
/// A trial store is made beside it, committed to, and removed; a directory that does not exist yet is
/// not made, the nearest one above it is tried instead.
///
/// # Outcomes
/// What was found, one sentence without full stop; or what is wrong.
pub fn probe(directory: &Path) -> Result<String, StoreError> {
    let trouble = |source| StoreError::Directory { path: directory.to_owned(), source };
    let place = nearest(directory);
    let trial = place.join(format!(".asfound-trial-{}", std::process::id()));
    let tried = Store::open(&trial).and_then(|mut store| store.append(&[row()]));
    let removed = std::fs::remove_dir_all(&trial);
    tried?;
    removed.map_err(trouble)?;
    if !directory.join(FILE_NAME).exists() {
        return Ok("commits there are durable; no store there yet, the first start makes it".into());
    }
    let held = File::open(directory.join(LOCK_NAME)).is_ok_and(|lock| lock.try_lock().is_err());
    let (channels, rows) = look(&directory.join(FILE_NAME))?;
    let state = if held { "in use by a running daemon" } else { "not in use" };
    Ok(format!(
        "commits there are durable; {state}, {channels} channels, {rows} rows in the journal"
    ))
}

/// The directory itself, or the nearest above it that exists.
fn nearest(directory: &Path) -> PathBuf {
    directory.ancestors().find(|path| path.is_dir()).unwrap_or(directory).to_owned()
}

fn look(file: &Path) -> Result<(i64, i64), StoreError> {
    let connection = Connection::open_with_flags(file, OpenFlags::SQLITE_OPEN_READ_ONLY)?;
    let found = connection.query_row("PRAGMA user_version", [], |row| row.get(0))?;
    if found != schema::SCHEMA_VERSION {
        return Err(StoreError::OtherVersion { found, known: schema::SCHEMA_VERSION });
    }
    let count = |sql| connection.query_row(sql, [], |row| row.get(0));
    Ok((count("SELECT count(*) FROM channel")?, count("SELECT coalesce(max(id), 0) FROM journal")?))
}

fn row() -> NewRow {
    NewRow {
        channel: "trial".to_owned(),
        watch: "trial".to_owned(),
        time: 0,
        value: 0.0,
        got: 0,
        message: 0,
        action: None,
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_trial_leaves_nothing_behind_and_makes_no_directory() {
        let folder = tempfile::tempdir().unwrap();
        let directory = folder.path().join("not/yet");
        let found = probe(&directory).unwrap();
        assert!(found.contains("no store there yet"), "{found}");
        assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 0);
    }

    #[test]
    fn a_store_in_use_is_looked_at_and_left_alone() {
        let folder = tempfile::tempdir().unwrap();
        let mut store = Store::open(folder.path()).unwrap();
        store.append(&[row(), row()]).unwrap();
        let found = probe(folder.path()).unwrap();
        assert!(found.ends_with("in use by a running daemon, 1 channels, 2 rows in the journal"));
        drop(store);
        assert!(probe(folder.path()).unwrap().contains("not in use"));
    }

    #[test]
    fn a_place_that_cannot_be_written_is_told_with_its_path() {
        let why = probe(Path::new("/proc/asfound")).unwrap_err().to_string();
        assert!(why.contains("/proc"), "{why}");
    }
}
