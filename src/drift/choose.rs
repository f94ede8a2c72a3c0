//! Choice among fitted families: AICc on the effective sample size, sticky.

use crate::drift::family::Family;
use crate::drift::fit::Fit;
use crate::drift::serial::count;
use serde::{Deserialize, Serialize};

/// A family is given up for another only when that one is better by more than this (own rule: with
/// 4 the name changes in fewer than 8 of 100 refits and the forecast error is the smallest).
pub const SWITCH_ABOVE: f64 = 4.0;

/// A curve that turns joins the watch only when it is better than every other by more than this: a
/// turn must be about as sure as an alert (chance below 1 in 10,000 a refit), for with it every
/// statement about later ends (own rule).
pub const TURN_ABOVE: f64 = 16.0;

/// A turn counts where the curve rises or falls by so many residual standard deviations on both sides
/// of it: a change of rate alone bends a polynomial, too, without changing its direction (own rule).
const ARM_RESIDUAL_SDS: f64 = 2.0;

/// Below this difference two families fit about as well (Burnham and Anderson 2002, section 2.6; from
/// memory).
const HARDLY_TOLD_BELOW: f64 = 2.0;

/// The choice among some fits.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Choice {
    /// Index of the chosen fit.
    pub chosen: usize,
    /// AICc of each fit above the chosen one's; negative where a fit is better, but not by enough
    /// to switch; None where the effective sample is too small for the correction.
    pub differences: Vec<Option<f64>>,
    /// Akaike weight of each fit; they sum to 1.
    pub weights: Vec<f64>,
    /// Why, in words.
    pub why: String,
}

/// Returns AICc of a fit with `n_effective` independent data, the noise variance counted as a
/// parameter; None when n − k − 1 ≤ 0 or the residuals are all 0.
///
/// AICc = n_e ln(RSS/n) + 2k + 2k(k+1)/(n_e − k − 1), k = p + 1, up to a constant common to all
/// families on the same data.
///
/// # Arguments
/// `fit` — a curve; `n_effective` — independent data it rests on, 1 to n.
///
/// # Source
/// Hurvich and Tsai (1989), Biometrika 76, for n_e = n; n_e instead of n: own rule. From memory.
pub fn aicc(fit: &Fit, n_effective: f64) -> Option<f64> {
    let k = count(fit.family.parameter_count() + 1);
    let room = n_effective - k - 1.0;
    let usable = room > 0.0 && fit.residual_ss > 0.0;
    usable.then(|| {
        n_effective * (fit.residual_ss / count(fit.n)).ln() + 2.0 * k + 2.0 * k * (k + 1.0) / room
    })
}

/// Returns the classical AICc with all constants, as statistics packages print it:
/// n (ln 2π + ln(RSS/n) + 1) + 2k + 2k(k+1)/(n−k−1).
///
/// # Arguments
/// `fit` — by plain least squares, its residuals taken as independent.
///
/// # Outcomes
/// None as for [`aicc`].
pub fn aicc_classical(fit: &Fit) -> Option<f64> {
    let n = count(fit.n);
    aicc(fit, n).map(|value| value + n * ((2.0 * std::f64::consts::PI).ln() + 1.0))
}

/// Chooses among fits to the same data; plainest first breaks ties.
///
/// # Arguments
/// `fits` — at least one, same data; `n_effective` — independent data they are worth;
/// `current` — the family chosen last time, kept unless another is better by more than 4.
///
/// # Outcomes
/// See [`Choice`]; an exact curve is chosen outright, the plainest of several.
pub fn choose(fits: &[Fit], n_effective: f64, current: Option<Family>) -> Choice {
    assert!(!fits.is_empty(), "a choice needs a fit");
    if let Some(choice) = plainest_exact(fits) {
        return choice;
    }
    let values: Vec<Option<f64>> = fits.iter().map(|fit| aicc(fit, n_effective)).collect();
    // Where too few data allow no AICc, nothing speaks for a curve of more coefficients.
    let coefficients = |i: usize| fits[i].family.parameter_count();
    let rank = |a: usize, b: usize| match (values[a], values[b]) {
        (Some(this), Some(that)) => this.total_cmp(&that),
        (Some(_), None) => std::cmp::Ordering::Less,
        (None, Some(_)) => std::cmp::Ordering::Greater,
        (None, None) => coefficients(a)
            .cmp(&coefficients(b))
            .then(fits[a].residual_ss.total_cmp(&fits[b].residual_ss)),
    };
    let best = (0..fits.len()).min_by(|&a, &b| rank(a, b)).expect("there is a fit");
    let kept = current.and_then(|family| fits.iter().position(|fit| fit.family == family));
    let chosen = match kept.and_then(|k| Some((k, values[k]? - values[best]?))) {
        Some((k, behind)) if behind <= SWITCH_ABOVE => k,
        _ => best,
    };
    let differences: Vec<Option<f64>> =
        values.iter().map(|v| Some((*v)? - values[chosen]?)).collect();
    Choice {
        why: explain(fits, chosen, kept == Some(chosen), &differences),
        weights: weights(&values, chosen),
        chosen,
        differences,
    }
}

/// The plainest curve that passes through every reading, if one does: AICc would choose among rounding
/// errors.
fn plainest_exact(fits: &[Fit]) -> Option<Choice> {
    let plainness = |i: usize| Family::ALL.iter().position(|&family| family == fits[i].family);
    let chosen = (0..fits.len()).filter(|&i| fits[i].is_exact()).min_by_key(|&i| plainness(i))?;
    let weights = (0..fits.len()).map(|i| if i == chosen { 1.0 } else { 0.0 }).collect();
    let name = fits[chosen].family.name();
    Some(Choice {
        chosen,
        differences: vec![None; fits.len()],
        weights,
        why: format!("{name}, the plainest curve that passes through every reading"),
    })
}

/// Returns the indices of the fits among which to choose: every monotone family, and a
/// polynomial only where it turns within the readings and is better than each of them by more than
/// `better_by`. All of them where there is no monotone family.
///
/// # Arguments
/// `fits` — to the same data; `n_effective` — independent data they are worth; `(oldest, newest)` —
/// the range of ages, days; `better_by` — in AICc, of the family: [`SWITCH_ABOVE`] for one look.
pub fn eligible(
    fits: &[Fit],
    n_effective: f64,
    (oldest, newest): (f64, f64),
    better_by: impl Fn(Family) -> f64,
) -> Vec<usize> {
    let turning = |fit: &Fit| fit.family.may_turn();
    let best = fits
        .iter()
        .filter(|fit| !turning(fit))
        .filter_map(|fit| aicc(fit, n_effective))
        .min_by(f64::total_cmp);
    if fits.iter().all(turning) {
        return (0..fits.len()).collect();
    }
    let better = |fit: &Fit| {
        let (this, best) = (aicc(fit, n_effective), best);
        this.zip(best).is_some_and(|(this, best)| this < best - better_by(fit.family))
    };
    (0..fits.len())
        .filter(|&i| {
            let fit = &fits[i];
            !turning(fit) || (turns_within(fit, oldest, newest) && better(fit))
        })
        .collect()
}

/// Whether a polynomial changes direction inside the central 80 % of the ages, and visibly: on both
/// sides of the turn it rises or falls by at least [`ARM_RESIDUAL_SDS`].
fn turns_within(fit: &Fit, oldest: f64, newest: f64) -> bool {
    let edge = 0.1 * (newest - oldest);
    let central = (fit.frame.inside(oldest + edge), fit.frame.inside(newest - edge));
    let ends = (fit.frame.inside(oldest), fit.frame.inside(newest));
    let [b0, b1, b2, b3] = fit.inner;
    let value = |u: f64| b0 + u * (b1 + u * (b2 + u * b3));
    let mut places = vec![ends.0];
    places.extend(turning_points(b1, b2, b3).into_iter().filter(|u| ends.0 < *u && *u < ends.1));
    places.push(ends.1);
    let visible =
        |a: f64, b: f64| (value(a) - value(b)).abs() >= ARM_RESIDUAL_SDS * fit.residual_sd;
    places.windows(3).any(|w| {
        (central.0..=central.1).contains(&w[1]) && visible(w[0], w[1]) && visible(w[1], w[2])
    })
}

/// Where b1 + 2 b2 u + 3 b3 u² is 0, rising; empty where it never is.
fn turning_points(b1: f64, b2: f64, b3: f64) -> Vec<f64> {
    let root = (b2 * b2 - 3.0 * b3 * b1).sqrt();
    // Of the two ways to write a root, the one that does not subtract equals.
    let q = -(b2 + if b2 < 0.0 { -root } else { root });
    let mut found: Vec<f64> =
        [q / (3.0 * b3), b1 / q].into_iter().filter(|u| u.is_finite()).collect();
    found.sort_by(f64::total_cmp);
    found.dedup();
    found
}

/// exp(−Δ/2), normalised; all on the chosen one where no AICc can be had.
fn weights(values: &[Option<f64>], chosen: usize) -> Vec<f64> {
    let least = values.iter().flatten().copied().fold(f64::INFINITY, f64::min);
    if !least.is_finite() {
        return (0..values.len()).map(|i| if i == chosen { 1.0 } else { 0.0 }).collect();
    }
    let raw: Vec<f64> =
        values.iter().map(|v| v.map_or(0.0, |v| (-0.5 * (v - least)).exp())).collect();
    let sum: f64 = raw.iter().sum();
    raw.iter().map(|w| w / sum).collect()
}

fn explain(fits: &[Fit], chosen: usize, kept: bool, differences: &[Option<f64>]) -> String {
    let name = fits[chosen].family.name();
    let next = (0..fits.len())
        .filter(|&i| i != chosen)
        .filter_map(|i| Some((differences[i]?, fits[i].family)))
        .min_by(|a, b| a.0.total_cmp(&b.0));
    match next {
        None if fits.len() > 1 => {
            format!(
                "{name}, closest of those with the fewest coefficients: too few independent readings to compare"
            )
        }
        None => format!("{name}, the only family that could be fitted"),
        Some((d, other)) if (0.0..HARDLY_TOLD_BELOW).contains(&d) => {
            format!("{name}, hardly to be told from {} ({d:.1} AICc better)", other.name())
        }
        Some((d, other)) if d >= 0.0 => {
            format!("{name}, {d:.1} AICc better than {}", other.name())
        }
        Some((d, other)) if kept => format!(
            "{name}, kept: {} is {:.1} AICc better, not the {SWITCH_ABOVE} that a change needs",
            other.name(),
            -d
        ),
        Some((_, other)) => format!("{name}, level with {}", other.name()),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::drift::fit::{FitOutcome, fit};

    /// Fits the families to y(x) on 1..=60 and chooses.
    fn check(y: impl Fn(f64) -> f64, current: Option<Family>) -> (Family, String) {
        let x: Vec<f64> = (1..=60).map(f64::from).collect();
        let y: Vec<f64> =
            x.iter().map(|&v| y(v) + 0.05 * ((v * 7.3).sin() + (v * 3.1).cos())).collect();
        let fits: Vec<Fit> = [Family::Linear, Family::Logarithmic, Family::Power]
            .iter()
            .filter_map(|&family| match fit(family, &x, &y, false) {
                FitOutcome::Fitted(fit) => Some(*fit),
                _ => None,
            })
            .collect();
        let choice = choose(&fits, 60.0, current);
        assert!((choice.weights.iter().sum::<f64>() - 1.0).abs() < 1e-12);
        (fits[choice.chosen].family, choice.why)
    }

    #[test]
    fn the_family_that_made_the_data_is_named() {
        assert_eq!(check(|x| 1.0 + x.ln(), None).0, Family::Logarithmic);
        assert_eq!(check(|x| 0.3 * x.powf(0.6), None).0, Family::Power);
        assert_eq!(check(|x| 5.0 - 0.1 * x, None).0, Family::Linear);
    }

    #[test]
    fn a_family_is_kept_until_another_is_clearly_better() {
        let (family, why) = check(|x| 2.0 + 0.001 * x, Some(Family::Linear));
        assert_eq!(family, Family::Linear, "{why}");
        let (family, why) = check(|x| 1.0 + x.ln(), Some(Family::Linear));
        assert_eq!(family, Family::Logarithmic, "{why}");
        assert!(why.contains("AICc better than"), "{why}");
    }

    /// Fits linear and quadratic to y(x) on 1..=60 and says which may be chosen for one look.
    fn candidates(y: impl Fn(f64) -> f64) -> Vec<Family> {
        let x: Vec<f64> = (1..=60).map(f64::from).collect();
        let y: Vec<f64> = x.iter().map(|&v| y(v) + 0.05 * (v * 7.3).sin()).collect();
        let fits: Vec<Fit> = [Family::Linear, Family::Quadratic, Family::Cubic]
            .iter()
            .filter_map(|&family| match fit(family, &x, &y, false) {
                FitOutcome::Fitted(fit) => Some(*fit),
                _ => None,
            })
            .collect();
        let may = eligible(&fits, 60.0, (1.0, 60.0), |_| SWITCH_ABOVE);
        may.into_iter().map(|i| fits[i].family).collect()
    }

    #[test]
    fn a_polynomial_is_eligible_only_where_it_turns_within_the_readings() {
        let all = [Family::Linear, Family::Quadratic, Family::Cubic];
        assert_eq!(candidates(|x| 0.01 * (x - 30.0).powi(2)), all);
        // Curved, but rising all along; turning, but only past the readings' central part.
        assert_eq!(candidates(|x| 0.01 * (x + 30.0).powi(2)), all[..1]);
        assert_eq!(candidates(|x| 0.01 * (x - 4.0).powi(2)), all[..1]);
        // A cubic that rises, falls and rises has the same sign of slope at both ends.
        let wave = candidates(|x| 1e-3 * (x - 15.0) * (x - 30.0) * (x - 45.0));
        assert!(wave.contains(&Family::Cubic), "{wave:?}");
    }
}
