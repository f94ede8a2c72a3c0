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
    /// Nothing can be put beside it.
    #[error("there is no such folder")]
    NoFolder,
    /// Nothing may be put beside it.
    #[error("its folder takes no new file: {0}")]
    Folder(io::ErrorKind),
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
        .tempfile_in(folder(&target))
        .map_err(|why| match why.kind() {
            io::ErrorKind::NotFound => SaveError::NoFolder,
            kind => SaveError::Folder(kind),
        })?;
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

#[cfg(test)]
mod tests {
    use super::*;

    /// A folder with a source in it.
    fn folder_with_source() -> (tempfile::TempDir, PathBuf) {
        let folder = tempfile::tempdir().unwrap();
        let source = folder.path().join("series.csv");
        fs::write(&source, "x,y\n").unwrap();
        (folder, source)
    }

    fn names(folder: &Path) -> Vec<String> {
        let entries = fs::read_dir(folder).unwrap();
        let mut names: Vec<String> =
            entries.map(|entry| entry.unwrap().file_name().into_string().unwrap()).collect();
        names.sort();
        names
    }

    #[test]
    fn a_file_is_replaced_whole_and_nothing_else_stays() {
        let (folder, source) = folder_with_source();
        let target = folder.path().join("out.svg");
        save(&target, "first, and longer", &source).unwrap();
        fs::set_permissions(&target, Permissions::from_mode(0o640)).unwrap();
        save(&target, "second", &source).unwrap();
        assert_eq!(fs::read_to_string(&target).unwrap(), "second");
        assert_eq!(fs::metadata(&target).unwrap().permissions().mode() & 0o777, 0o640);
        assert_eq!(names(folder.path()), ["out.svg", "series.csv"]);
    }

    #[test]
    fn a_link_stays_and_what_it_names_is_replaced() {
        let (folder, source) = folder_with_source();
        let (target, link) = (folder.path().join("out.svg"), folder.path().join("link.svg"));
        fs::write(&target, "old").unwrap();
        std::os::unix::fs::symlink(&target, &link).unwrap();
        save(&link, "new", &source).unwrap();
        assert!(fs::symlink_metadata(&link).unwrap().is_symlink());
        assert_eq!(fs::read_to_string(&target).unwrap(), "new");
    }

    #[test]
    fn the_series_itself_and_what_is_no_file_are_refused() {
        let (folder, source) = folder_with_source();
        let refused = |path: &Path| save(path, "new", &source).unwrap_err().to_string();
        assert_eq!(refused(&source), "this is the series itself; it would be lost");
        assert_eq!(refused(folder.path()), "what stands there is not a file");
        assert_eq!(refused(Path::new("/dev/null")), "what stands there is not a file");
        assert_eq!(refused(&folder.path().join("none/out.svg")), "there is no such folder");
        assert_eq!(fs::read_to_string(&source).unwrap(), "x,y\n");
        assert_eq!(names(folder.path()), ["series.csv"]);
    }
}
