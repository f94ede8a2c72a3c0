//! A password and the file it comes from. The content can be asked for but never shown.

use std::fmt;
use std::io::Read as _;
use std::path::Path;

/// The longest password, bytes.
pub const SECRET_BYTES_MAX: u64 = 4096;

/// A text that never shows itself: no `Display`, and a `Debug` without content.
#[derive(Clone)]
pub struct Secret(String);

impl Secret {
    /// The content, for the one place that sends it.
    pub fn expose(&self) -> &str {
        &self.0
    }
}

impl fmt::Debug for Secret {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("Secret(withheld)")
    }
}

/// Why a file gives no password.
#[derive(Debug, thiserror::Error)]
pub(super) enum SecretFault {
    #[error("a file that cannot be read ({0})")]
    Unreadable(#[from] std::io::Error),
    #[error("something that is not a file")]
    NotAFile,
    #[error("a file that others may read or write (mode {0:03o})")]
    Open(u32),
    #[error("a file of more than {SECRET_BYTES_MAX} bytes")]
    TooLong,
    #[error("a file without text")]
    Empty,
    #[error("a file that is not UTF-8 text")]
    NotText,
}

/// Reads a password; blanks and line ends around it are not part of it.
///
/// # Arguments
/// `path` — the file; `guarded` — whether the service manager keeps it: then its mode is not looked
/// at, since systemd grants the service's user its right by an access list, which shows as group-readable.
pub(super) fn read_secret(path: &Path, guarded: bool) -> Result<Secret, SecretFault> {
    // Looked at before opening: opening a pipe would wait for its writer.
    if !std::fs::metadata(path)?.is_file() {
        return Err(SecretFault::NotAFile);
    }
    let file = std::fs::File::open(path)?;
    let mode = mode_of(&file.metadata()?);
    if !guarded && mode & 0o077 != 0 {
        return Err(SecretFault::Open(mode & 0o777));
    }
    let mut bytes = Vec::new();
    file.take(SECRET_BYTES_MAX + 1).read_to_end(&mut bytes)?;
    if bytes.len() as u64 > SECRET_BYTES_MAX {
        return Err(SecretFault::TooLong);
    }
    let text = String::from_utf8(bytes).map_err(|_| SecretFault::NotText)?;
    match text.trim() {
        "" => Err(SecretFault::Empty),
        text => Ok(Secret(text.to_owned())),
    }
}

#[cfg(unix)]
fn mode_of(metadata: &std::fs::Metadata) -> u32 {
    std::os::unix::fs::PermissionsExt::mode(&metadata.permissions())
}

#[cfg(not(unix))]
fn mode_of(_: &std::fs::Metadata) -> u32 {
    0
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::os::unix::fs::PermissionsExt as _;

    fn check(content: &[u8], mode: u32, guarded: bool, expected: Result<&str, &str>) {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("password");
        std::fs::write(&path, content).unwrap();
        std::fs::set_permissions(&path, std::fs::Permissions::from_mode(mode)).unwrap();
        match (read_secret(&path, guarded), expected) {
            (Ok(secret), Ok(text)) => assert_eq!(secret.expose(), text),
            (Err(fault), Err(text)) => assert_eq!(fault.to_string(), text),
            (found, _) => panic!("{found:?} instead of {expected:?}"),
        }
    }

    #[test]
    fn blanks_and_line_ends_around_a_password_are_dropped() {
        check(b" s3cret word\r\n", 0o600, false, Ok("s3cret word"));
        check(b"s3cret", 0o400, false, Ok("s3cret"));
    }

    #[test]
    fn a_password_that_others_may_read_is_refused() {
        for (mode, text) in [(0o640, "640"), (0o604, "604"), (0o660, "660"), (0o601, "601")] {
            let says = format!("a file that others may read or write (mode {text})");
            check(b"s3cret", mode, false, Err(&says));
        }
    }

    #[test]
    fn a_credential_of_the_service_manager_may_show_a_group_right() {
        check(b"s3cret", 0o440, true, Ok("s3cret"));
    }

    #[test]
    fn files_without_a_password_are_refused() {
        check(b" \n", 0o600, false, Err("a file without text"));
        check(b"\xff\xfe", 0o600, false, Err("a file that is not UTF-8 text"));
        check(&[b'x'; 5000], 0o600, false, Err("a file of more than 4096 bytes"));
        let fault = read_secret(Path::new("/"), false).unwrap_err();
        assert_eq!(fault.to_string(), "something that is not a file");
    }

    #[test]
    fn a_secret_does_not_show_itself() {
        assert_eq!(format!("{:?}", Secret("s3cret".to_owned())), "Secret(withheld)");
    }
}
