//! Payload bytes → value, reference and time of one reading. Pure functions: no clock, no state.

use super::pointer::Pointer;
use super::refusal::{Excerpt, Refusal};
use crate::service::settings::time::{TIME_EARLIEST, TIME_LATEST, TimeFault, plausible, read_time};
use crate::watch::time::EventTime;
use serde_json::Value;

/// The longest bare number, bytes, blanks around it not counted.
pub const NUMBER_BYTES_MAX: usize = 64;
/// The largest payload that is looked at, bytes.
pub const PAYLOAD_BYTES_MAX: usize = 64 * 1024;
/// How deep JSON may be nested; `serde_json`'s own limit.
pub const JSON_DEPTH_MAX: usize = 128;

/// How the payload of a watch is read.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum PayloadFormat {
    /// One JSON number, ASCII blanks around it allowed.
    Number,
    /// A JSON document.
    Json {
        /// Where the value is.
        value: Pointer,
        /// Where the reading's time is; `None`: the time of receipt is taken.
        time: Option<Pointer>,
    },
}

/// What one payload says.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Content {
    /// The value, finite.
    pub value: f64,
    /// The reference, finite, where a pointer to it was given.
    pub reference: Option<f64>,
    /// The reading's own time.
    pub time: Option<EventTime>,
}

/// Returns what a payload says.
///
/// # Arguments
/// `format` — from the watch; `reference` — pointer to a reference in the same document, if the watch
/// has one; `payload` — the bytes as they came.
///
/// # Outcomes
/// Words that senders write for "no valid value" (`null`, `NaN`, `Infinity`, …) are
/// [`Refusal::BadQuality`], apart from payloads that make no sense.
pub fn read(
    format: &PayloadFormat,
    reference: Option<&Pointer>,
    payload: &[u8],
) -> Result<Content, Refusal> {
    if payload.len() > PAYLOAD_BYTES_MAX {
        return Err(Refusal::TooLong { bytes: payload.len(), most: PAYLOAD_BYTES_MAX });
    }
    match format {
        PayloadFormat::Number => {
            let value = read_number(payload.trim_ascii())?;
            Ok(Content { value, reference: None, time: None })
        }
        PayloadFormat::Json { value, time } => {
            let document = read_document(payload)?;
            let value = number_at(&document, value)?;
            let reference = reference.map(|p| number_at(&document, p)).transpose()?;
            let time = time.as_ref().map(|p| time_of(at(&document, p)?)).transpose()?;
            Ok(Content { value, reference, time })
        }
    }
}

/// Returns the one JSON number that `bytes` are, blanks around it already taken off.
pub(super) fn read_number(bytes: &[u8]) -> Result<f64, Refusal> {
    if bytes.is_empty() {
        return Err(Refusal::Empty);
    }
    if bytes.len() > NUMBER_BYTES_MAX {
        return Err(Refusal::TooLong { bytes: bytes.len(), most: NUMBER_BYTES_MAX });
    }
    let text = std::str::from_utf8(bytes).map_err(|error| Refusal::NotUtf8 {
        at: error.valid_up_to(),
        excerpt: Excerpt::of_bytes(bytes),
    })?;
    match serde_json::from_str::<Value>(text) {
        Ok(value) => number_of(&value),
        Err(error) if is_out_of_range(&error) => {
            Err(Refusal::OutOfRange { excerpt: Excerpt::of(text) })
        }
        Err(_) if means_no_value(text) => Err(Refusal::BadQuality { excerpt: Excerpt::of(text) }),
        Err(_) => Err(Refusal::NotANumber { excerpt: Excerpt::of(text) }),
    }
}

fn read_document(payload: &[u8]) -> Result<Value, Refusal> {
    if payload.trim_ascii().is_empty() {
        return Err(Refusal::Empty);
    }
    let text = std::str::from_utf8(payload).map_err(|error| Refusal::NotUtf8 {
        at: error.valid_up_to(),
        excerpt: Excerpt::of_bytes(payload),
    })?;
    serde_json::from_str(text).map_err(|error| {
        // The crate has no code for these two; its words are fixed and pinned by tests here.
        if error.to_string().starts_with("recursion limit exceeded") {
            return Refusal::TooDeep { most: JSON_DEPTH_MAX };
        }
        let excerpt = Excerpt::of(text);
        if is_out_of_range(&error) {
            return Refusal::OutOfRange { excerpt };
        }
        // Several JSON writers put NaN and Infinity bare into the document, which JSON does not know.
        match word_at(text, error.line(), error.column()) {
            Some(word) => Refusal::BadQuality { excerpt: Excerpt::of(word) },
            None => Refusal::NotJson { line: error.line(), column: error.column(), excerpt },
        }
    })
}

fn is_out_of_range(error: &serde_json::Error) -> bool {
    error.to_string().starts_with("number out of range")
}

/// The word for "no value" that stands at the place of a syntax error, if one does.
fn word_at(text: &str, line: usize, column: usize) -> Option<&str> {
    let line = text.split('\n').nth(line.checked_sub(1)?)?;
    // The column is that of the letter that could not be understood: the first, or one inside.
    let stop = column.min(line.len());
    let in_word = |b: &u8| b.is_ascii_alphanumeric() || b"+-.#".contains(b);
    let before = line.as_bytes()[..stop].iter().rev().take_while(|b| in_word(b)).count();
    let after = line.as_bytes()[stop..].iter().take_while(|b| in_word(b)).count();
    let word = line.get(stop - before..stop + after)?;
    means_no_value(word).then_some(word)
}

/// Whether a word is one that instruments and programs write for "no valid value".
pub(super) fn means_no_value(word: &str) -> bool {
    if word.len() > 16 {
        return false;
    }
    let word = word.to_ascii_lowercase();
    matches!(
        word.trim_start_matches(['+', '-']),
        "nan"
            | "inf"
            | "infinity"
            | "null"
            | "nil"
            | "none"
            | "na"
            | "n/a"
            | "bad"
            | "1.#qnan"
            | "1.#inf"
            | "1.#ind"
            | "nan(ind)"
            | "-nan(ind)"
    )
}

fn at<'v>(document: &'v Value, pointer: &Pointer) -> Result<&'v Value, Refusal> {
    pointer
        .find(document)
        .ok_or_else(|| Refusal::MissingPointer { pointer: pointer.as_str().to_owned() })
}

fn number_at(document: &Value, pointer: &Pointer) -> Result<f64, Refusal> {
    at(document, pointer).and_then(number_of)
}

fn number_of(value: &Value) -> Result<f64, Refusal> {
    match value {
        Value::Number(number) => match number.as_f64().filter(|x| x.is_finite()) {
            Some(x) => Ok(x),
            None => Err(Refusal::OutOfRange { excerpt: Excerpt::of(&number.to_string()) }),
        },
        Value::Null => Err(Refusal::BadQuality { excerpt: Excerpt::of("null") }),
        Value::String(text) => {
            let excerpt = Excerpt::of(text);
            Err(match text.trim() {
                word if means_no_value(word) => Refusal::BadQuality { excerpt },
                word if word.parse::<f64>().is_ok() => Refusal::NumberInText { excerpt },
                _ => Refusal::NotANumber { excerpt },
            })
        }
        Value::Bool(truth) => Err(Refusal::NotANumber { excerpt: Excerpt::of(&truth.to_string()) }),
        Value::Array(_) => Err(Refusal::NotANumber { excerpt: Excerpt::of("[…]") }),
        Value::Object(_) => Err(Refusal::NotANumber { excerpt: Excerpt::of("{…}") }),
    }
}

/// Returns the time that a JSON value spells, rounded to the microsecond.
///
/// # Arguments
/// `value` — RFC 3339 text with offset, or a number of seconds, milliseconds, microseconds or
/// nanoseconds since 1970-01-01T00:00:00Z.
///
/// # Numerics
/// The unit of a number is the one in which it lies within 1978–2100; the four ranges do not overlap.
/// A double holds seconds of today to about 0.24 µs, so seconds with a fraction are good to the
/// microsecond.
fn time_of(value: &Value) -> Result<EventTime, Refusal> {
    match value {
        Value::String(text) => read_time(text).map_err(|fault| match fault {
            TimeFault::OutsideYears => Refusal::TimeImplausible { excerpt: Excerpt::of(text) },
            fault => Refusal::BadTime { excerpt: Excerpt::of(text), fault },
        }),
        Value::Number(number) => {
            let implausible =
                || Refusal::TimeImplausible { excerpt: Excerpt::of(&number.to_string()) };
            let us = match number.as_i64() {
                Some(whole) => since_epoch(whole),
                None => number.as_f64().and_then(since_epoch_fraction),
            };
            us.and_then(|us| plausible(us).ok()).ok_or_else(implausible)
        }
        other => Err(Refusal::BadTime {
            excerpt: Excerpt::of(&match other {
                Value::Null => "null".to_owned(),
                Value::Bool(truth) => truth.to_string(),
                Value::Array(_) => "[…]".to_owned(),
                _ => "{…}".to_owned(),
            }),
            fault: TimeFault::Unreadable,
        }),
    }
}

/// Microseconds since the epoch, from a whole number in a unit told by its size.
fn since_epoch(number: i64) -> Option<i64> {
    let (low, high) = (TIME_EARLIEST.0, TIME_LATEST.0);
    if (low / 1_000_000..high / 1_000_000).contains(&number) {
        Some(number * 1_000_000)
    } else if (low / 1000..high / 1000).contains(&number) {
        Some(number * 1000)
    } else if (low..high).contains(&number) {
        Some(number)
    } else if (low * 1000..high * 1000).contains(&number) {
        Some((number + 500).div_euclid(1000))
    } else {
        None
    }
}

#[expect(clippy::cast_precision_loss, reason = "the two limits are exact below 2^53")]
#[expect(clippy::cast_possible_truncation, reason = "within the two limits")]
fn since_epoch_fraction(number: f64) -> Option<i64> {
    let (low, high) = (TIME_EARLIEST.0 as f64, TIME_LATEST.0 as f64);
    [1e6, 1e3, 1.0, 1e-3]
        .into_iter()
        .map(|us_in_unit| number * us_in_unit)
        .find(|us| (low..high).contains(us))
        .map(|us| us.round() as i64)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn outcome(result: Result<Content, Refusal>) -> String {
        match result {
            Ok(c) => {
                let mut text = format!("{}", c.value);
                if let Some(reference) = c.reference {
                    text.push_str(&format!(" ref {reference}"));
                }
                if let Some(time) = c.time {
                    text.push_str(&format!(" at {time}"));
                }
                text
            }
            Err(refusal) => format!("{}: {refusal}", refusal.code()),
        }
    }

    fn check_number(payload: impl AsRef<[u8]>, expected: &str) {
        let payload = payload.as_ref();
        let text = outcome(read(&PayloadFormat::Number, None, payload));
        assert_eq!(text, expected, "{}", shown(payload));
    }

    fn check_json(payload: impl AsRef<[u8]>, expected: &str) {
        let payload = payload.as_ref();
        let pointer = |p| Pointer::parse(p).unwrap();
        let format = PayloadFormat::Json { value: pointer("/v"), time: Some(pointer("/t")) };
        assert_eq!(outcome(read(&format, None, payload)), expected, "{}", shown(payload));
    }

    fn check_time(time: &str, expected: &str) {
        check_json(format!("{{\"v\":1,\"t\":{time}}}"), expected);
    }

    fn shown(payload: &[u8]) -> String {
        crate::service::shown::shown_bytes(payload, 200)
    }

    #[test]
    fn a_bare_number_is_read() {
        check_number("4.02", "4.02");
        check_number(" \t-0.5e-3\r\n", "-0.0005");
        check_number("42", "42");
        check_number("18446744073709551616", "18446744073709552000");
    }

    #[test]
    fn a_double_is_read_to_its_last_bit() {
        for x in [5e-324, 0.1 + 0.2, 1.797_693_134_862_315_7e308, -0.0, 2.225_073_858_507_201e-308]
        {
            let read = read(&PayloadFormat::Number, None, format!("{x:e}").as_bytes()).unwrap();
            assert_eq!(read.value.to_bits(), f64::to_bits(x), "{x:e}");
        }
    }

    #[test]
    fn text_that_is_no_number_is_refused_with_an_excerpt() {
        check_number("", "empty: the payload is empty; a number is needed");
        check_number("  ", "empty: the payload is empty; a number is needed");
        let says = "is not a number; one JSON number such as 0.125 is needed";
        for text in ["4,02", "4.02 bar", "+4", ".5", "0x10", "on", "1 2", "4."] {
            check_number(text, &format!("not-a-number: \"{text}\" {says}"));
        }
        check_number("\u{1b}[2J", &format!("not-a-number: \"\\u{{1b}}[2J\" {says}"));
        check_number("{\"v\":1}", &format!("not-a-number: \"{{…}}\" {says}"));
        check_number("true", &format!("not-a-number: \"true\" {says}"));
        check_number("\u{feff}4", &format!("not-a-number: \"\\u{{feff}}4\" {says}"));
        check_number("9".repeat(65), "too-long: 65 bytes; at most 64 are read");
        check_number(b"4\xff", "not-utf8: \"4\\u{fffd}\" is not UTF-8 from byte 1 on");
    }

    #[test]
    fn words_for_no_value_are_bad_quality_not_nonsense() {
        for word in ["NaN", "nan", "-nan", "Infinity", "-inf", "null", "NULL", "N/A", "-1.#IND"] {
            let expected =
                format!("bad-quality: the sender marks the value as not valid: \"{word}\"");
            check_number(word, &expected);
        }
    }

    #[test]
    fn numbers_beyond_a_double_are_refused() {
        check_number("1e400", "out-of-range: \"1e400\" is beyond the range of a double, 1.8e308");
        check_json(
            "{\"v\":-1e400}",
            "out-of-range: \"{\"v\":-1e400}\" is beyond the range of a double, 1.8e308",
        );
    }

    #[test]
    fn a_number_in_quotation_marks_is_refused_with_the_remedy() {
        let says = "is a number inside a text; send it without quotation marks";
        check_number("\"4.02\"", &format!("number-in-text: \"4.02\" {says}"));
        check_json("{\"v\":\"4.02\"}", &format!("number-in-text: \"4.02\" {says}"));
    }

    #[test]
    fn json_is_read_by_pointer() {
        check_json(
            "{\"v\":4.5,\"t\":\"2026-03-01T08:00:00+01:00\"}",
            "4.5 at 2026-03-01T07:00:00Z",
        );
        check_json(" {\"v\":1,\"v\":2,\"t\":1772348400}\n", "2 at 2026-03-01T07:00:00Z");
        check_json("{\"t\":1772348400}", "missing-pointer: the JSON has nothing at /v");
        check_json("{\"v\":1}", "missing-pointer: the JSON has nothing at /t");
        check_json("4.5", "missing-pointer: the JSON has nothing at /v");
    }

    #[test]
    fn the_reference_comes_from_the_same_document() {
        let pointer = |p| Pointer::parse(p).unwrap();
        let format = PayloadFormat::Json { value: pointer("/a/0"), time: None };
        let reference = pointer("/r");
        let read = |text: &str| outcome(read(&format, Some(&reference), text.as_bytes()));
        assert_eq!(read("{\"a\":[4.5],\"r\":4}"), "4.5 ref 4");
        assert_eq!(read("{\"a\":[4.5]}"), "missing-pointer: the JSON has nothing at /r");
    }

    #[test]
    fn json_values_that_are_no_numbers_are_told_apart() {
        let not_valid = "bad-quality: the sender marks the value as not valid:";
        check_json("{\"v\":null}", &format!("{not_valid} \"null\""));
        check_json("{\"v\":\"NaN\"}", &format!("{not_valid} \"NaN\""));
        check_json("{\"v\":NaN}", &format!("{not_valid} \"NaN\""));
        check_json("{\"t\":1,\n\"v\": -Infinity}", &format!("{not_valid} \"-Infinity\""));
        check_json("{\"v\":Infinity,\"t\":1}", &format!("{not_valid} \"Infinity\""));
        let says = "is not a number; one JSON number such as 0.125 is needed";
        check_json("{\"v\":\"open\"}", &format!("not-a-number: \"open\" {says}"));
        check_json("{\"v\":true}", &format!("not-a-number: \"true\" {says}"));
        check_json("{\"v\":[1]}", &format!("not-a-number: \"[…]\" {says}"));
    }

    #[test]
    fn garbage_is_not_json() {
        check_json("", "empty: the payload is empty; a number is needed");
        check_json("{\"v\":1", "not-json: \"{\"v\":1\" is not JSON at line 1, column 6");
        check_json("{\"v\":1}x", "not-json: \"{\"v\":1}x\" is not JSON at line 1, column 8");
        check_json(
            b"{\"v\":\"\xc3\x28\"}",
            "not-utf8: \"{\"v\":\"\\u{fffd}(\"}\" is not UTF-8 from byte 6 on",
        );
        check_json(
            b"\x00\x01\x02",
            "not-json: \"\\u{0}\\u{1}\\u{2}\" is not JSON at line 1, column 1",
        );
    }

    #[test]
    fn deep_and_giant_documents_are_refused() {
        check_json("[".repeat(10_000), "too-deep: the JSON is nested deeper than 128 levels");
        check_json(
            vec![b' '; PAYLOAD_BYTES_MAX + 1],
            "too-long: 65537 bytes; at most 65536 are read",
        );
    }

    #[test]
    fn the_unit_of_an_epoch_number_follows_from_its_size() {
        let expected = "1 at 2026-03-01T07:00:00Z";
        check_time("1772348400", expected);
        check_time("1772348400000", expected);
        check_time("1772348400000000", expected);
        check_time("1772348400000000000", expected);
        check_time("1772348400.0", expected);
        check_time("1.7723484e12", expected);
    }

    // A double of 1276020076.001 s lies just below the millisecond: truncation would lose it.
    #[test]
    fn seconds_with_a_fraction_are_rounded_to_the_microsecond() {
        check_time("1276020076.001", "1 at 2010-06-08T18:01:16.001Z");
        check_time("1276020076001.5", "1 at 2010-06-08T18:01:16.0015Z");
        check_time("1276020076001000501", "1 at 2010-06-08T18:01:16.001001Z");
    }

    #[test]
    fn implausible_times_are_refused() {
        for time in ["0", "12", "252460799", "-5", "4102444800", "1e300", "9223372036854775807"] {
            let format = PayloadFormat::Json {
                value: Pointer::parse("/v").unwrap(),
                time: Some(Pointer::parse("/t").unwrap()),
            };
            let refused = read(&format, None, format!("{{\"v\":1,\"t\":{time}}}").as_bytes());
            assert!(matches!(refused, Err(Refusal::TimeImplausible { .. })), "{time}: {refused:?}");
        }
        check_time(
            "\"1970-01-01T00:00:00Z\"",
            "time-implausible: the time \"1970-01-01T00:00:00Z\" is outside 1978 to 2100 in s, ms, µs and ns",
        );
    }

    #[test]
    fn times_that_cannot_be_read_say_why() {
        let needed = "needed: RFC 3339 with offset, or s, ms, µs or ns since 1970";
        check_time(
            "\"2026-03-01T08:00:00\"",
            &format!(
                "bad-time: the time \"2026-03-01T08:00:00\" is not accepted: it has no offset from UTC; {needed}"
            ),
        );
        check_time(
            "\"1772348400\"",
            &format!(
                "bad-time: the time \"1772348400\" is not accepted: it is not a time; {needed}"
            ),
        );
        check_time(
            "null",
            &format!("bad-time: the time \"null\" is not accepted: it is not a time; {needed}"),
        );
    }
}
