//! What a window says of now and of the day that was asked for, as far as it is supported.

use crate::drift::forecast::{Forecaster, NORMAL_95};
use crate::drift::reach::Reach;
use crate::watch::settings::{Statement, WatchSettings};
use crate::watch::time::{EventTime, Span};
use serde::{Deserialize, Serialize};

/// Steps in which the day is looked for until which the whole interval stays inside.
const STEPS: u32 = 60;

/// A value with the half width of its 95 % interval.
pub type Interval = (f64, f64);

/// What a window says.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Said {
    /// The deviation now (a new reading at the newest age).
    pub now: Option<Interval>,
    /// The asked day and how far past the newest point it is, days; None: nothing is asked, or the
    /// day is past.
    pub asked: Option<(EventTime, f64)>,
    /// The deviation on that day; None: not asked or not supported.
    pub ahead: Option<Interval>,
    /// Until when the whole interval stays inside the tolerance, within the reach; None: no
    /// tolerance, no reach, or outside already.
    pub within_until: Option<EventTime>,
}

impl Said {
    /// Draws the statements from a window's forecaster and reach.
    pub fn of(
        forecaster: &Forecaster,
        reach: &Reach,
        rules: &WatchSettings,
        newest: EventTime,
        newest_age: f64,
    ) -> Said {
        let here = forecaster.at(newest_age);
        let now = Some((here.value, NORMAL_95 * here.sd)).filter(|(v, g)| (v + g).is_finite());
        let asked = asked_day(rules, newest);
        let ahead = asked.and_then(|(_, days)| reach.statement(forecaster, newest_age, days));
        let within_until = rules.tolerance.and_then(|limit| {
            let inside = |days: f64| {
                reach
                    .statement(forecaster, newest_age, days)
                    .is_some_and(|(value, half)| value.abs() + half <= limit)
            };
            last_inside(reach.days_past_newest, inside)
                .map(|days| newest.plus(Span::from_days(days)))
        });
        Said { now, asked, ahead, within_until }
    }
}

/// The day for which a statement is asked and its distance in days; None when it is not ahead.
pub fn asked_day(rules: &WatchSettings, newest: EventTime) -> Option<(EventTime, f64)> {
    let day = match rules.statement? {
        Statement::LookAhead(span) => newest.plus(span),
        Statement::NextVisit(day) => day,
    };
    let days = day.days_since(newest);
    (days > 0.0).then_some((day, days))
}

/// The last of equal steps from 0 to `reach_d` before the first that is not inside.
fn last_inside(reach_d: f64, inside: impl Fn(f64) -> bool) -> Option<f64> {
    let mut last = None;
    for step in 0..=STEPS {
        let days = reach_d * f64::from(step) / f64::from(STEPS);
        if reach_d <= 0.0 || !inside(days) {
            break;
        }
        last = Some(days);
    }
    last
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_search_stops_at_the_first_day_outside() {
        assert_eq!(last_inside(60.0, |d| d <= 20.0), Some(20.0));
        assert_eq!(last_inside(60.0, |_| true), Some(60.0));
        assert_eq!(last_inside(60.0, |_| false), None);
        assert_eq!(last_inside(0.0, |_| true), None);
    }
}
