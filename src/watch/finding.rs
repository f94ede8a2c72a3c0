//! A finding: everything that is known of one channel after a refit, as it is published.
//!
//! Others rely on field names and shapes; numbers that do not exist are null or absent, never NaN.

use crate::watch::alert::Kind;
use crate::watch::time::EventTime;
use serde::{Serialize, Serializer};
use std::collections::BTreeMap;

/// Everything known of one channel at one time.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Finding {
    /// The channel's name.
    pub channel: String,
    /// The newest point that went into it.
    #[serde(serialize_with = "as_text")]
    pub at: EventTime,
    /// The unit of all deviations.
    pub unit: String,
    /// The calibration cycle.
    pub cycle: CycleFound,
    /// What the window holds.
    pub window: WindowFound,
    /// How large the deviation is now; null before there are enough points to say.
    pub now: Option<NowFound>,
    /// The chosen curve, if there is one.
    pub curve: Option<CurveFound>,
    /// Why there is no curve.
    pub no_curve: Option<String>,
    /// One entry for each kind of structure that was looked for.
    pub structure: Vec<StructureFound>,
    /// How far past the newest reading a statement is supported.
    pub reach: ReachFound,
    /// The statement that was asked for, or its refusal; null when none is asked.
    pub forecast: Option<ForecastFound>,
    /// The tolerance and the decision; null when no tolerance is set.
    pub tolerance: Option<ToleranceFound>,
    /// What to keep in mind.
    pub cautions: Vec<String>,
}

/// The calibration cycle in which the window lies.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct CycleFound {
    /// Age zero.
    #[serde(serialize_with = "as_text")]
    pub age_zero: EventTime,
    /// How it is known: `calibration mark`, `setting` or `first reading`.
    pub known_from: &'static str,
}

/// What the window holds.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct WindowFound {
    /// Its oldest point.
    #[serde(serialize_with = "as_text")]
    pub from: EventTime,
    /// Its newest point.
    #[serde(serialize_with = "as_text")]
    pub to: EventTime,
    /// Number of points.
    pub points: usize,
    /// Number of readings in them.
    pub readings: u64,
    /// What became of all readings of this channel so far, by code; zeros left out.
    pub arrived: BTreeMap<&'static str, u64>,
    /// Age of the oldest point, days.
    pub age_from_d: f64,
    /// Age of the newest point, days.
    pub age_to_d: f64,
}

/// How large the deviation is at the newest point.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct NowFound {
    /// In the unit.
    pub deviation: f64,
    /// Lower end of its interval; null when the readings do not show how far they scatter.
    pub low: Option<f64>,
    /// Upper end of its interval; null with the lower one.
    pub high: Option<f64>,
    /// The interval's level.
    pub level: f64,
    /// `curve`, or `newest points` (their median) while no curve can be trusted.
    pub drawn_from: &'static str,
}

/// The chosen curve.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct CurveFound {
    /// Its family's name.
    pub family: &'static str,
    /// Its formula; x is the age in days.
    pub form: &'static str,
    /// Coefficients by name.
    pub coefficients: BTreeMap<&'static str, f64>,
    /// Standard errors, serial dependence allowed for.
    pub standard_errors: BTreeMap<&'static str, f64>,
    /// Standard deviation of the residuals, in the unit.
    pub residual_sd: f64,
    /// 1 − RSS/TSS on the original scale; null when all readings are equal.
    pub r_squared: Option<f64>,
    /// The transform-then-line estimate, where there is one.
    pub start: BTreeMap<&'static str, f64>,
    /// The families not chosen, and by how much AICc prefers the chosen one.
    pub others: Vec<OtherFound>,
    /// Why this family, in words.
    pub why: String,
}

/// A family not chosen.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct OtherFound {
    /// Its name.
    pub family: &'static str,
    /// AICc above the chosen one's (negative: better, but not by enough to switch); null: not fitted.
    pub aicc_difference: Option<f64>,
}

/// What the examination found of one kind.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct StructureFound {
    /// Which kind.
    pub kind: Kind,
    /// `absent`, `watching` (within a tenth of the evidence) or `present`.
    pub verdict: Verdict,
    /// The score −log10 p.
    pub statistic: Option<f64>,
    /// Probability of a score as large if nothing were wrong; never told below 1e-10.
    pub p: Option<f64>,
    /// Size, in the unit; null unless present or watching.
    pub size: Option<f64>,
    /// Date; null unless present or watching.
    #[serde(serialize_with = "as_text_or_null")]
    pub at: Option<EventTime>,
}

/// Verdict on one kind of structure.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Verdict {
    /// Nothing to speak of.
    Absent,
    /// Close to the threshold.
    Watching,
    /// Beyond the threshold, or the standing alert's kind.
    Present,
}

/// How far past the newest reading a statement is supported.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct ReachFound {
    /// Days past the newest point.
    pub days_past_newest: f64,
    /// The same as a date.
    #[serde(serialize_with = "as_text")]
    pub until: EventTime,
    /// What limits it, in words.
    pub why: String,
}

/// The statement that was asked for, or its refusal.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct ForecastFound {
    /// For when.
    #[serde(serialize_with = "as_text")]
    pub at: EventTime,
    /// How far that is past the newest point, days.
    pub needs_days_past_newest: f64,
    /// Whether the window supports it.
    pub supported: bool,
    /// Forecast deviation; only when supported.
    pub deviation: Option<f64>,
    /// Lower end of the interval; only when supported.
    pub low: Option<f64>,
    /// Upper end of the interval; only when supported.
    pub high: Option<f64>,
    /// The interval's level.
    pub level: f64,
    /// Why it is refused; null when supported.
    pub refused: Option<String>,
}

/// Tolerance and decision.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct ToleranceFound {
    /// ± in the unit.
    pub limit: f64,
    /// The decision for now, with the interval as guard band (ILAC-G8:09/2019; from memory).
    pub decision: Decision,
    /// Until when the whole interval stays inside, as far as the window supports a statement.
    #[serde(serialize_with = "as_text_or_null")]
    pub within_until: Option<EventTime>,
}

/// Decision on conformity with the tolerance, the interval being the guard band.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Decision {
    /// The whole interval is inside.
    Pass,
    /// The value is inside, the interval reaches out.
    ConditionalPass,
    /// The value is outside, the interval reaches in.
    ConditionalFail,
    /// The whole interval is outside.
    Fail,
    /// Nothing can be said.
    Undetermined,
}

impl Decision {
    /// Returns the decision for a deviation with a guard band against ± `limit`.
    ///
    /// # Arguments
    /// `value` — deviation; `guard` — half width of its interval, ≥ 0; `limit` — > 0; one unit.
    ///
    /// # Source
    /// ILAC-G8:09/2019, non-binary statement with guard band w = U (from memory).
    pub fn of(value: f64, guard: f64, limit: f64) -> Decision {
        Decision::of_known(value, Some(guard), limit)
    }

    /// The same where the guard band may be unknown: then a value outside is a conditional fail, and
    /// of one inside nothing can be said.
    pub fn of_known(value: f64, guard: Option<f64>, limit: f64) -> Decision {
        let Some(guard) = guard else {
            let outside = value.abs() > limit;
            return if outside { Decision::ConditionalFail } else { Decision::Undetermined };
        };
        if !(value.is_finite() && guard.is_finite()) {
            return Decision::Undetermined;
        }
        let size = value.abs();
        if size + guard <= limit {
            Decision::Pass
        } else if size <= limit {
            Decision::ConditionalPass
        } else if size - guard <= limit {
            Decision::ConditionalFail
        } else {
            Decision::Fail
        }
    }
}

/// Writes an event time as RFC 3339, UTC.
pub fn as_text<S: Serializer>(time: &EventTime, serializer: S) -> Result<S::Ok, S::Error> {
    serializer.collect_str(time)
}

/// Writes an event time as RFC 3339, UTC, or null.
pub fn as_text_or_null<S: Serializer>(
    time: &Option<EventTime>,
    serializer: S,
) -> Result<S::Ok, S::Error> {
    match time {
        Some(time) => serializer.collect_str(time),
        None => serializer.serialize_none(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn decision_uses_the_interval_as_guard_band_on_both_sides() {
        for (value, decision) in [
            (0.5, Decision::Pass),
            (-0.95, Decision::ConditionalPass),
            (1.05, Decision::ConditionalFail),
            (-1.2, Decision::Fail),
            (f64::NAN, Decision::Undetermined),
        ] {
            assert_eq!(Decision::of(value, 0.1, 1.0), decision, "{value}");
        }
    }
}
