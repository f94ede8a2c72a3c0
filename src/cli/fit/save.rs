//! Puts a file in place whole or not at all.

use std::fs::{self, Permissions};
use std::io::{self, Write};
use std::os::unix::fs::PermissionsExt;
use std::path::{Path, PathBuf};

/// Rights of a new file before the user's umask takes its share.
const MODE_NEW: u32 = 0o666;

/// Why a file is not written. What stood there still does.
#[derive(Debug, thiserror::Error)]
pub enum SaveError {
    /// Something that is no file stands there, such as a folder or a device.
    #[error("what stands there is not a file")]
    NoFile,
    /// It is the file that was read.
    #[error("this is the series itself; it would be lost")]
    Source,
    /// The system refuses.
    #[error("{0}")]
    Unwritable(#[from] io::Error),
}

/// Writes a text to a file beside the one asked for, then takes its name: a reader sees the old text
/// or the new one, never half of it. A link is followed, rights of an old file stay.
///
/// # Arguments
/// `path` — where; `text` — what; `source` — the file that must not be lost.
pub fn save(path: &Path, text: &str, source: &Path) -> Result<(), SaveError> {
    let (target, mode) = match fs::metadata(path) {
        Ok(old) if !old.is_file() => return Err(SaveError::NoFile),
        Ok(old) => (path.canonicalize()?, old.permissions().mode()),
        Err(why) if why.kind() == io::ErrorKind::NotFound => (path.to_path_buf(), MODE_NEW),
        Err(why) => return Err(why.into()),
    };
    if source.canonicalize().is_ok_and(|source| source == target) {
        return Err(SaveError::Source);
    }
    let mut file = tempfile::Builder::new()
        .prefix(".asfound-")
        .permissions(Permissions::from_mode(mode))
        .tempfile_in(folder(&target))?;
    file.write_all(text.as_bytes())?;
    file.as_file().sync_all()?;
    file.persist(&target).map_err(|why| why.error)?;
    Ok(())
}

fn folder(path: &Path) -> PathBuf {
    match path.parent() {
        Some(folder) if !folder.as_os_str().is_empty() => folder.to_path_buf(),
        _ => PathBuf::from("."),
    }
}
