//! All wording of alerts, in one place: one plain sentence, what to check first, the cautions.
//!
//! Text is made of the site's own settings (units) and numbers only; names from the wire are added,
//! escaped, where a line is shown.

use crate::drift::family::Family;
use crate::drift::reach::Limit;
use crate::watch::alert::{Ending, Kind};
use crate::watch::time::EventTime;
use serde::{Deserialize, Serialize};

/// The words of one alert.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Words {
    /// One plain sentence: what was found, with numbers, units and dates.
    pub says: String,
    /// What to check first, one to three short items.
    pub check_first: Vec<String>,
}

/// What every alert and finding carries along.
pub const CAUTIONS: [&str; 3] = [
    "Advisory only: not a safety function, and never a substitute for a required calibration.",
    "Before touching the instrument: permit to work and isolation first, and tell the operator.",
    "Local rules and licensed practice prevail over this text.",
];

/// Writes a number with three significant digits and its sign where `signed`.
pub fn number(value: f64, signed: bool) -> String {
    let magnitude = value.abs();
    let text = if magnitude == 0.0 {
        "0".to_owned()
    } else if (1e-4..1e6).contains(&magnitude) {
        let places = digits_after_point(magnitude);
        format!("{magnitude:.places$}")
    } else {
        format!("{magnitude:.2e}")
    };
    match (value < 0.0, signed) {
        (true, _) => format!("-{text}"),
        (false, true) => format!("+{text}"),
        (false, false) => text,
    }
}

#[expect(clippy::cast_possible_truncation, clippy::cast_sign_loss, reason = "between 0 and 6")]
fn digits_after_point(magnitude: f64) -> usize {
    (2.0 - magnitude.log10().floor()).clamp(0.0, 6.0) as usize
}

/// Writes values that share a half width of uncertainty: the half width with two significant digits,
/// the values to the same decimal place (JCGM 100:2008, 7.2.6; from memory).
///
/// # Outcomes
/// The half width, then each value with its sign.
pub fn with_guard<const N: usize>(half: f64, values: [f64; N]) -> (String, [String; N]) {
    let usual = 1e-9 * values.iter().fold(0.0_f64, |most, v| most.max(v.abs()));
    if !(1e-4..1e6).contains(&half) || half < usual {
        return (number(half, false), values.map(|value| number(value, true)));
    }
    let places = digits_after_point(half).saturating_sub(1);
    let half = format!("{half:.places$}");
    (half, values.map(|value| format!("{value:+.places$}")))
}

/// Writes days: whole ones from ten up, one decimal below.
pub fn days(value: f64) -> String {
    if value >= 10.0 { format!("{value:.0} d") } else { format!("{value:.1} d") }
}

/// Writes two numbers of days so that they differ in writing, too.
pub fn unequal_days(a: f64, b: f64) -> (String, String) {
    let plain = (days(a), days(b));
    if plain.0 != plain.1 {
        return plain;
    }
    (1..=6)
        .map(|places| (format!("{a:.places$} d"), format!("{b:.places$} d")))
        .find(|(a, b)| a != b)
        .unwrap_or(plain)
}

/// Writes a time to the minute, as on the technician's line: `2026-06-03 08:00Z`.
pub fn minute(time: EventTime) -> String {
    let text = time.to_string();
    match (text.get(..10), text.get(11..16)) {
        (Some(date), Some(clock)) => format!("{date} {clock}Z"),
        _ => text,
    }
}

/// The residuals jumped by `size` at about `at`.
pub fn step(size: f64, unit: &str, at: EventTime) -> Words {
    Words {
        says: format!(
            "Residuals jumped by {} {unit} at about {}; the curve no longer describes this \
             instrument.",
            number(size, true),
            minute(at)
        ),
        check_first: list(&[
            "Check for an adjustment, a knock or a swapped part.",
            "If it was calibrated, record that.",
        ]),
    }
}

/// The rate of drift changed by `size_per_day` at about `at`.
pub fn bend(size_per_day: f64, unit: &str, at: EventTime, family: Family) -> Words {
    Words {
        says: format!(
            "The drift changed its rate by {} {unit} per day at about {}; the {} curve no longer \
             describes this instrument.",
            number(size_per_day, true),
            minute(at),
            family.name()
        ),
        check_first: list(&[
            "Check what changed at that time: process conditions, load, mounting, supply.",
            "Hold the instrument against a reference sooner than planned.",
        ]),
    }
}

/// Successive residuals are correlated by `found` where `usual` is this channel's norm.
pub fn dependence(found: f64, usual: f64) -> Words {
    Words {
        says: format!(
            "Successive residuals move together more than is usual here (correlation {} from one \
             point to the next, usually {}); something slow acts on this instrument that the curve \
             does not know.",
            number(found, false),
            number(usual, false)
        ),
        check_first: list(&[
            "Compare with temperature, pressure or load over the same days.",
            "Check damping, filters and the path of the signal for a change.",
        ]),
    }
}

/// A statement for `asked` needs `needed_d` past the newest reading; `supported_d` are supported.
pub fn beyond_reach(asked: EventTime, needed_d: f64, supported_d: f64, limit: &Limit) -> Words {
    let advice: &[&str] = match limit {
        Limit::NoScatter => {
            &["Check whether the sender repeats an old value or rounds too coarsely."]
        }
        _ => &[
            "Plan a check against a reference within the supported days.",
            "Or wait: more readings may carry the statement further.",
        ],
    };
    let limit = limit.words();
    let (needed, supported) = unequal_days(needed_d, supported_d);
    Words {
        says: format!(
            "A statement for {} needs {} past the newest reading; the window supports {} ({limit}). \
             Nothing is claimed for that day.",
            minute(asked),
            needed,
            supported
        ),
        check_first: list(advice),
    }
}

/// The forecast for `asked` is outside the tolerance.
pub fn tolerance_ahead(
    forecast: (f64, f64, f64),
    limit: f64,
    unit: &str,
    asked: EventTime,
    within_until: Option<EventTime>,
) -> Words {
    let (value, low, high) = forecast;
    let (_, [value, low, high]) = with_guard((high - low) / 2.0, [value, low, high]);
    let until = within_until.map_or_else(
        || "it cannot be said to stay inside from now on".to_owned(),
        |t| format!("inside with its whole interval only until about {}", minute(t)),
    );
    Words {
        says: format!(
            "By {} the deviation is forecast at {value} {unit} (95 % interval {low} to {high}), \
             outside the tolerance of ±{limit} {unit}; {until}.",
            minute(asked),
        ),
        check_first: list(&["Bring the next calibration forward.", "Have a spare ready."]),
    }
}

/// The deviation is outside the tolerance now.
pub fn out_of_tolerance(value: f64, guard: Option<f64>, limit: f64, unit: &str) -> Words {
    let (value, guard) = match guard {
        Some(guard) => {
            let (guard, [value]) = with_guard(guard, [value]);
            (value, format!("±{guard}"))
        }
        None => (number(value, true), "uncertainty unknown".to_owned()),
    };
    Words {
        says: format!(
            "The deviation is {value} {unit} ({guard}) now, outside the tolerance of ±{limit} \
             {unit}.",
        ),
        check_first: list(&[
            "Confirm with a reference.",
            "If confirmed, calibrate, and review what was measured since the last good check.",
        ]),
    }
}

/// A calibration left the instrument outside the tolerance.
pub fn left_outside(value: f64, limit: f64, unit: &str) -> Words {
    let value = number(value, true);
    Words {
        says: format!(
            "The calibration on record left the deviation at {value} {unit}, outside the tolerance \
             of ±{limit} {unit}."
        ),
        check_first: list(&["Adjust and calibrate again, or record the value as left anew."]),
    }
}

/// No family can be fitted; `why` is the reason in words.
pub fn no_curve(why: &str) -> Words {
    Words {
        says: format!("No drift curve describes this channel: {why}. No statement is made."),
        check_first: list(&["Look at the readings: are they what this channel should send?"]),
    }
}

/// Readings arrive, but none since `newest` could be used; `last` says why the last one could not.
pub fn unusable(newest: Option<EventTime>, allowed_d: f64, last: &str) -> Words {
    let since = newest.map_or_else(|| "at all".to_owned(), |t| format!("since {}", minute(t)));
    Words {
        says: format!(
            "Readings arrive, but none {since} could be used, for longer than the {} allowed; the \
             last one was {last}.",
            days(allowed_d)
        ),
        check_first: list(&[
            "Check the clock of the sender and the times it sends.",
            "Check whether it repeats an old reading.",
        ]),
    }
}

/// Nothing arrived since `newest`.
pub fn silent(newest: EventTime, allowed_d: f64) -> Words {
    Words {
        says: format!(
            "Nothing has arrived since {}, longer than the {} allowed; what this instrument does \
             is unknown.",
            minute(newest),
            days(allowed_d)
        ),
        check_first: list(&[
            "Check supply, cable, gateway and network of the sender.",
            "Check whether the sender still publishes under this topic.",
        ]),
    }
}

/// The sentence of a condition that is gone.
pub fn gone(kind: Kind, ending: Ending) -> &'static str {
    match ending {
        Ending::ByReadings => gone_by_readings(kind),
        Ending::Calibrated => {
            "A calibration is on record and a new cycle begins; this alert belonged to the one before."
        }
        Ending::DayPassed => "The day for which the statement was needed has passed.",
        Ending::WindowAnew => {
            "The window has begun anew, and what this alert rested on is no longer in it."
        }
        Ending::Reconfigured => {
            "The settings have changed what is measured, and the window begins anew; this alert \
             belonged to what was measured before."
        }
        Ending::OutsideNow => "The deviation is outside the tolerance by now; see that alert.",
    }
}

fn gone_by_readings(kind: Kind) -> &'static str {
    match kind {
        Kind::Step | Kind::Bend | Kind::Dependence => {
            "The residuals show no structure any more; the curve describes the instrument again."
        }
        Kind::BeyondReach => "The window now supports the statement that is needed.",
        Kind::ToleranceAhead => "The forecast for the asked day stays inside the tolerance.",
        Kind::OutOfTolerance => "The deviation is inside the tolerance again.",
        Kind::NoCurve => "A curve describes this channel again.",
        Kind::Silent => "Readings that can be used arrive again.",
    }
}

fn list(items: &[&str]) -> Vec<String> {
    items.iter().map(|&item| item.to_owned()).collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::watch::limits::SENTENCE_BYTES_MAX;

    const AT: EventTime = EventTime(1_780_441_200_000_000); // 2026-06-02T23:00:00Z

    #[test]
    fn numbers_carry_three_digits_and_a_sign_on_demand() {
        for (value, signed, text) in [
            (0.31, true, "+0.310"),
            (-12.345, false, "-12.3"),
            (0.0, false, "0"),
            (1234.5, false, "1234"),
            (0.000_012_3, true, "+1.23e-5"),
            (2.5e9, false, "2.50e9"),
        ] {
            assert_eq!(number(value, signed), text);
        }
    }

    #[test]
    fn a_value_is_written_as_far_as_its_uncertainty_reaches() {
        let (half, [value, low]) = with_guard(0.004_82, [0.200_31, -0.195_49]);
        assert_eq!((half.as_str(), value.as_str(), low.as_str()), ("0.0048", "+0.2003", "-0.1955"));
        assert_eq!(with_guard(12.3, [456.7]), ("12".to_owned(), ["+457".to_owned()]));
        assert_eq!(with_guard(0.0, [4.5]), ("0".to_owned(), ["+4.50".to_owned()]));
    }

    #[test]
    fn every_sentence_is_whole_and_bounded() {
        let all = [
            step(0.31, "bar", AT),
            bend(-0.002, "bar", AT, Family::Power),
            dependence(0.82, 0.3),
            beyond_reach(AT, 30.0, 18.4, &Limit::Missed { at_d: 25.0, times: 2.4 }),
            beyond_reach(AT, 30.0, 0.0, &Limit::NoScatter),
            tolerance_ahead((0.3, 0.2, 0.4), 0.25, "bar", AT, Some(AT)),
            out_of_tolerance(0.3, Some(0.02), 0.25, "bar"),
            out_of_tolerance(0.3, None, 0.25, "bar"),
            left_outside(0.3, 0.25, "bar"),
            unusable(None, 3.0, "late, not fitted"),
            no_curve("all ages are 0"),
            silent(AT, 3.0),
        ];
        for words in all {
            assert!(words.says.ends_with('.') && words.says.len() <= SENTENCE_BYTES_MAX);
            assert!(!words.check_first.is_empty() && words.check_first.len() <= 3);
        }
    }

    #[test]
    fn a_step_reads_as_a_technician_expects() {
        assert_eq!(
            step(0.31, "bar", AT).says,
            "Residuals jumped by +0.310 bar at about 2026-06-02 23:00Z; the curve no longer \
             describes this instrument."
        );
    }
}
