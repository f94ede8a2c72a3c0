//! What one look at one series finds, and its JSON.

use super::table::short;
use crate::drift::choose::{SWITCH_ABOVE, aicc, aicc_classical, choose, eligible};
use crate::drift::family::{Coefficients, Family};
use crate::drift::fit::{Fit, FitOutcome, fit};
use crate::drift::forecast::sandwich;
use crate::drift::interval::{Interval, Intervals};
use crate::drift::residual_tests::{ResidualTests, test_residuals};
use crate::drift::robust::scale::robust_scale;
use crate::drift::serial::{
    CORRECTED_FROM, count, effective_count, is_regular, lag_correlation_of_clipped,
    lag_correlation_short, spacing_of,
};
use serde_json::{Map, Value, json};

/// A reading is far off from so many robust standard deviations on (own rule).
const FAR_OFF_SDS: f64 = 6.0;

/// Level of the intervals.
pub const LEVEL: f64 = 0.95;
/// A test's p-value below this is worth a caution (common practice, no source).
const TELLING: f64 = 0.01;

/// What is said of a polynomial beyond the readings.
const TURNS_ASTRAY: &str =
    "a polynomial is no forecast: beyond the readings it turns away from whatever they do";
/// The caution about predictions beyond the readings.
pub const EXTRAPOLATED: &str =
    "beyond the readings nothing here tells whether the curve goes on like this";

/// The caution about a curve that leaves nothing.
const EXACT: &str = "the curve passes through every reading: its errors are those of rounding";

/// What was found.
#[derive(Clone, Debug)]
pub struct Look {
    /// Number of readings.
    pub n: usize,
    /// Why the first curve is chosen; None without curves.
    pub why: Option<String>,
    /// Curves, the chosen one first, the others by AICc.
    pub curves: Vec<Curve>,
    /// Families that could not be had, and why.
    pub not_fitted: Vec<(Family, String)>,
}

/// One curve.
#[derive(Clone, Debug)]
pub struct Curve {
    /// The fit.
    pub fit: Fit,
    /// AICc with all constants; None where the correction is not defined.
    pub aicc: Option<f64>,
    /// Correlation of neighbouring residuals.
    pub lag1: f64,
    /// Independent readings that the series is worth.
    pub effective_n: f64,
    /// Standard errors that allow for it.
    pub serial_errors: Option<Coefficients>,
    /// What was asked with `--at`.
    pub predictions: Vec<Prediction>,
    /// The classical tests.
    pub tests: ResidualTests,
    /// What to be careful about, one sentence each.
    pub cautions: Vec<String>,
}

/// The curve at one x.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Prediction {
    /// Where.
    pub x: f64,
    /// The value and a new reading's interval; None where the curve is not defined.
    pub interval: Option<Interval>,
    /// Whether x lies outside the readings.
    pub extrapolated: bool,
}

/// Fits families to a series and examines what they leave.
///
/// # Arguments
/// `x` — ages in order; `y` — deviations; `families` — which; `at` — where to predict.
pub fn look(x: &[f64], y: &[f64], families: &[Family], at: &[f64]) -> Look {
    let (mut fits, mut not_fitted) = (Vec::new(), Vec::new());
    for &family in families {
        match fit(family, x, y, false) {
            FitOutcome::Fitted(fit) => fits.push(*fit),
            other => not_fitted.push((family, other.why_not().unwrap_or_default())),
        }
    }
    let spacing = spacing(x);
    let ranking = rank(&fits, x, y, &spacing);
    let curves =
        ranking.order.iter().map(|&i| Curve::examine(&fits[i], x, y, &spacing, at)).collect();
    Look { n: x.len(), why: ranking.why, curves, not_fitted }
}

/// Spacings over their median; by rank where ages are shared.
fn spacing(x: &[f64]) -> Vec<f64> {
    if x.len() >= 2 && x.windows(2).all(|w| w[1] > w[0]) {
        spacing_of(x).1
    } else {
        vec![1.0; x.len()]
    }
}

/// Correlation of a curve's neighbouring residuals.
fn lag1(fit: &Fit, x: &[f64], y: &[f64], spacing: &[f64]) -> f64 {
    // Of the residuals as they are: a plain fit that follows a wild reading leaves them so.
    let (residuals, parameters) = (fit.residuals(x, y), fit.family.parameter_count());
    if x.len() < CORRECTED_FROM {
        return lag_correlation_short(&residuals, spacing, parameters);
    }
    lag_correlation_of_clipped(&residuals, spacing, is_regular(spacing), count(parameters))
}

struct Ranking {
    order: Vec<usize>,
    why: Option<String>,
}

/// The ranking where curves pass through every reading: the plainest of them, for AICc would choose
/// among rounding errors.
fn exact_plainest(fits: &[Fit]) -> Option<Ranking> {
    let mut order: Vec<usize> = (0..fits.len()).collect();
    let plainness = |i: usize| Family::ALL.iter().position(|&family| family == fits[i].family);
    order.sort_by_key(|&i| (!fits[i].is_exact(), plainness(i)));
    let first = order.first().filter(|&&i| fits[i].is_exact())?;
    let name = fits[*first].family.name();
    let why = format!("{name}, the plainest curve that passes through every reading");
    Some(Ranking { order, why: Some(why) })
}

/// The chosen fit first, the others by AICc on the independent readings.
fn rank(fits: &[Fit], x: &[f64], y: &[f64], spacing: &[f64]) -> Ranking {
    if fits.is_empty() {
        return Ranking { order: Vec::new(), why: None };
    }
    if let Some(plainest) = exact_plainest(fits) {
        return plainest;
    }
    let (oldest, newest) = (x[0], x[x.len() - 1]);
    let pick = |n_effective: f64| {
        let candidates = eligible(fits, n_effective, (oldest, newest), |_| SWITCH_ABOVE);
        let among: Vec<Fit> = candidates.iter().map(|&i| fits[i].clone()).collect();
        let choice = choose(&among, n_effective, None);
        (candidates[choice.chosen], choice)
    };
    let all = effective_count(x.len(), 0.0);
    let phi = lag1(&fits[pick(all).0], x, y, spacing);
    let mut n_effective = effective_count(x.len(), phi);
    // Where dependence leaves too few readings to compare every family, all of them have to do.
    let lost = |fit: &Fit| aicc(fit, n_effective).is_none() && aicc(fit, all).is_some();
    let few = fits.iter().any(lost);
    if few {
        n_effective = all;
    }
    let (chosen, mut choice) = pick(n_effective);
    if few && fits.len() > 1 {
        choice.why.push_str("; compared as if the readings were independent, which they are not");
    }
    let behind = |i: usize| Some(aicc(&fits[chosen], n_effective)? - aicc(&fits[i], n_effective)?);
    let better = (0..fits.len()).filter_map(|i| Some((behind(i)?, fits[i].family)));
    if let Some((by, family)) = better.max_by(|a, b| a.0.total_cmp(&b.0))
        && by > SWITCH_ABOVE
    {
        let name = family.name();
        choice.why.push_str(&format!(
            "; {name} is {by:.1} AICc better, but does not turn within the readings and would go \
             astray beyond them"
        ));
    }
    let mut order: Vec<usize> = (0..fits.len()).collect();
    let key = |i: usize| {
        let value = aicc(&fits[i], n_effective);
        (i != chosen, value.is_none(), value.unwrap_or(fits[i].residual_ss))
    };
    order.sort_by(|&a, &b| key(a).partial_cmp(&key(b)).unwrap_or(std::cmp::Ordering::Equal));
    Ranking { order, why: Some(choice.why) }
}

/// Names readings that lie so far off the curve that a plain fit follows them.
fn far_off(fit: &Fit, x: &[f64], y: &[f64]) -> Option<String> {
    let residuals = fit.residuals(x, y);
    let limit = FAR_OFF_SDS * robust_scale(&residuals);
    let farthest =
        (0..x.len()).max_by(|&a, &b| residuals[a].abs().total_cmp(&residuals[b].abs()))?;
    let far = residuals.iter().filter(|r| r.abs() > limit).count();
    let share = far * 10 <= x.len();
    (limit > 0.0 && far > 0 && share).then(|| {
        format!(
            "{far} of the readings lie far off the curve, the farthest at {}: this plain fit follows \
             them",
            short(x[farthest])
        )
    })
}

impl Curve {
    fn examine(fit: &Fit, x: &[f64], y: &[f64], spacing: &[f64], at: &[f64]) -> Curve {
        let exact = fit.is_exact();
        // What an exact curve leaves are rounding errors: nothing follows from how they hang together.
        let lag1 = if exact { 0.0 } else { lag1(fit, x, y, spacing) };
        let serial_errors = sandwich(fit, x, spacing, lag1.clamp(0.0, 0.97))
            .map(|(covariance, _)| fit.standard_errors_of(&covariance));
        let intervals = Intervals::new(fit, x, LEVEL);
        let (oldest, newest) = (x[0], x[x.len() - 1]);
        let predictions = at
            .iter()
            .map(|&x| Prediction {
                x,
                interval: intervals.as_ref().and_then(|intervals| intervals.at(x)),
                extrapolated: !(oldest..=newest).contains(&x),
            })
            .collect();
        let mut curve = Curve {
            fit: fit.clone(),
            aicc: aicc_classical(fit).filter(|_| !exact),
            lag1,
            effective_n: effective_count(x.len(), lag1),
            serial_errors,
            predictions,
            tests: if exact { ResidualTests::default() } else { test_residuals(fit, x, y) },
            cautions: Vec::new(),
        };
        curve.cautions = curve.cautions();
        curve.cautions.extend(far_off(fit, x, y).filter(|_| !exact));
        if exact {
            curve.cautions.push(EXACT.to_owned());
        }
        curve
    }

    fn cautions(&self) -> Vec<String> {
        let mut cautions = Vec::new();
        let family = self.fit.family;
        let vague: Vec<&str> = family
            .coefficient_names()
            .iter()
            .enumerate()
            .filter(|&(k, _)| self.fit.standard_errors[k] > self.fit.theta[k].abs())
            .map(|(_, name)| *name)
            .collect();
        if !vague.is_empty() && !family.is_linear_in_coefficients() {
            let names = vague.join(", ");
            cautions.push(format!("the readings hardly determine {names}"));
        }
        let tests = &self.tests;
        let telling = |p: Option<f64>| p.is_some_and(|p| p < TELLING);
        if telling(tests.durbin_watson.map(|t| t.p_positive)) {
            cautions.push(
                "neighbouring residuals are alike: the plain standard errors and intervals are too \
                 narrow"
                    .to_owned(),
            );
        }
        if telling(tests.reset.map(|t| t.p_value)) || telling(tests.runs.map(|t| t.p_exact)) {
            cautions.push("the residuals follow a shape that this curve does not have".to_owned());
        }
        if telling(tests.breusch_pagan.map(|t| t.p_value)) {
            cautions.push("the scatter changes along the curve".to_owned());
        }
        if self.predictions.iter().any(|p| p.extrapolated) {
            if family.may_turn() {
                cautions.push(TURNS_ASTRAY.to_owned());
            }
            cautions.push(EXTRAPOLATED.to_owned());
        }
        cautions
    }

    fn named(&self, values: &Coefficients) -> Value {
        let names = self.fit.family.coefficient_names();
        names
            .iter()
            .zip(values)
            .map(|(name, value)| ((*name).to_owned(), json!(value)))
            .collect::<Map<_, _>>()
            .into()
    }

    fn json(&self) -> Value {
        let fit = &self.fit;
        json!({
            "family": fit.family.name(),
            "form": fit.family.form(),
            "coefficients": self.named(&fit.theta),
            "standard_errors": self.named(&fit.standard_errors),
            "start": fit.start.map(|start| self.named(&start)),
            "converged": true,
            "iterations": fit.iterations,
            "n": fit.n,
            "degrees_of_freedom": fit.degrees_of_freedom,
            "residual_ss": fit.residual_ss,
            "residual_sd": fit.residual_sd,
            "r_squared": fit.r_squared,
            "aicc": self.aicc,
            "serial": {
                "lag1": self.lag1,
                "effective_n": self.effective_n,
                "standard_errors": self.serial_errors.map(|errors| self.named(&errors)),
            },
            "predictions": self.predictions.iter().map(Prediction::json).collect::<Vec<_>>(),
            "residual_tests": tests_json(&self.tests),
            "cautions": self.cautions,
        })
    }
}

impl Prediction {
    fn json(&self) -> Value {
        json!({
            "x": self.x,
            "y": self.interval.map(|i| i.value),
            "low": self.interval.map(|i| i.low),
            "high": self.interval.map(|i| i.high),
            "level": LEVEL,
            "extrapolated": self.extrapolated,
        })
    }
}

fn tests_json(tests: &ResidualTests) -> Value {
    json!({
        "durbin_watson": tests.durbin_watson.map(|t| json!({
            "statistic": t.statistic, "p_value": t.p_value,
            "p_positive": t.p_positive, "p_negative": t.p_negative, "exact": t.exact,
        })),
        "ljung_box": tests.ljung_box.map(|t| json!({
            "statistic": t.statistic, "lags": t.lags, "p_value": t.p_value,
        })),
        "runs": tests.runs.map(|t| json!({
            "runs": t.runs, "positive": t.positive, "negative": t.negative, "z": t.z,
            "p_value": t.p_value, "p_exact": t.p_exact,
        })),
        "breusch_pagan": tests.breusch_pagan.map(|t| json!({
            "statistic": t.statistic, "degrees_of_freedom": t.degrees_of_freedom,
            "p_value": t.p_value,
        })),
        "reset": tests.reset.map(|t| json!({
            "statistic": t.statistic,
            "degrees_of_freedom": [t.degrees_of_freedom.0, t.degrees_of_freedom.1],
            "p_value": t.p_value,
        })),
    })
}

impl Look {
    /// The look as JSON.
    pub fn json(&self) -> Value {
        let not_fitted: Vec<Value> = self
            .not_fitted
            .iter()
            .map(|(family, why)| json!({"family": family.name(), "why": why}))
            .collect();
        json!({
            "n": self.n,
            "chosen": self.curves.first().map(|curve| curve.fit.family.name()),
            "why": self.why,
            "fits": self.curves.iter().map(Curve::json).collect::<Vec<_>>(),
            "not_fitted": not_fitted,
        })
    }
}
