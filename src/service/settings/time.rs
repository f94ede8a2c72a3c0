//! The spelling of points in time: RFC 3339 with an offset. A time without one is refused.
//!
//! A local time without offset means a different moment in every zone and two moments in one autumn
//! night; guessing shifts ages by hours without a trace.

use crate::watch::time::EventTime;

/// Earliest time taken for real: 1978-01-01T00:00:00Z. Clocks that lost their battery start at 1970.
pub const TIME_EARLIEST: EventTime = EventTime(252_460_800_000_000);

/// Latest time taken for real: 2100-01-01T00:00:00Z.
pub const TIME_LATEST: EventTime = EventTime(4_102_444_800_000_000);

/// The longest text that is looked at as a time, bytes.
pub const TIME_BYTES_MAX: usize = 64;

/// What is wrong with a point in time.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
pub enum TimeFault {
    /// A readable date and clock without `Z` or `+hh:mm`.
    #[error("it has no offset from UTC")]
    NoOffset,
    /// Before [`TIME_EARLIEST`] or not before [`TIME_LATEST`].
    #[error("it is outside 1978 to 2100")]
    OutsideYears,
    /// Anything else.
    #[error("it is not a time")]
    Unreadable,
}

/// Returns the time that `text` spells, rounded to the microsecond.
///
/// # Arguments
/// `text` — RFC 3339 with `Z` or an offset, such as `2026-03-01T08:00:00+01:00`; a zone in brackets
/// after it is read and must agree with the offset.
pub fn read_time(text: &str) -> Result<EventTime, TimeFault> {
    let text = text.trim_matches([' ', '\t']);
    if text.len() > TIME_BYTES_MAX {
        return Err(TimeFault::Unreadable);
    }
    match text.parse::<jiff::Timestamp>() {
        Ok(stamp) => {
            // Round, never truncate: .000999999 s written by a binary clock is .001 s.
            let us = (stamp.as_nanosecond() + 500).div_euclid(1000);
            i64::try_from(us).map_err(|_| TimeFault::OutsideYears).and_then(plausible)
        }
        Err(_) if text.parse::<jiff::civil::DateTime>().is_ok() => Err(TimeFault::NoOffset),
        Err(_) => Err(TimeFault::Unreadable),
    }
}

/// Returns the time if a working clock could have written it.
pub fn plausible(us: i64) -> Result<EventTime, TimeFault> {
    let time = EventTime(us);
    if (TIME_EARLIEST..TIME_LATEST).contains(&time) {
        Ok(time)
    } else {
        Err(TimeFault::OutsideYears)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn check(text: &str, expected: Result<i64, TimeFault>) {
        assert_eq!(read_time(text).map(|t| t.0), expected, "{text}");
    }

    // RFC 3339, section 5.8: the examples, with their moments worked out from the calendar.
    #[test]
    fn examples_of_the_standard_are_read() {
        check("1985-04-12T23:20:50.52Z", Ok(482_196_050_520_000));
        check("1996-12-19T16:39:57-08:00", Ok(851_042_397_000_000));
        check("1996-12-20T00:39:57Z", Ok(851_042_397_000_000));
        check("1990-12-31T23:59:60Z", Ok(662_687_999_000_000));
        check("1985-04-12t23:20:50.52z", Ok(482_196_050_520_000));
        check("1985-04-12 23:20:50.52Z", Ok(482_196_050_520_000));
    }

    #[test]
    fn parts_of_a_microsecond_are_rounded() {
        check("2010-06-08T16:40:76Z", Err(TimeFault::Unreadable));
        check("2010-06-08T16:41:16.000999999Z", Ok(1_276_015_276_001_000));
    }

    #[test]
    fn local_time_is_refused_for_its_missing_offset() {
        check("2026-03-01T08:00:00", Err(TimeFault::NoOffset));
        check("2026-03-01 08:00", Err(TimeFault::NoOffset));
        check("2026-03-01", Err(TimeFault::NoOffset));
    }

    #[test]
    fn times_no_working_clock_shows_are_refused() {
        check("1970-01-01T00:00:10Z", Err(TimeFault::OutsideYears));
        check("1977-12-31T23:59:59Z", Err(TimeFault::OutsideYears));
        check("1978-01-01T00:00:00Z", Ok(TIME_EARLIEST.0));
        check("2100-01-01T00:00:00Z", Err(TimeFault::OutsideYears));
    }

    #[test]
    fn other_text_is_not_a_time() {
        for text in
            ["", "yesterday", "08:00", "1717400000", "2026-13-01T00:00:00Z", "01/03/2026 08:00"]
        {
            check(text, Err(TimeFault::Unreadable));
        }
        check(&"2026-03-01T08:00:00Z".repeat(1000), Err(TimeFault::Unreadable));
    }
}
