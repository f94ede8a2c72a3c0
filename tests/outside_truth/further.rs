//! Further NIST StRD series: certified values of Pontius, what NIST certifies of models that are no
//! family here, and the families that must be declined, each for its reason.

use super::{Series, check, check_text, count, fitted, series};
use asfound::drift::choose::choose;
use asfound::drift::family::{Coefficients, Family};
use asfound::drift::fit::{Fit, FitOutcome, fit};
use asfound::drift::outcome::Undetermined;

/// Σ(y − curve)² for coefficients given from outside.
fn residual_ss(series: &Series, family: Family, theta: &Coefficients) -> f64 {
    series.x.iter().zip(&series.y).map(|(&x, &y)| (y - family.value(theta, x)).powi(2)).sum()
}

/// Holds that a family is declined, and that the reason is told in words; returns it.
fn check_declined(name: &str, family: Family, words: &str) -> Undetermined {
    let series = series(name);
    let outcome = fit(family, &series.x, &series.y, false);
    let told = outcome.why_not().unwrap_or_default();
    assert!(told.contains(words), "{name} {}: {told}, {outcome:?}", family.name());
    match outcome {
        FitOutcome::WeaklyDetermined(what) => what,
        other => panic!("{name} {}: {other:?}", family.name()),
    }
}

// ---- Pontius ----------------------------------------------------------------------------------

#[test]
fn quadratic_through_pontius_has_its_certified_values() {
    // NIST StRD, Pontius, certified values, given to 15 digits.
    let pontius = series("pontius");
    let fit = pontius.fit(Family::Quadratic);
    for (k, key) in ["a", "b1", "b2"].into_iter().enumerate() {
        check_text(key, fit.theta[k], pontius.certified(key), 11.0);
        let key = format!("{key}_se");
        check_text(&key, fit.standard_errors[k], pontius.certified(&key), 11.0);
    }
    check_text("residual_ss", fit.residual_ss, pontius.certified("residual_ss"), 11.0);
    assert_eq!((fit.n, fit.degrees_of_freedom), (40, 37));
}

// ---- Misra1a ----------------------------------------------------------------------------------

#[test]
fn certified_curve_of_misra1a_leaves_its_certified_residuals() {
    // NIST StRD, Misra1a: y = b1 (1 − exp(−b2 x)) is the exponential with c = 0 and tau = 1/b2, which
    // the library does not fit; its curve must leave what NIST says, the free one no more.
    let misra1a = series("misra1a");
    let certified = |key: &str| misra1a.certified(key).parse::<f64>().unwrap();
    let theta = [0.0, certified("b1"), 1.0 / certified("b2"), 0.0];
    let left = residual_ss(&misra1a, Family::Exponential, &theta);
    check_text("residual_ss", left, misra1a.certified("residual_ss"), 9.5);
    assert!(misra1a.fit(Family::Exponential).residual_ss < certified("residual_ss"));
}

// ---- NoInt1 -----------------------------------------------------------------------------------

#[test]
fn certified_line_of_noint1_leaves_its_certified_residuals() {
    // NIST StRD, NoInt1: a line through the origin, which the library does not fit.
    let noint1 = series("noint1");
    let theta = [0.0, noint1.certified("b1").parse().unwrap(), 0.0, 0.0];
    let left = residual_ss(&noint1, Family::Linear, &theta);
    check_text("residual_ss", left, noint1.certified("residual_ss"), 12.0);
}

#[test]
fn noint1_is_an_exact_line_and_told_as_one() {
    // y = 70 + x to the last digit; every family that contains the line finds it.
    let noint1 = series("noint1");
    let exact: [(Family, Coefficients, f64); 4] = [
        (Family::Linear, [70.0, 1.0, 0.0, 0.0], 13.0),
        (Family::OffsetPower, [70.0, 1.0, 1.0, 0.0], 10.0),
        (Family::Quadratic, [70.0, 1.0, 0.0, 0.0], 11.0),
        (Family::Cubic, [70.0, 1.0, 0.0, 0.0], 10.0),
    ];
    for (family, theta, digits) in exact {
        let fit = noint1.fit(family);
        assert!(fit.is_exact(), "{family:?}: {}", fit.residual_sd);
        for (k, name) in family.coefficient_names().iter().enumerate() {
            check(&format!("NoInt1 {} {name}", family.name()), fit.theta[k], theta[k], digits);
        }
        check("standard deviation", fit.residual_sd, 0.0, 12.5);
        check("R squared", fit.r_squared.unwrap(), 1.0, 15.0);
    }
}

#[test]
fn plain_line_is_chosen_for_noint1_before_the_families_that_contain_it() {
    let noint1 = series("noint1");
    let fits: Vec<Fit> = Family::ALL
        .into_iter()
        .filter(|&family| family != Family::Exponential)
        .map(|family| fitted(family, &noint1.x, &noint1.y))
        .collect();
    let choice = choose(&fits, count(noint1.x.len()), None);
    assert_eq!(fits[choice.chosen].family, Family::Linear, "{}", choice.why);
}

// ---- Declined ---------------------------------------------------------------------------------

#[test]
fn exponential_through_an_exact_line_is_declined_as_a_line() {
    // The sum of squares falls to 0 as tau grows: there is no optimum.
    let what = check_declined("noint1", Family::Exponential, "the curve is a line");
    assert!(matches!(what, Undetermined::Line { .. }), "{what:?}");
}

#[test]
fn exponential_through_enso_is_declined_as_a_line() {
    // 80-digit profile: the sum of squares falls to the line's 1949.08 as tau grows.
    let what = check_declined("enso", Family::Exponential, "the curve is a line");
    assert!(matches!(what, Undetermined::Line { .. }), "{what:?}");
}

#[test]
fn offset_power_through_enso_is_declined_for_its_exponent() {
    // The 80-digit optimum has the exponent 68.8 with a standard error of 78.8, far beyond the range.
    let what = check_declined("enso", Family::OffsetPower, "do not determine the exponent");
    assert!(matches!(what, Undetermined::Exponent { exponent } if exponent > 7.9), "{what:?}");
}
