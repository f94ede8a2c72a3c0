//! JSON Pointers (RFC 6901), checked when the settings are read: at look-up time a misspelt pointer
//! could not be told from a value that is absent.

use serde_json::Value;

/// The longest pointer, bytes.
pub const POINTER_BYTES_MAX: usize = 256;

/// What is wrong with a pointer.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
pub enum PointerFault {
    /// Neither empty nor beginning with `/`.
    #[error("it must begin with /")]
    NoSlash,
    /// A `~` that is not `~0` or `~1`.
    #[error("~ is written ~0 and / inside a name is written ~1")]
    Tilde,
    /// More than [`POINTER_BYTES_MAX`] bytes.
    #[error("it is longer than 256 bytes")]
    TooLong,
}

/// A pointer into a JSON document.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Pointer(String);

impl Pointer {
    /// Returns the checked pointer; the empty one is the whole document.
    pub fn parse(text: &str) -> Result<Pointer, PointerFault> {
        if text.len() > POINTER_BYTES_MAX {
            return Err(PointerFault::TooLong);
        }
        if !(text.is_empty() || text.starts_with('/')) {
            return Err(PointerFault::NoSlash);
        }
        if text.split('~').skip(1).any(|after| !after.starts_with(['0', '1'])) {
            return Err(PointerFault::Tilde);
        }
        Ok(Pointer(text.to_owned()))
    }

    /// The pointer as written.
    pub fn as_str(&self) -> &str {
        &self.0
    }

    /// The value it points to, or `None` when the document has none there.
    pub fn find<'v>(&self, document: &'v Value) -> Option<&'v Value> {
        document.pointer(&self.0)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    // RFC 6901, section 5: the example document and what each pointer gives.
    #[test]
    fn the_standards_own_examples_hold() {
        let document: Value = serde_json::from_str(
            r#"{"foo":["bar","baz"],"":0,"a/b":1,"c%d":2,"e^f":3,"g|h":4,"i\\j":5,"k\"l":6," ":7,"m~n":8}"#,
        )
        .unwrap();
        for (pointer, expected) in [
            ("/foo/0", "\"bar\""),
            ("/", "0"),
            ("/a~1b", "1"),
            ("/c%d", "2"),
            ("/e^f", "3"),
            ("/g|h", "4"),
            ("/i\\j", "5"),
            ("/k\"l", "6"),
            ("/ ", "7"),
            ("/m~0n", "8"),
        ] {
            let found = Pointer::parse(pointer).unwrap().find(&document).map(Value::to_string);
            assert_eq!(found.as_deref(), Some(expected), "{pointer}");
        }
        assert_eq!(Pointer::parse("").unwrap().find(&document), Some(&document));
        assert_eq!(Pointer::parse("/foo/-").unwrap().find(&document), None);
        assert_eq!(Pointer::parse("/foo/00").unwrap().find(&document), None);
    }

    #[test]
    fn misspelt_pointers_are_refused_at_once() {
        for (text, fault) in [
            ("v", PointerFault::NoSlash),
            ("$.v", PointerFault::NoSlash),
            ("/a~b", PointerFault::Tilde),
            ("/a~", PointerFault::Tilde),
            ("/~2", PointerFault::Tilde),
        ] {
            assert_eq!(Pointer::parse(text), Err(fault), "{text}");
        }
        assert_eq!(Pointer::parse(&"/a".repeat(200)), Err(PointerFault::TooLong));
    }
}
