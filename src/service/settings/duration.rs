//! The spelling of lengths of time: `90d`, `6h`, `1d12h`, or ISO 8601 `P90D`, `PT6H`.
//!
//! Whole numbers of units of fixed length only. A month or a year has no fixed length, and whether
//! `m` means minutes or months must not depend on the reader: `m` is minutes, months are refused.

use crate::watch::time::Span;

/// Microseconds in one second.
const SECOND_US: i64 = 1_000_000;

/// Units of the short form, longest first: letter, microseconds.
const UNITS: [(char, i64); 5] = [
    ('w', 7 * 86_400 * SECOND_US),
    ('d', 86_400 * SECOND_US),
    ('h', 3_600 * SECOND_US),
    ('m', 60 * SECOND_US),
    ('s', SECOND_US),
];

/// The longest length of time any setting takes: 100 years of 365.25 days, in µs.
pub const SPAN_MAX_US: i64 = 36_525 * 86_400 * SECOND_US;

/// What is wrong with the spelling of a length of time.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum DurationFault {
    /// Nothing was written.
    #[error("it is empty")]
    Empty,
    /// A number without a unit.
    #[error("it has no unit")]
    NoUnit,
    /// Months or years.
    #[error("a month or a year has no fixed length; write days")]
    MonthOrYear,
    /// A fraction such as `1.5h`.
    #[error("fractions are not read; write the next smaller unit, 90m for 1.5h")]
    Fraction,
    /// Units not in falling order, or one twice.
    #[error("units must fall from weeks to seconds, each at most once")]
    Order,
    /// More than [`SPAN_MAX_US`].
    #[error("it is longer than 100 years")]
    TooLong,
    /// Anything else.
    #[error("it is not a length of time")]
    Unreadable,
}

/// Returns the length of time that `text` spells.
///
/// # Arguments
/// `text` — one or more of `<whole number><w|d|h|m|s>` in falling order, or ISO 8601
/// `P[nW][nD][T[nH][nM][nS]]`; blanks around it are ignored.
pub fn read_span(text: &str) -> Result<Span, DurationFault> {
    let text = text.trim();
    if text.is_empty() {
        return Err(DurationFault::Empty);
    }
    match text.strip_prefix('P') {
        Some(rest) => read_iso(rest),
        None => sum(text, "wdhms"),
    }
}

fn read_iso(rest: &str) -> Result<Span, DurationFault> {
    let (date, clock) = match rest.split_once('T') {
        Some((_, "")) => return Err(DurationFault::Unreadable),
        Some((date, clock)) => (date, clock),
        None => (rest, ""),
    };
    if date.contains(['Y', 'M']) {
        return Err(DurationFault::MonthOrYear);
    }
    if date.is_empty() && clock.is_empty() {
        return Err(DurationFault::Unreadable);
    }
    // The short form's letters are upper case in ISO 8601; lower case there is a slip we do not guess at.
    if rest.contains(|c: char| c.is_ascii_lowercase()) {
        return Err(DurationFault::Unreadable);
    }
    let part = |text: &str, units: &str| match text {
        "" => Ok(Span(0)),
        text => sum(&text.to_ascii_lowercase(), units),
    };
    let total = part(date, "wd")?.0 + part(clock, "hms")?.0;
    if total > SPAN_MAX_US { Err(DurationFault::TooLong) } else { Ok(Span(total)) }
}

/// Adds up `<number><unit>` pairs whose units are among `units`, in that order.
fn sum(text: &str, mut units: &str) -> Result<Span, DurationFault> {
    let mut rest = text;
    let mut total: i64 = 0;
    while !rest.is_empty() {
        let digits = rest.len() - rest.trim_start_matches(|c: char| c.is_ascii_digit()).len();
        let (number, tail) = rest.split_at(digits);
        if tail.starts_with(['.', ',']) {
            return Err(DurationFault::Fraction);
        }
        if number.is_empty() {
            return Err(DurationFault::Unreadable);
        }
        let word_end = tail.find(|c: char| !c.is_alphabetic()).unwrap_or(tail.len());
        let (unit, after) = tail.split_at(word_end);
        let us = unit_us(unit, tail)?;
        let at = units.find(unit).ok_or(DurationFault::Order)?;
        units = &units[at + unit.len()..];
        total = number
            .parse::<i64>()
            .ok()
            .and_then(|n| n.checked_mul(us))
            .and_then(|n| n.checked_add(total))
            .filter(|&n| n <= SPAN_MAX_US)
            .ok_or(DurationFault::TooLong)?;
        rest = after;
    }
    Ok(Span(total))
}

fn unit_us(unit: &str, tail: &str) -> Result<i64, DurationFault> {
    let mut letters = unit.chars();
    if let (Some(letter), None) = (letters.next(), letters.next())
        && let Some((_, us)) = UNITS.iter().find(|(name, _)| *name == letter)
    {
        return Ok(*us);
    }
    let lower = unit.to_lowercase();
    if ["y", "yr", "year", "years", "mo", "mon", "month", "months"].contains(&lower.as_str()) {
        return Err(DurationFault::MonthOrYear);
    }
    Err(if tail.is_empty() { DurationFault::NoUnit } else { DurationFault::Unreadable })
}

/// Returns the shortest spelling that [`read_span`] reads back, e.g. `1d12h`; `0s` for nothing.
///
/// # Arguments
/// `span` — not negative; parts below a second are dropped, as no setting has them.
pub fn show_span(span: Span) -> String {
    let mut rest = span.0.max(0);
    let mut text = String::new();
    // Weeks are read but not written: people compare spans in days.
    for (letter, us) in UNITS.into_iter().skip(1) {
        let n = rest / us;
        rest %= us;
        if n > 0 {
            text.push_str(&format!("{n}{letter}"));
        }
    }
    if text.is_empty() { "0s".to_owned() } else { text }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn check(text: &str, expected: Result<i64, DurationFault>) {
        assert_eq!(read_span(text).map(|s| s.0 / SECOND_US), expected, "{text}");
    }

    #[test]
    fn short_forms_are_read() {
        check("90d", Ok(90 * 86_400));
        check(" 6h ", Ok(6 * 3_600));
        check("15m", Ok(900));
        check("30s", Ok(30));
        check("2w", Ok(14 * 86_400));
        check("1d12h", Ok(129_600));
        check("0s", Ok(0));
    }

    #[test]
    fn iso_forms_are_read() {
        check("P90D", Ok(90 * 86_400));
        check("PT6H", Ok(6 * 3_600));
        check("P1DT12H30M", Ok(131_400));
        check("P2W", Ok(14 * 86_400));
        check("PT15M", Ok(900));
    }

    #[test]
    fn months_and_years_are_refused_for_their_length() {
        for text in ["3mo", "2 y", "1y", "6months", "P1Y", "P3M", "P1Y2M", "P1M1D"] {
            let fault = read_span(&text.replace(' ', ""));
            assert_eq!(fault, Err(DurationFault::MonthOrYear), "{text}");
        }
    }

    #[test]
    fn slips_are_told_apart() {
        check("", Err(DurationFault::Empty));
        check("90", Err(DurationFault::NoUnit));
        check("1.5h", Err(DurationFault::Fraction));
        check("P0.5D", Err(DurationFault::Fraction));
        check("12h1d", Err(DurationFault::Order));
        check("1h1h", Err(DurationFault::Order));
        check("PT90D", Err(DurationFault::Order));
        check("99999d", Err(DurationFault::TooLong));
        check("99999999999999999999d", Err(DurationFault::TooLong));
        for text in ["soon", "-6h", "6 h", "P", "PT", "p90d", "P90d", "90D", "6hh", "6µ", "d"] {
            check(text, Err(DurationFault::Unreadable));
        }
    }

    #[test]
    fn what_is_shown_reads_back() {
        for (text, shown) in [("36h", "1d12h"), ("2w", "14d"), ("90m", "1h30m"), ("0s", "0s")] {
            let span = read_span(text).unwrap();
            assert_eq!(show_span(span), shown);
            assert_eq!(read_span(shown), Ok(span));
        }
    }
}
