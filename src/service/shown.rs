//! The one way to show text that somebody else wrote: topics, payloads, names, units.
//!
//! A terminal obeys control characters, and a log line that contains a line break is two log lines.
//! [`Shown`] therefore escapes everything that moves the cursor, hides or reorders text, and caps the
//! length, so that one event stays one line and reads as it was sent.

use std::fmt::{self, Write as _};

/// Characters shown of a topic, payload or name where nothing else is said.
pub const EXCERPT_CHARS_MAX: usize = 80;

/// Shows untrusted text: escaped and cut to at most `.1` characters of output, then `…`.
///
/// An escape is never cut in two. Bytes that are not UTF-8 come in through [`shown_bytes`].
#[derive(Clone, Copy, Debug)]
pub struct Shown<'a>(pub &'a str, pub usize);

impl fmt::Display for Shown<'_> {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let Shown(text, cap) = *self;
        let mut used = 0;
        let mut piece = String::new();
        for c in text.chars() {
            piece.clear();
            match c {
                '\n' => piece.push_str("\\n"),
                '\r' => piece.push_str("\\r"),
                '\t' => piece.push_str("\\t"),
                '\\' => piece.push_str("\\\\"),
                c if needs_escape(c) => write!(piece, "\\u{{{:x}}}", u32::from(c))?,
                c => piece.push(c),
            }
            used += piece.chars().count();
            if used > cap {
                return f.write_char('…');
            }
            f.write_str(&piece)?;
        }
        Ok(())
    }
}

/// Returns untrusted bytes as text that is safe to show; what is not UTF-8 becomes `\u{fffd}`.
///
/// # Arguments
/// `bytes` — anything; `cap` — most characters of the result, without the `…` of a cut.
pub fn shown_bytes(bytes: &[u8], cap: usize) -> String {
    // One character of output needs at most four bytes of input: do not convert a megabyte to show 80.
    let head = &bytes[..bytes.len().min(cap.saturating_mul(4).saturating_add(4))];
    Shown(&String::from_utf8_lossy(head), cap).to_string()
}

/// Whether a character is invisible, moves the cursor, breaks the line or reorders its neighbours.
pub(super) fn needs_escape(c: char) -> bool {
    c.is_control()                                     // C0, DEL, C1
        || matches!(c,
            '\u{00ad}'                                 // soft hyphen
            | '\u{034f}' | '\u{061c}'                  // combining joiner, Arabic letter mark
            | '\u{115f}' | '\u{1160}' | '\u{3164}' | '\u{ffa0}' // fillers that show as nothing
            | '\u{180b}'..='\u{180f}'                  // Mongolian selectors and vowel separator
            | '\u{200b}'..='\u{200f}'                  // zero width, direction marks
            | '\u{2028}' | '\u{2029}'                  // line and paragraph separator
            | '\u{202a}'..='\u{202e}'                  // direction embedding and override
            | '\u{2060}'..='\u{206f}'                  // joiner, invisible operators, isolates
            | '\u{fe00}'..='\u{fe0f}'                  // variation selectors
            | '\u{feff}'                               // byte order mark
            | '\u{fff0}'..='\u{ffff}'                  // interlinear marks, replacement, no characters
            | '\u{e0000}'..='\u{e0fff}') // tags, further variation selectors
}

#[cfg(test)]
mod tests {
    use super::*;

    fn check(text: &str, cap: usize, expected: &str) {
        assert_eq!(Shown(text, cap).to_string(), expected);
    }

    #[test]
    fn plain_and_accented_text_passes_unchanged() {
        check(
            "plant/press/PT-4107 µm °C Ölstand 圧力",
            80,
            "plant/press/PT-4107 µm °C Ölstand 圧力",
        );
    }

    #[test]
    fn terminal_commands_are_escaped() {
        check("\u{1b}[2J\u{7}\u{9b}31m\u{7f}", 80, "\\u{1b}[2J\\u{7}\\u{9b}31m\\u{7f}");
    }

    #[test]
    fn one_text_stays_one_line() {
        check("a\nb\r\tc\u{2028}d\u{2029}e\u{85}", 80, "a\\nb\\r\\tc\\u{2028}d\\u{2029}e\\u{85}");
    }

    #[test]
    fn reordering_and_invisible_characters_are_escaped() {
        check("\u{202e}4.0\u{2066}\u{200b}\u{feff}", 80, "\\u{202e}4.0\\u{2066}\\u{200b}\\u{feff}");
    }

    #[test]
    fn what_is_no_character_is_escaped_for_xml_forbids_it() {
        check("\u{fffe}\u{ffff}", 80, "\\u{fffe}\\u{ffff}");
    }

    #[test]
    fn an_escape_cannot_be_forged() {
        check("\\u{1b}", 80, "\\\\u{1b}");
    }

    #[test]
    fn long_text_is_cut_between_escapes() {
        check("abcdef", 6, "abcdef");
        check("abcdefg", 6, "abcdef…");
        check("abc\u{1b}", 6, "abc…");
        check("abc", 0, "…");
    }

    #[test]
    fn bytes_that_are_not_text_are_marked() {
        assert_eq!(shown_bytes(b"ab\xff\xfe", 80), "ab\\u{fffd}\\u{fffd}");
        assert_eq!(shown_bytes(&vec![b'x'; 1 << 20], 4), "xxxx…");
    }

    #[test]
    fn no_character_of_any_plane_breaks_a_line_or_a_terminal() {
        for c in (0..=0x0010_ffff_u32).filter_map(char::from_u32) {
            let text = Shown(c.encode_utf8(&mut [0; 4]), 80).to_string();
            assert!(!text.is_empty() && !text.chars().any(char::is_control), "{:x}", u32::from(c));
        }
    }
}
