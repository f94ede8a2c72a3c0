//! Reach: how far past the newest reading the window's own evidence carries.
//!
//! Nothing is judged on the data that made it. From several origins inside the window the whole
//! forecast is made again from the older part only, and held against the newer part. Where the misses
//! exceed what was claimed, the interval is widened; where they exceed twice the claim, or too few
//! backtests reach, the statement ends.

use crate::drift::family::Family;
use crate::drift::forecast::{Forecaster, NORMAL_95};
use crate::drift::serial::count;
use crate::drift::workspace::Workspace;
use serde::{Deserialize, Serialize};

/// Origins of the backtests, as shares of the window's points.
const ORIGINS: [f64; 7] = [0.40, 0.48, 0.56, 0.64, 0.72, 0.80, 0.88];
/// Upper edges of the horizons, as shares of the window's span; the last is the hard cap.
const HORIZONS: [f64; 8] = [0.05, 0.1, 0.15, 0.2, 0.3, 0.4, 0.5, 0.6];
/// The cap in windows of fewer than [`POINTS_FOR_FULL_CAP`] points, validated only from there on.
const CAP_OF_SHORT_WINDOWS: f64 = 0.2;
/// Points from which the full cap applies.
pub const POINTS_FOR_FULL_CAP: usize = 120;
/// Fewest points for any statement about the future.
pub const POINTS_FOR_REACH: usize = 40;
/// Fewest points in the older part of a backtest.
const POINTS_TO_TRAIN: usize = 20;
/// Backtests that must reach a horizon.
const BACKTESTS_MIN: usize = 2;
/// The interval may be widened up to this factor; beyond it the statement ends.
const WIDENING_MAX: f64 = 2.0;
/// The largest miss of a handful of backtests is divided by this before it counts (own rule).
const ALLOWANCE: f64 = 1.15;

/// What ends the reach.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub enum Limit {
    /// Too few points for any statement.
    TooFewPoints {
        /// Points there are.
        found: usize,
        /// Points needed.
        needed: usize,
    },
    /// No family can be fitted.
    NoCurve,
    /// The data change direction inside the window: the curve that turns with them is not carried on.
    Turns,
    /// The readings do not scatter, so nothing shows how far they can be trusted.
    NoScatter,
    /// Nobody asks for statements here.
    NotAsked,
    /// Too few backtests reach that far.
    TooFewBacktests {
        /// How far, days.
        at_d: f64,
    },
    /// Backtests missed by more than twice the claim.
    Missed {
        /// How far ahead, days.
        at_d: f64,
        /// Misses over the claimed width.
        times: f64,
    },
    /// Never further than the window's own span allows.
    Cap {
        /// Share of the span.
        share: f64,
        /// The span, days.
        span_d: f64,
    },
}

impl Limit {
    /// The limit in plain words.
    pub fn words(&self) -> String {
        match *self {
            Limit::TooFewPoints { found, needed } => {
                format!("{found} usable points, {needed} are needed")
            }
            Limit::NoCurve => "no curve can be fitted".to_owned(),
            Limit::Turns => {
                "the drift changes direction inside the window, and a curve that turns is never \
                 carried past its data"
                    .to_owned()
            }
            Limit::NoScatter => {
                "the readings do not scatter at all, so nothing shows how far they can be trusted"
                    .to_owned()
            }
            Limit::NotAsked => "no statement is asked for".to_owned(),
            Limit::TooFewBacktests { at_d } => {
                format!("fewer than {BACKTESTS_MIN} backtests reach {at_d:.1} d")
            }
            Limit::Missed { at_d, times } if times > 1000.0 => {
                format!("backtests at {at_d:.1} d missed by more than 1000 times the claimed width")
            }
            Limit::Missed { at_d, times } => {
                format!("backtests at {at_d:.1} d missed by {times:.1} times the claimed width")
            }
            Limit::Cap { share, span_d } => {
                format!("never further than {share} of the {span_d:.1} d that the window spans")
            }
        }
    }
}

/// How far a statement is supported.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Reach {
    /// Days past the newest point.
    pub days_past_newest: f64,
    /// What ends it there.
    pub limit: Limit,
    /// (upper edge in days past the newest point, factor that widens the interval), supported ones.
    pub widening: Vec<(f64, f64)>,
}

impl Reach {
    /// Returns no reach, for that reason.
    ///
    /// # Arguments
    /// `limit` — why.
    pub fn none(limit: Limit) -> Reach {
        Reach { days_past_newest: 0.0, limit, widening: Vec::new() }
    }

    /// Returns the factor for a statement so many days ahead; None beyond the reach.
    ///
    /// # Arguments
    /// `days_ahead` — past the newest age; below 0 counts as 0.
    pub fn widening_at(&self, days_ahead: f64) -> Option<f64> {
        if days_ahead <= 0.0 {
            return Some(self.widening.first().map_or(1.0, |&(_, factor)| factor));
        }
        self.widening.iter().find(|&&(edge, _)| days_ahead <= edge + 1e-9).map(|&(_, f)| f)
    }

    /// Returns the statement so many days past the newest age: value and half width of its 95 %
    /// interval, in the unit. None beyond the reach.
    ///
    /// # Arguments
    /// `forecaster` — of the same window; `newest_age` — of its readings, days; `days_ahead` — past
    /// that, days.
    pub fn statement(
        &self,
        forecaster: &Forecaster,
        newest_age: f64,
        days_ahead: f64,
    ) -> Option<(f64, f64)> {
        let factor = self.widening_at(days_ahead)?;
        let expected = forecaster.at(newest_age + days_ahead);
        let half_width = NORMAL_95 * factor * expected.sd;
        (expected.value.is_finite() && half_width.is_finite())
            .then_some((expected.value, half_width))
    }
}

/// Returns the largest share of its span that a window of `n` points may be carried past its newest.
///
/// # Arguments
/// `n` — points in the window.
pub fn cap(n: usize) -> f64 {
    if n < POINTS_FOR_FULL_CAP { CAP_OF_SHORT_WINDOWS } else { HORIZONS[HORIZONS.len() - 1] }
}

/// Assesses how far a window supports statements.
///
/// # Arguments
/// `x` — ages, days, strictly increasing; `y` — deviations, no break in them; `families` — those that
/// may make a forecast; `phi` — the channel's usual correlation of neighbours.
///
/// # Numerics
/// Seven backtests, each a full forecast; cost about 7 × families × fits of the older part.
///
/// # Source
/// Rolling-origin evaluation: Tashman (2000), International Journal of Forecasting 16, from memory.
/// Widening by the largest miss: own rule, measured by simulation; distribution-free coverage does
/// not hold under dependence.
pub fn assess(x: &[f64], y: &[f64], families: &[Family], phi: f64) -> Reach {
    assess_in(x, y, families, phi, &mut Workspace::default())
}

/// Assesses how far a window supports statements, in a workspace.
///
/// # Arguments
/// As for [`assess`]; `workspace` — room to work in: any, it does not change the result.
pub fn assess_in(
    x: &[f64],
    y: &[f64],
    families: &[Family],
    phi: f64,
    workspace: &mut Workspace,
) -> Reach {
    let n = x.len();
    if n < POINTS_FOR_REACH {
        return Reach::none(Limit::TooFewPoints { found: n, needed: POINTS_FOR_REACH });
    }
    let span = x[n - 1] - x[0];
    if x.iter().all(|&age| age > 0.0) {
        // All parts of the window are then among the ages whose logarithms are known.
        workspace.logarithms(x);
    }
    let mut worst: [(usize, f64); HORIZONS.len()] = [(0, 0.0); HORIZONS.len()];
    for origin in ORIGINS {
        let m = part_of(origin, n);
        if m < POINTS_TO_TRAIN {
            continue;
        }
        let Some(forecaster) = Forecaster::new_in(&x[..m], &y[..m], families, phi, workspace)
        else {
            return Reach::none(Limit::NoCurve);
        };
        for (k, miss) in misses(&forecaster, x, y, m, span).into_iter().enumerate() {
            if let Some(miss) = miss {
                worst[k].0 += 1;
                worst[k].1 = worst[k].1.max(miss);
            }
        }
    }
    let cap = cap(n);
    let mut widening = Vec::new();
    let mut factor: f64 = 1.0;
    let mut limit = Limit::Cap { share: cap, span_d: span };
    for (k, (backtests, miss)) in worst.into_iter().enumerate() {
        let at_d = HORIZONS[k] * span;
        if HORIZONS[k] > cap {
            break;
        }
        if backtests < BACKTESTS_MIN {
            limit = Limit::TooFewBacktests { at_d };
            break;
        }
        factor = factor.max(miss / ALLOWANCE);
        if factor > WIDENING_MAX {
            limit = Limit::Missed { at_d, times: miss };
            break;
        }
        widening.push((at_d, factor));
    }
    Reach { days_past_newest: widening.last().map_or(0.0, |&(edge, _)| edge), limit, widening }
}

/// Root mean square of (reading − forecast)/sd in each horizon; None where too few points fall in it.
fn misses(
    forecaster: &Forecaster,
    x: &[f64],
    y: &[f64],
    m: usize,
    span: f64,
) -> [Option<f64>; HORIZONS.len()] {
    let mut sums = [(0.0, 0.0); HORIZONS.len()];
    for j in m..x.len() {
        let ahead = (x[j] - x[m - 1]) / span;
        let Some(k) = HORIZONS.iter().position(|edge| ahead <= edge + 1e-9) else { break };
        let expected = forecaster.at(x[j]);
        sums[k].0 += 1.0;
        sums[k].1 += ((y[j] - expected.value) / expected.sd.max(f64::MIN_POSITIVE)).powi(2);
    }
    let mut result = [None; HORIZONS.len()];
    for (k, (points, sum)) in sums.into_iter().enumerate() {
        let below = if k == 0 { 0.0 } else { HORIZONS[k - 1] };
        let half_full = 0.5 * (HORIZONS[k] - below) * count(x.len());
        if points >= half_full.max(1.0) {
            result[k] = Some((sum / points).sqrt());
        }
    }
    result
}

#[expect(clippy::cast_possible_truncation, clippy::cast_sign_loss, reason = "a share of n, 0..n")]
fn part_of(share: f64, n: usize) -> usize {
    (share * count(n)) as usize
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::drift::structure::simulate::noise;

    const FAMILIES: [Family; 3] = [Family::Logarithmic, Family::Power, Family::Linear];

    fn check(seed: u64, n: u32, curve: impl Fn(f64) -> f64) -> Reach {
        let x: Vec<f64> = (1..=n).map(|i| 5.0 + f64::from(i) * 0.5).collect();
        let y: Vec<f64> =
            noise(seed, n as usize, 0.3).iter().zip(&x).map(|(e, &v)| curve(v) + e).collect();
        assess(&x, &y, &FAMILIES, 0.3)
    }

    #[test]
    fn honest_drift_is_supported_for_a_good_part_of_the_span() {
        let spans: f64 = (0..20).map(|s| check(s, 200, |x| 6.0 * x.ln()).days_past_newest).sum();
        assert!(spans / 20.0 > 0.3 * 100.0, "mean reach {}", spans / 20.0);
    }

    #[test]
    fn a_drift_that_turns_is_not_carried_far() {
        let reach = check(3, 200, |x| 20.0 * (x / 18.0).sin());
        assert!(reach.days_past_newest < 20.0, "{reach:?}");
        assert!(matches!(reach.limit, Limit::Missed { .. }), "{}", reach.limit.words());
    }

    #[test]
    fn short_windows_have_the_tighter_cap() {
        let reach = check(1, 100, |x| 0.2 * x);
        assert!(reach.days_past_newest <= 0.2 * 49.5 + 1e-9, "{reach:?}");
    }

    #[test]
    fn beyond_the_reach_there_is_no_statement() {
        let reach = check(1, 200, |x| 0.2 * x);
        assert!(reach.widening_at(reach.days_past_newest).is_some());
        assert!(reach.widening_at(reach.days_past_newest + 0.1).is_none());
        let few = check(1, 30, |x| x);
        assert_eq!(few.limit.words(), "30 usable points, 40 are needed");
        assert!(few.widening_at(1.0).is_none());
    }
}
